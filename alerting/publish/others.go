package publish

import (
	"encoding/json"
	"time"

	"sockline/alerting"
)

// others knows which other instances speak under our prefix. It is not safe
// for concurrent use; the Sink's mutex guards it.
type others struct {
	own  string
	seen map[string]sighting
}

// sighting is the last status of another instance.
type sighting struct {
	at    string    // its own stamp
	until time.Time // it counts as alive before this, by our clock
}

// maxOthers bounds the memory that a flood of invented instances can take.
const maxOthers = 16

// heard is what a status means to us.
type heard int

const (
	heardNothing heard = iota // malformed, or our own living status
	heardOther                // another instance lives
	heardSilence              // somebody's last will now stands on the topic
)

func newOthers(own string) *others {
	return &others{own: own, seen: make(map[string]sighting)}
}

// observe takes one status payload. The first status of an instance may be a
// retained one of long ago, so it counts only while valid by our clock; a
// second one with another stamp proves a living sender even if its clock is
// wrong. A last will proves nothing: it may belong to an older connection of
// an instance that is back already, so its sender is only left to run out.
func (o *others) observe(payload []byte, now time.Time) heard {
	var status struct {
		Condition  alerting.Condition `json:"condition"`
		Instance   string             `json:"instance"`
		At         string             `json:"at"`
		ValidUntil time.Time          `json:"valid_until"`
	}
	if err := json.Unmarshal(payload, &status); err != nil || status.Instance == "" {
		return heardNothing
	}
	if status.Condition == alerting.NoContact {
		return heardSilence
	}
	if status.Instance == o.own {
		return heardNothing
	}
	last, known := o.seen[status.Instance]
	if !known && len(o.seen) >= maxOthers {
		o.forget(now)
		if len(o.seen) >= maxOthers {
			return heardNothing
		}
	}
	moved := known && last.at != status.At
	if moved || (!known && status.ValidUntil.After(now)) {
		last.until = now.Add(aliveFor)
	}
	last.at = status.At
	o.seen[status.Instance] = last
	return heardOther
}

// forget drops the instances that are no longer alive.
func (o *others) forget(now time.Time) {
	for id, s := range o.seen {
		if !s.until.After(now) {
			delete(o.seen, id)
		}
	}
}

// alive names another instance that lives at now, the least by name if there
// are several; empty if there is none.
func (o *others) alive(now time.Time) string {
	least := ""
	for id, s := range o.seen {
		if s.until.After(now) && (least == "" || id < least) {
			least = id
		}
	}
	return least
}
