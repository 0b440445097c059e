package publish

import "time"

// queue holds what is still to be told of each alert: at most one issue of
// each phase. It is not safe for concurrent use; the Sink's mutex guards it.
type queue struct {
	max    int
	seq    uint64
	alerts map[string]*pending
	order  []*pending // by first issue, oldest first
	lost   uint64     // issues given up because the queue was full
}

// pending is one alert in the queue. It stays until its closing is sent, so
// that the sink knows which alerts its receivers believe to be open.
type pending struct {
	id     string
	opened bool // something of it was sent
	waits  [phases]*queued
}

// key keeps the issues of an alert apart by their topic.
func (i *Issue) key() string {
	if i.Topic == "" {
		return i.AlertID
	}
	return i.Topic + "/" + i.AlertID // no id has a slash
}

// queued is an issue with the time it was handed over.
type queued struct {
	issue  Issue
	handed time.Time
	seq    uint64
}

func newQueue(maxAlerts int) *queue {
	return &queue{max: maxAlerts, alerts: make(map[string]*pending)}
}

// put adds an issue; it takes the place of one of the same phase.
func (q *queue) put(i Issue, now time.Time) {
	p := q.alerts[i.key()]
	if p == nil {
		if len(q.order) >= q.max {
			q.evict()
		}
		p = &pending{id: i.key()}
		q.alerts[i.key()] = p
		q.order = append(q.order, p)
	}
	q.seq++
	p.waits[i.Phase] = &queued{issue: i, handed: now, seq: q.seq}
}

// evict makes room for one alert: one with nothing to send if there is one,
// else the oldest that has closed. An alert is given up as a whole, so that no
// receiver is left with an opening that never closes; the newest openings,
// which people act on, are never the ones to go.
func (q *queue) evict() {
	victim := q.order[0]
	rank := victim.evictionRank()
	for _, p := range q.order[1:] {
		if r := p.evictionRank(); r > rank {
			victim, rank = p, r
		}
	}
	for _, w := range victim.waits {
		if w != nil {
			q.lost++
		}
	}
	q.remove(victim)
}

// evictionRank is higher for what is sooner given up.
func (p *pending) evictionRank() int {
	switch {
	case p.head() == nil:
		return 3 // nothing would be lost
	case p.waits[Closing] != nil && !p.opened:
		return 2 // nobody was told of it
	case p.waits[Closing] != nil:
		return 1
	}
	return 0
}

// head is the next issue of an alert: opening before update before closing.
func (p *pending) head() *queued {
	for _, w := range p.waits {
		if w != nil {
			return w
		}
	}
	return nil
}

// next is the issue to send next: over all alerts the one handed over first.
// Nil if there is none. It stays queued until sent is called with it.
func (q *queue) next() *queued {
	var first *queued
	for _, p := range q.order {
		if h := p.head(); h != nil && (first == nil || h.seq < first.seq) {
			first = h
		}
	}
	return first
}

// sent takes an issue out, unless a newer one has taken its place meanwhile.
func (q *queue) sent(w *queued) {
	p := q.alerts[w.issue.key()]
	if p == nil {
		return // given up while it was on its way
	}
	p.opened = true
	if p.waits[w.issue.Phase] == w {
		p.waits[w.issue.Phase] = nil
	}
	if w.issue.Phase == Closing && p.head() == nil {
		q.remove(p)
	}
}

// forgetToldByOther drops the alerts that closed before the given time and of
// which we never sent anything: the instance that speaks in our place told
// them from opening to closing.
func (q *queue) forgetToldByOther(before time.Time) {
	for i := len(q.order) - 1; i >= 0; i-- {
		p := q.order[i]
		if c := p.waits[Closing]; c != nil && !p.opened && c.handed.Before(before) {
			q.remove(p)
		}
	}
}

func (q *queue) remove(p *pending) {
	delete(q.alerts, p.id)
	for i, o := range q.order {
		if o == p {
			q.order = append(q.order[:i], q.order[i+1:]...)
			return
		}
	}
}

// waiting counts the issues not yet sent.
func (q *queue) waiting() int {
	n := 0
	for _, p := range q.order {
		for _, w := range p.waits {
			if w != nil {
				n++
			}
		}
	}
	return n
}
