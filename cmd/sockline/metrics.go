package main

import (
	"math"
	"runtime"
	"slices"
	"time"

	"github.com/prometheus/client_golang/prometheus"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/alerting/publish"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/feed"
	"sockline/sensors/quality"
)

// metrics is everything that /metrics shows, on a registry of its own. Every
// label is from the configuration or from a fixed list, and all series exist
// from the start: a counter that appears with its first event hides it from
// whoever asks for the increase.
type metrics struct {
	registry *prometheus.Registry

	messages, readings, suspect, repeated, rejected *prometheus.CounterVec
	unknown, steps                                  prometheus.Counter
	duration                                        prometheus.Histogram
	lastStep                                        prometheus.Gauge
	live, observed, condition                       *prometheus.GaugeVec
	opened                                          *prometheus.CounterVec

	health   stationGauges
	stations []stationMetrics

	ids   []string
	paths [][2]string // runway, operation
	seen  []seenCounts
	known uint64 // messages on unknown topics already counted
}

// seenCounts is what has been counted of a station already.
type seenCounts struct {
	messages, readings, suspect, repeated uint64
	rejected                              map[string]uint64
}

// sources is what is asked only when somebody looks.
type sources struct {
	history func() history.Health
	input   func() feed.LinkState
	dropped func() (full, oversize uint64)
	output  func() publish.State
	open    func() int
	offset  func() time.Duration
}

// Decoding knows a dozen reasons. As labels they are put into three, so that
// twenty masts stay well below five hundred series; the log has the rest.
const (
	unreadable   = "unreadable"   // not what the format says
	inconsistent = "inconsistent" // units, parts or values that cannot be
	noValue      = "no-value"     // the instrument has nothing to say
)

// groupOf is the label of a reason of decoding.
func groupOf(r decode.Reason) string {
	switch r {
	case decode.TooLarge, decode.Malformed, decode.Checksum, decode.NotUnderstood:
		return unreadable
	case decode.NotValid, decode.NoValue:
		return noValue
	}
	return inconsistent
}

// refusals are the reasons of quality that keep a reading out.
func refusals() []quality.Reason {
	return []quality.Reason{quality.Retained, quality.Exercise, quality.Future, quality.Late,
		quality.Range, quality.Stuck, quality.StuckVane}
}

// rejections is how much of a station's was kept out.
func rejections(c *engine.Counts, station int) (n uint64) {
	for r, k := range c.Decode[station] {
		if groupOf(r) != noValue {
			n += k
		}
	}
	for _, r := range refusals() {
		n += c.Quality[station][r]
	}
	return n
}

func newMetrics(cfg *config.Config, from sources) *metrics {
	m := &metrics{registry: prometheus.NewRegistry()}
	station := []string{"station"}
	path := []string{"runway", "operation"}
	m.messages = m.counters("messages_total", "Messages received on the topic of a station.", station)
	m.readings = m.counters("readings_total", "Readings that were evaluated.", station)
	m.suspect = m.counters("suspect_readings_total", "Evaluated readings that look odd.", station)
	m.repeated = m.counters("repeated_readings_total", "Readings that were there already.", station)
	m.rejected = m.counters("rejected_readings_total", "Readings, or parts of payloads, that were kept out.", []string{"station", "reason"})
	m.health = newStationGauges(m)
	m.live = m.gauges("station_live", "Whether the station serves ground now (1) or not (0).", station)
	m.observed = m.gauges("path_observed_meters", "Length of the observed ground of a path.", path)
	m.opened = m.counters("alerts_opened_total", "Alerts that opened at, or rose to, a level.", []string{"runway", "operation", "kind", "level"})
	m.condition = m.gauges("condition", "1 for the condition that holds.", []string{"condition"})
	m.unknown = m.counter("unknown_topic_messages_total", "Messages on topics of no station.")
	m.steps = m.counter("steps_total", "Steps of one second that were evaluated.")
	m.lastStep = prometheus.NewGauge(opts("last_step_timestamp_seconds", "The last evaluated step."))
	m.duration = prometheus.NewHistogram(prometheus.HistogramOpts{
		Name: "sockline_step_duration_seconds", Help: "Time that the evaluation of a step took.",
		Buckets: []float64{0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1},
	})
	m.registry.MustRegister(m.lastStep, m.duration)
	m.follow(cfg)
	for _, c := range conditions() {
		m.condition.WithLabelValues(string(c))
	}
	m.sample(from)
	return m
}

// follow makes the series those of a configuration. What is not in it any more
// goes; what still is counts on.
func (m *metrics) follow(cfg *config.Config) {
	m.forget(cfg)
	seen := make(map[string]seenCounts, len(m.ids))
	for i, id := range m.ids {
		seen[id] = m.seen[i]
	}
	m.ids, m.seen, m.stations, m.paths = nil, nil, nil, nil
	for _, s := range cfg.Stations {
		before, ok := seen[s.ID]
		if !ok {
			before.rejected = make(map[string]uint64)
		}
		m.ids, m.seen = append(m.ids, s.ID), append(m.seen, before)
		for _, v := range []*prometheus.CounterVec{m.messages, m.readings, m.suspect, m.repeated} {
			v.WithLabelValues(s.ID)
		}
		m.live.WithLabelValues(s.ID)
		m.stations = append(m.stations, m.health.of(s.ID))
		for _, g := range []string{unreadable, inconsistent, noValue} {
			m.rejected.WithLabelValues(s.ID, g)
		}
		for _, r := range refusals() {
			m.rejected.WithLabelValues(s.ID, string(r))
		}
	}
	for _, p := range cfg.Airfield.Paths {
		m.paths = append(m.paths, [2]string{p.Runway(), p.Operation()})
		m.observed.WithLabelValues(p.Runway(), p.Operation())
		for _, k := range alerting.Kinds() {
			if !canOpen(cfg, k) {
				continue
			}
			for l := alerting.Noticeable; l <= k.Highest(); l++ {
				m.opened.WithLabelValues(p.Runway(), p.Operation(), string(k), l.String())
			}
		}
	}
}

// canOpen tells whether an alert of this kind can open at all: one that hangs on
// a limit that is not set, or on a column of air that is not there, cannot.
func canOpen(cfg *config.Config, k alerting.Kind) bool {
	switch k {
	case alerting.Crosswind:
		return cfg.Alerts.CrosswindLimit > 0
	case alerting.Tailwind:
		return cfg.Alerts.TailwindLimit > 0
	case alerting.VerticalShear:
		return len(cfg.Airfield.Columns()) > 0
	}
	return true
}

// forget deletes the series of stations and paths that a configuration does
// not have.
func (m *metrics) forget(cfg *config.Config) {
	for _, id := range m.ids {
		if !slices.ContainsFunc(cfg.Stations, func(s sensors.Station) bool { return s.ID == id }) {
			labels := prometheus.Labels{"station": id}
			for _, v := range []*prometheus.CounterVec{m.messages, m.readings, m.suspect, m.repeated, m.rejected} {
				v.DeletePartialMatch(labels)
			}
			m.live.DeletePartialMatch(labels)
			m.health.forget(labels)
		}
	}
	for _, path := range m.paths {
		if _, ok := cfg.Airfield.Path(path[0], path[1]); !ok {
			labels := prometheus.Labels{"runway": path[0], "operation": path[1]}
			m.observed.DeletePartialMatch(labels)
			m.opened.DeletePartialMatch(labels)
		}
	}
}

func freeShare(s history.Space) float64 {
	if s.Total == 0 {
		return math.NaN()
	}
	return float64(s.Free) / float64(s.Total)
}

// conditions are those that a living daemon can be in.
func conditions() []alerting.Condition {
	return []alerting.Condition{alerting.Observing, alerting.PartlyObserving, alerting.Blind}
}

// sample registers what is asked at each look.
func (m *metrics) sample(from sources) {
	gauge := func(name, help string, f func() float64) {
		m.registry.MustRegister(prometheus.NewGaugeFunc(opts(name, help), f))
	}
	count := func(name, help string, f func() float64) {
		m.registry.MustRegister(prometheus.NewCounterFunc(prometheus.CounterOpts(opts(name, help)), f))
	}
	h := from.history
	gauge("history_degraded", "Whether what is decided now may not be on disk.", func() float64 { return truth(h().Degraded) })
	count("history_commits_total", "Rounds of writing that succeeded.", func() float64 { return float64(h().Commits) })
	count("history_failed_commits_total", "Rounds of writing, or tries to open, that failed.", func() float64 { return float64(h().Failed) })
	count("history_readings_total", "Readings that are on disk.", func() float64 { return float64(h().Readings) })
	count("history_records_total", "Records of the journal that are on disk.", func() float64 { return float64(h().Records) })
	count("history_unrecorded_issues_total", "Issues of alerts told without being on disk.", func() float64 { return float64(h().Unrecorded) })
	count("history_dropped_steps_total", "Steps of readings given up because too many waited.", func() float64 { return float64(h().StepsDropped) })
	gauge("history_disk_free_ratio", "Share of the disk of the history that is free; NaN while it is not known.", func() float64 { return freeShare(h().Space) })
	gauge("history_readings_stopped", "Whether readings are given up because the disk is nearly full.", func() float64 { return truth(h().ReadingsStopped) })
	gauge("history_reserve_bytes", "Disk space kept for events when the disk is full.", func() float64 { return float64(h().Reserve) })
	gauge("history_deletion_stopped", "Whether old readings are not deleted because a hold may be unknown.", func() float64 { return truth(h().KeptBack != "") })
	gauge("history_waiting_steps", "Steps in memory that are not on disk yet.", func() float64 { return float64(h().WaitingSteps) })

	gauge("broker_connected", "Whether readings can come in.", func() float64 { return truth(from.input().Connected) })
	gauge("broker_subscribed", "Whether every topic of the stations is granted.", func() float64 { return truth(from.input().Subscribed) })
	count("queue_dropped_messages_total", "Messages lost because the queue was full.", func() float64 { full, _ := from.dropped(); return float64(full) })
	count("oversize_messages_total", "Messages refused for their size.", func() float64 { _, big := from.dropped(); return float64(big) })

	out := from.output
	gauge("publishing", "Whether this instance publishes under its prefix.", func() float64 { return truth(out().Mode == publish.Sending) })
	gauge("issues_waiting", "Issues of alerts that the broker has not taken yet.", func() float64 { return float64(out().Waiting) })
	count("issues_published_total", "Issues of alerts that the broker has taken.", func() float64 { return float64(out().Issues) })
	count("issues_delayed_total", "Of these, the ones marked as delayed.", func() float64 { return float64(out().Delayed) })
	count("issues_lost_total", "Issues given up because too many waited.", func() float64 { return float64(out().Lost) })
	count("publish_failures_total", "Sendings that the broker did not take.", func() float64 { return float64(out().Failed) })

	gauge("alerts_open", "Alerts that are open.", func() float64 { return float64(from.open()) })
	gauge("clock_offset_seconds", "How far the host clock is ahead of the arrival clock.", func() float64 { return from.offset().Seconds() })

	build := prometheus.NewGaugeVec(opts("build_info", "1, with the build as labels."), []string{"version", "goversion"})
	build.WithLabelValues(version, runtime.Version()).Set(1)
	m.registry.MustRegister(build)
}

func truth(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

func opts(name, help string) prometheus.GaugeOpts {
	return prometheus.GaugeOpts{Name: "sockline_" + name, Help: help}
}

func (m *metrics) counter(name, help string) prometheus.Counter {
	c := prometheus.NewCounter(prometheus.CounterOpts(opts(name, help)))
	m.registry.MustRegister(c)
	return c
}

func (m *metrics) counters(name, help string, labels []string) *prometheus.CounterVec {
	v := prometheus.NewCounterVec(prometheus.CounterOpts(opts(name, help)), labels)
	m.registry.MustRegister(v)
	return v
}

func (m *metrics) gauges(name, help string, labels []string) *prometheus.GaugeVec {
	v := prometheus.NewGaugeVec(opts(name, help), labels)
	m.registry.MustRegister(v)
	return v
}

// step counts what a step brought. Called by the loop only.
func (m *metrics) step(rep *report, c *engine.Counts, transitions []lifecycle.Transition, took time.Duration) {
	m.steps.Inc()
	m.duration.Observe(took.Seconds())
	m.lastStep.Set(float64(rep.At) / 1000)
	grow(m.unknown, &m.known, c.Unknown)
	for i, id := range m.ids {
		s := &m.seen[i]
		grow(m.messages.WithLabelValues(id), &s.messages, c.Messages[i])
		grow(m.readings.WithLabelValues(id), &s.readings, c.Accepted[i])
		grow(m.suspect.WithLabelValues(id), &s.suspect, c.Suspect[i])
		grow(m.repeated.WithLabelValues(id), &s.repeated, c.Copies[i])
		m.rejections(id, s, c, i)
		m.live.WithLabelValues(id).Set(truth(rep.Stations[i].Live))
		m.stations[i].set(&rep.Stations[i])
	}
	for i, p := range m.paths {
		length := 0.0
		for _, o := range rep.Paths[i].Assessment.Observed {
			length += o.Length()
		}
		m.observed.WithLabelValues(p[0], p[1]).Set(length)
	}
	for _, c := range conditions() {
		m.condition.WithLabelValues(string(c)).Set(truth(c == rep.Condition))
	}
	for _, t := range transitions {
		if a := &t.Alert; a.State == lifecycle.Open && a.Level > t.From {
			m.opened.WithLabelValues(a.Runway, a.Operation, string(a.Kind), a.Level.String()).Inc()
		}
	}
}

func (m *metrics) rejections(id string, s *seenCounts, c *engine.Counts, station int) {
	groups := map[string]uint64{}
	for r, n := range c.Decode[station] {
		groups[groupOf(r)] += n
	}
	for _, r := range refusals() {
		groups[string(r)] += c.Quality[station][r]
	}
	for g, n := range groups {
		before := s.rejected[g]
		grow(m.rejected.WithLabelValues(id, g), &before, n)
		s.rejected[g] = before
	}
}

// grow brings a counter up to a total that is kept elsewhere.
func grow(c prometheus.Counter, seen *uint64, total uint64) {
	if total > *seen {
		c.Add(float64(total - *seen))
		*seen = total
	}
}
