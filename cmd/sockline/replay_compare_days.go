package main

import (
	"errors"
	"fmt"
	"runtime"
	"sync"
	"time"

	"sockline/alerting/lifecycle"
	"sockline/alerting/review"
	"sockline/alerting/wording"
	"sockline/sensors"
)

// analyseDays goes through the readings of days, as many at once as there are
// processors. Each day is warmed up from two hours before it, and ends when
// none of its alerts is open.
func (c *comparison) analyseDays(days []string) ([]review.Life, error) {
	type outcome struct {
		lives []review.Life
		steps int
		err   error
	}
	found := make([]outcome, len(days))
	var (
		wg   sync.WaitGroup
		mu   sync.Mutex
		next int
		done int
	)
	for range min(runtime.GOMAXPROCS(0), len(days)) {
		wg.Go(func() {
			for {
				mu.Lock()
				i := next
				next++
				c.bar.draw(func() float64 { return float64(done) / float64(len(days)) })
				mu.Unlock()
				if i >= len(days) {
					return
				}
				o := &found[i]
				o.lives, o.steps, o.err = c.analyseDay(days[i])
				mu.Lock()
				done++
				mu.Unlock()
			}
		})
	}
	wg.Wait()
	var lives []review.Life
	for i, o := range found {
		if o.err != nil {
			return nil, fmt.Errorf("analyse %s: %w", days[i], o.err)
		}
		c.result.Steps += o.steps
		lives = append(lives, o.lives...)
	}
	return lives, nil
}

func (c *comparison) analyseDay(day string) ([]review.Life, int, error) {
	begin := max(dayStart(day), c.from)
	end := min(dayStart(day).Add(24*time.Hour), c.to)
	lives := review.NewLives()
	open := map[string]bool{}
	r, err := newQuietReplayer(c.ctx, c.p, c.cfg, c.exercise, func(n wording.Notice) error {
		a := n.Alert()
		at := a.Opened
		if at >= begin && at < end {
			lives.Take(&a)
			open[a.ID] = true
			if a.State == lifecycle.Closed {
				delete(open, a.ID)
			}
		}
		return nil
	})
	if err != nil {
		return nil, 0, err
	}
	r.from, r.cold, r.past = begin, true, &c.past
	r.over = func(t sensors.Instant) bool { return t >= end && len(open) == 0 }
	if err := r.store(c.store); err != nil && !errors.Is(err, errReplayed) {
		return nil, 0, err
	}
	return lives.OpenedIn(begin, end), r.steps, nil
}
