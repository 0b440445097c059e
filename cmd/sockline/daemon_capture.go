package main

import (
	"context"
	"errors"
	"fmt"
	"sync/atomic"

	"github.com/rs/zerolog"

	"sockline/sensors"
	"sockline/sensors/feed"
)

// captureQueue is how many messages may wait for a slow disk: over three
// minutes of 40 masts at 8 Hz.
const captureQueue = 65536

var errCaptureBehind = errors.New("the disk of the capture does not keep up")

// capturer writes the messages of the loop to a capture file from a goroutine
// of its own: the loop never waits for a disk. When it breaks off, everything
// else goes on.
type capturer struct {
	file   *feed.CaptureWriter
	queue  chan sensors.Message
	flush  chan struct{}
	done   chan struct{}
	broken atomic.Pointer[error]
	log    zerolog.Logger
}

func startCapture(path, airfield string, log zerolog.Logger) (*capturer, error) {
	w, err := feed.CreateCapture(path, airfield)
	if err != nil {
		return nil, err
	}
	c := &capturer{
		file: w, queue: make(chan sensors.Message, captureQueue), flush: make(chan struct{}, 1),
		done: make(chan struct{}), log: log,
	}
	go c.run()
	return c, nil
}

func (c *capturer) run() {
	defer close(c.done)
	for {
		select {
		case m, more := <-c.queue:
			if !more {
				return
			}
			c.note(c.file.Write(m))
		case <-c.flush:
			c.note(c.file.Flush())
		}
	}
}

// note keeps the first error.
func (c *capturer) note(err error) {
	if err != nil && c.broken.CompareAndSwap(nil, &err) {
		c.log.Error().Err(err).Msg("the capture is broken off; everything else goes on")
	}
}

// take queues a message. A capture with a hole would replay to something that
// never was, so a full queue breaks it off.
func (c *capturer) take(m sensors.Message) {
	if c.broken.Load() != nil {
		return
	}
	select {
	case c.queue <- m:
	default:
		c.note(errCaptureBehind)
	}
}

// sync asks for what is written to reach the file.
func (c *capturer) sync() {
	select {
	case c.flush <- struct{}{}:
	default:
	}
}

// problem is why the capture is broken off, empty if it is not.
func (c *capturer) problem() string {
	if err := c.broken.Load(); err != nil {
		return (*err).Error()
	}
	return ""
}

// close writes what is queued and, unless the capture is broken off, the end
// mark. Nothing is taken any more by then.
func (c *capturer) close(ctx context.Context, end sensors.Instant) error {
	close(c.queue)
	select {
	case <-c.done:
	case <-ctx.Done():
		return fmt.Errorf("the capture is not all written: %w", context.Cause(ctx))
	}
	if c.broken.Load() != nil {
		end = 0
	}
	return c.file.Close(end)
}
