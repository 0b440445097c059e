package wording

import (
	"encoding/json"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/outflow"
	"sockline/alerting/shear"
)

func theField(t *testing.T) *airfield.Airfield {
	t.Helper()
	a, err := airfield.New(airfield.Spec{
		ID: "skerrymoor", Name: "Skerry Moor", Latitude: 54, Longitude: -20, Elevation: 42,
		Runways: []airfield.RunwaySpec{{Width: 18, Ends: []airfield.EndSpec{
			{Designator: "07", Latitude: 53.997479, Longitude: -20.008771, Elevation: 41, GlidePath: 3, CrossingHeight: 15, LandingLength: 5000, TakeoffLength: 5000},
			{Designator: "25", Latitude: 54.002520, Longitude: -19.991228, Elevation: 43, GlidePath: 3, CrossingHeight: 15, LandingLength: 5000, TakeoffLength: 5000},
		}}},
		Masts: []airfield.MastSpec{{ID: "touch07", Latitude: 53.998763, Longitude: -20.008477, Height: 10}},
	})
	if err != nil {
		t.Fatal(err)
	}
	return a
}

// An outflow is told with place, amount, motion, trend and the paths that it
// lies on or comes to; the object carries the notice and its figures in knots.
func TestOutflowIsTold(t *testing.T) {
	v := OutflowView{Airfield: theField(t), Outflow: outflow.Outflow{
		Probability: 0.97, X: -1700, Y: -900, Spread: [3]float64{1e4, 0, 1e4}, Radius: 900, RadiusLow: 600, RadiusHigh: 1300,
		Strength: 10.288889, StrengthLow: 8.231111, StrengthHigh: 12.346667, Divergence: 0.031,
		Motion: outflow.Motion{Known: true, East: 5, North: 5, Spread: 2}, Trend: outflow.Growing,
		Reaches: []outflow.Reach{{Path: 0, Seconds: 0}, {Path: 2, Seconds: 43}},
	}}
	const want = "A microburst is centred about 1.3 km southwest of the threshold of runway 07: the wind changes by about 40 kt " +
		"(32 to 48) from one side to the other, over about 1.8 km, at mast height; it moves towards the northeast at about 14 kt " +
		"and is growing. It lies on landing on runway 07. It reaches landing on runway 25 in about 40 s."
	if got := v.Text(); got != want {
		t.Errorf("told is\n%s\nwant\n%s", got, want)
	}
	var o map[string]any
	if err := json.Unmarshal(v.JSON(), &o); err != nil {
		t.Fatal(err)
	}
	if o["notice"] != alerting.Notice || o["differential_kt"] != 40.0 || o["extent"] != "microburst" || o["text"] != want {
		t.Errorf("the object is %v", o)
	}
	if inner, outer := o["inner"].([]any), o["outer"].([]any); len(inner) != corners || len(outer) != corners {
		t.Errorf("contours of %d and %d corners", len(inner), len(outer))
	}
	v.Exercise, v.Outflow.Motion.Known, v.Outflow.Trend, v.Outflow.Reaches = true, false, outflow.TrendUnknown, nil
	v.Outflow.Strength = 2
	if got := v.Text(); !strings.HasPrefix(got, "EXERCISE: An outflow of air is centred") || !strings.HasSuffix(got, "its motion is not yet known.") {
		t.Errorf("told is %s", got)
	}
}

// What is not observed has no numbers, and a loss ahead is negative.
func TestProfileObject(t *testing.T) {
	v := ProfileView{Path: theField(t).Paths[0], Points: []shear.ProfilePoint{
		{At: 200, Headwind: 5.144444, Low: 4.115556, High: 6.173333, Observed: true}, {At: 0, Headwind: 1},
	}, Ahead: &shear.Forecast{Seconds: 60, Loss: [3]float64{0.514444, 1.028889, 2.057778}}}
	const want = `{"runway":"07","operation":"landing","points":[{"at_m":200,"headwind_kt":10.0,"low_kt":8.0,"high_kt":12.0,"observed":true},` +
		`{"at_m":0,"headwind_kt":null,"low_kt":null,"high_kt":null,"observed":false}],"crosswind_change_kt":0.0,` +
		`"ahead":{"in_s":60,"loss":{"change_kt":-2.0,"low_kt":-4.0,"high_kt":-1.0},"gain":{"change_kt":0.0,"low_kt":0.0,"high_kt":0.0}},"exercise":false}`
	if got := string(v.JSON()); got != want {
		t.Errorf("the object is\n%s\nwant\n%s", got, want)
	}
}
