package decode

import (
	"fmt"
	"strings"
	"testing"
	"time"

	"sockline/sensors"
)

// apart is a station with a topic for each quantity; those of gust are only
// read if it has one.
func apart(fields *sensors.FieldMap, gust bool) sensors.Station {
	topics := &sensors.FieldTopics{Speed: "m/speed", Direction: "m/from"}
	if gust {
		topics.Gust = "m/gust"
	}
	return sensors.Station{Format: sensors.FormatJSON, Fields: fields, Topics: topics}
}

// play sends messages, "milliseconds topic payload" a line, and shows what came
// out after which; a line "milliseconds step" closes a step at that time.
func play(t *testing.T, d *Decoder, lines string) string {
	t.Helper()
	var out []string
	for _, line := range strings.Split(strings.TrimSpace(lines), "\n") {
		var at int
		var topic string
		line = strings.TrimSpace(line)
		if _, err := fmt.Sscan(line, &at, &topic); err != nil {
			t.Fatal(err)
		}
		_, payload, _ := strings.Cut(line, topic+" ")
		stamp := noon.Add(time.Duration(at) * time.Millisecond)
		var got []sensors.Reading
		var err error
		if topic == "step" {
			got, err = d.Release(nil, stamp, 0)
		} else {
			m := sensors.Message{Topic: "m/" + strings.TrimSuffix(topic, "!"), Payload: []byte(payload), Received: stamp, Retained: strings.HasSuffix(topic, "!")}
			got, err = d.Decode(nil, m, 0)
		}
		if s := strings.TrimSpace(show(got) + " " + reasons(err)); s != "" {
			out = append(out, fmt.Sprintf("%d: %s", at, s))
		}
	}
	return strings.Join(out, "\n")
}

func TestJoin(t *testing.T) {
	document := &sensors.FieldMap{Speed: "v", Direction: "v", Gust: "v", Time: "t", TimeFormat: "unix-ms", SpeedUnit: "km/h"}
	stamped := func(offset, v int) string { return fmt.Sprintf(`{"t":%d,"v":%d}`, int64(noon)+int64(offset), v) }
	for _, row := range []struct {
		name    string
		station sensors.Station
		lines   string
		want    string // the time of a reading is the earlier arrival
	}{
		{"a pair", apart(nil, false), "0 speed 5.5\n20 from 240", "20: +0.000s 5.5@240"},
		{"the other way round", apart(nil, false), "0 from 240\n20 speed 5.5", "20: +0.000s 5.5@240"},
		{"with quotes and blanks", apart(nil, false), "0 speed \"05.5\" \n20 from  017 ", "20: +0.000s 5.5@17"},
		{"500 ms apart", apart(nil, false), "0 speed 5\n500 from 240", "500: +0.000s 5@240"},
		{"501 ms apart", apart(nil, false), "0 speed 5\n501 from 240\n502 speed 6", "501: incomplete\n502: +0.501s 6@240"},
		{"two speeds", apart(nil, false), "0 speed 5\n100 speed 6\n110 from 240", "100: incomplete\n110: +0.100s 6@240"},
		{"each is used once", apart(nil, false), "0 speed 5\n1 from 240\n2 speed 6\n3 speed 7", "1: +0.000s 5@240\n3: incomplete"},
		{"with a gust", apart(nil, true), "0 speed 5\n1 from 240\n2 gust 8", "2: +0.000s 5@240 gust 8"},
		{"gust first", apart(nil, true), "0 gust 8\n1 from 240\n2 speed 5", "2: +0.001s 5@240 gust 8"},
		{"gust never", apart(nil, true), "0 speed 5\n1 from 240\n1000 speed 6\n1001 from 250\n2000 gust 9",
			"1000: +0.000s 5@240\n2000: +1.000s 6@250"},
		{"gust never, and the step closes", apart(nil, true), "300 speed 5\n301 from 240\n1299 step\n1000 step\n2000 step", "1299: +0.300s 5@240"},
		{"a step before the pair", apart(nil, true), "300 speed 5\n301 from 240\n299 step\n302 gust 6", "302: +0.300s 5@240 gust 6"},
		{"a step does not take half a pair", apart(nil, true), "300 speed 5\n1000 step\n310 from 240\n320 gust 6", "320: +0.300s 5@240 gust 6"},
		{"gust without its wind", apart(nil, true), "0 gust 8\n900 gust 9", ""},
		{"retained", apart(nil, false), "0 speed! 5\n1 from 240", "1: +0.000s 5@240 retained"},
		{"empty", apart(nil, false), "0 speed\n1 from null\n2 speed \"\"", "0: no-value\n1: no-value\n2: no-value"},
		{"no number", apart(nil, false), "0 speed calm\n1 from NaN\n2 speed {\"v\":1}\n3 speed -1\n4 from 720\n5 speed 1e308",
			"0: malformed\n1: not-finite\n2: malformed\n3: impossible\n4: impossible\n5: malformed"},
		{"documents", apart(document, true), "40 speed " + stamped(-500, 36) + "\n50 from " + stamped(-500, 240) + "\n60 gust " + stamped(-500, 72),
			"60: -0.500s 10@240 gust 20"},
		{"documents of two measurements", apart(document, false), "0 speed " + stamped(-1500, 36) + "\n10 from " + stamped(-500, 240) + "\n20 speed " + stamped(-500, 72),
			"10: incomplete\n20: -0.500s 20@240"},
		{"only one has a time", apart(document, false), "0 speed {\"v\":36}\n10 from " + stamped(-300, 90), "10: -0.300s 10@90"},
		{"documents without it", apart(document, false), "0 speed {}\n10 from [1]\n20 speed {\"v\":null}\n30 speed {\"v\"", "0: no-value\n10: no-value\n20: no-value\n30: malformed"},
		{"an exercise", apart(document, false), "0 speed {\"v\":36,\"exercise\":true}\n10 from {\"v\":1}", "10: +0.000s 10@1 exercise"},
		{"toward", apart(&sensors.FieldMap{Toward: true, DirectionUnit: "rad"}, false), "0 speed 5\n1 from 0", "1: +0.000s 5@180"},
		{"another topic", apart(nil, false), "0 elsewhere 5", "0: malformed"},
	} {
		t.Run(row.name, func(t *testing.T) {
			if got := play(t, newDecoder(t, row.station), row.lines); got != row.want {
				t.Errorf("got\n%s\nwant\n%s", got, row.want)
			}
		})
	}
}

func TestWaiting(t *testing.T) {
	d := newDecoder(t, apart(nil, true))
	play(t, d, "0 speed 5\n1 gust 7")
	if got := fmt.Sprint(d.Waiting()); got != "[speed gust]" {
		t.Errorf("%s is waiting, want speed and gust", got)
	}
}

// What the joiner makes is a pure function of messages and stamps, uses each
// value once, and never joins what is more than JoinWithin apart.
func FuzzJoin(f *testing.F) {
	f.Add([]byte("\x00\x05\x01\x06\x02\x07"))
	f.Add([]byte("\x00\xff\x01\xff\x00\x10\x02\x00\x01\x00"))
	f.Fuzz(func(t *testing.T, plan []byte) {
		var first string
		for range 2 {
			d := newDecoder(t, apart(nil, true))
			var all []string
			at := noon
			last := [3]map[float64]sensors.Instant{{}, {}, {}}
			used := map[float64]bool{}
			for i := 0; i+1 < len(plan); i += 2 {
				at = at.Add(time.Duration(plan[i+1]) * 4 * time.Millisecond)
				slot := int(plan[i] % 4)
				var got []sensors.Reading
				var err error
				if slot == 3 {
					got, err = d.Release(nil, at, 0)
				} else {
					value := float64(i) / 256 // no two are alike
					last[slot][value] = at
					got, err = d.Decode(nil, sensors.Message{Topic: []string{"m/speed", "m/from", "m/gust"}[slot], Payload: fmt.Append(nil, value), Received: at}, 0)
				}
				for _, r := range got {
					speed, direction := last[slotSpeed][r.Speed], last[slotDirection][r.From]
					if speed == 0 || direction == 0 || used[r.Speed] || used[r.From] || max(speed-direction, direction-speed) > 500 {
						t.Fatalf("%s out of a speed of %v and a direction of %v", show(got), speed, direction)
					}
					if r.HasGust && (last[slotGust][r.Gust] == 0 || used[r.Gust]) {
						t.Fatalf("%s: that gust was never there", show(got))
					}
					used[r.Speed], used[r.From] = true, true
					if r.HasGust {
						used[r.Gust] = true
					}
				}
				all = append(all, show(got), reasons(err))
			}
			text := strings.Join(all, "|")
			if first == "" {
				first = text
			} else if text != first {
				t.Fatalf("%s\n%s", first, text)
			}
		}
	})
}
