package cap

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"github.com/rs/zerolog"
)

const (
	// defaultMaxFiles is how many files may lie in a spool: whoever reads them
	// takes them away, so more means that nobody reads.
	defaultMaxFiles = 10000
	// maxWaiting bounds the messages that wait for a spool that takes none.
	maxWaiting = 1024
)

// SpoolOptions says where a Spool writes. Directory and Tick are required.
type SpoolOptions struct {
	Directory string // made when it is not there
	// Tick is when a spool that took nothing is tried again; about once a
	// second.
	Tick     <-chan time.Time
	Log      zerolog.Logger
	MaxFiles int // that may lie there; 0 for the default
}

// SpoolState is what a spool can say of itself.
type SpoolState struct {
	Waiting int    // messages not yet written
	Written uint64 // files
	Failed  uint64 // tries to write that failed
	Lost    uint64 // messages given up because too many waited
	Problem string // why nothing can be written now; empty while it can
}

// Spool writes each message into a file of its own, whole or not at all: a
// reader who takes what ends in .xml never sees half a message.
type Spool struct {
	opts SpoolOptions
	wake chan struct{}

	mu      sync.Mutex
	waiting []Message
	state   SpoolState
}

// NewSpool makes a spool. It writes once Run runs.
func NewSpool(o SpoolOptions) (*Spool, error) {
	if o.Directory == "" || o.Tick == nil {
		return nil, errors.New("a spool needs a directory and ticks")
	}
	if o.MaxFiles <= 0 {
		o.MaxFiles = defaultMaxFiles
	}
	return &Spool{opts: o, wake: make(chan struct{}, 1)}, nil
}

// Offer hands a message over and never waits for the disk.
func (s *Spool) Offer(m Message) {
	s.mu.Lock()
	defer s.mu.Unlock()
	if len(s.waiting) >= maxWaiting {
		s.giveUpOne()
	}
	s.waiting = append(s.waiting, m)
	s.state.Waiting = len(s.waiting)
	select {
	case s.wake <- struct{}{}:
	default:
	}
}

// giveUpOne drops the oldest update, else the oldest message.
func (s *Spool) giveUpOne() {
	victim := 0
	for i, m := range s.waiting {
		if !m.Opening && !m.Closing {
			victim = i
			break
		}
	}
	s.waiting = append(s.waiting[:victim], s.waiting[victim+1:]...)
	s.state.Lost++
}

// State is what the spool can say of itself now.
func (s *Spool) State() SpoolState {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.state
}

// Run writes until ctx is done, and then what still waits, once.
func (s *Spool) Run(ctx context.Context) {
	s.note(s.probe()) // a spool that cannot be written shows at the start
	for {
		select {
		case <-ctx.Done():
			s.flush()
			return
		case <-s.wake:
			if s.State().Problem == "" {
				s.flush()
			}
		case <-s.opts.Tick:
			s.flush()
		}
	}
}

// flush writes what waits, in order, up to the first that fails.
func (s *Spool) flush() {
	for {
		s.mu.Lock()
		if len(s.waiting) == 0 {
			broken := s.state.Problem != ""
			s.mu.Unlock()
			if broken {
				s.note(s.probe())
			}
			return
		}
		m := s.waiting[0]
		s.mu.Unlock()
		err := s.write(m)
		s.note(err)
		if err != nil {
			return
		}
		s.mu.Lock()
		// Only this goroutine takes from the front, but Offer may have given
		// the front one up meanwhile.
		if len(s.waiting) > 0 && s.waiting[0].ID == m.ID {
			s.waiting = s.waiting[1:]
		}
		s.state.Written++
		s.state.Waiting = len(s.waiting)
		s.mu.Unlock()
	}
}

// note keeps and logs whether the spool can be written; a change of that is
// one line.
func (s *Spool) note(err error) {
	s.mu.Lock()
	defer s.mu.Unlock()
	before := s.state.Problem
	s.state.Problem = ""
	if err != nil {
		s.state.Failed++
		s.state.Problem = err.Error()
	}
	switch {
	case before == "" && err != nil:
		s.opts.Log.Error().Err(err).Msg("standard alert messages cannot be written to the spool; they wait, and it is tried again")
	case before != "" && err == nil:
		s.opts.Log.Info().Str("directory", s.opts.Directory).Msg("the spool can be written again")
	}
}

// probe tries what write needs.
func (s *Spool) probe() error {
	if err := os.MkdirAll(s.opts.Directory, 0o750); err != nil {
		return fmt.Errorf("make the spool: %w: give its directory to the user that runs this program", err)
	}
	f, err := os.CreateTemp(s.opts.Directory, temporary)
	if err != nil {
		return fmt.Errorf("write to the spool: %w: give its directory to the user that runs this program", err)
	}
	return errors.Join(f.Close(), os.Remove(f.Name()), s.room())
}

// temporary is the name of a file that is not whole yet; the star is chance.
const temporary = ".being-written-*"

// room fails when too many files lie in the spool.
func (s *Spool) room() error {
	entries, err := os.ReadDir(s.opts.Directory)
	if err != nil {
		return fmt.Errorf("look into the spool: %w", err)
	}
	n := 0
	for _, e := range entries {
		if strings.HasSuffix(e.Name(), ".xml") {
			n++
		}
	}
	if n >= s.opts.MaxFiles {
		return fmt.Errorf("%d files lie in the spool %s: nobody takes them away: start what reads them, or delete them", n, s.opts.Directory)
	}
	return nil
}

// write makes a file under a temporary name, makes it durable, gives it its
// name, and makes that durable, too.
func (s *Spool) write(m Message) (err error) {
	if err := os.MkdirAll(s.opts.Directory, 0o750); err != nil {
		return fmt.Errorf("make the spool: %w", err)
	}
	if err := s.room(); err != nil {
		return err
	}
	f, err := os.CreateTemp(s.opts.Directory, temporary)
	if err != nil {
		return fmt.Errorf("write to the spool: %w", err)
	}
	defer func() {
		if err != nil {
			if e := os.Remove(f.Name()); e != nil && !errors.Is(e, fs.ErrNotExist) {
				err = errors.Join(err, e)
			}
		}
	}()
	_, err = f.Write(m.XML)
	if err == nil {
		err = f.Chmod(0o640) // for the group that reads it
	}
	if err == nil {
		err = f.Sync()
	}
	if err = errors.Join(err, f.Close()); err != nil {
		return fmt.Errorf("write to the spool: %w", err)
	}
	if err := os.Rename(f.Name(), filepath.Join(s.opts.Directory, m.ID+".xml")); err != nil {
		return fmt.Errorf("name a file of the spool: %w", err)
	}
	d, err := os.Open(s.opts.Directory)
	if err != nil {
		return fmt.Errorf("make the spool durable: %w", err)
	}
	return errors.Join(d.Sync(), d.Close())
}
