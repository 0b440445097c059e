package export

import (
	"bytes"
	"cmp"
	"context"
	"encoding/csv"
	"encoding/json"
	"errors"
	"io"
	"math/rand/v2"
	"reflect"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/parquet-go/parquet-go"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/sensors"
)

// begin is 2026-07-01T12:59:30Z, half a minute before a full hour.
const begin sensors.Instant = 1782910770000

var stations = []string{"far07", "mid", `od"d, one`}

// kept writes n steps with readings of every shape and returns what they
// should come out as.
func kept(tb testing.TB, n int) (*history.Store, []Row) {
	tb.Helper()
	s, err := history.Open(tb.TempDir(), history.Options{})
	if err != nil {
		tb.Fatal(err)
	}
	tb.Cleanup(func() { s.Close() })
	w, err := s.Writer(history.WriterOptions{})
	if err != nil {
		tb.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(3, 3))
	var rows []Row
	for i := range n {
		at := begin + sensors.Instant(i)*sensors.Second
		b := history.Batch{Step: at, Stations: stations}
		for k := range stations {
			r := sensors.Reading{
				Station: k, Time: at - sensors.Instant(rng.IntN(999)), Arrival: at + sensors.Instant(rng.IntN(900)),
				Speed: float64(rng.IntN(300)) / 10, From: rng.Float64() * 360, Retained: rng.IntN(50) == 0, Exercise: rng.IntN(50) == 0,
			}
			if r.HasGust = rng.IntN(2) == 0; r.HasGust {
				r.Gust = r.Speed * 1.3
			}
			b.Readings = append(b.Readings, r)
			rows = append(rows, Row{Step: at, Station: stations[k], Reading: r})
		}
		if i%7 == 0 {
			late := b.Readings[1]
			late.Time -= 5000
			b.Late = []history.LateReading{{Reading: late, Reason: "too-late"}}
			rows = append(rows, Row{Step: at, Station: stations[1], Reading: late, Because: "too-late"})
		}
		w.Submit(b)
	}
	if err := w.Close(context.Background()); err != nil {
		tb.Fatal(err)
	}
	return s, rows
}

func exported(tb testing.TB, s *history.Store, format string) ([]byte, Summary) {
	tb.Helper()
	var b bytes.Buffer
	sink, err := New(format, &b)
	if err != nil {
		tb.Fatal(err)
	}
	sum, err := Readings(tb.Context(), s, 0, 1<<50, sink, func(sensors.Instant) {})
	if err != nil || sum.Damage != nil {
		tb.Fatal(err, sum.Damage)
	}
	return b.Bytes(), sum
}

func instant(tb testing.TB, text string) sensors.Instant {
	tb.Helper()
	at, err := time.Parse(time.RFC3339Nano, text)
	if err != nil {
		tb.Fatal(err)
	}
	return sensors.At(at)
}

func TestCSV(t *testing.T) {
	s, want := kept(t, 90)
	b, sum := exported(t, s, "csv")
	first, rest, _ := strings.Cut(string(b), "\n")
	if first != "# "+alerting.Notice {
		t.Errorf("first line %q", first)
	}
	all, err := csv.NewReader(strings.NewReader(rest)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if !reflect.DeepEqual(all[0], columns()) || len(all)-1 != len(want) || sum.Rows != uint64(len(want)) || sum.Steps != 90 {
		t.Fatalf("%d rows of %d, %+v, %v", len(all)-1, len(want), sum, all[0])
	}
	float := func(text string) float64 {
		v, err := strconv.ParseFloat(text, 64)
		if err != nil {
			t.Fatal(err)
		}
		return v
	}
	for i, f := range all[1:] {
		r := want[i].Reading
		got := sensors.Reading{
			Station: r.Station, Time: instant(t, f[0]), Speed: float(f[2]), From: float(f[3]), Arrival: instant(t, f[6]),
			HasGust: f[4] != "", Exercise: f[9] == "true", Retained: f[10] == "true",
		}
		if got.HasGust {
			got.Gust = float(f[4])
		}
		if got != r || f[1] != want[i].Station || instant(t, f[5]) != want[i].Step || f[7] != strconv.FormatBool(want[i].Because == "") || f[8] != want[i].Because {
			t.Fatalf("row %d is %v, want %+v", i, f, want[i])
		}
	}
}

func TestLines(t *testing.T) {
	s, want := kept(t, 90)
	b, _ := exported(t, s, "jsonl")
	d := json.NewDecoder(bytes.NewReader(b))
	var head struct{ Notice string }
	if err := d.Decode(&head); err != nil || head.Notice != alerting.Notice {
		t.Errorf("head %+v, %v", head, err)
	}
	for i, w := range want {
		var l line
		if err := d.Decode(&l); err != nil {
			t.Fatal(err)
		}
		gust, because := optional(w)
		if instant(t, l.Time) != w.Reading.Time || l.Speed != w.Reading.Speed || l.From != w.Reading.From || l.Station != w.Station ||
			!reflect.DeepEqual(l.Gust, gust) || !reflect.DeepEqual(l.Because, because) || l.InTime != (w.Because == "") {
			t.Fatalf("row %d is %+v, want %+v", i, l, w)
		}
	}
	if d.More() {
		t.Error("there is more")
	}
}

// parquetRow is a row as the library's own reader gives it.
type parquetRow struct {
	Time     int64    `parquet:"time,timestamp(millisecond)"`
	Station  string   `parquet:"station"`
	Speed    float64  `parquet:"speed_m_per_s"`
	From     float64  `parquet:"from_deg_true"`
	Gust     *float64 `parquet:"gust_m_per_s,optional"`
	Step     int64    `parquet:"step_time,timestamp(millisecond)"`
	Arrival  int64    `parquet:"arrival_time,timestamp(millisecond)"`
	InTime   bool     `parquet:"in_time"`
	Because  *string  `parquet:"turned_away_because,optional"`
	Exercise bool     `parquet:"exercise"`
	Retained bool     `parquet:"retained"`
}

func (r parquetRow) row() Row {
	out := Row{Step: sensors.Instant(r.Step), Station: r.Station, Reading: sensors.Reading{
		Station: slices.Index(stations, r.Station), Time: sensors.Instant(r.Time), Arrival: sensors.Instant(r.Arrival),
		Speed: r.Speed, From: r.From, HasGust: r.Gust != nil, Exercise: r.Exercise, Retained: r.Retained,
	}}
	if r.Gust != nil {
		out.Reading.Gust = *r.Gust
	}
	if r.Because != nil {
		out.Because = *r.Because
	}
	return out
}

// TestParquet reads the file with the reader of parquet-go, which wrote
// neither the pages nor their order; deploy/archive does so with another one.
func TestParquet(t *testing.T) {
	s, want := kept(t, 90)
	b, _ := exported(t, s, "parquet")
	f, err := parquet.OpenFile(bytes.NewReader(b), int64(len(b)))
	if err != nil {
		t.Fatal(err)
	}
	if notice, _ := f.Lookup("notice"); notice != alerting.Notice {
		t.Errorf("notice %q", notice)
	}
	// Two hours of three stations.
	if n := len(f.RowGroups()); n != 6 {
		t.Errorf("%d row groups, want 6", n)
	}
	if names := f.Root().Columns(); len(names) != len(columns()) || names[2].Name() != columns()[2] {
		t.Errorf("columns %v", names)
	}
	// In the file the rows stand by hour and station.
	slices.SortStableFunc(want, func(a, b Row) int {
		return cmp.Or(cmp.Compare(a.Step/hour, b.Step/hour), strings.Compare(a.Station, b.Station))
	})
	for _, g := range f.RowGroups() {
		rows, err := readAll(g)
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range rows {
			if r.Station != rows[0].Station || r.Step/int64(hour) != rows[0].Step/int64(hour) {
				t.Fatalf("a group holds %+v beside %+v", r, rows[0])
			}
			if r.row() != want[0] {
				t.Fatalf("read %+v, want %+v", r.row(), want[0])
			}
			want = want[1:]
		}
	}
	if len(want) > 0 {
		t.Errorf("%d rows are missing", len(want))
	}
}

func readAll(g parquet.RowGroup) ([]parquetRow, error) {
	r := parquet.NewGenericRowGroupReader[parquetRow](g)
	defer r.Close()
	rows := make([]parquetRow, g.NumRows())
	if n, err := r.Read(rows); n != len(rows) || err != nil && !errors.Is(err, io.EOF) {
		return nil, err
	}
	return rows, nil
}

// failing takes so many bytes and then no more.
type failing struct{ left int }

var errFull = errors.New("no space left")

func (f *failing) Write(p []byte) (int, error) {
	if f.left -= len(p); f.left < 0 {
		return 0, errFull
	}
	return len(p), nil
}

// TestFullTarget: a target that fills up at any place is told, in each format.
func TestFullTarget(t *testing.T) {
	s, _ := kept(t, 30)
	for _, format := range Formats() {
		whole, _ := exported(t, s, format)
		for at := 0; at < len(whole); at += 97 {
			sink, err := New(format, &failing{left: at})
			if err == nil {
				_, err = Readings(t.Context(), s, 0, 1<<50, sink, func(sensors.Instant) {})
			}
			if !errors.Is(err, errFull) {
				t.Fatalf("%s, full at %d of %d: %v", format, at, len(whole), err)
			}
		}
	}
}

func TestStops(t *testing.T) {
	s, _ := kept(t, 30)
	ctx, cancel := context.WithCancel(t.Context())
	sink, err := New("csv", io.Discard)
	if err != nil {
		t.Fatal(err)
	}
	steps := 0
	_, err = Readings(ctx, s, 0, 1<<50, sink, func(sensors.Instant) {
		if steps++; steps == 10 {
			cancel()
		}
	})
	if !errors.Is(err, context.Canceled) || steps != 10 {
		t.Errorf("%d steps, %v", steps, err)
	}
	if _, err := New("xml", io.Discard); err == nil || !strings.Contains(err.Error(), "choose csv, jsonl or parquet") {
		t.Errorf("unknown format: %v", err)
	}
}
