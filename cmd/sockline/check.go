package main

import (
	"context"
	"flag"
	"fmt"
	"math"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

func checkCommand() command {
	return command{
		name: "check", summary: "name every problem of a configuration, else say what it means",
		setup: func(fs *flag.FlagSet) action {
			cfg := configFlag(fs)
			out := outputFlag(fs)
			return func(_ context.Context, p *program, _ []string) error {
				c, err := loadConfig(*cfg)
				if err != nil {
					return err
				}
				r := checkReportOf(c, p.now())
				if out.json() {
					return printJSON(p, r)
				}
				return r.print(p.stdout)
			}
		},
	}
}

// checkReport is what a configuration means, on one day.
type checkReport struct {
	Airfield       string         `json:"airfield"`
	Name           string         `json:"name"`
	Date           string         `json:"date"`
	Variation      *float64       `json:"magnetic_variation_deg"` // null where it is not known
	VariationFrom  string         `json:"magnetic_variation_from"`
	Stations       []checkStation `json:"stations"`
	Paths          []checkPath    `json:"paths"`
	Levels         checkLevels    `json:"levels"`
	Others         checkOthers    `json:"others"`
	EmbeddedBroker bool           `json:"embedded_broker"`
	Told           []checkTold    `json:"told,omitempty"`
	Warnings       []string       `json:"warnings"`
	Notice         string         `json:"notice"`
}

// checkStation is a mast, in metres from the reference point.
type checkStation struct {
	ID     string  `json:"id"`
	East   float64 `json:"east_m"`
	North  float64 `json:"north_m"`
	Height float64 `json:"height_m"`
	Topic  string  `json:"topic"`
}

// checkPath is a path while all masts are live. Intervals run in the direction
// of flight, in metres before the threshold.
type checkPath struct {
	Runway          string        `json:"runway"`
	Operation       string        `json:"operation"`
	BearingTrue     float64       `json:"bearing_true_deg"`
	BearingMagnetic *float64      `json:"bearing_magnetic_deg"`
	Length          float64       `json:"length_m"`
	Observed        [][2]float64  `json:"observed"`
	NotObserved     [][2]float64  `json:"not_observed"`
	Needed          [2]float64    `json:"needed"`
	NeededObserved  bool          `json:"needed_observed"`
	Beside          []checkBeside `json:"stations"`
	Glide           []checkGlide  `json:"glide_path"`
}

// checkBeside is a mast beside a path.
type checkBeside struct {
	ID     string  `json:"id"`
	Before float64 `json:"before_m"` // m before the threshold
	Right  float64 `json:"right_m"`  // m to the right of the flight
}

// checkGlide is the height of the glide path above the threshold.
type checkGlide struct {
	Before float64 `json:"before_m"`
	Height float64 `json:"height_m"`
}

// checkLevels is what the levels stand for.
type checkLevels struct {
	Noticeable    float64 `json:"noticeable_kt"`
	Large         float64 `json:"large_kt"`
	Margin        float64 `json:"beyond_margin_kt"`
	MarginDerived bool    `json:"beyond_margin_is_stall_margin"`
	MarginRaised  bool    `json:"beyond_margin_raised_to_15_kt"`
	StallMargin   float64 `json:"stall_margin_kt"`
	Merged        bool    `json:"levels_2_and_3_merged"`
	FBar          float64 `json:"fbar"`
	FBarLoss      float64 `json:"fbar_loss_over_1_km_kt"` // in still air
	Slowest       float64 `json:"slowest_approach_kt"`
	Fastest       float64 `json:"fastest_approach_kt"`
	Confidence    float64 `json:"confidence"`
}

// mergeWithinWords is hazard's own distance, for the sentence about it.
const mergeWithinWords = "3 kt"

// checkReportOf works out what a configuration means on the UTC day of now.
func checkReportOf(cfg *config.Config, now time.Time) checkReport {
	a := cfg.Airfield
	r := checkReport{
		Airfield: a.ID, Name: a.Name, Date: now.UTC().Format(time.DateOnly),
		EmbeddedBroker: cfg.Broker.Embedded, Warnings: []string{}, Notice: alerting.Notice,
	}
	r.variation(cfg, now)
	for i, m := range a.Masts {
		r.Stations = append(r.Stations, checkStation{
			ID: m.ID, East: tenth(m.X), North: tenth(m.Y), Height: m.Height, Topic: cfg.Stations[i].Topic,
		})
	}
	for _, p := range a.Paths {
		r.Paths = append(r.Paths, r.path(cfg, p))
	}
	r.levels(cfg)
	r.others(cfg)
	r.told(cfg)
	if cfg.Broker.Embedded {
		r.warn("%s", wording.EmbeddedBroker)
	}
	return r
}

// warn adds a sentence that the operator must read.
func (r *checkReport) warn(format string, args ...any) {
	r.Warnings = append(r.Warnings, fmt.Sprintf(format, args...))
}

// variation fills in the magnetic variation of the day and where it is from.
func (r *checkReport) variation(cfg *config.Config, now time.Time) {
	a := cfg.Airfield
	v, err := a.Variation(now)
	if err != nil {
		r.VariationFrom = "not known"
		r.warn("Magnetic variation is not known today: %v.", err)
		return
	}
	r.Variation = &v
	// What the model says for the day tells a configured value from it.
	model, err := airfield.RoundedVariation(a.Latitude, a.Longitude, a.Elevation, now)
	configured := err != nil
	if err == nil {
		// A day on which the model is not valid shows whether it is asked at all.
		_, outside := a.Variation(time.Date(2100, 1, 1, 0, 0, 0, 0, time.UTC))
		configured = outside == nil
	}
	if !configured {
		r.VariationFrom = "World Magnetic Model 2025, valid from 2025.0 to 2030.0"
		return
	}
	r.VariationFrom = "the configuration"
	if err == nil && math.Abs(model-v) >= 1 {
		r.warn("The configured magnetic variation, %+.1f deg, is %.1f deg away from that of the World Magnetic Model 2025 for today, %+.1f deg.",
			v, math.Abs(model-v), model)
	}
}

// path says what is known of a path while all masts are live.
func (r *checkReport) path(cfg *config.Config, p airfield.Path) checkPath {
	masts := cfg.Airfield.MastPoints()
	observed := airfield.Observed(p, masts, cfg.Analysis.Reach, airfield.Beyond)
	complete, missing := airfield.Complete(observed, p.Needed())
	c := checkPath{
		Runway: p.Runway(), Operation: p.Operation(), BearingTrue: round(p.BearingTrue(), 1000),
		Length: tenth(p.Extent().Length()), Observed: pairs(observed), NotObserved: pairs(airfield.Unobserved(p, observed)),
		Needed: pair(p.Needed()), NeededObserved: complete, Beside: []checkBeside{}, Glide: []checkGlide{},
	}
	if r.Variation != nil {
		magnetic := round(quantity.NormalizeDegrees(p.BearingTrue()-*r.Variation), 10)
		c.BearingMagnetic = &magnetic
	}
	aloft := cfg.Airfield.Aloft()
	for _, i := range airfield.MastsBeside(p, masts, cfg.Analysis.Reach) {
		if aloft[i] {
			continue
		}
		before, right := p.Along(masts[i].X, masts[i].Y)
		c.Beside = append(c.Beside, checkBeside{ID: cfg.Airfield.Masts[i].ID, Before: tenth(before), Right: tenth(right)})
	}
	if p.Operation() == airfield.Landing {
		for _, before := range []float64{0, 500, 1000, 2000, 3000, 4000, 5000} {
			if before <= p.Extent().From {
				c.Glide = append(c.Glide, checkGlide{Before: before, Height: tenth(p.GlideHeight(before))})
			}
		}
	}
	if !complete {
		r.warn("Nothing but \"not observed\" can be said of %s, even with all masts live: no mast sees %s.", p.Name(), intervalWords(missing))
	}
	return c
}

// levels says what the levels stand for.
func (r *checkReport) levels(cfg *config.Config) {
	a, l := cfg.Alerts, levels(cfg)
	r.Levels = checkLevels{
		Noticeable: tenthKnots(a.Noticeable), Large: tenthKnots(a.Large), Margin: tenthKnots(a.Margin),
		MarginDerived: a.MarginDerived && !a.MarginRaisedUp, MarginRaised: a.MarginDerived && a.MarginRaisedUp, StallMargin: tenthKnots(a.StallMargin), Merged: l.Merged(),
		FBar: a.MarginFBar, FBarLoss: tenthKnots(hazard.LossOfFBar(a.MarginFBar, a.FastestApproachSpeed)),
		Slowest: tenthKnots(a.ApproachSpeed), Fastest: tenthKnots(a.FastestApproachSpeed), Confidence: a.Confidence,
	}
	if l.Merged() {
		r.warn("Levels 2 and 3 lie within %s: the higher is issued. A loss of %.1f kt or more is level 3.",
			mergeWithinWords, tenthKnots(min(a.Large, a.Margin)))
	}
	if a.MarginRaisedUp {
		r.warn("The stall margin of the slowest aircraft, 23 %% of %.1f kt, is %.1f kt: a loss smaller than level 3 (%.1f kt) already uses it up.",
			r.Levels.Slowest, r.Levels.StallMargin, r.Levels.Margin)
	}
	// Such a reading lands in the step in which it arrives: with a slow link
	// that is a later one than the others' of the same moment.
	for _, s := range cfg.Stations {
		if s.Format == sensors.FormatNMEA0183 || (s.Fields != nil && s.Fields.Time == "") {
			r.warn("Station %s sends no time: its readings count from their arrival, so a slow link shifts them.", s.ID)
		}
	}
}

// round cuts what a reader cannot use: tenths of a metre, a knot, a degree.
func round(x, parts float64) float64 { return math.Round(x*parts)/parts + 0 } // + 0: no minus zero

func tenth(x float64) float64 { return round(x, 10) }

func tenthKnots(ms float64) float64 { return tenth(quantity.Knots(ms)) }

func pair(i airfield.Interval) [2]float64 { return [2]float64{tenth(i.From), tenth(i.To)} }

func pairs(intervals []airfield.Interval) [][2]float64 {
	out := make([][2]float64, len(intervals))
	for k, i := range intervals {
		out[k] = pair(i)
	}
	return out
}
