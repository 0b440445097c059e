package main

import (
	"bytes"
	"context"
	"errors"
	"flag"
	"fmt"
	"os"
	"strings"
	"time"

	"sockline/alerting"
	"sockline/alerting/engine"
	"sockline/alerting/history"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/quantity"
)

func stationsCommand() command {
	return command{
		name: "stations", summary: "print the health and the book of every mast",
		setup: func(fs *flag.FlagSet) action {
			flags := defineEventFlags(fs)
			return func(ctx context.Context, p *program, _ []string) error {
				l, err := flags.stations(ctx, p)
				if err != nil {
					return err
				}
				if flags.output.json() {
					return printJSON(p, l)
				}
				return l.print(p)
			}
		},
	}
}

// stationList is what the command prints: as the daemon answers it, or put
// together from the history of a daemon that does not run.
type stationList struct {
	At       string          `json:"at"`
	Running  bool            `json:"running"` // a daemon answered; else states are those of its last step
	Stations []stationHealth `json:"stations"`
	Exercise bool            `json:"exercise"`
	Notice   string          `json:"notice"`
}

// stations asks the daemon, or reads what it left behind.
func (f eventFlags) stations(ctx context.Context, p *program) (*stationList, error) {
	source, err := f.source()
	if err != nil {
		return nil, err
	}
	var cfg *config.Config
	if *f.config != "" {
		if cfg, err = loadConfig(*f.config); err != nil {
			return nil, err
		}
	}
	store, err := source.open()
	if err != nil {
		if cfg != nil && errors.Is(err, os.ErrNotExist) { // it has never run
			return leftBehind(cfg, nil, sensors.At(p.now()))
		}
		return nil, err
	}
	if store == nil {
		l := &stationList{Running: true}
		return l, source.ask(ctx, "/api/v1/stations", l)
	}
	l, err := fromHistory(store, cfg)
	return l, errors.Join(err, store.Close())
}

// fromHistory puts the list together from a history, by the configuration that
// its daemon had last unless one is given.
func fromHistory(store *history.Store, cfg *config.Config) (*stationList, error) {
	var problems config.Problems
	if cfg == nil {
		var source []byte
		err := store.Journal(1, func(rec history.Record) error {
			if rec.Kind == history.KindConfiguration {
				source = bytes.Clone(rec.Payload)
			}
			return nil
		})
		if err != nil {
			return nil, fmt.Errorf("read the journal: %w", err)
		}
		if source == nil {
			return nil, errors.New("this history holds no configuration: give --config FILE instead")
		}
		if cfg, problems = config.Parse("the configuration in the history", source); len(problems) > 0 {
			return nil, fmt.Errorf("the configuration in the history is not one of this version: give --config FILE instead: %w", errors.New(problems.Error()))
		}
	}
	last, ok, err := store.LastStep()
	if err != nil {
		return nil, fmt.Errorf("find the last step of the history: %w", err)
	}
	if !ok {
		store = nil
	}
	return leftBehind(cfg, store, last)
}

// leftBehind is the health of every mast at the last step of a history; with a
// nil store nothing is known but the book.
func leftBehind(cfg *config.Config, store *history.Store, last sensors.Instant) (*stationList, error) {
	e, err := engine.New(engineSettings(cfg, true))
	if err != nil {
		return nil, fmt.Errorf("prepare the engine: %w", err)
	}
	// Whatever was recorded counts here, and each reading says itself whether it
	// is an exercise.
	l := &loop{cfg: cfg, engine: e, reporter: newReporter(cfg, false)}
	for _, s := range cfg.Stations {
		l.ids = append(l.ids, s.ID)
	}
	var faults error
	if store != nil {
		faults = errors.Join(l.loadTables(store, last), l.readBack(store, last))
	} else {
		last = last.FloorSecond()
	}
	if err := e.SkipTo(last - sensors.Second); err != nil {
		return nil, err
	}
	res := e.Step(last)
	out := &stationList{At: seconds(last), Notice: alerting.Notice}
	for i := range cfg.Stations {
		h := l.reporter.station(i, e, res)
		if w, ok := e.Wind(i); ok { // not only that of the mast whose turn it is
			h.Wind = windOf(&w, &cfg.Stations[i])
		}
		out.Stations = append(out.Stations, h)
		out.Exercise = out.Exercise || h.Exercise
	}
	return out, faults
}

// readBackFor is how far back readings are read for the list: the ten minutes
// that averages look at, and what the older checks remember.
const readBackFor = 30 * time.Minute

// readBack brings the engine to the step before the last one of a history,
// with the readings of the last one waiting.
func (l *loop) readBack(store *history.Store, last sensors.Instant) error {
	return store.Readings(last.Add(-readBackFor), last+sensors.Second, func(st history.Step) error {
		for next := l.engine.LastStep() + sensors.Second; l.engine.LastStep() != 0 && next < st.At; next += sensors.Second {
			l.engine.Warm(next)
		}
		for _, r := range st.For(l.ids) {
			l.engine.Stored(r)
		}
		if st.At < last {
			l.engine.Warm(st.At)
		}
		return nil
	})
}

// print writes the list for reading.
func (l *stationList) print(p *program) error {
	var b strings.Builder
	if l.Exercise {
		b.WriteString("EXERCISE\n")
	}
	if !l.Running {
		fmt.Fprintf(&b, "No daemon answers. This is what was known at %s.\n", l.At)
	}
	for i := range l.Stations {
		l.Stations[i].print(&b)
	}
	_, err := fmt.Fprintf(p.stdout, "%s\n%s\n", b.String(), alerting.Notice)
	return err
}

// print writes one mast.
func (h *stationHealth) print(b *strings.Builder) {
	fmt.Fprintf(b, "%s\n  %s\n", h.ID, h.sentence())
	if w := h.Wind; w != nil && w.Two != nil {
		from := "from all sides"
		if w.Two.FromDeg != nil {
			from = fmt.Sprintf("from %.0f degrees true", *w.Two.FromDeg)
		}
		fmt.Fprintf(b, "  wind of two minutes %.0f kt %s", quantity.Knots(w.Two.VectorMS), from)
		if w.Two.GustMS != nil {
			fmt.Fprintf(b, ", 3 s means %.0f to %.0f kt", quantity.Knots(*w.Two.LullMS), quantity.Knots(*w.Two.GustMS))
		}
		b.WriteString("\n")
	}
	if c := h.Clock; c.AheadS != nil {
		fmt.Fprintf(b, "  clock %+.2f s, corrected by %.1f s\n", *c.AheadS, c.CorrectedS)
	}
	if n := h.Neighbours; n.TurnedDeg != nil {
		fmt.Fprintf(b, "  against its neighbours over %d hours: turned by %+.1f degrees (%+.1f to %+.1f), speed times %.2f (%.2f to %.2f)\n", n.Hours,
			n.TurnedDeg[1], n.TurnedDeg[0], n.TurnedDeg[2], n.SpeedRatio[1], n.SpeedRatio[0], n.SpeedRatio[2])
	}
	var book []string
	for _, entry := range [][2]string{
		{"model", h.Book.Model}, {"serial number", h.Book.Serial}, {"installed", h.Book.Installed},
		{"calibrated", h.Book.Calibrated}, {"next due", h.Book.NextDue}, {"notes:", h.Book.Notes},
	} {
		if entry[1] != "" {
			book = append(book, entry[0]+" "+entry[1])
		}
	}
	if len(book) > 0 {
		fmt.Fprintf(b, "  book: %s\n", strings.Join(book, ", "))
	}
}
