package synthetic

import (
	"fmt"
	"math"
	"math/rand/v2"
	"time"
)

// A study of a network of masts plays many episodes of twenty minutes. What is
// drawn here was fixed before anything was tuned on it, and does not depend on
// the masts: two networks meet the same weather.

// StudyKind is a sort of weather of a study.
type StudyKind string

// The kinds. Windy weather comes with and without the boundary layer's own
// eddies, because eddies look like small outflows.
const (
	StudyOutflow StudyKind = "outflow"
	StudyFront   StudyKind = "gust-front"
	StudySteady  StudyKind = "wind"             // turbulence only
	StudyEddying StudyKind = "wind-with-eddies" // turbulence and eddies
)

// StudyKinds lists the kinds.
func StudyKinds() []StudyKind {
	return []StudyKind{StudyOutflow, StudyFront, StudySteady, StudyEddying}
}

// StudyFaults lists what may be broken in a study.
func StudyFaults() []FaultKind {
	return []FaultKind{FaultDead, FaultStuck, FaultTurned, FaultFactor, FaultSpikes, FaultDrops}
}

// Study says what to draw.
type Study struct {
	// Seed is that of episode 0; episode i has Seed + i.
	Seed uint64
	// Lines is the ground of each runway that an outflow may come down on.
	Lines []Line
	// Masts are the ids of those that may fail.
	Masts []string
	// Windy leaves out outflows and gust fronts: what opens then opens falsely.
	Windy bool
	// Profile brings the strength of an outflow from the height of its greatest
	// wind down to 10 m. "" draws the share that a mast sees between that of a
	// deep smooth ground layer and that of a wall jet.
	Profile Profile
}

// StudyStart is the event time at which every episode starts.
const StudyStart = episodeStart

// StudyLength is how long an episode is; StudyWarmUp, how long it takes until
// the masts' turbulence is known and it counts.
const (
	StudyLength = 20 * time.Minute
	StudyWarmUp = 4 * time.Minute
)

// studyMix is the kind of each of twenty successive episodes: 40 % outflows, 10 %
// gust fronts, 25 % each of windy weather without and with eddies. windyMix is the
// windy weather alone.
const (
	studyMix = "OWOEFOWEOWOEFOWEOWOE"
	windyMix = "WE"
)

// mostWind is the greatest mean wind of a study: 30 kt, in m/s.
const mostWind = 30 * 1852.0 / 3600.0

// faultShare is how many episodes have a broken instrument.
const faultShare = 0.1

// Kind is the kind of episode i.
func (s Study) Kind(i int) StudyKind {
	mix := studyMix
	if s.Windy {
		mix = windyMix
	}
	switch mix[i%len(mix)] {
	case 'O':
		return StudyOutflow
	case 'F':
		return StudyFront
	case 'E':
		return StudyEddying
	}
	return StudySteady
}

// Episode draws episode i. All have surface-layer turbulence of class A, B or
// C. Uniformly unless said otherwise:
//
//	mean wind   0 to 30 kt from anywhere
//	eddies      sd 0.3 to 1.5 m/s, length 500 to 2000 m, time 2 to 10 min: in all
//	            of StudyEddying, none of StudySteady, half of the others
//	outflow     Oseguera-Bowles, Vicroy or Holmes-Oliver alike often; half of them
//	            round as published, half stretched by 1 to 2; twice the strength
//	            aloft is log-normal about 22 m/s (10 to 60), of which a mast sees
//	            0.55 to 0.9, or what Profile leaves of it with the greatest wind
//	            at a log-normal 75 m (30 to 150); radius log-normal about 1000 m
//	            (400 to 1600); begins after 250 to 330 s, grows for a log-normal
//	            5 min (2 to 8), stays for 1 to 5 min, fades in 2 to 8 min; moves
//	            as those of DrawEpisode. At its peak it stands anywhere along the
//	            line, beside it by a normal 0.7 radii
//	gust front  as those of DrawEpisode
//	fault       in a tenth of the episodes one mast is dead, stuck, turned by 20
//	            to 90 degrees, reads 0.3 to 0.8 of the wind, has spikes of 10 to 25
//	            m/s in 1 to 10 % of its readings, or loses 30 to 90 % of them
func (s Study) Episode(i int) *Scene {
	kind := s.Kind(i)
	seed := s.Seed + uint64(i)
	rng := stream(seed, "study/"+string(kind))
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	scene := &Scene{
		Name: fmt.Sprintf("%s-%d", kind, seed), Title: "An episode of a study: " + string(kind),
		Start: episodeStart, Length: StudyLength, Seed: seed,
		From: between(0, 360), Speed: between(0, mostWind), Masts: DefaultInstrument(),
		Turbulence: [...]float64{TurbulenceA, TurbulenceB, TurbulenceC}[rng.IntN(3)],
	}
	eddies := Eddies{Deviation: between(0.3, 1.5), Length: between(500, 2000), Time: between(120, 600)}
	if half := rng.IntN(2) == 0; kind == StudyEddying || kind != StudySteady && half {
		scene.Eddies = eddies
	}
	switch kind {
	case StudyOutflow:
		scene.Outflows = []Outflow{s.outflow(rng, scene)}
	case StudyFront:
		scene.Fronts = []Front{drawFront(rng, scene, s.line(rng))}
	}
	scene.Faults = s.faults(seed)
	return scene
}

// Reference is the outflow that a test which knows size and place looks for in
// episode i: the one that is there, or one that might have been.
func (s Study) Reference(i int, scene *Scene) Outflow {
	if len(scene.Outflows) > 0 {
		return scene.Outflows[0]
	}
	return s.outflow(stream(s.Seed+uint64(i), "study/reference"), scene)
}

func (s Study) line(rng *rand.Rand) Line { return s.Lines[rng.IntN(len(s.Lines))] }

// Peak is where an outflow stands when it is first at its full strength, m.
func (o *Outflow) Peak() (x, y float64) {
	return o.X + o.MotionX*o.History.Grows, o.Y + o.MotionY*o.History.Grows
}

// outflow draws one.
func (s Study) outflow(rng *rand.Rand, scene *Scene) Outflow {
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	o := drawOutflow(rng, scene, s.line(rng))
	o.Model = [...]Model{ModelOsegueraBowles, ModelVicroy, ModelHolmesOliver}[rng.IntN(3)]
	o.Profile = s.Profile
	o.History.Starts = between(250, 330)
	if rng.IntN(2) == 0 {
		o.Stretch = 1
	}
	// Both are drawn in any case: the profile then changes nothing else.
	aloft, height := logNormal(rng, differenceAloft, 10, 60)/2, logNormal(rng, outflowHeight, 30, 150)
	share := between(mastShareLow, mastShareHigh)
	if s.Profile != "" {
		o.Height = height
		share = 1 / o.heightFactor(height)
	}
	o.Strength = aloft * share
	return o
}

// faults draws what is broken, from a stream of its own. The mast is drawn as a
// place in the list: a network with more masts has the same faults elsewhere.
func (s Study) faults(seed uint64) []Fault {
	rng := stream(seed, "study/fault")
	between := func(low, high float64) float64 { return low + (high-low)*rng.Float64() }
	broken, place := rng.Float64() < faultShare, rng.Float64()
	if !broken || len(s.Masts) == 0 {
		return nil
	}
	f := Fault{
		Mast: s.Masts[int(place*float64(len(s.Masts)))],
		Kind: StudyFaults()[rng.IntN(6)],
		Span: Span{From: between(0, 600), To: math.Inf(1)},
	}
	sign := float64(1 - 2*rng.IntN(2))
	switch f.Kind {
	case FaultTurned:
		f.Value = sign * between(20, 90)
	case FaultFactor:
		f.Value = between(0.3, 0.8)
	case FaultSpikes:
		f.Value, f.Rate = between(10, 25), between(0.01, 0.1)
	case FaultDrops:
		f.Value = between(0.3, 0.9)
	case FaultDead, FaultStuck, FaultClock, FaultLate:
	}
	return []Fault{f}
}

// Still is an outflow of full strength that comes down at x, y and stays: what
// is put on each place of the ground to see from where it goes unseen. Strength
// in m/s at 10 m, radius in m; the wind of 4 m/s and its turbulence follow from
// the seed.
func Still(seed uint64, model Model, x, y, strength, radius float64) *Scene {
	rng := stream(seed, "study/still")
	return &Scene{
		Name: fmt.Sprintf("still-%d", seed), Title: "An outflow that stays",
		Start: episodeStart, Length: stillLength, Seed: seed,
		From: 360 * rng.Float64(), Speed: 4, Masts: DefaultInstrument(), Turbulence: TurbulenceC,
		Outflows: []Outflow{{
			Model: model, X: x, Y: y, Strength: strength, Radius: radius,
			History: History{Starts: 240, Grows: 120, Holds: 600},
		}},
	}
}

// stillLength leaves two minutes at full strength.
const stillLength = 8 * time.Minute
