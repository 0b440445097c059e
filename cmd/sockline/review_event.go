package main

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"slices"
	"time"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/history/backup"
	"sockline/alerting/review"
	"sockline/config"
	"sockline/sensors"
)

func eventsReportCommand() command {
	return command{
		name: "events report", summary: "write the report of an event: one page with its map, profile, winds and timeline", operands: "ID",
		setup: func(fs *flag.FlagSet) action {
			cfg := configFlag(fs)
			directory := fs.String("history", "", "history `DIRECTORY`, instead of the one that the configuration names")
			out := fs.String("out", "", "`FILE` for the report, an HTML page, which must not exist; - for standard output")
			return func(ctx context.Context, p *program, operands []string) error {
				if len(operands) != 1 {
					return usagef("name one event by its id; \"sockline events list\" lists them")
				}
				if *out == "" {
					return usagef("--out is missing: name the file for the report")
				}
				dir, err := reviewed(*cfg, *directory)
				if err != nil {
					return err
				}
				store, done, err := lookIntoEvent(ctx, dir, operands[0])
				if err != nil {
					return err
				}
				return errors.Join(reportEvent(p, store, operands[0], *out), done())
			}
		},
	}
}

// reviewed is the directory that is looked back at.
func reviewed(cfg, directory string) (string, error) {
	if (cfg == "") == (directory == "") {
		return "", usagef("give either --config FILE or --history DIRECTORY")
	}
	if directory != "" {
		return directory, nil
	}
	c, err := loadConfig(cfg)
	if err != nil {
		return "", err
	}
	return c.History.Directory, nil
}

// reportEvent writes the report of one event.
func reportEvent(p *program, store *history.Store, id, out string) error {
	e, err := gatherEvent(store, id, p.now())
	if err != nil {
		return err
	}
	if out == "-" {
		return e.WriteHTML(p.stdout)
	}
	return writeWhole(out, e.WriteHTML)
}

// gatherEvent collects an event by the configuration that was in force when it
// opened.
func gatherEvent(store *history.Store, id string, made time.Time) (*review.Event, error) {
	event, err := store.Event(id)
	if err != nil {
		return nil, err
	}
	all, err := configurationsOf(store)
	if err != nil {
		return nil, fmt.Errorf("look for the configuration in the history: %w", err)
	}
	cfg, err := inForceAt(all, event.Opened)
	if err != nil {
		return nil, err
	}
	return review.GatherEvent(store, review.EventOptions{
		ID: id, Settings: engineSettings(cfg, true), Config: cfg.Hash, Software: softwareText(), Made: made,
	})
}

// inForceAt is the configuration by which the step at was judged.
func inForceAt(all []inForce, at sensors.Instant) (*config.Config, error) {
	for _, c := range slices.Backward(all) {
		if c.from <= at {
			return c.parse()
		}
	}
	if len(all) > 0 {
		return all[0].parse()
	}
	return nil, errors.New("the history holds no configuration, so it is not known what stood where")
}

// lookIntoEvent opens a history for looking back at an event, whether a daemon
// holds it or not; done must be called.
func lookIntoEvent(ctx context.Context, dir, id string) (store *history.Store, done func() error, err error) {
	store, done, err = lookInto(ctx, dir, backup.Nothing())
	if err != nil {
		return nil, nil, err
	}
	e, err := store.Event(id)
	if errors.Is(err, history.ErrNoEvent) {
		err = fmt.Errorf("%w; \"sockline events list\" lists those there are", err)
	}
	if err = errors.Join(err, done()); err != nil {
		return nil, nil, err
	}
	until := e.Updated
	if e.Closed != 0 {
		until = e.Closed
	}
	// What led up to it, and the minutes after it.
	return lookInto(ctx, dir, backup.Span{From: e.Opened.Add(-engine.Memory - time.Hour), To: until.Add(time.Hour)})
}
