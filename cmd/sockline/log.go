package main

import (
	"bytes"
	"fmt"
	"io"
	"sync/atomic"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/rs/zerolog"
)

// How much of the log waits for its reader at the most.
const (
	mostLogLines = 1024
	mostLogBytes = 1 << 20
)

// logPatience is how long the end of the program waits for the reader.
const logPatience = 2 * time.Second

// logQueue stands between what logs and standard error. A pipe whose reader
// has stopped takes nothing once it is full, and a write to it never comes
// back: the lines wait here instead, and those that find no room are counted.
// It holds to the oldest lines, in which the cause of a trouble stands; the
// reader of a log sees where the gap is.
type logQueue struct {
	lines   chan []byte
	bytes   atomic.Int64 // of the lines that wait
	dropped atomic.Uint64
	stop    chan struct{}
	done    chan struct{}
}

// newLogQueue passes lines on to out, which is never closed.
func newLogQueue(out io.Writer) *logQueue {
	q := &logQueue{lines: make(chan []byte, mostLogLines), stop: make(chan struct{}), done: make(chan struct{})}
	go q.pass(out)
	return q
}

// Write takes one line and never waits.
func (q *logQueue) Write(line []byte) (int, error) {
	n := int64(len(line))
	if q.bytes.Add(n) <= mostLogBytes {
		select {
		case q.lines <- bytes.Clone(line):
			return len(line), nil
		default:
		}
	}
	q.bytes.Add(-n)
	q.dropped.Add(1)
	return len(line), nil
}

// pass writes what comes, and after it how much did not.
func (q *logQueue) pass(out io.Writer) {
	defer close(q.done)
	log := zerolog.New(out).With().Timestamp().Logger()
	told, since := uint64(0), 0
	write := func(line []byte) {
		_, _ = out.Write(line) // there is nowhere else to say it
		q.bytes.Add(-int64(len(line)))
		// Once those that had room are through, or under a steady flood after as
		// many lines as that: not with every line of it.
		since++
		if n := q.dropped.Load() - told; n > 0 && (len(q.lines) == 0 || since > mostLogLines) {
			told, since = told+n, 0
			log.Warn().Uint64("lines", n).Msg(droppedWords(n))
		}
	}
	for {
		select {
		case line := <-q.lines:
			write(line)
		case <-q.stop:
			for {
				select {
				case line := <-q.lines:
					write(line)
				default:
					return
				}
			}
		}
	}
}

func droppedWords(n uint64) string {
	if n == 1 {
		return "1 line of the log was dropped: nobody read it in time"
	}
	return fmt.Sprintf("%d lines of the log were dropped: nobody read them in time", n)
}

// flush writes what waits, and reports whether the reader took it in time. It
// is called once; what is logged later is not written.
func (q *logQueue) flush(patience time.Duration) bool {
	close(q.stop)
	enough := time.NewTimer(patience)
	defer enough.Stop()
	select {
	case <-q.done:
		return true
	case <-enough.C:
		return false
	}
}

// measure shows how the log goes; a program that logs elsewhere has no queue,
// and the same series.
func (q *logQueue) measure(registry *prometheus.Registry) {
	registry.MustRegister(
		prometheus.NewGaugeFunc(prometheus.GaugeOpts{Name: "sockline_log_waiting_lines", Help: "Lines of the log that nobody has read yet."}, func() float64 {
			if q == nil {
				return 0
			}
			return float64(len(q.lines))
		}),
		prometheus.NewCounterFunc(prometheus.CounterOpts{Name: "sockline_log_dropped_lines_total", Help: "Lines of the log that were dropped because nobody read them."}, func() float64 {
			if q == nil {
				return 0
			}
			return float64(q.dropped.Load())
		}))
}
