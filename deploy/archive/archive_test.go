// Package archive reads what sockline exports with a library that had no part
// in writing it. It is a module of its own, so that the library is none of
// sockline's.
package archive

import (
	"context"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"testing"

	"github.com/apache/arrow-go/v18/arrow"
	"github.com/apache/arrow-go/v18/arrow/array"
	"github.com/apache/arrow-go/v18/arrow/memory"
	"github.com/apache/arrow-go/v18/parquet/file"
	"github.com/apache/arrow-go/v18/parquet/pqarrow"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/alerting/history/export"
	"sockline/sensors"
)

const begin sensors.Instant = 1782910770000 // 2026-07-01T12:59:30Z

var stations = []string{"far07", "mid", "north"}

// stored writes two hours of readings of three masts, some with gusts, some
// too late, and gives them back as they are in the store, by hour and station.
func stored(t *testing.T, path string) (want []export.Row) {
	t.Helper()
	s, err := history.Open(t.TempDir(), history.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close()
	w, err := s.Writer(history.WriterOptions{})
	if err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(1, 2))
	for i := range 5400 {
		at := begin + sensors.Instant(i)*sensors.Second
		b := history.Batch{Step: at, Stations: stations}
		for k := range stations {
			r := sensors.Reading{Station: k, Time: at - sensors.Instant(rng.IntN(1000)), Arrival: at, Speed: rng.Float64() * 30, From: float64(rng.IntN(3600)) / 10}
			if r.HasGust = rng.IntN(3) == 0; r.HasGust {
				r.Gust = r.Speed * 1.4
			}
			b.Readings = append(b.Readings, r)
		}
		if i%50 == 0 {
			b.Late = []history.LateReading{{Reading: b.Readings[2], Reason: "too-late"}}
		}
		w.Submit(b)
	}
	if err := w.Close(context.Background()); err != nil {
		t.Fatal(err)
	}
	out, err := os.Create(path)
	if err != nil {
		t.Fatal(err)
	}
	sink, err := export.New("parquet", out)
	if err != nil {
		t.Fatal(err)
	}
	sum, err := export.Readings(t.Context(), s, 0, 1<<50, sink, func(sensors.Instant) {})
	if err != nil || sum.Damage != nil {
		t.Fatal(err, sum.Damage)
	}
	if err := out.Close(); err != nil {
		t.Fatal(err)
	}
	groups := map[string][]export.Row{}
	var order []string
	err = s.Readings(0, 1<<50, func(st history.Step) error {
		add := func(r sensors.Reading, because string) {
			key := st.At.Time().Format("2006-01-02T15 ") + st.Stations[r.Station]
			if groups[key] == nil {
				order = append(order, key)
			}
			groups[key] = append(groups[key], export.Row{Step: st.At, Station: st.Stations[r.Station], Reading: r, Because: because})
		}
		for _, r := range st.Readings {
			add(r, "")
		}
		for _, l := range st.Late {
			add(l.Reading, l.Reason)
		}
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	for _, key := range order {
		want = append(want, groups[key]...)
	}
	return want
}

func TestIndependentReader(t *testing.T) {
	path := filepath.Join(t.TempDir(), "readings.parquet")
	want := stored(t, path)
	f, err := file.OpenParquetFile(path, false)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	if notice := f.MetaData().KeyValueMetadata().FindValue("notice"); notice == nil || *notice != alerting.Notice {
		t.Errorf("notice %v", notice)
	}
	// 30 s of an hour, one whole hour and most of another, three masts each.
	if f.NumRowGroups() != 9 || f.NumRows() != int64(len(want)) {
		t.Errorf("%d row groups, %d rows of %d", f.NumRowGroups(), f.NumRows(), len(want))
	}
	reader, err := pqarrow.NewFileReader(f, pqarrow.ArrowReadProperties{BatchSize: 1024}, memory.DefaultAllocator)
	if err != nil {
		t.Fatal(err)
	}
	records, err := reader.GetRecordReader(t.Context(), nil, nil)
	if err != nil {
		t.Fatal(err)
	}
	defer records.Release()
	n, low, high := 0, math.Inf(1), math.Inf(-1)
	for {
		batch, err := records.Read()
		if err == io.EOF {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		for i := range int(batch.NumRows()) {
			got := row(t, batch, i)
			if got != want[n] {
				t.Fatalf("row %d is %+v, want %+v", n, got, want[n])
			}
			low, high = min(low, got.Reading.Speed), max(high, got.Reading.Speed)
			n++
		}
	}
	if n != len(want) || low < 0 || high > 30 {
		t.Errorf("%d rows of %d, speeds from %g to %g", n, len(want), low, high)
	}
}

// row is one row of a batch.
func row(t *testing.T, batch arrow.RecordBatch, i int) (r export.Row) {
	t.Helper()
	column := func(name string) arrow.Array {
		at := batch.Schema().FieldIndices(name)
		if len(at) != 1 {
			t.Fatalf("%d columns %s", len(at), name)
		}
		return batch.Column(at[0])
	}
	at := func(name string) sensors.Instant {
		c := column(name).(*array.Timestamp)
		kind := c.DataType().(*arrow.TimestampType)
		if kind.Unit != arrow.Millisecond || kind.TimeZone != "UTC" {
			t.Fatalf("%s is in %s %s", name, kind.Unit, kind.TimeZone)
		}
		return sensors.Instant(c.Value(i))
	}
	number := func(name string) float64 { return column(name).(*array.Float64).Value(i) }
	flag := func(name string) bool { return column(name).(*array.Boolean).Value(i) }
	r.Step, r.Reading.Time, r.Reading.Arrival = at("step_time"), at("time"), at("arrival_time")
	r.Station = column("station").(*array.String).Value(i)
	for k, id := range stations {
		if id == r.Station {
			r.Reading.Station = k
		}
	}
	r.Reading.Speed, r.Reading.From = number("speed_m_per_s"), number("from_deg_true")
	if gusts := column("gust_m_per_s"); gusts.IsValid(i) {
		r.Reading.HasGust, r.Reading.Gust = true, number("gust_m_per_s")
	}
	if because := column("turned_away_because"); because.IsValid(i) {
		r.Because = because.(*array.String).Value(i)
	}
	if flag("in_time") != (r.Because == "") {
		t.Fatalf("row %d: in time, and because %q", i, r.Because)
	}
	r.Reading.Exercise, r.Reading.Retained = flag("exercise"), flag("retained")
	return r
}
