package synthetic

import (
	"math"
	"math/rand/v2"

	"sockline/sensors/quantity"
)

// Instrument is how a mast measures and sends when nothing is wrong.
type Instrument struct {
	Noise              float64 // standard deviation of each component, m/s
	Drops              float64 // share of messages that never arrive, 0 to 1
	DelayMin, DelayMax float64 // from measurement to arrival, s, uniform between
}

// DefaultInstrument is a small ultrasonic anemometer on a good link.
func DefaultInstrument() Instrument {
	return Instrument{Noise: 0.1, DelayMin: 0.050, DelayMax: 0.200}
}

// Resolution of what a mast sends.
const (
	speedResolution     = 0.1 // m/s
	directionResolution = 1.0 // degrees
)

// FaultKind is what is wrong with a mast.
type FaultKind string

// The faults. Value means: turned, degrees clockwise that the mast's north
// mark is off, so that it reports directions too small by it; factor, what the
// speed is multiplied by; spikes, the added speed in m/s, on Rate of the
// readings; clock, seconds by which its clock is ahead; drops, the share of
// messages lost; late, the delay in seconds up to which messages come.
const (
	FaultDead   FaultKind = "dead"
	FaultStuck  FaultKind = "stuck"
	FaultTurned FaultKind = "turned"
	FaultFactor FaultKind = "factor"
	FaultSpikes FaultKind = "spikes"
	FaultClock  FaultKind = "clock"
	FaultDrops  FaultKind = "drops"
	FaultLate   FaultKind = "late"
)

// Fault is something wrong with one mast for a while.
type Fault struct {
	Mast  string
	Kind  FaultKind
	Span  Span
	Value float64
	Rate  float64
}

// instrument is the state of one mast.
type instrument struct {
	Instrument
	faults []Fault
	rng    *rand.Rand
	air    turbulence // that passes it
	// held is what a stuck mast repeats.
	held     quantity.Vector
	sticking bool
}

// measured is what an instrument makes of the air that passes it.
type measured struct {
	speed, from float64 // m/s in steps of 0.1; degrees true before the mast's own north, unrounded
	clock       float64 // s ahead of true time
	delay       float64 // s
	lost        bool
}

// measure reads the wind (u, v) at t seconds. It draws the same random numbers
// whatever the faults are, so that a fault changes nothing but its mast.
func (m *instrument) measure(t, u, v float64) measured {
	noiseU, noiseV := m.rng.NormFloat64(), m.rng.NormFloat64()
	drop, spike, delay := m.rng.Float64(), m.rng.Float64(), m.rng.Float64()

	wind := quantity.Vector{East: u + m.Noise*noiseU, North: v + m.Noise*noiseV}
	out := measured{lost: drop < m.Drops}
	delayMax := m.DelayMax
	stuck := false
	for i := range m.faults {
		fault := &m.faults[i]
		if !fault.Span.Holds(t) {
			continue
		}
		switch fault.Kind {
		case FaultStuck:
			stuck = true
		case FaultDead:
			out.lost = true
		case FaultDrops:
			out.lost = out.lost || drop < fault.Value
		case FaultClock:
			out.clock += fault.Value
		case FaultLate:
			delayMax = fault.Value
		case FaultTurned, FaultFactor, FaultSpikes:
		}
	}
	if stuck && m.sticking {
		wind = m.held
	}
	m.held, m.sticking = wind, stuck
	out.speed, out.from = m.distort(t, spike, wind)
	out.delay = m.DelayMin + (delayMax-m.DelayMin)*delay
	return out
}

// distort applies the faults that falsify the values.
func (m *instrument) distort(t, spike float64, wind quantity.Vector) (speed, from float64) {
	speed, from = wind.Speed(), wind.From()
	for i := range m.faults {
		fault := &m.faults[i]
		if !fault.Span.Holds(t) {
			continue
		}
		switch fault.Kind {
		case FaultTurned:
			from -= fault.Value
		case FaultFactor:
			speed *= fault.Value
		case FaultSpikes:
			if spike < fault.Rate {
				speed += fault.Value
			}
		case FaultDead, FaultStuck, FaultClock, FaultDrops, FaultLate:
		}
	}
	// The division, not a product with 0.1, gives the number that the decimal
	// digits on the wire stand for.
	return math.Round(speed/speedResolution) / (1 / speedResolution), from
}

// newInstrument makes the mast with this id ready.
func newInstrument(s *Scene, id string) *instrument {
	m := &instrument{
		Instrument: s.Masts,
		rng:        stream(s.Seed, "instrument/"+id),
		air:        turbulence{rng: stream(s.Seed, "turbulence/"+id)},
	}
	for _, fault := range s.Faults {
		if fault.Mast == id {
			m.faults = append(m.faults, fault)
		}
	}
	return m
}
