package page

import (
	"bytes"
	"crypto/sha256"
	_ "embed" // for the template and its style
	"encoding/base64"
	"fmt"
	"html/template"
	"net/http"
	"strings"
	"time"

	"sockline/alerting"
)

//go:embed front.html
var frontHTML string

//go:embed front.css
var frontCSS string

// contentSecurityPolicy allows nothing but our own style sheet, by its hash:
// whatever found its way into the page could neither run nor call out.
func contentSecurityPolicy() string {
	sum := sha256.Sum256([]byte(frontCSS))
	return "default-src 'none'; style-src 'sha256-" + base64.StdEncoding.EncodeToString(sum[:]) +
		"'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
}

// parseFront makes the template of the page.
func parseFront() (*template.Template, error) {
	t, err := template.New("front").Parse(frontHTML)
	if err != nil {
		return nil, fmt.Errorf("read the template of the page: %w", err)
	}
	return t, nil
}

// refresh is how often the page loads itself anew, in seconds.
const refresh = 2

// front is what the template is filled with: words only, ready to show.
type front struct {
	Style     template.CSS
	Refresh   int
	Lasts     int // whole seconds after which the browser blanks the page by itself
	Airfield  string
	Exercise  bool
	Known     bool // false: everything is no information
	Why       string
	At        string
	Condition string // the word
	Mark      string // the shape beside it
	Meaning   string
	Remarks   []string
	Alerts    []frontAlert
	Paths     []frontPath
	Ends      []End
	Stations  []Station
	Notice    string
}

type frontAlert struct {
	Class    string
	Word     string // fall or rise
	Level    int
	Name     string
	Observed bool
	Sentence string
}

type frontPath struct {
	Class      string
	Word       string
	Name       string
	Sentence   string
	Unobserved []string
}

// front renders the page.
func (p *Page) front(w http.ResponseWriter, _ *http.Request) {
	var out bytes.Buffer
	if err := p.template.Execute(&out, p.fill()); err != nil {
		p.internal(w, "render the page", err)
		return
	}
	w.Header().Set("Content-Type", "text/html; charset=utf-8")
	_, _ = w.Write(out.Bytes()) // an error is a client that has gone
}

// fill puts the view into words. A view that is too old keeps the names of
// what there is and loses every value.
func (p *Page) fill() front {
	last := p.opts.View()
	v, why := p.current()
	f := front{
		Style:    template.CSS(frontCSS),
		Refresh:  refresh,
		Lasts:    int(MaxAge / time.Second),
		Airfield: p.opts.Airfield,
		Exercise: p.exercise(last),
		Known:    v != nil,
		Why:      why,
		Notice:   alerting.Notice,
	}
	if last != nil && last.Airfield != "" {
		f.Airfield = last.Airfield
	}
	if v == nil {
		f.Condition, f.Mark = "No information", "none"
		f.Meaning = "Nothing here says what the wind does. Read every path as not observed."
		f.blank(last)
		return f
	}
	// The browser counts on from here: a page that is no longer refreshed
	// blanks itself when this view gets too old.
	f.Lasts = int((MaxAge - max(0, p.opts.Now().Sub(v.Made))) / time.Second)
	f.At = v.At.Time().Format(utcSeconds)
	f.Condition, f.Mark, f.Meaning = conditionWords(v.Condition)
	f.Remarks = v.Remarks
	f.Ends, f.Stations = v.Ends, v.Stations
	for _, a := range v.Alerts {
		f.Alerts = append(f.Alerts, alertWords(a))
	}
	for _, path := range v.Paths {
		f.Paths = append(f.Paths, pathWords(path))
	}
	return f
}

// noInformation stands where a value would stand.
const noInformation = "No information."

// blank fills in the names of the last view without any of its values.
func (f *front) blank(last *View) {
	if last == nil {
		return
	}
	if len(last.Alerts) > 0 {
		// Nothing is said when none was open: it would sound like calm.
		f.Remarks = append(f.Remarks, "An alert was open at the last step worked out.")
	}
	for _, e := range last.Ends {
		f.Ends = append(f.Ends, End{Runway: e.Runway, Sentence: noInformation})
	}
	for _, path := range last.Paths {
		f.Paths = append(f.Paths, frontPath{Class: "unknown", Word: "No information", Name: path.Name})
	}
	for _, s := range last.Stations {
		f.Stations = append(f.Stations, Station{ID: s.ID, State: "no information"})
	}
}

// conditionWords is the word, the shape and the meaning of a condition.
func conditionWords(c alerting.Condition) (word, mark, meaning string) {
	switch c {
	case alerting.Observing:
		return "Observing", "full", "Every path is observed where it has to be."
	case alerting.PartlyObserving:
		return "Partly observing", "half", "Some paths are not observed, or not where it matters."
	case alerting.Blind:
		return "Blind", "empty", "No path is observed."
	}
	return "No contact", "none", "Nothing is heard. Read every path as not observed."
}

// alertWords is what an alert looks like: fall and rise are told apart by word
// and colour, the level by word and by the weight of the border.
func alertWords(a Alert) frontAlert {
	f := frontAlert{Class: "fall", Word: "Headwind falls", Level: int(a.Level),
		Name:     strings.ReplaceAll(a.Level.String(), "-", " "),
		Observed: a.Observed, Sentence: a.Sentence}
	if a.Kind == alerting.HeadwindGain {
		f.Class, f.Word = "rise", "Headwind rises"
	}
	switch a.Level {
	case alerting.Large:
		f.Class += " level2"
	case alerting.BeyondMargin:
		f.Class += " level3"
	default:
		f.Class += " level1"
	}
	if !a.Observed {
		f.Class += " unseen"
	}
	return f
}

// pathWords is what a path looks like. There is no state that means good.
func pathWords(p Path) frontPath {
	f := frontPath{Name: p.Name, Sentence: p.Sentence, Unobserved: p.Unobserved}
	switch p.State {
	case alerting.Raised:
		f.Class, f.Word = "raised", "Alert open"
	case alerting.BelowLimits:
		f.Class, f.Word = "below", "Below limits"
	default:
		f.Class, f.Word = "unknown", "Not observed"
	}
	return f
}
