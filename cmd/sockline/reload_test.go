package main

import (
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strings"
	"syscall"
	"testing"

	"sockline/alerting/history"
	"sockline/sensors"
	"sockline/sensors/feed/brokertest"
)

// amend changes a file: old, new, and so on.
func amend(tb testing.TB, path string, replaced ...string) {
	tb.Helper()
	text, err := os.ReadFile(path)
	if err != nil {
		tb.Fatal(err)
	}
	for i := 0; i < len(replaced); i += 2 {
		if !strings.Contains(string(text), replaced[i]) {
			tb.Fatalf("%s does not hold %q", path, replaced[i])
		}
		text = []byte(strings.ReplaceAll(string(text), replaced[i], replaced[i+1]))
	}
	if err := os.WriteFile(path, text, 0o600); err != nil {
		tb.Fatal(err)
	}
}

// farMast is the last mast of Skerry Moor, which has no part in the alerts on
// landing 07.
const farMast = `[[station]]
id       = "far25"
position = [54.015790, -19.940105]
height   = "10 m"
topic    = "airfield/skerrymoor/station/far25/wind"
format   = "senml+json"
interval = "1 s"
`

// TestReload changes the configuration of a daemon that is at work with an
// alert open: what may not change is refused whole, levels, masts and runways
// change and everything follows, and the history replays to what was issued.
func TestReload(t *testing.T) {
	broker := brokertest.Start(t)
	dir := filepath.Join(t.TempDir(), "history")
	path := site(t, broker.URL(), dir)
	first := mustLoad(t, path)
	original := writeFile(t, "original.toml", string(first.Source))
	heard := listenTo(t, broker.URL())
	h := newHurry(20)
	d := startDaemon(t, first, h.clock(t), "")
	blow(t, first, steady, broker.URL(), h)
	margin := heard.awaitAlert(t, "a loss beyond the margin", 0, func(a alertLine) bool { return landingLoss(a) && a.Level == "beyond-margin" })

	refuse := func(want string, replaced ...string) {
		t.Helper()
		amend(t, path, replaced...)
		at, err := d.reload(t.Context(), path)
		if err == nil || at != 0 || !strings.HasPrefix(err.Error(), path+want) {
			t.Errorf("reload gives step %v and %v, want an error at %s", at, err, want)
		}
		if now := d.current(); now.Hash != first.Hash {
			t.Error("a refused configuration is in force")
		}
		for i := 0; i < len(replaced); i += 2 {
			amend(t, path, replaced[i+1], replaced[i])
		}
	}
	refuse(":30:7: broker.url: ", `url = "`+broker.URL()+`"`, `url = "mqtt://127.0.0.1:1"`)
	refuse(":112:10: page.listen: ", "127.0.0.1:0", "127.0.0.1:7625")
	refuse(":101:21: alerts.noticeable_change: ", `noticeable_change = "10 kt"`, `noticeable_change = "300 kt"`)
	if at, err := d.reload(t.Context(), path); at != 0 || err != nil {
		t.Errorf("the same file again: step %v, %v", at, err)
	}

	until(t, "far25 to be told", func() bool { return heard.topic("station/far25") != "" })
	// The level is given up after its hold; the alert goes on.
	amend(t, path, `large_change      = "15 kt"`, `large_change = "58 kt"`+"\n"+`margin_change = "79 kt"`, "= 0.10 ", "= 0.5 ", farMast, "")
	before := heard.count()
	at, err := d.reload(t.Context(), path)
	if err != nil || at%1000 != 0 {
		t.Fatalf("reload: %v, %v", at, err)
	}
	lower := heard.awaitAlert(t, "the lower level", before, func(a alertLine) bool { return landingLoss(a) && a.Level == "noticeable" })
	if lower.ID != margin.ID || lower.State != "open" {
		t.Errorf("%v follows %v", lower, margin)
	}
	until(t, "the mast to be gone", func() bool {
		return heard.topic("station/far25") == "" && strings.Contains(heard.topic("status"), `"total":7}`)
	})
	if _, metrics := d.get(t, "metrics"); strings.Contains(metrics, "far25") || !strings.Contains(metrics, `sockline_station_live{station="far07"} 1`) {
		t.Error("the metrics do not follow the masts")
	}

	// Other names for the runway take every path away and bring as many; a mast
	// is moved, and the one that was taken away comes back.
	before = heard.count()
	amend(t, path, `designator = "07"`, `designator = "06"`, `designator = "25"`, `designator = "24"`, `"Skerry Moor"`, `"Skerry Moor North"`,
		"54.003174, -19.993126", "54.003184, -19.993126", "[alerts]\n", farMast+"[alerts]\n")
	if _, err := d.reload(t.Context(), path); err != nil {
		t.Fatal(err)
	}
	gone := heard.awaitAlert(t, "the closing", before, func(a alertLine) bool { return a.ID == margin.ID && a.State == "closed" })
	if gone.ClosedBecause != "path-withdrawn" {
		t.Errorf("closed as %s", gone.ClosedBecause)
	}
	heard.awaitAlert(t, "an alert on the new path", before, func(a alertLine) bool { return a.Runway == "06" && a.Operation == "landing" })
	until(t, "the topics to follow", func() bool {
		return heard.topic("path/07/landing") == "" && strings.Contains(heard.topic("path/06/landing"), `"state":"raised"`)
	})
	until(t, "the mast that came back to be live", func() bool { return strings.Contains(heard.topic("station/far25"), `"state":"live"`) })
	if _, body := d.get(t, ""); !strings.Contains(body, "Skerry Moor North") {
		t.Error("the page does not bear the new name")
	}
	if _, metrics := d.get(t, "metrics"); strings.Contains(metrics, `runway="07"`) || !strings.Contains(metrics, `sockline_path_observed_meters{operation="landing",runway="06"}`) {
		t.Error("the metrics do not follow the paths")
	}
	if err := d.stop(); err != nil {
		t.Fatal(err)
	}
	checkReloaded(t, dir, path, original)
}

// checkReloaded holds that a history over two reloads replays to what was
// issued, with the file last in force and with none, and that any other file
// serves throughout, which is said.
func checkReloaded(t *testing.T, dir, path, original string) {
	t.Helper()
	if kinds := recordedAs(t, dir, history.KindConfiguration); len(kinds) != 3 || kinds[2] != string(mustLoad(t, path).Source) {
		t.Errorf("%d configurations in the journal, want 3, the last of them as the file is now", len(kinds))
	}
	issued := strings.Join(journalled(t, dir), "\n") + "\n"
	for _, args := range [][]string{{"--config", path}, nil} {
		o := succeed(t, append([]string{"replay", "--history", dir}, args...)...)
		if o.stdout != issued {
			t.Errorf("%v: %s", args, firstDifference(o.stdout, issued))
		}
		if n := strings.Count(o.stderr, "note: the configuration changes at the step "); n != 2 || !strings.Contains(o.stderr, "note: the replay begins with the configuration that was in force then") {
			t.Errorf("%v: %d changes are noted, want 2 and the begin:\n%s", args, n, o.stderr)
		}
	}
	o := succeed(t, "replay", "--history", dir, "--config", original)
	if !strings.Contains(o.stderr, "serves throughout; it is not the configuration that was last in force") || strings.Contains(o.stderr, "changes at the step") {
		t.Errorf("another file: %s", o.stderr)
	}
	if strings.Contains(o.stdout, `"runway":"06"`) || strings.Contains(o.stdout, "path-withdrawn") || !strings.Contains(o.stdout, `"runway":"07"`) {
		t.Error("a file that is given does not serve throughout")
	}
}

// recordedAs is the payloads of a kind in the journal.
func recordedAs(tb testing.TB, dir string, kind history.Kind) (all []string) {
	tb.Helper()
	s, err := history.ReadOnly(dir)
	if err != nil {
		tb.Fatal(err)
	}
	defer s.Close()
	err = s.Journal(1, func(r history.Record) error {
		if r.Kind == kind {
			all = append(all, string(r.Payload))
		}
		return nil
	})
	if err != nil {
		tb.Fatal(err)
	}
	return all
}

// TestReloadBySignal sends SIGHUP to the program as a service manager does: it
// lives on, takes a good file, and refuses a bad one with its line.
func TestReloadBySignal(t *testing.T) {
	broker := brokertest.Start(t)
	path := site(t, broker.URL(), filepath.Join(t.TempDir(), "history"))
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	var said console
	c := exec.Command(self)
	c.Env = append(os.Environ(), childCommand+"=run --config "+path)
	c.Stderr = &said
	if err := c.Start(); err != nil {
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() { ended <- c.Wait() }()
	t.Cleanup(func() { _ = c.Process.Kill() })
	says := func(what, want string) {
		t.Helper()
		until(t, what, func() bool { return strings.Contains(said.String(), want) })
	}
	hangUp := func() {
		t.Helper()
		if err := c.Process.Signal(syscall.SIGHUP); err != nil {
			t.Fatal(err)
		}
	}
	says("the daemon to be connected", `"topics":8`)
	hangUp()
	says("an answer", "the configuration has not changed")
	amend(t, path, farMast, "")
	hangUp()
	says("the change", "the configuration is in force")
	amend(t, path, `"10 kt"`, `"300 kt"`)
	hangUp()
	says("the refusal", "the configuration is refused, the one before stays in force")
	if !regexp.MustCompile(`site\.toml:9[0-9]:21: alerts\.noticeable_change: `).MatchString(said.String()) {
		t.Errorf("the refusal does not name the place:\n%s", said.String())
	}
	page := regexp.MustCompile(`http://[0-9.:]+/`).FindString(said.String())
	until(t, "the page to say so", func() bool {
		_, body := fetch(t, page)
		return strings.Contains(body, "A changed configuration was refused") && !strings.Contains(body, "far25")
	})
	if err := c.Process.Signal(syscall.SIGTERM); err != nil {
		t.Fatal(err)
	}
	if err := <-ended; err != nil {
		t.Errorf("the program ended with %v:\n%s", err, said.String())
	}
	if !strings.Contains(said.String(), "sockline has stopped") {
		t.Errorf("no orderly end:\n%s", said.String())
	}
}

// TestReplayOverAChangedStart stops a daemon with an alert open, and starts
// one with other levels in its place: the alert goes on, and the history
// replays to what both issued.
func TestReplayOverAChangedStart(t *testing.T) {
	broker := brokertest.Start(t)
	dir := filepath.Join(t.TempDir(), "history")
	path := site(t, broker.URL(), dir)
	heard := listenTo(t, broker.URL())
	h := newHurry(20)
	cfg := mustLoad(t, path)
	blow(t, cfg, steady, broker.URL(), h)
	clock := h.clock(t)
	d := startDaemon(t, cfg, clock, "")
	margin := heard.awaitAlert(t, "a loss beyond the margin", 0, func(a alertLine) bool { return landingLoss(a) && a.Level == "beyond-margin" })
	if err := d.stop(); err != nil {
		t.Fatal(err)
	}
	amend(t, path, `large_change      = "15 kt"`, `large_change = "58 kt"`+"\n"+`margin_change = "79 kt"`, "= 0.10 ", "= 0.5 ")
	before := heard.count()
	d = startDaemon(t, mustLoad(t, path), clock, "")
	lower := heard.awaitAlert(t, "the lower level", before, func(a alertLine) bool { return landingLoss(a) && a.Level == "noticeable" })
	if lower.ID != margin.ID {
		t.Errorf("%v follows %v", lower, margin)
	}
	if err := d.stop(); err != nil {
		t.Fatal(err)
	}
	issued := strings.Join(journalled(t, dir), "\n") + "\n"
	o := succeed(t, "replay", "--history", dir)
	if o.stdout != issued {
		t.Error(firstDifference(o.stdout, issued))
	}
	if !strings.Contains(o.stderr, "with a start of the daemon") {
		t.Errorf("the change is not noted:\n%s", o.stderr)
	}
}

// TestStartAfterAMastWasMoved holds that what a mast sent from another place is
// not read back, and that of all others is; nor what it sent before a move that
// an earlier run has seen already.
func TestStartAfterAMastWasMoved(t *testing.T) {
	path := writeFile(t, "site.toml", string(loadSkerryMoor(t).Source))
	before := mustLoad(t, path)
	messages, end := messagesOf(t, path, strings.Replace(steady, "6 h", "90 s", 1))
	dir := t.TempDir()
	r := newRecorder(t, before, dir)
	r.writer.Record(history.Entry{Kind: history.KindConfiguration, At: messages[0].Received.FloorSecond(), Payload: before.Source})
	r.play(messages, end)
	amend(t, path, "54.003174, -19.993126", "54.003184, -19.993126")
	after := mustLoad(t, path)

	for _, row := range []struct {
		name     string
		recorded sensors.Instant // a change that an earlier run has journalled
		want     string          // state of the moved mast in the first step
	}{
		{"moved by this start", 0, "never-seen"},
		{"moved 3 s ago", end.FloorSecond() - 3*sensors.Second, "starting"},
		{"moved long ago", messages[0].Received.FloorSecond() + 5*sensors.Second, "live"},
	} {
		t.Run(row.name, func(t *testing.T) {
			own := filepath.Join(t.TempDir(), "history")
			if err := os.CopyFS(own, os.DirFS(dir)); err != nil {
				t.Fatal(err)
			}
			store, err := history.Open(own, history.Options{})
			if err != nil {
				t.Fatal(err)
			}
			defer store.Close()
			if row.recorded != 0 {
				w, err := store.Writer(history.WriterOptions{})
				if err != nil {
					t.Fatal(err)
				}
				w.Record(history.Entry{Kind: history.KindConfiguration, At: row.recorded, Payload: after.Source})
				if err := w.Close(t.Context()); err != nil {
					t.Fatal(err)
				}
			}
			l := mustLoop(t, after, true)
			if err := l.restore(store, end); err != nil {
				t.Fatal(err)
			}
			res := l.engine.Step(l.engine.LastStep() + sensors.Second)
			for i, s := range after.Stations {
				want := "live"
				if s.ID == "touch25" {
					want = row.want
				}
				if got := res.Snapshot.Mast(i).State.String(); got != want {
					t.Errorf("%s is %s, want %s", s.ID, got, want)
				}
			}
		})
	}
}
