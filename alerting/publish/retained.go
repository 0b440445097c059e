package publish

import (
	"slices"
	"time"
)

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
	leaving bool      // it is not told any more: what is sent are its last words
}

// withdrawn is the state of a value that is leaving: no caller uses this word.
const withdrawn = "withdrawn"

// qos is the quality of service of a value: no later one repairs the loss of a
// last word.
func (v *value) qos() byte {
	if v.leaving {
		return qosAlert
	}
	return qosValue
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
	v.leaving = false
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
	switch {
	case v.version == sent.version && v.leaving && len(v.payload) > 0:
		h.clear(v)
		return
	case v.version == sent.version && v.leaving:
		h.forget(topic)
		return
	case v.version == sent.version:
		v.fresh = false
	case v.state != sent.state:
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

// withdraw takes a topic that was told from the broker: the payload, if there
// is one, goes out as its last word, and then nothing, which ends what the
// broker retains. It reports whether there is anything to take away.
func (h *shelf) withdraw(topic string, payload []byte) bool {
	v := h.values[topic]
	if v == nil {
		return false
	}
	h.clear(v)
	v.payload = payload
	return true
}

// clear makes a value go out as empty, at once.
func (h *shelf) clear(v *value) {
	v.payload, v.state, v.leaving = nil, withdrawn, true
	v.fresh, v.due = true, time.Time{}
	v.version++
}

func (h *shelf) forget(topic string) {
	delete(h.values, topic)
	h.order = slices.DeleteFunc(h.order, func(t string) bool { return t == topic })
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
