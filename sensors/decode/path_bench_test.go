package decode_test

import (
	"fmt"
	"testing"

	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/quality"
)

// BenchmarkMessageToChecked is the whole way of a message of one reading up to
// its verdict, on one core: decoding, the arrival test, the quality tests.
func BenchmarkMessageToChecked(b *testing.B) {
	const noon sensors.Instant = 1782907200_000
	senML := func(at sensors.Instant, i int) []byte {
		return fmt.Appendf(nil, `[{"bn":"touch07/","bt":%.3f,"n":"wind_speed","u":"m/s","v":%d.4},{"n":"wind_direction","u":"deg","v":%d}]`,
			float64(at)/1000, 5+i%3, 240+i%7)
	}
	nmea := func(_ sensors.Instant, i int) []byte {
		body := fmt.Sprintf("WIMWV,%d.0,R,%d.4,M,A", 240+i%7, 5+i%3)
		var sum byte
		for k := range len(body) {
			sum ^= body[k]
		}
		return fmt.Appendf(nil, "$%s*%02X\r\n", body, sum)
	}
	mapped := func(at sensors.Instant, i int) []byte {
		return fmt.Appendf(nil, `{"time":%d,"speed":%d.4,"direction":%d}`, int64(at), 5+i%3, 240+i%7)
	}
	for _, row := range []struct {
		name    string
		station sensors.Station
		payload func(sensors.Instant, int) []byte
	}{
		{"senml", sensors.Station{Format: sensors.FormatSenMLJSON}, senML},
		{"nmea", sensors.Station{Format: sensors.FormatNMEA0183}, nmea},
		{"json", sensors.Station{Format: sensors.FormatJSON, Fields: &sensors.FieldMap{Speed: "speed", Direction: "direction", Time: "time", TimeFormat: "unix-ms"}}, mapped},
	} {
		b.Run(row.name, func(b *testing.B) {
			row.station.ID, row.station.Interval = "touch07", 1e9
			d, err := decode.New(row.station, 0)
			if err != nil {
				b.Fatal(err)
			}
			checker := quality.NewChecker(row.station)
			var messages []sensors.Message
			for i := range 4096 {
				at := noon + sensors.Instant(i)*sensors.Second
				messages = append(messages, sensors.Message{Payload: row.payload(at, i), Received: at + 50})
			}
			readings := make([]sensors.Reading, 0, 4)
			usable, i := 0, 0
			b.ReportAllocs()
			for b.Loop() {
				m := messages[i%len(messages)]
				shift := sensors.Instant(i/len(messages)) * 4096 * sensors.Second
				i++
				readings, err = d.Decode(readings[:0], m, 0)
				if err != nil || len(readings) != 1 {
					b.Fatal(readings, err)
				}
				r := readings[0]
				r.Time, r.Arrival = r.Time+shift, r.Arrival+shift
				if _, ok := quality.Arrival(r, 1e9, false); !ok {
					b.Fatal("late")
				}
				if checker.Check(r).Usable() {
					usable++
				}
			}
			if usable < i/2 {
				b.Fatalf("%d of %d are usable", usable, i)
			}
		})
	}
}
