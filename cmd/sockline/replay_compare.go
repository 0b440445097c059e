package main

import (
	"bytes"
	"context"
	"errors"
	"flag"
	"fmt"
	"reflect"
	"slices"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
	"sockline/alerting/judged"
	"sockline/alerting/review"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// compareFlags are those of a replay that is set beside what was told.
type compareFlags struct {
	on, analyse *bool
	output      *output
}

func defineCompareFlags(fs *flag.FlagSet) compareFlags {
	return compareFlags{
		on:      fs.Bool("compare", false, "set the alerts beside those that were told: which appear, vanish or change; with --history"),
		analyse: fs.Bool("analyse", false, "with --compare: go through the readings even where what was kept of each step would do"),
		output:  outputFlag(fs),
	}
}

// comparison sets the alerts of a history beside those of a configuration.
type comparison struct {
	ctx      context.Context
	p        *program
	dir      string
	store    *history.Store
	cfg      *config.Config // to compare with
	from, to sensors.Instant
	analyse  bool
	bar      *progress
	past     past
	exercise bool // what was told was
	result   review.WhatIf
}

// compare prints which alerts another configuration would have given, or
// whether the same one gives the same again.
func compare(ctx context.Context, p *program, cfg *config.Config, dir string, from, to sensors.Instant, flags compareFlags) (err error) {
	// Half a day more on either side: days are warmed up, and end with their
	// alerts.
	span := backup.Span{From: from, To: to}
	if from != 0 {
		span.From = from.Add(-12 * time.Hour)
	}
	if to != 0 {
		span.To = to.Add(12 * time.Hour)
	}
	store, done, err := lookInto(ctx, dir, span)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, done()) }()
	c := &comparison{ctx: ctx, p: p, dir: dir, store: store, cfg: cfg, from: from.CeilSecond(), to: to,
		analyse: *flags.analyse, bar: newProgress(p, "compare")}
	began := p.now()
	err = c.run()
	c.bar.end()
	if err != nil {
		return err
	}
	fmt.Fprintf(p.stderr, "%d steps in %.1f s\n", c.result.Steps, p.now().Sub(began).Seconds())
	if flags.output.json() {
		return printJSON(p, c.result)
	}
	return review.WriteWhatIf(p.stdout, c.result)
}

func (c *comparison) run() (err error) {
	if c.past, err = pastOf(c.store); err != nil {
		return err
	}
	if len(c.past.configurations) == 0 {
		return errors.New("the history holds no configuration, so it is not known by what its alerts were judged")
	}
	if err := c.span(); err != nil {
		return err
	}
	now := softwareText()
	c.result = review.WhatIf{Airfield: c.cfg.Airfield.ID, From: c.from.Time(), To: c.to.Time(), Software: now, Notice: alerting.Notice, Changed: []string{}, Recorders: []string{}, Notes: []string{}}
	inForce := c.past.configurations[len(c.past.configurations)-1]
	if inForce.hash == c.cfg.Hash {
		return c.again()
	}
	recorded, err := review.Recorded(c.store, c.from, c.to)
	if err != nil {
		c.note("%v", err)
	}
	c.exercise = len(recorded) > 0 && recorded[0].Exercise
	before, err := inForce.parse()
	if err != nil {
		return fmt.Errorf("read the configuration that was last in force: %w", err)
	}
	c.result.Changed = changedKeys(before, c.cfg)
	other, err := c.other()
	if err != nil {
		return err
	}
	c.result.Comparison = review.Compare(recorded, other)
	return nil
}

func (c *comparison) note(format string, args ...any) {
	c.result.Notes = append(c.result.Notes, fmt.Sprintf(format, args...))
}

// span fills in the limits that were not given: from the first to the last day
// of which anything is kept.
func (c *comparison) span() error {
	days, err := c.days()
	if err != nil {
		return err
	}
	if len(days) == 0 {
		return errors.New("the history holds no readings and nothing that was judged")
	}
	if c.from == 0 {
		c.from = dayStart(days[0])
	}
	if c.to == 0 {
		c.to = dayStart(days[len(days)-1]).Add(24 * time.Hour)
	}
	return nil
}

// days are those of which readings or judgements are kept.
func (c *comparison) days() ([]string, error) {
	days, err := c.store.Days()
	if err != nil {
		return nil, err
	}
	judgedDays, err := judged.Days(c.dir)
	if err != nil {
		return nil, err
	}
	days = append(days, judgedDays...)
	slices.Sort(days)
	return slices.Compact(days), nil
}

func dayStart(day string) sensors.Instant {
	t, err := time.Parse("2006-01-02", day)
	if err != nil { // days are listed by names of this form
		return 0
	}
	return sensors.At(t)
}

// again replays by what was in force and sets the issues beside those of the
// journal, byte for byte.
func (c *comparison) again() error {
	c.result.Way = review.Repeated
	told := review.NewIssues()
	versions := map[string]bool{}
	err := c.store.Journal(1, func(r history.Record) error {
		switch {
		case r.Kind == history.KindSoftware && r.At < c.to:
			if r.At < c.from { // only the last one before counts
				clear(versions)
			}
			versions[string(r.Payload)] = true
		case r.Kind == history.KindIssue && r.At >= c.from && r.At < c.to:
			is, err := r.Issue()
			if err != nil {
				c.note("%v", err)
				return nil
			}
			told.Take(is.Alert.ID, is.Object, &is.Alert)
		}
		return nil
	})
	if err != nil {
		return err
	}
	for v := range versions {
		c.result.Recorders = append(c.result.Recorders, v)
	}
	slices.Sort(c.result.Recorders)
	again := review.NewIssues()
	r, err := newQuietReplayer(c.ctx, c.p, c.cfg, told.Exercise(), func(n wording.Notice) error {
		a := n.Alert()
		again.Take(a.ID, n.JSON(), &a)
		return nil
	})
	if err != nil {
		return err
	}
	first, _ := c.days()
	r.from, r.to, r.bar, r.past = c.from, c.to, c.bar, &c.past
	if len(first) > 0 && c.from <= dayStart(first[0]) {
		r.from = 0 // nothing lies before it
	}
	if err := r.store(c.store); err != nil && !errors.Is(err, errReplayed) {
		return err
	}
	c.result.Steps = r.steps
	c.result.Notes = append(c.result.Notes, r.notes...)
	c.result.Repeat = review.Repeat(told, again)
	c.result.Comparison = review.Compare(told.Lives(), again.Lives())
	return nil
}

// other gives the alerts of the other configuration.
func (c *comparison) other() ([]review.Life, error) {
	days, err := c.days()
	if err != nil {
		return nil, err
	}
	days = slices.DeleteFunc(days, func(day string) bool {
		return dayStart(day) >= c.to || dayStart(day).Add(24*time.Hour) <= c.from
	})
	rules := review.Levels{Levels: levels(c.cfg), Hold: c.cfg.Alerts.Hold}
	rejudger := review.NewRejudger(c.cfg.Airfield.ID, rules, c.fitsExactly())
	var (
		lives []review.Life
		left  []string // days that need the analysis
		why   string
	)
	if err := c.warm(rejudger); err != nil {
		return nil, err
	}
	for i, day := range days {
		c.bar.draw(func() float64 { return float64(i) / float64(len(days)) })
		if err := c.ctx.Err(); err != nil {
			return nil, errors.New("stopped before the end")
		}
		if c.analyse {
			left, why = append(left, day), "it was asked for"
			continue
		}
		ok, reason, err := c.judgeDay(rejudger, day)
		if err != nil {
			return nil, err
		}
		if !ok {
			rejudger.Break()
			left, why = append(left, day), reason
		}
	}
	if err := c.endOpen(rejudger); err != nil {
		return nil, err
	}
	c.result.Steps = rejudger.Steps
	c.result.Way = review.Rejudged
	if rejudger.Missing > 0 {
		c.note("%d seconds between the first and the last judged step are not kept: the daemon did not run, or was killed within ten minutes of them", rejudger.Missing)
	}
	if !rejudger.Exact {
		c.note("a level lies between two whole knots: its probability is interpolated, and an alert may open some seconds earlier or later than the analysis has it")
	}
	if len(left) > 0 {
		if len(left) < len(days) {
			c.result.Way = review.Mixed
		} else {
			c.result.Way = review.Analysed
		}
		c.note("%d of %d days were analysed anew from their readings: %s", len(left), len(days), why)
		found, err := c.analyseDays(left)
		if err != nil {
			return nil, err
		}
		lives = found
	}
	lives = append(lives, goingOn(rejudger.Lives(c.from, c.to), lives)...)
	slices.SortStableFunc(lives, func(a, b review.Life) int { return a.Opened.Compare(b.Opened) })
	return lives, nil
}

// goingOn leaves out of judged alerts those that go on with one that was
// analysed, from a day that ended with it open.
func goingOn(lives, analysed []review.Life) []review.Life {
	return slices.DeleteFunc(lives, func(l review.Life) bool {
		return slices.ContainsFunc(analysed, func(a review.Life) bool {
			return a.Runway == l.Runway && a.Operation == l.Operation && a.Kind == l.Kind &&
				a.Opened.Before(l.Opened) && (a.Closed == nil || !a.Closed.Before(l.Opened))
		})
	})
}

// warm judges the two hours before the first step asked for, so that an alert
// that was open then is not taken for a new one. Where that cannot be done the
// day after it says why.
func (c *comparison) warm(r *review.Rejudger) error {
	if c.analyse {
		return nil
	}
	begin := c.from.Add(-engine.Memory)
	for _, day := range slices.Compact([]string{judged.DayOf(begin), judged.DayOf(c.from)}) {
		var unfit *unfitError
		if _, err := judged.ReadDay(c.dir, day, begin, c.from, r.Step); errors.As(err, &unfit) || errors.Is(err, judged.ErrNewer) {
			r.Break()
		} else if err != nil {
			return err
		}
	}
	return nil
}

// endOpen goes on after the last step asked for until none of the alerts that
// opened before it is open.
func (c *comparison) endOpen(r *review.Rejudger) error {
	days, err := judged.Days(c.dir)
	if err != nil {
		return err
	}
	for _, day := range days {
		if day < judged.DayOf(c.to) || !r.Open(c.to) {
			continue
		}
		_, err := judged.ReadDay(c.dir, day, c.to, 0, func(s *judged.Step) error {
			if !r.Open(c.to) {
				return errReplayed
			}
			return r.Step(s)
		})
		var unfit *unfitError
		if errors.As(err, &unfit) || errors.Is(err, judged.ErrNewer) {
			break // as they stood when this could no longer be judged
		}
		if err != nil && !errors.Is(err, errReplayed) {
			return err
		}
	}
	return nil
}

// judgeDay judges what is kept of a day; false, with the reason, where that
// needs the analysis.
func (c *comparison) judgeDay(r *review.Rejudger, day string) (ok bool, reason string, err error) {
	report, err := judged.ReadDay(c.dir, day, c.from, c.to, r.Step)
	var unfit *unfitError
	switch {
	case errors.As(err, &unfit):
		return false, unfit.Error(), nil
	case errors.Is(err, judged.ErrNewer):
		return false, err.Error(), nil
	case err != nil:
		return false, "", err
	case report.Steps == 0:
		return false, "nothing is kept of what was judged on them", nil
	}
	for _, f := range report.Faults {
		c.note("%s", f)
	}
	return true, "", nil
}

// unfitError is why kept steps do not do.
type unfitError struct{ why string }

func (e *unfitError) Error() string { return e.why }

// fits tells whether steps of a context can be judged by the other
// configuration: it may differ in levels, confidence, hysteresis and hold only.
func (c *comparison) fits() func(*judged.Context) error {
	rules := levels(c.cfg)
	return func(k *judged.Context) error {
		i := slices.IndexFunc(c.past.configurations, func(f inForce) bool { return f.hash == k.Config })
		if i < 0 {
			return &unfitError{"they were judged by a configuration that is not in the journal"}
		}
		then, err := c.past.configurations[i].parse()
		if err != nil {
			return &unfitError{fmt.Sprintf("the configuration they were judged by cannot be read: %v", err)}
		}
		if why := analysisDiffers(then, c.cfg); why != "" {
			return &unfitError{why}
		}
		if _, err := judged.NewJudge(k, rules); err != nil {
			return &unfitError{err.Error()}
		}
		return nil
	}
}

// fitsExactly is fits for steps that tell all that their levels rest on.
func (c *comparison) fitsExactly() func(*judged.Context) error {
	fits := c.fits()
	return func(k *judged.Context) error {
		if !k.Without {
			return &unfitError{"they were kept by an earlier version, without the loss that is left when a mast that stands alone is not believed"}
		}
		return fits(k)
	}
}

// analysisDiffers says what differs between two configurations besides levels;
// empty if nothing does.
func analysisDiffers(a, b *config.Config) string {
	switch {
	case !reflect.DeepEqual(a.Airfield, b.Airfield):
		return "runways, paths or masts differ"
	case !reflect.DeepEqual(a.Stations, b.Stations):
		return "the stations differ"
	case a.Analysis != b.Analysis:
		return "[analysis] differs"
	case a.Alerts.MarginFBar != b.Alerts.MarginFBar || a.Alerts.FastestApproachSpeed != b.Alerts.FastestApproachSpeed:
		return "the limit of the F-factor or the fastest approach differs"
	}
	return ""
}

// changedKeys names what differs between two configurations, as far as levels
// and analysis go.
func changedKeys(a, b *config.Config) []string {
	var out []string
	speed := func(key string, x, y float64) {
		if x != y {
			out = append(out, fmt.Sprintf("%s %s instead of %s", key, knotsText(y), knotsText(x)))
		}
	}
	speed("noticeable_change", a.Alerts.Noticeable, b.Alerts.Noticeable)
	speed("large_change", a.Alerts.Large, b.Alerts.Large)
	speed("margin", a.Alerts.Margin, b.Alerts.Margin)
	speed("hysteresis", a.Alerts.Hysteresis, b.Alerts.Hysteresis)
	if a.Alerts.Confidence != b.Alerts.Confidence {
		out = append(out, fmt.Sprintf("confidence %g instead of %g", b.Alerts.Confidence, a.Alerts.Confidence))
	}
	if a.Alerts.Hold != b.Alerts.Hold {
		out = append(out, fmt.Sprintf("hold %v instead of %v", b.Alerts.Hold, a.Alerts.Hold))
	}
	if a.Alerts.MarginFBar != b.Alerts.MarginFBar {
		out = append(out, fmt.Sprintf("margin_fbar %g instead of %g", b.Alerts.MarginFBar, a.Alerts.MarginFBar))
	}
	speed("fastest_approach_speed", a.Alerts.FastestApproachSpeed, b.Alerts.FastestApproachSpeed)
	if why := analysisDiffers(a, b); why != "" && len(out) == 0 {
		out = append(out, why)
	}
	if len(out) == 0 && !bytes.Equal(a.Source, b.Source) {
		out = append(out, "nothing that alerts depend on")
	}
	return out
}

// knotsText is a speed for reading.
func knotsText(v float64) string { return fmt.Sprintf("%.1f kt", v/quantity.Knot) }
