package main

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus/testutil/promlint"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/judged"
	"sockline/alerting/review"
	"sockline/sensors/feed/brokertest"
)

// TestDaemon takes readings from a real broker to alerts on it and on the
// page, stops in order, and replays what it captured: the same alert objects,
// byte for byte.
func TestDaemon(t *testing.T) {
	broker := brokertest.Start(t)
	dir := filepath.Join(t.TempDir(), "history")
	path := site(t, broker.URL(), dir)
	cfg := mustLoad(t, path)
	heard := listenTo(t, broker.URL())
	h := newHurry(20)
	capture := captureName(t)
	d := startDaemon(t, cfg, h.clock(t), capture)
	blow(t, cfg, steady, broker.URL(), h)

	loss := heard.awaitAlert(t, "a loss beyond the margin on landing 07", 0, func(a alertLine) bool {
		return landingLoss(a) && a.Level == "beyond-margin"
	})
	if !loss.Exercise || loss.Notice != alerting.Notice || !strings.HasPrefix(loss.Text, "EXERCISE: ") {
		t.Errorf("the alert is not marked as an exercise, or lacks the notice: %+v", loss)
	}
	until(t, "the path to be raised and the status observing", func() bool {
		return strings.Contains(heard.topic("path/07/landing"), `"state":"raised"`) &&
			strings.Contains(heard.topic("status"), `"condition":"observing"`)
	})
	if s := heard.topic("status"); !strings.Contains(s, `"stations":{"live":8,"total":8}`) || !strings.Contains(s, `"instance":"under-test"`) ||
		!strings.Contains(s, `"broker":{"connected":true,"subscribed":true}`) || !strings.Contains(s, `"history":{"degraded":false,"reason":""}`) {
		t.Errorf("status: %s", s)
	}
	if s := heard.topic("station/far07"); !strings.Contains(s, `"state":"live"`) {
		t.Errorf("health of far07: %s", s)
	}
	if code, body := d.get(t, "api/v1/now"); code != 200 || !strings.Contains(body, loss.ID) {
		t.Errorf("/api/v1/now: %d %s", code, body)
	}
	if code, body := d.get(t, "api/v1/events/"+loss.ID); code != 200 || !strings.Contains(body, `"revision":1,`) {
		t.Errorf("the event: %d %s", code, body)
	}
	for _, p := range []string{"readyz", "healthz", ""} {
		if code, body := d.get(t, p); code != 200 {
			t.Errorf("/%s: %d %s", p, code, body)
		}
	}
	checkMetrics(t, d)

	begun := time.Now()
	if err := d.stop(); err != nil {
		t.Fatalf("stop: %v", err)
	}
	if took := time.Since(begun); took > stopWithin {
		t.Errorf("stopping took %v, promised are %v", took, stopWithin)
	}
	until(t, "the farewell", func() bool {
		return strings.Contains(heard.topic("status"), `"condition":"no-contact"`) &&
			strings.Contains(heard.topic("path/07/landing"), `"state":"not-observed"`)
	})
	issued := journalled(t, dir)
	again := succeed(t, "replay", "--config", path, "--capture", capture).stdout
	if want := strings.Join(issued, "\n") + "\n"; again != want {
		t.Errorf("the replay of the capture differs from what was issued: %s", firstDifference(again, want))
	}
	var repeated review.WhatIf
	if err := json.Unmarshal([]byte(succeed(t, "replay", "--history", dir, "--compare", "--output", "json").stdout), &repeated); err != nil {
		t.Fatal(err)
	}
	if r := repeated.Repeat; r == nil || !r.Exact || r.Issues != len(issued) {
		t.Errorf("what the daemon told does not come of its history again: %+v", r)
	}
	if r, err := judged.ReadDay(dir, "2026-07-01", 0, 0, func(*judged.Step) error { return nil }); err != nil || r.Steps == 0 || len(r.Faults) > 0 {
		t.Errorf("what the daemon judged is not kept: %+v %v", r, err)
	}
	for _, a := range heard.heard() {
		if !slices.Contains(issued, a) {
			t.Errorf("this was published, and is not in the history: %s", a)
		}
	}
	t.Logf("%d issues in the history, %d on the broker", len(issued), heard.count())
}

// journalled is every alert object of a history, in order.
func journalled(tb testing.TB, dir string) []string {
	tb.Helper()
	s, err := history.ReadOnly(dir)
	if err != nil {
		tb.Fatal(err)
	}
	defer s.Close()
	var objects []string
	err = s.Journal(1, func(r history.Record) error {
		if r.Kind != history.KindIssue {
			return nil
		}
		is, err := r.Issue()
		objects = append(objects, string(is.Object))
		return err
	})
	if err != nil {
		tb.Fatal(err)
	}
	return objects
}

// checkMetrics holds the metrics of a running daemon to what the linter of
// Prometheus knows, and to what came in.
func checkMetrics(t *testing.T, d started) {
	t.Helper()
	_, text := d.get(t, "metrics")
	problems, err := promlint.New(strings.NewReader(text)).Lint()
	if err != nil || len(problems) > 0 {
		t.Errorf("metrics: %v %v", problems, err)
	}
	for _, want := range []string{
		"\nsockline_condition{condition=\"observing\"} 1\n", "\nsockline_broker_subscribed 1\n", "\nsockline_publishing 1\n",
		"\nsockline_station_live{station=\"far07\"} 1\n",
		"\nsockline_alerts_opened_total{kind=\"headwind-loss\",level=\"beyond-margin\",operation=\"landing\",runway=\"07\"} 1\n",
		"\nsockline_rejected_readings_total{reason=\"late\",station=\"far07\"} 0\n",
	} {
		if !strings.Contains(text, want) {
			t.Errorf("metrics lack %q", want)
		}
	}
	// 4010 to -1280 m, to the ten metres: the design's figures for this field.
	const observed = "\nsockline_path_observed_meters{operation=\"landing\",runway=\"07\"} "
	var metres float64
	_, rest, _ := strings.Cut(text, observed)
	if n, err := fmt.Sscanf(rest, "%g", &metres); n != 1 || err != nil || math.Abs(metres-5290) > 10 {
		t.Errorf("observed of landing 07: %g m (%v)", metres, err)
	}
	if strings.Contains(text, "\nsockline_history_commits_total 0\n") || strings.Contains(text, "\nsockline_steps_total 0\n") {
		t.Error("metrics say that nothing was evaluated or recorded")
	}
}

// TestDaemonBrokerRestarts kills the broker twice while an alert is open: it
// goes on, under the same id.
func TestDaemonBrokerRestarts(t *testing.T) {
	broker := brokertest.Start(t)
	cfg := mustLoad(t, site(t, broker.URL(), filepath.Join(t.TempDir(), "history")))
	heard := listenTo(t, broker.URL())
	h := newHurry(20)
	d := startDaemon(t, cfg, h.clock(t), "")
	blow(t, cfg, steady, broker.URL(), h)
	first := heard.awaitAlert(t, "an alert", 0, landingLoss)
	for round := range 2 {
		broker.Kill()
		until(t, "the daemon to see it", func() bool { return !d.inputState().Connected })
		broker.Run()
		before := heard.count()
		next := heard.awaitAlert(t, "the alert to go on", before, func(a alertLine) bool { return landingLoss(a) && a.Revision > first.Revision })
		if next.ID != first.ID || next.State != "open" {
			t.Fatalf("round %d: %v follows %v", round, next, first)
		}
		first = next
		until(t, "all masts to be live again", func() bool { return strings.Contains(heard.topic("status"), `"stations":{"live":8,`) })
	}
}

// TestDaemonFullDisk fills the disk of the history: alerts still come, marked
// as not recorded, the status says so, and all is well once there is room.
func TestDaemonFullDisk(t *testing.T) {
	dir := tmpfs(t)
	broker := brokertest.Start(t)
	cfg := mustLoad(t, site(t, broker.URL(), dir))
	heard := listenTo(t, broker.URL())
	h := newHurry(20)
	d := startDaemon(t, cfg, h.clock(t), "")
	blow(t, cfg, steady, broker.URL(), h)
	heard.awaitAlert(t, "a recorded alert", 0, func(a alertLine) bool { return a.Recorded })

	ballast := filepath.Join(dir, "ballast")
	f, err := os.Create(ballast)
	if err != nil {
		t.Fatal(err)
	}
	for err == nil { // until there is no room for another page
		_, err = f.Write(make([]byte, 4096))
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	heard.awaitAlert(t, "an alert that is not recorded", heard.count(), func(a alertLine) bool { return !a.Recorded })
	until(t, "the status to say so", func() bool { return strings.Contains(heard.topic("status"), `"history":{"degraded":true,"reason":"`) })
	if s := heard.topic("status"); !strings.Contains(s, "free space") {
		t.Errorf("the status does not say what helps: %s", s)
	}
	if code, _ := d.get(t, "healthz"); code != 200 {
		t.Errorf("/healthz: %d: a full disk is no reason to restart", code)
	}
	if err := os.Remove(ballast); err != nil {
		t.Fatal(err)
	}
	until(t, "the history to recover", func() bool { return strings.Contains(heard.topic("status"), `"history":{"degraded":false`) })
	heard.awaitAlert(t, "a recorded alert again", heard.count(), func(a alertLine) bool { return a.Recorded })
}

// TestDaemonWithoutHistory starts where no history can be: alerts come,
// unrecorded, and the history is taken up when the place is freed.
func TestDaemonWithoutHistory(t *testing.T) {
	broker := brokertest.Start(t)
	place := filepath.Join(t.TempDir(), "history")
	cfg := mustLoad(t, site(t, broker.URL(), place))
	if err := os.WriteFile(place, []byte("in the way"), 0o600); err != nil { // after the check of the configuration
		t.Fatal(err)
	}
	heard := listenTo(t, broker.URL())
	h := newHurry(20)
	d := startDaemon(t, cfg, h.clock(t), "")
	blow(t, cfg, steady, broker.URL(), h)
	heard.awaitAlert(t, "an unrecorded alert", 0, func(a alertLine) bool { return !a.Recorded })
	until(t, "the status to say so", func() bool { return strings.Contains(heard.topic("status"), `"history":{"degraded":true,"reason":"`) })
	if code, body := d.get(t, "readyz"); code != 503 || !strings.Contains(body, "history is not open") {
		t.Errorf("/readyz: %d %s", code, body)
	}
	if code, _ := d.get(t, "api/v1/events"); code != 500 {
		t.Errorf("/api/v1/events without a history: %d", code)
	}
	if err := os.Remove(place); err != nil {
		t.Fatal(err)
	}
	heard.awaitAlert(t, "a recorded alert", heard.count(), func(a alertLine) bool { return a.Recorded })
}

// TestTwoDaemons lets two run in one process, each with its built-in broker.
func TestTwoDaemons(t *testing.T) {
	for range 2 {
		cfg := mustLoad(t, site(t, "embedded://127.0.0.1:1883", filepath.Join(t.TempDir(), "history")))
		cfg.Broker.Address = "127.0.0.1:0"
		h := newHurry(20)
		d := startDaemon(t, cfg, h.clock(t), "")
		until(t, "a step", func() bool { return d.board.view.Load() != nil })
		var status struct {
			Condition string
			Remarks   []string
		}
		if err := json.Unmarshal(d.board.view.Load().StatusJSON, &status); err != nil {
			t.Fatal(err)
		}
		if status.Condition != "blind" || !slices.ContainsFunc(status.Remarks, func(s string) bool { return strings.Contains(s, "nobody is told when this program stops") }) {
			t.Errorf("status without masts, on a built-in broker: %+v", status)
		}
	}
}
