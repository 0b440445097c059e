package main

import (
	"context"

	"github.com/prometheus/client_golang/prometheus"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/judged"
	"sockline/alerting/lifecycle"
	"sockline/config"
	"sockline/sensors"
)

// judgements keeps how likely each size of change was, step by step, for those
// who ask later what other levels would have done. Owned by the loop.
type judgements struct {
	writer *judged.Writer
	looks  []judged.Look // reused
}

// judgedContext is what the kept steps are judged by.
func judgedContext(cfg *config.Config, e *engine.Engine) judged.Context {
	c := judged.Context{
		Config: cfg.Hash, Software: softwareText(), Paths: lifecycle.NamesOf(cfg.Airfield.Paths),
		Thresholds: judged.Thresholds(levels(cfg)),
	}
	for _, s := range cfg.Stations {
		c.Stations = append(c.Stations, s.ID)
	}
	for i := range cfg.Airfield.Paths {
		_, owner := e.Stretch(i)
		c.Owners = append(c.Owners, owner)
	}
	return c
}

// keep takes what the step has just found. It never waits.
func (j *judgements) keep(t sensors.Instant, e *engine.Engine, res *engine.Result) {
	if j == nil {
		return
	}
	j.looks = j.looks[:0]
	for i := range res.Assessments {
		s, _ := e.Stretch(i)
		j.looks = append(j.looks, judged.Look{Stretch: s, Without: e.Without(i), Found: &res.Assessments[i]})
	}
	j.writer.Take(t, j.looks)
}

// follow takes up a configuration that is in force from the next step on.
func (j *judgements) follow(cfg *config.Config, e *engine.Engine) {
	if j != nil {
		j.writer.Follow(judgedContext(cfg, e))
	}
}

// keepJudgements begins to keep what each step finds. It is stopped after the
// evaluation.
func (d *daemon) keepJudgements() {
	w := judged.NewWriter(d.current().History.Directory, judgedContext(d.current(), d.loop.engine), func(err error) {
		d.log.Error().Str("component", "judged").Err(err).Msg("a question after other levels will have to go through the readings of that time; check the disk of the history")
	})
	d.loop.judged = &judgements{writer: w}
	measureJudgements(d.metrics.registry, w.State)
	d.teardown.add("keeping what was judged", func(ctx context.Context) error { return w.Close(ctx) })
}

// measureJudgements shows how the keeping goes.
func measureJudgements(registry *prometheus.Registry, state func() judged.State) {
	counter := func(name, help string, value func(judged.State) uint64) {
		registry.MustRegister(prometheus.NewCounterFunc(prometheus.CounterOpts{Name: "sockline_" + name, Help: help},
			func() float64 { return float64(value(state())) }))
	}
	counter("judged_bytes_total", "Bytes of judgements on disk.", func(s judged.State) uint64 { return s.Bytes })
	counter("judged_lost_blocks_total", "Blocks of ten minutes of judgements that could not be kept.", func(s judged.State) uint64 { return s.Lost })
}

// pruneJudgements deletes judgements that are older than the readings that are
// kept: what they are held against would be missing.
func (d *daemon) pruneJudgements(now sensors.Instant, holds history.Holds) {
	h := d.current().History
	gone, err := judged.Prune(h.Directory, now.Add(-h.Keep), holds.CoverDay)
	if err != nil {
		d.log.Error().Err(err).Msg("old judgements are not all deleted")
	}
	for _, name := range gone {
		d.log.Info().Str("file", name).Msg("judgements older than the time of keeping are deleted")
	}
}
