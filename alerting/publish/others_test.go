package publish

import (
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"sockline/alerting"
)

func TestOneDaemonPerPrefix(t *testing.T) {
	chatter := func(r *rig, instance string, skew, length time.Duration) {
		for range int(length / StatusEvery) {
			r.ObserveStatus(status(instance, skew))
			pass(StatusEvery)
		}
	}
	tests := []struct {
		name string
		play func(t *testing.T, r *rig)
		mode Mode
	}{
		{"nobody else", func(t *testing.T, r *rig) { pass(10 * time.Second) }, Sending},
		{"our own status", func(t *testing.T, r *rig) { chatter(r, "m", 0, 20*time.Second) }, Sending},
		{"garbage", func(t *testing.T, r *rig) {
			for _, p := range []string{"", "{", "null", "[]", `{"instance":7}`, `{"instance":"x","at":"y"}`} {
				r.ObserveStatus([]byte(p))
			}
			pass(10 * time.Second)
		}, Sending},
		{"another lives", func(t *testing.T, r *rig) { chatter(r, "a", 0, 20*time.Second) }, Silent},
		{"another lives whose clock is an hour behind", func(t *testing.T, r *rig) {
			chatter(r, "z", -time.Hour, 20*time.Second)
		}, Silent},
		{"a retained status of long ago", func(t *testing.T, r *rig) {
			r.ObserveStatus(status("a", -time.Hour))
			pass(10 * time.Second)
		}, Sending},
		{"a last will", func(t *testing.T, r *rig) {
			r.ObserveStatus([]byte(`{"condition":"no-contact","instance":"a","at":"2026-07-01T14:00:00Z"}`))
			pass(10 * time.Second)
		}, Sending},
		{"another lived and ended", func(t *testing.T, r *rig) {
			chatter(r, "a", 0, 20*time.Second)
			pass(aliveFor)
		}, Sending},
		{"a lesser name comes while we send: we give way", func(t *testing.T, r *rig) {
			pass(10 * time.Second)
			chatter(r, "a", 0, 4*time.Second)
		}, Silent},
		{"a greater name comes while we send: it gives way", func(t *testing.T, r *rig) {
			pass(10 * time.Second)
			chatter(r, "z", 0, 4*time.Second)
		}, Sending},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				r := newRig(t, nil)
				r.SetStatus(alerting.Observing, []byte("s"))
				tt.play(t, r)
				synctest.Wait()
				if got := r.State().Mode; got != tt.mode {
					t.Errorf("mode %s, want %s", got, tt.mode)
				}
				sent := len(r.broker.under(""))
				if tt.mode == Silent {
					if n := strings.Count(r.log.String(), "stays silent"); n != 1 {
						t.Errorf("staying silent is said %d times, want once:\n%s", n, r.log)
					}
					r.SetStatus(alerting.Blind, []byte("s"))
					must(t, r.Issue(issue("x", Opening, "open")))
					r.stop() // not even a farewell
					if n := len(r.broker.under("")); n != sent {
						t.Errorf("a silent sink sent %d messages", n-sent)
					}
				} else if sent == 0 {
					t.Error("a sending sink sent nothing")
				}
				r.stop()
			})
		})
	}
}

// TestTakingOver: alerts that the other instance told from opening to closing
// are not told again; what is still open is.
func TestTakingOver(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		must(t, r.Issue(issue("told", Opening, "told-open")))
		must(t, r.Issue(issue("told", Closing, "told-close")))
		must(t, r.Issue(issue("open", Opening, "open-open")))
		for range 50 {
			r.ObserveStatus(status("a", 0))
			pass(StatusEvery)
		}
		must(t, r.Issue(issue("just", Opening, "just-open")))
		must(t, r.Issue(issue("just", Closing, "just-close")))
		pass(aliveFor + 2*Tick)
		want := "open-open(delayed) just-open just-close"
		if got := payloads(r.broker.under("/alert")); got != want {
			t.Errorf("sent %s\nwant %s", got, want)
		}
		r.stop()
	})
}

// TestLateWill: a will that overtakes our status is written over at once.
func TestLateWill(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		r.SetStatus(alerting.Observing, []byte("observing"))
		pass(10 * time.Second)
		before := len(r.broker.under("/status"))
		r.ObserveStatus([]byte(`{"condition":"no-contact","instance":"m","at":"2026-07-01T14:00:00Z"}`))
		synctest.Wait()
		if after := len(r.broker.under("/status")); after != before+1 {
			t.Errorf("the status was sent %d times after a late will, want once", after-before)
		}
		r.stop()
	})
}
