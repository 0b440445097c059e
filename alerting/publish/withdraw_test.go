package publish

import (
	"testing"
	"testing/synctest"
	"time"

	"sockline/alerting"
)

// TestWithdraw: a path that is taken away reads as not observed once and is
// then cleared, a station is cleared, both with a QoS that loses nothing; a
// broker that is away hears it later; what comes back is told again.
func TestWithdraw(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		pass(ListenFor + 2*Tick)
		told := func(want string, suffix string) {
			t.Helper()
			pass(3 * time.Second)
			if got := payloads(r.broker.under(suffix)); got != want {
				t.Errorf("%s: sent %q, want %q", suffix, got, want)
			}
		}
		r.SetPath("25", "landing", alerting.Raised, []byte("raised"))
		r.SetStation("far07", "live", []byte("live"))
		told("raised", "/path/25/landing")
		told("live", "/station/far07")

		r.broker.set(func(b *fakeBroker) { b.down = true })
		r.WithdrawPath("25", "landing", []byte("withdrawn"))
		r.WithdrawStation("far07")
		r.WithdrawStation("never-told")
		pass(3 * time.Second)
		r.broker.set(func(b *fakeBroker) { b.down = false })
		pass(ListenFor + 2*Tick)
		told("raised withdrawn ", "/path/25/landing")
		told("live ", "/station/far07")
		told("", "/station/never-told")
		for _, m := range append(r.broker.under("/path/25/landing")[1:], r.broker.under("/station/far07")[1:]...) {
			if m.qos != 1 || !m.retained {
				t.Errorf("%s %q went out with QoS %d, retained %v", m.topic, m.payload, m.qos, m.retained)
			}
		}
		// A new connection hears nothing of them any more.
		r.OnConnect()
		told("raised withdrawn ", "/path/25/landing")

		r.SetPath("25", "landing", alerting.BelowLimits, []byte("back"))
		told("raised withdrawn  back", "/path/25/landing")
		// Taken away and back before anything could be sent: no last words.
		r.broker.set(func(b *fakeBroker) { b.down = true })
		r.WithdrawPath("25", "landing", []byte("withdrawn"))
		r.SetPath("25", "landing", alerting.Raised, []byte("again"))
		r.broker.set(func(b *fakeBroker) { b.down = false })
		told("raised withdrawn  back again", "/path/25/landing")
		r.stop()
	})
}
