package drift

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"

	"sockline/sensors"
)

// hourTable is what one UTC hour taught, as it is journalled: an hour takes
// some 50 bytes a mast, and an earlier hour is never written again.
type hourTable struct {
	HourMS int64              `json:"hour_ms"` // its end
	Masts  map[string]learned `json:"masts"`
}

type learned struct {
	Blocks   int     `json:"blocks"`
	Turned   float64 `json:"turned_deg"`
	LogRatio float64 `json:"log_ratio"`
}

// Table is what the UTC hour that ended at t taught, as JSON.
func (w *Watch) Table(t sensors.Instant) []byte {
	table := hourTable{HourMS: int64(t), Masts: map[string]learned{}}
	for i := range w.masts {
		for _, h := range w.masts[i].hours {
			if h.end == t {
				table.Masts[w.ids[i]] = learned{h.blocks, h.turned, h.logRatio}
			}
		}
	}
	b, err := json.Marshal(table)
	if err != nil { // finite numbers and ids always have a JSON form
		return nil
	}
	return b
}

// Load takes up the table of an hour. Masts that are not watched any more are
// left out. What is found follows from it with the next Turn.
func (w *Watch) Load(table []byte) error {
	var t hourTable
	if err := json.Unmarshal(table, &t); err != nil {
		return fmt.Errorf("read the table of a mast's hours: %w", err)
	}
	for id, l := range t.Masts {
		if l.Blocks < hourBlocks || l.Blocks > 6 || math.Abs(l.Turned) > 180 || math.Abs(l.LogRatio) > 10 {
			return fmt.Errorf("read the table of a mast's hours: %s: %+v cannot be what an hour taught", id, l)
		}
	}
	for i := range w.masts {
		if l, ok := t.Masts[w.ids[i]]; ok {
			w.masts[i].learn(hour{sensors.Instant(t.HourMS), l.Blocks, l.Turned, l.LogRatio})
		}
	}
	return nil
}

// Loaded works out what is found as of t, after the tables of the hours before
// it have been loaded.
func (w *Watch) Loaded(t sensors.Instant) {
	for i := range w.masts {
		m := &w.masts[i]
		m.hours = slices.DeleteFunc(m.hours, func(h hour) bool { return h.end > t })
		m.forget(t)
		m.finding = m.judge()
	}
}
