package quality

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"sockline/sensors"
)

const noon sensors.Instant = 1782907200_000 // 2026-07-01T12:00:00Z

func TestArrival(t *testing.T) {
	// By the step rule: step T uses T-1 s < time <= T and arrival <= T + lateness.
	const lateness = time.Second
	for _, row := range []struct {
		name          string
		time, arrival sensors.Instant // ms after noon
		retained      bool
		marked        bool
		allowed       bool
		want          Reason
	}{
		{name: "at once"},
		{name: "a little later", time: -300, arrival: 120},
		{name: "retained", retained: true, want: Retained},
		{name: "retained and an exercise", retained: true, marked: true, allowed: true, want: Retained},
		{name: "exercise where none is allowed", marked: true, want: Exercise},
		{name: "exercise where it is", marked: true, allowed: true},
		{name: "as late as may be, at a whole second", time: 0, arrival: 1000},
		{name: "too late by a millisecond, at a whole second", time: 0, arrival: 1001, want: Late},
		{name: "as late as may be, just after one", time: 1, arrival: 2000},
		{name: "too late, just after one", time: 1, arrival: 2001, want: Late},
		{name: "an hour late", time: -3600_000, arrival: 0, want: Late},
		{name: "as early as may be", time: 1000, arrival: 0},
		{name: "from the future", time: 1001, arrival: 0, want: Future},
		{name: "from next year", time: 31536000_000, arrival: 0, want: Future},
		{name: "from 1970", time: -noon, arrival: 0, want: Late},
	} {
		r := sensors.Reading{Time: noon + row.time, Arrival: noon + row.arrival, Retained: row.retained, Exercise: row.marked}
		got, ok := Arrival(r, lateness, row.allowed)
		if got != row.want || ok != (row.want == "") {
			t.Errorf("%s: %q, %v; want %q", row.name, got, ok, row.want)
		}
	}
}

func TestArrivalAgreesWithTheStep(t *testing.T) {
	// Whatever Arrival lets through belongs to a step that is still open when
	// it arrives, and whatever it calls late does not.
	source := rand.New(rand.NewPCG(3, 4))
	for range 20000 {
		lateness := time.Duration(source.IntN(3000)) * time.Millisecond
		r := sensors.Reading{Time: noon + sensors.Instant(source.IntN(9000)), Arrival: noon + sensors.Instant(source.IntN(9000))}
		step := noon // the first whole second at or after the event time, by counting
		for step < r.Time {
			step += sensors.Second
		}
		closed := r.Arrival > step+sensors.Instant(lateness.Milliseconds())
		reason, ok := Arrival(r, lateness, false)
		if ok && closed || reason == Late && !closed {
			t.Fatalf("time %d, arrival %d, lateness %v: %q, %v", r.Time-noon, r.Arrival-noon, lateness, reason, ok)
		}
	}
}

func TestOrder(t *testing.T) {
	base := sensors.Reading{Station: 2, Time: noon, Arrival: noon + 100, Speed: 5, From: 240}
	with := func(change func(*sensors.Reading)) sensors.Reading {
		r := base
		change(&r)
		return r
	}
	gust := with(func(r *sensors.Reading) { r.HasGust, r.Gust = true, 8 })
	for _, row := range []struct {
		name       string
		a, b       sensors.Reading
		less, same bool // a before b; a is a copy of b
	}{
		{"itself", base, base, false, true},
		{"time first", base, with(func(r *sensors.Reading) { r.Time++; r.Station = 0 }), true, false},
		{"station next", base, with(func(r *sensors.Reading) { r.Station++; r.Speed = 0 }), true, false},
		{"speed", base, with(func(r *sensors.Reading) { r.Speed++ }), true, false},
		{"direction", base, with(func(r *sensors.Reading) { r.From++ }), true, false},
		{"gust", base, gust, true, false},
		{"gust value", gust, with(func(r *sensors.Reading) { r.HasGust, r.Gust = true, 9 }), true, false},
		{"a gust field without a gust", base, with(func(r *sensors.Reading) { r.Gust = 9 }), false, true},
		{"exercise", base, with(func(r *sensors.Reading) { r.Exercise = true }), true, false},
		{"a copy that came later", base, with(func(r *sensors.Reading) { r.Arrival++ }), true, true},
		{"a copy that was retained", base, with(func(r *sensors.Reading) { r.Retained = true }), true, true},
	} {
		if got := Less(row.a, row.b); got != row.less {
			t.Errorf("%s: Less %v, want %v", row.name, got, row.less)
		}
		if Less(row.a, row.b) && Less(row.b, row.a) {
			t.Errorf("%s: each is before the other", row.name)
		}
		if got := Same(row.a, row.b); got != row.same || Same(row.b, row.a) != got {
			t.Errorf("%s: Same %v, want %v", row.name, got, row.same)
		}
	}
}

func TestOrderUndoesShuffling(t *testing.T) {
	source := rand.New(rand.NewPCG(5, 6))
	var sorted []sensors.Reading
	for i := range 200 { // few values, so that many are equal in part
		sorted = append(sorted, sensors.Reading{
			Time: noon + sensors.Instant(i/8), Station: i % 8 / 4, Speed: float64(i % 4 / 2),
			From: float64(i % 2), Arrival: noon + sensors.Instant(i),
		})
	}
	order := func(a, b sensors.Reading) int {
		switch {
		case Less(a, b):
			return -1
		case Less(b, a):
			return 1
		}
		return 0
	}
	slices.SortFunc(sorted, order)
	for range 50 {
		shuffled := slices.Clone(sorted)
		source.Shuffle(len(shuffled), func(i, j int) { shuffled[i], shuffled[j] = shuffled[j], shuffled[i] })
		slices.SortFunc(shuffled, order)
		if !slices.Equal(shuffled, sorted) {
			t.Fatal("two shuffles sort differently")
		}
	}
}

func TestReasons(t *testing.T) {
	seen := map[Reason]bool{}
	for _, reason := range Reasons() {
		if reason == "" || seen[reason] {
			t.Errorf("Reasons lists %q twice or empty", reason)
		}
		seen[reason] = true
	}
	all := FlagRange | FlagStep | FlagStuck | FlagStuckVane | FlagGustBelowSpeed
	for _, reason := range all.Reasons() {
		if !seen[reason] {
			t.Errorf("flag %q is not among Reasons", reason)
		}
	}
	if got := (FlagStep | FlagGustBelowSpeed).String(); got != "step,gust-below-speed" {
		t.Errorf("flags are written %q", got)
	}
	if got := Flags(0).String(); got != "" {
		t.Errorf("no flags are written %q", got)
	}
	if (Checked{}).Usable() || (Checked{}).Verdict().String() != "unchecked" {
		t.Error("what nobody checked counts as usable")
	}
	for verdict, word := range map[Verdict]string{Accepted: "accepted", Suspect: "suspect", Rejected: "rejected", 77: "unchecked"} {
		if verdict.String() != word {
			t.Errorf("verdict %d is written %q, want %q", verdict, verdict, word)
		}
	}
}

func TestCheckSingle(t *testing.T) {
	// Limits of WMO-No. 8 and Zahumensky 2004: 75, 150 and 20 m/s.
	gust := func(speed, gust float64) sensors.Reading {
		return sensors.Reading{Speed: speed, From: 240, Gust: gust, HasGust: true}
	}
	for _, row := range []struct {
		name     string
		previous float64 // a speed one second before; negative for none
		reading  sensors.Reading
		verdict  Verdict
		flags    string
	}{
		{"plain", 6, sensors.Reading{Speed: 7, From: 240}, Accepted, ""},
		{"first ever", -1, sensors.Reading{Speed: 40, From: 240}, Accepted, ""},
		{"calm from 0", 1, sensors.Reading{}, Accepted, ""},
		{"calm with a direction", 1, sensors.Reading{From: 240}, Accepted, ""},
		{"the largest speed", 60, sensors.Reading{Speed: 75, From: 240}, Accepted, ""},
		{"beyond it", 60, sensors.Reading{Speed: 75.01, From: 240}, Rejected, "range"},
		{"below zero", 1, sensors.Reading{Speed: -0.1, From: 240}, Rejected, "range"},
		{"no number", 1, sensors.Reading{Speed: math.NaN(), From: 240}, Rejected, "range"},
		{"infinite", 1, sensors.Reading{Speed: math.Inf(1), From: 240}, Rejected, "range"},
		{"direction no number", 1, sensors.Reading{Speed: 1, From: math.NaN()}, Rejected, "range"},
		{"direction 360", 1, sensors.Reading{Speed: 1, From: 360}, Rejected, "range"},
		{"gust", 6, gust(7, 11), Accepted, ""},
		{"gust as large as the speed", 6, gust(7, 7), Accepted, ""},
		{"gust below the speed", 6, gust(7, 6.9), Suspect, "gust-below-speed"},
		{"the largest gust", 60, gust(70, 150), Accepted, ""},
		{"gust beyond it", 60, gust(70, 151), Rejected, "range"},
		{"gust below zero", 6, gust(7, -1), Rejected, "range"},
		{"gust no number", 6, gust(7, math.NaN()), Rejected, "range"},
		{"up by 20", 5, sensors.Reading{Speed: 25, From: 240}, Accepted, ""},
		{"up by more", 5, sensors.Reading{Speed: 25.5, From: 240}, Suspect, "step"},
		{"down by more", 30, sensors.Reading{Speed: 9, From: 240}, Suspect, "step"},
		{"up by more, and the gust is below", 5, gust(26, 20), Suspect, "step,gust-below-speed"},
	} {
		c := NewChecker(sensors.Station{ID: "touch07"})
		if row.previous >= 0 {
			c.Check(sensors.Reading{Time: noon - 1000, Speed: row.previous, From: 241})
		}
		row.reading.Time = noon
		got := c.Check(row.reading)
		if got.Verdict() != row.verdict || got.Flags().String() != row.flags {
			t.Errorf("%s: %v %q, want %v %q", row.name, got.Verdict(), got.Flags(), row.verdict, row.flags)
		}
		if got.Usable() != (row.verdict != Rejected) {
			t.Errorf("%s: usable %v", row.name, got.Usable())
		}
		// The reading itself is never changed (NaN is not equal to itself).
		if r := got.Reading(); r != row.reading && r.Speed == r.Speed && r.From == r.From && r.Gust == r.Gust {
			t.Errorf("%s: the reading became %+v", row.name, r)
		}
	}
}

func TestStepMemory(t *testing.T) {
	at := func(second int, speed float64) sensors.Reading {
		return sensors.Reading{Time: noon + sensors.Instant(second)*1000, Speed: speed, From: 240}
	}
	for _, row := range []struct {
		name     string
		readings []sensors.Reading
		flags    string // of the last
	}{
		{"a minute ago still counts", []sensors.Reading{at(0, 5), at(60, 30)}, "step"},
		{"longer ago does not", []sensors.Reading{at(0, 5), at(61, 30)}, ""},
		{"a rejected reading is not compared with", []sensors.Reading{at(0, 5), at(1, 200), at(2, 6)}, ""},
		{"a suspect one is", []sensors.Reading{at(0, 5), at(1, 30), at(2, 31)}, ""},
	} {
		c := NewChecker(sensors.Station{})
		var last Checked
		for _, r := range row.readings {
			last = c.Check(r)
		}
		if last.Flags().String() != row.flags {
			t.Errorf("%s: %q, want %q", row.name, last.Flags(), row.flags)
		}
	}
}

func TestStepNeverRejects(t *testing.T) {
	// Any wind an instrument can measure, however wild, is usable as long as
	// it moves.
	source := rand.New(rand.NewPCG(7, 8))
	for range 50 {
		c := NewChecker(sensors.Station{})
		steps := 0
		at := noon
		for range 2000 {
			at += sensors.Instant(100 + source.IntN(3000))
			r := sensors.Reading{Time: at, Speed: 75 * source.Float64(), From: 360 * source.Float64()}
			if source.IntN(3) == 0 {
				r.HasGust, r.Gust = true, 150*source.Float64()
			}
			got := c.Check(r)
			if got.Verdict() == Rejected {
				t.Fatalf("%+v was rejected: %v", r, got.Flags())
			}
			if got.Flags()&FlagStep != 0 {
				steps++
			}
		}
		if steps < 500 { // of two uniform speeds in 0..75, 54 % differ by more than 20
			t.Fatalf("only %d of 2000 wild steps were noticed", steps)
		}
	}
}

func TestCheckAllocatesNothing(t *testing.T) {
	c := NewChecker(sensors.Station{})
	r := sensors.Reading{Time: noon, Speed: 5, From: 240}
	if n := testing.AllocsPerRun(500, func() {
		r.Time += 1000
		c.Check(r)
	}); n > 0 {
		t.Errorf("%v allocations a reading, want 0", n)
	}
}

func BenchmarkCheck(b *testing.B) {
	c := NewChecker(sensors.Station{})
	r := sensors.Reading{Time: noon, Speed: 5, From: 240}
	b.ReportAllocs()
	for b.Loop() {
		r.Time += 1000
		r.Speed = 5 + float64(r.Time%7)
		c.Check(r)
	}
}
