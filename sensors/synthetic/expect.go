package synthetic

import "math"

// ExpectationKind is what an expectation speaks of.
type ExpectationKind string

// The kinds of expectation. All times are event time; a span of no given
// bounds is the whole scene.
const (
	// ExpectAlert: an alert of AlertKind is open on the path, at Level or more,
	// at some moment of the span (one of its first second is "by").
	ExpectAlert ExpectationKind = "alert"
	// ExpectNoAlert: no such alert is open at any moment of the span. An empty
	// field fits everything.
	ExpectNoAlert ExpectationKind = "no-alert"
	// ExpectClosed: an alert that was open on the path closes in the span.
	ExpectClosed ExpectationKind = "closed"
	// ExpectUnseen: an alert is open on the path, as not observed now, at each
	// moment of the span.
	ExpectUnseen ExpectationKind = "unseen"
	// ExpectState: the path's state is State at each moment of the span.
	ExpectState ExpectationKind = "state"
	// ExpectUnobserved: the ground from FromM to ToM is not observed at each
	// moment of the span.
	ExpectUnobserved ExpectationKind = "unobserved-ground"
	// ExpectMissing: Mast is missing from the path at each moment of the span.
	ExpectMissing ExpectationKind = "missing"
)

// Expectation is one line of what a scene should lead to. It is evaluated by
// the tests of those who know paths and alerts.
type Expectation struct {
	Line       int // in the scene file
	Kind       ExpectationKind
	AlertKind  string  // "headwind-loss" and so on
	Operation  string  // "landing", "take-off"
	Runway     string  // designator
	Level      string  // "noticeable", "large", "beyond-margin": that or more
	State      string  // "below-limits", "raised", "not-observed"
	Because    string  // of ExpectClosed
	Mast       string  // of ExpectMissing
	FromM, ToM float64 // of ExpectUnobserved: metres before the threshold, FromM >= ToM
	Span       Span    // s from the start of the scene
}

// wholeScene is the span of an expectation without times.
func wholeScene() Span { return Span{From: 0, To: math.Inf(1)} }
