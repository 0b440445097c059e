package main

import (
	"math"

	"github.com/prometheus/client_golang/prometheus"
)

// stationGauges are the gauges of the stations' own state. What is not known
// is NaN, so that it is never taken for good.
type stationGauges struct {
	age, ahead, turned, ratio, named, maintained *prometheus.GaugeVec
}

// stationMetrics are those of one station.
type stationMetrics struct {
	age, ahead, turned, ratio, named, maintained prometheus.Gauge
}

func newStationGauges(m *metrics) stationGauges {
	label := []string{"station"}
	return stationGauges{
		age:        m.gauges("station_reading_age_seconds", "Age of the newest reading of the station.", label),
		ahead:      m.gauges("station_clock_ahead_seconds", "How far the clock of the station is ahead, less the fastest way of its messages.", label),
		turned:     m.gauges("station_turned_degrees", "How far its directions are turned clockwise against its neighbours.", label),
		ratio:      m.gauges("station_speed_ratio", "Its speed over that of its neighbours.", label),
		named:      m.gauges("station_named", "Whether a technician should look at the station.", label),
		maintained: m.gauges("station_under_maintenance", "Whether somebody works on the station.", label),
	}
}

func (g stationGauges) of(id string) stationMetrics {
	s := stationMetrics{
		g.age.WithLabelValues(id), g.ahead.WithLabelValues(id), g.turned.WithLabelValues(id),
		g.ratio.WithLabelValues(id), g.named.WithLabelValues(id), g.maintained.WithLabelValues(id),
	}
	for _, unknown := range []prometheus.Gauge{s.age, s.ahead, s.turned, s.ratio} {
		unknown.Set(math.NaN())
	}
	return s
}

// forget deletes the series with these labels.
func (g stationGauges) forget(labels prometheus.Labels) {
	for _, v := range []*prometheus.GaugeVec{g.age, g.ahead, g.turned, g.ratio, g.named, g.maintained} {
		v.DeletePartialMatch(labels)
	}
}

func (s *stationMetrics) set(h *stationHealth) {
	s.age.Set(known(h.AgeS))
	s.ahead.Set(known(h.Clock.AheadS))
	turned, ratio := math.NaN(), math.NaN()
	if n := h.Neighbours; n.TurnedDeg != nil {
		turned, ratio = n.TurnedDeg[1], n.SpeedRatio[1]
	}
	s.turned.Set(turned)
	s.ratio.Set(ratio)
	s.named.Set(truth(h.Clock.Off || len(h.Neighbours.Named) > 0 || h.Book.Overdue))
	s.maintained.Set(truth(h.Maintenance != nil))
}

func known(v *float64) float64 {
	if v == nil {
		return math.NaN()
	}
	return *v
}
