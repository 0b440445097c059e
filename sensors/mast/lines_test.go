package mast

import (
	"bytes"
	"fmt"
	"math"
	"strings"
	"testing"

	"sockline/sensors"
	"sockline/sensors/decode"
)

// sentence frames a body with "$" and its checksum.
func sentence(body string) string {
	var sum byte
	for i := range len(body) {
		sum ^= body[i]
	}
	return fmt.Sprintf("$%s*%02X", body, sum)
}

func TestSplitter(t *testing.T) {
	long := strings.Repeat("x", maxLine+1)
	for _, row := range []struct{ name, stream, want string }{
		{"line ends of all kinds", "a\r\nb\nc\rd\n\n\r\n", "a|b|c|d"},
		{"an end without a line end", "a\nhalf", "a"},
		{"blanks", "  a \n \n", "a"},
		{"too long, and what follows", long + "\nb\n", "b"},
		{"as long as may be", long[1:] + "\nb\n", long[1:] + "|b"},
	} {
		for _, piece := range []int{1, 2, 7, 5000} { // however the stream is cut
			var s splitter
			var got []string
			for b := []byte(row.stream); len(b) > 0; b = b[min(piece, len(b)):] {
				s.feed(b[:min(piece, len(b))], func(line []byte) { got = append(got, string(line)) })
			}
			if strings.Join(got, "|") != row.want {
				t.Errorf("%s, by %d: %.80q, want %.80q", row.name, piece, got, row.want)
			}
		}
	}
}

func TestTake(t *testing.T) {
	mwv, mwd, xdrA, xdrS := sentence("WIMWV,250.0,R,10.0,M,A"), sentence("WIMWD,251.0,T,,M,,N,10.0,M"), sentence("WIXDR,A,252,D,1"), sentence("WIXDR,S,9,M,1,S,12,M,2")
	for _, row := range []struct {
		name   string
		choose Choose
		lines  string // "seconds line" each
		want   string // of each line: speed@direction or -, ! for a refusal
	}{
		{"one kind", Automatic, "0 " + mwv + "\n1 " + mwv, "10@250 10@250"},
		{"the first kind is kept to", Automatic, "0 " + mwv + "\n0 " + mwd + "\n1 " + mwv + "\n1 " + mwd, "10@250 - 10@250 -"},
		{"until it is missing", Automatic, "0 " + mwv + "\n9 " + mwd + "\n10 " + mwd + "\n11 " + mwv, "10@250 - 10@251 -"},
		{"a chosen kind", "MWD", "0 " + mwv + "\n0 " + mwd, "- 10@251"},
		{"a pair of sentences", Automatic, "0 " + xdrA + "\n0 " + xdrS + "\n1 " + xdrA + "\n1 " + xdrS, "- 9@252g12 - 9@252g12"},
		{"a pair too far apart", Automatic, "0 " + xdrA + "\n2 " + xdrS, "- -"},
		{"other sentences", Automatic, "0 " + sentence("GPGLL,5057.970,N,00146.110,E,142451,A"), "-"},
		{"a wrong checksum", Automatic, "0 $WIMWV,250.0,R,10.0,M,A*00", "!"},
		{"no sentence", Automatic, "0 hello", "!"},
		{"the instrument says not valid", Automatic, "0 " + sentence("WIMWV,,R,,M,V"), "!"},
		{"only from magnetic north", Automatic, "0 " + sentence("WIMWD,,T,250,M,,N,10.0,M"), "!"},
		{"an exercise", Automatic, "0 " + sentence("PSKLX,1") + "\n0 " + mwv + "\n0 " + sentence("PSKLX,0") + "\n0 " + mwv, "- 10@250x - 10@250"},
		{"a damaged mark marks", Automatic, "0 $PSKLX,0*00\n0 " + mwv, "- 10@250x"},
	} {
		t.Run(row.name, func(t *testing.T) {
			k, err := newTaker("touch07", row.choose)
			if err != nil {
				t.Fatal(err)
			}
			var got []string
			for _, line := range strings.Split(row.lines, "\n") {
				at, text, _ := strings.Cut(line, " ")
				var seconds int
				if _, err := fmt.Sscan(at, &seconds); err != nil {
					t.Fatal(err)
				}
				records, err := k.take(nil, []byte(text), noon+sensors.Instant(seconds)*sensors.Second)
				s := "-"
				switch {
				case err != nil:
					s = "!"
				case len(records) == 1:
					r := records[0]
					s = fmt.Sprintf("%g@%g", r.Speed, r.From)
					if r.HasGust {
						s += fmt.Sprintf("g%g", r.Gust)
					}
					if r.Exercise {
						s += "x"
					}
				case len(records) > 1:
					s = "many"
				}
				got = append(got, s)
			}
			if strings.Join(got, " ") != row.want {
				t.Errorf("%v, want %s", got, row.want)
			}
		})
	}
}

// What the agent writes, the daemon reads: the same winds at the same times,
// to the rounding.
func TestPackIsRead(t *testing.T) {
	d, err := decode.New(sensors.Station{ID: "touch07", Format: sensors.FormatSenMLJSON}, 0)
	if err != nil {
		t.Fatal(err)
	}
	d.Beware([]string{"touch07", "far07"})
	for _, exercise := range []bool{false, true} {
		var all []Record
		for i := range maxPack {
			all = append(all, Record{Time: noon + sensors.Instant(137*i), Speed: float64(i) / 7, From: float64(i) * 3.6, Gust: float64(i) / 3, HasGust: i%2 == 0, Exercise: exercise})
		}
		payload := pack("touch07", all)
		if len(payload) > decode.MaxPayload {
			t.Fatalf("%d bytes", len(payload))
		}
		got, err := d.Decode(nil, sensors.Message{Payload: payload, Received: noon + 999999}, 0)
		if err != nil || len(got) != len(all) {
			t.Fatalf("%d readings, %v", len(got), err)
		}
		for i, r := range got {
			w := all[i]
			if r.Time != w.Time || math.Abs(r.Speed-w.Speed) > 5e-5 || math.Abs(r.From-w.From) > 5e-4 || r.HasGust != w.HasGust ||
				w.HasGust && math.Abs(r.Gust-w.Gust) > 5e-5 || r.Exercise != exercise {
				t.Fatalf("%+v came out as %+v", w, r)
			}
		}
	}
	if n := alike([]Record{{}, {}, {Exercise: true}}); n != 2 {
		t.Errorf("%d records go together, want 2", n)
	}
}

func TestStatusTopic(t *testing.T) {
	for topic, want := range map[string]string{"airfield/a/station/b/wind": "airfield/a/station/b/status", "wind": "wind/status", "/wind": "/wind/status"} {
		if got := StatusTopic(topic); got != want {
			t.Errorf("%s: %s, want %s", topic, got, want)
		}
	}
}

// Any stream, however it is cut, gives the same lines, and no reading that does
// not come of a whole sentence.
func FuzzStream(f *testing.F) {
	f.Add([]byte(sentence("WIMWV,250.0,R,10.0,M,A")+"\r\nrubbish\n"+sentence("WIXDR,A,1,D,1")+"\n"+sentence("WIXDR,S,1,M,1")), 3)
	f.Add([]byte("$PSKLX,1*41\n$*00\n$PSKLX"), 1)
	f.Fuzz(func(t *testing.T, stream []byte, piece int) {
		if piece < 1 {
			return
		}
		var first string
		for _, piece := range []int{piece, len(stream) + 1} {
			var s splitter
			k, err := newTaker("touch07", Automatic)
			if err != nil {
				t.Fatal(err)
			}
			var got []Record
			for b := bytes.Clone(stream); len(b) > 0; b = b[min(piece, len(b)):] {
				s.feed(b[:min(piece, len(b))], func(line []byte) {
					n := len(got)
					got, _ = k.take(got, line, noon) // refusals are not what this is about
					if len(got) > n && line[len(line)-3] != '*' {
						t.Fatalf("a reading of %q", line)
					}
				})
			}
			text := fmt.Sprint(got)
			if first == "" {
				first = text
			} else if text != first {
				t.Fatalf("%s\n%s", first, text)
			}
		}
	})
}
