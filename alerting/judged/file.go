package judged

import (
	"bytes"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"hash/crc32"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"time"

	"sockline/alerting/packed"
	"sockline/sensors"
)

const (
	filePrefix = "judged-"
	fileSuffix = ".dat"
	dayLayout  = "2006-01-02"

	head  = "sockline judged 2\n"
	head1 = "sockline judged 1\n" // as long as head
	magic = "\xe7jb\x01"          // no text, and not the start of any column by design of its first byte

	kindContext = 'C'
	kindSteps   = 'S'
	frameHead   = len(magic) + 1 + 4
	// mostFrame is far more than a block of the largest airfield takes.
	mostFrame = 16 << 20
)

// ErrNewer is a file of a later version of the format.
var ErrNewer = errors.New("is of a format that this version does not read: use the version that wrote it")

// DayOf names the UTC day of a step: 2006-01-02.
func DayOf(t sensors.Instant) string { return t.Time().Format(dayLayout) }

// FileOf is the file of a day within the history's directory.
func FileOf(day string) string { return filePrefix + day + fileSuffix }

// Days lists the days of which something is kept, ascending.
func Days(dir string) ([]string, error) {
	entries, err := os.ReadDir(dir)
	if err != nil {
		return nil, fmt.Errorf("list what was judged: %w", err)
	}
	var days []string
	for _, e := range entries {
		if day, ok := dayOfFile(e.Name()); ok {
			days = append(days, day)
		}
	}
	return days, nil
}

func dayOfFile(name string) (string, bool) {
	rest, ok := strings.CutPrefix(name, filePrefix)
	day, ok2 := strings.CutSuffix(rest, fileSuffix)
	if !ok || !ok2 {
		return "", false
	}
	_, err := time.Parse(dayLayout, day)
	return day, err == nil
}

// Prune deletes the days that ended before limit, except those that held says
// must stay, and returns the names of the deleted files.
func Prune(dir string, limit sensors.Instant, held func(day string) bool) ([]string, error) {
	days, err := Days(dir)
	if err != nil {
		return nil, err
	}
	var gone []string
	for _, day := range days {
		begin, err := time.Parse(dayLayout, day)
		if err != nil || sensors.At(begin.AddDate(0, 0, 1)) > limit || held != nil && held(day) {
			continue
		}
		if err := os.Remove(filepath.Join(dir, FileOf(day))); err != nil {
			return gone, fmt.Errorf("delete what was judged long ago: %w", err)
		}
		gone = append(gone, FileOf(day))
	}
	return gone, nil
}

// appendFrame wraps a body: magic, kind, length, body, CRC-32C of kind, length
// and body.
func appendFrame(dst []byte, kind byte, body []byte) []byte {
	dst = append(dst, magic...)
	from := len(dst)
	dst = append(dst, kind)
	dst = binary.BigEndian.AppendUint32(dst, uint32(len(body)))
	dst = append(dst, body...)
	return binary.BigEndian.AppendUint32(dst, checksum(dst[from:]))
}

func checksum(b []byte) uint32 { return crc32.Checksum(b, crc32.MakeTable(crc32.Castagnoli)) }

// frame is one wrapped body, in the order of the file.
type frame struct {
	kind byte
	body []byte
}

// frames finds the whole frames of a file; faults says where something lies
// between them that is none.
func frames(content []byte) (all []frame, faults []string) {
	at, lost := len(head), -1
	for at < len(content) {
		f, size := frameAt(content[at:])
		if size == 0 { // look for the next one
			if lost < 0 {
				lost = at
			}
			next := bytes.Index(content[at+1:], []byte(magic))
			if next < 0 {
				at = len(content)
				break
			}
			at += 1 + next
			continue
		}
		if lost >= 0 {
			faults = append(faults, fmt.Sprintf("bytes %d to %d are damaged and left out", lost, at-1))
			lost = -1
		}
		all = append(all, f)
		at += size
	}
	if lost >= 0 {
		faults = append(faults, fmt.Sprintf("bytes %d to %d are damaged or cut short and left out", lost, at-1))
	}
	return all, faults
}

func frameAt(b []byte) (f frame, size int) {
	if len(b) < frameHead+4 || string(b[:len(magic)]) != magic {
		return f, 0
	}
	length := binary.BigEndian.Uint32(b[len(magic)+1:])
	end := frameHead + int(length)
	if length > mostFrame || len(b) < end+4 || checksum(b[len(magic):end]) != binary.BigEndian.Uint32(b[end:]) {
		return f, 0
	}
	return frame{kind: b[len(magic)], body: b[frameHead:end]}, end + 4
}

// Report is what reading a day found.
type Report struct {
	Steps  int
	Faults []string // what of the file could not be read
}

// source is a frame of steps whose context is known.
type source struct {
	context *Context
	start   sensors.Instant
	body    []byte
	until   sensors.Instant // the steps from here on were written anew later; 0: none were
}

// ReadDay shows fn every step of a day with from <= T < to in their order, once
// each: where steps were judged twice, the later writing counts. What cannot be
// read is left out and named in the report. An error of fn ends the walk. The
// Step is fn's until it returns. to = 0 is no limit. A day of which nothing is
// kept has no steps.
func ReadDay(dir, day string, from, to sensors.Instant, fn func(*Step) error) (Report, error) {
	var report Report
	content, err := os.ReadFile(filepath.Join(dir, FileOf(day)))
	if errors.Is(err, os.ErrNotExist) {
		return report, nil
	}
	if err != nil {
		return report, fmt.Errorf("read what was judged: %w", err)
	}
	if !bytes.HasPrefix(content, []byte(head)) && !bytes.HasPrefix(content, []byte(head1)) {
		if bytes.HasPrefix(content, []byte("sockline judged ")) {
			return report, fmt.Errorf("%s %w", FileOf(day), ErrNewer)
		}
		report.Faults = append(report.Faults, FileOf(day)+": its first line is damaged")
	}
	all, faults := frames(content)
	for _, f := range faults {
		report.Faults = append(report.Faults, FileOf(day)+": "+f)
	}
	sources, faults := sourcesOf(all)
	report.Faults = append(report.Faults, faults...)
	for _, s := range sources {
		if s.start.Add(BlockSteps*time.Second) <= from || to != 0 && s.start >= to {
			continue
		}
		b, err := decodeBlock(s.context, s.body)
		if err != nil {
			report.Faults = append(report.Faults, fmt.Sprintf("%s: the block of %s %v", FileOf(day), s.start, err))
			continue
		}
		if err := b.each(s.until, from, to, &report, fn); err != nil {
			return report, err
		}
	}
	return report, nil
}

// sourcesOf joins the steps with their contexts, in order of time.
func sourcesOf(all []frame) (sources []source, faults []string) {
	contexts := map[uint32]*Context{}
	unknown := 0
	for _, f := range all {
		switch {
		case f.kind == kindContext:
			c := &Context{}
			if err := json.Unmarshal(f.body, c); err == nil {
				contexts[checksum(f.body)] = c
			}
		case f.kind == kindSteps && len(f.body) > 4:
			c := contexts[binary.BigEndian.Uint32(f.body)]
			if c == nil {
				unknown++
				continue
			}
			r := packed.Reader{Left: f.body[4:]}
			s := source{context: c, start: sensors.Instant(r.Varint()), body: f.body[4:]}
			for i := range sources { // what is written later counts
				if o := &sources[i]; o.start < s.start && (o.until == 0 || s.start < o.until) {
					o.until = s.start
				} else if o.start == s.start {
					o.until = o.start
				}
			}
			sources = append(sources, s)
		}
	}
	if unknown > 0 {
		faults = append(faults, fmt.Sprintf("%d blocks stand without what they were judged by and are left out", unknown))
	}
	slices.SortStableFunc(sources, func(a, b source) int { return int(min(max(a.start-b.start, -1), 1)) })
	return sources, faults
}

// each shows the steps of a block that are asked for.
func (b *block) each(until, from, to sensors.Instant, report *Report, fn func(*Step) error) error {
	next := 0 // of steeps, which stand in the order of their rows
	for n := range b.rows {
		first := next
		for next < len(b.steeps) && b.steeps[next].row == n {
			next++
		}
		at := b.at(n)
		if at < from || to != 0 && at >= to || until != 0 && at >= until {
			continue
		}
		report.Steps++
		if err := fn(&Step{At: at, Context: b.context, block: b, row: &b.rows[n], steeps: b.steeps[first:next]}); err != nil {
			return err
		}
	}
	return nil
}
