package survey

import "sockline/sensors/synthetic"

// Findings is what a survey found of one network. All speeds in knots unless
// said otherwise, all intervals at 95 %.
type Findings struct {
	Network    string  `json:"network"`
	Airfield   string  `json:"airfield"`
	Masts      int     `json:"masts"`
	Grounds    int     `json:"grounds"` // paths with ground of their own
	Seed       uint64  `json:"seed"`
	Tuning     bool    `json:"tuning_seeds"` // nothing from them may be reported
	WindyOnly  bool    `json:"windy_only"`   // false openings are all that can be found
	Planned    int     `json:"episodes_planned"`
	Episodes   int     `json:"episodes"`
	Faulty     int     `json:"episodes_with_a_fault"`
	Partial    bool    `json:"partial"`
	Large      float64 `json:"large_kt"`
	Confidence float64 `json:"confidence"`

	Detection   []ClassShare `json:"detection"`              // losses on observed ground
	Gains       []ClassShare `json:"detection_gains"`        // gains on observed ground
	Whole       []ClassShare `json:"detection_whole"`        // losses on whole paths, observed or not
	Strong      Share        `json:"detection_strong"`       // losses of a third above the level in force, or more
	StrongWhole Share        `json:"detection_strong_whole"` // the same on whole paths
	Calm        Share        `json:"detection_without_eddies"`
	Eddying     Share        `json:"detection_with_eddies"`
	Sound       Share        `json:"detection_without_fault"`
	Broken      Share        `json:"detection_with_fault"`
	Shapes      []NamedShare `json:"detection_by_shape"`
	Along       []ClassShare `json:"detection_by_place_along"` // m before the threshold of its path
	Beside      []ClassShare `json:"detection_by_place_beside"`

	Delay     Delay `json:"delay"`
	Same      Delay `json:"delay_of_the_same"` // of the episodes of Reference
	Reference Delay `json:"delay_of_the_reference"`

	False    []WindRate   `json:"false_openings"`         // with all instruments sound
	ByWind   []WindRate   `json:"false_openings_by_wind"` // the same, with eddies and without
	Faults   []FaultRate  `json:"false_openings_by_fault"`
	Windy    Rate         `json:"false_openings_in_all"` // sound or not
	Coverage []Coverage   `json:"coverage"`              // by the true loss
	Told     []Coverage   `json:"coverage_told"`         // by the median that was told
	Sure     []ClassShare `json:"reliability"`           // steps that reached the level, by the probability told of it, in 100; instruments sound ...
	Unsure   []ClassShare `json:"reliability_with_a_fault"`
	Centre   Off          `json:"centre"`
	Arrival  Off          `json:"front_arrival"`
	Sweep    []Choice     `json:"choices"`
	Chosen   *Choice      `json:"chosen,omitempty"`
	Ground   *BlindGround `json:"blind_ground,omitempty"`
}

// ClassShare is a share of the cases of one class.
type ClassShare struct {
	From float64 `json:"from"`
	To   float64 `json:"to"` // 0: no upper end
	Share
}

// NamedShare is a share of the cases of one name.
type NamedShare struct {
	Name string `json:"name"`
	Share
}

// Delay is how long after the true change passed the large change an alert of
// level 2 or more was open, s; negative: before it.
type Delay struct {
	Cases  int     `json:"cases"`
	Missed int     `json:"missed"` // passed it and never opened
	Median float64 `json:"median_s"`
	P90    float64 `json:"p90_s"`
	Limit  float64 `json:"limit_z,omitempty"` // of the reference
}

// WindRate is the false openings in one class of the mean wind.
type WindRate struct {
	From   float64 `json:"from_ms"`
	To     float64 `json:"to_ms"`
	Eddies bool    `json:"eddies"`
	Loss   Rate    `json:"loss"`
	Gain   Rate    `json:"gain"`
	Both   Rate    `json:"both"`
}

// FaultRate is the false openings in any wind with one instrument broken.
type FaultRate struct {
	Fault synthetic.FaultKind `json:"fault"`
	Rate
}

// Coverage is how often the 5-95 % interval holds the true change.
type Coverage struct {
	From   float64 `json:"from_kt"`
	To     float64 `json:"to_kt"`
	Steps  int     `json:"steps"`
	Inside float64 `json:"inside"` // shares
	Above  float64 `json:"above"`  // the interval lies above the truth
	Below  float64 `json:"below"`
}

// Off is how far an estimate lay from the truth.
type Off struct {
	Cases  int     `json:"cases"`
	Told   int     `json:"told"` // of them an estimate was made
	Median float64 `json:"median"`
	P90    float64 `json:"p90"`
}

// Choice is one combination of level and confidence.
type Choice struct {
	Level      int     `json:"level_kt"`
	Confidence float64 `json:"confidence"`
	Detection  Share   `json:"detection"`     // of changes a third above the level in force, or more
	False      Share   `json:"false"`         // of paths in windy episodes, with a false opening
	Per100     float64 `json:"per_100_hours"` // false openings per 100 path-hours
	Per100High float64 `json:"per_100_high"`  // at the upper end of the interval
	Success    float64 `json:"success_index"` // a/(a+b+c) of the same paths and episodes
	Peirce     float64 `json:"peirce_score"`
	InForce    bool    `json:"in_force,omitempty"`
}

// BlindGround is what was put where, and how it went.
type BlindGround struct {
	Step   float64       `json:"step_m"`
	Places []Place       `json:"places"`
	Counts []GroundCount `json:"counts"`
}

// GroundCount sums the places up for one strength and radius.
type GroundCount struct {
	Strength float64 `json:"strength_kt"`
	Radius   float64 `json:"radius_m"`
	Seen     int     `json:"seen"`
	Unseen   int     `json:"unseen"`
	Outside  int     `json:"outside"`
	Harmless int     `json:"harmless"`
}

// Comparison sets two networks that met the same weather side by side.
type Comparison struct {
	First  Share `json:"first"`  // losses on whole paths of a third above the level, or more
	Second Share `json:"second"` //
	// Gain is Second less First, with an interval from episodes drawn anew.
	Gain        float64 `json:"gain"`
	Low         float64 `json:"gain_low"`
	High        float64 `json:"gain_high"`
	FalseFirst  Rate    `json:"false_first"`
	FalseSecond Rate    `json:"false_second"`
}

// windy tells the episodes that false openings are counted in.
func windy(k synthetic.StudyKind) bool {
	return k == synthetic.StudySteady || k == synthetic.StudyEddying
}
