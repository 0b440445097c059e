package publish

import "time"

// shelf holds the latest value of every retained topic. It is not safe for
// concurrent use; the Sink's mutex guards it. Its size is that of the
// configuration: a topic for each path and station, and the status.
type shelf struct {
	values map[string]*value
	order  []string // first set, first sent
}

// value is the latest payload of a topic.
type value struct {
	payload []byte
	state   string // the word whose change makes it urgent
	every   time.Duration
	fresh   bool      // not sent yet
	due     time.Time // not sent before; zero: at once
	version uint64    // to see whether it was replaced while it was sent
}

func newShelf() *shelf { return &shelf{values: make(map[string]*value)} }

// set keeps a payload and reports whether it should go out at once.
func (h *shelf) set(topic, state string, every time.Duration, payload []byte) (urgent bool) {
	v := h.values[topic]
	if v == nil {
		v = &value{}
		h.values[topic] = v
		h.order = append(h.order, topic)
	}
	urgent = v.version == 0 || v.state != state
	v.payload, v.state, v.every, v.fresh = payload, state, every, true
	v.version++
	if urgent {
		v.due = time.Time{}
	}
	return urgent
}

// next is a topic whose value is due at now.
func (h *shelf) next(now time.Time) (topic string, v value, ok bool) {
	for _, topic := range h.order {
		if v := h.values[topic]; v.fresh && !v.due.After(now) {
			return topic, *v, true
		}
	}
	return "", value{}, false
}

// sent notes that a value went out at now.
func (h *shelf) sent(topic string, sent value, now time.Time) {
	v := h.values[topic]
	if v.version == sent.version {
		v.fresh = false
	} else if v.state != sent.state {
		return // the state changed while it was on its way: still urgent
	}
	// Count from when it was due, so that the spacing keeps its mean although
	// we look only once a tick; after a gap, from now.
	due := v.due.Add(v.every)
	if !due.After(now) {
		due = now.Add(v.every)
	}
	v.due = due
}

// again makes every value go out once more: a new connection knows nothing.
func (h *shelf) again() {
	for _, topic := range h.order {
		h.repeat(topic)
	}
}

// repeat makes the value of one topic go out once more, at once.
func (h *shelf) repeat(topic string) {
	if v := h.values[topic]; v != nil {
		v.fresh, v.due = true, time.Time{}
	}
}
