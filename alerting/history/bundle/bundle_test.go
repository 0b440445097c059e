package bundle

import (
	"archive/zip"
	"bytes"
	"context"
	"crypto/ed25519"
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/lifecycle"
	"sockline/sensors"
)

// opened is when the event opened: 2026-07-01T23:50:00Z, so that it lasts
// into another day.
const (
	opened  sensors.Instant = 1782949800000
	event                   = "skerrymoor-20260701T235000Z-07-landing-headwind-loss"
	episode                 = "skerrymoor-20260701T235000Z"
)

var stations = []string{"far07", "mid", "touch25"}

// issue is one of an alert that lasts twelve minutes.
func issue(id string, step sensors.Instant, revision int, last bool) history.Issue {
	a := lifecycle.Alert{
		ID: id, Occurrence: episode, Revision: revision, Runway: "07", Operation: "landing", Kind: alerting.HeadwindLoss,
		Level: alerting.Large, State: lifecycle.Open, Opened: opened, Updated: step,
	}
	if last {
		a.State, a.Closed, a.Because = lifecycle.Closed, step, lifecycle.BelowLevel
	}
	object, err := json.Marshal(map[string]any{"id": id, "occurrence": episode, "runway": "07", "revision": revision, "notice": alerting.Notice})
	if err != nil {
		panic(err)
	}
	return history.Issue{Alert: a, Object: object}
}

// store writes an hour round the event, with another event in it, people who
// have something to say, and the day after.
func store(tb testing.TB, dir string) *history.Store {
	tb.Helper()
	s, err := history.Open(dir, history.Options{})
	if err != nil {
		tb.Fatal(err)
	}
	w, err := s.Writer(history.WriterOptions{})
	if err != nil {
		tb.Fatal(err)
	}
	begin := opened - 1800*sensors.Second
	w.Record(history.Entry{Kind: history.KindConfiguration, At: begin - 3600*sensors.Second, Payload: []byte("name = \"an older one\"\n")})
	w.Record(history.Entry{Kind: history.KindSoftware, At: begin, Payload: []byte("1.2.3 go1.26")})
	w.Record(history.Entry{Kind: history.KindConfiguration, At: begin, Payload: []byte("name = \"Skerry Moor\"\n")})
	w.Record(history.Entry{Kind: history.KindTable, At: begin, Payload: []byte(`{"table":"clocks","data":{}}`)})
	say(tb, w, begin, history.Access{Who: "Ragna Vik", What: "log-in", From: "127.0.0.1", OK: true})
	revision := 0
	for i := range sensors.Instant(3600) {
		at := begin + i*sensors.Second
		b := history.Batch{Step: at, Stations: stations}
		for k := range stations {
			if k == 1 && i%100 < 5 { // mid falls silent now and then
				continue
			}
			b.Readings = append(b.Readings, sensors.Reading{Station: k, Time: at - 200, Arrival: at - 100, Speed: float64(i%70) / 7, From: float64(i % 360)})
		}
		if i%60 == 7 {
			b.Late = []history.LateReading{{Reading: b.Readings[0], Reason: "too-late"}}
		}
		if at >= opened && at <= opened+720*sensors.Second && i%60 == 0 {
			revision++
			b.Issues = []history.Issue{issue(event, at, revision, at == opened+720*sensors.Second), issue(event+"-x", at, revision, false)}
		}
		w.Submit(b)
	}
	say(tb, w, opened+5*sensors.Second, history.Acknowledgement{Occurrence: episode, Who: "Ragna Vik"})
	say(tb, w, opened+900*sensors.Second, history.Note{Event: event, Who: "Ole Lund", Text: "Told RAGNA VIK by telephone; Ole Lund, Ragna Vik. Strange gusts."})
	say(tb, w, opened+900*sensors.Second, history.Note{Event: "another", Who: "Ole Lund", Text: "not this one"})
	say(tb, w, opened+300*sensors.Second, history.PilotReport{ID: "p", Who: "Ole Lund", At: opened, Runway: "07", Felt: "loss", Aircraft: "SM-ABC", Text: "sank on short final"})
	say(tb, w, opened+86400*sensors.Second, history.Note{Event: "later", Who: "Una", Text: "the next day"})
	say(tb, w, opened+2*86400*sensors.Second, history.Note{Event: "later", Who: "Una", Text: "the day after"})
	say(tb, w, opened+2*86400*sensors.Second, history.Note{Event: "later", Who: "Una", Text: "and once more"})
	if err := w.Close(context.Background()); err != nil {
		tb.Fatal(err)
	}
	return s
}

func say(tb testing.TB, w *history.Writer, at sensors.Instant, what any) {
	tb.Helper()
	e, err := history.EntryOf(at, what)
	if err == nil {
		w.Record(e)
	}
	if err != nil {
		tb.Fatal(err)
	}
}

// key is fixed, so that two archives can be compared.
func key() ed25519.PrivateKey { return ed25519.NewKeyFromSeed(bytes.Repeat([]byte{7}, 32)) }

func make1(tb testing.TB, s *history.Store, o Options) ([]byte, Summary) {
	tb.Helper()
	o.Key, o.Software = key(), "1.2.3"
	var b bytes.Buffer
	sum, err := Write(tb.Context(), &b, s, event, o)
	if err != nil {
		tb.Fatal(err)
	}
	return b.Bytes(), sum
}

func check(tb testing.TB, b []byte) Report {
	tb.Helper()
	r, err := Verify(bytes.NewReader(b), int64(len(b)), key().Public().(ed25519.PublicKey))
	if err != nil {
		tb.Fatal(err)
	}
	return r
}

func partsOf(tb testing.TB, b []byte) map[string]string {
	tb.Helper()
	z, err := zip.NewReader(bytes.NewReader(b), int64(len(b)))
	if err != nil {
		tb.Fatal(err)
	}
	out := map[string]string{}
	for _, f := range z.File {
		in, err := f.Open()
		if err != nil {
			tb.Fatal(err)
		}
		text, err := io.ReadAll(in)
		if err != nil {
			tb.Fatal(err)
		}
		out[f.Name] = string(text)
	}
	return out
}

func TestArchive(t *testing.T) {
	s := store(t, t.TempDir())
	defer s.Close()
	b, sum := make1(t, s, Options{})
	again, _ := make1(t, s, Options{})
	if !bytes.Equal(b, again) {
		t.Error("the same export twice gives two files")
	}
	r := check(t, b)
	if !r.OK() || !r.Trusted || r.Event != event || r.Software != "1.2.3" || r.Withheld != 0 {
		t.Errorf("report %+v", r)
	}
	// 10 min before, 12 min, 10 min: 1920 steps and none for the end itself.
	p := partsOf(t, b)
	lines := func(name string) []string { return strings.Split(strings.TrimSuffix(p[name], "\n"), "\n") }
	if sum.Issues != 13 || len(lines(partIssues)) != 13 {
		t.Errorf("%d issues", sum.Issues)
	}
	rows := lines(partReadings)
	// 1920 steps of 10 + 12 + 10 min: three masts, of which mid is silent for 5 s
	// in each 100, and one reading too late in each minute.
	if uint64(len(rows)-2) != sum.Readings || sum.Readings != 1920*3-100+32 {
		t.Errorf("%d rows, %d in the summary", len(rows)-2, sum.Readings)
	}
	if rows[0] != "# "+alerting.Notice || !strings.HasPrefix(rows[2], "2026-07-01T23:39:59.800Z,far07,") {
		t.Errorf("readings begin with %q", rows[:3])
	}
	if last := rows[len(rows)-1]; !strings.HasPrefix(last, "2026-07-02T00:") {
		t.Errorf("readings end with %s", last)
	}
	for name, want := range map[string][]string{
		partPeople:             {`"kind":"acknowledge"`, `"who":"Ragna Vik"`, "Strange gusts", "SM-ABC"},
		partSoftware:           {"1.2.3 go1.26"},
		"configuration-3.toml": {"Skerry Moor"},
		"table-4.json":         {"clocks"},
		partSensors:            {`"station": "mid"`, `"too-late": `, `"silent": [`},
		partEvent:              {event, alerting.Notice, `"readings_from": "2026-07-01T23:40:00.000Z"`},
		partRead:               {alerting.Notice},
		partManifest:           {alerting.Notice, sum.Key},
	} {
		for _, w := range want {
			if !strings.Contains(p[name], w) {
				t.Errorf("%s lacks %q: %s", name, w, p[name])
			}
		}
	}
	for name, text := range p {
		for _, other := range []string{"not this one", "the next day", "an older one", "127.0.0.1"} {
			if strings.Contains(text, other) {
				t.Errorf("%s tells %q, which does not belong to the event", name, other)
			}
		}
	}
	// The chain goes from the configuration in force to the record that ends the
	// day of the last word; the one after that is not in it.
	if len(r.Heads) != 2 || r.Heads[1].Day != "2026-07-02" || r.Heads[1].Seq != 36 || r.End.Day != "2026-07-03" || r.Records != 36 || r.End.Seq != 37 {
		t.Errorf("%d records, heads %+v, end %+v", r.Records, r.Heads, r.End)
	}
}

// TestRedacted: without names the chain still verifies, and no name is left.
func TestRedacted(t *testing.T) {
	s := store(t, t.TempDir())
	defer s.Close()
	for _, row := range []struct {
		o       Options
		gone    []string
		kept    []string
		unknown int
	}{
		{Options{RedactNames: true}, []string{"ragna", "vik", "ole lund", "sm-abc"}, []string{"Strange gusts", "by telephone", "person 1", "person 2", "sank on short final"}, 1},
		{Options{RedactTexts: true}, []string{"strange gusts", "sank on"}, []string{"Ragna Vik", "SM-ABC"}, 1},
		{Options{RedactNames: true, RedactTexts: true}, []string{"ragna", "ole lund", "sm-abc", "strange", "sank"}, []string{"person 1"}, 0},
	} {
		b, sum := make1(t, s, row.o)
		if r := check(t, b); !r.OK() || r.Withheld == 0 {
			t.Errorf("%+v: report %+v", row.o, r)
		}
		p := partsOf(t, b)
		all := ""
		for _, text := range p {
			all += text
		}
		for _, name := range row.gone {
			if strings.Contains(strings.ToLower(all), name) {
				t.Errorf("%+v: %q is left", row.o, name)
			}
		}
		for _, text := range row.kept {
			if !strings.Contains(p[partPeople], text) {
				t.Errorf("%+v: %q is lost: %s", row.o, text, p[partPeople])
			}
		}
		if sum.Kept != row.unknown {
			t.Errorf("%+v: %d texts are kept, want %d", row.o, sum.Kept, row.unknown)
		}
	}
}

// TestEveryEditIsFound changes archives at random, plain and redacted.
func TestEveryEditIsFound(t *testing.T) {
	n := 100
	if os.Getenv("SOCKLINE_LONG") != "" {
		n = 10000
	}
	s := store(t, t.TempDir())
	defer s.Close()
	whole, _ := make1(t, s, Options{})
	redacted, _ := make1(t, s, Options{RedactNames: true})
	rng := rand.New(rand.NewPCG(11, 3))
	for i := range n {
		b := [][]byte{whole, redacted}[i%2]
		bad := edited(rng, b)
		if r, err := Verify(bytes.NewReader(bad), int64(len(bad)), nil); err == nil && r.OK() {
			t.Fatalf("edit %d is not found", i)
		}
	}
	// Behind the archive, and before it.
	for _, bad := range [][]byte{append(bytes.Clone(whole), 0), append([]byte("x"), whole...)} {
		if r, err := Verify(bytes.NewReader(bad), int64(len(bad)), nil); err == nil && r.OK() {
			t.Error("bytes outside of the parts are not found")
		}
	}
}

func edited(rng *rand.Rand, b []byte) []byte {
	for {
		out, i := bytes.Clone(b), rng.IntN(len(b))
		if rng.IntN(3) == 0 { // where the frame and the small parts are
			i = len(b) - 1 - rng.IntN(4000)
		}
		switch rng.IntN(4) {
		case 0:
			out[i] ^= 1 << rng.IntN(8)
		case 1:
			out[i] = byte(rng.IntN(256))
		case 2:
			out = append(out[:i], append([]byte{byte(rng.IntN(256))}, out[i:]...)...)
		case 3:
			out = append(out[:i], out[i+1:]...)
		}
		if !bytes.Equal(out, b) {
			return out
		}
	}
}

// TestForgedAndSignedAnew: somebody with another key, or with the right one
// but without the journal, is found out.
func TestForgedAndSignedAnew(t *testing.T) {
	s := store(t, t.TempDir())
	defer s.Close()
	b, _ := make1(t, s, Options{})
	for _, row := range []struct {
		name   string
		change func(map[string]string)
		want   string
	}{
		{"an issue is changed", func(p map[string]string) {
			p[partIssues] = strings.Replace(p[partIssues], `"runway":"07"`, `"runway":"25"`, 1)
		}, "issues.jsonl does not say what the journal says"},
		{"a name is changed", func(p map[string]string) { p[partPeople] = strings.ReplaceAll(p[partPeople], "Ragna", "Rigna") }, "people.jsonl does not say"},
		{"a name is changed in both", func(p map[string]string) {
			p[partPeople], p[partChain] = strings.ReplaceAll(p[partPeople], "Ragna", "Rigna"), strings.ReplaceAll(p[partChain], "Ragna", "Rigna")
		}, `the words under "who" are not those that were written`},
		{"another configuration", func(p map[string]string) { p["configuration-3.toml"] += "x" }, "configuration-3.toml is not the one"},
		{"a record is left out", func(p map[string]string) {
			l := strings.SplitAfter(p[partChain], "\n")
			p[partChain] = strings.Join(append(l[:5:5], l[6:]...), "")
		}, "is missing"},
		{"the heads are others", func(p map[string]string) {
			p[partHeads] = strings.Replace(p[partHeads], `"records": `, `"records": 1`, 1)
		}, "does not say where the chain stands"},
	} {
		p := partsOf(t, b)
		row.change(p)
		forged := signed(t, b, p)
		r := check(t, forged)
		if !strings.Contains(strings.Join(r.Faults, "\n"), row.want) {
			t.Errorf("%s: %v", row.name, r.Faults)
		}
	}
	// Whole, but by another key.
	other := ed25519.NewKeyFromSeed(bytes.Repeat([]byte{8}, 32))
	r, err := Verify(bytes.NewReader(b), int64(len(b)), other.Public().(ed25519.PublicKey))
	if err != nil || r.OK() || r.Trusted || !strings.Contains(r.Faults[0], "not by the one that was given") {
		t.Errorf("another key: %+v, %v", r, err)
	}
}

// signed packs parts again in their order, with a right manifest.
func signed(tb testing.TB, original []byte, p map[string]string) []byte {
	tb.Helper()
	z, err := zip.NewReader(bytes.NewReader(original), int64(len(original)))
	if err != nil {
		tb.Fatal(err)
	}
	var m manifest
	if err := json.Unmarshal([]byte(p[partManifest]), &m); err != nil {
		tb.Fatal(err)
	}
	var out bytes.Buffer
	b := &builder{archive: zip.NewWriter(&out), manifest: m}
	b.manifest.Parts = nil
	for _, f := range z.File {
		if f.Name != partManifest && f.Name != partSig {
			b.text(f.Name, p[f.Name])
		}
	}
	if _, err := b.sign(key()); err != nil {
		tb.Fatal(err)
	}
	return out.Bytes()
}

// TestByHand follows a chain with nothing but what format.md says.
func TestByHand(t *testing.T) {
	s := store(t, t.TempDir())
	defer s.Close()
	b, _ := make1(t, s, Options{RedactNames: true})
	p := partsOf(t, b)
	var heads struct {
		Before string `json:"sha256_before"`
		End    struct{ SHA256 string }
	}
	if err := json.Unmarshal([]byte(p[partHeads]), &heads); err != nil {
		t.Fatal(err)
	}
	before, _ := hex.DecodeString(heads.Before)
	for _, text := range strings.Split(strings.TrimSuffix(p[partChain], "\n"), "\n") {
		var l struct {
			Seq, Version, Kind uint64
			At                 int64  `json:"at_ms"`
			Digest             string `json:"payload_sha256"`
			Hash               string
		}
		if err := json.Unmarshal([]byte(text), &l); err != nil {
			t.Fatal(err)
		}
		digest, _ := hex.DecodeString(l.Digest)
		head := fmt.Appendf(nil, "%016x%02x%02x%016x", l.Seq, l.Version, l.Kind, l.At)
		raw, _ := hex.DecodeString(string(head))
		sum := sha256.Sum256(append(append(bytes.Clone(before), raw...), digest...))
		if hex.EncodeToString(sum[:]) != l.Hash {
			t.Fatalf("record %d does not follow", l.Seq)
		}
		before = sum[:]
	}
	if hex.EncodeToString(before) != heads.End.SHA256 {
		t.Error("the chain does not end where it says")
	}
}

func TestUnfit(t *testing.T) {
	s := store(t, t.TempDir())
	defer s.Close()
	if _, err := Write(t.Context(), io.Discard, s, "nobody", Options{Key: key()}); err == nil || !strings.Contains(err.Error(), "no such event") {
		t.Errorf("unknown event: %v", err)
	}
	if _, err := Write(t.Context(), io.Discard, s, event, Options{}); err == nil {
		t.Error("an archive without a key")
	}
	b, _ := make1(t, s, Options{})
	for name, bad := range map[string][]byte{"empty": nil, "text": []byte("hello"), "half": b[:len(b)/2]} {
		if _, err := Verify(bytes.NewReader(bad), int64(len(bad)), nil); err == nil || !strings.Contains(err.Error(), "not an archive of an event") {
			t.Errorf("%s: %v", name, err)
		}
	}
	p := partsOf(t, b)
	p[partManifest] = strings.Replace(p[partManifest], `"bundle": 1`, `"bundle": 2`, 1)
	newer := signed(t, b, p)
	if _, err := Verify(bytes.NewReader(newer), int64(len(newer)), nil); err == nil || !strings.Contains(err.Error(), "use the version that made it (1.2.3)") {
		t.Errorf("a newer format: %v", err)
	}
}

func TestKey(t *testing.T) {
	dir := t.TempDir()
	a, err := Key(dir)
	if err != nil {
		t.Fatal(err)
	}
	b, err := Key(dir)
	if err != nil || !a.Equal(b) {
		t.Errorf("the second time: %v", err)
	}
	path := filepath.Join(dir, keyName)
	if info, err := os.Stat(path); err != nil || info.Mode().Perm() != 0o600 {
		t.Errorf("mode %v, %v", info.Mode(), err)
	}
	if entries, _ := os.ReadDir(dir); len(entries) != 1 {
		t.Errorf("left behind: %v", entries)
	}
	if err := os.Chmod(path, 0o644); err != nil {
		t.Fatal(err)
	}
	if _, err := Key(dir); err == nil || !strings.Contains(err.Error(), "chmod 600") {
		t.Errorf("readable by all: %v", err)
	}
	if err := os.Chmod(path, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(path, []byte("x"), 0o600); err != nil {
		t.Fatal(err)
	}
	if _, err := Key(dir); err == nil || !strings.Contains(err.Error(), "not a PEM file") {
		t.Errorf("no key: %v", err)
	}
}

// TestOpenEvent: an event that has not closed reaches up to now.
func TestOpenEvent(t *testing.T) {
	s := store(t, t.TempDir())
	defer s.Close()
	var b bytes.Buffer
	sum, err := Write(t.Context(), &b, s, event+"-x", Options{Key: key(), Now: opened + 800*sensors.Second})
	if err != nil || sum.To != (opened+801*sensors.Second).String() {
		t.Errorf("%+v, %v", sum, err)
	}
	if r := check(t, b.Bytes()); !r.OK() {
		t.Errorf("%+v", r)
	}
	// Without a moment it reaches to the last step, the last of the hour.
	sum, err = Write(t.Context(), io.Discard, s, event+"-x", Options{Key: key()})
	if err != nil || sum.To != (opened+1800*sensors.Second).String() {
		t.Errorf("%+v, %v", sum, err)
	}
}
