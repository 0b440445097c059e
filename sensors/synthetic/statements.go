package synthetic

import (
	"math"

	"sockline/sensors/quantity"
)

// Bounds of what a statement takes. They are wide; they catch a wrong unit.
const (
	maxGround   = 75.0 // m/s, the greatest wind of a scene's part
	maxMotion   = 60.0 // m/s, of a pattern over the ground
	maxDistance = 50e3 // m
)

// turbulenceClass takes a class of IEC 61400-1.
func (l *line) turbulenceClass() float64 {
	switch l.oneOf("a turbulence class", "none", "A", "B", "C") {
	case "A":
		return TurbulenceA
	case "B":
		return TurbulenceB
	case "C":
		return TurbulenceC
	}
	return TurbulenceNone
}

// eddies: SPEED length LENGTH time TIME.
func (l *line) eddies(s *Scene) {
	e := Eddies{Deviation: l.speed("the standard deviation", 0, 5)}
	l.options(map[string]func(){
		"length": func() { e.Length = l.length("the length", 100, 10e3) },
		"time":   func() { e.Time = l.within("the time", l.seconds(), 10, 3600, "s") },
	}, "length", "time")
	s.Eddies = e
}

// aloft: from ANGLE SPEED above LENGTH [starts T grows T].
func (l *line) aloft(s *Scene) {
	a := Aloft{}
	l.options(map[string]func(){
		"from": func() {
			a.From = l.direction()
			a.Speed = l.speed("the wind aloft", 0, maxGround)
		},
		"above":  func() { a.Above = l.length("the height", 2, 500) },
		"starts": func() { a.Starts = l.seconds() },
		"grows":  func() { a.Grows = l.seconds() },
	}, "from", "above")
	s.Aloft = a
}

// veer: ANGLE starts T takes T.
func (l *line) veer(s *Scene) {
	v := Veer{By: l.angle("the turn", -360, 360)}
	l.options(map[string]func(){
		"starts": func() { v.Starts = l.seconds() },
		"takes":  func() { v.Takes = l.seconds() },
	}, "starts", "takes")
	s.Veers = append(s.Veers, v)
}

// rise: from ANGLE SPEED starts T grows T [holds T fades T] [crosses PLACE
// toward ANGLE SPEED].
func (l *line) rise(s *Scene) {
	r := Rise{Stays: true}
	var fades bool
	l.options(map[string]func(){
		"from": func() {
			from := l.direction()
			r.Wind = quantity.FromDirection(l.speed("the rise", 0, maxGround), from)
		},
		"starts": func() { r.History.Starts = l.seconds() },
		"grows":  func() { r.History.Grows = l.seconds() },
		"holds":  func() { r.History.Holds = l.seconds(); r.Stays = false },
		"fades":  func() { r.History.Fades = l.seconds(); fades = true },
		"crosses": func() {
			r.X, r.Y = l.place()
			l.literal("toward")
			r.Toward = l.direction()
			r.Speed = l.speed("the motion", 0.1, maxMotion)
		},
	}, "from", "starts", "grows")
	if r.Stays == fades {
		l.fail(`"holds" and "fades" stand together or not at all`)
	}
	s.Rises = append(s.Rises, r)
}

// front: passes PLACE at T toward ANGLE SPEED strength SPEED width LENGTH
// [from ANGLE] [curve LENGTH] [fades T].
func (l *line) front(s *Scene) {
	var f Front
	strength, from := 0.0, math.NaN()
	l.options(map[string]func(){
		"passes": func() {
			f.X, f.Y = l.place()
			l.literal("at")
			f.Passes = l.seconds()
		},
		"toward": func() {
			f.Toward = l.direction()
			f.Speed = l.speed("the motion", 0.1, maxMotion)
		},
		"strength": func() { strength = l.speed("the strength", 0, maxGround) },
		"from":     func() { from = l.direction() },
		"width":    func() { f.Width = l.length("the width", 1, 20e3) },
		"curve":    func() { f.Curve = l.length("the radius of the curve", 100, 1e6) },
		"fades":    func() { f.Fades = l.within("the fading time", l.seconds(), 1, 1e5, "s") },
	}, "passes", "toward", "strength", "width")
	if math.IsNaN(from) { // the wind behind blows the way the line moves
		from = f.Toward + 180
	}
	f.Step = quantity.FromDirection(strength, from)
	s.Fronts = append(s.Fronts, f)
}

// outflow: see Parse.
func (l *line) outflow(s *Scene) {
	o := Outflow{Model: ModelOsegueraBowles, Stretch: 1}
	l.options(map[string]func(){
		"at":       func() { o.X, o.Y = l.place() },
		"strength": func() { o.Strength = l.speed("the strength", 0, maxGround) },
		"radius":   func() { o.Radius = l.length("the radius", 50, 20e3) },
		"starts":   func() { o.History.Starts = l.seconds() },
		"grows":    func() { o.History.Grows = l.seconds() },
		"holds":    func() { o.History.Holds = l.seconds() },
		"fades":    func() { o.History.Fades = l.seconds() },
		"model": func() {
			o.Model = Model(l.oneOf("a model", string(ModelOsegueraBowles), string(ModelVicroy), string(ModelHolmesOliver)))
		},
		"profile": func() {
			o.Profile = Profile(l.oneOf("a profile", string(ProfileOsegueraBowles), string(ProfileVicroy), string(ProfileWallJet)))
		},
		"height":  func() { o.Height = l.length("the height", 10, 1000) },
		"spreads": func() { o.Spread = l.speed("the spreading", 0, 20) },
		"stretch": func() {
			o.Stretch = l.decimal("the stretch", 1, 4)
			l.literal("axis")
			o.Axis = l.direction()
		},
		"moves": func() {
			l.literal("toward")
			toward := l.direction()
			motion := quantity.FromDirection(l.speed("the motion", 0, maxMotion), toward+180)
			o.MotionX, o.MotionY = motion.East, motion.North
		},
	}, "at", "strength", "radius", "starts", "grows", "holds", "fades")
	s.Outflows = append(s.Outflows, o)
}

// masts: [noise SPEED] [drop N %] [delay T to T].
func (l *line) masts(s *Scene) {
	m := s.Masts
	l.options(map[string]func(){
		"noise": func() { m.Noise = l.speed("the noise", 0, 5) },
		"drop":  func() { m.Drops = l.percent("the share lost", 100) },
		"delay": func() {
			m.DelayMin = l.within("the delay", l.seconds(), 0, 60, "s")
			l.literal("to")
			m.DelayMax = l.within("the delay", l.seconds(), m.DelayMin, 60, "s")
		},
	})
	s.Masts = m
}

// mast: ID FAULT [at T | from T] [until T].
func (l *line) mast(s *Scene) {
	f := Fault{Span: wholeScene()}
	if len(l.words) > 0 {
		f.Mast = l.words[0]
	}
	l.station()
	switch l.oneOf("a fault", "dies", "sticks", "turned", "reads", "spikes", "clock", "drops", "delays") {
	case "dies":
		f.Kind = FaultDead
	case "sticks":
		f.Kind = FaultStuck
	case "turned":
		f.Kind = FaultTurned
		f.Value = l.angle("the turn", -180, 180)
	case "reads":
		f.Kind = FaultFactor
		f.Value = l.percent("the share of the speed", 1000)
	case "spikes":
		f.Kind = FaultSpikes
		f.Value = l.speed("the spike", 0, 1000)
		l.literal("on")
		f.Rate = l.percent("the share with spikes", 100)
	case "clock":
		f.Kind = FaultClock
		side := l.oneOf("a side", "ahead", "behind")
		f.Value = l.seconds()
		if side == "behind" {
			f.Value = -f.Value
		}
	case "drops":
		f.Kind = FaultDrops
		f.Value = l.percent("the share lost", 100)
	case "delays":
		f.Kind = FaultLate
		l.literal("to")
		f.Value = l.within("the delay", l.seconds(), s.Masts.DelayMin, 600, "s")
	}
	l.options(map[string]func(){
		"at":    func() { f.Span.From = l.seconds() },
		"from":  func() { f.Span.From = l.seconds() },
		"until": func() { f.Span.To = l.seconds() },
	})
	f.Span = l.span(f.Span.From, f.Span.To)
	s.Faults = append(s.Faults, f)
}
