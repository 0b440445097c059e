package bundle

import (
	"slices"

	"sockline/alerting"
	"sockline/alerting/history/export"
	"sockline/sensors"
)

// silence is the shortest hole in the readings of a mast that is told: what
// the age of a reading may be before its mast counts as silent by default.
const silence = 3 * sensors.Second

// sighting is what came from one mast, in the order of its readings.
type sighting struct {
	Station    string            `json:"station"`
	Readings   uint64            `json:"readings"` // that were evaluated
	First      string            `json:"first,omitempty"`
	Last       string            `json:"last,omitempty"`
	TurnedAway map[string]uint64 `json:"turned_away"` // by reason
	Silent     []span            `json:"silent"`      // for more than 3 s
	Exercise   bool              `json:"exercise"`

	last sensors.Instant
}

type span struct {
	From string `json:"from"`
	To   string `json:"to"`
}

// sightings collects what came from each mast while it passes rows on.
type sightings struct {
	sink     export.Sink
	stations map[string]*sighting
}

func newSightings() *sightings { return &sightings{stations: map[string]*sighting{}} }

func (s *sightings) watch(sink export.Sink) export.Sink { s.sink = sink; return s }

// Row counts a row and passes it on.
func (s *sightings) Row(r export.Row) error {
	st := s.stations[r.Station]
	if st == nil {
		st = &sighting{Station: r.Station, TurnedAway: map[string]uint64{}, Silent: []span{}}
		s.stations[r.Station] = st
	}
	st.Exercise = st.Exercise || r.Reading.Exercise
	if r.Because != "" {
		st.TurnedAway[r.Because]++
		return s.sink.Row(r)
	}
	if st.Readings++; st.First == "" {
		st.First = r.Reading.Time.String()
	} else if r.Reading.Time-st.last > silence {
		st.Silent = append(st.Silent, span{st.last.String(), r.Reading.Time.String()})
	}
	st.last = max(st.last, r.Reading.Time)
	st.Last = st.last.String()
	return s.sink.Row(r)
}

// Close ends the rows.
func (s *sightings) Close() error { return s.sink.Close() }

// sensorsPart is sensors.json.
type sensorsPart struct {
	From     string      `json:"from"`
	To       string      `json:"to"`
	Stations []*sighting `json:"stations"` // those that were heard, by id
	Notice   string      `json:"notice"`
}

func (s *sightings) result(from, to sensors.Instant) sensorsPart {
	p := sensorsPart{From: from.String(), To: to.String(), Stations: []*sighting{}, Notice: alerting.Notice}
	for _, st := range s.stations {
		p.Stations = append(p.Stations, st)
	}
	slices.SortFunc(p.Stations, func(a, b *sighting) int {
		if a.Station < b.Station {
			return -1
		}
		return 1
	})
	return p
}
