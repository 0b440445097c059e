package synthetic_test

import (
	"math"
	"testing"
	"time"

	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/synthetic"
)

// What the decoder makes of a generated message is the sampler's reading, in
// every format, with its exercise mark.
func TestDecodedMessagesAreTheReadings(t *testing.T) {
	const variation = -6.1
	fields := &sensors.FieldMap{
		Speed: "/wind/speed", Direction: "/wind/toward", Time: "at",
		SpeedUnit: "kt", DirectionUnit: "deg", Toward: true, TimeFormat: "unix-ms",
	}
	var specs []synthetic.StationSpec
	for i, station := range []sensors.Station{
		{ID: "a", Format: sensors.FormatSenMLJSON, North: sensors.NorthTrue},
		{ID: "b", Format: sensors.FormatSenMLJSON, North: sensors.NorthMagnetic, NorthOffset: 2, Interval: 250 * time.Millisecond},
		{ID: "c", Format: sensors.FormatNMEA0183, North: sensors.NorthMagnetic},
		{ID: "d", Format: sensors.FormatJSON, North: sensors.NorthTrue, NorthOffset: -3, Fields: fields},
		{ID: "e", Format: sensors.FormatJSON, North: sensors.NorthTrue, Fields: &sensors.FieldMap{Speed: "s", Direction: "d", Exercise: "/meta/drill"}},
	} {
		station.Topic, station.Height = "mast/"+station.ID, 10
		specs = append(specs, synthetic.StationSpec{Station: station, X: 800 * float64(i), Variation: variation})
	}
	scene := synthetic.DrawEpisode(4, synthetic.EpisodeConvective, synthetic.Line{Bearing: 64, Length: 5000})
	scene.Length = 2 * time.Minute

	type key struct {
		station int
		arrival sensors.Instant
	}
	want := map[key]sensors.Reading{}
	sampler, err := scene.NewSampler(specs)
	if err != nil {
		t.Fatal(err)
	}
	var readings []sensors.Reading
	for more := true; more; {
		readings, more = sampler.Next(readings[:0])
		for _, r := range readings {
			want[key{r.Station, r.Arrival}] = r
		}
	}
	decoders := map[string]*decode.Decoder{}
	for i, spec := range specs {
		if decoders[spec.Station.Topic], err = decode.New(spec.Station, i); err != nil {
			t.Fatal(err)
		}
	}
	messages := 0
	err = scene.Generate(specs, func(m sensors.Message) error {
		messages++
		got, err := decoders[m.Topic].Decode(nil, m, variation)
		if err != nil || len(got) != 1 {
			t.Fatalf("%s: %d readings, %v", m.Payload, len(got), err)
		}
		r := want[key{got[0].Station, got[0].Arrival}]
		// Knots have six decimals on the wire: 1e-6 m/s; angles add in another order.
		turn := math.Abs(math.Mod(got[0].From-r.From+540, 360) - 180)
		if math.Abs(got[0].Speed-r.Speed) > 1e-6 || turn > 1e-9 || got[0].Time != r.Time || !got[0].Exercise {
			t.Fatalf("%s\n gave %+v\n want %+v", m.Payload, got[0], r)
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if messages != len(want) || messages < 900 {
		t.Errorf("%d messages for %d readings", messages, len(want))
	}
}
