package main

import (
	"cmp"
	"math"
	"slices"
	"strings"
	"sync"
	"sync/atomic"

	"sockline/alerting"
	"sockline/alerting/attention"
	"sockline/alerting/page"
	"sockline/alerting/wording"
	"sockline/sensors"
)

// board holds what the page shows: the last step, the alerts that have been
// released, and what people have done about them. The loop, the release and the
// handlers of requests write to it; readers load a pointer.
type board struct {
	view atomic.Pointer[page.View]
	tape *page.Tape // every issue that was released, for the streams
	// lifted keeps shelvings that ended by themselves. It waits for nothing.
	lifted func(at sensors.Instant, l []attention.Lifted)

	mu    sync.Mutex
	step  *page.View
	open  map[string]wording.Notice
	seq   uint64 // of the newest view
	watch *attention.Watch
}

func newBoard(instance string) *board {
	return &board{
		tape: page.NewTape(instance), open: make(map[string]wording.Notice), watch: attention.New(),
		lifted: func(sensors.Instant, []attention.Lifted) {},
	}
}

// show puts up a step.
func (b *board) show(v *page.View) {
	b.mu.Lock()
	b.step = v
	lifted := b.watch.Step(v.At)
	b.compose()
	b.mu.Unlock()
	b.lifted(v.At, lifted)
}

// release puts up an alert, or takes it down when it has closed.
func (b *board) release(n wording.Notice) {
	b.mu.Lock()
	if n.Closing() {
		delete(b.open, n.ID())
	} else {
		b.open[n.ID()] = n
	}
	a := n.Alert()
	lifted := b.watch.Issue(watched(a, n.Text()))
	b.tape.Issue(n.JSON())
	b.compose()
	b.mu.Unlock()
	b.lifted(a.Updated, lifted)
}

// act does what somebody asks for, and shows it at once.
func (b *board) act(do func(w *attention.Watch) error) error {
	b.mu.Lock()
	defer b.mu.Unlock()
	if err := do(b.watch); err != nil {
		return err
	}
	b.compose()
	return nil
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
	v.RunwayInUse = b.watch.RunwayInUse()
	for _, o := range b.watch.Occurrences() {
		v.Occurrences = append(v.Occurrences, occurrenceOf(&o))
	}
	b.view.Store(&v)
	b.tape.Turn()
}

// occurrenceOf is an occurrence as the page shows it.
func occurrenceOf(o *attention.Occurrence) page.Occurrence {
	worst := &o.Alerts[0]
	out := page.Occurrence{
		ID: o.ID, Sentence: worst.Sentence, Level: o.Level.String(), State: string(o.State), Since: seconds(o.Since),
		Trend: worst.Trend, Sound: string(o.Sound),
	}
	for _, a := range o.Alerts {
		if a.Open || o.Ended != 0 {
			out.Alerts = append(out.Alerts, a.ID)
		}
	}
	if o.Ended != 0 {
		out.Ended = pointer(seconds(o.Ended))
	}
	if a := o.Acknowledged; a != (attention.Act{}) {
		out.AcknowledgedBy, out.AcknowledgedAt = &a.Who, pointer(seconds(a.At))
	}
	if s := o.Shelving; s != (attention.Shelving{}) {
		out.ShelvedBy, out.ShelvedUntil, out.ShelvedReason = &s.Who, pointer(seconds(s.Until)), &s.Reason
	}
	return out
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
