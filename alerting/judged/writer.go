package judged

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"sync"

	"sockline/sensors"
)

// waiting is how many blocks may wait for the disk: more than an hour.
const waiting = 8

// Writer writes what is taken into the day files, beside whoever evaluates: it
// never makes its caller wait. When the disk does not take a block, the block
// is given up and counted; nothing but a "what if" ever misses it.
type Writer struct {
	dir      string
	fault    func(error) // told of each block that is given up
	recorder *Recorder   // of the evaluating goroutine

	queue chan *block
	done  chan struct{}

	mu    sync.Mutex
	state State

	// Of the writing goroutine.
	written map[string]uint32 // by file: the context it ends with
}

// State is how the writing goes.
type State struct {
	Blocks uint64 // written
	Bytes  uint64
	Lost   uint64 // given up
	Reason string // why the last was; empty after one that was written
}

// NewWriter begins to write into the directory, which exists once the history
// does. fault may be nil. It must be closed.
func NewWriter(dir string, c Context, fault func(error)) *Writer {
	w := &Writer{dir: dir, fault: fault, queue: make(chan *block, waiting), done: make(chan struct{}), written: map[string]uint32{}}
	if w.fault == nil {
		w.fault = func(error) {}
	}
	w.recorder = newRecorder(c, w.hand)
	go w.run()
	return w
}

// Take adds the step t: see Recorder.Take. One goroutine calls it, Follow and
// Close.
func (w *Writer) Take(t sensors.Instant, looks []Look) { w.recorder.Take(t, looks) }

// Follow puts another context in force after the last step taken.
func (w *Writer) Follow(c Context) { w.recorder.follow(c) }

// State is how the writing goes; any goroutine may ask.
func (w *Writer) State() State {
	w.mu.Lock()
	defer w.mu.Unlock()
	return w.state
}

// Close writes what is left. When ctx ends first, the rest is given up.
func (w *Writer) Close(ctx context.Context) error {
	w.recorder.Flush()
	close(w.queue)
	select {
	case <-w.done:
		return nil
	case <-ctx.Done():
		return fmt.Errorf("write the last judgements: %w", ctx.Err())
	}
}

func (w *Writer) hand(b *block) {
	select {
	case w.queue <- b:
	default:
		w.lost(errors.New("the disk is too slow for them"))
	}
}

func (w *Writer) lost(err error) {
	w.mu.Lock()
	w.state.Lost++
	w.state.Reason = err.Error()
	w.mu.Unlock()
	w.fault(fmt.Errorf("judgements of ten minutes are not kept: %w", err))
}

func (w *Writer) run() {
	defer close(w.done)
	for b := range w.queue {
		size, err := w.write(b)
		if err != nil {
			w.lost(err)
			continue
		}
		w.mu.Lock()
		w.state.Blocks++
		w.state.Bytes += uint64(size)
		w.state.Reason = ""
		w.mu.Unlock()
	}
}

// write appends a block to the file of its day and syncs it.
func (w *Writer) write(b *block) (size int, err error) {
	name := FileOf(DayOf(b.start))
	var out []byte
	about, err := b.context.encode()
	if err != nil {
		return 0, err
	}
	id := checksum(about)
	last, begun := w.written[name]
	if !begun || last != id {
		out = appendFrame(out, kindContext, about)
	}
	out = appendFrame(out, kindSteps, append(binary.BigEndian.AppendUint32(nil, id), b.encode()...))
	size, err = appendTo(filepath.Join(w.dir, name), out)
	delete(w.written, name)
	if err == nil {
		clear(w.written) // the days before are done with
		w.written[name] = id
	}
	return size, err
}

// appendTo appends to a file, which gets its first line when it is new, and that
// of this version when it was begun by an earlier one, whose blocks stay what
// they are. What was written of a part that failed is cut off again, as far as
// the disk lets.
func appendTo(path string, out []byte) (size int, err error) {
	f, err := os.OpenFile(path, os.O_RDWR|os.O_CREATE, 0o640)
	if err != nil {
		return 0, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	info, err := f.Stat()
	if err != nil {
		return 0, err
	}
	at := info.Size()
	if at < int64(len(head)) { // new, or cut short while it was made
		at, out = 0, append([]byte(head), out...)
	} else if err = renew(f); err != nil {
		return 0, err
	}
	if _, err = f.WriteAt(out, at); err == nil {
		err = f.Sync()
	}
	if err != nil {
		return 0, errors.Join(err, f.Truncate(at))
	}
	return len(out), nil
}

// renew gives a file of version 1 the first line of this version.
func renew(f *os.File) error {
	first := make([]byte, len(head1))
	if _, err := f.ReadAt(first, 0); err != nil || string(first) != head1 {
		return err
	}
	_, err := f.WriteAt([]byte(head), 0)
	return err
}
