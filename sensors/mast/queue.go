package mast

import (
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"hash/crc32"
	"io/fs"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"

	"sockline/sensors"
)

// A queue is a directory:
//
//	0000000000000000.wind   segments, named by the number of their first record, hexadecimal
//	position                the number of the next record to send, and a check
//	lock                    held by the agent that uses the directory
//
// A segment is a header of one record's length and records of 40 bytes, little
// endian: time in ms since 1970 (8), speed m/s (8), direction in degrees (8),
// gust m/s (8), marks (1: has a gust, 2: exercise), three zeros, CRC-32C of all
// before it (4). Records have a fixed length so that a torn end is told from
// the size of the file and mended by cutting it off.
const (
	recordSize    = 40
	segmentHeader = "sockline mast queue, records, version 1\n"
	segmentEnding = ".wind"
	positionSize  = 12

	// segmentsInBound is into how many segments the bound is divided: what is
	// dropped at once when the queue is full is one of them.
	segmentsInBound = 16
	// memoryRecords may wait in memory while the disk takes nothing.
	memoryRecords = 4096

	// LeastQueue is the smallest bound of a queue, in bytes: an hour of one
	// reading a second.
	LeastQueue = 256 << 10
)

// Record is one reading that waits to be sent.
type Record struct {
	Time     sensors.Instant
	Speed    float64 // m/s
	From     float64 // degrees, as the instrument counts them
	Gust     float64 // m/s, if HasGust
	HasGust  bool
	Exercise bool
}

type segment struct {
	first, n uint64 // number of its first record, and how many there are
}

func (s segment) end() uint64 { return s.first + s.n }

// Queue keeps readings on disk, in order, until they have been sent. It
// survives the end of the program at any moment; after a loss of power the
// last second may be missing. Not safe for concurrent use.
type Queue struct {
	dir        string
	bound      int64
	perSegment uint64
	segments   []segment
	tail       *os.File // of the last segment; nil when the next record begins one
	head       uint64   // the next record to send
	memory     []Record // what the disk did not take
	memoryFrom uint64   // number of its first
	position   *os.File
	lock       *os.File
	dropped    uint64
	damaged    uint64
	seenBad    uint64 // records before it have been looked at for damage
	dirty      bool
}

// OpenQueue opens or makes a queue of at most bound bytes.
func OpenQueue(dir string, bound int64) (*Queue, error) {
	if bound < LeastQueue {
		return nil, fmt.Errorf("queue of %d bytes: give at least %d", bound, LeastQueue)
	}
	if err := os.MkdirAll(dir, 0o700); err != nil {
		return nil, fmt.Errorf("make the queue: %w: name a directory that can be written", err)
	}
	q := &Queue{dir: dir, bound: bound, perSegment: uint64(bound/segmentsInBound/recordSize) - 1}
	var err error
	if q.lock, err = os.OpenFile(filepath.Join(dir, "lock"), os.O_CREATE|os.O_RDWR, 0o600); err != nil {
		return nil, fmt.Errorf("open the queue: %w", err)
	}
	if err = lockFile(q.lock); err != nil {
		err = fmt.Errorf("queue %s: another agent is using it (%w): give each its own directory", dir, err)
	} else if q.position, err = os.OpenFile(filepath.Join(dir, "position"), os.O_CREATE|os.O_RDWR, 0o600); err == nil {
		err = q.recover()
	}
	if err != nil {
		return nil, errors.Join(err, q.Close())
	}
	return q, nil
}

// recover finds what an earlier run left.
func (q *Queue) recover() error {
	entries, err := os.ReadDir(q.dir)
	if err != nil {
		return fmt.Errorf("read the queue: %w", err)
	}
	for _, e := range entries {
		name, ok := strings.CutSuffix(e.Name(), segmentEnding)
		if !ok {
			continue
		}
		first, err := strconv.ParseUint(name, 16, 64)
		if err != nil || len(name) != 16 || first > math.MaxUint64/2 {
			continue // not ours
		}
		n, err := q.measure(first)
		if err != nil {
			return err
		}
		if n > 0 {
			q.segments = append(q.segments, segment{first, n})
		}
	}
	slices.SortFunc(q.segments, func(a, b segment) int { return cmp.Compare(a.first, b.first) })
	// What overlaps was not written by this program: keep the earlier.
	end := uint64(0)
	q.segments = slices.DeleteFunc(q.segments, func(s segment) bool {
		if s.first < end {
			return true
		}
		end = s.end()
		return false
	})
	q.head = q.readPosition()
	if len(q.segments) > 0 && q.head < q.segments[0].first {
		q.head = q.segments[0].first
	}
	// A position beyond the end stays: numbers are not given out twice.
	q.memoryFrom = max(end, q.head)
	return q.trim()
}

// measure is how many whole records a segment holds, up to the first that is
// damaged; an end that was torn off is cut off, and a segment without records
// removed.
func (q *Queue) measure(first uint64) (uint64, error) {
	path := q.path(first)
	data, err := os.ReadFile(path)
	if err != nil {
		return 0, fmt.Errorf("read the queue: %w", err)
	}
	if len(data) < recordSize || string(data[:recordSize]) != segmentHeader {
		if len(data) >= recordSize {
			q.damaged++ // with what is in it: nobody knows how much
		}
		return 0, q.remove(path)
	}
	n := uint64(len(data)/recordSize - 1)
	// From the back: a torn end is a few records, damage in the middle is
	// passed over when it is read.
	for n > 0 {
		if _, ok := decodeRecord(data[n*recordSize : (n+1)*recordSize]); ok {
			break
		}
		n--
		q.damaged++
	}
	if n == 0 {
		return 0, q.remove(path)
	}
	if size := int64(n+1) * recordSize; size < int64(len(data)) {
		if err := os.Truncate(path, size); err != nil {
			return 0, fmt.Errorf("mend the queue: %w", err)
		}
	}
	return n, nil
}

func (q *Queue) path(first uint64) string {
	return filepath.Join(q.dir, fmt.Sprintf("%016x%s", first, segmentEnding))
}

func (q *Queue) remove(path string) error {
	if err := os.Remove(path); err != nil && !errors.Is(err, fs.ErrNotExist) {
		return fmt.Errorf("clear the queue: %w", err)
	}
	return nil
}

// Append puts a reading at the end. The error says that the disk did not take
// it; it then waits in memory, as long as there is room.
func (q *Queue) Append(r Record) error {
	q.memory = append(q.memory, r)
	if len(q.memory) > memoryRecords {
		q.memory = slices.Delete(q.memory, 0, 1)
		q.drop(q.memoryFrom, q.memoryFrom+1)
		q.memoryFrom++
	}
	for len(q.memory) > 0 {
		if err := q.write(q.memoryFrom, q.memory[0]); err != nil {
			return err
		}
		q.memory = slices.Delete(q.memory, 0, 1)
		q.memoryFrom++
	}
	return q.trim()
}

// write puts one record on disk.
func (q *Queue) write(number uint64, r Record) error {
	if last := len(q.segments) - 1; q.tail == nil || q.segments[last].n >= q.perSegment || q.segments[last].end() != number {
		if err := q.begin(number); err != nil {
			return err
		}
	}
	s := &q.segments[len(q.segments)-1]
	var b [recordSize]byte
	encodeRecord(&b, r)
	if _, err := q.tail.WriteAt(b[:], int64(s.n+1)*recordSize); err != nil {
		return fmt.Errorf("write to the queue: %w", err) // the next attempt writes over it
	}
	s.n++
	q.dirty = true
	return nil
}

// begin makes a segment for a record.
func (q *Queue) begin(first uint64) error {
	q.closeTail()
	f, err := os.OpenFile(q.path(first), os.O_CREATE|os.O_TRUNC|os.O_RDWR, 0o600)
	if err != nil {
		return fmt.Errorf("write to the queue: %w", err)
	}
	if _, err := f.WriteAt([]byte(segmentHeader), 0); err != nil {
		return errors.Join(fmt.Errorf("write to the queue: %w", err), f.Close())
	}
	q.tail = f
	q.segments = append(q.segments, segment{first: first})
	return nil
}

// closeTail leaves the last segment as it is. One without records is forgotten.
func (q *Queue) closeTail() {
	if q.tail == nil {
		return
	}
	_ = q.tail.Sync() // what is missing after a loss of power is cut off at the next start
	_ = q.tail.Close()
	q.tail = nil
	q.segments = slices.DeleteFunc(q.segments, func(s segment) bool { return s.n == 0 })
}

// trim removes what has been sent, and the oldest that no longer fits.
func (q *Queue) trim() error {
	for len(q.segments) > 0 {
		s := q.segments[0]
		size := int64(0)
		for _, s := range q.segments {
			size += int64(s.n+1) * recordSize
		}
		last := len(q.segments) == 1
		sent := s.end() <= q.head && (!last || s.n >= q.perSegment/4)
		if !sent && (size <= q.bound || last) {
			return nil
		}
		q.drop(s.first, s.end())
		if last && q.tail != nil {
			_ = q.tail.Close() // it is about to be removed
			q.tail = nil
		}
		q.segments = q.segments[1:]
		if err := q.remove(q.path(s.first)); err != nil {
			return err
		}
	}
	return nil
}

// drop counts the records from first to end that have not been sent.
func (q *Queue) drop(first, end uint64) {
	if first = max(first, q.head); first < end {
		q.dropped += end - first
		q.head = end
	}
}

// Peek appends up to n of the oldest readings to dst, and tells what to
// advance to when they have been sent.
func (q *Queue) Peek(dst []Record, n int) (records []Record, next uint64, err error) {
	next = q.head
	for _, s := range q.segments {
		if s.end() <= next || n <= 0 {
			continue
		}
		next = max(next, s.first)
		take := min(uint64(n), s.end()-next)
		if dst, err = q.read(dst, s, next, take); err != nil {
			return dst, next, err
		}
		next += take
		n -= int(take)
	}
	if n > 0 && len(q.memory) > 0 {
		next = max(next, q.memoryFrom)
		rest := q.memory[next-q.memoryFrom:]
		rest = rest[:min(n, len(rest))]
		dst, next = append(dst, rest...), next+uint64(len(rest))
	}
	return dst, next, nil
}

// read takes records of one segment. Damaged ones are passed over.
func (q *Queue) read(dst []Record, s segment, from, n uint64) ([]Record, error) {
	f, err := os.Open(q.path(s.first))
	if err != nil {
		return dst, fmt.Errorf("read the queue: %w", err)
	}
	defer f.Close()
	b := make([]byte, n*recordSize)
	if _, err := f.ReadAt(b, int64(from-s.first+1)*recordSize); err != nil {
		return dst, fmt.Errorf("read the queue: %w", err)
	}
	for i := range n {
		r, ok := decodeRecord(b[i*recordSize : (i+1)*recordSize])
		switch {
		case ok:
			dst = append(dst, r)
		case from+i >= q.seenBad:
			q.damaged++
		}
		q.seenBad = max(q.seenBad, from+i+1)
	}
	return dst, nil
}

// Advance forgets everything before next, as Peek gave it.
func (q *Queue) Advance(next uint64) error {
	if next <= q.head {
		return nil // dropped meanwhile
	}
	q.head = next
	if sent := int(min(max(next, q.memoryFrom)-q.memoryFrom, uint64(len(q.memory)))); sent > 0 {
		q.memory = slices.Delete(q.memory, 0, sent)
		q.memoryFrom += uint64(sent)
	}
	// Written without waiting for the disk: a position that is lost makes
	// readings go out twice, and a receiver knows copies by their time.
	var b [positionSize]byte
	binary.LittleEndian.PutUint64(b[0:], next)
	binary.LittleEndian.PutUint32(b[8:], crc(b[:8]))
	if _, err := q.position.WriteAt(b[:], 0); err != nil {
		return fmt.Errorf("write the position in the queue: %w", err)
	}
	return q.trim()
}

// readPosition is the next record to send, 0 if that is not known: then
// everything that is kept is sent again.
func (q *Queue) readPosition() uint64 {
	var b [positionSize]byte
	if _, err := q.position.ReadAt(b[:], 0); err != nil || binary.LittleEndian.Uint32(b[8:]) != crc(b[:8]) {
		return 0
	}
	return min(binary.LittleEndian.Uint64(b[0:]), math.MaxUint64/2)
}

// Len is how many readings wait.
func (q *Queue) Len() int {
	n := uint64(len(q.memory))
	for _, s := range q.segments {
		if s.end() > q.head {
			n += s.end() - max(s.first, q.head)
		}
	}
	return int(n)
}

// Dropped counts the readings since the start that went because there was no
// more room, the oldest first.
func (q *Queue) Dropped() uint64 { return q.dropped }

// Damaged counts the records since the start that could not be read.
func (q *Queue) Damaged() uint64 { return q.damaged }

// Sync makes what has been appended survive a loss of power.
func (q *Queue) Sync() error {
	if !q.dirty || q.tail == nil {
		return nil
	}
	if err := q.tail.Sync(); err != nil {
		return fmt.Errorf("sync the queue: %w", err)
	}
	q.dirty = false
	return nil
}

// Close leaves the queue to the next run.
func (q *Queue) Close() error {
	q.closeTail()
	var err error
	for _, f := range []*os.File{q.position, q.lock} {
		if f != nil {
			err = errors.Join(err, f.Close())
		}
	}
	return err
}

const (
	markGust     = 1
	markExercise = 2
)

func crc(b []byte) uint32 { return crc32.Checksum(b, crc32.MakeTable(crc32.Castagnoli)) }

func encodeRecord(b *[recordSize]byte, r Record) {
	binary.LittleEndian.PutUint64(b[0:], uint64(r.Time))
	binary.LittleEndian.PutUint64(b[8:], math.Float64bits(r.Speed))
	binary.LittleEndian.PutUint64(b[16:], math.Float64bits(r.From))
	binary.LittleEndian.PutUint64(b[24:], math.Float64bits(r.Gust))
	if r.HasGust {
		b[32] |= markGust
	}
	if r.Exercise {
		b[32] |= markExercise
	}
	binary.LittleEndian.PutUint32(b[36:], crc(b[:36]))
}

func decodeRecord(b []byte) (r Record, ok bool) {
	if crc(b[:36]) != binary.LittleEndian.Uint32(b[36:]) {
		return r, false
	}
	float := func(at int) float64 { return math.Float64frombits(binary.LittleEndian.Uint64(b[at:])) }
	return Record{
		Time: sensors.Instant(binary.LittleEndian.Uint64(b[0:])), Speed: float(8), From: float(16), Gust: float(24),
		HasGust: b[32]&markGust != 0, Exercise: b[32]&markExercise != 0,
	}, true
}
