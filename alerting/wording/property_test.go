package wording

import (
	"bytes"
	"encoding/json"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/front"
	"sockline/alerting/hazard"
	"sockline/alerting/lifecycle"
	"sockline/alerting/vertical"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// alertKeys are the keys of the alert object in the order of the outside face.
var alertKeys = strings.Fields(`id occurrence revision airfield runway operation kind level state opened updated closed
	closed_because change_kt change_low_kt change_high_kt probability from_m to_m over_m at_edge observed
	shear_kt_per_1000ft mean_slope_kt_per_1000ft fbar cause trend peak stations text recorded exercise notice`)

// pathKeys are those of the path object.
var pathKeys = strings.Fields(`runway operation state reason observed headwind_change alerts at valid_until exercise notice`)

// draw makes random alerts; one number in odd is not finite.
type draw struct {
	*rand.Rand
	odd int
}

func pick[T any](d draw, from ...T) T { return from[d.IntN(len(from))] }

func (d draw) number(scale float64) float64 {
	if d.odd > 0 && d.IntN(d.odd) == 0 {
		return pick(d, math.NaN(), math.Inf(1), math.Inf(-1), math.Copysign(0, -1), 1e12, -1e12)
	}
	return scale * d.NormFloat64()
}

func (d draw) alert() lifecycle.Alert {
	m := slices.Sorted(slices.Values([]float64{math.Abs(d.number(10)), math.Abs(d.number(10)), math.Abs(d.number(10))}))
	place := []float64{d.number(3000), d.number(3000)}
	updated := opened.Add(time.Duration(d.IntN(3600)) * time.Second)
	a := lifecycle.Alert{
		ID: `an "odd" <id>` + "\n", Occurrence: "o", Revision: 1 + d.IntN(9),
		Runway: pick(d, "07", "25", "16L"), Operation: pick(d, airfield.Landing, airfield.TakeOff),
		Kind:  pick(d, alerting.Kinds()...),
		Level: pick(d, alerting.Noticeable, alerting.Large, alerting.BeyondMargin), State: lifecycle.Open,
		Opened: opened, Updated: updated,
		Change: m[1], ChangeLow: m[0], ChangeHigh: m[2], Probability: d.Float64(),
		From: max(place[0], place[1]), To: min(place[0], place[1]), AtEdge: d.IntN(2) == 0, Observed: d.IntN(2) == 0,
		MeasuredAt: updated, MaxSlope: math.Abs(d.number(0.02)), MeanSlope: math.Abs(d.number(0.01)), FBar: d.number(0.05),
		Cause: alerting.Unresolved, Trend: pick(d, lifecycle.Growing, lifecycle.Steady, lifecycle.Fading, lifecycle.TrendUnknown),
		PeakChange: m[2], PeakAt: updated, Used: []string{"far07"}, Missing: pick(d, nil, []string{"a"}, []string{"a", "b", "c"}),
		Exercise: d.IntN(2) == 0,
	}
	a.Detail = d.detail()
	a.Memory.Held[a.Level] = pick(d, opened, updated)
	if a.Kind == alerting.HeadwindLoss {
		a.Change, a.ChangeLow, a.ChangeHigh, a.PeakChange = -m[1], -m[2], -m[0], -m[2]
	}
	if d.IntN(3) == 0 {
		a.State, a.Closed = lifecycle.Closed, updated
		a.Because = pick(d, lifecycle.BelowLevel, lifecycle.NotObserved, lifecycle.PathWithdrawn, lifecycle.ExpiredWhileDown)
	}
	return a
}

func (d draw) detail() hazard.Detail {
	wind := func() quantity.Vector { return quantity.Vector{East: d.number(8), North: d.number(8)} }
	return hazard.Detail{
		Turn: d.number(90), Before: wind(), After: wind(), Moving: d.IntN(2) == 0, Lower: 10, Upper: math.Abs(d.number(80)),
		RateKnown: d.IntN(2) == 0, Rate: math.Abs(d.number(5)), Neutral: d.number(2), Class: pick(d, "", "strong"),
		Sign: pick(d, vertical.NoSign, vertical.NightInversion, vertical.StillBelow, vertical.Jet), Limit: pick(d, 0, 10.3),
		FromLeft: d.IntN(2) == 0, Mast: pick(d, "", "tower-10"), Variation: d.number(10),
	}
}

// Every front and every pair of levels has its notice, keys in one order, and
// sentences that keep to the rules, whatever the numbers are.
func TestRandomFrontsAndColumns(t *testing.T) {
	d := draw{rand.New(rand.NewPCG(9, 9)), 10}
	var keys, verticalKeys []string
	for range 2_000 {
		wind := func() quantity.Vector { return quantity.Vector{East: d.number(8), North: d.number(8)} }
		v := FrontView{At: opened, Variation: d.number(8), Exercise: d.IntN(2) == 0, Front: front.Front{
			Kind: pick(d, front.GustFront, front.WindShift), First: opened, Confidence: d.Float64(), Moving: d.IntN(2) == 0,
			X: d.number(3000), Y: d.number(3000), Toward: 360 * d.Float64(), Band: math.Abs(d.number(300)), Speed: math.Abs(d.number(9)),
			SpeedLow: math.Abs(d.number(7)), SpeedHigh: math.Abs(d.number(12)), Aligned: d.IntN(2) == 0, Apparent: pick(d, 0, 12.0),
			Before: wind(), After: wind(), Change: wind(), Turn: d.number(90),
		}}
		for i := range d.IntN(4) {
			at := opened.Add(time.Duration(d.IntN(600)) * time.Second)
			v.Front.Arrivals = append(v.Front.Arrivals, front.Arrival{Place: pick(d, "threshold 07", "far07"), Mast: i - 1, X: d.number(3000),
				At: at, Earliest: at - 9000, Latest: at + 9000, Arrived: d.IntN(2) == 0})
		}
		got := keysOf(t, v.JSON())
		if keys == nil {
			keys = got
		}
		c := VerticalView{Variation: 3, Exercise: d.IntN(2) == 0, Shear: vertical.Shear{Place: "tower-10", LowerM: 10, UpperM: 40, Below: wind(),
			Above: wind(), Difference: math.Abs(d.number(8)), RateKnown: d.IntN(2) == 0, Rate: math.Abs(d.number(5)),
			Class: pick(d, vertical.Unclassed, vertical.Severe), Neutral: d.number(2), Sign: pick(d, vertical.NoSign, vertical.NightInversion, vertical.Jet)}}
		other := keysOf(t, c.JSON())
		if verticalKeys == nil {
			verticalKeys = other
		}
		if !slices.Equal(keys, got) || !slices.Equal(verticalKeys, other) {
			t.Fatalf("keys %v, %v", got, other)
		}
		for _, b := range [][]byte{v.JSON(), c.JSON()} {
			if !bytes.Contains(b, []byte(`"notice":`)) || bytes.Contains(b, []byte("NaN")) {
				t.Fatalf("%s", b)
			}
		}
		lexical(t, v.Text())
		lexical(t, c.Text())
		if t.Failed() {
			return
		}
	}
}

// keysOf are the top keys of an object in their order.
func keysOf(tb testing.TB, object []byte) []string {
	tb.Helper()
	if !json.Valid(object) {
		tb.Fatalf("not JSON: %s", object)
	}
	dec := json.NewDecoder(bytes.NewReader(object))
	if _, err := dec.Token(); err != nil {
		tb.Fatal(err)
	}
	var keys []string
	for dec.More() {
		key, err := dec.Token()
		if err != nil {
			tb.Fatal(err)
		}
		var value json.RawMessage
		if err := dec.Decode(&value); err != nil {
			tb.Fatal(err)
		}
		keys = append(keys, key.(string))
	}
	return keys
}

func TestRandomNotices(t *testing.T) {
	d := draw{rand.New(rand.NewPCG(7, 7)), 8}
	for range 5_000 {
		a := d.alert()
		c := Context{Airfield: "skerrymoor", Exercise: d.IntN(2) == 0, Margin: pick(d, 0, 17.3*quantity.Knot), MarginIsStall: d.IntN(2) == 0}
		n := Of(lifecycle.Transition{At: a.Updated, Alert: a}, c).WithRecorded(d.IntN(2) == 0)
		b := n.JSON()
		got := keysOf(t, b)
		if other := slices.Index(got, "detail"); (other >= 0) != !alongPath(a.Kind) {
			t.Fatalf("detail of a %s: %s", a.Kind, b)
		} else if other >= 0 {
			got = slices.Delete(got, other, other+1)
		}
		if !slices.Equal(got, alertKeys) {
			t.Fatalf("keys %v in %s", got, b)
		}
		if bytes.Contains(b, []byte("-0.0,")) || bytes.Contains(b, []byte(":-0,")) {
			t.Fatalf("a zero with a sign in %s", b)
		}
		var back struct {
			Low      *float64 `json:"change_low_kt"`
			Middle   *float64 `json:"change_kt"`
			High     *float64 `json:"change_high_kt"`
			Text     string   `json:"text"`
			Notice   string   `json:"notice"`
			Exercise bool     `json:"exercise"`
		}
		if err := json.Unmarshal(b, &back); err != nil {
			t.Fatal(err)
		}
		if back.Notice != alerting.Notice || back.Text != n.Text() {
			t.Fatalf("notice or text in %s", b)
		}
		if back.Low != nil && back.Middle != nil && back.High != nil && (*back.Low > *back.Middle || *back.Middle > *back.High) {
			t.Fatalf("interval in %s", b)
		}
		if exercise := a.Exercise || c.Exercise; back.Exercise != exercise || exercise != strings.HasPrefix(n.Text(), "EXERCISE") {
			t.Fatalf("exercise in %s", b)
		}
		if alongPath(a.Kind) && a.AtEdge && a.State == lifecycle.Open && !strings.Contains(n.Text(), "at least") && !strings.Contains(n.Text(), "less than 1 kt") && !strings.Contains(n.Text(), "unknown amount") {
			t.Fatalf("at the edge without at least: %s", n.Text())
		}
		if !a.Observed && a.State == lifecycle.Open && !strings.Contains(n.Text(), "Not observed now: last measured at "+clock(a.MeasuredAt)) {
			t.Fatalf("not observed, not said: %s", n.Text())
		}
		lexical(t, n.Text())
		if t.Failed() {
			return
		}
	}
}

func TestRandomPaths(t *testing.T) {
	d := draw{rand.New(rand.NewPCG(8, 8)), 10}
	paths := []airfield.Path{skerryPath(t, "07", airfield.Landing), skerryPath(t, "25", airfield.TakeOff)}
	change := func() hazard.Change {
		return hazard.Change{Median: math.Abs(d.number(5)), Low: math.Abs(d.number(5)), High: math.Abs(d.number(5)),
			Probability: [4]float64{0, d.number(1), d.number(1), d.number(1)}, From: d.number(3000), To: d.number(3000), AtEdge: d.IntN(2) == 0}
	}
	for range 2_000 {
		v := PathView{
			Path: pick(d, paths...), Assessment: hazard.Assessment{Loss: change(), Gain: change(), Reason: pick(d, "", "no mast reports")},
			At: peaked, ValidUntil: peaked + 5*sensors.Second, Exercise: d.IntN(2) == 0, Alerts: pick(d, nil, []string{"x"}),
		}
		for range d.IntN(3) {
			from := 6000 * d.Float64()
			v.Assessment.Observed = append(v.Assessment.Observed, airfield.Interval{From: from, To: from - 3000*d.Float64()})
		}
		v.State = StateOf(len(v.Alerts) > 0, &v.Assessment)
		if got := keysOf(t, v.JSON()); !slices.Equal(got, pathKeys) {
			t.Fatalf("keys %v in %s", got, v.JSON())
		}
		if v.State == alerting.NotObserved && v.reason() == "" {
			t.Fatalf("not observed without a reason: %s", v.JSON())
		}
		lexical(t, v.Text())
		if t.Failed() {
			return
		}
	}
}

func BenchmarkNotice(b *testing.B) {
	tr := lifecycle.Transition{At: peaked, Alert: example()}
	b.ReportAllocs()
	for b.Loop() {
		if n := Of(tr, stall); len(n.JSON()) == 0 {
			b.Fatal("empty")
		}
	}
}
