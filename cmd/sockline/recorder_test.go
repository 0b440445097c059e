package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/rs/zerolog"

	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/alerting/judged"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
)

// checkedApart says why a test is left out: it plays much in one goroutine,
// and deploy/check runs it where that is ten times as quick.
const checkedApart = "the check runs it without the race detector"

// small is three masts along one runway: little to compute, so that hours can
// be replayed. Skerry Moor's geometry, with the other masts left out.
func small(tb testing.TB) string {
	tb.Helper()
	return writeFile(tb, "small.toml", only(tb, "touch07", "touch25", "final07"))
}

// only is Skerry Moor's configuration with these masts.
func only(tb testing.TB, masts ...string) string {
	tb.Helper()
	source, err := os.ReadFile(skerrymoor)
	if err != nil {
		tb.Fatal(err)
	}
	parts := strings.Split(string(source), "[[station]]")
	kept := parts[:1]
	for _, part := range parts[1:] {
		station, rest, _ := strings.Cut(part, "[alerts]")
		for _, id := range masts {
			if strings.Contains(station, `"`+id+`"`) {
				kept = append(kept, station)
			}
		}
		if rest != "" {
			kept[len(kept)-1] += "[alerts]" + rest
		}
	}
	return strings.Join(kept, "[[station]]")
}

// messagesOf is a scene as a broker would have brought it.
func messagesOf(tb testing.TB, configuration, scene string) (messages []sensors.Message, end sensors.Instant) {
	tb.Helper()
	capture := filepath.Join(tb.TempDir(), "capture.jsonl")
	succeed(tb, "simulate", "--config", configuration, "--scene", writeFile(tb, "test.scene", scene), "--out", capture)
	return readCapture(tb, capture)
}

// recorded runs a scene into a new history; it gives the directory and every
// issue.
func recorded(tb testing.TB, configuration, scene string) (dir, printed string) {
	tb.Helper()
	messages, end := messagesOf(tb, configuration, scene)
	dir = tb.TempDir()
	r := newRecorder(tb, mustLoad(tb, configuration), dir)
	r.play(messages, end)
	return dir, r.printed.String()
}

// kept is a history with all that a daemon leaves of a scene: what is in force,
// the readings, the issues, and what was judged.
func kept(tb testing.TB, configuration, scene string) (dir string) {
	tb.Helper()
	messages, end := messagesOf(tb, configuration, scene)
	dir = tb.TempDir()
	r := newRecorder(tb, mustLoad(tb, configuration), dir)
	r.inForce(dir, messages[0].Received)
	r.play(messages, end)
	return dir
}

// recorder does what the daemon does with the history: each step with its
// readings, those that came late, and the issues.
type recorder struct {
	tb      testing.TB
	cfg     *config.Config
	engine  *engine.Engine
	store   *history.Store
	writer  *history.Writer
	ids     []string
	judged  *judgements            // nil: what was judged is not kept
	held    []lifecycle.Transition // of a start, to go out with the first step
	printed strings.Builder        // every issue
}

func newRecorder(tb testing.TB, cfg *config.Config, dir string) *recorder {
	tb.Helper()
	r := &recorder{tb: tb, cfg: cfg}
	var err error
	if r.engine, err = engine.New(engineSettings(cfg, true)); err != nil {
		tb.Fatal(err)
	}
	if r.store, err = history.Open(dir, history.Options{}); err != nil {
		tb.Fatal(err)
	}
	if r.writer, err = r.store.Writer(history.WriterOptions{}); err != nil {
		tb.Fatal(err)
	}
	for _, s := range cfg.Stations {
		r.ids = append(r.ids, s.ID)
	}
	return r
}

// inForce records what a daemon records at its start, and keeps what is judged.
func (r *recorder) inForce(dir string, at sensors.Instant) {
	r.writer.Record(history.Entry{Kind: history.KindSoftware, At: at, Payload: []byte(softwareText())})
	r.writer.Record(history.Entry{Kind: history.KindConfiguration, At: at, Payload: r.cfg.Source})
	r.writer.Record(history.Entry{Kind: history.KindStart, At: at})
	r.judged = &judgements{writer: judged.NewWriter(dir, judgedContext(r.cfg, r.engine), func(err error) { r.tb.Error(err) })}
}

// play takes messages to their end, and closes the history.
func (r *recorder) play(messages []sensors.Message, end sensors.Instant) {
	r.tb.Helper()
	for _, m := range messages {
		r.receive(m)
	}
	r.closeDue(end)
	if r.judged != nil {
		if err := r.judged.writer.Close(r.tb.Context()); err != nil {
			r.tb.Fatal(err)
		}
	}
	r.close()
}

// receive takes a message, after the steps that are due before it.
func (r *recorder) receive(m sensors.Message) {
	r.closeDue(m.Received)
	if _, _, err := r.engine.Receive(m); err != nil {
		r.tb.Fatal(err)
	}
}

func (r *recorder) closeDue(stamp sensors.Instant) {
	for t, due := r.engine.Due(stamp); due; t, due = r.engine.Due(stamp) {
		result := r.engine.Step(t)
		r.judged.keep(t, r.engine, result)
		r.submit(t, result)
	}
}

// submit hands a step to the history.
func (r *recorder) submit(t sensors.Instant, result *engine.Result) {
	b := history.Batch{Step: t, Stations: r.ids, Readings: result.Readings}
	for _, table := range result.Tables {
		b.Entries = append(b.Entries, history.Entry{Kind: history.KindTable, At: table.At, Payload: table.Payload})
	}
	for _, late := range result.Refused {
		b.Late = append(b.Late, history.LateReading{Reading: late.Reading, Reason: string(late.Reason)})
	}
	transitions := append(r.held, result.Transitions...)
	r.held = nil
	for _, tr := range transitions {
		object := wording.Of(tr, wordingContext(r.cfg, true)).WithRecorded(true).JSON()
		r.printed.Write(append(object, '\n'))
		b.Issues = append(b.Issues, history.Issue{Alert: tr.Alert, Object: object})
	}
	r.writer.Submit(b)
}

func (r *recorder) close() {
	if err := r.writer.Close(r.tb.Context()); err != nil {
		r.tb.Fatal(err)
	}
	if err := r.store.Close(); err != nil {
		r.tb.Fatal(err)
	}
}

// restart is what a new daemon does at a moment, in the place of one that has
// ended.
func (r *recorder) restart(dir string, now sensors.Instant) {
	r.tb.Helper()
	r.close()
	next := newRecorder(r.tb, r.cfg, dir)
	l, err := newLoop(r.cfg, true, zerolog.Nop())
	if err != nil {
		r.tb.Fatal(err)
	}
	if err := l.restore(next.store, now); err != nil {
		r.tb.Fatal(err)
	}
	next.engine, next.held = l.engine, l.held
	next.writer.Record(history.Entry{Kind: history.KindStart, At: now})
	r.engine, r.store, r.writer, r.held = next.engine, next.store, next.writer, next.held
}
