// Package export writes stored readings as tables for other programs: the
// steps of a history.Store come in, CSV, JSON Lines or Parquet goes out, row
// by row in bounded memory.
//
// Times are RFC 3339 in UTC with milliseconds (Parquet has its own type of
// time), units stand in the names of the columns, and each file carries the
// notice. Numbers are written so that reading them gives back every bit.
//
// Next: history/bundle, cmd/sockline.
package export

import (
	"bufio"
	"context"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"strconv"

	"sockline/alerting"
	"sockline/alerting/history"
	"sockline/sensors"
)

// Row is one reading.
type Row struct {
	Step    sensors.Instant // with which it was stored
	Station string
	Reading sensors.Reading
	Because string // why no step evaluated it; empty if one did
}

// Sink takes rows in the order of steps. Close ends the file; without it the
// file is not whole.
type Sink interface {
	Row(Row) error
	Close() error
}

// Formats are the names that New knows.
func Formats() []string { return []string{"csv", "jsonl", "parquet"} }

// New begins a file of a format.
func New(format string, w io.Writer) (Sink, error) {
	switch format {
	case "csv":
		return newCSV(w)
	case "jsonl":
		return newLines(w)
	case "parquet":
		return newParquet(w)
	}
	return nil, fmt.Errorf("there is no format %q: choose csv, jsonl or parquet", format)
}

// Summary is what an export took in.
type Summary struct {
	Steps, Rows uint64
	First, Last sensors.Instant // steps; 0 if none
	Damage      error           // names the steps and days that could not be read
}

// Readings writes every reading of the steps from <= T < to, those that came
// too late behind the others of their step. It tells at each step how far it
// has come. Damaged steps are left out and named in the summary.
func Readings(ctx context.Context, s *history.Store, from, to sensors.Instant, sink Sink, at func(sensors.Instant)) (Summary, error) {
	var (
		sum  Summary
		stop error
	)
	err := s.Readings(from, to, func(st history.Step) error {
		if stop = ctx.Err(); stop != nil {
			return stop
		}
		if sum.Steps++; sum.First == 0 {
			sum.First = st.At
		}
		sum.Last = st.At
		at(st.At)
		var rows uint64
		rows, stop = step(st, sink)
		sum.Rows += rows
		return stop
	})
	if stop != nil {
		return sum, stop
	}
	sum.Damage = err
	if err := sink.Close(); err != nil {
		return sum, fmt.Errorf("end the export: %w", err)
	}
	return sum, nil
}

func step(st history.Step, sink Sink) (rows uint64, err error) {
	put := func(r sensors.Reading, because string) error {
		row := Row{Step: st.At, Reading: r, Because: because}
		if r.Station >= 0 && r.Station < len(st.Stations) {
			row.Station = st.Stations[r.Station]
		}
		rows++
		return sink.Row(row)
	}
	for _, r := range st.Readings {
		if err := put(r, ""); err != nil {
			return rows, fmt.Errorf("write a reading: %w", err)
		}
	}
	for _, l := range st.Late {
		if err := put(l.Reading, l.Reason); err != nil {
			return rows, fmt.Errorf("write a reading: %w", err)
		}
	}
	return rows, nil
}

// columns are the names in each format, in their order.
func columns() []string {
	return []string{
		"time", "station", "speed_m_per_s", "from_deg_true", "gust_m_per_s", "step_time", "arrival_time",
		"in_time", "turned_away_because", "exercise", "retained",
	}
}

const timeLayout = "2006-01-02T15:04:05.000Z07:00"

func timeText(i sensors.Instant) string { return i.Time().Format(timeLayout) }

func number(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }

// csvSink writes RFC 4180 with a first comment line.
type csvSink struct {
	buffer *bufio.Writer
	w      *csv.Writer
	fields []string
}

func newCSV(w io.Writer) (Sink, error) {
	s := &csvSink{buffer: bufio.NewWriterSize(w, 1<<16), fields: make([]string, len(columns()))}
	if _, err := s.buffer.WriteString("# " + alerting.Notice + "\n"); err != nil {
		return nil, err
	}
	s.w = csv.NewWriter(s.buffer)
	return s, s.w.Write(columns())
}

// Row writes a line.
func (s *csvSink) Row(r Row) error {
	gust := ""
	if r.Reading.HasGust {
		gust = number(r.Reading.Gust)
	}
	copy(s.fields, []string{
		timeText(r.Reading.Time), r.Station, number(r.Reading.Speed), number(r.Reading.From), gust, timeText(r.Step), timeText(r.Reading.Arrival),
		strconv.FormatBool(r.Because == ""), r.Because, strconv.FormatBool(r.Reading.Exercise), strconv.FormatBool(r.Reading.Retained),
	})
	return s.w.Write(s.fields)
}

// Close writes what is buffered.
func (s *csvSink) Close() error {
	if s.w.Flush(); s.w.Error() != nil {
		return s.w.Error()
	}
	return s.buffer.Flush()
}

// linesSink writes one JSON object a line; the first has the notice.
type linesSink struct {
	buffer *bufio.Writer
	e      *json.Encoder
}

func newLines(w io.Writer) (Sink, error) {
	s := &linesSink{buffer: bufio.NewWriterSize(w, 1<<16)}
	s.e = json.NewEncoder(s.buffer)
	s.e.SetEscapeHTML(false)
	return s, s.e.Encode(map[string]any{"export": 1, "columns": columns(), "notice": alerting.Notice})
}

// line is a row in JSON Lines.
type line struct {
	Time     string   `json:"time"`
	Station  string   `json:"station"`
	Speed    float64  `json:"speed_m_per_s"`
	From     float64  `json:"from_deg_true"`
	Gust     *float64 `json:"gust_m_per_s"`
	Step     string   `json:"step_time"`
	Arrival  string   `json:"arrival_time"`
	InTime   bool     `json:"in_time"`
	Because  *string  `json:"turned_away_because"`
	Exercise bool     `json:"exercise"`
	Retained bool     `json:"retained"`
}

// Row writes a line.
func (s *linesSink) Row(r Row) error {
	l := line{
		Time: timeText(r.Reading.Time), Station: r.Station, Speed: r.Reading.Speed, From: r.Reading.From,
		Step: timeText(r.Step), Arrival: timeText(r.Reading.Arrival), InTime: r.Because == "",
		Exercise: r.Reading.Exercise, Retained: r.Reading.Retained,
	}
	l.Gust, l.Because = optional(r)
	return s.e.Encode(l)
}

// optional are the two columns that a row may leave empty.
func optional(r Row) (gust *float64, because *string) {
	if r.Reading.HasGust {
		gust = &r.Reading.Gust
	}
	if r.Because != "" {
		because = &r.Because
	}
	return gust, because
}

// Close writes what is buffered.
func (s *linesSink) Close() error { return s.buffer.Flush() }
