package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"io"
	"time"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
	"sockline/alerting/review"
	"sockline/config"
	"sockline/sensors"
)

func historySummaryCommand() command {
	return command{
		name: "history summary", summary: "sum a month or another period up: alerts, answers, load, masts, pilots' reports",
		setup: func(fs *flag.FlagSet) action {
			cfg := configFlag(fs)
			directory := fs.String("history", "", "history `DIRECTORY`, instead of the one that the configuration names")
			month := fs.String("month", "", "`MONTH` to sum up, such as 2026-07")
			from := instantFlag(fs, "from", "beginning of the period, a `TIME`")
			to := instantFlag(fs, "to", "end of the period, a `TIME`")
			out := fs.String("out", "", "`FILE` for a page to print, HTML, which must not exist")
			format := outputFlag(fs)
			return func(ctx context.Context, p *program, _ []string) error {
				begin, end, err := period(*month, *from, *to)
				if err != nil {
					return err
				}
				dir, err := reviewed(*cfg, *directory)
				if err != nil {
					return err
				}
				store, done, err := lookInto(ctx, dir, backup.Span{From: begin, To: end})
				if err != nil {
					return err
				}
				bar := newProgress(p, "summary")
				u, err := summarize(ctx, store, dir, begin, end, func(share float64) { bar.draw(func() float64 { return share }) })
				bar.end()
				if err = errors.Join(err, done()); err != nil {
					return err
				}
				return writeSummary(p, u, *out, format.json())
			}
		},
	}
}

// period is the month, or from and to.
func period(month string, from, to sensors.Instant) (begin, end sensors.Instant, err error) {
	if month == "" {
		if from == 0 || to == 0 {
			return 0, 0, usagef("give --month MONTH, or both --from TIME and --to TIME")
		}
		return from, to, spanError(from, to)
	}
	if from != 0 || to != 0 {
		return 0, 0, usagef("--month stands without --from and --to")
	}
	t, err := time.Parse("2006-01", month)
	if err != nil {
		return 0, 0, usagef("--month %s: write a month as 2026-07", month)
	}
	return sensors.At(t), sensors.At(t.AddDate(0, 1, 0)), nil
}

// summarize sums a period up by the configuration that was last in force in
// it.
func summarize(ctx context.Context, store *history.Store, dir string, from, to sensors.Instant, progress func(float64)) (review.Summary, error) {
	all, err := configurationsOf(store)
	if err != nil {
		return review.Summary{}, fmt.Errorf("look for the configuration in the history: %w", err)
	}
	cfg, err := inForceAt(all, to-sensors.Second)
	if err != nil {
		return review.Summary{}, err
	}
	return review.Summarize(store, review.SummaryOptions{
		Airfield: cfg.Airfield.Name, Directory: dir, From: from, To: to, Changes: changesOf(cfg), Stations: cfg.Stations,
		Software: softwareText(), Progress: progress, Stop: func() bool { return ctx.Err() != nil },
	})
}

// changesOf is the change of headwind of each level.
func changesOf(cfg *config.Config) [4]float64 {
	return [4]float64{alerting.Noticeable: cfg.Alerts.Noticeable, alerting.Large: cfg.Alerts.Large, alerting.BeyondMargin: levels(cfg).Beyond()}
}

func writeSummary(p *program, u review.Summary, out string, asJSON bool) error {
	if out != "" {
		if err := writeWhole(out, func(w io.Writer) error { return review.WriteSummaryHTML(w, u) }); err != nil {
			return err
		}
	}
	if asJSON {
		return printJSON(p, u)
	}
	return review.WriteSummaryText(p.stdout, u)
}
