package wording

import (
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/hazard"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// skerryPath is a path of Skerry Moor, thresholds as in testdata/airfields.
func skerryPath(tb testing.TB, runway, operation string) airfield.Path {
	tb.Helper()
	end := func(designator string, lat, lon float64) airfield.EndSpec {
		return airfield.EndSpec{
			Designator: designator, Latitude: lat, Longitude: lon, Elevation: 42,
			GlidePath: airfield.DefaultGlidePath, CrossingHeight: airfield.DefaultCrossingHeight,
			LandingLength: airfield.DefaultLandingLength, TakeoffLength: airfield.DefaultTakeoffLength,
		}
	}
	a, err := airfield.New(airfield.Spec{
		ID: "skerrymoor", Name: "Skerry Moor", Latitude: 54, Longitude: -20, Elevation: 42,
		Runways: []airfield.RunwaySpec{{Width: 18, Ends: []airfield.EndSpec{
			end("07", 53.997479, -20.008771), end("25", 54.002520, -19.991228)}}},
		Masts: []airfield.MastSpec{{ID: "touch07", Latitude: 53.998763, Longitude: -20.008477, Height: 10}},
	})
	if err != nil {
		tb.Fatal(err)
	}
	p, ok := a.Path(runway, operation)
	if !ok {
		tb.Fatalf("no path %s %s", operation, runway)
	}
	return p
}

// measured is an assessment with a loss of 16 kt and a gain of 3 kt.
func measured(observed ...airfield.Interval) hazard.Assessment {
	const kt = quantity.Knot
	return hazard.Assessment{
		Observed: observed, Complete: true,
		Loss: hazard.Change{Median: 16.04 * kt, Low: 13 * kt, High: 19.2 * kt, From: 2904, To: 1246,
			Probability: [4]float64{0, 0.99, 0.83, 0.04}},
		Gain: hazard.Change{Median: 3 * kt, Low: 0.01 * kt, High: 6 * kt, From: 800, To: -96,
			Probability: [4]float64{0, 0.01, 0, 0}},
	}
}

func TestPathViews(t *testing.T) {
	full := airfield.Interval{From: 4010, To: -1280}
	notice := `"notice":` + string(appendString(nil, alerting.Notice)) + `}`
	const changes = `"headwind_change":{` +
		`"loss":{"change_kt":-16.0,"low_kt":-19.2,"high_kt":-13.0,"probability":{"noticeable":0.99,"large":0.83,"beyond-margin":0.04},"from_m":2900,"to_m":1250},` +
		`"gain":{"change_kt":3.0,"low_kt":0.0,"high_kt":6.0,"probability":{"noticeable":0.01,"large":0.00,"beyond-margin":0.00},"from_m":800,"to_m":-100}},`
	const when = `"at":"2026-07-01T14:15:41Z","valid_until":"2026-07-01T14:15:46Z",`
	for _, c := range []struct {
		name       string
		view       PathView
		json, text string
	}{
		{
			"raised",
			PathView{State: alerting.Raised, Assessment: measured(full), Alerts: []string{"one"}},
			`"state":"raised","reason":"","observed":[[4010,-1280]],` + changes + `"alerts":["one"],` + when + `"exercise":false,`,
			"Landing on runway 07: an alert is open. The greatest fall of the headwind on the observed ground is about 16 kt, the greatest rise about 3 kt. Not observed: between 5.0 and 4.0 km before the threshold.",
		},
		{
			"below limits, in an exercise",
			PathView{State: alerting.BelowLimits, Assessment: measured(full), Exercise: true},
			`"state":"below-limits","reason":"","observed":[[4010,-1280]],` + changes + `"alerts":[],` + when + `"exercise":true,`,
			"EXERCISE: Landing on runway 07: below the limits where it is observed. The greatest fall of the headwind on the observed ground is about 16 kt, the greatest rise about 3 kt. Not observed: between 5.0 and 4.0 km before the threshold.",
		},
		{
			"part not observed, with a reason",
			PathView{State: alerting.NotObserved, Assessment: func() hazard.Assessment {
				a := measured(airfield.Interval{From: 4010, To: 2304}, airfield.Interval{From: 640, To: -1280})
				a.Complete, a.Reason = false, "mast final07 is silent."
				return a
			}()},
			`"state":"not-observed","reason":"mast final07 is silent","observed":[[4010,2300],[640,-1280]],` + changes + `"alerts":[],` + when + `"exercise":false,`,
			"Landing on runway 07: not observed, because mast final07 is silent. The greatest fall of the headwind on the observed ground is about 16 kt, the greatest rise about 3 kt. Not observed: between 5.0 and 4.0 km before the threshold; between 2.3 and 0.6 km before the threshold.",
		},
		{
			"nothing observed, no reason known",
			PathView{State: alerting.NotObserved},
			`"state":"not-observed","reason":"no part of it is observed","observed":[],"headwind_change":null,"alerts":[],` + when + `"exercise":false,`,
			"Landing on runway 07: not observed, because no part of it is observed.",
		},
		{
			"two alerts on a path of which nothing is observed",
			PathView{State: alerting.Raised, Alerts: []string{"one", "two"}, Assessment: hazard.Assessment{Reason: "no mast reports"}},
			`"state":"raised","reason":"no mast reports","observed":[],"headwind_change":null,"alerts":["one","two"],` + when + `"exercise":false,`,
			"Landing on runway 07: 2 alerts are open. No ground of it is observed.",
		},
	} {
		t.Run(c.name, func(t *testing.T) {
			v := c.view
			v.Path = skerryPath(t, "07", airfield.Landing)
			v.At, v.ValidUntil = peaked, peaked+5*sensors.Second
			want := `{"runway":"07","operation":"landing",` + c.json + notice
			if got := string(v.JSON()); got != want {
				t.Errorf("got\n%s\nwant\n%s", got, want)
			}
			if v.Text() != c.text {
				t.Errorf("got\n%s\nwant\n%s", v.Text(), c.text)
			}
			lexical(t, v.Text())
		})
	}
}

// A take-off path is told from the start of its roll.
func TestTakeOffPathText(t *testing.T) {
	v := PathView{Path: skerryPath(t, "25", airfield.TakeOff), State: alerting.BelowLimits, Assessment: measured(airfield.Interval{From: 0, To: -5290})}
	want := "Take-off from runway 25: below the limits where it is observed. The greatest fall of the headwind on the observed ground is about 16 kt, the greatest rise about 3 kt. Not observed: between 5.3 and 6.3 km from the start of the roll."
	if v.Text() != want {
		t.Errorf("got\n%s\nwant\n%s", v.Text(), want)
	}
	lexical(t, v.Text())
}

func TestStateOf(t *testing.T) {
	observed := []airfield.Interval{{From: 4010, To: -1280}}
	for _, c := range []struct {
		name   string
		raised bool
		a      hazard.Assessment
		want   alerting.PathState
	}{
		{"observed", false, hazard.Assessment{Observed: observed, Complete: true}, alerting.BelowLimits},
		{"raised", true, hazard.Assessment{Observed: observed, Complete: true}, alerting.Raised},
		{"raised and out of sight", true, hazard.Assessment{}, alerting.Raised},
		{"incomplete", false, hazard.Assessment{Observed: observed}, alerting.NotObserved},
		{"nothing observed is never below limits", false, hazard.Assessment{Complete: true}, alerting.NotObserved},
	} {
		if got := StateOf(c.raised, &c.a); got != c.want {
			t.Errorf("%s: %s, want %s", c.name, got, c.want)
		}
	}
}

func TestStatus(t *testing.T) {
	s := Status{
		Airfield: "skerrymoor", Instance: "7f3a", Version: "0.1.0", Condition: alerting.PartlyObserving,
		At: peaked, ValidUntil: peaked + 5*sensors.Second, Live: 6, Total: 8,
		Connected: true, ClockOffset: -0.72, Degraded: "the disk is full", Remarks: []string{EmbeddedBroker},
	}
	want := `{"condition":"partly-observing","instance":"7f3a","airfield":"skerrymoor","at":"2026-07-01T14:15:41Z","valid_until":"2026-07-01T14:15:46Z",` +
		`"stations":{"live":6,"total":8},"broker":{"connected":true,"subscribed":false},"clock_offset_s":-0.7,"history":{"degraded":true,"reason":"the disk is full"},` +
		`"remarks":["The broker is built in: nobody is told when this program stops."],"version":"0.1.0","exercise":false,` +
		`"notice":` + string(appendString(nil, alerting.Notice)) + `}`
	if got := string(s.JSON()); got != want {
		t.Errorf("got\n%s\nwant\n%s", got, want)
	}
	for _, c := range []struct {
		edit func(*Status)
		want string
	}{
		{func(*Status) {}, "Partly observing: ground that matters is not observed on some paths. 6 of 8 masts report. The history may miss what is told now: the disk is full. The broker is built in: nobody is told when this program stops."},
		{func(s *Status) { *s = Status{Condition: alerting.Observing, Live: 8, Total: 8, Exercise: true} },
			"EXERCISE: Observing: the ground that matters is observed on every path. 8 of 8 masts report."},
		{func(s *Status) { *s = Status{Condition: alerting.Blind, Total: 8} }, "Blind: no path is observed. 0 of 8 masts report."},
		{func(s *Status) { *s = Status{Condition: alerting.NoContact} }, "No contact: nothing is known of the wind."},
	} {
		v := s
		c.edit(&v)
		if v.Text() != c.want {
			t.Errorf("got\n%s\nwant\n%s", v.Text(), c.want)
		}
		lexical(t, v.Text())
	}
}

func TestEndTexts(t *testing.T) {
	const kt = quantity.Knot
	for _, c := range []struct {
		name string
		wind EndWind
		want string
	}{
		// Wind 210 true at 20 kt, flight along 180 true: headwind 17.3 kt and
		// 10.0 kt from the right, by hand: 20 cos 30 and 20 sin 30.
		{"headwind and gusts", EndWind{Runway: "18", Observed: true, Mean: 20 * kt, From: 210, Gust: 31 * kt, HasGust: true,
			Headwind: 17.321 * kt, Crosswind: 10 * kt, Variation: -6.1},
			"Wind at runway 18: from 220 degrees magnetic at 20 kt, gusts to 31 kt; headwind 17 kt, crosswind 10 kt from the right."},
		{"tailwind, from the left", EndWind{Runway: "07", Observed: true, Mean: 8 * kt, From: 200, Headwind: -5 * kt, Crosswind: -6 * kt},
			"Wind at runway 07: from 200 degrees magnetic at 8 kt; tailwind 5 kt, crosswind 6 kt from the left."},
		{"north is 360, no crosswind to speak of", EndWind{Runway: "36", Observed: true, Mean: 9 * kt, From: 3, Headwind: 9 * kt, Crosswind: -0.3 * kt, Variation: 2},
			"Wind at runway 36: from 360 degrees magnetic at 9 kt; headwind 9 kt, crosswind less than 1 kt."},
		{"an easterly variation is subtracted, three digits", EndWind{Runway: "07", Observed: true, Mean: 9 * kt, From: 74, Headwind: 9 * kt, Crosswind: 2 * kt, Variation: 12},
			"Wind at runway 07: from 060 degrees magnetic at 9 kt; headwind 9 kt, crosswind 2 kt from the right."},
		{"calm", EndWind{Runway: "07", Observed: true, Mean: 0.4, From: 70}, "Wind at runway 07: calm, the mean under 1 kt."},
		{"not observed", EndWind{Runway: "07", Reason: "mast touch07 is silent"}, "Wind at runway 07: not observed, because mast touch07 is silent."},
		{"not observed, an exercise", EndWind{Runway: "07", Exercise: true}, "EXERCISE: Wind at runway 07: not observed."},
	} {
		t.Run(c.name, func(t *testing.T) {
			if got := EndText(c.wind); got != c.want {
				t.Errorf("got\n%s\nwant\n%s", got, c.want)
			}
			lexical(t, EndText(c.wind))
		})
	}
}

// TestEndObjectSaysWhatTheSentenceSays: the figures of the object are those of
// the sentence, and what is not observed has none.
func TestEndObjectSaysWhatTheSentenceSays(t *testing.T) {
	random := rand.New(rand.NewPCG(3, 7))
	for range 2000 {
		e := EndWind{
			Runway: "07", Observed: random.IntN(8) > 0, Mean: 20 * random.Float64(), From: 360 * random.Float64(),
			Gust: 30 * random.Float64(), HasGust: random.IntN(2) == 0, Spread: 180 * random.Float64(), HasSpread: true,
			Headwind: 20 * (random.Float64() - 0.5), Crosswind: 20 * (random.Float64() - 0.5), Variation: -3,
		}
		var o struct {
			Observed  bool
			Sentence  string
			From      *float64 `json:"from_magnetic_deg"`
			Speed     *float64 `json:"speed_kt"`
			Gust      *float64 `json:"gust_kt"`
			Headwind  *float64 `json:"headwind_kt"`
			Crosswind *float64 `json:"crosswind_kt"`
			Side      *string  `json:"crosswind_from"`
			Notice    string
		}
		if err := json.Unmarshal(e.JSON(), &o); err != nil {
			t.Fatalf("%v\n%s", err, e.JSON())
		}
		if o.Notice != alerting.Notice || o.Observed != e.Observed || o.Sentence != EndText(e) {
			t.Fatalf("%s", e.JSON())
		}
		if !e.Observed {
			if o.From != nil || o.Speed != nil || o.Gust != nil || o.Headwind != nil || o.Crosswind != nil || o.Side != nil {
				t.Fatalf("not observed, and yet %s", e.JSON())
			}
			continue
		}
		var want []string
		if o.From != nil {
			want = append(want, fmt.Sprintf("from %03.0f degrees magnetic", *o.From))
		} else {
			want = append(want, "calm")
		}
		if o.Gust != nil && *o.Gust >= 1 {
			want = append(want, fmt.Sprintf("gusts to %.0f kt", *o.Gust))
		}
		if o.From != nil && *o.Headwind <= -1 {
			want = append(want, fmt.Sprintf("tailwind %.0f kt", -*o.Headwind))
		}
		if o.From != nil && o.Side != nil {
			want = append(want, fmt.Sprintf("crosswind %.0f kt from the %s", *o.Crosswind, *o.Side))
		}
		for _, w := range want {
			if !strings.Contains(o.Sentence, w) {
				t.Fatalf("the sentence is without %q: %s", w, e.JSON())
			}
		}
	}
}
