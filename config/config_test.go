package config

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"sockline/alerting/airfield"
	"sockline/sensors"
)

const (
	airfields = "../testdata/airfields"
	cases     = "../testdata/config"
)

func mustGlob(t testing.TB, pattern string, least int) []string {
	t.Helper()
	names, err := filepath.Glob(pattern)
	if err != nil || len(names) < least {
		t.Fatalf("%s: %d files, %v", pattern, len(names), err)
	}
	return names
}

func mustLoad(t testing.TB, path string) *Config {
	t.Helper()
	cfg, err := Load(path)
	if err != nil {
		t.Fatal(err)
	}
	return cfg
}

func mustRead(t testing.TB, path string) []byte {
	t.Helper()
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return data
}

// Each *.bad.toml begins with one `# expect: line:column phrase` for each
// problem in it, in order, and has no other problem.
func TestBadConfigurations(t *testing.T) {
	for _, name := range mustGlob(t, filepath.Join(cases, "*.bad.toml"), 90) {
		t.Run(filepath.Base(name), func(t *testing.T) {
			data := mustRead(t, name)
			var want []string
			for line := range strings.Lines(string(data)) {
				expected, ok := strings.CutPrefix(strings.TrimRight(line, "\n"), "# expect: ")
				if !ok {
					break
				}
				want = append(want, expected)
			}
			cfg, problems := Parse(name, data)
			if cfg != nil || len(problems) != len(want) || len(want) == 0 {
				t.Fatalf("%d problems, want %d:\n%v", len(problems), len(want), problems)
			}
			for i, p := range problems {
				place, phrase, _ := strings.Cut(want[i], " ")
				text := p.Error()
				if !strings.HasPrefix(text, name+":"+place+": ") || !strings.Contains(text, phrase) || p.Mend == "" {
					t.Errorf("want %q:\n%s", want[i], text)
				}
				if strings.Contains(text, "canary") {
					t.Errorf("a password is shown: %s", text)
				}
			}
		})
	}
}

func TestGoodConfigurations(t *testing.T) {
	names := mustGlob(t, filepath.Join(cases, "*.good.toml"), 5)
	names = append(names, mustGlob(t, filepath.Join(airfields, "*.toml"), 3)...)
	for _, name := range names {
		cfg, err := Load(name)
		if err != nil {
			t.Errorf("%v", err)
			continue
		}
		if len(cfg.Stations) != len(cfg.Airfield.Masts) || len(cfg.Airfield.Paths) != 4*len(cfg.Airfield.Runways) {
			t.Errorf("%s: %d stations, %d masts, %d paths", name, len(cfg.Stations), len(cfg.Airfield.Masts), len(cfg.Airfield.Paths))
		}
		for i, s := range cfg.Stations {
			if m := cfg.Airfield.Masts[i]; m.ID != s.ID || m.Height != s.Height {
				t.Errorf("%s: mast %d is %v, the station %v", name, i, m, s)
			}
		}
	}
}

// The values of the file, turned by hand: 1 kt is 1852/3600 m/s, 23 % is
// 1 - 1/1.3, and 17.308 kt of 75 kt.
func TestSkerryMoor(t *testing.T) {
	cfg := mustLoad(t, filepath.Join(airfields, "skerrymoor.toml"))
	const kt = 1852.0 / 3600
	for name, v := range map[string][2]float64{
		"approach":   {cfg.Alerts.ApproachSpeed, 75 * kt},
		"fastest":    {cfg.Alerts.FastestApproachSpeed, 120 * kt},
		"noticeable": {cfg.Alerts.Noticeable, 10 * kt},
		"large":      {cfg.Alerts.Large, 15 * kt},
		"margin":     {cfg.Alerts.Margin, 17.307692 * kt},
		"stall":      {cfg.Alerts.StallMargin, 17.307692 * kt},
		"f-bar":      {cfg.Alerts.MarginFBar, 0.1},
		"confidence": {cfg.Alerts.Confidence, 0.8},
		"hysteresis": {cfg.Alerts.Hysteresis, 2 * kt},
		"reach":      {cfg.Analysis.Reach, 1000},
		"width":      {cfg.Airfield.Runways[0].Width, 18},
		"elevation":  {cfg.Airfield.Runways[0].Ends[1].Elevation, 43},
	} {
		if math.Abs(v[0]-v[1]) > 1e-6 {
			t.Errorf("%s: %v, want %v", name, v[0], v[1])
		}
	}
	if !cfg.Alerts.MarginDerived || cfg.Alerts.MarginRaisedUp || cfg.Alerts.Hold != time.Minute {
		t.Errorf("%+v", cfg.Alerts)
	}
	if cfg.Analysis.Window != 18*time.Second || cfg.Analysis.Lateness != time.Second {
		t.Errorf("%+v", cfg.Analysis)
	}
	if want := (Broker{URL: "embedded://127.0.0.1:1883", Embedded: true, Address: "127.0.0.1:1883"}); cfg.Broker != want {
		t.Errorf("%+v", cfg.Broker)
	}
	if cfg.MQTT.Prefix != "sockline/skerrymoor" || cfg.Page.Listen != "127.0.0.1:7625" {
		t.Errorf("%+v %+v", cfg.MQTT, cfg.Page)
	}
	if cfg.History.Keep != 400*24*time.Hour || cfg.History.Directory != filepath.Join(airfields, "sockline-data") {
		t.Errorf("%+v", cfg.History)
	}
	want := sensors.Station{
		ID: "far25", Latitude: 54.015790, Longitude: -19.940105, Height: 10, Format: sensors.FormatSenMLJSON,
		Topic: "airfield/skerrymoor/station/far25/wind", Interval: time.Second, StaleAfter: 3 * time.Second, North: sensors.NorthTrue,
	}
	if len(cfg.Stations) != 8 || !reflect.DeepEqual(cfg.Stations[7], want) {
		t.Errorf("%+v", cfg.Stations)
	}
}

func TestEveryKeyArrives(t *testing.T) {
	cfg := mustLoad(t, filepath.Join(cases, "every-key.good.toml"))
	b := cfg.Broker
	if b.Embedded || !b.TLS || b.Address != "broker.example:8883" || b.Username != "sockline" || b.ClientID != "sockline-pellmark" ||
		b.Password.Reveal() != "not a real password" || b.CAFile != filepath.Join(cases, "ca.pem") {
		t.Errorf("%+v", b)
	}
	if v, err := cfg.Airfield.Variation(time.Date(2040, 1, 1, 0, 0, 0, 0, time.UTC)); err != nil || v != -20.7 {
		t.Errorf("variation %v, %v", v, err)
	}
	s := cfg.Stations[0]
	if s.Interval != 500*time.Millisecond || s.StaleAfter != 4*time.Second || s.North != sensors.NorthMagnetic || s.NorthOffset != -3 {
		t.Errorf("%+v", s)
	}
	want := sensors.FieldMap{
		Speed: "/wind/kn", Direction: "/wind/toward", Gust: "/wind/gust", Time: "at", Exercise: "drill",
		SpeedUnit: "kt", DirectionUnit: "rad", Toward: true, TimeFormat: "unix-ms",
	}
	if cfg.Stations[1].Fields == nil || *cfg.Stations[1].Fields != want || s.Fields != nil {
		t.Errorf("%+v", cfg.Stations[1].Fields)
	}
	if cfg.Stations[1].StaleAfter != 6*time.Second { // three intervals of 2 s
		t.Errorf("stale after %v", cfg.Stations[1].StaleAfter)
	}
	e := cfg.Airfield.Runways[0].Ends[1]
	if e.Elevation != 14 || e.GlidePath != 3.5 || math.Abs(e.CrossingHeight-12.192) > 1e-9 || e.LandingLength != 4000 || e.TakeoffLength != 5556 {
		t.Errorf("%+v", e)
	}
	a := cfg.Alerts
	if a.MarginDerived || !near(a.Margin, 16) || !near(a.Noticeable, 9) || !near(a.Large, 14) || !near(a.Hysteresis, 1.5) ||
		a.MarginFBar != 0.12 || a.Confidence != 0.75 || a.Hold != 45*time.Second {
		t.Errorf("%+v", a)
	}
	if want := (Analysis{Window: 20 * time.Second, Lateness: 1500 * time.Millisecond, Reach: 900}); cfg.Analysis != want {
		t.Errorf("%+v", cfg.Analysis)
	}
	if cfg.MQTT.Prefix != "met/pellmark/wind" || cfg.Page.Listen != "[::1]:8080" || cfg.History.Keep != 720*time.Hour ||
		cfg.History.Directory != filepath.Join(cases, "kept") {
		t.Errorf("%+v %+v %+v", cfg.MQTT, cfg.Page, cfg.History)
	}
}

func near(ms, kt float64) bool { return math.Abs(ms-kt*1852/3600) < 1e-9 }

// 23 % of 65 kt is 15 kt: below that the margin is raised to 15 kt, and told.
func TestDerivedMargin(t *testing.T) {
	skerry := string(mustRead(t, filepath.Join(airfields, "skerrymoor.toml")))
	for _, c := range []struct {
		approach string
		margin   float64
		raised   bool
	}{{"64 kt", 15, true}, {"65 kt", 15, false}, {"91 kt", 21, false}, {"30 kt", 15, true}} {
		cfg, problems := Parse("x.toml", []byte(strings.Replace(skerry, `"75 kt"`, `"`+c.approach+`"`, 1)))
		if problems != nil {
			t.Fatal(problems)
		}
		if a := cfg.Alerts; !near(a.Margin, c.margin) || a.MarginRaisedUp != c.raised || !a.MarginDerived {
			t.Errorf("%s: margin %v, raised %v", c.approach, a.Margin, a.MarginRaisedUp)
		}
	}
}

// The same text means the same configuration, whatever the editor.
func TestHash(t *testing.T) {
	data := mustRead(t, filepath.Join(airfields, "skerrymoor.toml"))
	sum := sha256.Sum256(data)
	want := hex.EncodeToString(sum[:])
	crlf := append([]byte("\xef\xbb\xbf"), bytes.ReplaceAll(data, []byte("\n"), []byte("\r\n"))...)
	for name, text := range map[string][]byte{"as it is": data, "mark and CRLF": crlf} {
		cfg, problems := Parse("x.toml", text)
		if problems != nil {
			t.Fatal(problems)
		}
		if cfg.Hash != want || !bytes.Equal(cfg.Source, data) {
			t.Errorf("%s: hash %s, want %s", name, cfg.Hash, want)
		}
	}
	other, problems := Parse("x.toml", bytes.Replace(data, []byte(`"75 kt"`), []byte(`"76 kt"`), 1))
	if problems != nil || other.Hash == want {
		t.Errorf("a change does not change the hash: %v", problems)
	}
}

func TestPasswordFromTheEnvironment(t *testing.T) {
	t.Setenv(PasswordVariable, "canary-from-outside")
	cfg := mustLoad(t, filepath.Join(cases, "every-key.good.toml"))
	if cfg.Broker.Password.Reveal() != "canary-from-outside" {
		t.Errorf("the password file won")
	}
	encoded, err := json.Marshal(cfg.Broker)
	if err != nil {
		t.Fatal(err)
	}
	for _, text := range []string{fmt.Sprint(cfg.Broker), fmt.Sprintf("%+v", cfg.Broker), fmt.Sprintf("%#v", cfg.Broker),
		fmt.Sprintf("%q %s", cfg.Broker.Password, cfg.Broker.Password), string(encoded)} {
		if strings.Contains(text, "canary") || !strings.Contains(text, "(hidden)") {
			t.Errorf("%s", text)
		}
	}
	if fmt.Sprint(Secret("")) != "" {
		t.Error("no password is shown as one")
	}
	// An embedded broker has no use for it, and other programs may.
	mustLoad(t, filepath.Join(airfields, "skerrymoor.toml"))
	_, err = Load(filepath.Join(airfields, "brandersea.toml"))
	if err == nil || !strings.Contains(err.Error(), PasswordVariable+" is set") {
		t.Errorf("a password without a username: %v", err)
	}
}

func TestUnreadable(t *testing.T) {
	for name, path := range map[string]string{"absent": filepath.Join(cases, "absent.toml"), "directory": cases} {
		_, err := Load(path)
		var problems Problems
		if !errors.As(err, &problems) || len(problems) != 1 || !strings.HasPrefix(err.Error(), path+": the configuration cannot be read: ") {
			t.Errorf("%s: %v", name, err)
		}
	}
	for name, c := range map[string]struct{ text, phrase string }{
		"UTF-16":    {"\xff\xfea\x00", "UTF-16"},
		"UTF-16 BE": {"\xfe\xff\x00a", "UTF-16"},
		"too long":  {strings.Repeat("#\n", maxSize), "1 MiB"},
		"empty":     {"", "airfield: this table is required"},
		"zero byte": {"a = 1\n\x00", "not TOML"},
	} {
		cfg, problems := Parse("x.toml", []byte(c.text))
		if cfg != nil || len(problems) == 0 || !strings.Contains(problems.Error(), c.phrase) || problems[0].Line < 1 {
			t.Errorf("%s: %v", name, problems)
		}
	}
}

// What the program says about one file fits a line each, in the file's order.
func TestProblemsAreSortedLines(t *testing.T) {
	name := filepath.Join(cases, "many-at-once.bad.toml")
	_, problems := Parse(name, mustRead(t, name))
	linesOf := strings.Split(problems.Error(), "\n")
	if len(linesOf) != len(problems) || len(problems) != 5 {
		t.Fatalf("%d lines for %d problems", len(linesOf), len(problems))
	}
	for i := 1; i < len(problems); i++ {
		if problems[i].Line < problems[i-1].Line {
			t.Errorf("line %d after line %d", problems[i].Line, problems[i-1].Line)
		}
	}
	want := name + `:29:12: station.0.height: a length from 1 m to 150 m belongs here (got "0 m"); write a value in this range`
	if linesOf[2] != want {
		t.Errorf("\n%s, want\n%s", linesOf[2], want)
	}
}

// The invented airfields are sited well: with all masts live, no path lacks
// ground that it needs.
func TestInventedAirfieldsAreObserved(t *testing.T) {
	for _, name := range mustGlob(t, filepath.Join(airfields, "*.toml"), 3) {
		cfg := mustLoad(t, name)
		masts := cfg.Airfield.MastPoints()
		for _, p := range cfg.Airfield.Paths {
			seen := airfield.Observed(p, masts, cfg.Analysis.Reach, airfield.Beyond)
			if ok, gaps := airfield.Complete(seen, p.Needed()); !ok {
				t.Errorf("%s %s: %.0f lacks %.0f", cfg.Airfield.Name, p.Name(), seen, gaps)
			}
		}
	}
	large := mustLoad(t, filepath.Join(airfields, "brandersea.toml"))
	levels, nmea, magnetic := make(map[airfield.Point]int), 0, 0
	for i, s := range large.Stations {
		levels[large.Airfield.Masts[i].Point]++
		if s.Format == sensors.FormatNMEA0183 {
			nmea++
		}
		if s.North == sensors.NorthMagnetic {
			magnetic++
		}
	}
	if len(large.Airfield.Runways) != 2 || len(levels) != 12 || len(large.Stations) != 13 || nmea == 0 || magnetic != 1 {
		t.Errorf("%d runways, %d masts, %d stations, %d NMEA, %d magnetic", len(large.Airfield.Runways), len(levels), len(large.Stations), nmea, magnetic)
	}
}
