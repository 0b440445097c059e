package main

import (
	"cmp"
	"math"
	"slices"
	"strings"
	"sync"
	"sync/atomic"

	"sockline/alerting"
	"sockline/alerting/page"
	"sockline/alerting/wording"
)

// board holds what the page shows: the last step, and the alerts that have
// been released. Two goroutines write to it, the loop and the release; readers
// load a pointer.
type board struct {
	view atomic.Pointer[page.View]
	tape *page.Tape // every issue that was released, for the streams

	mu   sync.Mutex
	step *page.View
	open map[string]wording.Notice
	seq  uint64 // of the newest view
}

func newBoard(instance string) *board {
	return &board{tape: page.NewTape(instance), open: make(map[string]wording.Notice)}
}

// show puts up a step.
func (b *board) show(v *page.View) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.step = v
	b.compose()
}

// release puts up an alert, or takes it down when it has closed.
func (b *board) release(n wording.Notice) {
	b.mu.Lock()
	defer b.mu.Unlock()
	if n.Closing() {
		delete(b.open, n.ID())
	} else {
		b.open[n.ID()] = n
	}
	b.tape.Issue(n.JSON())
	b.compose()
}

// openCount is how many alerts are up.
func (b *board) openCount() int {
	b.mu.Lock()
	defer b.mu.Unlock()
	return len(b.open)
}

// compose makes a new view: one that is up is never changed.
func (b *board) compose() {
	if b.step == nil {
		return
	}
	v := *b.step
	b.seq++
	v.Seq = b.seq
	notices := make([]wording.Notice, 0, len(b.open))
	for _, n := range b.open {
		notices = append(notices, n)
	}
	slices.SortFunc(notices, worstFirst)
	for _, n := range notices {
		a := n.Alert()
		v.Alerts = append(v.Alerts, page.Alert{
			ID: n.ID(), Kind: a.Kind, Level: a.Level, Observed: a.Observed, Sentence: n.Text(), JSON: n.JSON(),
		})
		v.Exercise = v.Exercise || n.Exercise()
	}
	b.view.Store(&v)
	b.tape.Turn()
}

// worstFirst orders alerts by level, a loss before a gain, then by size.
func worstFirst(x, y wording.Notice) int {
	a, b := x.Alert(), y.Alert()
	loss := func(k alerting.Kind) int {
		if k == alerting.HeadwindLoss {
			return 0
		}
		return 1
	}
	return cmp.Or(
		cmp.Compare(b.Level, a.Level),
		cmp.Compare(loss(a.Kind), loss(b.Kind)),
		cmp.Compare(math.Abs(b.Change), math.Abs(a.Change)),
		strings.Compare(a.ID, b.ID),
	)
}
