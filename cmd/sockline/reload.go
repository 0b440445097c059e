package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/signal"
	"syscall"
	"time"

	"sockline/alerting"
	"sockline/alerting/hazard"
	"sockline/alerting/history"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
)

// change is another configuration on its way into the loop. All that takes
// time or may fail has been done by then.
type change struct {
	next  *loop                // made of it, and never run
	taken chan sensors.Instant // gets the first step under it; has room for that
}

// put takes a change: between two steps, and so that nothing of it can fail.
// The configuration goes into the journal with the first step under it.
func (l *loop) put(c change) {
	before := l.cfg
	c.next.reporter.remember(l.reporter)
	l.held = append(l.held, l.engine.Reload(c.next.engine)...)
	l.cfg, l.words, l.ids, l.reporter = c.next.cfg, c.next.words, c.next.ids, c.next.reporter
	first := l.engine.LastStep() + sensors.Second
	l.entries = append(l.entries, history.Entry{Kind: history.KindConfiguration, At: first, Payload: l.cfg.Source})
	l.metrics.follow(l.cfg)
	l.judged.follow(l.cfg, l.engine)
	l.changed(before, l.cfg)
	c.taken <- first
}

// open is the way in for changes: closed until a step has been closed, so that
// there is a boundary to put one at.
func (l *loop) open() <-chan change {
	if l.engine.LastStep() == 0 {
		return nil
	}
	return l.changes
}

// reload puts the configuration at path in force, or refuses it whole: what is
// in force then stays. It gives the first step that is judged by it, 0 if the
// text has not changed.
func (d *daemon) reload(ctx context.Context, path string) (sensors.Instant, error) {
	next, err := config.Load(path)
	if err != nil {
		return 0, err
	}
	if problems := d.current().Reloadable(next); len(problems) > 0 {
		return 0, problems
	}
	if next.Hash == d.current().Hash {
		return 0, nil
	}
	made, err := newLoop(next, d.opts.exercise, d.log)
	if err != nil {
		return 0, err
	}
	c := change{next: made, taken: make(chan sensors.Instant, 1)}
	select {
	case d.loop.changes <- c:
	case <-ctx.Done():
		return 0, errors.New("the program stops")
	}
	select {
	case first := <-c.taken:
		return first, nil
	case <-ctx.Done():
		return 0, errors.New("the program stops")
	}
}

// follow lets everything around the loop follow a change. It is called by the
// loop, between two steps, and waits for nothing.
func (d *daemon) follow(before, now *config.Config) {
	d.cfg.Store(now)
	d.inForce.Store(int64(d.loop.engine.LastStep() + sensors.Second))
	d.archive.retain(now.History.Keep)
	d.tell.follow(now)
	stays := make(map[string]bool)
	for _, p := range now.Airfield.Paths {
		stays[p.Runway()+" "+p.Operation()] = true
	}
	at := d.loop.engine.LastStep()
	for i, p := range before.Airfield.Paths {
		if !stays[p.Runway()+" "+p.Operation()] {
			v := wording.PathView{
				Path: p, State: alerting.NotObserved, Exercise: d.opts.exercise,
				Assessment: hazard.Assessment{Path: i, Reason: "this path is not configured any more"},
				At:         at, ValidUntil: at.Add(validFor),
			}
			d.output.sink.WithdrawPath(p.Runway(), p.Operation(), v.JSON())
		}
	}
	for _, s := range now.Stations {
		stays["station "+s.ID] = true
	}
	for _, s := range before.Stations {
		if !stays["station "+s.ID] {
			d.output.sink.WithdrawStation(s.ID)
		}
	}
	if s := d.input.Load(); s != nil {
		if err := s.SetTopics(d.topics()); err != nil { // a configuration has stations
			d.log.Error().Err(err).Msg("the topics of the new configuration are not subscribed")
		}
	}
}

// topics are those that the daemon subscribes to.
func (d *daemon) topics() []string {
	topics := topicsOf(d.current().Stations)
	if d.opts.control != "" {
		topics = append(topics, d.opts.control)
	}
	return topics
}

// retain sets how long readings are kept.
func (a *archive) retain(keep time.Duration) {
	a.mu.Lock()
	defer a.mu.Unlock()
	a.opts.Keep = keep
	if a.store != nil {
		a.store.Retain(keep)
	}
}

// recordLate tells a history that could not be opened at the start what is in
// force, from the next step on.
func (d *daemon) recordLate() {
	d.openHatch()
	if v := d.board.view.Load(); v != nil {
		d.archive.record(history.Entry{Kind: history.KindConfiguration, At: v.At + sensors.Second, Payload: d.current().Source})
	}
}

// reloadOnHangup reads the configuration again at each SIGHUP, which by default
// would end the program, until it is stopped. What comes of it is told in the
// log, to the service manager and, where a file was refused, on the page.
func (d *daemon) reloadOnHangup(path string, hups <-chan os.Signal) (stop func()) {
	ctx, cancel := context.WithCancel(context.Background())
	done := make(chan struct{})
	go func() {
		defer close(done)
		for {
			select {
			case <-hups:
				d.answerHangup(ctx, path)
			case <-ctx.Done():
				return
			}
		}
	}()
	return func() {
		cancel()
		<-done
	}
}

func (d *daemon) answerHangup(ctx context.Context, path string) {
	first, err := d.reload(ctx, path)
	switch {
	case ctx.Err() != nil:
	case err != nil:
		d.log.Error().Err(err).Str("configuration", path).Msg("SIGHUP: the configuration is refused, the one before stays in force")
		said := fmt.Sprintf("a changed configuration was refused at %s, the one before stays in force: %v", eventNow(), firstProblem(err))
		d.refused.Store(&said)
		d.opts.notify.say("STATUS=" + said)
	case first == 0:
		d.refused.Store(nil)
		d.log.Info().Str("configuration", path).Msg("SIGHUP: the configuration has not changed")
		d.opts.notify.say("STATUS=observing " + d.current().Airfield.Name)
	default:
		d.refused.Store(nil)
		line := d.log.Info()
		if d.opts.capture != "" {
			line = d.log.Warn().Str("capture", "it holds no configurations: replay what comes before and after the change apart")
		}
		line.Str("configuration", path).Str("sha256", d.current().Hash).Stringer("from_step", first).Msg("SIGHUP: the configuration is in force")
		d.opts.notify.say("STATUS=observing " + d.current().Airfield.Name + ", by a configuration of " + first.String())
	}
}

// firstProblem is the first of many, for where there is one line.
func firstProblem(err error) error {
	var problems config.Problems
	if errors.As(err, &problems) && len(problems) > 1 {
		return fmt.Errorf("%w (and %d more, in the log)", problems[0], len(problems)-1)
	}
	return err
}

// hangups catches SIGHUP from now on, so that one that comes early does not
// end the program.
func hangups() (hups chan os.Signal, stop func()) {
	hups = make(chan os.Signal, 1)
	signal.Notify(hups, syscall.SIGHUP)
	return hups, func() { signal.Stop(hups) }
}
