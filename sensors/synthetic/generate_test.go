package synthetic

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// still is a scene of ten minutes without any scatter.
func still() *Scene {
	return &Scene{
		Name: "still", Start: episodeStart, Length: 10 * time.Minute, Seed: 1,
		From: 245, Speed: 6.4, Masts: Instrument{DelayMin: 0.1, DelayMax: 0.1},
	}
}

func allReadings(t testing.TB, s *Scene, stations []StationSpec) []sensors.Reading {
	t.Helper()
	sampler, err := s.NewSampler(stations)
	if err != nil {
		t.Fatal(err)
	}
	var all []sensors.Reading
	for more := true; more; {
		all, more = sampler.Next(all)
	}
	return all
}

func allMessages(t testing.TB, s *Scene, stations []StationSpec) []sensors.Message {
	t.Helper()
	var all []sensors.Message
	if err := s.Generate(stations, func(m sensors.Message) error {
		all = append(all, m)
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return all
}

func TestPayloads(t *testing.T) {
	fields := &sensors.FieldMap{
		Speed: "/wind/speed", Direction: "/wind/toward", Time: "at", SpeedUnit: "kt", Toward: true, TimeFormat: "unix-ms",
	}
	for _, row := range []struct {
		name    string
		station sensors.Station
		want    string
	}{
		// 1782907201 = episodeStart + 1 s
		{"SenML", sensors.Station{ID: "north1", Format: sensors.FormatSenMLJSON},
			`[{"bn":"north1/","bt":1782907201,"n":"wind_speed","u":"m/s","v":6.4},{"n":"wind_direction","u":"deg","v":245},{"n":"exercise","vb":true}]`},
		// The magnetic mast with a variation of 6.1 deg west, whose mark is known to
		// be 2 deg too far right: 245 + 6.1 - 2 = 249.1.
		{"SenML, magnetic", sensors.Station{ID: "north1", Format: sensors.FormatSenMLJSON, North: sensors.NorthMagnetic, NorthOffset: 2},
			`[{"bn":"north1/","bt":1782907201,"n":"wind_speed","u":"m/s","v":6.4},{"n":"wind_direction","u":"deg","v":249},{"n":"exercise","vb":true}]`},
		// Checksums by XOR in Python.
		{"NMEA", sensors.Station{ID: "north1", Format: sensors.FormatNMEA0183}, "$WIMWV,245.0,R,6.4,M,A*21\r\n$PSKLX,1*41\r\n"},
		// 6.4 m/s = 12.440605 kt
		{"JSON", sensors.Station{ID: "north1", Format: sensors.FormatJSON, Fields: fields},
			`{"at":1782907201000,"exercise":true,"wind":{"speed":12.440605,"toward":65}}`},
	} {
		t.Run(row.name, func(t *testing.T) {
			row.station.Topic, row.station.Height = "some/topic", 10
			messages := allMessages(t, still(), []StationSpec{{Station: row.station, Variation: -6.1}})
			if len(messages) != 600 {
				t.Fatalf("%d messages, want 600", len(messages))
			}
			m := messages[0]
			if string(m.Payload) != row.want {
				t.Errorf("payload\n%s, want\n%s", m.Payload, row.want)
			}
			if m.Topic != "some/topic" || m.Received != episodeStart+1100 || m.Retained {
				t.Errorf("message %+v", m)
			}
		})
	}
}

// Every payload of every scene carries the values of the reading it stands
// for, and the exercise mark; messages come in order of arrival.
func TestMessagesAreTheReadings(t *testing.T) {
	for _, name := range sceneNames(t) {
		t.Run(name, func(t *testing.T) {
			scene, g := sceneAndGround(t, name)
			scene.Length = min(scene.Length, 4*time.Minute)
			stations := g.stations()
			if slices.ContainsFunc(stations, func(s StationSpec) bool { return s.Station.Format != sensors.FormatSenMLJSON }) {
				t.Skip("other formats are decoded in TestDecoded")
			}
			readings := allReadings(t, scene, stations)
			slices.SortStableFunc(readings, func(a, b sensors.Reading) int { return int(a.Arrival - b.Arrival) })
			messages := allMessages(t, scene, stations)
			if len(messages) != len(readings) || len(messages) < 1500 {
				t.Fatalf("%d messages for %d readings", len(messages), len(readings))
			}
			byKey := map[string]sensors.Reading{}
			for _, r := range readings {
				byKey[fmt.Sprint(r.Arrival, stations[r.Station].Station.Topic)] = r
			}
			last := sensors.Instant(0)
			for _, m := range messages {
				if m.Received < last {
					t.Fatalf("a message of %v comes after one of %v", m.Received, last)
				}
				last = m.Received
				r, ok := byKey[fmt.Sprint(m.Received, m.Topic)]
				if !ok {
					t.Fatalf("no reading for the message of %v on %s", m.Received, m.Topic)
				}
				var pack []struct {
					Time  float64 `json:"bt"`
					Name  string  `json:"n"`
					Value float64 `json:"v"`
					Bool  bool    `json:"vb"`
				}
				if err := json.Unmarshal(m.Payload, &pack); err != nil {
					t.Fatal(err)
				}
				if len(pack) != 3 || pack[0].Value != r.Speed || pack[1].Value != r.From || !pack[2].Bool ||
					math.Round(pack[0].Time*1000) != float64(r.Time) || pack[2].Name != "exercise" {
					t.Fatalf("payload %s for reading %+v", m.Payload, r)
				}
			}
		})
	}
}

func TestGenerateRepeatsAndStops(t *testing.T) {
	scene := loadScene(t, "demo")
	stations := skerryMoor().stations()
	a, b := allMessages(t, scene, stations), allMessages(t, loadScene(t, "demo"), stations)
	if len(a) != len(b) {
		t.Fatalf("%d and %d messages of the same scene", len(a), len(b))
	}
	for i := range a {
		if a[i].Topic != b[i].Topic || a[i].Received != b[i].Received || string(a[i].Payload) != string(b[i].Payload) {
			t.Fatalf("message %d differs: %s and %s", i, a[i].Payload, b[i].Payload)
		}
	}
	full := errors.New("full")
	n := 0
	err := scene.Generate(stations, func(sensors.Message) error {
		n++
		if n == 10 {
			return full
		}
		return nil
	})
	if !errors.Is(err, full) || n != 10 {
		t.Errorf("stopped after %d messages with %v", n, err)
	}
}

// One more mast leaves the readings of the others as they were.
func TestMastsAreIndependent(t *testing.T) {
	scene := loadScene(t, "convective")
	scene.Length = time.Minute
	stations := skerryMoor().stations()
	all := allReadings(t, scene, stations)
	all = slices.DeleteFunc(all, func(r sensors.Reading) bool { return r.Station >= 3 })
	if some := allReadings(t, scene, stations[:3]); !slices.Equal(all, some) {
		t.Error("the readings of three masts depend on the other five")
	}
}

// With no noise, turbulence or fault a reading is the true wind to within the
// resolution: 0.05 m/s and 0.5 degrees.
func TestReadingsAreTheTruth(t *testing.T) {
	scene := loadScene(t, "outflow-on-path")
	scene.Turbulence, scene.Masts.Noise = 0, 0
	stations := skerryMoor().stations()
	weather := scene.Weather()
	for _, r := range allReadings(t, scene, stations) {
		spec := stations[r.Station]
		u, v := weather.Wind(spec.X, spec.Y, 10, r.Time.Sub(scene.Start).Seconds())
		truth := quantity.Vector{East: u, North: v}
		off := math.Abs(math.Mod(r.From-truth.From()+540, 360) - 180)
		if math.Abs(r.Speed-truth.Speed()) > 0.05+1e-9 || off > 0.5+1e-9 || !r.Exercise {
			t.Fatalf("%+v where the wind is %.3f m/s from %.2f", r, truth.Speed(), truth.From())
		}
	}
}

func TestFaults(t *testing.T) {
	station := []StationSpec{{Station: sensors.Station{ID: "north1", Height: 10, Format: sensors.FormatSenMLJSON}}}
	run := func(f Fault) []sensors.Reading {
		s := still()
		f.Mast = "north1"
		s.Veers = []Veer{{By: 60, Takes: 600}}
		s.Faults = []Fault{f}
		return allReadings(t, s, station)
	}
	at := func(rs []sensors.Reading, second int) sensors.Reading {
		for _, r := range rs {
			if r.Arrival == episodeStart+sensors.Instant(second)*1000+100 {
				return r
			}
		}
		return sensors.Reading{Speed: -1}
	}
	half := Span{From: 300, To: 400}
	if rs := run(Fault{Kind: FaultDead, Span: half}); len(rs) != 500 || at(rs, 300).Speed != -1 || at(rs, 400).Speed != 6.4 {
		t.Errorf("dead for 100 s: %d readings, %+v", len(rs), at(rs, 300))
	}
	rs := run(Fault{Kind: FaultStuck, Span: half})
	if at(rs, 399).From != at(rs, 300).From || at(rs, 400).From != 285 {
		t.Errorf("stuck: %g then %g, freed %g", at(rs, 300).From, at(rs, 399).From, at(rs, 400).From)
	}
	// at 350 s the wind has veered by 35 degrees, to 280
	if r := at(run(Fault{Kind: FaultTurned, Span: half, Value: 15}), 350); r.From != 265 {
		t.Errorf("turned by 15: %g", r.From)
	}
	if r := at(run(Fault{Kind: FaultFactor, Span: half, Value: 0.5}), 350); r.Speed != 3.2 {
		t.Errorf("half the speed: %g", r.Speed)
	}
	if r := at(run(Fault{Kind: FaultClock, Span: half, Value: -2}), 350); r.Time != episodeStart+348*sensors.Second {
		t.Errorf("2 s behind: %v", r.Time)
	}
	spikes := 0
	for _, r := range run(Fault{Kind: FaultSpikes, Span: Span{To: 600}, Value: 20, Rate: 0.1}) {
		if r.Speed == 26.4 {
			spikes++
		}
	}
	// binomial 599 x 0.1: 60 within four standard deviations of 7.3
	if spikes < 30 || spikes > 90 {
		t.Errorf("%d spikes of 600 readings at 10 %%", spikes)
	}
	if n := len(run(Fault{Kind: FaultDrops, Span: Span{To: 600}, Value: 0.1})); n < 510 || n > 570 {
		t.Errorf("%d of 600 readings left at 10 %% lost", n)
	}
	late := sensors.Instant(0)
	for _, r := range run(Fault{Kind: FaultLate, Span: Span{To: 600}, Value: 5}) {
		late = max(late, r.Arrival-r.Time)
	}
	if late < 4500 || late > 5000 {
		t.Errorf("the latest comes after %d ms, want nearly 5000", late)
	}
}

func TestOutageAndFormatsWithoutTime(t *testing.T) {
	s := still()
	s.Outages = []Span{{From: 100, To: 200}}
	rs := allReadings(t, s, []StationSpec{{Station: sensors.Station{ID: "north1", Height: 10, Format: sensors.FormatNMEA0183}}})
	if len(rs) != 500 {
		t.Errorf("%d readings, want 500 of 600", len(rs))
	}
	for _, r := range rs {
		if r.Time != r.Arrival {
			t.Fatalf("a sentence without a time measured at %v arrived at %v", r.Time, r.Arrival)
		}
		if s.Outages[0].Holds(r.Arrival.Sub(s.Start).Seconds()) {
			t.Fatalf("a message arrived at %v, while the broker was lost", r.Arrival)
		}
	}
}

func TestOtherIntervals(t *testing.T) {
	for interval, want := range map[time.Duration]int{250 * time.Millisecond: 2400, 2 * time.Second: 300, 700 * time.Millisecond: 857} {
		rs := allReadings(t, still(), []StationSpec{{Station: sensors.Station{ID: "north1", Height: 10, Interval: interval, Format: sensors.FormatSenMLJSON}}})
		if len(rs) != want {
			t.Errorf("every %v: %d readings, want %d", interval, len(rs), want)
		}
	}
}

func TestGenerateRefuses(t *testing.T) {
	for _, row := range []struct {
		name    string
		station sensors.Station
		phrase  string
	}{
		{"format", sensors.Station{ID: "a", Format: "morse"}, `format "morse"`},
		{"no fields", sensors.Station{ID: "a", Format: sensors.FormatJSON}, "field map"},
		{"fields collide", sensors.Station{ID: "a", Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "x", Direction: "x"}}, "both at"},
		{"field in a value", sensors.Station{ID: "a", Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "/x", Direction: "/x/y"}}, "inside a value"},
		{"speed unit", sensors.Station{ID: "a", Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "x", Direction: "y", SpeedUnit: "Bft"}}, "Bft"},
		{"interval", sensors.Station{ID: "a", Format: sensors.FormatSenMLJSON, Interval: time.Millisecond}, "interval"},
	} {
		err := still().Generate([]StationSpec{{Station: row.station}}, func(sensors.Message) error { return nil })
		if err == nil || !strings.Contains(err.Error(), row.phrase) {
			t.Errorf("%s: error %v, want %q", row.name, err, row.phrase)
		}
	}
	s := still()
	s.Faults = []Fault{{Mast: "nowhere", Kind: FaultDead}}
	if _, err := s.NewSampler(nil); err == nil || !strings.Contains(err.Error(), "nowhere") {
		t.Errorf("a fault of a mast that is not there: %v", err)
	}
}

// The mean wind's profile against the log law (10 to 40 m over 0.03 m: 1.23864,
// from ln(40/0.03)/ln(10/0.03) in Python).
func TestHeight(t *testing.T) {
	u, v := still().Weather().Wind(0, 0, 40, 0)
	near(t, "wind at 40 m", math.Hypot(u, v), 6.4*1.23864008, 1e-6)
}

// WindAlong against Wind, point by point.
func TestWindAlong(t *testing.T) {
	for _, name := range []string{"convective", "outflow-on-path", "gust-front", "demo"} {
		weather := loadScene(t, name).Weather()
		line := make([]quantity.Vector, 120)
		for _, at := range []float64{0, 30, 400} {
			weather.WindAlong(line, -4000, 1500, 60, -20, 10, at)
			for i, got := range line {
				u, v := weather.Wind(-4000+60*float64(i), 1500-20*float64(i), 10, at)
				near(t, name+" east", got.East, u, 1e-9)
				near(t, name+" north", got.North, v, 1e-9)
			}
		}
	}
}

func BenchmarkWindAlong(b *testing.B) {
	weather := loadScene(b, "outflow-on-path").Weather()
	line := make([]quantity.Vector, 107)
	for b.Loop() {
		weather.WindAlong(line, -4000, 1500, 45, 22, 10, 400)
	}
}

func BenchmarkSampler(b *testing.B) {
	scene := loadScene(b, "outflow-on-path")
	stations := skerryMoor().stations()
	var readings []sensors.Reading
	n := 0
	for b.Loop() {
		sampler, err := scene.NewSampler(stations)
		if err != nil {
			b.Fatal(err)
		}
		for more := true; more; n += len(readings) {
			readings, more = sampler.Next(readings[:0])
		}
	}
	b.ReportMetric(float64(n)/b.Elapsed().Seconds(), "readings/s")
}

func BenchmarkGenerate(b *testing.B) {
	scene := loadScene(b, "outflow-on-path")
	stations := skerryMoor().stations()
	n := 0
	for b.Loop() {
		if err := scene.Generate(stations, func(sensors.Message) error { n++; return nil }); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(n)/b.Elapsed().Seconds(), "messages/s")
}
