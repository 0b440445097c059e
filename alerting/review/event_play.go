package review

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// play goes through the readings of the event, warmed up from two hours before
// it, and takes profiles and winds.
func (e *Event) play(s *history.Store, settings engine.Settings) error {
	// Whatever is marked as synthetic was taken then, and is taken now.
	settings.Exercise = true
	eng, err := engine.New(settings)
	if err != nil {
		return err
	}
	p := &player{event: e, engine: eng, worst: sensors.At(e.WorstAt)}
	for i, st := range settings.Stations {
		p.ids = append(p.ids, st.ID)
		e.Masts = append(e.Masts, MastWind{ID: settings.Stations[i].ID})
	}
	p.sums = make([]windSum, len(p.ids))
	p.moment = make([]windSum, len(p.ids))
	p.every = max(sensors.Instant(windSpan.Milliseconds()), (e.to-e.from)/mostColumns/sensors.Second*sensors.Second)
	if e.path >= 0 {
		view := eng.View(e.path)
		e.Profile.Before = slices.Clone(view.Before)
		p.reversed = view.Reversed
		if p.reversed { // in the order of this flight
			slices.Reverse(e.Profile.Before)
		}
	} else {
		e.unseen("the path is not in the configuration that was in force; no profile is drawn")
	}
	first := e.from.Add(-engine.Memory)
	err = s.Readings(first, e.to+sensors.Second, p.step)
	p.finish()
	return err
}

// player is the state between the steps of an event.
type player struct {
	event    *Event
	engine   *engine.Engine
	ids      []string
	worst    sensors.Instant
	every    sensors.Instant // between two columns of the profile
	reversed bool

	sums    []windSum // by station, of the ten seconds at hand
	moment  []windSum // by station, about the worst moment
	bucket  sensors.Instant
	missing int // steps of the report that are not stored
	blind   int // steps at which the path was not wholly observed
	shown   int
}

// windSum adds readings up as vectors: directions are never averaged as
// numbers.
type windSum struct {
	v quantity.Vector
	n int
}

func (w *windSum) add(r sensors.Reading) {
	v := quantity.FromDirection(r.Speed, r.From)
	w.v.East += v.East
	w.v.North += v.North
	w.n++
}

func (w *windSum) mean() quantity.Vector {
	return quantity.Vector{East: w.v.East / float64(w.n), North: w.v.North / float64(w.n)}
}

func (p *player) step(st history.Step) error {
	readings := st.For(p.ids)
	for t := p.engine.LastStep() + sensors.Second; p.engine.LastStep() != 0 && t < st.At; t += sensors.Second {
		if t >= p.event.from {
			p.missing++
		}
		p.close(t)
	}
	if p.engine.LastStep() == 0 {
		if err := p.engine.SkipTo(st.At - sensors.Second); err != nil {
			return err
		}
		if st.At > p.event.from {
			p.missing += int((st.At - p.event.from) / sensors.Second)
		}
	}
	for _, r := range readings {
		p.engine.Stored(r)
		if st.At >= p.event.from {
			p.wind(st.At, r)
		}
	}
	p.close(st.At)
	return nil
}

// wind takes a reading into the mean of its ten seconds.
func (p *player) wind(at sensors.Instant, r sensors.Reading) {
	if b := (at - p.event.from) / sensors.Instant(windSpan.Milliseconds()); b != p.bucket {
		p.empty()
		p.bucket = b
	}
	p.sums[r.Station].add(r)
	if d := at - p.worst; d > -30*sensors.Second && d <= 0 {
		p.moment[r.Station].add(r)
	}
}

// empty ends the ten seconds at hand.
func (p *player) empty() {
	at := (float64(p.bucket) + 0.5) * windSpan.Seconds()
	for i := range p.sums {
		if p.sums[i].n > 0 {
			v := p.sums[i].mean()
			m := &p.event.Masts[i]
			m.At, m.Speed, m.From = append(m.At, at), append(m.Speed, v.Speed()/quantity.Knot), append(m.From, v.From())
		}
		p.sums[i] = windSum{}
	}
}

// close closes the step t; those before the report are run through without
// being judged.
func (p *player) close(t sensors.Instant) {
	e := p.event
	if t < e.from {
		p.engine.Warm(t)
		return
	}
	res := p.engine.Step(t)
	if e.path < 0 {
		return
	}
	a := &res.Assessments[e.path]
	p.shown++
	if !a.Complete || len(a.Observed) == 0 {
		p.blind++
	}
	if t == p.worst {
		e.observed = slices.Clone(a.Observed)
	}
	if t == p.worst || (t-e.from)%p.every == 0 {
		p.column(t)
	}
}

// column takes the headwind along the path.
func (p *player) column(t sensors.Instant) {
	e := p.event
	values := make([]float64, len(e.Profile.Before))
	s, _ := p.engine.Stretch(e.path)
	for i := range values {
		values[i] = math.NaN()
		if s == nil || !s.Observed[i] {
			continue
		}
		values[i] = s.Mean[i] / quantity.Knot
		if p.reversed {
			values[i] = -values[i]
		}
	}
	if p.reversed {
		slices.Reverse(values)
	}
	e.Profile.At = append(e.Profile.At, t.Sub(e.from).Seconds())
	e.Profile.Headwind = append(e.Profile.Headwind, values)
}

// finish says what of the event was not observed.
func (p *player) finish() {
	e := p.event
	p.empty()
	if last := p.engine.LastStep(); last < e.to {
		p.missing += int((e.to - max(last, e.from)) / sensors.Second)
	}
	if p.missing > 0 {
		e.unseen("no step is stored for %d of the %d seconds shown", p.missing, int((e.to-e.from)/sensors.Second)+1)
	}
	if p.blind > 0 {
		e.unseen("the ground that the path needs was not all observed in %d of %d steps", p.blind, p.shown)
	}
	for i := range p.moment {
		if m := &e.Masts[i]; p.moment[i].n > 0 {
			m.Worst, m.HasWorst = p.moment[i].mean(), true
		} else {
			e.unseen("mast %s: no reading in the 30 s before the greatest change", m.ID)
		}
	}
	if e.path < 0 {
		return
	}
	path := e.field.Paths[e.path]
	var gaps []string
	for _, g := range airfield.Unobserved(path, e.observed) {
		gaps = append(gaps, fmt.Sprintf("%.0f to %.0f m before the threshold", g.From, g.To))
	}
	if len(gaps) > 0 {
		e.unseen("at the greatest change these parts of the path were not observed: %s", strings.Join(gaps, "; "))
	}
	e.unseen("the wind between the masts and above them: the figures hold at mast height")
}

// tell says in plain words what happened.
func (e *Event) tell(issues []object) {
	last := issues[len(issues)-1]
	change := map[string]string{string(alerting.HeadwindLoss): "fell", string(alerting.HeadwindGain): "rose"}[e.Kind]
	lead := fmt.Sprintf("On %s at %s UTC an alert opened for %s at %s.", e.Opened.Format("2 January 2006"), clock(e.Opened), e.Path, e.Airfield)
	if change != "" {
		lead += fmt.Sprintf(" The headwind %s by about %.0f kt (%.0f to %.0f) between %.0f and %.0f m before the threshold at its greatest, at %s.",
			change, math.Abs(e.Worst.ChangeKt), min(math.Abs(e.Worst.LowKt), math.Abs(e.Worst.HighKt)), max(math.Abs(e.Worst.LowKt), math.Abs(e.Worst.HighKt)),
			e.Worst.FromM, e.Worst.ToM, clock(e.WorstAt))
	}
	e.Lead = append(e.Lead, lead, "As it was told then: \""+e.Worst.Text+"\"")
	end := "It is still open."
	if e.Closed != nil {
		why := ""
		if last.ClosedBecause != nil {
			why = " (" + *last.ClosedBecause + ")"
		}
		end = fmt.Sprintf("It closed at %s%s, after %v.", clock(*e.Closed), why, e.Closed.Sub(e.Opened).Round(time.Second))
	}
	others := "No other alert belongs to the same occurrence."
	if n := len(e.Others); n > 0 {
		others = fmt.Sprintf("%s more to the same occurrence.", map[bool]string{true: "One alert belongs", false: fmt.Sprintf("%d alerts belong", n)}[n == 1])
	}
	e.Lead = append(e.Lead, end+" "+others)
	if len(e.Seen) == 0 {
		e.Seen = append(e.Seen, "Nobody acknowledged it, as far as the journal has it.")
	}
}
