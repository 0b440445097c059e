package engine_test

import (
	"fmt"
	"math"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

// What is learnt of a site is taken out of the wind that the analysis sees, from
// the UTC day after it is enough, only where that is asked for, and never out of
// the wind that people read.
func TestSitingIsRemoved(t *testing.T) {
	a := loadAerodrome(t, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
	start := sensors.At(time.Date(2026, 7, 10, 12, 0, 0, 0, time.UTC))
	// 6 days of 16 hours with 6 blocks each: 576 in the sector about 240, mean
	// turn 10 degrees. With the prior of 30 blocks: 10 x 576/606 = 9.505.
	var tables []engine.Table
	for day := range 6 {
		for hour := 1; hour <= 16; hour++ {
			at := sensors.At(time.Date(2026, 7, 3+day, hour, 0, 0, 0, time.UTC))
			tables = append(tables, engine.Table{At: at, Payload: fmt.Appendf(nil,
				`{"table":"siting","data":{"hour_ms":%d,"masts":{"far07":{"8":{"n":6,"turned_deg":60,"log_ratio":0}}}}}`, int64(at))})
		}
	}
	far := -1
	for i, st := range a.cfg.Stations {
		if st.ID == "far07" {
			far = i
		}
	}
	for _, c := range []struct {
		on   bool
		days int // of tables
		want float64
	}{{true, 6, 240 - 9.505}, {false, 6, 240}, {true, 3, 240}} {
		s := a.settings()
		s.Siting = c.on
		e, err := engine.New(s)
		if err != nil {
			t.Fatal(err)
		}
		for _, table := range tables[:16*c.days] {
			if err := e.LoadTable(table); err != nil {
				t.Fatal(err)
			}
		}
		var got, people float64
		for second := sensors.Instant(1); second <= 150; second++ {
			at := start + second*sensors.Second
			for i := range a.cfg.Stations {
				e.Offer(sensors.Reading{Station: i, Time: at, Arrival: at, From: 240, Speed: 8 + 0.1*float64(second%3), Exercise: true})
			}
			b := e.Step(at).Snapshot.Mast(far).Blocks[0]
			got = quantity.Vector{East: b.East, North: b.North}.From()
			if w, ok := e.Wind(far); ok {
				people = w.Two.Vector.From()
			}
		}
		if math.Abs(got-c.want) > 0.01 || math.Abs(people-240) > 1e-6 {
			t.Errorf("%+v: the analysis sees %.3f degrees, people read %.3f", c, got, people)
		}
	}
}
