package history

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"
	"time"

	bolt "go.etcd.io/bbolt"
)

// secretPrefix begins the name of what is in no copy of the history: the
// signing key.
const secretPrefix = "signing."

// Snapshot shows fn a copy of each file of the history: the journal first, so
// that no record is in the copy without the readings up to its step, then the
// readings and what else lies beside them, files that were set aside as
// damaged too. Of days that want, asked with their name, turns down there are
// no files. Each is as it stood at one moment. fn calls content once, which
// writes size bytes. The Writer is not kept waiting by a slow fn: from a
// store that has one, each file is first copied beside itself.
func (s *Store) Snapshot(ctx context.Context, want func(day string) bool, fn func(name string, size int64, content func(io.Writer) error) error) error {
	if err := s.snapshotOf(journalName, fn); err != nil {
		return fmt.Errorf("copy %s: %w", journalName, err)
	}
	// Only now: a day may have begun since, and the journal knows of it.
	names, err := s.members()
	if err != nil {
		return err
	}
	for _, name := range names {
		if err := ctx.Err(); err != nil {
			return err
		}
		if day := dayIn(name); day != "" && !want(day) {
			continue
		}
		err := s.snapshotOf(name, fn)
		if errors.Is(err, os.ErrNotExist) {
			continue // deleted since the listing
		}
		if err != nil {
			return fmt.Errorf("copy %s: %w", name, err)
		}
	}
	return nil
}

// members are the files that belong to the history, but the journal.
func (s *Store) members() ([]string, error) {
	entries, err := os.ReadDir(s.dir)
	if err != nil {
		return nil, fmt.Errorf("list the history: %w", err)
	}
	var names []string
	for _, e := range entries {
		name := e.Name()
		ours := strings.HasPrefix(name, dayPrefix) || strings.HasPrefix(name, journalName) || strings.HasSuffix(name, ".dat")
		if name == journalName || !e.Type().IsRegular() || !ours || strings.HasSuffix(name, ".new") || strings.HasPrefix(name, secretPrefix) {
			continue
		}
		names = append(names, name)
	}
	return names, nil
}

// dayIn is the UTC day that stands in the name of a file; empty if none does.
func dayIn(name string) string {
	_, rest, _ := strings.Cut(name, "-")
	if len(rest) < len(dayLayoutGo) {
		return ""
	}
	if _, err := time.Parse(dayLayoutGo, rest[:len(dayLayoutGo)]); err != nil {
		return ""
	}
	return rest[:len(dayLayoutGo)]
}

func (s *Store) snapshotOf(name string, fn func(string, int64, func(io.Writer) error) error) error {
	l, known := layout{}, true
	switch day := strings.TrimSuffix(strings.TrimPrefix(name, dayPrefix), daySuffix); {
	case name == journalName:
		l = journalLayout()
	case dayName(day) == name && len(day) == len(dayLayoutGo):
		l = dayLayout()
	default:
		known = false
	}
	if known {
		err := s.copyDatabase(name, l, fn)
		if !isDamage(err) {
			return err
		}
		// What is damaged is copied as it is: to leave it out would hide it.
	}
	in, err := os.Open(filepath.Join(s.dir, name))
	if err != nil {
		return err
	}
	defer in.Close()
	return copyOpen(name, in, fn)
}

// copyOpen shows an open file as long as it is now.
func copyOpen(name string, in *os.File, fn func(string, int64, func(io.Writer) error) error) error {
	info, err := in.Stat()
	if err != nil {
		return err
	}
	return fn(name, info.Size(), func(w io.Writer) error {
		_, err := io.CopyN(w, in, info.Size())
		return err
	})
}

func (s *Store) copyDatabase(name string, l layout, fn func(string, int64, func(io.Writer) error) error) (err error) {
	f, err := s.shelf.acquire(name, l, false)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, s.shelf.release(f)) }()
	if s.readOnly { // nobody writes: the copy may take its time
		return f.view(func(tx *bolt.Tx) error {
			return fn(name, tx.Size(), func(w io.Writer) error {
				_, err := tx.WriteTo(w)
				return err
			})
		})
	}
	tmp, err := os.CreateTemp(s.dir, name+".*.new")
	if err != nil {
		return err
	}
	defer func() {
		err = errors.Join(err, tmp.Close(), os.Remove(tmp.Name()))
	}()
	err = f.view(func(tx *bolt.Tx) error {
		_, err := tx.WriteTo(tmp)
		return err
	})
	if err != nil {
		return err
	}
	if _, err := tmp.Seek(0, io.SeekStart); err != nil {
		return err
	}
	return copyOpen(name, tmp, fn)
}
