package main

import (
	"bufio"
	"context"
	"errors"
	"flag"
	"fmt"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
)

func replayCommand() command {
	return command{
		name: "replay", summary: "run the engine over recorded readings; alert objects as JSON Lines on standard output",
		setup: func(fs *flag.FlagSet) action {
			cfg := configFlag(fs)
			capture := fs.String("capture", "", "capture `FILE` to replay (.gz and .zst are read compressed)")
			directory := fs.String("history", "", "history `DIRECTORY` to replay")
			from := instantFlag(fs, "from", "first step to print, a `TIME`; what led up to it is run through silently")
			to := instantFlag(fs, "to", "`TIME` before which the last step to print lies")
			flags := defineCompareFlags(fs)
			return func(ctx context.Context, p *program, _ []string) error {
				if (*capture == "") == (*directory == "") {
					return usagef("give either --capture FILE or --history DIRECTORY")
				}
				if err := spanError(*from, *to); err != nil {
					return err
				}
				switch {
				case *flags.on && *directory == "":
					return usagef("--compare needs --history DIRECTORY: a capture holds no alerts to compare with")
				case !*flags.on && (*flags.analyse || flags.output.json()):
					return usagef("--analyse and --output json belong to --compare")
				}
				c, err := replayedConfig(*cfg, *directory)
				if err != nil {
					return err
				}
				if *flags.on {
					return compare(ctx, p, c, *directory, *from, *to, flags)
				}
				r, err := newReplayer(ctx, p, c, *from, *to)
				if err != nil {
					return err
				}
				if *capture != "" {
					err = r.capture(*capture)
				} else {
					err = r.history(*directory)
				}
				return r.finish(err)
			}
		},
	}
}

// replayedConfig is the configuration at path; a history has its own, if none
// is given.
func replayedConfig(path, directory string) (*config.Config, error) {
	if path == "" && directory != "" {
		return lastRecorded(directory)
	}
	return loadConfig(path)
}

// silentRun is how much silence is stepped through before the rest of it is
// left out: what the engine remembers, and an hour on top.
const silentRun = engine.Memory + time.Hour

// errReplayed ends a replay that has come to --to.
var errReplayed = errors.New("everything asked for is replayed")

// replayer runs one engine over recorded readings and prints what it issues.
type replayer struct {
	ctx      context.Context
	p        *program
	cfg      *config.Config
	engine   *engine.Engine
	words    wording.Context
	out      *bufio.Writer
	from, to sensors.Instant // steps to print: from <= T < to; 0 is no limit
	bar      *progress
	share    func() float64 // how far the source has been read

	// exercise marks what comes out. Only a comparison with what was recorded
	// does without, because it must give the same bytes.
	exercise bool
	past     *past                        // what the journal tells; read when it is needed unless it is given
	cold     bool                         // no alert is taken over: they may have been others by these rules
	issued   func(wording.Notice) error   // takes each issue
	over     func(t sensors.Instant) bool // asked after each step whether that was all; nil: no
	seen     func(*engine.Result)         // shown each step; nil: nobody looks

	heard    sensors.Instant        // the last step with readings, or the first one
	muted    bool                   // the daemon was down: nothing was issued
	held     []lifecycle.Transition // of a change, to go out with the next step
	began    time.Time
	steps    int
	readings uint64
	issues   int
	alerts   int // opened
	foreign  uint64
	notes    []string // what else the operator must know, for the summary
}

// newReplayer prepares a replay of the steps from <= T < to. Whatever comes
// out of it is an exercise: it is not happening now.
func newReplayer(ctx context.Context, p *program, cfg *config.Config, from, to sensors.Instant) (*replayer, error) {
	r, err := newQuietReplayer(ctx, p, cfg, true, nil)
	if err != nil {
		return nil, err
	}
	r.from, r.to, r.bar, r.out = from.CeilSecond(), to, newProgress(p, "replay"), bufio.NewWriter(p.stdout)
	r.issued = func(n wording.Notice) error {
		if _, err := r.out.Write(append(n.JSON(), '\n')); err != nil {
			return fmt.Errorf("print the alerts: %w", err)
		}
		return nil
	}
	return r, nil
}

// newQuietReplayer prepares a replay that hands its issues to issued and prints
// nothing.
func newQuietReplayer(ctx context.Context, p *program, cfg *config.Config, exercise bool, issued func(wording.Notice) error) (*replayer, error) {
	e, err := engine.New(engineSettings(cfg, exercise))
	if err != nil {
		return nil, fmt.Errorf("prepare the engine: %w", err)
	}
	return &replayer{
		ctx: ctx, p: p, cfg: cfg, engine: e, words: wordingContext(cfg, exercise), exercise: exercise, issued: issued,
		bar: &progress{}, share: func() float64 { return 0 }, began: p.now(),
	}, nil
}

// closeDue closes every step that is due before an arrival stamp.
func (r *replayer) closeDue(stamp sensors.Instant) error {
	for {
		t, due := r.engine.Due(stamp)
		if !due {
			return nil
		}
		if err := r.leaveOut(t, stamp.Add(-r.engine.Lateness())); err != nil {
			return err
		}
		if t, due = r.engine.Due(stamp); !due {
			return nil
		}
		if err := r.step(t); err != nil {
			return err
		}
	}
}

// leaveOut jumps over the rest of a silence that has been stepped through long
// enough, from the step t to the last one before the next readings. A silence
// is left out only whole seconds at a time, and only where no readings wait.
func (r *replayer) leaveOut(t, next sensors.Instant) error {
	if r.heard == 0 {
		r.heard = t
	}
	if _, waiting := r.engine.Waiting(); waiting || t.Sub(r.heard) <= silentRun {
		return nil
	}
	if last := next.FloorSecond() - sensors.Second; last > t {
		return r.engine.SkipTo(last)
	}
	return nil
}

// step closes one step and prints what it issued.
func (r *replayer) step(t sensors.Instant) error {
	if r.to != 0 && t >= r.to {
		return errReplayed
	}
	// A step takes less than a millisecond: every thousandth is often enough
	// to notice that the operator wants to stop.
	if r.steps++; r.steps%1024 == 0 && r.ctx.Err() != nil {
		return errors.New("stopped before the end")
	}
	r.bar.at(r.share)
	result := r.engine.Step(t)
	r.readings += uint64(len(result.Readings))
	if len(result.Readings) > 0 {
		r.heard = t
	}
	if r.seen != nil {
		r.seen(result)
	}
	all := append(r.held, result.Transitions...)
	r.held = nil
	if err := r.print(t, all); err != nil {
		return err
	}
	if r.over != nil && r.over(t) {
		return errReplayed
	}
	return nil
}

// print prints the issues of a step.
func (r *replayer) print(t sensors.Instant, transitions []lifecycle.Transition) error {
	if t < r.from || r.muted {
		return nil
	}
	for _, tr := range transitions {
		// Recorded, as the daemon's issue was: what is printed must be the same
		// bytes.
		n := wording.Of(tr, r.words).WithRecorded(true)
		r.issues++
		if n.Opening() {
			r.alerts++
		}
		if err := r.issued(n); err != nil {
			return err
		}
	}
	return nil
}

// finish prints the rest and the summary. A replay that failed halfway has
// printed what came before.
func (r *replayer) finish(err error) error {
	r.bar.end()
	if errors.Is(err, errReplayed) {
		err = nil
	}
	if flushed := r.out.Flush(); err == nil && flushed != nil {
		err = fmt.Errorf("print the alerts: %w", flushed)
	}
	r.summarize()
	return err
}
