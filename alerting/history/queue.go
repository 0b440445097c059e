package history

import (
	"encoding/json"
	"slices"
	"time"

	"sockline/sensors"
)

// Bounds of what waits in memory while the disk does not take it.
const (
	// About 20 hours of 8 masts at 1 Hz, or an hour of 40 at 4 Hz.
	maxWaitingBytes = 16 << 20
	// 14 hours of one alert issued every 5 s.
	maxWaitingIssues = 10000
	// How much one transaction takes, so that a backlog is not one huge write.
	maxItemsATime = 2000
)

// item is a batch, encoded.
type item struct {
	step     sensors.Instant
	hasStep  bool
	stations []string
	body     []byte // readings
	late     []byte // nil if none
	lates    int    // readings in late
	readings int    // in both
	drafts   []draft
	first    uint64        // sequence of the first draft; to be read once done is closed
	done     chan struct{} // closed when all is on disk
}

// draft is a record that has no place in the chain yet. The openings are of
// the commitments in the payload.
type draft struct {
	kind     Kind
	at       sensors.Instant
	payload  []byte
	openings []byte
}

func (it *item) size() int { return len(it.body) + len(it.late) }

// outgoing is what waits for item, or for its deadline.
type outgoing struct {
	item     *item
	issues   []Issue
	encoded  []bool // false: the issue could not be written down at all
	deadline <-chan time.Time
}

// queue is what waits for a commit, oldest first. The Writer guards it.
type queue struct {
	items   []*item
	bytes   int // of readings
	issues  int // drafts of issues
	records int // drafts of any kind
	gap     Gap // what was given up since the last one was journalled
}

// push adds an item and gives up old ones while the queue is too long:
// readings first, issues only past their own, far bound, other entries never.
// It returns what this cost.
func (q *queue) push(it *item) (lost Gap) {
	q.items = append(q.items, it)
	q.count(it, 1)
	if q.bytes <= maxWaitingBytes && q.issues <= maxWaitingIssues {
		return Gap{}
	}
	kept := q.items[:0]
	for _, it := range q.items {
		q.count(it, -1)
		if q.bytes+it.size() > maxWaitingBytes {
			it.dropReadings(&lost)
		}
		if q.issues+it.issues() > maxWaitingIssues {
			it.dropIssues(&lost)
		}
		q.count(it, 1)
		if it.hasStep || len(it.drafts) > 0 {
			kept = append(kept, it)
		}
	}
	clear(q.items[len(kept):])
	q.items = kept
	if lost != (Gap{}) {
		lost.Why = "the disk did not take what was handed to it and the queue in memory was full"
		q.gap.merge(lost)
	}
	return lost
}

// pop takes up to n items from the front, before them the gap if there is one.
func (q *queue) pop(n int) []*item {
	n = min(n, len(q.items))
	items := make([]*item, 0, n+1)
	if q.gap != (Gap{}) {
		items = append(items, gapItem(q.gap))
		q.gap = Gap{}
	}
	for _, it := range q.items[:n] {
		q.count(it, -1)
		items = append(items, it)
	}
	rest := copy(q.items, q.items[n:])
	clear(q.items[rest:])
	q.items = q.items[:rest]
	return items
}

// count adds (by = 1) or takes away (by = -1) an item.
func (q *queue) count(it *item, by int) {
	q.bytes += by * it.size()
	q.records += by * len(it.drafts)
	q.issues += by * it.issues()
}

func (it *item) issues() (n int) {
	for _, d := range it.drafts {
		if d.kind == KindIssue {
			n++
		}
	}
	return n
}

// holds reports whether the item may keep readings from being deleted.
func (it *item) holds() bool {
	return slices.ContainsFunc(it.drafts, func(d draft) bool { return d.kind == KindHold })
}

func (it *item) dropReadings(g *Gap) {
	if !it.hasStep {
		return
	}
	g.merge(Gap{From: it.step, To: it.step, Steps: 1, Readings: uint64(it.readings)})
	it.body, it.late, it.hasStep = nil, nil, false
}

func (it *item) dropIssues(g *Gap) {
	n := it.issues()
	if n == 0 {
		return
	}
	g.merge(Gap{From: it.step, To: it.step, Records: uint64(n)})
	var rest []draft
	for _, d := range it.drafts {
		if d.kind != KindIssue {
			rest = append(rest, d)
		}
	}
	it.drafts = rest
	it.done = nil // it will never be on disk whole
}

// merge takes another gap into this one.
func (g *Gap) merge(o Gap) {
	if g.From == 0 || o.From < g.From {
		g.From = o.From
	}
	g.To = max(g.To, o.To)
	g.Steps += o.Steps
	g.Readings += o.Readings
	g.Records += o.Records
	if o.Why != "" {
		g.Why = o.Why
	}
}

func gapItem(g Gap) *item {
	payload, err := json.Marshal(g)
	if err != nil { // a struct of numbers and a text always has a JSON form
		payload = []byte(err.Error())
	}
	return &item{drafts: []draft{{kind: KindGap, at: g.To, payload: payload}}}
}

// round is one commit with what it needs to be repeated: the records keep
// their sequences over a failure whose outcome is unknown.
type round struct {
	items      []*item
	start, end head
	values     [][]byte // of the records start.seq+1 and on; nil until built
}

func (r *round) build(from head) {
	r.start, r.end, r.values = from, from, [][]byte{}
	for _, it := range r.items {
		it.first = r.end.seq + 1
		for _, d := range it.drafts {
			var value []byte
			value, r.end = r.end.next(d)
			r.values = append(r.values, value)
		}
	}
}

func lastAt(items []*item) (at sensors.Instant) {
	for _, it := range items {
		at = max(at, it.step)
		for _, d := range it.drafts {
			at = max(at, d.at)
		}
	}
	return at
}
