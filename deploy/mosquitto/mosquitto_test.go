// Package mosquitto_test holds the example configuration of the broker to what
// its comments say, on a real broker.
package mosquitto_test

import (
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/sensors/feed"
	"sockline/sensors/feed/brokertest"
)

// users are those of the example: sockline itself, two masts, two readers.
var users = []string{"sockline", "far07", "touch07", "tower", "training"}

// passwords writes a password file in which everybody's password is "of-" and
// the name.
func passwords(t *testing.T) string {
	t.Helper()
	tool, err := exec.LookPath("mosquitto_passwd")
	if err != nil {
		t.Skip("SKIPPED, NOT TESTED: there is no mosquitto_passwd on this machine; install mosquitto")
	}
	file := filepath.Join(t.TempDir(), "passwd")
	if err := os.WriteFile(file, nil, 0o600); err != nil {
		t.Fatal(err)
	}
	for _, user := range users {
		if out, err := exec.Command(tool, "-b", file, user, "of-"+user).CombinedOutput(); err != nil {
			t.Fatalf("add %s: %v: %s", user, err, out)
		}
	}
	return file
}

// as is the broker as a user sees it.
func as(url, user string) feed.Broker {
	return feed.Broker{URL: url, Username: user, Password: "of-" + user}
}

// until waits for what the broker brings about.
func until(t *testing.T, what string, ok func() bool) {
	t.Helper()
	limit := time.NewTimer(10 * time.Second)
	defer limit.Stop()
	look := time.NewTicker(5 * time.Millisecond)
	defer look.Stop()
	for !ok() {
		select {
		case <-limit.C:
			t.Fatalf("not within 10 s: %s", what)
		case <-look.C:
		}
	}
}

// publisherAs is somebody who publishes, or tries to.
func publisherAs(t *testing.T, broker feed.Broker, name string) *feed.Publisher {
	t.Helper()
	p, err := feed.NewPublisher(t.Context(), feed.PublisherOptions{Broker: broker, ClientID: name, Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(p.Close)
	return p
}

func publisher(t *testing.T, url, user string) *feed.Publisher {
	t.Helper()
	p := publisherAs(t, as(url, user), user)
	until(t, user+" is connected", p.Connected)
	return p
}

func subscriber(t *testing.T, url, user string, topics ...string) *feed.Subscriber {
	t.Helper()
	s, err := feed.Subscribe(t.Context(), feed.SubscribeOptions{
		Broker: as(url, user), ClientID: user, Topics: topics, Clock: feed.NewClock(), Log: zerolog.Nop(),
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.Close)
	return s
}

// TestWhoMayWrite sends on every topic of interest as every user, and looks at
// what arrives at a reader of everything that the rules let through.
func TestWhoMayWrite(t *testing.T) {
	passwd := passwords(t)
	// One more user, who sees all, so that a dropped message is told from one
	// that the reader may not see.
	acl := amended(t, passwd, "witness", "user witness\ntopic read #\n")
	broker := brokertest.Start(t, "allow_anonymous false", "password_file "+passwd, "acl_file "+acl)
	witness := subscriber(t, broker.URL(), "witness", "#")
	until(t, "the witness is subscribed", func() bool { return witness.State().Subscribed })

	const (
		own   = "airfield/skerrymoor/station/%s/wind"
		live  = "sockline/skerrymoor/alert"
		drill = "sockline-exercise/skerrymoor/alert"
	)
	tests := []struct {
		user, topic string
		passes      bool
	}{
		{"far07", fmt.Sprintf(own, "far07"), true},
		{"far07", "airfield/skerrymoor/station/far07/battery", true},
		{"far07", fmt.Sprintf(own, "touch07"), false}, // no mast speaks for another
		{"far07", "airfield/elsewhere/station/far07/wind", false},
		{"far07", live, false},
		{"far07", "sockline/skerrymoor/status", false},
		{"touch07", fmt.Sprintf(own, "touch07"), true},
		{"sockline", live, true},
		{"sockline", drill, true},
		{"sockline", "sockline/skerrymoor/path/07/landing", true},
		{"sockline", fmt.Sprintf(own, "far07"), false},
		{"sockline", "sockline/elsewhere/alert", false},
		{"tower", live, false},
		{"tower", fmt.Sprintf(own, "far07"), false},
		{"training", drill, false},
	}
	links := map[string]*feed.Publisher{}
	for i, tt := range tests {
		if links[tt.user] == nil {
			links[tt.user] = publisher(t, broker.URL(), tt.user)
		}
		// The broker acknowledges what it drops, so only the witness can tell.
		if err := links[tt.user].Publish(tt.topic, fmt.Append(nil, i), 1, false); err != nil {
			t.Fatal(err)
		}
	}
	// A last message that passes: what has not arrived before it never will,
	// since each was acknowledged before the next was sent.
	if err := links["sockline"].Publish(live, []byte("last"), 1, false); err != nil {
		t.Fatal(err)
	}
	arrived := map[string]bool{}
	limit := time.After(10 * time.Second)
	for !arrived["last"] {
		select {
		case m := <-witness.Messages():
			arrived[string(m.Payload)] = true
		case <-limit:
			t.Fatal("the last message never came")
		}
	}
	for i, tt := range tests {
		if got := arrived[fmt.Sprint(i)]; got != tt.passes {
			t.Errorf("%s writes %s: passes %v, want %v", tt.user, tt.topic, got, tt.passes)
		}
	}
}

// TestWhoMayRead: this broker grants every subscription and then holds back
// what the user may not see, so what counts is what arrives.
func TestWhoMayRead(t *testing.T) {
	passwd := passwords(t)
	// One more user, whose messages everybody may read, so that it is known
	// when there is nothing more to come.
	acl := amended(t, passwd, "marker", "pattern read marker/%u\nuser marker\ntopic write marker/#\n")
	broker := brokertest.Start(t, "allow_anonymous false", "password_file "+passwd, "acl_file "+acl)
	marker := publisher(t, broker.URL(), "marker")
	sockline := publisher(t, broker.URL(), "sockline")
	mast := publisher(t, broker.URL(), "far07")
	sent := []struct {
		by    *feed.Publisher
		topic string
	}{
		{mast, "airfield/skerrymoor/station/far07/wind"},
		{sockline, "sockline/skerrymoor/alert"},
		{sockline, "sockline/skerrymoor/status"},
		{sockline, "sockline-exercise/skerrymoor/alert"},
		{sockline, "sockline-exercise/skerrymoor/status"},
	}
	tests := []struct{ user, sees string }{
		{"sockline", "station/far07/wind sockline/skerrymoor/status sockline-exercise/skerrymoor/status"},
		{"tower", "sockline/skerrymoor/alert sockline/skerrymoor/status"},
		{"training", "sockline-exercise/skerrymoor/alert sockline-exercise/skerrymoor/status"},
		{"touch07", ""},
		{"far07", ""},
	}
	for _, tt := range tests {
		t.Run(tt.user, func(t *testing.T) {
			s := subscriber(t, broker.URL(), tt.user, "#")
			until(t, tt.user+" is subscribed", func() bool { return s.State().Subscribed })
			for _, m := range sent {
				if err := m.by.Publish(m.topic, []byte("x"), 1, false); err != nil {
					t.Fatal(err)
				}
			}
			if err := marker.Publish("marker/"+tt.user, []byte("x"), 1, false); err != nil {
				t.Fatal(err)
			}
			var seen []string
			limit := time.After(10 * time.Second)
			for {
				select {
				case m := <-s.Messages():
					if m.Topic != "marker/"+tt.user {
						seen = append(seen, strings.TrimPrefix(m.Topic, "airfield/skerrymoor/"))
						continue
					}
				case <-limit:
					t.Fatal("the marker never came")
				}
				break
			}
			if got := strings.Join(seen, " "); got != tt.sees {
				t.Errorf("sees %q, want %q", got, tt.sees)
			}
		})
	}
}

// amended is the example's rules with a further user and its rules.
func amended(t *testing.T, passwd, user, rules string) string {
	t.Helper()
	text, err := os.ReadFile("acl")
	if err != nil {
		t.Fatal(err)
	}
	file := filepath.Join(t.TempDir(), "acl")
	if err := os.WriteFile(file, append(text, "\n"+rules...), 0o600); err != nil {
		t.Fatal(err)
	}
	if out, err := exec.Command("mosquitto_passwd", "-b", passwd, user, "of-"+user).CombinedOutput(); err != nil {
		t.Fatalf("add %s: %v: %s", user, err, out)
	}
	return file
}

// TestConfigurationLoads: everybody gets in by the door that is theirs, and
// nobody without a name or a certificate.
func TestConfigurationLoads(t *testing.T) {
	b := shipped(t, newAuthority(t, "authority"), nil)
	publisher(t, "mqtt://"+b.plain, "sockline")
	mast := publisherAs(t, b.certified("far07"), "far07")
	until(t, "a mast is let in by its certificate", mast.Connected)
	nobody := publisherAs(t, feed.Broker{URL: "mqtt://" + b.plain}, "nobody")
	until(t, "a client without a name is refused", func() bool { return nobody.State().Problem != nil })
	if nobody.Connected() {
		t.Error("a client without a name is let in")
	}
}
