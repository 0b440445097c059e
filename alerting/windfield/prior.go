package windfield

// Prior is what is believed about the wind before this step's means are
// looked at. It is a mixture: the air is in one of a few ambient states, and
// now and then an outflow or a front lies over it, or a mast is wrong. The
// weights of the ambient states are learnt from the last minutes; the numbers
// of DefaultPrior were tuned on synthetic episodes whose seeds are kept apart
// from those used for reporting.
type Prior struct {
	Fields []Field // ambient states without a pattern, calmest first

	// Disturbed is the air around an outflow or a front: no real one has
	// exactly the shape of a template, and what is left over passes for a
	// field of its own. Without it the nearest template would be believed far
	// too firmly. All are equally likely.
	Disturbed []Field

	MeanDeviation  float64 // of the common mean wind, one component, m/s: as good as unknown
	DriftDeviation float64 // how far the common mean strays, one component, m/s ...
	DriftTime      float64 // ... with this correlation time, s

	Instrument float64 // standard error of a mast's mean that averaging does not lower, m/s
	// OutflowShare is the prior probability that an outflow is under way near
	// the masts. It is far above any climatology, on purpose: a missed outflow
	// costs more than a doubted one, and in gusty and convective air the
	// evidence keeps it from opening alerts all the same.
	OutflowShare    float64
	OutflowStrength float64 // scale of its greatest wind at mast height (half-normal), m/s
	OutflowTime     float64 // correlation time of its strength, s
	OutflowLife     float64 // how long one is believed to go on, s
	OutflowDrift    float64 // how fast it moves, as a share of the mean wind ...
	OutflowStray    float64 // ... and how far off that may be, one component, m/s
	OutflowRadii    []float64
	OutflowSpacing  float64 // between template centres, m
	OutflowMargin   float64 // how far from a mast a centre may lie, m

	FrontShare    float64   // prior probability that a gust front is passing
	FrontStrength float64   // scale of the change of wind along its motion (half-normal), m/s
	FrontAcross   float64   // standard deviation of the change across it, m/s
	FrontLife     float64   // how long one takes over the masts, s
	FrontHeadings int       // number of headings tried
	FrontSpeeds   []float64 // m/s
	FrontSpacing  float64   // between the places tried, m
	FrontWidths   []float64 // half widths of the change, m: a sharp front and a slow rise

	FaultShare      float64 // prior probability that one of the masts is wrong ...
	FaultShareLater float64 // ... and once it has stood alone for a quarter of an hour
	FaultDeviation  float64 // standard deviation of its error, one component, m/s
	// StrokeOdds is how much likelier a mast whose instrument changed at one stroke is
	// wrong by it than that the air did that.
	StrokeOdds float64

	TrailTemper     float64 // what the last minutes said of outflows and fronts counts so much: eddies outlive a stride
	LeastStateShare float64 // no ambient state is ever believed less than this before a step
}

// DefaultPrior is the prior in force.
func DefaultPrior() Prior {
	field := func(sd, length, time float64) Field {
		return Field{Deviation: sd, Length: length, Irrotational: 0.5, Time: time}
	}
	return Prior{
		// The length is not learnt: masts a kilometre apart say little of it. With 700,
		// 1000 and 1400 m, 60 drawn episodes at Skerry Moor gave the same alerts but
		// one, and intervals that held losses of 12 kt and more as often within 4 of
		// 100 steps.
		Fields: []Field{
			field(0.25, 1000, 150), field(0.6, 1000, 150), field(1.1, 1000, 150), field(1.8, 1000, 120),
		},
		Disturbed: []Field{
			field(0.8, 900, 90), field(1.6, 900, 90),
		},
		MeanDeviation:   20,
		DriftDeviation:  2,
		DriftTime:       300,
		Instrument:      0.25,
		OutflowShare:    0.2,
		OutflowStrength: 7,
		OutflowTime:     90,
		OutflowLife:     600,
		OutflowDrift:    0.75,
		OutflowStray:    3.5,
		OutflowRadii:    []float64{500, 850, 1400},
		OutflowSpacing:  500,
		OutflowMargin:   1600,
		FrontShare:      0.1,
		FrontStrength:   10,
		FrontAcross:     4,
		FrontLife:       300,
		FrontHeadings:   12,
		FrontSpeeds:     []float64{6, 13},
		FrontSpacing:    400,
		FrontWidths:     []float64{300, 1000},
		FaultShare:      0.0001,
		FaultShareLater: 0.03,
		FaultDeviation:  8,
		StrokeOdds:      0.3,
		TrailTemper:     0.4,
		LeastStateShare: 0.01,
	}
}
