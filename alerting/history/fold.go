package history

import (
	"bytes"
	"errors"
	"math"
	"slices"

	bolt "go.etcd.io/bbolt"

	"sockline/sensors"
)

// Steps are written as rows, one a second, so that of readings at most the
// last second is lost. When a window of them is over it is folded, in one
// transaction: the rows become a frame, which says what steps there were, and
// a block of columns for each station. What a block would not give back bit
// by bit stays in rows.

// foldWindow is the length of a window. Longer ones save little (a block of
// an hour takes 2 % less) and make a question about one minute dearer.
const foldWindow = 600 * sensors.Second

// folding is where the Writer stands with the windows of its day.
type folding struct {
	window sensors.Instant // how long each is
	next   sensors.Instant // where the first begins that may hold rows to fold
	last   sensors.Instant // the newest step
}

// beginFolding looks for rows that were left in a file.
func beginFolding(f *file, window sensors.Instant) (folding, error) {
	fold := folding{window: window, next: math.MaxInt64, last: math.MinInt64 / 2}
	err := f.view(func(tx *bolt.Tx) error {
		if k, _ := tx.Bucket([]byte(bucketSteps)).Cursor().First(); len(k) == 8 {
			fold.next = fold.begin(keyStep(k))
		}
		return nil
	})
	return fold, err
}

// begin is the begin of the window that a step is in.
func (f *folding) begin(step sensors.Instant) sensors.Instant {
	day := midnight(step)
	return day + (step-day)/f.window*f.window
}

func (f *folding) wrote(step sensors.Instant) {
	f.next, f.last = min(f.next, f.begin(step)), max(f.last, step)
}

// fold folds what is over, a few windows at a time. It takes some milliseconds
// a window, so records, for which somebody waits, are let past unless the rows
// pile up.
func (f *folding) fold(tx *bolt.Tx, quiet bool) error {
	for range 4 {
		due := f.last - f.window
		if !quiet {
			due -= 2 * f.window
		}
		if f.next > due {
			return nil
		}
		if err := f.foldNext(tx); err != nil {
			return err
		}
	}
	return nil
}

func (f *folding) foldNext(tx *bolt.Tx) error {
	end := f.next + f.window
	if err := foldRows(tx, f.next, end); err != nil {
		return err
	}
	f.next = math.MaxInt64
	if k, _ := tx.Bucket([]byte(bucketSteps)).Cursor().Seek(stepKey(end)); len(k) == 8 {
		f.next = f.begin(keyStep(k))
	}
	return nil
}

// foldRest folds what is left of a day that is over. Rows that a failure
// leaves are as good, and only longer.
func (w *Writer) foldRest() {
	for w.day != nil && w.folding.next != math.MaxInt64 {
		fold := w.folding
		if err := w.day.update(func(tx *bolt.Tx) error { return fold.foldNext(tx) }); err != nil {
			w.s.opts.Log.Error().Str("component", "history").Err(err).Msg("the last readings of a day stay as they were written")
			return
		}
		w.folding = fold
	}
}

// foldRows folds the rows of [from, to) in the transaction of a day's file.
// Rows that cannot be folded stay as they are: damaged ones, so that reading
// names them, and those that blocks do not give back.
func foldRows(tx *bolt.Tx, from, to sensors.Instant) error {
	rows, err := fetch(tx, stepKey(from), stepKey(to), math.MaxInt)
	if err != nil || len(rows) == 0 {
		return err
	}
	tables, err := readTables(tx)
	if err != nil {
		return err
	}
	var (
		steps  []Step
		lists  = map[sensors.Instant]uint64{} // number of the list of each step
		source = map[sensors.Instant]rawStep{}
	)
	blocks, err := tx.CreateBucketIfNotExists([]byte(bucketBlocks))
	if err != nil {
		return err
	}
	blocks.FillPercent = 1 // keys rise, but for a step that is written again
	olds, sound := storedWindows(tx, from, to)
	if !sound {
		return nil // never write over what is damaged
	}
	for _, w := range olds {
		folded, err := decodeWindow(w, tables[w.frame.table], new(scratch))
		if err != nil {
			return nil
		}
		for _, st := range folded {
			lists[st.At] = w.frame.table
			steps = append(steps, st)
		}
	}
	for _, r := range rows {
		st, err := decodeStep(r, tables)
		if err != nil || !foldable(st) {
			continue
		}
		if i, there := slices.BinarySearchFunc(steps, st.At, func(s Step, at sensors.Instant) int { return int(s.At - at) }); there {
			steps[i] = st
		} else {
			steps = slices.Insert(steps, i, st)
		}
		lists[st.At], source[st.At] = rowTable(r), r
	}
	if len(source) == 0 {
		return nil
	}
	return putWindows(tx, blocks, olds, tables, steps, lists, source)
}

// putWindows replaces the old windows by new ones with these steps, and
// deletes the rows that are in them.
func putWindows(tx *bolt.Tx, blocks *bolt.Bucket, olds []rawWindow, tables map[uint64][]string, steps []Step,
	lists map[sensors.Instant]uint64, source map[sensors.Instant]rawStep) error {
	var values []keyed
	for len(steps) > 0 {
		n := 1
		for n < len(steps) && lists[steps[n].At] == lists[steps[0].At] {
			n++
		}
		part, table := steps[:n], lists[steps[0].At]
		steps = steps[n:]
		made := encodeWindow(table, part)
		if !givesBack(made, part, tables[table]) {
			return nil // all of it stays as it is
		}
		values = append(values, made...)
	}
	for _, w := range olds {
		for _, b := range append(w.blocks, keyed{key: blockKey(w.base, stationFrame)}) {
			if err := blocks.Delete(b.key); err != nil {
				return err
			}
		}
	}
	for _, v := range values {
		if err := blocks.Put(v.key, v.value); err != nil {
			return err
		}
	}
	rows, late := tx.Bucket([]byte(bucketSteps)), tx.Bucket([]byte(bucketLate))
	for _, r := range source {
		if err := errors.Join(rows.Delete(r.key), late.Delete(r.key)); err != nil {
			return err
		}
	}
	return markFormat(tx, dayLayout()) // a file of version 1 is one of this version from now on
}

// givesBack reads what was made as a reader would and compares.
func givesBack(made []keyed, steps []Step, ids []string) bool {
	base := steps[0].At
	body, err := unseal(made[0].key, made[0].value)
	if err != nil {
		return false
	}
	f, err := parseFrame(body, base)
	if err != nil {
		return false
	}
	got, err := decodeWindow(rawWindow{base: base, frame: f, blocks: made[1:]}, ids, new(scratch))
	return err == nil && slices.EqualFunc(got, steps, sameStep)
}

// storedWindows are the windows that begin in [from, to), of one day. It is
// false if a frame among them is damaged.
func storedWindows(tx *bolt.Tx, from, to sensors.Instant) (out []rawWindow, sound bool) {
	c := tx.Bucket([]byte(bucketBlocks)).Cursor()
	day := midnight(from)
	for k, v := c.Seek(blockKey(from, 0)); k != nil; {
		if len(k) != 5 {
			return nil, false
		}
		second, number := keyBlock(k)
		base := day + sensors.Instant(second)*sensors.Second
		if base >= to {
			break
		}
		if number != stationFrame {
			return nil, false
		}
		w := copyWindow(c, base, k, v)
		if w.frame == nil {
			return nil, false
		}
		out = append(out, w)
		k, v = c.Seek(nextBase(k))
	}
	return out, true
}

// copyWindow copies the frame at the cursor and its blocks.
func copyWindow(c *bolt.Cursor, base sensors.Instant, k, v []byte) rawWindow {
	w := rawWindow{base: base}
	if body, err := unseal(k, v); err == nil {
		w.frame, _ = parseFrame(body, base) // nil says that it is damaged
	}
	head := bytes.Clone(k[:3])
	for k, v = c.Next(); k != nil && bytes.HasPrefix(k, head); k, v = c.Next() {
		if len(k) == 5 {
			w.blocks = append(w.blocks, keyed{bytes.Clone(k), bytes.Clone(v)})
		}
	}
	return w
}

// nextBase is just past all that begins with the second of the key.
func nextBase(k []byte) []byte { return append(bytes.Clone(k[:3]), 0xff, 0xff, 0xff) }

func midnight(at sensors.Instant) sensors.Instant {
	const day = 86400 * sensors.Second
	into := at % day
	if into < 0 {
		into += day
	}
	return at - into
}

// rowTable is the number of the list that a row refers to; it was unsealed
// before.
func rowTable(r rawStep) uint64 {
	c := cursorAt(r.value[1:])
	return c.Uvarint()
}
