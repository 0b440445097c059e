package feed

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"sockline/sensors"
)

// second is an arbitrary arrival stamp: 2026-07-01T12:00:00.120Z, which is
// 1782907200 s after the epoch (20635 days and 12 h).
const second sensors.Instant = 1782907200_120

// awkward are messages that are hard to write down.
func awkward() []sensors.Message {
	all := make([]byte, 256)
	for i := range all {
		all[i] = byte(i)
	}
	return []sensors.Message{
		{Topic: "airfield/skerrymoor/station/far07/wind", Payload: []byte(`[{"n":"wind_speed","u":"m/s","v":4.1},{"n":"wind_direction","u":"deg","v":221}]`)},
		{Topic: "a/empty", Payload: []byte{}},
		{Topic: "a/nmea", Payload: []byte("$WIMWV,214.8,T,0.1,M,A*2A\r\n")},
		{Topic: "a/unicode", Payload: []byte("wind från väst, 風, \u2028, \U0001F32C, 12°")},
		{Topic: "a/controls", Payload: []byte("\x00\x01\x1f\x7f\b\f\t\n\r\"\\/</script>")},
		{Topic: "a/binary", Payload: all},
		{Topic: "a/half-a-character", Payload: []byte("12\xc2")},
		{Topic: "a/retained", Payload: []byte("1"), Retained: true},
		{Topic: "a/retained-binary", Payload: []byte{0xff}, Retained: true},
		{Topic: `a/"quoted"\topic/ö`, Payload: []byte("null")},
		{Topic: "a/long", Payload: bytes.Repeat([]byte("0123456789\\"), 100_000)},
	}
}

// readAll reads a capture to its end.
func readAll(t *testing.T, r *CaptureReader) []sensors.Message {
	t.Helper()
	var all []sensors.Message
	for {
		var m sensors.Message
		switch err := r.Next(&m); {
		case err == nil:
			all = append(all, m)
		case errors.Is(err, io.EOF):
			return all
		default:
			t.Fatal(err)
		}
	}
}

func openCapture(t *testing.T, path string) *CaptureReader {
	t.Helper()
	r, err := OpenCapture(path)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := r.Close(); err != nil {
			t.Error(err)
		}
	})
	return r
}

func same(t *testing.T, got, want []sensors.Message) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%d messages, want %d", len(got), len(want))
	}
	for i, w := range want {
		g := got[i]
		if g.Topic != w.Topic || !bytes.Equal(g.Payload, w.Payload) || g.Received != w.Received || g.Retained != w.Retained {
			t.Errorf("message %d is %v %.60q %.60q retained %v, want %v %.60q %.60q retained %v",
				i, g.Received, g.Topic, g.Payload, g.Retained, w.Received, w.Topic, w.Payload, w.Retained)
		}
	}
}

func TestCaptureRoundTrip(t *testing.T) {
	for _, name := range []string{"c.jsonl", "c.jsonl.gz", "c.jsonl.zst"} {
		t.Run(name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), name)
			w, err := CreateCapture(path, "skerrymoor")
			if err != nil {
				t.Fatal(err)
			}
			want := awkward()
			for i := range want {
				want[i].Received = second + sensors.Instant(i*250)
				if err := w.Write(want[i]); err != nil {
					t.Fatal(err)
				}
			}
			end := second.FloorSecond().Add(5e9)
			if err := w.Close(end); err != nil {
				t.Fatal(err)
			}
			if err := w.Close(end); err == nil {
				t.Error("closing a closed capture gives no error")
			}
			r := openCapture(t, path)
			if r.Airfield() != "skerrymoor" {
				t.Errorf("airfield %q when opened", r.Airfield())
			}
			same(t, readAll(t, r), want)
			if got, known := r.End(); !known || got != end {
				t.Errorf("end %v, known %v, want %v", got, known, end)
			}
			if r.Truncated() || r.Clamped() != 0 {
				t.Errorf("truncated %v, clamped %d", r.Truncated(), r.Clamped())
			}
		})
	}
}

func TestCaptureLinesAsDocumented(t *testing.T) {
	path := filepath.Join(t.TempDir(), "c.jsonl")
	w, err := CreateCapture(path, "skerrymoor")
	if err != nil {
		t.Fatal(err)
	}
	for _, m := range []sensors.Message{
		{Received: second, Topic: "airfield/skerrymoor/station/far07/wind", Payload: []byte(`{"v":1}`)},
		{Received: second + 1, Topic: "b", Payload: []byte{0xff, 0}, Retained: true},
	} {
		if err := w.Write(m); err != nil {
			t.Fatal(err)
		}
	}
	if err := w.Close(second.FloorSecond() + 2000); err != nil {
		t.Fatal(err)
	}
	got, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	want := `{"capture":1,"airfield":"skerrymoor"}
{"received":"2026-07-01T12:00:00.120Z","topic":"airfield/skerrymoor/station/far07/wind","payload":"{\"v\":1}"}
{"received":"2026-07-01T12:00:00.121Z","topic":"b","payload_b64":"/wA=","retained":true}
{"end":"2026-07-01T12:00:02.000Z"}
`
	if string(got) != want {
		t.Errorf("wrote:\n%swant:\n%s", got, want)
	}
}

func TestCreateCaptureRefusesAnExistingFile(t *testing.T) {
	path := filepath.Join(t.TempDir(), "c.jsonl")
	if err := os.WriteFile(path, []byte("evidence"), 0o600); err != nil {
		t.Fatal(err)
	}
	_, err := CreateCapture(path, "skerrymoor")
	if err == nil || !strings.Contains(err.Error(), "choose another name") {
		t.Errorf("error %v", err)
	}
	if got, err := os.ReadFile(path); string(got) != "evidence" {
		t.Errorf("the file holds %q (%v)", got, err)
	}
}

func TestCaptureWriteErrorStays(t *testing.T) {
	if _, err := os.Stat("/dev/full"); err != nil {
		t.Skip("SKIPPED, NOT TESTED: there is no /dev/full on this machine")
	}
	full, err := os.OpenFile("/dev/full", os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	w, err := CreateCapture(filepath.Join(t.TempDir(), "c.jsonl"), "skerrymoor")
	if err != nil {
		t.Fatal(err)
	}
	w.out.Reset(full)
	if err := w.Write(sensors.Message{Received: second, Topic: "a"}); err != nil {
		t.Fatalf("a buffered write reports %v", err)
	}
	if err := w.Flush(); err == nil || !strings.Contains(err.Error(), "c.jsonl") {
		t.Errorf("flushing to a full device gives %v, want an error that names the capture", err)
	}
	if err := w.Write(sensors.Message{Received: second, Topic: "a"}); err == nil {
		t.Error("a write after a failed flush is accepted")
	}
	if err := errors.Join(w.Close(0), full.Close()); err == nil {
		t.Error("closing after a failed flush gives no error")
	}
}

// TestCaptureAfterAnAbruptEnd cuts a flushed, never closed capture at every
// length from its last flush on, as a kill would leave it.
func TestCaptureAfterAnAbruptEnd(t *testing.T) {
	for _, name := range []string{"c.jsonl", "c.jsonl.gz", "c.jsonl.zst"} {
		t.Run(name, func(t *testing.T) {
			dir := t.TempDir()
			path := filepath.Join(dir, name)
			w, err := CreateCapture(path, "skerrymoor")
			if err != nil {
				t.Fatal(err)
			}
			var want []sensors.Message
			add := func(n int) {
				for range n {
					m := sensors.Message{Received: second + sensors.Instant(len(want)*100), Topic: "a/b",
						Payload: fmt.Appendf(nil, `{"n":%d,"random":%d}`, len(want), len(want)*7919%104729)}
					want = append(want, m)
					if err := w.Write(m); err != nil {
						t.Fatal(err)
					}
				}
				if err := w.Flush(); err != nil {
					t.Fatal(err)
				}
			}
			add(500)
			flushed, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			add(40)
			later, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			if err := w.Close(0); err != nil {
				t.Fatal(err)
			}
			cut := filepath.Join(dir, "cut-"+name)
			for size := len(flushed); size <= len(later); size += 1 + (len(later)-len(flushed))/60 {
				if err := os.WriteFile(cut, later[:size], 0o600); err != nil {
					t.Fatal(err)
				}
				r := openCapture(t, cut)
				got := readAll(t, r)
				if len(got) < 500 {
					t.Fatalf("cut at %d of %d bytes: %d messages, but 500 were flushed", size, len(later), len(got))
				}
				same(t, got, want[:len(got)])
				if _, known := r.End(); known {
					t.Error("an end is known")
				}
				// A plain file cut right behind a message cannot be told from a whole one.
				whole := name == "c.jsonl" && (later[size-1] == '\n' || bytes.HasSuffix(later[:size], []byte(`"}`)))
				if whole == r.Truncated() {
					t.Errorf("cut at %d of %d bytes: truncated is %v", size, len(later), r.Truncated())
				}
			}
			// Cut before the first flush: nothing to read, and no error.
			for _, size := range []int{0, 1, 5, 9, 12} {
				if err := os.WriteFile(cut, later[:size], 0o600); err != nil {
					t.Fatal(err)
				}
				if got := readAll(t, openCapture(t, cut)); len(got) != 0 {
					t.Errorf("cut at %d bytes: %d messages", size, len(got))
				}
			}
		})
	}
}

func TestReadCapture(t *testing.T) {
	const good = `{"received":"2026-07-01T12:00:00.120Z","topic":"a","payload":"x"}` + "\n"
	tests := []struct {
		name      string
		text      string
		want      int    // messages
		fault     string // in the error; none if empty
		line      string // named in the error
		truncated bool
		clamped   int
	}{
		{name: "nothing"},
		{name: "a header only", text: `{"capture":1,"airfield":"skerrymoor"}` + "\n"},
		{name: "without a header", text: good + good, want: 2},
		{name: "blank lines and CRLF", text: "\n" + strings.ReplaceAll(good, "\n", "\r\n") + " \n" + good, want: 2},
		{name: "no newline at the end", text: good + strings.TrimSpace(good), want: 2},
		{name: "spaces, as other writers make them", text: `{"topic": "a", "payload": "x", "received": "2026-07-01T12:00:00Z"}` + "\n", want: 1},
		{name: "keys of later versions", text: `{"received":"2026-07-01T12:00:00Z","topic":"a","qos":1,"payload":"x"}` + "\n", want: 1},
		{name: "torn line", text: good + good[:30], want: 1, truncated: true},
		{name: "stamps going back", text: good + strings.Replace(good, ":00.120", ":00.119", 1) + good, want: 3, clamped: 1},
		{name: "malformed in the middle", text: good + "{\"received\":\n" + good, want: 1, fault: "one JSON object", line: "line 2"},
		{name: "malformed last line, whole", text: good + "{\"received\":\n", want: 1, fault: "one JSON object", line: "line 2"},
		{name: "not a capture", text: "wind,12,kt", fault: "one JSON object", line: "line 1"},
		{name: "version from the future", text: `{"capture":2}` + "\n", fault: "version 2", line: "line 1"},
		{name: "second header", text: good + `{"capture":1}` + "\n", want: 1, fault: "file of its own", line: "line 2"},
		{name: "line after the end", text: `{"end":"2026-07-01T12:00:00Z"}` + "\n" + good, fault: "file of its own", line: "line 2"},
		{name: "no time", text: `{"topic":"a","payload":"x"}` + "\n", fault: `"received"`, line: "line 1"},
		{name: "no topic", text: `{"received":"2026-07-01T12:00:00Z","payload":"x"}` + "\n", fault: `"topic"`, line: "line 1"},
		{name: "no payload", text: `{"received":"2026-07-01T12:00:00Z","topic":"a"}` + "\n", fault: "payload", line: "line 1"},
		{name: "two payloads", text: `{"received":"2026-07-01T12:00:00Z","topic":"a","payload":"x","payload_b64":"eA=="}` + "\n", fault: "payload once", line: "line 1"},
		{name: "bad base64", text: `{"received":"2026-07-01T12:00:00Z","topic":"a","payload_b64":"e"}` + "\n", fault: "payload_b64", line: "line 1"},
		{name: "bad time", text: `{"received":"2026-02-30T12:00:00Z","topic":"a","payload":"x"}` + "\n", fault: "2026-02-30", line: "line 1"},
		{name: "bad hour", text: `{"received":"2026-07-01T24:00:00Z","topic":"a","payload":"x"}` + "\n", fault: "T24", line: "line 1"},
		{name: "bad end", text: `{"end":"soon"}` + "\n", fault: "soon", line: "line 1"},
		{name: "bytes that are not text", text: "{\"received\":\"2026-07-01T12:00:00Z\",\"topic\":\"a\",\"payload\":\"\xff\"}\n", fault: "UTF-8", line: "line 1"},
		{name: "gzip under another name", text: "\x1f\x8b\x08\x00", fault: ".gz"},
		{name: "zstd under another name", text: "\x28\xb5\x2f\xfd", fault: ".zst"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), "c.jsonl")
			if err := os.WriteFile(path, []byte(tt.text), 0o600); err != nil {
				t.Fatal(err)
			}
			r, err := OpenCapture(path)
			n := 0
			if err == nil {
				defer r.Close()
				var m sensors.Message
				last := sensors.Instant(0)
				for err = r.Next(&m); err == nil; err = r.Next(&m) {
					n++
					if m.Received < last {
						t.Errorf("message %d: %v after %v", n, m.Received, last)
					}
					last = m.Received
				}
				if again := r.Next(&m); again != err {
					t.Errorf("the error was %v and is %v", err, again)
				}
				if lines := strings.Count(tt.text, "\n"); tt.fault == "" && r.Line() < lines {
					t.Errorf("ended in line %d of %d", r.Line(), lines)
				}
				if r.Truncated() != tt.truncated || r.Clamped() != tt.clamped {
					t.Errorf("truncated %v, clamped %d, want %v, %d", r.Truncated(), r.Clamped(), tt.truncated, tt.clamped)
				}
			}
			if n != tt.want {
				t.Errorf("%d messages, want %d", n, tt.want)
			}
			switch {
			case tt.fault == "" && err != io.EOF:
				t.Errorf("error %v", err)
			case tt.fault != "" && (!strings.Contains(err.Error(), tt.fault) || !strings.Contains(err.Error(), tt.line) || !strings.Contains(err.Error(), path)):
				t.Errorf("error %q does not name %q, %q and the file", err, tt.fault, tt.line)
			}
		})
	}
}

func TestReadCaptureDamagedWithin(t *testing.T) {
	for _, name := range []string{"c.jsonl.gz", "c.jsonl.zst"} {
		path := filepath.Join(t.TempDir(), name)
		w, err := CreateCapture(path, "skerrymoor")
		if err != nil {
			t.Fatal(err)
		}
		for i := range 2000 {
			if err := w.Write(sensors.Message{Received: second, Topic: "a", Payload: fmt.Appendf(nil, "%d", i*i)}); err != nil {
				t.Fatal(err)
			}
		}
		if err := w.Close(second); err != nil {
			t.Fatal(err)
		}
		text, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		for i := len(text) / 2; i < len(text)/2+64; i++ {
			text[i] ^= 0x55
		}
		if err := os.WriteFile(path, text, 0o600); err != nil {
			t.Fatal(err)
		}
		r := openCapture(t, path)
		var m sensors.Message
		for err = r.Next(&m); err == nil; err = r.Next(&m) {
		}
		if err == io.EOF || !strings.Contains(err.Error(), name) {
			t.Errorf("%s: damage in the middle gives %v, want an error that names the file", name, err)
		}
	}
}

func TestReceivedTimes(t *testing.T) {
	// Expected values by hand from second: an offset is subtracted, digits
	// below the millisecond are cut.
	tests := []struct {
		text string
		want sensors.Instant
	}{
		{"2026-07-01T12:00:00.120Z", second},
		{"2026-07-01T12:00:00.12Z", second},
		{"2026-07-01T12:00:00.120999999Z", second},
		{"2026-07-01T12:00:00Z", second - 120},
		{"2026-07-01T14:00:00.120+02:00", second},
		{"2026-07-01T06:30:00.120-05:30", second},
		{"2026-07-01T12:00:00.120+00:00", second},
		{"2026-06-30T23:59:59.999Z", second - 120 - 12*3600_000 - 1},
		{"2024-02-29T00:00:00Z", 1709164800_000}, // 19782 days after the epoch
		{"1970-01-01T00:00:00.000Z", 0},
		{"1969-12-31T23:59:59.999Z", -1},
	}
	for _, tt := range tests {
		var p lineParser
		kind, err := p.parse([]byte(`{"received":"`+tt.text+`","topic":"a","payload":"x"}`), nil)
		if err != nil || kind != lineMessage || p.received != tt.want {
			t.Errorf("%s is %d (%v), want %d", tt.text, p.received, err, tt.want)
		}
	}
}

// FuzzCaptureLine holds the fast path to encoding/json: what it accepts must
// mean the same there.
func FuzzCaptureLine(f *testing.F) {
	for _, m := range awkward()[:10] {
		f.Add(appendMessage(nil, m))
	}
	for _, s := range []string{
		`{"topic": "a", "payload": "x\u00b0\ud83c\udf2c", "received": "2026-07-01T12:00:00+01:00"}`,
		`{"received":"2026-07-01T12:00:00Z","topic":"a","payload_b64":"eA==","retained":false}`,
		`{"received":"2026-07-01T12:00:00Z","topic":"a","payload":"x","payload":"y"}`,
		`{"received":"2026-07-01T12:00:00Z","topic":"a","payload":"x","payload_b64":"eA=="}`,
		`{"received":"2026-07-01T12:00:00,5Z","Topic":"a","payload":"x"}`,
		`{"capture":1,"airfield":"skerrymoor"}`, `{"end":"2026-07-01T12:00:00Z"}`, `{}`, `{"a":1}x`, `[`, `null`,
	} {
		f.Add([]byte(s))
	}
	f.Fuzz(func(t *testing.T, line []byte) {
		line = bytes.Trim(line, " \t\r\n")
		var quick, exact lineParser
		if !quick.fast(line, nil) {
			_, _ = exact.slow(line, nil) // must not panic
			return
		}
		kind, err := exact.slow(line, nil)
		if err != nil || kind != lineMessage {
			t.Fatalf("%q: taken by the fast path, but %v", line, err)
		}
		if quick.received != exact.received || !bytes.Equal(quick.topic, exact.topic) ||
			!bytes.Equal(quick.payload, exact.payload) || quick.retained != exact.retained {
			t.Fatalf("%q: fast path %v %q %q %v, encoding/json %v %q %q %v", line,
				quick.received, quick.topic, quick.payload, quick.retained,
				exact.received, exact.topic, exact.payload, exact.retained)
		}
	})
}

func TestFastPathTakesCommonLines(t *testing.T) {
	for i, m := range awkward() {
		var p lineParser
		line := bytes.TrimSpace(appendMessage(nil, m))
		if !p.fast(line, nil) {
			t.Errorf("message %d (%.80q) misses the fast path", i, line)
		}
	}
}

func BenchmarkReadCapture(b *testing.B) {
	const lines = 100_000
	var text []byte
	for i := range lines {
		text = appendMessage(text, sensors.Message{
			Received: second + sensors.Instant(i*12), Topic: fmt.Sprintf("airfield/skerrymoor/station/mast%d/wind", i%8),
			Payload: fmt.Appendf(nil, `[{"bn":"mast%d:","n":"wind_speed","u":"m/s","v":%d.%d},{"n":"wind_direction","u":"deg","v":%d}]`, i%8, i%20, i%10, i%360),
		})
	}
	for _, name := range []string{"plain.jsonl", "packed.jsonl.gz", "packed.jsonl.zst"} {
		b.Run(name, func(b *testing.B) {
			path := filepath.Join(b.TempDir(), name)
			w, err := CreateCapture(path, "skerrymoor")
			if err != nil {
				b.Fatal(err)
			}
			w.put(text)
			if err := w.Close(0); err != nil {
				b.Fatal(err)
			}
			b.SetBytes(int64(len(text)))
			for b.Loop() {
				r, err := OpenCapture(path)
				if err != nil {
					b.Fatal(err)
				}
				var m sensors.Message
				n := 0
				for err = r.Next(&m); err == nil; err = r.Next(&m) {
					n++
				}
				if n != lines || err != io.EOF {
					b.Fatalf("%d lines, %v", n, err)
				}
				if err := r.Close(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(lines)*float64(b.N)/b.Elapsed().Seconds(), "lines/s")
		})
	}
}
