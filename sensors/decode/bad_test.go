package decode

import (
	"fmt"
	"slices"
	"strings"
	"testing"

	"sockline/sensors"
)

// Everything that has been seen to come out of broken masts, in each format:
// what must come of it is named, and never a wind that nobody measured.
func TestBadInput(t *testing.T) {
	senml := sensors.Station{Format: sensors.FormatSenMLJSON}
	nmea := sensors.Station{Format: sensors.FormatNMEA0183}
	mapped := sensors.Station{Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "v", Direction: "d"}}
	list := sensors.Station{Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Samples: "/s", Speed: "v", Direction: "d", Time: "t", TimeFormat: "unix"}}
	pack := func(v, d string) string {
		return `[{"n":"wind_speed","u":"m/s","v":` + v + `},{"n":"wind_direction","u":"deg","v":` + d + `}]`
	}
	for _, row := range []struct {
		name    string
		station sensors.Station
		payload string
		want    string // "readings/reasons"
	}{
		{"64 KiB of blanks behind it", mapped, `{"v":1,"d":2}` + strings.Repeat(" ", MaxPayload-13), "1/"},
		{"one byte more", mapped, `{"v":1,"d":2}` + strings.Repeat(" ", MaxPayload-12), "0/too-large"},
		{"depth within", mapped, `{"v":1,"d":2,"x":` + strings.Repeat("[", 31) + strings.Repeat("]", 31) + `}`, "1/"},
		{"depth beyond", mapped, `{"v":1,"d":2,"x":` + strings.Repeat("[", 32) + strings.Repeat("]", 32) + `}`, "0/too-large"},
		{"64 KiB of brackets", senml, strings.Repeat("[", MaxPayload), "0/malformed"},
		{"a name that is not UTF-8", senml, "[{\"n\":\"\xc3\x28wind_speed\",\"v\":1}]", "0/malformed"},
		{"a sentence that is not UTF-8", nmea, sentence("WIMWV,0\xff0,R,5,M,A"), "0/malformed"},
		{"NaN in a pack", senml, pack("NaN", "1"), "0/malformed"},
		{"NaN as a string", mapped, `{"v":"NaN","d":2}`, "0/not-finite"},
		{"infinity as a string", mapped, `{"v":"-inf","d":2}`, "0/not-finite"},
		{"1e308", senml, pack("1e308", "1"), "0/impossible"},
		{"1e308 and a base of it", senml, `[{"bv":1e308},{"n":"wind_speed","u":"m/s","v":1e308},{"n":"wind_direction","u":"deg","bv":0,"v":1}]`, "0/not-finite"},
		{"1e309", mapped, `{"v":1e309,"d":2}`, "0/not-finite"},
		{"negative speed", senml, pack("-0.1", "1"), "0/impossible"},
		{"negative zero", senml, pack("-0.0", "1"), "1/"},
		{"720 degrees", mapped, `{"v":1,"d":720}`, "0/impossible"},
		{"720 degrees in a sentence", nmea, sentence("WIMWV,720,R,5,M,A"), "0/impossible"},
		{"empty array", senml, `[]`, "0/"},
		{"empty array of samples", list, `{"s":[]}`, "0/no-value"},
		{"samples that are no array", list, `{"s":{"v":1,"d":2}}`, "0/malformed"},
		{"one bad sample among three", list, `{"s":[{"v":1,"d":2,"t":1782907200},{"v":-1,"d":2,"t":1782907201},{"v":3,"d":2,"t":1782907202}]}`, "2/impossible"},
		{"too many samples", list, `{"s":[` + strings.Repeat(`{"v":1,"d":2,"t":1782907200},`, MaxReadings) + `{}]}`, "1000/too-large"},
		{"too many sentences", nmea, strings.Repeat(sentence("WIMWV,0,R,5,M,A")+"\n", MaxReadings+1), "1000/too-large"},
		{"too many times in a pack", senml, `[{"n":"a"}` + manyTimes(MaxReadings+1) + `]`, "0/too-large incomplete"},
		{"wrong units", senml, `[{"n":"wind_speed","u":"deg","v":1},{"n":"wind_direction","u":"m/s","v":1}]`, "0/units"},
		{"wrong checksum", nmea, "$WIMWV,350.0,R,6.4,M,A*25", "0/checksum"},
		{"no checksum", nmea, "$WIMWV,350.0,R,6.4,M,A", "0/checksum"},
		{"half a message", senml, pack("1", "2")[:50], "0/malformed"},
		{"half a sentence", nmea, "$WIMWV,350.0,R,6", "0/checksum"},
		{"XDR not in fours", nmea, sentence("WIXDR,A,250,D"), "0/malformed"},
		{"XDR direction alone", nmea, sentence("WIXDR,A,250,D,1"), "0/incomplete"},
		{"XDR a switch is no speed", nmea, sentence("WIXDR,A,250,D,1,S,1,,1"), "0/incomplete"},
		{"XDR odd unit", nmea, sentence("WIXDR,A,250,D,1,S,5,B,1"), "0/units incomplete"},
		{"XDR empty", nmea, sentence("WIXDR,A,,D,1,S,,M,1"), "0/no-value"},
		{"XDR 720 degrees", nmea, sentence("WIXDR,A,720,D,1,S,5,M,1"), "0/impossible incomplete"},
		{"MDA too short", nmea, sentence("WIMDA,30,I,1,B"), "0/malformed"},
		{"MDA without wind", nmea, sentence("WIMDA,30,I,1,B,20,C,,,40,,12,C,,T,,M,,N,,M"), "0/no-value"},
	} {
		t.Run(row.name, func(t *testing.T) {
			got, err := newDecoder(t, row.station).Decode(nil, message(row.payload), 0)
			if s := fmt.Sprintf("%d/%s", len(got), bare(reasons(err))); s != row.want {
				t.Errorf("%s (%.200v), want %s", s, err, row.want)
			}
		})
	}
}

// bare takes the counts out of a list of reasons.
func bare(list string) string {
	var out []string
	for _, word := range strings.Fields(list) {
		if slices.Contains(Reasons(), Reason(word)) {
			out = append(out, word)
		}
	}
	return strings.Join(out, " ")
}

func manyTimes(n int) string {
	var b strings.Builder
	for i := range n {
		fmt.Fprintf(&b, `,{"n":"wind_speed","u":"m/s","v":1,"t":-%d}`, i)
	}
	return b.String()
}

// A pack whose names are another station's has come from the wrong mast, or to
// the wrong topic: either way its wind belongs elsewhere.
func TestForeignStation(t *testing.T) {
	for _, row := range []struct{ base, want string }{
		{"touch07/", "1/"}, {"urn:dev:mast:touch07:", "1/"}, {"", "1/"}, {"urn:dev:ow:10e2073a:", "1/"},
		{"far07/", "0/foreign-station"}, {"urn:dev:mast:far07:", "0/foreign-station"}, {"far07.", "0/foreign-station"},
		{"far07:touch07:", "1/"},           // the last element is the station
		{"xfar07/", "1/"},                  // another word
		{"urn:mast:", "0/foreign-station"}, // a station may have that id; it should not
	} {
		payload := `[{"bn":"` + row.base + `","n":"wind_speed","u":"m/s","v":6},{"n":"wind_direction","u":"deg","v":240}]`
		for _, station := range []sensors.Station{{Format: sensors.FormatSenMLJSON}, {Format: sensors.FormatSenMLCBOR}} {
			if station.Format == sensors.FormatSenMLCBOR {
				payload = string(inCBOR(t, []byte(payload), true))
			}
			d := newDecoder(t, station)
			d.Beware([]string{"far07", "touch07", "mast"})
			got, err := d.Decode(nil, message(payload), 0)
			if s := fmt.Sprintf("%d/%s", len(got), bare(reasons(err))); s != row.want {
				t.Errorf("%s %q: %s (%v), want %s", station.Format, row.base, s, err, row.want)
			}
		}
	}
}

func TestXDR(t *testing.T) {
	d := newDecoder(t, sensors.Station{Format: sensors.FormatNMEA0183, NorthOffset: 10})
	for _, row := range []struct{ name, payload, want string }{
		{"a pair of sentences", sentence("WIXDR,A,250,D,1") + "\r\n" + sentence("WIXDR,S,10.0,N,1,S,20.0,N,2"), "+0.000s 5.14444@260 gust 10.2889"},
		{"names", sentence("WIXDR,A,100,D,WINDDIR,S,36.0,K,WindSpd,S,72,K,WINDGUST,C,20,C,AIR"), "+0.000s 10@110 gust 20"},
		{"one transducer each", sentence("WIXDR,A,100,D,0,S,5,M,0"), "+0.000s 5@110"},
		{"two winds", sentence("WIXDR,A,100,D,1,S,5,M,1") + "\n" + sentence("WIXDR,A,110,D,1,S,6,M,1"), "+0.000s 5@110; +0.000s 6@120"},
		{"beside others", sentence("WIXDR,C,20,C,2,H,60,P,0") + "\n" + sentence("WIMWV,10,R,5,M,A"), "+0.000s 5@20"},
		{"a rudder is no wind", sentence("IIXDR,A,-3.9,D,RUDDER"), ""},
	} {
		got, err := d.Decode(nil, message(row.payload), 0)
		if show(got) != row.want || err != nil {
			t.Errorf("%s: %q, %v; want %q", row.name, show(got), err, row.want)
		}
	}
}

// FuzzXDR holds the reader of XDR to one that goes by splitting.
func FuzzXDR(f *testing.F) {
	for _, seed := range []string{"A,250.1,D,0,A,254.0,D,1,A,262.3,D,2,S,3.1,M,0,S,4.2,M,1,S,5.0,M,2", "A,100,D,WINDDIR,S,36.0,K,WINDSPD", "C,,C,AIR", "A,1,D,1,S,2,,1", ",,,"} {
		f.Add(seed)
	}
	d := newDecoder(f, sensors.Station{Format: sensors.FormatNMEA0183})
	f.Fuzz(func(t *testing.T, body string) {
		if strings.ContainsAny(body, "\r\n") {
			return
		}
		readings, _ := decodeSound(t, d, []byte(sentence("WIXDR,"+body)))
		// A speed that comes out stands in the text, in one of the four units.
		for _, r := range readings {
			found := false
			part := strings.Split(body, ",")
			for i := 0; i+3 < len(part); i += 4 {
				if factor, ok := mwvUnit([]byte(part[i+2])); ok && part[i] == "S" {
					v, reason := numeral([]byte(part[i+1]))
					found = found || (reason == "" && float64(v*factor)+0 == r.Speed)
				}
			}
			if !found || len(part)%4 != 0 {
				t.Fatalf("%q gave %+v", body, r)
			}
		}
	})
}
