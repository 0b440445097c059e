package engine

import (
	"bytes"
	"reflect"
	"slices"

	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// Reload puts the settings of next, an engine that has seen nothing, in force
// from the step after the last one on; next must not be used afterwards.
//
// Stations that are the same instrument at the same place keep their state,
// whatever their index is now; changed and new ones start cold. Readings that
// wait for a step go on waiting, but those of stations that are gone or
// changed are dropped and counted: they were decoded by what held before. Open
// alerts keep their id and are judged by the new levels from the next step on;
// the transitions are the closings of those whose path is gone.
//
// The same steps with the same reload between them give the same results: it
// is an input like any reading.
func (e *Engine) Reload(next *Engine) []lifecycle.Transition {
	now, kept := e.correspondence(next)
	applied := e.clocks.Table()
	next.counts.Unknown, next.counts.Withdrawn = e.counts.Unknown, e.counts.Withdrawn
	as := slices.Repeat([]int{-1}, len(next.settings.Stations)) // which mast of e each is still
	for j, i := range now {
		if i < 0 {
			continue
		}
		next.counts.takeOver(i, &e.counts, j)
		if kept[j] {
			as[i] = j
			next.takeOver(i, e, j)
		}
	}
	next.clocks.TakeShared(e.clocks)
	next.siting.TakeOver(e.siting)
	next.loaded, next.tables, next.tablesOut = e.loaded, e.tables, e.tablesOut
	if !bytes.Equal(next.clocks.Table(), applied) {
		next.keep(e.last, clockTable, next.clocks.Table())
	}
	next.field = next.field.Follow(e.field, as)
	next.fronts = next.fronts.Follow(e.fronts, as)
	next.outflows.TakeOver(e.outflows)
	next.late = next.follow(e.late, now)
	for _, r := range e.pending {
		if i := now[r.Station]; i >= 0 && kept[r.Station] {
			r.Station = i
			next.pending = append(next.pending, r)
		} else {
			next.counts.Withdrawn++
		}
	}
	closed := e.machine.Rebase(next.machine.Settings(), e.last, nil)
	next.machine, next.last = e.machine, e.last
	*e = *next
	return closed
}

// correspondence is, for each station of e, its index in next, -1 if it is
// gone, and whether it is the same mast still.
func (e *Engine) correspondence(next *Engine) (now []int, kept []bool) {
	index := make(map[string]int, len(next.settings.Stations))
	for i := range next.settings.Stations {
		index[next.settings.Stations[i].ID] = i
	}
	now, kept = make([]int, len(e.settings.Stations)), make([]bool, len(e.settings.Stations))
	for j := range e.settings.Stations {
		i, ok := index[e.settings.Stations[j].ID]
		if now[j] = i; !ok {
			now[j] = -1
			continue
		}
		kept[j] = SameMast(e.settings.Stations[j], next.settings.Stations[i])
	}
	return now, kept
}

// SameMast reports whether what one station has sent can go on as what the
// other sends. Its book, its maintenance, the time after which it is stale and
// whether its clock is corrected change nothing of what it has measured.
func SameMast(a, b sensors.Station) bool {
	for _, s := range []*sensors.Station{&a, &b} {
		s.Book, s.Maintenance, s.StaleAfter, s.CorrectClock = sensors.Book{}, nil, 0, false
	}
	return reflect.DeepEqual(a, b)
}

// takeOver goes on with the state of station j of another engine as that of
// station i.
func (e *Engine) takeOver(i int, from *Engine, j int) {
	e.recorder.TakeOver(i, from.recorder, j)
	e.checkers[i] = from.checkers[j]
	e.clocks.TakeOver(i, from.clocks, j)
	e.watch.TakeOver(i, from.watch, j)
	e.allowances[i] = from.allowances[j]
	// Half a measurement may wait in it. The ids to beware of are the new ones.
	e.decoders[i] = from.decoders[j]
	e.decoders[i].Renumber(i)
	ids := make([]string, len(e.settings.Stations))
	for k := range e.settings.Stations {
		ids[k] = e.settings.Stations[k].ID
	}
	e.decoders[i].Beware(ids)
}

// follow gives what was refused since the last step the indices of now, and
// counts what has no station any more.
func (e *Engine) follow(refused []Refused, now []int) (out []Refused) {
	for _, r := range refused {
		if i := now[r.Reading.Station]; i >= 0 {
			r.Reading.Station = i
			out = append(out, r)
		} else {
			e.counts.Withdrawn++
		}
	}
	return out
}

// takeOver goes on counting for station i where others left off for theirs, j.
func (c *Counts) takeOver(i int, from *Counts, j int) {
	c.Messages[i], c.Accepted[i], c.Suspect[i], c.Copies[i] = from.Messages[j], from.Accepted[j], from.Suspect[j], from.Copies[j]
	c.Decode[i], c.Quality[i], c.LastWhy[i] = from.Decode[j], from.Quality[j], from.LastWhy[j]
}
