package page

import (
	"strconv"
	"strings"
	"sync"
)

// tapeLength is how many issues of alerts are kept for those whose stream was
// cut: at 14 alerts open at once, each issued every 5 s, some 24 minutes.
const tapeLength = 4096

// Tape is the newest issues of alerts in the order in which they were
// released, for the streams. Those who write to it never wait for a reader:
// each reader has a place of its own and takes what it has not had yet.
type Tape struct {
	instance string

	mu      sync.Mutex
	ring    [][]byte      // the issue with number n is at (n-1) modulo its length
	last    uint64        // number of the newest issue, from 1
	changed chan struct{} // closed at the next change
}

// NewTape is an empty tape. The instance names this run of the daemon: numbers
// of another run mean nothing here.
func NewTape(instance string) *Tape {
	return &Tape{instance: instance, ring: make([][]byte, tapeLength), changed: make(chan struct{})}
}

// Issue adds an alert object, which must be one line and is not changed any
// more.
func (t *Tape) Issue(object []byte) {
	t.mu.Lock()
	defer t.mu.Unlock()
	t.ring[t.last%uint64(len(t.ring))] = object
	t.last++
	t.wake()
}

// Turn tells the readers that another view is up.
func (t *Tape) Turn() {
	t.mu.Lock()
	defer t.mu.Unlock()
	t.wake()
}

func (t *Tape) wake() {
	close(t.changed)
	t.changed = make(chan struct{})
}

// next is closed at the next change. Ask for it before looking.
func (t *Tape) next() <-chan struct{} {
	t.mu.Lock()
	defer t.mu.Unlock()
	return t.changed
}

// head is the number of the newest issue.
func (t *Tape) head() uint64 {
	t.mu.Lock()
	defer t.mu.Unlock()
	return t.last
}

// after gives the issues that follow the number n; false if some of them are
// no longer kept, or n is still to come.
func (t *Tape) after(n uint64) ([][]byte, bool) {
	t.mu.Lock()
	defer t.mu.Unlock()
	if n > t.last || t.last-n > uint64(len(t.ring)) {
		return nil, false
	}
	var out [][]byte
	for ; n < t.last; n++ {
		out = append(out, t.ring[n%uint64(len(t.ring))])
	}
	return out, true
}

// id is the event id of an issue.
func (t *Tape) id(n uint64) string { return t.instance + "-" + strconv.FormatUint(n, 10) }

// place is the number in an event id; false if it is not one of this tape.
func (t *Tape) place(id string) (uint64, bool) {
	i := strings.LastIndexByte(id, '-')
	if i < 0 || id[:i] != t.instance {
		return 0, false
	}
	n, err := strconv.ParseUint(id[i+1:], 10, 64)
	return n, err == nil
}
