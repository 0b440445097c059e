package review

import (
	"context"
	"errors"
	"fmt"
	"math"
	"time"

	"sockline/alerting"
	"sockline/alerting/judged"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// Variant is what other levels would have given over a time.
type Variant struct {
	Name   string `json:"name"`
	InUse  bool   `json:"in_force"` // these are the levels in force
	Alerts [4]int `json:"alerts"`   // by their highest level; [0] is all
	// OpenMinutes is how long alerts were open, in all.
	OpenMinutes float64  `json:"open_minutes"`
	Per100      *float64 `json:"alerts_per_100_hours"`
	Exact       bool     `json:"exact"` // no level lies between two that are kept
}

// Variants is a time judged by the levels in force and by some others.
type Variants struct {
	Airfield string    `json:"airfield"`
	From     time.Time `json:"from"`
	To       time.Time `json:"to"`
	Hours    float64   `json:"hours_judged"`
	Variants []Variant `json:"variants"`
	Faults   []string  `json:"faults"`
	Notice   string    `json:"notice"`
}

// steps that are usual to ask after: what if every level were 2 kt lower or
// higher, what if it took more or less to be sure, what if the hold were longer.
func usual(in Levels) (names []string, rules []Levels) {
	add := func(name string, change func(*Levels)) {
		r := in
		change(&r)
		names, rules = append(names, name), append(rules, r)
	}
	shift := func(kt float64) func(*Levels) {
		return func(r *Levels) {
			r.Levels.Noticeable += kt * quantity.Knot
			r.Levels.Large += kt * quantity.Knot
		}
	}
	add("as in force", func(*Levels) {})
	add("levels 1 and 2 by 2 kt lower", shift(-2))
	add("levels 1 and 2 by 2 kt higher", shift(2))
	add("confidence 0.1 lower", func(r *Levels) { r.Levels.Confidence = max(0.5, round(r.Levels.Confidence-0.1)) })
	add("confidence 0.1 higher", func(r *Levels) { r.Levels.Confidence = min(0.99, round(r.Levels.Confidence+0.1)) })
	add("hold twice as long", func(r *Levels) { r.Hold *= 2 })
	return names, rules
}

func round(v float64) float64 { return math.Round(v*1000) / 1000 }

// JudgeVariants judges what is kept of [from, to) in dir by the levels in
// force and by the usual others. fits says why the steps of a context cannot be
// judged so; those days are left out and named.
func JudgeVariants(ctx context.Context, airfield, dir string, in Levels, from, to sensors.Instant, fits func(*judged.Context) error) (Variants, error) {
	v := Variants{Airfield: airfield, From: from.Time(), To: to.Time(), Notice: alerting.Notice, Variants: []Variant{}, Faults: []string{}}
	days, err := judged.Days(dir)
	if err != nil {
		return v, err
	}
	names, rules := usual(in)
	var all []*Rejudger
	for _, r := range rules {
		all = append(all, NewRejudger(airfield, r, fits))
	}
	steps := 0
	for _, day := range days {
		if day < judged.DayOf(from) || day > judged.DayOf(to) {
			continue
		}
		unfit, old := make([]error, len(all)), 0
		report, err := judged.ReadDay(dir, day, from, to, func(s *judged.Step) error {
			if steps++; steps%65536 == 0 && ctx.Err() != nil {
				return errStopped
			}
			if !s.Context.Without {
				old++
			}
			for i, r := range all {
				if unfit[i] == nil {
					unfit[i] = r.Step(s)
				}
			}
			return nil
		})
		if errors.Is(err, errStopped) {
			return v, ctx.Err()
		}
		if err != nil {
			v.Faults = append(v.Faults, fmt.Sprintf("%s is left out: %v", day, err))
		}
		for i, r := range all {
			if unfit[i] != nil || err != nil {
				v.fault(day, names[i], unfit[i])
				r.Break()
			}
		}
		v.Faults = append(v.Faults, report.Faults...)
		if old > 0 {
			v.Faults = append(v.Faults, fmt.Sprintf("%s: %d steps were kept by an earlier version: where a mast stands alone, level 3 may be counted that the analysis would not have told", day, old))
		}
	}
	v.Hours = float64(all[0].Steps) / 3600
	for i, r := range all {
		c := Compare(nil, r.Lives(from, to))
		variant := Variant{Name: names[i], InUse: i == 0, Alerts: c.Other, OpenMinutes: round(c.OpenS[1] / 60), Exact: r.Exact}
		if v.Hours > 0 {
			variant.Per100 = finite(100 * float64(c.Other[0]) / v.Hours)
		}
		v.Variants = append(v.Variants, variant)
	}
	return v, nil
}

// fault notes why a day could not be judged by a variant.
func (v *Variants) fault(day, name string, err error) {
	if err != nil {
		v.Faults = append(v.Faults, fmt.Sprintf("%s, %s: %v", day, name, err))
	}
}

var errStopped = errors.New("stopped before the end")
