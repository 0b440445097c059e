package feed

import (
	"bufio"
	"encoding/base64"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"unicode/utf8"

	"github.com/klauspost/compress/gzip"
	"github.com/klauspost/compress/zstd"

	"sockline/sensors"
)

// captureVersion is the version in the first line of a capture.
const captureVersion = 1

// zstdWindow bounds the memory of the zstd writer; captures are repetitive
// within a few seconds already.
const zstdWindow = 1 << 20

// CaptureWriter writes messages to a capture file, one a line. It is safe for
// concurrent use. The first error stays: every later call returns it.
type CaptureWriter struct {
	path string

	mu    sync.Mutex
	file  *os.File
	pack  packer // nil for plain text
	out   *bufio.Writer
	line  []byte // reused
	dirty bool   // something was written since the last flush
	err   error
}

// packer is what the compressors have in common.
type packer interface {
	io.WriteCloser
	Flush() error
}

// CreateCapture starts a capture file; names ending .gz or .zst are
// compressed. It refuses a file that exists: a capture is evidence.
func CreateCapture(path, airfield string) (*CaptureWriter, error) {
	file, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if errors.Is(err, os.ErrExist) {
		return nil, fmt.Errorf("create capture %s: there is such a file already: move it away or choose another name", path)
	}
	if err != nil {
		return nil, fmt.Errorf("create capture: %w", err)
	}
	w := &CaptureWriter{path: path, file: file}
	switch filepath.Ext(path) {
	case ".gz":
		w.pack = gzip.NewWriter(file)
		w.out = bufio.NewWriter(w.pack)
	case ".zst":
		// One goroutine less, and blocks leave in the order of the flushes.
		w.pack, err = zstd.NewWriter(file, zstd.WithEncoderConcurrency(1), zstd.WithWindowSize(zstdWindow))
		if err != nil {
			return nil, errors.Join(fmt.Errorf("create capture %s: %w", path, err), file.Close())
		}
		w.out = bufio.NewWriter(w.pack)
	default:
		w.out = bufio.NewWriter(file)
	}
	w.line = fmt.Appendf(w.line, `{"capture":%d,"airfield":`, captureVersion)
	w.line = appendString(w.line, airfield)
	w.put(append(w.line, "}\n"...))
	if err := w.Flush(); err != nil {
		return nil, errors.Join(err, file.Close())
	}
	return w, nil
}

// Write adds one message. It is on disk, or with the operating system at
// least, after the next Flush.
func (w *CaptureWriter) Write(m sensors.Message) error {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.put(appendMessage(w.line[:0], m))
	return w.err
}

// Flush hands all lines so far to the operating system, so that after an
// abrupt end of the program the file can be read up to here.
func (w *CaptureWriter) Flush() error {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.flush()
	return w.err
}

// Close writes the last line, which says that everything up to end was
// captured, and closes the file. A zero end leaves the line out.
func (w *CaptureWriter) Close(end sensors.Instant) error {
	w.mu.Lock()
	defer w.mu.Unlock()
	if w.file == nil {
		return w.err
	}
	if end != 0 {
		w.put(fmt.Appendf(w.line[:0], "{\"end\":\"%s\"}\n", end))
	}
	w.flush()
	if w.pack != nil {
		w.fail(w.pack.Close())
	}
	w.fail(w.file.Close())
	w.file = nil
	failed := w.err
	if w.err == nil {
		w.err = fmt.Errorf("capture %s: it is closed", w.path)
	}
	return failed
}

// put writes a line and keeps its memory for the next.
func (w *CaptureWriter) put(line []byte) {
	w.line = line
	if w.err != nil {
		return
	}
	_, err := w.out.Write(line)
	w.fail(err)
	w.dirty = true
}

func (w *CaptureWriter) flush() {
	if w.err != nil || !w.dirty {
		return // an idle second adds no empty block to a compressed file
	}
	w.dirty = false
	w.fail(w.out.Flush())
	if w.pack != nil && w.err == nil {
		w.fail(w.pack.Flush())
	}
}

func (w *CaptureWriter) fail(err error) {
	if err != nil && w.err == nil {
		w.err = fmt.Errorf("write capture %s: %w", w.path, err)
	}
}

// appendMessage appends the line of a message.
func appendMessage(b []byte, m sensors.Message) []byte {
	b = append(b, `{"received":"`...)
	b = m.Received.Time().AppendFormat(b, "2006-01-02T15:04:05.000Z")
	b = append(b, `","topic":`...)
	b = appendString(b, m.Topic)
	if utf8.Valid(m.Payload) {
		b = append(b, `,"payload":`...)
		b = appendString(b, m.Payload)
	} else {
		b = append(b, `,"payload_b64":"`...)
		b = base64.StdEncoding.AppendEncode(b, m.Payload)
		b = append(b, '"')
	}
	if m.Retained {
		b = append(b, `,"retained":true`...)
	}
	return append(b, "}\n"...)
}

// appendString appends a JSON string (RFC 8259 section 7): only what must be
// escaped is. What is not UTF-8 (possible in a topic only) is replaced, since
// no configured topic can be equal to it anyway.
func appendString[T string | []byte](b []byte, s T) []byte {
	const hex = "0123456789abcdef"
	b = append(b, '"')
	start := 0
	for i := 0; i < len(s); i++ {
		c := s[i]
		if c >= ' ' && c != '"' && c != '\\' {
			continue
		}
		b = append(b, s[start:i]...)
		start = i + 1
		switch c {
		case '"', '\\':
			b = append(b, '\\', c)
		case '\n':
			b = append(b, `\n`...)
		case '\r':
			b = append(b, `\r`...)
		case '\t':
			b = append(b, `\t`...)
		default:
			b = append(b, '\\', 'u', '0', '0', hex[c>>4], hex[c&15])
		}
	}
	if rest := string(s[start:]); utf8.ValidString(rest) {
		b = append(b, rest...)
	} else {
		b = append(b, strings.ToValidUTF8(rest, "\uFFFD")...)
	}
	return append(b, '"')
}
