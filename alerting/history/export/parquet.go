package export

import (
	"encoding/binary"
	"fmt"
	"io"
	"math"
	"slices"

	"github.com/klauspost/compress/zstd"
	"github.com/parquet-go/parquet-go/deprecated"
	"github.com/parquet-go/parquet-go/encoding/delta"
	"github.com/parquet-go/parquet-go/encoding/rle"
	"github.com/parquet-go/parquet-go/encoding/thrift"
	"github.com/parquet-go/parquet-go/format"

	"sockline/alerting"
	"sockline/sensors"
)

const hour = 3600 * sensors.Second

// parquetMagic begins and ends each file.
const parquetMagic = "PAR1"

// parquetSink keeps the rows of an hour of steps and writes them station by
// station: one row group for each, so that a reader of one station or hour
// reads nothing else. 40 masts at 4 Hz are 60 MB of them.
//
// The layout is that of the Apache Parquet format, version 2.6: each column
// of a group is one data page of version 1. The metadata and the encodings are
// the library's; its own writer would make the program 5 MB larger.
type parquetSink struct {
	w      io.Writer
	at     int64 // bytes written
	zstd   *zstd.Encoder
	meta   format.FileMetaData
	hour   sensors.Instant // the hour of the rows that are kept
	groups map[string][]Row
}

func newParquet(w io.Writer) (Sink, error) {
	// One goroutine, so that Close leaves none behind.
	z, err := zstd.NewWriter(nil, zstd.WithEncoderConcurrency(1))
	if err != nil {
		return nil, fmt.Errorf("prepare the compression: %w", err)
	}
	s := &parquetSink{w: w, zstd: z, groups: map[string][]Row{}}
	s.meta = format.FileMetaData{
		Version: 2, CreatedBy: "sockline", KeyValueMetadata: []format.KeyValue{{Key: "notice", Value: alerting.Notice}},
		Schema: []format.SchemaElement{{Name: "reading", NumChildren: thrift.New(int32(len(columns())))}},
	}
	for _, c := range parquetColumns() {
		s.meta.Schema = append(s.meta.Schema, c.element())
	}
	return s, s.write([]byte(parquetMagic))
}

func (s *parquetSink) write(b []byte) error {
	n, err := s.w.Write(b)
	s.at += int64(n)
	return err
}

// Row keeps a row, and writes those before it when its hour is another.
func (s *parquetSink) Row(r Row) error {
	if h := r.Step / hour; h != s.hour {
		if err := s.flush(); err != nil {
			return err
		}
		s.hour = h
	}
	s.groups[r.Station] = append(s.groups[r.Station], r)
	return nil
}

// flush writes a row group for each station that has rows.
func (s *parquetSink) flush() error {
	stations := make([]string, 0, len(s.groups))
	for id, rows := range s.groups {
		if len(rows) > 0 {
			stations = append(stations, id)
		}
	}
	slices.Sort(stations)
	for _, id := range stations {
		if err := s.group(s.groups[id]); err != nil {
			return err
		}
		s.groups[id] = s.groups[id][:0]
	}
	return nil
}

// group writes one row group.
func (s *parquetSink) group(rows []Row) error {
	g := format.RowGroup{NumRows: int64(len(rows)), FileOffset: s.at, Ordinal: int16(min(len(s.meta.RowGroups), math.MaxInt16))}
	for _, c := range parquetColumns() {
		chunk, err := s.chunk(c, rows)
		if err != nil {
			return fmt.Errorf("column %s: %w", c.name, err)
		}
		g.Columns = append(g.Columns, format.ColumnChunk{MetaData: chunk})
		g.TotalByteSize += chunk.TotalUncompressedSize
		g.TotalCompressedSize += chunk.TotalCompressedSize
	}
	s.meta.NumRows += g.NumRows
	s.meta.RowGroups = append(s.meta.RowGroups, g)
	return nil
}

// chunk writes one column of a row group as one page.
func (s *parquetSink) chunk(c parquetColumn, rows []Row) (m format.ColumnMetaData, err error) {
	body, encoding, err := c.page(rows)
	if err != nil {
		return m, err
	}
	packed := s.zstd.EncodeAll(body, nil)
	if len(body) > math.MaxInt32 {
		return m, fmt.Errorf("a page of %d bytes is too long for the format", len(body))
	}
	header, err := thrift.Marshal(&thrift.CompactProtocol{}, &format.PageHeader{
		Type: format.DataPage, UncompressedPageSize: int32(len(body)), CompressedPageSize: int32(len(packed)),
		DataPageHeader: thrift.New(format.DataPageHeader{
			NumValues: int32(len(rows)), Encoding: encoding, DefinitionLevelEncoding: format.RLE, RepetitionLevelEncoding: format.RLE,
		}),
	})
	if err != nil {
		return m, err
	}
	m = format.ColumnMetaData{
		Type: c.kind, Encoding: []format.Encoding{encoding, format.RLE}, PathInSchema: []string{c.name}, Codec: format.Zstd,
		NumValues: int64(len(rows)), DataPageOffset: s.at,
		TotalUncompressedSize: int64(len(header) + len(body)), TotalCompressedSize: int64(len(header) + len(packed)),
	}
	if err := s.write(header); err != nil {
		return m, err
	}
	return m, s.write(packed)
}

// Close writes the last hour and the footer.
func (s *parquetSink) Close() error {
	if err := s.flush(); err != nil {
		return err
	}
	footer, err := thrift.Marshal(&thrift.CompactProtocol{}, &s.meta)
	if err != nil {
		return fmt.Errorf("write the footer: %w", err)
	}
	footer = binary.LittleEndian.AppendUint32(footer, uint32(len(footer)))
	if err := s.write(append(footer, parquetMagic...)); err != nil {
		return err
	}
	return s.zstd.Close()
}

// parquetColumn is a column; one of its functions gives the value of a row,
// and false where there is none.
type parquetColumn struct {
	name     string
	kind     format.Type
	optional bool
	time     func(Row) sensors.Instant
	number   func(Row) (float64, bool)
	text     func(Row) (string, bool)
	flag     func(Row) bool
}

// parquetColumns are the columns in the order of columns.
func parquetColumns() []parquetColumn {
	at := func(name string, fn func(Row) sensors.Instant) parquetColumn {
		return parquetColumn{name: name, kind: format.Int64, time: fn}
	}
	is := func(name string, fn func(Row) bool) parquetColumn {
		return parquetColumn{name: name, kind: format.Boolean, flag: fn}
	}
	return []parquetColumn{
		at("time", func(r Row) sensors.Instant { return r.Reading.Time }),
		{name: "station", kind: format.ByteArray, text: func(r Row) (string, bool) { return r.Station, true }},
		{name: "speed_m_per_s", kind: format.Double, number: func(r Row) (float64, bool) { return r.Reading.Speed, true }},
		{name: "from_deg_true", kind: format.Double, number: func(r Row) (float64, bool) { return r.Reading.From, true }},
		{name: "gust_m_per_s", kind: format.Double, optional: true, number: func(r Row) (float64, bool) { return r.Reading.Gust, r.Reading.HasGust }},
		at("step_time", func(r Row) sensors.Instant { return r.Step }),
		at("arrival_time", func(r Row) sensors.Instant { return r.Reading.Arrival }),
		is("in_time", func(r Row) bool { return r.Because == "" }),
		{name: "turned_away_because", kind: format.ByteArray, optional: true, text: func(r Row) (string, bool) { return r.Because, r.Because != "" }},
		is("exercise", func(r Row) bool { return r.Reading.Exercise }),
		is("retained", func(r Row) bool { return r.Reading.Retained }),
	}
}

// element is the column in the schema: times are milliseconds since 1970 in
// UTC, and marked as such; texts are UTF-8.
func (c parquetColumn) element() format.SchemaElement {
	e := format.SchemaElement{Name: c.name, Type: thrift.New(c.kind), RepetitionType: thrift.New(format.Required)}
	if c.optional {
		e.RepetitionType = thrift.New(format.Optional)
	}
	switch {
	case c.time != nil:
		e.ConvertedType = thrift.New(deprecated.TimestampMillis)
		e.LogicalType.Value = &format.TimestampType{IsAdjustedToUTC: true, Unit: format.TimeUnit{Value: &format.MilliSeconds{}}}
	case c.text != nil:
		e.ConvertedType = thrift.New(deprecated.UTF8)
		e.LogicalType.Value = &format.StringType{}
	}
	return e
}

// page is the content of a page: which values there are, where some may be
// missing, then the values.
func (c parquetColumn) page(rows []Row) (body []byte, encoding format.Encoding, err error) {
	if c.time != nil {
		times := make([]int64, len(rows))
		for i, r := range rows {
			times[i] = int64(c.time(r))
		}
		body, err = (&delta.BinaryPackedEncoding{}).EncodeInt64(nil, times)
		return body, format.DeltaBinaryPacked, err
	}
	if c.flag != nil {
		body = make([]byte, (len(rows)+7)/8)
		for i, r := range rows {
			if c.flag(r) {
				body[i/8] |= 1 << (i % 8)
			}
		}
		return body, format.Plain, nil
	}
	var values []byte
	levels := make([]uint8, len(rows))
	for i, r := range rows {
		if c.number != nil {
			if v, ok := c.number(r); ok {
				values, levels[i] = binary.LittleEndian.AppendUint64(values, math.Float64bits(v)), 1
			}
		} else if v, ok := c.text(r); ok {
			values, levels[i] = append(binary.LittleEndian.AppendUint32(values, uint32(len(v))), v...), 1
		}
	}
	if !c.optional {
		return values, format.Plain, nil
	}
	defined, err := (&rle.Encoding{BitWidth: 1}).EncodeLevels(nil, levels)
	if err != nil {
		return nil, 0, err
	}
	body = binary.LittleEndian.AppendUint32(nil, uint32(len(defined)))
	return append(append(body, defined...), values...), format.Plain, nil
}
