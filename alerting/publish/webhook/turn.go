package webhook

import (
	"context"
	"fmt"
	"time"
)

// turn does what there is to do at this moment: takes what was handed over,
// writes it down, and starts the requests that are due.
func (r *Receiver) turn(ctx context.Context) {
	now := r.opts.Now()
	r.mu.Lock()
	incoming, beat := r.incoming, r.beat
	r.incoming, r.beat = nil, nil
	r.mu.Unlock()
	var changed []record
	for _, h := range incoming {
		changed = append(changed, r.lanes.put(h.event, h.at)...)
	}
	if beat != nil {
		r.lanes.setBeat(beat.event, beat.at)
	}
	gone := r.lanes.expire(now.Add(-ExpireAfter))
	if len(gone) > 0 {
		r.told.Expired += uint64(len(gone))
		r.log.Error().Int("events", len(gone)).Dur("after_ms", ExpireAfter).Msg("events are given up: the receiver was away too long")
		changed = append(changed, gone...)
	}
	r.keep(changed, now)
	r.start(ctx, now)
	// Only now, since a slow disk must not hold up what is told: the kernel has
	// the records, and a power cut loses what was handed over in this moment.
	r.syncFile(now)
	r.report()
}

// start launches what is due.
func (r *Receiver) start(ctx context.Context, now time.Time) {
	if now.Before(r.pause) {
		return
	}
	free := slots
	if r.down {
		free = 1 // one knock is enough to learn whether anybody is in
	}
	for r.flying < free {
		l := r.lanes.next(now, r.flying < free-1 || r.down)
		if l == nil {
			return
		}
		it := l.head()
		l.flying = it
		r.flying++
		if it.tries++; it.tries > 1 {
			r.told.Repeated++
		}
		go func() { r.results <- result{lane: l, item: it, answer: r.post(ctx, it, now)} }()
	}
}

// result is what became of a request.
type result struct {
	lane   *lane
	item   *item
	answer answer
}

// finish takes note of a result.
func (r *Receiver) finish(res result) {
	now := r.opts.Now()
	l, it, a := res.lane, res.item, res.answer
	r.flying--
	l.flying = nil
	reached := a.verdict != unreached
	if reached {
		r.down, r.downs = false, 0
	}
	switch a.verdict {
	case delivered:
		r.told.Delivered++
		r.done(l, it, now)
		r.recovered()
	case refused:
		r.told.Refused++
		r.done(l, it, now)
		r.trouble(a.why)
	case unreached:
		r.down = true
		r.downs++
		r.pause = now.Add(r.spread(pauseAfter(r.downs, longestProbe)))
		l.next = r.pause
		r.dropBeat(l, it)
		r.trouble(a.why)
	default:
		l.tries++
		l.next = now.Add(max(r.spread(pauseAfter(l.tries, longestPause)), a.wish))
		if a.wish > 0 { // it asks everybody to wait, and is asked nothing meanwhile
			r.pause = now.Add(a.wish)
		}
		r.dropBeat(l, it)
		r.trouble(a.why)
	}
	r.report()
}

// dropBeat gives a heartbeat up after its one try.
func (r *Receiver) dropBeat(l *lane, it *item) {
	if l == &r.lanes.beat {
		r.lanes.done(l, it)
		l.tries, l.next = 0, time.Time{}
	}
}

// done takes an event out for good.
func (r *Receiver) done(l *lane, it *item, now time.Time) {
	l.tries, l.next = 0, time.Time{}
	if r.lanes.done(l, it) {
		r.keep([]record{{Done: it.seq}}, now)
	}
}

// pauseAfter is the pause after so many failures in a row: doubling from
// firstPause up to a bound.
func pauseAfter(failures int, longest time.Duration) time.Duration {
	p := firstPause
	for i := 1; i < failures && p < longest; i++ {
		p *= 2
	}
	return min(p, longest)
}

// spread puts a pause somewhere between half of it and one and a half, so that
// many senders do not come back in step.
func (r *Receiver) spread(p time.Duration) time.Duration {
	return p/2 + time.Duration(r.opts.Random()*float64(p))
}

// trouble keeps and logs why a try failed; the same reason is one line.
func (r *Receiver) trouble(why string) {
	if r.leaving {
		return
	}
	if r.told.Problem != why {
		r.log.Error().Str("why", why).Msg("the receiver of a webhook does not take what is sent")
	}
	r.told.Problem = why
}

func (r *Receiver) recovered() {
	if r.told.Problem != "" {
		r.log.Info().Msg("the receiver of a webhook takes what is sent again")
	}
	r.told.Problem = ""
}

// report makes the state visible.
func (r *Receiver) report() {
	r.mu.Lock()
	r.told.Withheld = r.withheld
	waiting, lost := len(r.incoming), r.lanes.lost+r.overrun
	r.mu.Unlock()
	n, oldest := r.lanes.waiting()
	r.told.Waiting, r.told.Oldest = n+waiting, oldest
	if lost > r.told.Lost {
		r.log.Error().Uint64("lost", lost).Msg("too many alerts wait for the receiver of a webhook; some were given up")
	}
	r.told.Lost = lost
	now := r.told
	r.state.Store(&now)
}

// openFile reads what an earlier run left, once it can.
func (r *Receiver) openFile(now time.Time) {
	f, records, damage, err := openFile(r.opts.File)
	if err != nil {
		r.diskTrouble(err, now)
		return
	}
	if damage > 0 {
		r.log.Error().Int64("bytes", damage).Str("file", r.opts.File).
			Msg("the end of the queue of a webhook was damaged and is cut off; what was in it is in the history")
	}
	r.file = f
	if r.loaded { // what it holds was read before and lives on in memory
		return
	}
	r.loaded = true
	keep := r.lanes.seq == 0 // else numbers of this run are taken already
	for _, rec := range records {
		if rec.Event == nil || r.withholds(*rec.Event) {
			continue // a drill of an earlier run, for a receiver that now takes none
		}
		r.lanes.restore(rec, keep)
	}
	if len(records) > 0 {
		r.log.Info().Int("waiting", len(records)).Msg("events of an earlier run wait for the receiver of a webhook")
	}
}

// keep writes records down. While that fails, events go on from memory.
func (r *Receiver) keep(records []record, now time.Time) {
	if r.file == nil || len(records) == 0 {
		return
	}
	if err := r.file.append(records); err != nil {
		r.abandonFile(err, now)
	}
}

// syncFile makes the file durable, tidies it, and mends one that failed.
func (r *Receiver) syncFile(now time.Time) {
	if r.file == nil {
		if now.Before(r.mend) {
			return
		}
		// Opening comes first, since the file may be another program's, or of
		// another version: such a one is never written over.
		if r.openFile(now); r.file == nil {
			return
		}
		if !r.renewFile(now) {
			return
		}
		r.told.Disk = ""
		r.log.Info().Str("file", r.opts.File).Msg("the queue of a webhook is on disk again")
		return
	}
	if err := r.file.sync(); err != nil {
		r.abandonFile(err, now)
		return
	}
	if r.file.wasteful() {
		r.renewFile(now)
	}
}

// renewFile puts a new file of what waits in the place of the open one.
func (r *Receiver) renewFile(now time.Time) bool {
	f, err := rewrite(r.opts.File, r.lanes.records())
	if err != nil {
		r.abandonFile(err, now)
		return false
	}
	_ = r.file.close() // replaced; what it held is in the new one
	r.file = f
	return true
}

func (r *Receiver) abandonFile(err error, now time.Time) {
	_ = r.file.close() // it failed already
	r.file = nil
	r.diskTrouble(err, now)
}

func (r *Receiver) diskTrouble(err error, now time.Time) {
	if r.told.Disk == "" {
		r.log.Error().Err(err).Msg("the queue of a webhook cannot be kept on disk; events go on from memory, and a restart loses what waits")
	}
	r.told.Disk = fmt.Sprint(err)
	r.mend = now.Add(mendEvery)
}
