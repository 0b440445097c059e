package page

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"

	"sockline/sensors"
)

// People is what somebody may do about what is shown, and the list of what was
// done. Its methods are called from many goroutines, by people who may do what
// they ask for; who is their name. They may wait for the disk, but not for
// long.
//
// Their errors are a Refusal, those of package attention, ErrNoEvent or
// ErrNotKept; any other is a fault of the program.
type People interface {
	Acknowledge(ctx context.Context, who, occurrence string) (Done, error)
	// AcknowledgeEvent acknowledges the occurrence of an event.
	AcknowledgeEvent(ctx context.Context, who, event string) (Done, error)
	// Shelve with an until of 0 is for the usual time.
	Shelve(ctx context.Context, who, occurrence, reason string, until sensors.Instant) (Done, error)
	Unshelve(ctx context.Context, who, occurrence string) (Done, error)
	UseRunway(ctx context.Context, who, runway string) (Done, error)
	Note(ctx context.Context, who, event, text string) (Done, error)
	Report(ctx context.Context, who string, r PilotReport) (Done, error)
	Hold(ctx context.Context, who string, h Hold) (Done, error)
	ReleaseHold(ctx context.Context, who, id, reason string) (Done, error)
	Sign(ctx context.Context, who, what, text string) (Done, error)

	// List gives what was done in [from, to), oldest first. A to of 0 is no
	// limit.
	List(kind Deed, from, to sensors.Instant) ([]json.RawMessage, error)
	// About gives what was done about an event or its occurrence, oldest first.
	About(event string) ([]json.RawMessage, error)
	// Audit keeps who came in, or did not. It waits for nothing.
	Audit(a Access)
}

// Deed is a kind of thing that people do.
type Deed string

// The deeds that are listed.
const (
	Acknowledgements Deed = "acknowledgements"
	Shelvings        Deed = "shelvings"
	Notes            Deed = "notes"
	PilotReports     Deed = "pilot-reports"
	Holds            Deed = "holds"
	Sheets           Deed = "sheets"
	RunwaysInUse     Deed = "runway-in-use"
	Accesses         Deed = "accesses"
)

// Done is what became of something that was asked for.
type Done struct {
	ID       string          // of what was made; empty where nothing has a name
	At       sensors.Instant // under which it is kept
	Recorded bool            // it is on disk; else it is in force and waits for the disk
}

// PilotReport is what a crew felt. Speeds in m/s.
type PilotReport struct {
	At                sensors.Instant
	Runway, Operation string
	Felt              string  // loss, gain, none
	Amount            float64 // 0: unknown
	FromM, ToM        *float64
	GoAround          bool
	Aircraft, Text    string
	Event             string // empty: none is named
}

// Hold keeps readings from being deleted: those of [From, To], or those round
// an event.
type Hold struct {
	Reason   string
	From, To sensors.Instant
	Event    string
}

// Access is who came in, or did not.
type Access struct {
	Who, What, From string
	OK              bool
}

// ErrNotKept says that what was asked for cannot be kept, and so was not done.
var ErrNotKept = errors.New("the history does not take it")

// ErrNoHold is a hold that is not there.
var ErrNoHold = errors.New("there is no hold with this id")

// Refusal is a value that does not do, with what would.
type Refusal struct{ Field, Why string }

// Error is the refusal as a sentence.
func (e Refusal) Error() string { return fmt.Sprintf("%s: %s.", e.Field, e.Why) }
