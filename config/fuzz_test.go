package config

import (
	"flag"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"unicode/utf8"
)

var mutationSeed = flag.Uint64("mutation-seed", 20260701, "seed of the mutated configurations")

// examine checks what holds of every text: either a configuration or
// problems, and each problem with a line of the text and a mend.
func examine(t *testing.T, text []byte) (accepted bool) {
	t.Helper()
	cfg, problems := Parse("x.toml", text)
	if (cfg == nil) != (len(problems) > 0) {
		t.Fatalf("configuration %v with problems %v", cfg != nil, problems)
	}
	lines := strings.Count(string(text), "\n") + 1
	for _, p := range problems {
		if p.Line < 1 || p.Line > lines || p.Column < 1 || p.Mend == "" || p.Message == "" {
			t.Fatalf("%+v of %d lines\n%s", p, lines, text)
		}
		if line := p.Error(); strings.ContainsAny(line, "\n\r") || !utf8.ValidString(line) {
			t.Fatalf("not one line of text: %q", line)
		}
	}
	if cfg == nil {
		return false
	}
	if cfg.Airfield == nil || len(cfg.Stations) == 0 || len(cfg.Airfield.Masts) != len(cfg.Stations) || cfg.Alerts.Noticeable <= 0 ||
		cfg.Alerts.Large <= cfg.Alerts.Noticeable || cfg.Analysis.Window <= 0 || cfg.MQTT.Prefix == "" || cfg.Broker.Address == "" {
		t.Fatalf("accepted, but not whole: %+v", cfg)
	}
	return true
}

// 500 damaged copies of a sound file: bytes changed, lines lost, doubled,
// exchanged, values swapped for odd ones.
func TestMutations(t *testing.T) {
	t.Logf("seed %d", *mutationSeed)
	rng := rand.New(rand.NewPCG(*mutationSeed, 1))
	sound := string(mustRead(t, filepath.Join(airfields, "skerrymoor.toml")))
	odd := []string{"nan", "-inf", "1e308", `""`, `"300 kt"`, "[]", "[[]]", "{}", "true", "2026-07-01", `"\u0000"`, "'''a\nb'''",
		"9223372036854775807", `"-1 m"`, "[1, 2]", `"é"`, "0x7f", "{ a = [ { b = 1 } ] }"}
	refused := 0
	for range 500 {
		text := sound
		for range 1 + rng.IntN(3) {
			text = mutate(rng, text, odd)
		}
		if !examine(t, []byte(text)) {
			refused++
		}
	}
	// Many a mutation meets a comment or doubles a blank line, but if most
	// were harmless the test would be, too.
	if refused < 250 {
		t.Errorf("only %d of 500 refused", refused)
	}
}

func mutate(rng *rand.Rand, text string, odd []string) string {
	lines := strings.SplitAfter(text, "\n")
	i, k := rng.IntN(len(lines)), rng.IntN(len(lines))
	at := rng.IntN(len(text) + 1)
	switch rng.IntN(7) {
	case 0:
		lines[i] = ""
	case 1:
		lines[i] += lines[i]
	case 2:
		lines[i], lines[k] = lines[k], lines[i]
	case 3:
		if before, _, ok := strings.Cut(lines[i], "="); ok {
			lines[i] = before + "= " + odd[rng.IntN(len(odd))] + "\n"
		}
	case 4:
		return text[:at]
	case 5:
		return text[:at] + string([]byte{byte(rng.IntN(256))}) + text[min(at+1, len(text)):]
	case 6:
		return text[:at] + []string{`"`, "[", "]", "=", "'", "{", "\n", ".", "#", "\\"}[rng.IntN(10)] + text[at:]
	}
	return strings.Join(lines, "")
}

func FuzzParse(f *testing.F) {
	for _, pattern := range []string{filepath.Join(airfields, "*.toml"), filepath.Join(cases, "*.toml")} {
		for _, name := range mustGlob(f, pattern, 1) {
			data, err := os.ReadFile(name)
			if err != nil {
				f.Fatal(err)
			}
			f.Add(data)
		}
	}
	for _, s := range []string{"[[[[", "a = [[[{b=[", "a.\"b\".'c' = {", "[a]\n[[a.b]]\n", "x = '''", "\\", "= 1", "]\n}", "a = \"\\\nb", "\"a\\nb\" = 1"} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		examine(t, text)
		// The search for places reads sound TOML only, but must end on any text.
		newSource(string(text)).value("station.0.id")
	})
}
