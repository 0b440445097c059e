package quality

import (
	"math"
	"time"

	"sockline/sensors"
)

// Limits after WMO-No. 8 (Guide to Instruments and Methods of Observation)
// and I. Zahumensky, "Guidelines on Quality Control Procedures for Data from
// Automatic Weather Stations", WMO CBS/CIMO 2004 (the gust from memory).
const (
	maxSpeed = 75.0  // m/s
	maxGust  = 150.0 // m/s
	maxStep  = 20.0  // m/s between successive speeds
)

// The persistence tests. The guidelines look for a standstill over an hour
// (0.5 m/s, 10 degrees); a mast that feeds an alert cannot be believed for so
// long. What can be asked in minutes is that the very bits stand still, and
// how long that takes to be no accident follows from the resolution.
//
// Take an instrument with whole degrees and 0.1 m/s (WMO-No. 8 asks for 1
// degree and 0.5 m/s). In surface-layer turbulence the direction wanders with
// a standard deviation of some 0.8 times the turbulence intensity and a memory
// of 57 m / U (IEC 61400-1, from memory). Near-neutral air over the sea has an
// intensity of 0.09; take 0.02, stiller than any such air: 0.92 degrees. As a
// random walk of 2 * 0.92^2 * U / 57 m degrees squared a second it stays
// within one whole degree for a time t with a chance of about
// exp(-pi^2/2 * that * t):
//
//	above 2 m/s, 120 s     6e-16
//	at 0.6 m/s, 120 s      3e-5, with a new chance every few minutes: too often
//	at 0.6 m/s, 300 s      4e-12
//
// Below 0.5 m/s, the starting threshold of WMO-No. 8, a vane may rest with
// good reason, and nothing is asked.
//
// Speeds in whole m/s or directions in whole tens are too coarse for this, and
// so are running means of minutes sent every second.
const (
	stuckFor      = 120 * time.Second // speed and direction
	stuckLightFor = 300 * time.Second // the same in light air
	stuckVaneFor  = 300 * time.Second // direction alone, not in light air
	stuckReadings = 60                // at least so many say so
	stuckAbove    = 0.5               // m/s
	lightAir      = 2.0               // m/s, and less

	// runGap ends a run: an instrument that was silent may have moved. 60
	// readings no more than 9 s apart fit into 540 s, so that every run decides
	// within ten minutes, whatever came before. A mast that reports more rarely
	// is not asked.
	runGap = 9 * time.Second

	// stepGap is how long ago a speed may be that the next one is compared
	// with. Together with a run before it, that is ten minutes.
	stepGap = time.Minute
)

// Checker checks the readings of one station, in the order of Less.
type Checker struct {
	station sensors.Station

	hasPrevious bool
	previous    sensors.Instant // of the last usable reading
	speed       float64         // of it, m/s

	recent recent // usable readings, for spikes
	calm   calmRun

	wind run // both bits of speed and direction stand still
	vane run // the direction stands still, above light air
}

// run is an unbroken series of readings with one value.
type run struct {
	length int             // readings; 0: none yet
	start  sensors.Instant // of the first
	last   sensors.Instant // of the latest
	speed  float64
	from   float64
}

// NewChecker makes the checker of a station that has sent nothing yet.
func NewChecker(station sensors.Station) *Checker { return &Checker{station: station} }

// Station is the station that c checks.
func (c *Checker) Station() sensors.Station { return c.station }

// Check judges the next reading. A reading outside the range or from an
// instrument that is stuck is rejected; a jump of the speed, a gust below
// the speed or a vane that goes about in a calm makes it suspect, which is only
// said. A reading that stands out waits for the next one: only what comes after
// tells a spike from an onset, and what is sudden and stays is never taken away.
func (c *Checker) Check(r sensors.Reading) Checked {
	var flags Flags
	if !inRange(r) {
		flags |= FlagRange
	} else {
		flags |= c.persistence(r)
		if c.hasPrevious && r.Time.Sub(c.previous) <= stepGap && math.Abs(r.Speed-c.speed) > maxStep {
			flags |= FlagStep
		}
		if r.HasGust && r.Gust < r.Speed {
			flags |= FlagGustBelowSpeed
		}
		if c.calm.turning(r) {
			flags |= FlagCalmTurning
		}
	}
	checked := Checked{reading: r, verdict: Accepted, flags: flags}
	switch {
	case flags&rejecting != 0:
		checked.verdict = Rejected
	case flags&^noted != 0:
		checked.verdict = Suspect
	}
	if checked.Usable() {
		spikes, waits := c.recent.take(r)
		if spikes {
			checked.flags |= FlagSpike
		}
		checked.waits = waits
		c.hasPrevious, c.previous, c.speed = true, r.Time, r.Speed
	}
	return checked
}

// inRange also refuses NaN, which compares with nothing.
func inRange(r sensors.Reading) bool {
	return 0 <= r.Speed && r.Speed <= maxSpeed && 0 <= r.From && r.From < 360 &&
		(!r.HasGust || (0 <= r.Gust && r.Gust <= maxGust))
}

// persistence carries the runs on and finds out whether the instrument is
// stuck. A reading that differs frees it at once.
func (c *Checker) persistence(r sensors.Reading) Flags {
	c.wind.extend(r, r.Speed == c.wind.speed && r.From == c.wind.from)
	c.vane.extend(r, r.From == c.vane.from)
	enough := stuckFor
	if r.Speed <= lightAir {
		enough = stuckLightFor
		c.vane.length = 0 // a vane with friction rests in light air
	}
	var flags Flags
	if r.Speed > stuckAbove && c.wind.lasts(enough) {
		flags |= FlagStuck
	}
	// An instrument that stands still as a whole is only called stuck. If it is
	// not, then the speed has varied: else both runs would be of one length.
	if flags == 0 && c.vane.lasts(stuckVaneFor) {
		flags |= FlagStuckVane
	}
	return flags
}

// extend adds r to the run if it continues it, else begins a new one.
func (u *run) extend(r sensors.Reading, equal bool) {
	gap := r.Time.Sub(u.last)
	if u.length == 0 || !equal || gap < 0 || gap > runGap {
		*u = run{start: r.Time, speed: r.Speed, from: r.From}
	}
	u.length++
	u.last = r.Time
}

// lasts reports whether the run is long enough to mean something.
func (u *run) lasts(d time.Duration) bool {
	return u.length >= stuckReadings && u.last.Sub(u.start) >= d
}
