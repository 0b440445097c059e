// Package cap takes notices and gives messages of the Common Alerting Protocol
// (OASIS, CAP 1.2, 2010; element order and value lists from memory): Alert at
// the opening, Update where it matters, Cancel at the closing, each with the
// ground that it is about as a polygon. It also keeps them as files in a spool.
// Next: publish, webhook, and whoever reads the spool.
package cap

import (
	"encoding/xml"
	"errors"
	"fmt"
	"strings"
	"sync"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/sensors"
)

// ContentType is the media type of a message.
const ContentType = "application/cap+xml"

const (
	// updateEvery is the spacing of updates of an alert that changes little.
	// Each is a message that replaces all earlier ones, and its readers are
	// people more often than programs.
	updateEvery = time.Minute
	// lapse is how long a message holds if nothing follows it. An alert whose
	// ground is no longer observed closes after 10 minutes, too.
	lapse = 10 * time.Minute
	// maxReferences bounds the list of what a message replaces: an hour of
	// updates. Beyond it the opening and the newest are named.
	maxReferences = 64
	// maxTracked bounds the alerts whose messages are remembered.
	maxTracked = 4096
)

// Options says who sends, and for which airfield.
type Options struct {
	Sender   string // a name or address that is unique in the world; no blanks, commas, < or &
	Airfield *airfield.Airfield
	Exercise bool
}

// Message is one CAP message.
type Message struct {
	ID       string // stable: alert and revision
	AlertID  string
	Opening  bool
	Closing  bool
	Exercise bool
	Sent     sensors.Instant
	XML      []byte
}

// Composer makes messages of notices. It may be used from any goroutine; the
// notices of one alert must come in order.
type Composer struct {
	opts Options

	mu    sync.Mutex
	open  map[string]*told
	order []string // ids of open, oldest first
}

// told is what receivers have been told of an alert.
type told struct {
	references []string // sender,identifier,sent of each message
	last       sensors.Instant
	level      alerting.Level
	observed   bool
}

// New makes a Composer.
func New(o Options) (*Composer, error) {
	if err := CheckSender(o.Sender); err != nil {
		return nil, err
	}
	if o.Airfield == nil {
		return nil, errors.New("standard alert messages need the geometry of the airfield")
	}
	return &Composer{opts: o, open: make(map[string]*told)}, nil
}

// CheckSender reports what is wrong with a sender: CAP lists identifiers with
// blanks and commas between them.
func CheckSender(sender string) error {
	if sender == "" || strings.ContainsFunc(sender, func(r rune) bool { return r <= ' ' || r > '~' || strings.ContainsRune(",<&", r) }) {
		return fmt.Errorf(`sender %q: write a name of letters without blanks, commas, < and &, such as "sockline@skerrymoor.example"`, sender)
	}
	return nil
}

// SetAirfield changes the geometry that later messages are drawn from.
func (c *Composer) SetAirfield(a *airfield.Airfield) {
	c.mu.Lock()
	defer c.mu.Unlock()
	c.opts.Airfield = a
}

// Of is the message of a notice; false if it says too little that is new.
// Opening, closing and every change of level or of being observed have one,
// everything else one a minute.
func (c *Composer) Of(n wording.Notice) (Message, bool) {
	a := n.Alert()
	c.mu.Lock()
	defer c.mu.Unlock()
	t := c.open[a.ID]
	if t == nil {
		t = &told{}
		if !n.Opening() {
			// It opened in an earlier run, whose opening has a known name.
			t.references = []string{c.reference(a.ID, 1, a.Opened)}
		}
		c.track(a.ID, t)
	} else if !n.Closing() && a.Level == t.level && a.Observed == t.observed && a.Updated.Sub(t.last) < updateEvery {
		return Message{}, false
	}
	m := Message{
		ID: identifier(a.ID, a.Revision), AlertID: a.ID, Opening: n.Opening() && !n.Closing(), Closing: n.Closing(),
		Exercise: n.Exercise() || c.opts.Exercise, Sent: a.Updated,
	}
	body, err := xml.MarshalIndent(c.document(n, t.references), "", " ")
	if err != nil { // texts and times always have an XML form
		return Message{}, false
	}
	m.XML = append([]byte(xml.Header), append(body, '\n')...)
	if n.Closing() {
		c.forget(a.ID)
		return m, true
	}
	t.last, t.level, t.observed = a.Updated, a.Level, a.Observed
	t.references = append(t.references, c.reference(a.ID, a.Revision, a.Updated))
	if len(t.references) > maxReferences {
		t.references = append(t.references[:1], t.references[2:]...)
	}
	return m, true
}

// track remembers an alert; of too many the oldest is forgotten, and its next
// message names the opening alone.
func (c *Composer) track(id string, t *told) {
	if len(c.order) >= maxTracked {
		c.forget(c.order[0])
	}
	c.open[id] = t
	c.order = append(c.order, id)
}

func (c *Composer) forget(id string) {
	delete(c.open, id)
	for i, o := range c.order {
		if o == id {
			c.order = append(c.order[:i], c.order[i+1:]...)
			return
		}
	}
}

// identifier names a message. The padding makes the order of names that of
// the messages.
func identifier(alert string, revision int) string { return fmt.Sprintf("%s-r%05d", alert, revision) }

func (c *Composer) reference(alert string, revision int, sent sensors.Instant) string {
	return c.opts.Sender + "," + identifier(alert, revision) + "," + stamp(sent)
}

// stamp is a time as CAP wants it: with an offset, which for UTC is -00:00 and
// never Z.
func stamp(t sensors.Instant) string { return t.Time().UTC().Format("2006-01-02T15:04:05-00:00") }

// closedWithout tells a closing that does not know whether the change has
// passed: it must not read as if it had.
func closedWithout(a *lifecycle.Alert) bool {
	return a.State == lifecycle.Closed && a.Because != lifecycle.BelowLevel
}
