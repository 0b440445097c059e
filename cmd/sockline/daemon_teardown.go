package main

import (
	"context"
	"errors"
	"fmt"
)

// teardown is what has to be stopped, in the order in which it was started.
// Each resource adds its own step once it exists, so that a start that fails
// half way undoes exactly what it did.
type teardown struct{ steps []stopStep }

type stopStep struct {
	name string
	stop func(context.Context) error
}

// add puts a step on top. It gets a context that ends when the time for
// stopping is over.
func (t *teardown) add(name string, stop func(context.Context) error) {
	t.steps = append(t.steps, stopStep{name, stop})
}

// run stops everything, the last started first, however many steps fail. All
// share the time that ctx leaves.
func (t *teardown) run(ctx context.Context) error {
	var all []error
	for len(t.steps) > 0 {
		s := t.steps[len(t.steps)-1]
		t.steps = t.steps[:len(t.steps)-1]
		if err := s.stop(ctx); err != nil {
			all = append(all, fmt.Errorf("stop %s: %w", s.name, err))
		}
	}
	return errors.Join(all...)
}

// within calls what may take long, and gives up waiting for it with ctx.
func within(ctx context.Context, f func()) error {
	done := make(chan struct{})
	go func() {
		defer close(done)
		f()
	}()
	return ended(ctx, done)
}

// ended waits for done, or gives up with ctx.
func ended(ctx context.Context, done <-chan struct{}) error {
	select {
	case <-done:
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}
