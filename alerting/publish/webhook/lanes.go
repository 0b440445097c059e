package webhook

import "time"

// lanes holds what waits for a receiver: a lane for each alert, with at most
// one event of each phase. It knows order and time, and nothing of HTTP or
// disks.
type lanes struct {
	max    int
	seq    uint64
	lost   uint64
	alerts map[string]*lane
	order  []*lane // by first event, oldest first
	beat   lane    // the heartbeat: one event, never on disk
}

// lane is one alert on its way.
type lane struct {
	alert  string
	opened bool // something of it was delivered
	waits  [phases]*item
	flying *item
	tries  int       // failures of this alert in a row
	next   time.Time // no try before
}

// item is one event that waits.
type item struct {
	seq   uint64
	event Event
	at    time.Time // when it was handed over
	tries int
}

func newLanes(maxAlerts int) *lanes { return &lanes{max: maxAlerts, alerts: make(map[string]*lane)} }

// put adds an event in the place of one of the same phase, and returns what is
// to be written down.
func (q *lanes) put(e Event, at time.Time) (changed []record) {
	l := q.alerts[e.Alert]
	if l == nil {
		if len(q.order) >= q.max {
			changed = q.evict()
		}
		l = &lane{alert: e.Alert}
		q.alerts[e.Alert] = l
		q.order = append(q.order, l)
	}
	if old := l.waits[e.Phase]; old != nil {
		changed = append(changed, record{Done: old.seq})
	}
	q.seq++
	l.waits[e.Phase] = &item{seq: q.seq, event: e, at: at}
	return append(changed, recordOf(l.waits[e.Phase]))
}

// restore puts back what a file holds, unless there is something newer. With
// keep it goes by its number in the file, so that its end can be written there;
// without, the file is about to be written anew.
func (q *lanes) restore(r record, keep bool) {
	if l := q.alerts[r.Event.Alert]; l != nil && l.waits[r.Event.Phase] != nil {
		return
	}
	q.put(*r.Event, time.UnixMilli(r.Handed))
	if keep {
		q.alerts[r.Event.Alert].waits[r.Event.Phase].seq = r.Put
		q.seq = max(q.seq, r.Put)
	}
}

func (q *lanes) setBeat(e Event, at time.Time) {
	q.beat.waits[Update] = &item{event: e, at: at}
	if q.beat.flying == nil {
		q.beat.next = time.Time{}
	}
}

// evict makes room for one alert: the one that is closest to being over, as a
// whole, so that no receiver is left with an opening that never closes.
func (q *lanes) evict() (changed []record) {
	victim, rank := q.order[0], q.order[0].evictionRank()
	for _, l := range q.order[1:] {
		if r := l.evictionRank(); r > rank {
			victim, rank = l, r
		}
	}
	for _, w := range victim.waits {
		if w != nil {
			q.lost++
			changed = append(changed, record{Done: w.seq})
		}
	}
	q.remove(victim)
	return changed
}

// evictionRank is higher for what is sooner given up.
func (l *lane) evictionRank() int {
	switch {
	case l.head() == nil:
		return 3 // nothing would be lost
	case l.waits[Closing] != nil && !l.opened:
		return 2 // nobody was told of it
	case l.waits[Closing] != nil:
		return 1
	}
	return 0
}

// head is the next event of an alert: opening before update before closing.
func (l *lane) head() *item {
	for _, w := range l.waits {
		if w != nil {
			return w
		}
	}
	return nil
}

// due tells whether a lane has something to send now.
func (l *lane) due(now time.Time) bool {
	return l.flying == nil && l.head() != nil && !l.next.After(now)
}

// next is the lane to serve: the heartbeat, then what was never tried, the
// first handed over first, then, if repeats may go, what has waited longest.
func (q *lanes) next(now time.Time, repeats bool) *lane {
	if q.beat.due(now) {
		return &q.beat
	}
	var fresh, again *lane
	for _, l := range q.order {
		if !l.due(now) {
			continue
		}
		if h := l.head(); h.tries == 0 && l.tries == 0 {
			if fresh == nil || h.seq < fresh.head().seq {
				fresh = l
			}
		} else if again == nil || l.next.Before(again.next) {
			again = l
		}
	}
	if fresh == nil && repeats {
		return again
	}
	return fresh
}

// fresh tells whether anything was never tried.
func (q *lanes) fresh(now time.Time) bool { return q.next(now, false) != nil }

// done takes an event out, unless a newer one has taken its place meanwhile,
// and reports whether it was there.
func (q *lanes) done(l *lane, it *item) bool {
	l.opened = true
	there := l.waits[it.event.Phase] == it
	if there {
		l.waits[it.event.Phase] = nil
	}
	if l == &q.beat {
		return false
	}
	if l.head() == nil && (it.event.Phase == Closing || len(q.order) > q.max/2) {
		q.remove(l) // else it stays: what is known of it decides what is given up
	}
	return there
}

// expire gives up what was handed over before a moment and is not under way.
func (q *lanes) expire(before time.Time) (gone []record) {
	for i := len(q.order) - 1; i >= 0; i-- {
		l := q.order[i]
		for p, w := range l.waits {
			if w != nil && w != l.flying && w.at.Before(before) {
				gone = append(gone, record{Done: w.seq})
				l.waits[p] = nil
				if Phase(p) == Closing && l.head() == nil {
					q.remove(l)
				}
			}
		}
	}
	return gone
}

func (q *lanes) remove(l *lane) {
	delete(q.alerts, l.alert)
	for i, o := range q.order {
		if o == l {
			q.order = append(q.order[:i], q.order[i+1:]...)
			return
		}
	}
}

// waiting counts the events of alerts, and says when the oldest was handed
// over.
func (q *lanes) waiting() (n int, oldest time.Time) {
	for _, l := range q.order {
		for _, w := range l.waits {
			if w == nil {
				continue
			}
			n++
			if oldest.IsZero() || w.at.Before(oldest) {
				oldest = w.at
			}
		}
	}
	return n, oldest
}

// records is everything that waits, as a file holds it.
func (q *lanes) records() (all []record) {
	for _, l := range q.order {
		for _, w := range l.waits {
			if w != nil {
				all = append(all, recordOf(w))
			}
		}
	}
	return all
}

func recordOf(it *item) record {
	e := it.event
	return record{Put: it.seq, Handed: it.at.UnixMilli(), Event: &e}
}
