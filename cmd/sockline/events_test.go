package main

import (
	"context"
	"encoding/json"
	"net"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/sensors/feed"
)

// eventList is what events prints as JSON.
type eventList struct {
	ID             string
	Events, Issues []alertLine
	Notice         string
}

func eventsOf(tb testing.TB, args ...string) eventList {
	tb.Helper()
	var l eventList
	if err := json.Unmarshal([]byte(succeed(tb, append([]string{"events"}, args...)...).stdout), &l); err != nil {
		tb.Fatal(err)
	}
	return l
}

// TestEvents lists and shows the events of a recorded scene: from the
// directory, and from a running daemon that holds it, with the same result.
func TestEvents(t *testing.T) {
	dir, printed := recorded(t, skerrymoor, short)
	all := alertLines(t, printed)
	opened, issues := map[string]bool{}, map[string]int{}
	for _, a := range all {
		opened[a.ID] = true
		issues[a.ID]++
	}
	id := all[0].ID
	free, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	configuration := withLines(t, "./sockline-data", dir, "127.0.0.1:7625", free.Addr().String(), "127.0.0.1:1883", "127.0.0.1:0")
	free.Close()
	look := func(t *testing.T) (text string) {
		t.Helper()
		list := eventsOf(t, "list", "--config", configuration, "--output", "json")
		if len(list.Events) != len(opened) || list.Notice != alerting.Notice {
			t.Errorf("%d events, want %d; notice %q", len(list.Events), len(opened), list.Notice)
		}
		for _, a := range list.Events {
			if !opened[a.ID] || a.State != "closed" || a.Revision != issues[a.ID] {
				t.Errorf("an event is %+v", a)
			}
		}
		for _, row := range []struct {
			args []string
			want int
		}{
			{[]string{"--limit", "1"}, 1},
			{[]string{"--open"}, 0},
			{[]string{"--from", "2026-07-01T14:00:00Z"}, len(opened)},
			{[]string{"--from", "2026-07-01T14:10:00Z"}, 0},
			{[]string{"--to", "2026-07-01T14:00:00Z"}, 0},
		} {
			got := eventsOf(t, append([]string{"list", "--config", configuration, "--output", "json"}, row.args...)...)
			if len(got.Events) != row.want {
				t.Errorf("%v: %d events, want %d", row.args, len(got.Events), row.want)
			}
		}
		show := eventsOf(t, "show", id, "--config", configuration, "--output", "json")
		if show.ID != id || len(show.Issues) != issues[id] || show.Issues[0].Revision != 1 {
			t.Errorf("%d issues of %s, want %d", len(show.Issues), show.ID, issues[id])
		}
		if o := call(t, "events", "show", "nobody", "--config", configuration); o.code != exitFailed || !strings.Contains(o.stderr, "no event") && !strings.Contains(o.stderr, "no such event") {
			t.Errorf("an unknown event: exit %d, %s", o.code, o.stderr)
		}
		text = succeed(t, "events", "list", "--config", configuration).stdout
		if !strings.Contains(text, id+"\n  opened 2026-07-01 14:01:") || !strings.HasSuffix(text, "\n"+alerting.Notice+"\n") {
			t.Errorf("as text: %s", text)
		}
		return text
	}
	fromDisk := look(t)

	cfg := mustLoad(t, configuration)
	d, err := newDaemon(cfg, daemonOptions{exercise: true, clock: feed.NewClock(), log: zerolog.Nop(), instance: "under-test"})
	if err != nil {
		t.Fatal(err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.Run(ctx) }()
	<-d.listening
	t.Run("while the daemon runs", func(t *testing.T) {
		if text := look(t); text != fromDisk {
			t.Errorf("the daemon gives\n%s\nthe directory\n%s", text, fromDisk)
		}
		if text := succeed(t, "events", "list", "--history", dir).stdout; text != fromDisk {
			t.Errorf("by the directory: %s", text)
		}
	})
	cancel()
	if err := <-ended; err != nil {
		t.Error(err)
	}
}

// TestEventsOfADaemonThatDoesNotAnswer holds what is said of a history that is
// held by something that does not answer.
func TestEventsOfADaemonThatDoesNotAnswer(t *testing.T) {
	dir := t.TempDir()
	r := newRecorder(t, loadSkerryMoor(t), dir)
	defer r.close()
	free, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	configuration := withLines(t, "./sockline-data", dir, "127.0.0.1:7625", free.Addr().String())
	free.Close()
	o := call(t, "events", "list", "--config", configuration)
	if o.code != exitFailed || !strings.Contains(o.stderr, "held by a running program that does not answer") {
		t.Errorf("exit %d, %s", o.code, o.stderr)
	}
}
