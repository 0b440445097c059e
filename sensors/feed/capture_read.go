package feed

import (
	"bufio"
	"bytes"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"

	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/zstd"

	"sockline/sensors"
)

const (
	// captureBuffer is the read buffer; a line within it is parsed in place.
	captureBuffer = 256 << 10
	// maxLine bounds one line: a payload of MaxPayload, each byte escaped to
	// six, has room many times over.
	maxLine = 16 << 20
	// headerPeek is how much of a file is looked at when it is opened.
	headerPeek = 4 << 10
	// maxTopics bounds the topics whose strings are kept for the next message
	// on the same topic.
	maxTopics = 4096
)

// CaptureReader reads the messages of a capture file in order.
type CaptureReader struct {
	path   string
	file   io.Closer // nil when not ours
	unpack func()    // ends the decompressor
	in     *bufio.Reader
	long   []byte // a line that did not fit the buffer
	line   int    // number of the line last read
	parser lineParser
	topics map[string]string

	airfield  string
	last      sensors.Instant
	started   bool // last is set
	end       sensors.Instant
	ended     bool // an end line was read
	clamped   int
	truncated bool
	err       error // what Next returns from now on
}

// OpenCapture opens a capture file; names ending .gz or .zst are decompressed.
func OpenCapture(path string) (*CaptureReader, error) {
	file, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("open capture: %w", err)
	}
	r, err := newCaptureReader(path, file)
	if err != nil {
		return nil, errors.Join(err, file.Close())
	}
	r.file = file
	// The first line is read now, so that Airfield is known before the first
	// message. A message in its place waits in the buffer.
	if err := r.readHeader(); err != nil {
		return nil, errors.Join(err, r.Close())
	}
	return r, nil
}

// newCaptureReader reads from src; the ending of path says how it is packed.
func newCaptureReader(path string, src io.Reader) (*CaptureReader, error) {
	r := &CaptureReader{path: path, unpack: func() {}, topics: make(map[string]string)}
	switch filepath.Ext(path) {
	case ".gz":
		z, err := gzip.NewReader(src)
		switch {
		case err == nil:
			src, r.unpack = z, func() { z.Close() }
		case errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF):
			src, r.truncated = bytes.NewReader(nil), true // cut within the first ten bytes
		default:
			return nil, fmt.Errorf("open capture %s: %w: the name says gzip: rename it or take another copy", path, err)
		}
	case ".zst":
		z, err := zstd.NewReader(src, zstd.WithDecoderConcurrency(1))
		if err != nil {
			return nil, fmt.Errorf("open capture %s: %w", path, err)
		}
		src, r.unpack = z, z.Close
	}
	r.in = bufio.NewReaderSize(src, captureBuffer)
	return r, nil
}

// Airfield is the airfield named in the first line, empty if there is none.
func (r *CaptureReader) Airfield() string { return r.airfield }

// End is the moment up to which everything was captured, if the file says so.
// It is known after Next returned io.EOF.
func (r *CaptureReader) End() (end sensors.Instant, known bool) { return r.end, r.ended }

// Truncated reports whether the file was found cut off within a line or a
// compressed block. All messages before the cut are delivered.
func (r *CaptureReader) Truncated() bool { return r.truncated }

// Clamped counts the messages stamped earlier than the one before, which were
// given that one's stamp: arrival stamps do not go back.
func (r *CaptureReader) Clamped() int { return r.clamped }

// Line is the number of the line last read, from 1.
func (r *CaptureReader) Line() int { return r.line }

// Close closes the file.
func (r *CaptureReader) Close() error {
	r.unpack()
	if r.file == nil {
		return nil
	}
	if err := r.file.Close(); err != nil {
		return fmt.Errorf("close capture: %w", err)
	}
	return nil
}

// Next reads the next message into m, whose payload memory is used again; give
// a fresh Message to keep it. At the end it returns io.EOF, also where the
// file was cut off (see Truncated). Other errors name file and line and stay.
func (r *CaptureReader) Next(m *sensors.Message) error {
	for r.err == nil {
		line, whole, err := r.readLine()
		if err != nil {
			r.err = err
			break
		}
		if len(line) == 0 {
			continue // a blank line
		}
		kind, err := r.parser.parse(line, m.Payload[:0])
		if err != nil {
			if r.err = r.malformed(err); r.cutOff(line, whole) {
				r.truncated = true
				r.err = io.EOF
			}
			break
		}
		if r.err = r.order(kind); r.err == nil && kind == lineMessage {
			r.fill(m)
			return nil
		}
	}
	return r.err
}

// readHeader looks at the first line for the airfield. It only peeks: Next
// reads that line again, and reports what is wrong with it.
func (r *CaptureReader) readHeader() error {
	first, _ := r.in.Peek(headerPeek) // an error comes back with the next read
	switch {
	case bytes.HasPrefix(first, []byte{0x1f, 0x8b}): // RFC 1952 section 2.3.1
		return fmt.Errorf("capture %s is compressed with gzip: let its name end in .gz", r.path)
	case bytes.HasPrefix(first, []byte{0x28, 0xb5, 0x2f, 0xfd}): // RFC 8878 section 3.1.1
		return fmt.Errorf("capture %s is compressed with zstd: let its name end in .zst", r.path)
	}
	line, _, _ := bytes.Cut(first, []byte("\n"))
	var p lineParser
	if kind, err := p.parse(bytes.TrimSpace(line), nil); err == nil && kind == lineHeader {
		r.airfield = p.airfield
	}
	return nil
}

// order checks that headers and end lines are where they belong and handles them.
func (r *CaptureReader) order(kind lineKind) error {
	switch {
	case r.ended:
		return r.malformed(errors.New("there is a line after the end line: keep each capture in a file of its own"))
	case kind == lineHeader && r.line > 1:
		return r.malformed(errors.New("there is a second header: keep each capture in a file of its own"))
	case kind == lineHeader:
		r.airfield = r.parser.airfield
	case kind == lineEnd:
		r.end, r.ended = r.parser.end, true
	}
	return nil
}

// fill makes the message of the line just parsed.
func (r *CaptureReader) fill(m *sensors.Message) {
	m.Payload = r.parser.payload
	m.Retained = r.parser.retained
	m.Received = r.parser.received
	if r.started && m.Received < r.last {
		m.Received = r.last
		r.clamped++
	}
	r.last, r.started = m.Received, true
	topic, ok := r.topics[string(r.parser.topic)] // does not allocate
	if !ok {
		topic = string(r.parser.topic)
		if len(r.topics) < maxTopics {
			r.topics[topic] = topic
		}
	}
	m.Topic = topic
}

// readLine reads one line without its end; it is valid until the next call.
// whole is false for a last line without a newline.
func (r *CaptureReader) readLine() (line []byte, whole bool, err error) {
	r.long = r.long[:0]
	for {
		part, err := r.in.ReadSlice('\n')
		if err == nil && len(r.long) == 0 {
			r.line++
			return trimLine(part), true, nil
		}
		if len(r.long)+len(part) > maxLine {
			r.line++
			return nil, false, r.malformed(fmt.Errorf("the line is longer than %d MiB: this is not a capture", maxLine>>20))
		}
		r.long = append(r.long, part...)
		switch {
		case err == nil:
			r.line++
			return trimLine(r.long), true, nil
		case errors.Is(err, bufio.ErrBufferFull):
			continue
		case errors.Is(err, io.ErrUnexpectedEOF):
			r.truncated = true // a compressed file without its end
		case !errors.Is(err, io.EOF):
			r.line++
			return nil, false, r.malformed(fmt.Errorf("%w: take another copy", err))
		}
		if len(r.long) == 0 {
			return nil, false, io.EOF
		}
		r.line++
		return trimLine(r.long), false, nil
	}
}

// cutOff reports whether a line that cannot be parsed is the torn end of a
// capture, and not something else altogether.
func (r *CaptureReader) cutOff(line []byte, whole bool) bool {
	return !whole && line[0] == '{'
}

func (r *CaptureReader) malformed(err error) error {
	return fmt.Errorf("capture %s, line %d: %w", r.path, r.line, err)
}

func trimLine(line []byte) []byte { return bytes.Trim(line, " \t\r\n") }
