package survey

import (
	"context"
	"fmt"
	"sync"
)

// Record is what is kept of one task: an episode or a place.
type Record struct {
	Episode *Episode `json:"episode,omitempty"`
	Place   *Place   `json:"place,omitempty"`
}

// Index is the number of the task.
func (r Record) Index() int {
	if r.Episode != nil {
		return r.Episode.Index
	}
	if r.Place != nil {
		return r.Place.Index
	}
	return -1
}

// Tasks is how many a plan has over this network.
func (p Plan) Tasks(n *Network) int { return p.Episodes + len(n.places(p)) }

// Run plays whatever of the plan is not done yet, with so many workers, and
// hands each record to keep, from one goroutine and in no fixed order. A record
// depends on its number and the plan alone. When ctx ends, or keep fails, the
// tasks under way are finished, handed over, and Run returns the reason.
func Run(ctx context.Context, n *Network, p Plan, jobs int, done func(index int) bool, keep func(Record) error) error {
	if err := p.Check(n); err != nil {
		return err
	}
	if jobs < 1 {
		return fmt.Errorf("%d workers: choose 1 or more", jobs)
	}
	places := n.places(p)
	ctx, stop := context.WithCancelCause(ctx)
	defer stop(nil)
	next, records := make(chan int), make(chan Record)
	go func() {
		defer close(next)
		for i := range p.Episodes + len(places) {
			if done(i) {
				continue
			}
			select {
			case next <- i:
			case <-ctx.Done():
				return
			}
		}
	}()
	var workers sync.WaitGroup
	for range jobs {
		workers.Go(func() {
			player := newPlayer(n, p)
			for i := range next {
				r, err := player.task(i, p, places)
				if err != nil {
					stop(fmt.Errorf("task %d of the survey: %w", i, err))
					return
				}
				records <- r
			}
		})
	}
	go func() { workers.Wait(); close(records) }()
	failed := false
	for r := range records {
		if failed {
			continue
		}
		if err := keep(r); err != nil {
			stop(err)
			failed = true
		}
	}
	if ctx.Err() != nil {
		return context.Cause(ctx)
	}
	return nil
}

// task plays one episode or place.
func (p *player) task(i int, plan Plan, places []Place) (r Record, err error) {
	if i < plan.Episodes {
		e, err := p.play(i)
		return Record{Episode: &e}, err
	}
	place, err := p.put(places[i-plan.Episodes], plan.Seed)
	return Record{Place: &place}, err
}
