package publish

import (
	"testing"
	"testing/synctest"
	"time"
)

// An alert on two topics keeps the order and the newest update of each.
func TestIssuesOfTwoTopics(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		issue := func(topic, text string, p Phase) {
			t.Helper()
			i := Issue{AlertID: "a", Topic: topic, Phase: p, JSON: func(bool) []byte { return []byte(text) }}
			if err := r.Issue(i); err != nil {
				t.Fatal(err)
			}
		}
		// While the sink listens they wait.
		issue("", "object 1", Opening)
		issue("cap", "message 1", Opening)
		issue("", "object 2", Update)
		issue("cap", "message 2", Update)
		issue("", "object 3", Update)
		issue("", "object 4", Closing)
		issue("cap", "message 4", Closing)
		pass(ListenFor + time.Second)
		if got := payloads(r.broker.under("/skerrymoor/alert")); got != "object 1 object 3 object 4" {
			t.Errorf("alerts: %s", got)
		}
		if got := payloads(r.broker.under("/skerrymoor/cap")); got != "message 1 message 2 message 4" {
			t.Errorf("messages: %s", got)
		}
		for _, m := range r.broker.under("/skerrymoor/cap") {
			if m.qos != 1 || m.retained {
				t.Errorf("%+v", m)
			}
		}
	})
}

// The heartbeat goes out once a minute, however often it is set, and is not
// retained; when nobody sets it, it ends.
func TestHeartbeat(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		r := newRig(t, nil)
		pass(ListenFor + time.Second)
		for range 5 * 60 {
			r.SetHeartbeat([]byte("beat"))
			pass(time.Second)
		}
		beats := r.broker.under("/heartbeat")
		if len(beats) < 5 || len(beats) > 6 { // the last minute may have just begun
			t.Fatalf("%d heartbeats in five minutes", len(beats))
		}
		for i, b := range beats {
			if b.retained || i > 0 && b.after-beats[i-1].after < 59*time.Second {
				t.Errorf("%+v", b)
			}
		}
		pass(10 * time.Minute)
		if n := len(r.broker.under("/heartbeat")); n > len(beats)+1 {
			t.Errorf("%d heartbeats after the loop fell silent", n)
		}
	})
}
