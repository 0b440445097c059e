package main

import (
	"context"
	"encoding/json"
	"fmt"

	"sockline/alerting/history"
	"sockline/alerting/page"
	"sockline/alerting/review"
	"sockline/config"
	"sockline/sensors"
)

// otherLevels judges what was kept of the month up to the step last by the
// levels of cfg and by the usual others.
func otherLevels(ctx context.Context, store *history.Store, cfg *config.Config, last sensors.Instant) (json.RawMessage, error) {
	all, err := configurationsOf(store)
	if err != nil {
		return nil, fmt.Errorf("look for the configuration in the history: %w", err)
	}
	c := comparison{cfg: cfg, past: past{configurations: all}}
	rules := review.Levels{Levels: levels(cfg), Hold: cfg.Alerts.Hold}
	v, err := review.JudgeVariants(ctx, cfg.Airfield.ID, cfg.History.Directory, rules, last.Add(-usualSummary), last+sensors.Second, c.fits())
	switch {
	case err != nil:
		return nil, err
	case v.Hours == 0:
		return nil, fmt.Errorf("%w: nothing is kept yet of what was judged in the last month; it is written every ten minutes", page.ErrNothing)
	}
	return json.Marshal(v)
}
