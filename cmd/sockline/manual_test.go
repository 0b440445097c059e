package main

import (
	"go/ast"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/decode"
)

// manual is the text of a file at the root of the module.
func manual(t *testing.T, name string) string {
	t.Helper()
	text, err := os.ReadFile(filepath.Join("..", "..", name))
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// The guards that the manual for developers names exist.
func TestDeveloperManualNamesRealTests(t *testing.T) {
	_, files := module(t)
	exists := map[string]bool{}
	for _, f := range files {
		for _, d := range f.syntax.Decls {
			if fn, ok := d.(*ast.FuncDecl); ok && f.test && fn.Recv == nil {
				exists[fn.Name.Name] = true
			}
		}
	}
	named := regexp.MustCompile(`\b(?:Test|Fuzz)[A-Z]\w+`).FindAllString(manual(t, "DEVELOPERS.md"), -1)
	if len(named) < 30 {
		t.Fatalf("only %d tests are named", len(named))
	}
	for _, name := range named {
		if !exists[name] {
			t.Errorf("DEVELOPERS.md names %s, which does not exist", name)
		}
	}
}

// The notice stands in the README word for word.
func TestReadmeHoldsTheNotice(t *testing.T) {
	words := strings.Join(strings.Fields(strings.ReplaceAll(manual(t, "README.md"), "\n>", " ")), " ")
	if !strings.Contains(words, alerting.Notice) {
		t.Error("README.md does not hold the notice")
	}
}

// Every message that the README gives to paste is understood by the station
// that it is sent to.
func TestReadmePayloads(t *testing.T) {
	cfg, err := config.Load(filepath.Join("..", "..", "testdata", "airfields", "skerrymoor.toml"))
	if err != nil {
		t.Fatal(err)
	}
	text := manual(t, "README.md")
	// What the shell would put in.
	for _, r := range []struct{ pattern, by string }{
		{`\\\n\s*`, ""}, {`\$\(\(RANDOM % 10\)\)`, "7"}, {`\$\(\(\$2 \+ RANDOM % 10\)\)`, "243"},
		{`station/\$1`, "station/final07"}, {`\$3`, "5"}, {`\\"`, `"`},
	} {
		text = regexp.MustCompile(r.pattern).ReplaceAllString(text, r.by)
	}
	sent := regexp.MustCompile(`mosquitto_pub -t "?([^ "]+)"? -m ['"](.*)['"]\n`).FindAllStringSubmatch(text, -1)
	if len(sent) != 2 {
		t.Fatalf("README.md holds %d messages to publish, this test knows 2", len(sent))
	}
	for _, m := range sent {
		decodes(t, cfg, sensors.Message{Topic: m[1], Payload: []byte(m[2])})
	}
	// The row of each format in the table, with a station of that format.
	for _, row := range []struct {
		format sensors.Format
		fields *sensors.FieldMap
	}{
		{sensors.FormatNMEA0183, nil},
		{sensors.FormatJSON, &sensors.FieldMap{Speed: "speed_kt", Direction: "from", SpeedUnit: "kt"}},
	} {
		cell := regexp.MustCompile("(?m)^\\| `" + string(row.format) + "` \\| `([^`]+)`").FindStringSubmatch(text)
		if cell == nil {
			t.Fatalf("README.md has no message in format %s", row.format)
		}
		other := *cfg
		other.Stations = []sensors.Station{cfg.Stations[0]}
		other.Stations[0].Format, other.Stations[0].Fields = row.format, row.fields
		decodes(t, &other, sensors.Message{Topic: cfg.Stations[0].Topic, Payload: []byte(cell[1])})
	}
}

// decodes checks that the station of the message's topic reads a wind of about
// 5 m/s out of it.
func decodes(t *testing.T, cfg *config.Config, m sensors.Message) {
	t.Helper()
	m.Received = sensors.Instant(1_782_907_200_000)
	for i, st := range cfg.Stations {
		if st.Topic != m.Topic {
			continue
		}
		d, err := decode.New(st, i)
		if err != nil {
			t.Fatal(err)
		}
		readings, err := d.Decode(nil, m, 0)
		if err != nil || len(readings) != 1 || readings[0].Speed < 5 || readings[0].Speed > 6 || readings[0].From < 240 || readings[0].From > 250 {
			t.Errorf("%s on %s gives %+v, %v", m.Payload, m.Topic, readings, err)
		}
		return
	}
	t.Errorf("no station of skerrymoor has the topic %s", m.Topic)
}
