package decode

import (
	"encoding/json"
	"fmt"
	"math"
	"strconv"
	"strings"
	"testing"

	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/testdata/outside"
)

// sentence frames a body with "$" and its checksum.
func sentence(body string) string {
	var sum byte
	for i := range len(body) {
		sum ^= body[i]
	}
	return fmt.Sprintf("$%s*%02X", body, sum)
}

func TestNMEAVectors(t *testing.T) {
	// Published sentences and what they mean by the definition; see the header
	// of the file. Where knots and m/s contradict each other this decoder
	// refuses; sentences of other types are passed over, and so is an XDR
	// without transducers of a wind.
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183})
	rows := outside.Rows(t, "nmea_vectors.csv")
	if len(rows) < 24 {
		t.Fatalf("%d rows, want at least 24", len(rows))
	}
	for _, row := range rows {
		line, outcome := row["sentence"], row["outcome"]
		t.Run(line, func(t *testing.T) {
			var want struct {
				Angle, Speed *float64
				DirTrue      *float64 `json:"dir_true"`
				DirMag       *float64 `json:"dir_mag"`
				SpeedFromKt  *float64 `json:"speed_from_kt"`
			}
			if err := json.Unmarshal([]byte(row["values"]), &want); err != nil {
				t.Fatal(err)
			}
			const variation = 1.25
			got, err := d.Decode(nil, message(line), variation)
			kind := line[3:6]
			switch {
			case kind == "XDR" && strings.Contains(line, "S,4.2,M,1"):
				// Transducers 0, 1, 2 are minimum, mean, maximum (origin of the row).
				if show(got) != "+0.000s 4.2@254 gust 5" || err != nil {
					t.Errorf("%s gave %s, %v", kind, show(got), err)
				}
				return
			case kind == "XDR" && strings.HasPrefix(outcome, "reject"):
				if len(got) != 0 || reasons(err) != "malformed" && reasons(err) != "checksum" {
					t.Errorf("%s gave %v, %v; want malformed", kind, got, err)
				}
				return
			case kind != "MWV" && kind != "MWD" && kind != "MDA":
				if len(got) != 0 || err != nil {
					t.Errorf("%s gave %v, %v; want nothing", kind, got, err)
				}
				return
			case strings.HasPrefix(outcome, "no data"):
				if r := reasons(err); len(got) != 0 || (r != "not-valid" && r != "no-value" && r != "not-valid no-value") {
					t.Errorf("%v, %v; want no reading for want of a value", got, err)
				}
				return
			case strings.HasPrefix(outcome, "reject"):
				if r := reasons(err); len(got) != 0 || r == "" || r == "not-valid" || r == "no-value" {
					t.Errorf("%v, %v; want a refusal", got, err)
				}
				return
			case strings.Contains(outcome, "disagree"):
				if len(got) != 0 || reasons(err) != "contradiction" {
					t.Errorf("%v, %v; want contradiction", got, err)
				}
				return
			}
			if err != nil || len(got) != 1 {
				t.Fatalf("%v, %v; want one reading", got, err)
			}
			direction := want.Angle
			if direction == nil {
				direction = want.DirTrue
			}
			if direction == nil {
				*want.DirMag += variation
				direction = want.DirMag
			}
			speed := want.Speed
			if speed == nil {
				speed = want.SpeedFromKt
			}
			// The table rounds to six decimals.
			if math.Abs(got[0].From-*direction) > 1e-9 || math.Abs(got[0].Speed-*speed) > 1e-6 {
				t.Errorf("got %v m/s from %v, want %v from %v", got[0].Speed, got[0].From, *speed, *direction)
			}
		})
	}
}

func TestNMEAMessages(t *testing.T) {
	mwv := func(fields string) string { return sentence("WIMWV," + fields) }
	mwd := func(fields string) string { return sentence("WIMWD," + fields) }
	mark := sentence(exerciseAddress + ",1")
	checkRows(t, newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183}), []payloadRow{
		// The first five sentences are published or were worked out with an
		// independent program.
		{"published", "$WIMWV,041.1,R,01.0,N,A*16\r\n", "+0.000s 0.514444@41.1", ""},
		{"knots", "$WIMWV,045.0,T,12.5,N,A*12", "+0.000s 6.43056@45", ""},
		{"metres a second", "$WIMWV,350.0,R,6.4,M,A*24", "+0.000s 6.4@350", ""},
		{"MWD", "$WIMWD,045.0,T,041.5,M,12.5,N,6.4,M*6F", "+0.000s 6.4@45", ""},
		{"km/h", "$WIMWV,214.8,R,0.1,K,A*28", "+0.000s 0.0277778@214.8", ""},
		{"another sentence", "$GPGLL,5057.970,N,00146.110,E,142451,A*27", "", ""},
		{"status V with empty fields", "$WIMWV,,T,,N,V*32", "", "not-valid"},
		{"one digit off", "$WIMWV,041.1,R,01.0,N,A*17", "", "checksum"},
		{"one byte off", "$WIMWV,042.1,R,01.0,N,A*16", "", "checksum"},
		{"no checksum", "$WIMWV,041.1,R,01.0,N,A", "", "checksum"},
		{"half a checksum", "$WIMWV,041.1,R,01.0,N,A*1", "", "checksum"},
		{"nothing but a star", "$*00", "", ""},
		{"shorter than that", "$*0", "", "checksum"},

		{"360 is 0", mwv("360.0,T,5.2,M,A"), "+0.000s 5.2@0", ""},
		{"calm", mwv("0.0,T,0.0,M,A"), "+0.000s 0@0", ""},
		{"three in one message", mwv("10,T,1,M,A") + "\r\n" + mwv("20,R,2,M,A") + "\r\n" + mwd("30,T,,M,,N,3,M") + "\r\n", "+0.000s 1@10; +0.000s 2@20; +0.000s 3@30", ""},
		{"bare carriage returns", mwv("10,T,1,M,A") + "\r" + mwv("20,R,2,M,A"), "+0.000s 1@10; +0.000s 2@20", ""},
		{"a bad one among good ones", mwv("10,T,1,M,A") + "\n$WIMWV,11,T,1,M,A*00\n" + mwv("20,R,2,M,A"), "+0.000s 1@10; +0.000s 2@20", "checksum"},
		{"exercise", mark + "\r\n" + mwv("10,T,1,M,A"), "+0.000s 1@10 exercise", ""},
		{"exercise, said last", mwv("10,T,1,M,A") + "\r\n" + mark, "+0.000s 1@10 exercise", ""},
		{"not an exercise", sentence(exerciseAddress+",0") + "\r\n" + mwv("10,T,1,M,A"), "+0.000s 1@10", ""},
		{"a damaged marker still marks", mark[:len(mark)-2] + "00\r\n" + mwv("10,T,1,M,A"), "+0.000s 1@10 exercise", "checksum"},
		{"a strange marker marks", sentence(exerciseAddress+",yes") + "\r\n" + mwv("10,T,1,M,A"), "+0.000s 1@10 exercise", "malformed"},
		{"another maker's sentence", sentence("PABCMWV,1,2") + "\r\n" + mwv("10,T,1,M,A"), "+0.000s 1@10", ""},

		{"empty speed is not calm", mwv("270.0,T,,N,A"), "", "no-value"},
		{"empty angle", mwv(",T,5.0,N,A"), "", "no-value"},
		{"a letter O", mwv("270.0,T,1O.0,N,A"), "", "malformed"},
		{"exponent", mwv("270.0,T,1e1,N,A"), "", "malformed"},
		{"nan", mwv("270.0,T,nan,N,A"), "", "not-finite"},
		{"inf", mwv("270.0,T,-Inf,N,A"), "", "not-finite"},
		{"so many digits", mwv("270.0,T," + strings.Repeat("9", 400) + ",N,A"), "", "not-finite"},
		{"negative speed", mwv("270.0,T,-1.0,N,A"), "", "impossible"},
		{"angle 400", mwv("400.0,T,1.0,N,A"), "", "impossible"},
		{"unknown unit", mwv("270.0,T,1.0,B,A"), "", "units"},
		{"no unit", mwv("270.0,T,1.0,,A"), "", "units"},
		{"unknown reference", mwv("270.0,X,1.0,N,A"), "", "malformed"},
		{"unknown status", mwv("270.0,T,1.0,N,"), "", "malformed"},
		{"a field too few", mwv("270.0,T,1.0,N"), "", "malformed"},
		{"a field too many", mwv("270.0,T,1.0,N,A,A"), "", "malformed"},
		{"many fields too many", mwv("270.0,T,1.0,N,A" + strings.Repeat(",", 50)), "", "malformed"},

		{"MWD in knots only", mwd("350.0,T,,,19.4,N,,"), "+0.000s 9.98022@350", ""},
		{"MWD without speed", mwd("350.0,T,,M,,N,,M"), "", "no-value"},
		{"MWD without direction", mwd(",T,,M,19.4,N,10.0,M"), "", "no-value"},
		{"MWD empty", "$WIMWD,,,,,,,,*40", "", "no-value"},
		{"MWD letters swapped", mwd("350.0,M,355.0,T,19.4,N,10.0,M"), "", "units"},
		{"MWD contradiction", mwd("10.1,T,10.1,M,12,N,40,M"), "", "contradiction"},
		{"MWD apart by a rounding", mwd("10.1,T,,M,0.9,N,0.7,M"), "+0.000s 0.7@10.1", ""},
		{"MWD apart by 9 %", mwd("10.1,T,,M,40,N,19,M"), "+0.000s 19@10.1", ""},
		{"MWD a field too few", mwd("350.0,T,355.0,M,19.4,N,10.0"), "", "malformed"},
		{"MWD not a number", mwd("north,T,355.0,M,19.4,N,10.0,M"), "", "malformed"},

		{"empty payload", "", "", "malformed"},
		{"blank lines", "\r\n \r\n", "", "malformed"},
		{"not a sentence", "hello", "", "malformed"},
	})
}

func TestNMEALowerCaseChecksum(t *testing.T) {
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183})
	line := sentence("WIMWD,045.0,T,041.5,M,12.5,N,6.4,M")
	lower := line[:len(line)-2] + strings.ToLower(line[len(line)-2:])
	if lower == line {
		t.Fatalf("%s has no letter in its checksum", line)
	}
	if got, err := d.Decode(nil, message(lower), 0); err != nil || show(got) != "+0.000s 6.4@45" {
		t.Errorf("%q, %v", show(got), err)
	}
}

func TestRealRecord(t *testing.T) {
	// 150 s of real wind from a boat (see the header of the file), written as
	// the sentences that it was read from.
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183})
	value := func(row map[string]string, column string) float64 {
		v, err := strconv.ParseFloat(strings.TrimSpace(row[column]), 64)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	rows := outside.Rows(t, "wind_1hz_boat.csv")
	var all []sensors.Reading
	for _, row := range rows {
		payload := sentence(fmt.Sprintf("WIMWD,%s,T,%s,M,%s,N,%s,M", row["dir_true_deg"], row["dir_mag_deg"], row["speed_kt"], row["speed_ms"])) + "\r\n" +
			sentence(fmt.Sprintf("WIMWV,%s,T,%s,N,A", row["true_angle_deg"], row["true_speed_kt"])) + "\r\n"
		got, err := d.Decode(nil, message(payload), 0)
		if err != nil || len(got) != 2 {
			t.Fatalf("row %s: %v, %v", row["i"], got, err)
		}
		// Knots and m/s of the record differ by at most 0.068 m/s, the rounding
		// of both.
		if got[0].Speed != value(row, "speed_ms") || got[0].From != value(row, "dir_true_deg") ||
			math.Abs(got[1].Speed-got[0].Speed) > 0.069 {
			t.Errorf("row %s: %+v", row["i"], got)
		}
		all = append(all, got[0])
	}
	for _, window := range outside.Rows(t, "wind_1hz_boat_stats.csv") {
		// Vector means by R: the file gives nine digits.
		first, last := int(value(window, "first_i")), int(value(window, "last_i"))
		var east, north float64
		for _, r := range all[first : last+1] {
			v := quantity.FromDirection(r.Speed, r.From)
			east += v.East
			north += v.North
		}
		n := float64(last - first + 1)
		mean := quantity.Vector{East: east / n, North: north / n}
		if math.Abs(mean.Speed()-value(window, "vec_speed_ms")) > 1e-7 || math.Abs(mean.From()-value(window, "vec_dir_deg")) > 1e-5 {
			t.Errorf("rows %d to %d: %v m/s from %v, want %v from %v", first, last,
				mean.Speed(), mean.From(), window["vec_speed_ms"], window["vec_dir_deg"])
		}
	}
}
