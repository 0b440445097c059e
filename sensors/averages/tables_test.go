package averages

import (
	"math"
	"strings"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/quality"
	"sockline/sensors/quantity"
	"sockline/testdata/outside"
)

// epoch is a whole minute; second k of a table is measured k s after it.
const epoch = sensors.Instant(1_782_907_200_000)

// station reports once a second unless said otherwise.
func station(interval time.Duration) sensors.Station {
	return sensors.Station{ID: "m", Interval: interval, StaleAfter: max(3*time.Second, 3*interval)}
}

// feed makes a recorder of one station, and the function that gives it a
// reading through the checks of quality.
func feed(t *testing.T, st sensors.Station, window time.Duration) (*Recorder, func(at sensors.Instant, speed, from float64) quality.Checked) {
	t.Helper()
	r := NewRecorder([]sensors.Station{st}, NewLayout(window))
	c := quality.NewChecker(st)
	return r, func(at sensors.Instant, speed, from float64) quality.Checked {
		checked := c.Check(sensors.Reading{Time: at, Arrival: at, Speed: speed, From: from})
		r.Add(checked)
		return checked
	}
}

// Every window of a series with a change of the wind and two gaps, worked out
// in R: means, deviations, gust with its time, lull, count.
func TestMeansAgainstTable(t *testing.T) {
	series := outside.Rows(t, "gust_series.csv")
	windows := outside.Rows(t, "gust_windows.csv")
	r, add := feed(t, station(time.Second), 30*time.Second)
	next, two, ten := 0, 0, 0
	for _, w := range windows {
		end := int(outside.Number(t, w["t_end_s"]))
		// The window holds the samples up to, not at, its end; a sample at k
		// belongs to the step k.
		for ; next < len(series) && int(outside.Number(t, series[next]["t_s"])) < end; next++ {
			k := sensors.Instant(outside.Number(t, series[next]["t_s"]))
			if !add(epoch+k*sensors.Second, outside.Number(t, series[next]["speed_ms"]), outside.Number(t, series[next]["dir_deg"])).Usable() {
				t.Fatalf("the sample at %d s is refused", k)
			}
		}
		got, ok := r.Wind(0, epoch+sensors.Instant(end-1)*sensors.Second)
		if !ok {
			t.Fatalf("no wind at %d s with %s samples", end, w["n"])
		}
		m := got.Two
		two++
		if w["window_s"] == "600" {
			m = got.Ten
			ten++
		}
		if !m.Present || !m.Gusts || !m.Directed || m.Seconds != int(outside.Number(t, w["n"])) {
			t.Errorf("at %d s: %+v, the table has %s samples", end, m, w["n"])
		}
		// Both sides add up to 600 numbers of one digit after the point; the
		// table has eight.
		near(t, end, "vector speed", m.Vector.Speed(), outside.Number(t, w["vec_speed_ms"]), 1e-7)
		near(t, end, "direction", m.Vector.From(), outside.Number(t, w["vec_dir_deg"]), 1e-7)
		near(t, end, "scalar speed", m.Speed, outside.Number(t, w["scalar_speed_ms"]), 1e-7)
		near(t, end, "measured speed", m.Raw, outside.Number(t, w["scalar_speed_ms"]), 1e-7)
		near(t, end, "speed deviation", m.SpeedDeviation, outside.Number(t, w["sd_speed_n1"]), 1e-7)
		near(t, end, "gust", m.Gust, outside.Number(t, w["gust3_ms"]), 1e-7)
		near(t, end, "lull", m.Lull, outside.Number(t, w["lull3_ms"]), 1e-7)
		near(t, end, "greatest", m.Max, outside.Number(t, w["max1_ms"]), 1e-9)
		// Of equal gusts the first one counts.
		if at := int((m.GustAt - epoch) / sensors.Second); at != int(outside.Number(t, w["gust3_t_s"])) {
			t.Errorf("at %d s: the gust was at %d s, the table has %s", end, at, w["gust3_t_s"])
		}
		// For one-humped samples the two definitions of the deviation agree
		// within 0.2 degrees (standard deviations up to 20 degrees).
		if sd := outside.Number(t, w["sd_circ_deg"]); sd < 20 {
			near(t, end, "direction deviation", m.DirectionDeviation, sd, 0.2)
		}
	}
	if two != 50 || ten < 20 {
		t.Errorf("%d windows were compared, %d of them of ten minutes; the table has 50", two, ten)
	}
}

// Mean direction and Yamartino's deviation against the table of R and NumPy,
// with wraps at north, bimodal samples and such that have no mean.
func TestCircularAgainstTable(t *testing.T) {
	rows := outside.Rows(t, "circular_stats.csv")
	undefined := 0
	for _, row := range rows {
		var sin, cos float64
		dirs := strings.Split(row["dirs_deg"], ";")
		for _, d := range dirs {
			s, c := math.Sincos(outside.Number(t, d) * (math.Pi / 180))
			sin += s
			cos += c
		}
		n := float64(len(dirs))
		mean, deviation, ok := circular(sin/n, cos/n)
		if defined := row["mean_defined"] == "1"; ok != defined {
			t.Errorf("%s: the mean is defined: %v, the table has %v", row["name"], ok, defined)
		}
		if !ok {
			undefined++
		} else if d := math.Abs(turn(mean, outside.Number(t, row["mean_deg"]))); d > 2e-6 {
			t.Errorf("%s: mean %.7f, the table has %s", row["name"], mean, row["mean_deg"])
		}
		if want := outside.Number(t, row["sd_yamartino_deg"]); math.Abs(deviation-want) > 2e-6 {
			t.Errorf("%s: deviation %.7f, the table has %.7f", row["name"], deviation, want)
		}
	}
	if len(rows) != 23 || undefined != 2 {
		t.Errorf("%d samples, %d without a mean; the table has 23 and 2", len(rows), undefined)
	}
}

func near(t *testing.T, at int, what string, got, want, within float64) {
	t.Helper()
	if d := math.Abs(got - want); d > within {
		t.Errorf("at %d s: %s %.9f, the table has %.9f", at, what, got, want)
	}
}

// A block is the vector mean of its seconds: against means of samples from
// every side, worked out with numpy.
func TestBlockMeanAgainstTable(t *testing.T) {
	for _, row := range outside.Rows(t, "vector_mean_wind.csv") {
		dirs, speeds := strings.Split(row["dirs_deg"], ";"), strings.Split(row["speeds_ms"], ";")
		n := len(dirs)
		// The newest block is as long as the sample, and there is no other.
		layout := Layout{Seconds: [Blocks]int{n, n, n}}
		st := station(time.Second)
		r := NewRecorder([]sensors.Station{st}, layout)
		checker := quality.NewChecker(st)
		last := epoch
		for i := range n {
			last = epoch + sensors.Instant(i)*sensors.Second
			r.Add(checker.Check(sensors.Reading{Time: last, Arrival: last, Speed: outside.Number(t, speeds[i]), From: outside.Number(t, dirs[i])}))
		}
		b := r.Snapshot(last).Mast(0).Blocks[0]
		if !b.Present {
			t.Fatalf("case %s: the block is not there", row["case"])
		}
		v := quantity.Vector{East: b.East, North: b.North}
		for _, c := range []struct {
			name      string
			got, want float64
		}{
			{"east", v.East, outside.Number(t, row["u_ms"])}, {"north", v.North, outside.Number(t, row["v_ms"])},
			{"speed", v.Speed(), outside.Number(t, row["vec_speed_ms"])}, {"direction", v.From(), outside.Number(t, row["vec_dir_deg"])},
		} {
			if math.Abs(c.got-c.want) > 1e-6 { // the table has six digits
				t.Errorf("case %s: %s %.7f, the table has %.7f", row["case"], c.name, c.got, c.want)
			}
		}
	}
}

// Several readings of one second weigh as one, so that fast instruments weigh
// no more than slow ones.
func TestSecondsWeighTheSame(t *testing.T) {
	st := station(time.Second)
	r := NewRecorder([]sensors.Station{st}, Layout{Seconds: [Blocks]int{2, 2, 2}})
	c := quality.NewChecker(st)
	for k := range 10 { // ten readings of 10 m/s in one second
		at := epoch - 900 + sensors.Instant(k)*100
		r.Add(c.Check(sensors.Reading{Time: at, Arrival: at, Speed: 10, From: 180}))
	}
	at := epoch + sensors.Second
	r.Add(c.Check(sensors.Reading{Time: at, Arrival: at, Speed: 4, From: 180}))
	if got := r.Snapshot(at).Mast(0).Blocks[0].North; math.Abs(got-7) > 1e-12 {
		t.Errorf("a second of 10 m/s and one of 4 m/s have the mean %g, want 7", got)
	}
}
