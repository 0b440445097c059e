package main

import (
	"errors"
	"fmt"
	"io"
	"os"

	"sockline/sensors"
	"sockline/sensors/feed"
)

// capture replays a capture file. A replay from the middle runs through all
// that comes before, because only that says which alerts were open.
func (r *replayer) capture(path string) (err error) {
	c, err := feed.OpenCapture(path)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, c.Close()) }()
	if id := c.Airfield(); id != "" && id != r.cfg.Airfield.ID {
		r.note("the capture is of the airfield %q, the configuration describes %q", id, r.cfg.Airfield.ID)
	}
	r.share = captureShare(path, c)
	var m sensors.Message
	messages := 0
	for {
		err := c.Next(&m)
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return err
		}
		messages++
		if err := r.closeDue(m.Received); err != nil {
			return err
		}
		// What is wrong with a message is counted by the engine.
		if station, _, _ := r.engine.Receive(m); station < 0 {
			r.foreign++
		}
	}
	if c.Truncated() {
		r.note("the capture was cut off after %s; everything before is replayed", m.Received)
	}
	if n := c.Clamped(); n > 0 {
		r.note("%d messages were stamped earlier than the one before them and took its stamp", n)
	}
	if messages > 0 && r.foreign == uint64(messages) {
		return fmt.Errorf("none of the %d messages is on the topic of a configured station (the last one is on %q): is this the right configuration?",
			messages, m.Topic)
	}
	return r.captureEnd(c, m.Received, messages)
}

// captureEnd closes the steps after the last message: up to the end mark if
// there is one, else up to the last step that a message can belong to.
func (r *replayer) captureEnd(c *feed.CaptureReader, last sensors.Instant, messages int) error {
	if end, known := c.End(); known {
		return r.closeDue(end)
	}
	if messages == 0 {
		return nil
	}
	until := last.CeilSecond()
	if waiting, ok := r.engine.Waiting(); ok {
		until = max(until, waiting)
	}
	return r.closeDue(until.Add(r.engine.Lateness()) + 1)
}

// captureShare is how much of the file has been read, by lines of about the
// same length. Of a compressed file only its size is known: readings in SenML
// packed to an eighteenth (a day of eight masts, measured), so this is a guess.
func captureShare(path string, c *feed.CaptureReader) func() float64 {
	const line, packed = 240.0, 18.0
	info, err := os.Stat(path)
	if err != nil || info.Size() == 0 {
		return func() float64 { return 0 }
	}
	size := float64(info.Size())
	if isPacked(path) {
		size *= packed
	}
	return func() float64 { return min(float64(c.Line())*line/size, 0.99) }
}
