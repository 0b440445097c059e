package synthetic

import (
	"errors"
	"math"
	"os"
	"reflect"
	"strings"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

const sceneHead = "airfield skerrymoor\nstart 2026-07-01T14:00:00Z\nlength 20 min\nwind 240 deg 10 kt\n"

// everyStatement uses each statement, option and form of place and time.
const everyStatement = `# whole line
title      Two words   # a comment
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     20 min
seed       7
wind       240 deg 10 kt
roughness  0.1 m
turbulence B
eddies     0.8 m/s length 1000 m time 300 s
aloft      from 250 deg 12 m/s above 25 m starts 3 min grows 4 min
veer       -40 deg starts 3 min takes 10 min
rise       from 180 deg 10 m/s starts 4 min grows 90 s
rise       grows 1 min from 90 deg 5 m/s starts 0 s fades 2 min holds 5 min crosses 100 m east -200 m north toward 270 deg 8 m/s
front      passes mast far07 at 6 min toward 090 deg 9 m/s strength 10 m/s width 150 m
front      passes 0 m before 07 at 6 min toward 090 deg 9 m/s strength 10 m/s width 150 m from 0 deg curve 6 km fades 10 min
outflow    model vicroy profile wall-jet height 60 m at 300 m beyond 07 strength 10 m/s radius 900 m starts 5 min grows 5 min holds 3 min fades 4 min stretch 1.5 axis 30 deg moves toward 90 deg 5 m/s spreads 1 m/s
masts      noise 0.2 m/s drop 1 % delay 20 ms to 300 ms
mast far07 dies at 8 min
mast touch07 sticks from 6 min until 7 min
mast far25 turned 15 deg
mast far25 reads 80 %
mast far25 spikes 20 kt on 1 %
mast far25 clock behind 2 s
mast far25 drops 20 %
mast far25 delays to 3 s
broker     lost from 5 min to 7 min
expect     alert headwind-loss on landing 07 level large by 9 min
expect     no alert
expect     no alert level large at 3 min
expect     no alert headwind-gain on take-off 25
expect     quiet on landing 25
expect     closed headwind-loss on landing 07 because not-observed from 9 min
expect     unseen headwind-loss on landing 07 between 8 min and 9 min
expect     not-observed on landing 07 between 4 min and 8 min
expect     unobserved -500 m to 5 km on landing 07
expect     missing far07 on landing 07 from 9 min
`

func TestParseEveryStatement(t *testing.T) {
	g := skerryMoor()
	s, err := Parse("some/dir/every.scene", []byte(everyStatement), g)
	if err != nil {
		t.Fatal(err)
	}
	far := g.masts["far07"]
	thresholdX, thresholdY, _ := g.Along("07", 0, 0)
	outX, outY, _ := g.Along("07", -300, 0)
	forever := math.Inf(1)
	always := Span{To: forever}
	want := &Scene{
		Name: "every", Title: "Two words", Airfield: "skerrymoor",
		// date -u -d 2026-07-01T14:00:00Z +%s
		Start: 1782914400 * sensors.Second, Length: 20 * time.Minute, Seed: 7,
		From: 240, Speed: 10 * 1852.0 / 3600, Roughness: 0.1, Turbulence: 0.14,
		Eddies: Eddies{Deviation: 0.8, Length: 1000, Time: 300},
		Aloft:  Aloft{From: 250, Speed: 12, Above: 25, Starts: 180, Grows: 240},
		Veers:  []Veer{{By: -40, Starts: 180, Takes: 600}},
		Rises: []Rise{
			{Wind: quantity.FromDirection(10, 180), History: History{Starts: 240, Grows: 90}, Stays: true},
			{Wind: quantity.FromDirection(5, 90), History: History{Grows: 60, Holds: 300, Fades: 120}, X: 100, Y: -200, Toward: 270, Speed: 8},
		},
		Fronts: []Front{
			{X: far[0], Y: far[1], Passes: 360, Toward: 90, Speed: 9, Step: quantity.FromDirection(10, 270), Width: 150},
			{X: thresholdX, Y: thresholdY, Passes: 360, Toward: 90, Speed: 9, Step: quantity.FromDirection(10, 0), Width: 150, Curve: 6000, Fades: 600},
		},
		Outflows: []Outflow{{
			Model: ModelVicroy, Profile: ProfileWallJet, Height: 60, X: outX, Y: outY, Strength: 10, Radius: 900,
			History: History{Starts: 300, Grows: 300, Holds: 180, Fades: 240}, Stretch: 1.5, Axis: 30, MotionX: 5,
			MotionY: quantity.FromDirection(5, 270).North, Spread: 1,
		}},
		Masts: Instrument{Noise: 0.2, Drops: 0.01, DelayMin: 0.02, DelayMax: 0.3},
		Faults: []Fault{
			{Mast: "far07", Kind: FaultDead, Span: Span{480, forever}},
			{Mast: "touch07", Kind: FaultStuck, Span: Span{360, 420}},
			{Mast: "far25", Kind: FaultTurned, Span: always, Value: 15},
			{Mast: "far25", Kind: FaultFactor, Span: always, Value: 0.8},
			{Mast: "far25", Kind: FaultSpikes, Span: always, Value: 20 * quantity.Knot, Rate: 0.01},
			{Mast: "far25", Kind: FaultClock, Span: always, Value: -2},
			{Mast: "far25", Kind: FaultDrops, Span: always, Value: 0.2},
			{Mast: "far25", Kind: FaultLate, Span: always, Value: 3},
		},
		Outages: []Span{{300, 420}},
		Expectations: []Expectation{
			{Line: 28, Kind: ExpectAlert, AlertKind: "headwind-loss", Operation: "landing", Runway: "07", Level: "large", Span: Span{0, 540}},
			{Line: 29, Kind: ExpectNoAlert, Span: always},
			{Line: 30, Kind: ExpectNoAlert, Level: "large", Span: Span{180, 181}},
			{Line: 31, Kind: ExpectNoAlert, AlertKind: "headwind-gain", Operation: "take-off", Runway: "25", Span: always},
			{Line: 32, Kind: ExpectNoAlert, Operation: "landing", Runway: "25", Span: always},
			{Line: 33, Kind: ExpectClosed, AlertKind: "headwind-loss", Operation: "landing", Runway: "07", Because: "not-observed", Span: Span{540, forever}},
			{Line: 34, Kind: ExpectUnseen, AlertKind: "headwind-loss", Operation: "landing", Runway: "07", Span: Span{480, 540}},
			{Line: 35, Kind: ExpectState, State: "not-observed", Operation: "landing", Runway: "07", Span: Span{240, 480}},
			{Line: 36, Kind: ExpectUnobserved, FromM: 5000, ToM: -500, Operation: "landing", Runway: "07", Span: always},
			{Line: 37, Kind: ExpectMissing, Mast: "far07", Operation: "landing", Runway: "07", Span: Span{540, forever}},
		},
	}
	got, wanted := reflect.ValueOf(*s), reflect.ValueOf(*want)
	for i := range got.NumField() {
		if !reflect.DeepEqual(got.Field(i).Interface(), wanted.Field(i).Interface()) {
			t.Errorf("%s:\n got %+v\nwant %+v", got.Type().Field(i).Name, got.Field(i), wanted.Field(i))
		}
	}
}

func TestParseRefuses(t *testing.T) {
	for _, row := range []struct{ name, statement, phrase string }{
		{"unknown statement", "wibble 3", "there is no such statement"},
		{"second wind", "wind 240 deg 12 kt", "already stands in line 4"},
		{"wrong unit", "roughness 3 kt", "unit"},
		{"no unit", "roughness 3", "the unit of the roughness is expected"},
		{"out of bounds", "eddies 80 m/s length 1000 m time 300 s", "out of bounds"},
		{"direction beyond the circle", "rise from 400 deg 10 kt starts 1 min grows 1 min", "out of bounds"},
		{"missing option", "eddies 0.8 m/s length 1000 m", `"time" is missing`},
		{"option twice", "eddies 0.8 m/s length 1000 m length 2 km time 300 s", `"length" stands twice`},
		{"option unknown", "eddies 0.8 m/s width 1000 m", `"width" is not expected`},
		{"words left over", "seed 3 4", `"4" is not expected here`},
		{"negative seed", "seed -3", "whole number"},
		{"runway that is not there", "outflow at 2 km before 09 strength 9 kt radius 900 m starts 1 s grows 1 s holds 1 s fades 1 s", `no runway end "09"`},
		{"mast that is not there", "mast far09 dies", `no mast "far09"`},
		{"holds without fades", "rise from 90 deg 10 kt starts 1 min grows 1 min holds 2 min", "together"},
		{"fades without holds", "rise from 90 deg 10 kt starts 1 min grows 1 min fades 2 min", "together"},
		{"fault unknown", "mast far07 sleeps", "not a fault"},
		{"ends before it begins", "broker lost from 7 min to 5 min", "not after its begin"},
		{"kind misspelt", "expect no alert headwind-los", "not a kind of alert"},
		{"level misspelt", "expect no alert level larg", "not a level"},
		{"path needed", "expect alert headwind-loss by 3 min", `"on" is missing`},
		{"path unknown", "expect quiet on landing 09", `no runway end "09"`},
		{"two times", "expect quiet by 3 min at 4 min", "two times"},
		{"level of a state", "expect raised on landing 07 level large", `"level" is not expected`},
		{"class unknown", "turbulence D", "not a turbulence class"},
		{"empty title", "title", "a text is expected"},
		{"cut off", "front passes 0 m before 07 at", "is expected at the end"},
		{"not a number", "mast far07 reads NaN %", "a number is expected"},
	} {
		t.Run(row.name, func(t *testing.T) {
			_, err := Parse("x.scene", []byte(sceneHead+row.statement+"\n"), skerryMoor())
			var fault *ParseError
			if !errors.As(err, &fault) {
				t.Fatalf("error %v, want a *ParseError", err)
			}
			if fault.Line != 5 || fault.File != "x.scene" || !strings.Contains(err.Error(), row.phrase) {
				t.Errorf("error %q, want one of line 5 with %q", err, row.phrase)
			}
		})
	}
}

func TestParseReportsAllFaults(t *testing.T) {
	_, err := Parse("x.scene", []byte("start yesterday\nlength 1 parsec\nlength 0 s\nwibble\n"), skerryMoor())
	for _, phrase := range []string{"x.scene:1: start", "x.scene:2: length", "x.scene:3: length", "x.scene:4: wibble",
		`"airfield" is missing`, `"wind" is missing`} {
		if err == nil || !strings.Contains(err.Error(), phrase) {
			t.Errorf("error %v does not hold %q", err, phrase)
		}
	}
}

func FuzzParse(f *testing.F) {
	for _, name := range sceneNames(f) {
		source, err := os.ReadFile("../../testdata/scenes/" + name + ".scene")
		if err != nil {
			f.Fatal(err)
		}
		f.Add(source)
	}
	f.Add([]byte(sceneHead + "mast far25 clock behind 2 s\nbroker lost from 5 min to 7 min"))
	g := skerryMoor()
	f.Fuzz(func(t *testing.T, source []byte) {
		scene, err := Parse("fuzz.scene", source, g)
		if err != nil {
			var fault *ParseError
			if scene != nil || !errors.As(err, &fault) || fault.Line < 1 {
				t.Fatalf("scene %v with error %v", scene, err)
			}
			return
		}
		// Whatever was accepted has a wind that is a number, at any time.
		w := scene.Weather()
		for _, at := range []float64{0, 1, 300, scene.Length.Seconds()} {
			u, v := w.Wind(100, -300, 10, at)
			if math.IsNaN(u) || math.IsNaN(v) || math.Hypot(u, v) > 1e5 {
				t.Fatalf("the wind at %g s is (%g, %g)", at, u, v)
			}
		}
	})
}
