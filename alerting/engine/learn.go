package engine

import (
	"encoding/json"
	"fmt"
	"time"

	"sockline/alerting/drift"
	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quality"
)

// TablesBack is how far back a start reads learnt tables: nothing in them
// counts longer.
const TablesBack = 72 * time.Hour

// The names of the learnt tables.
const (
	clockTable     = "clocks"
	neighbourTable = "neighbours"
	sitingTable    = "siting"
)

// Table is something learnt, for the journal. Clocks change at UTC minutes,
// comparisons with the neighbours at UTC hours.
type Table struct {
	At      sensors.Instant
	Payload []byte // JSON
}

// namedTable is the form of a payload.
type namedTable struct {
	Table string          `json:"table"`
	Data  json.RawMessage `json:"data"`
}

// learner is what the engine learns of the stations in the long run: their
// clocks, and how they compare with their neighbours.
type learner struct {
	clocks *quality.Clocks
	watch  *drift.Watch
	siting *drift.Siting
	// sitingDay is the UTC day whose siting the recorder removes; -1: none yet.
	sitingDay sensors.Instant
	means     []drift.Mean    // reused
	loaded    sensors.Instant // what was learnt up to here is in the journal
	tables    []Table         // since the last step

	tablesOut []Table // given out with the last step
}

func newLearner(stations []sensors.Station, ids []string, aloft []bool) learner {
	return learner{
		clocks: quality.NewClocks(stations), watch: drift.New(ids), means: make([]drift.Mean, len(ids)),
		siting: drift.NewSiting(ids, aloft), sitingDay: -1,
	}
}

// removeSiting has the recorder remove what the sites of the masts do to their
// winds: what was learnt up to the begin of the UTC day of t.
func (l *learner) removeSiting(t sensors.Instant, r *averages.Recorder) {
	const aDay = sensors.Instant(24 * 3600 * 1000)
	// The step of midnight still belongs to the day before.
	day := (t - 1) - (t-1)%aDay
	if day == l.sitingDay {
		return
	}
	l.sitingDay = day
	for i, s := range l.siting.InForce(day) {
		r.SetSiting(i, s)
	}
}

// learn does what is due at step t, after its readings have been taken in.
func (l *learner) learn(t sensors.Instant, r *averages.Recorder) {
	if t%(60*sensors.Second) != 0 {
		return
	}
	if l.clocks.Turn(t) {
		l.keep(t, clockTable, l.clocks.Table())
	}
	if t.Time().Truncate(drift.Block).Equal(t.Time()) {
		for i := range l.means {
			m := &l.means[i]
			m.Vector, m.Speed, m.Present = r.TenMinutes(i, t)
		}
		l.watch.Take(l.means)
		l.siting.Take(l.means)
	}
	if t%(3600*sensors.Second) == 0 && l.watch.Turn(t) {
		l.keep(t, neighbourTable, l.watch.Table(t))
	}
	if t%(3600*sensors.Second) == 0 {
		if learnt := l.siting.Turn(t); learnt != nil {
			l.keep(t, sitingTable, learnt)
		}
	}
}

func (l *learner) keep(t sensors.Instant, name string, data []byte) {
	if t <= l.loaded {
		return // a start that reads back learns it a second time
	}
	payload, err := json.Marshal(namedTable{name, data})
	if err != nil { // a name and what is JSON already
		return
	}
	l.tables = append(l.tables, Table{t, payload})
}

// LoadTable takes up a table of an earlier run, before the readings of the two
// hours before the start; tables come in their order. The error says what is
// wrong with it; it is then left out, and is learnt anew in time.
func (e *Engine) LoadTable(t Table) error {
	var named namedTable
	if err := json.Unmarshal(t.Payload, &named); err != nil {
		return fmt.Errorf("read the table of %s: %w", t.At, err)
	}
	l := &e.learner
	var err error
	switch named.Table {
	case sitingTable:
		l.sitingDay = -1
		err = l.siting.Load(named.Data)
	case clockTable:
		err = l.clocks.Load(named.Data)
	case neighbourTable:
		if err = l.watch.Load(named.Data); err == nil {
			l.watch.Loaded(t.At)
		}
	default:
		err = fmt.Errorf("%q is not known here", named.Table)
	}
	if err != nil {
		return fmt.Errorf("take up the table of %s: %w", t.At, err)
	}
	l.loaded = max(l.loaded, t.At)
	return nil
}

// LoadSiting takes up what the journal holds of the sites of the masts, also of
// days to come, for a replay: it says what was removed on each day. Other
// tables are left alone.
func (e *Engine) LoadSiting(t Table) error {
	var named namedTable
	if err := json.Unmarshal(t.Payload, &named); err != nil || named.Table != sitingTable {
		return nil // it is read, and complained of, by those who need it
	}
	e.sitingDay = -1
	if err := e.siting.Load(named.Data); err != nil {
		return fmt.Errorf("take up the table of %s: %w", t.At, err)
	}
	return nil
}

// Clock is what is known of the clock of a station.
func (e *Engine) Clock(station int) quality.Skew { return e.clocks.Skew(station) }

// SharedClock is how far the clocks of the stations agree to be ahead of this
// host's.
func (e *Engine) SharedClock() time.Duration { return e.clocks.Shared() }

// Neighbours is how a station compares with its neighbours.
func (e *Engine) Neighbours(station int) drift.Finding { return e.watch.Finding(station) }
