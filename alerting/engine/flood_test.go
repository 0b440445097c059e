package engine_test

import (
	"fmt"
	"runtime"
	"strings"
	"testing"
	"time"

	"sockline/alerting/engine"
	"sockline/sensors"
	"sockline/sensors/decode"
)

// packAt is a SenML pack of one wind.
func packAt(base string, at sensors.Instant, speed float64) []byte {
	return fmt.Appendf(nil, `[{"bn":%q,"bt":%.3f,"n":"wind_speed","u":"m/s","v":%g},{"n":"wind_direction","u":"deg","v":240}]`,
		base, float64(at)/1000, speed)
}

// A station that sends 10,000 messages a second costs the others nothing: every
// reading of theirs is used, the flood is counted, and memory stays as it is.
func TestFloodOfOneStation(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	a := loadAerodrome(t, "skerrymoor", start)
	const seconds, perSecond = 20, 10000
	var calm int64 // what the heap grows by without a flood: windows that fill
	for _, flood := range []int{0, perSecond} {
		e := a.engine(t)
		flooder := a.cfg.Stations[0]
		e.Due(start)
		used := make([]int, len(a.cfg.Stations))
		var before, after runtime.MemStats
		begun := time.Now()
		for s := range seconds {
			if s == 5 {
				runtime.GC()
				runtime.ReadMemStats(&before)
			}
			base := start.Add(time.Duration(s) * time.Second)
			for k := range max(flood, 1) {
				at := base.Add(time.Duration(k) * time.Second / time.Duration(max(flood, 1)))
				closeSteps(e, at, used)
				if flood > 0 {
					_, _, _ = e.Receive(sensors.Message{Topic: flooder.Topic, Received: at, Payload: packAt("", at, float64(k%30))}) // counted below
				}
				if k == 0 {
					for _, st := range a.cfg.Stations[1:] {
						if _, kept, err := e.Receive(sensors.Message{Topic: st.Topic, Received: at, Payload: packAt(st.ID+"/", at, 5)}); kept != 1 || err != nil {
							t.Fatalf("%s at %s: kept %d, %v", st.ID, at, kept, err)
						}
					}
				}
			}
		}
		t.Logf("flood of %d a second: %v for %d s", flood, time.Since(begun).Round(time.Millisecond), seconds)
		runtime.GC()
		runtime.ReadMemStats(&after)
		closeSteps(e, start.Add((seconds+3)*time.Second), used)
		for i, n := range used[1:] {
			if n != seconds {
				t.Errorf("%s: %d readings used, want %d", a.cfg.Stations[i+1].ID, n, seconds)
			}
		}
		// 200 at once, then 50 a second; the first ones of the burst refill within it.
		passed := e.Counts().Messages[0] - e.Counts().Decode[0][decode.Flood]
		if most := uint64(4*engine.MessageRate + seconds*engine.MessageRate); flood > 0 && (passed > most || passed < most-100) {
			t.Errorf("%d messages of the flood passed, want about %d", passed, most)
		}
		grown := int64(after.HeapAlloc) - int64(before.HeapAlloc)
		if flood == 0 {
			calm = grown
		} else if grown > calm+4<<20 {
			t.Errorf("the heap grew by %d KiB, without a flood by %d", grown>>10, calm>>10)
		}
	}
}

// closeSteps closes the steps that are due and counts the readings they use.
func closeSteps(e *engine.Engine, now sensors.Instant, used []int) {
	for {
		step, due := e.Due(now)
		if !due {
			return
		}
		for _, r := range e.Step(step).Readings {
			used[r.Station]++
		}
	}
}

// The rate is a matter of arrival stamps alone.
func TestFloodByStamps(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	a := loadAerodrome(t, "skerrymoor", start)
	topic := a.cfg.Stations[2].Topic
	e := a.engine(t)
	e.Due(start)
	send := func(at sensors.Instant) error {
		_, _, err := e.Receive(sensors.Message{Topic: topic, Received: at, Payload: []byte(`[]`)})
		return err
	}
	passed := func(at sensors.Instant, n int) (ok int) {
		for range n {
			if err := send(at); err == nil {
				ok++
			} else if !strings.Contains(err.Error(), "flood: station ") {
				t.Fatal(err)
			}
		}
		return ok
	}
	for _, row := range []struct {
		after time.Duration
		sent  int
		want  int
	}{
		{0, 1000, 200},                 // a burst
		{20 * time.Millisecond, 10, 1}, // one more each 20 ms
		{19 * time.Millisecond, 10, 0}, //
		{time.Millisecond, 10, 1},      // nothing of the 19 ms is lost
		{time.Second, 60, 50},          //
		{time.Hour, 1000, 200},         // full again, and no fuller
		{-time.Minute, 10, 0},          // stamps do not go back; if they did, it would be no gift
	} {
		start = start.Add(row.after)
		if got := passed(start, row.sent); got != row.want {
			t.Errorf("%v later: %d of %d passed, want %d", row.after, got, row.sent, row.want)
		}
	}
}

// Readings of quantities that come on topics of their own enter the step that
// they belong to, with or without their gust.
func TestQuantitiesOnTopicsOfTheirOwn(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	a := loadAerodrome(t, "skerrymoor", start)
	st := a.cfg.Stations[1]
	st.Format, st.Topics = sensors.FormatJSON, &sensors.FieldTopics{Speed: "m/speed", Direction: "m/from", Gust: "m/gust"}
	st.Topic = "m/speed"
	a.cfg.Stations[1] = st
	e := a.engine(t)
	e.Due(start)
	used := make([]int, len(a.cfg.Stations))
	gusts := 0
	for s := range 10 {
		at := start.Add(time.Duration(s)*time.Second + 300*time.Millisecond)
		for k, topic := range st.AllTopics() {
			if topic == "m/gust" && s%2 == 1 {
				continue // it does not always come
			}
			now := at.Add(time.Duration(k) * 10 * time.Millisecond)
			for {
				step, due := e.Due(now)
				if !due {
					break
				}
				for _, r := range e.Step(step).Readings {
					used[r.Station]++
					if r.HasGust {
						gusts++
					}
				}
			}
			if _, _, err := e.Receive(sensors.Message{Topic: topic, Received: now, Payload: fmt.Append(nil, 5+k)}); err != nil {
				t.Fatal(err)
			}
		}
	}
	closeSteps(e, start.Add(15*time.Second), used)
	if used[1] != 10 || gusts < 4 || gusts > 5 {
		t.Errorf("%d readings with %d gusts, want 10 and 5", used[1], gusts)
	}
}

// A pack that names another configured station is refused and counted.
func TestForeignPack(t *testing.T) {
	start := sensors.At(time.Date(2026, 7, 1, 12, 0, 0, 0, time.UTC))
	a := loadAerodrome(t, "skerrymoor", start)
	e := a.engine(t)
	e.Due(start)
	_, kept, err := e.Receive(sensors.Message{Topic: a.cfg.Stations[0].Topic, Received: start, Payload: packAt(a.cfg.Stations[1].ID+"/", start, 5)})
	if kept != 0 || err == nil || e.Counts().Decode[0][decode.ForeignStation] != 2 {
		t.Errorf("kept %d, %v, counted %v", kept, err, e.Counts().Decode[0])
	}
}
