package main

import (
	"sockline/alerting/engine"
	"sockline/alerting/hazard"
	"sockline/alerting/windfield"
	"sockline/alerting/wording"
	"sockline/config"
)

// engineSettings is what the engine needs of a configuration. Exercise takes
// readings that mark themselves as synthetic, and marks whatever comes out.
func engineSettings(cfg *config.Config, exercise bool) engine.Settings {
	return engine.Settings{
		Airfield: cfg.Airfield,
		Stations: cfg.Stations,
		Levels:   levels(cfg),
		Window:   cfg.Analysis.Window,
		Lateness: cfg.Analysis.Lateness,
		Reach:    cfg.Analysis.Reach,
		Siting:   cfg.Analysis.RemoveSiting,
		Hold:     cfg.Alerts.Hold,
		Exercise: exercise,
		Prior:    windfield.DefaultPrior(),
	}
}

// levels is what a change must amount to.
func levels(cfg *config.Config) hazard.Levels {
	a := cfg.Alerts
	return hazard.Levels{
		Noticeable: a.Noticeable, Large: a.Large, Margin: a.Margin, MarginFBar: a.MarginFBar,
		FastestApproach: a.FastestApproachSpeed, Confidence: a.Confidence, Hysteresis: a.Hysteresis,
		Limits: hazard.Limits{
			WindShift: a.WindShift, Vertical: a.VerticalShear, Crosswind: a.CrosswindLimit, Tailwind: a.TailwindLimit,
		},
	}
}

// wordingContext is what the words of an alert depend on besides the alert.
func wordingContext(cfg *config.Config, exercise bool) wording.Context {
	a := cfg.Alerts
	l := levels(cfg)
	merged := 0.0
	if l.Merged() {
		merged = min(l.Large, l.Margin)
	}
	// A derived margin that was raised to the least one is no longer the stall
	// margin itself.
	return wording.Context{
		Airfield: cfg.Airfield.ID, Exercise: exercise,
		Margin: a.Margin, MarginIsStall: a.MarginDerived && !a.MarginRaisedUp,
		Merged: merged,
	}
}
