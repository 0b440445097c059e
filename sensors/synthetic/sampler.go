package synthetic

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// StationSpec is a mast as the generator needs it.
type StationSpec struct {
	Station   sensors.Station
	X, Y      float64 // east and north of the reference point, m
	Variation float64 // magnetic variation there, degrees east; used where Station.North is magnetic
}

// Sampler gives the readings of a scene second by second, without payloads:
// the fast way for studies. It is not safe for concurrent use.
type Sampler struct {
	scene    *Scene
	weather  *Weather
	stations []StationSpec
	masts    []*instrument
	second   int
}

// NewSampler makes the scene's masts ready. An interval must be a whole number
// of milliseconds of at least 100; 0 means 1 s.
func (s *Scene) NewSampler(stations []StationSpec) (*Sampler, error) {
	sampler := &Sampler{scene: s, weather: s.Weather(), stations: slices.Clone(stations)}
	for i := range sampler.stations {
		station := &sampler.stations[i].Station
		if station.Interval == 0 {
			station.Interval = time.Second
		}
		if station.Interval < 100*time.Millisecond || station.Interval%time.Millisecond != 0 {
			return nil, fmt.Errorf("synthetic readings of station %s: its interval of %v is not a whole number of milliseconds from 100 ms on",
				station.ID, station.Interval)
		}
		sampler.masts = append(sampler.masts, newInstrument(s, station.ID))
	}
	for _, fault := range s.Faults {
		known := slices.ContainsFunc(stations, func(spec StationSpec) bool { return spec.Station.ID == fault.Mast })
		if !known {
			return nil, fmt.Errorf("scene %s: there is no mast %q on this airfield to be %s", s.Name, fault.Mast, fault.Kind)
		}
	}
	return sampler, nil
}

// Weather is the truth behind the readings.
func (s *Sampler) Weather() *Weather { return s.weather }

// Next appends the readings measured in the next second, (T-1 s, T], in order
// of time and station, and says whether the scene still ran. T is 1 s after
// the start in the first call. What is lost on its way is not among them. A
// reading of a format without a time of its own has its arrival as its time,
// and where a station counts from magnetic north or is off by a known offset,
// the rounding to a degree is that of the instrument's own scale.
func (s *Sampler) Next(dst []sensors.Reading) ([]sensors.Reading, bool) {
	if s.second >= s.scene.Seconds() {
		return dst, false
	}
	s.second++
	begin := len(dst)
	for i := range s.stations {
		interval := s.stations[i].Station.Interval.Milliseconds()
		first := int64(s.second-1)*1000/interval + 1
		for k := first; k*interval <= int64(s.second)*1000; k++ {
			if reading, ok := s.read(i, k*interval); ok {
				dst = append(dst, reading)
			}
		}
	}
	slices.SortStableFunc(dst[begin:], func(a, b sensors.Reading) int {
		return cmp.Or(cmp.Compare(a.Time, b.Time), cmp.Compare(a.Station, b.Station))
	})
	return dst, true
}

// Second is how many seconds have been given.
func (s *Sampler) Second() int { return s.second }

// read is the reading of station i at ms milliseconds after the start.
func (s *Sampler) read(i int, ms int64) (sensors.Reading, bool) {
	spec, mast := &s.stations[i], s.masts[i]
	t := float64(ms) / 1000
	z := spec.Station.Height
	u, v := s.weather.Wind(spec.X, spec.Y, z, t)
	du, dv := mast.air.next(s.scene.Turbulence, z, spec.Station.Interval.Seconds(), u, v)
	m := mast.measure(t, u+du, v+dv)
	arrival := t + m.delay
	if m.lost || slices.ContainsFunc(s.scene.Outages, func(o Span) bool { return o.Holds(arrival) }) {
		return sensors.Reading{}, false
	}
	north := spec.north()
	indicated := math.Round((m.from-north)/directionResolution) * directionResolution
	reading := sensors.Reading{
		Station:  i,
		Time:     s.scene.Start + sensors.Instant(ms) + sensors.Instant(math.Round(m.clock*1000)),
		Arrival:  s.scene.Start + sensors.Instant(math.Round(arrival*1000)),
		Speed:    m.speed,
		From:     quantity.NormalizeDegrees(quantity.NormalizeDegrees(indicated) + north),
		Exercise: true,
	}
	if !spec.sendsTime() {
		reading.Time = reading.Arrival
	}
	return reading, true
}

// north is the true bearing of the zero of the station's directions, degrees.
func (spec *StationSpec) north() float64 {
	north := spec.Station.NorthOffset
	if spec.Station.North == sensors.NorthMagnetic {
		north += spec.Variation
	}
	return north
}

// sendsTime says whether the station's payloads carry a time.
func (spec *StationSpec) sendsTime() bool {
	switch spec.Station.Format {
	case sensors.FormatNMEA0183:
		return false
	case sensors.FormatJSON:
		return spec.Station.Fields != nil && spec.Station.Fields.Time != ""
	}
	return true
}
