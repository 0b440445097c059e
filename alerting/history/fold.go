package history

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
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

// longestFrame bounds what a frame may say that it covers.
const longestFrame = 3600

// stationFrame is the number under which the frame itself stands.
const stationFrame = 0

// blockKey is where the block of a station begins, 0 for the frame itself,
// else its index plus one: u24be second of the day, u16be number.
func blockKey(base sensors.Instant, number int) []byte {
	second := int64(base/sensors.Second) % 86400
	if second < 0 {
		second += 86400
	}
	return []byte{byte(second >> 16), byte(second >> 8), byte(second), byte(number >> 8), byte(number)}
}

// keyBlock gives the second of the day and the number.
func keyBlock(k []byte) (second int64, number int) {
	return int64(k[0])<<16 | int64(k[1])<<8 | int64(k[2]), int(k[3])<<8 | int(k[4])
}

// frame is what a window holds apart from the columns.
type frame struct {
	table    uint64 // the list of stations, one for all its steps
	seconds  []int  // of its steps, from base on, ascending; the first is 0
	stations []int  // those with a block, ascending
	late     map[int][]LateReading
}

func (f *frame) last() int { return f.seconds[len(f.seconds)-1] }

func (f *frame) encode(base sensors.Instant) []byte {
	b := binary.AppendUvarint(nil, f.table)
	b = binary.AppendUvarint(b, uint64(len(f.seconds)))
	for i := 0; i < len(f.seconds); {
		j := i + 1
		for j < len(f.seconds) && f.seconds[j] == f.seconds[j-1]+1 {
			j++
		}
		b = binary.AppendUvarint(b, uint64(j-i))
		if j < len(f.seconds) {
			b = binary.AppendUvarint(b, uint64(f.seconds[j]-f.seconds[j-1]-1))
		}
		i = j
	}
	b = binary.AppendUvarint(b, uint64(len(f.stations)))
	before := -1
	for _, s := range f.stations {
		b = binary.AppendUvarint(b, uint64(s-before-1))
		before = s
	}
	return f.encodeLate(b, base)
}

// encodeLate appends the late readings: the reasons there are, then by step
// the readings with the number of each one's reason.
func (f *frame) encodeLate(b []byte, base sensors.Instant) []byte {
	b = binary.AppendUvarint(b, uint64(len(f.late)))
	if len(f.late) == 0 {
		return b
	}
	var reasons []string
	for _, second := range f.seconds {
		for _, l := range f.late[second] {
			if !slices.Contains(reasons, l.Reason) {
				reasons = append(reasons, l.Reason)
			}
		}
	}
	b = binary.AppendUvarint(b, uint64(len(reasons)))
	for _, r := range reasons {
		b = appendString(b, r)
	}
	for _, second := range f.seconds {
		late := f.late[second]
		if len(late) == 0 {
			continue
		}
		rs := make([]sensors.Reading, len(late))
		for i, l := range late {
			rs[i] = l.Reading
		}
		b = binary.AppendUvarint(b, uint64(second))
		b = appendReadings(b, base+sensors.Instant(second)*sensors.Second, rs)
		for _, l := range late {
			b = binary.AppendUvarint(b, uint64(slices.Index(reasons, l.Reason)))
		}
	}
	return b
}

func parseFrame(b []byte, base sensors.Instant) (*frame, error) {
	c := cursor{b: b}
	f := &frame{table: c.uvarint()}
	n := c.uvarint()
	if n == 0 || n > longestFrame {
		return nil, errBlock
	}
	for second := uint64(0); !c.bad; {
		run := c.uvarint()
		if run == 0 || uint64(len(f.seconds))+run > n || second+run > longestFrame {
			return nil, errBlock
		}
		for range run {
			f.seconds = append(f.seconds, int(second))
			second++
		}
		if uint64(len(f.seconds)) == n {
			break
		}
		if second += c.uvarint(); second > longestFrame {
			return nil, errBlock
		}
	}
	before := -1
	for k := c.uvarint(); k > 0 && !c.bad; k-- {
		if before += int(c.uvarint()&math.MaxUint16) + 1; before >= math.MaxUint16 {
			return nil, errBlock
		}
		f.stations = append(f.stations, before)
	}
	f.parseLate(&c, base)
	if c.bad || len(c.b) != 0 {
		return nil, errBlock
	}
	return f, nil
}

func (f *frame) parseLate(c *cursor, base sensors.Instant) {
	steps := c.uvarint()
	if steps == 0 || c.bad {
		return
	}
	var reasons []string
	for k := c.uvarint(); k > 0 && !c.bad; k-- {
		reasons = append(reasons, string(c.bytes(c.uvarint())))
	}
	f.late = map[int][]LateReading{}
	for ; steps > 0 && !c.bad; steps-- {
		second := c.uvarint()
		if second > longestFrame {
			c.bad = true
			return
		}
		rs := c.readings(base+sensors.Instant(second)*sensors.Second, nil)
		late := make([]LateReading, len(rs))
		for i, r := range rs {
			reason := c.uvarint()
			if reason >= uint64(len(reasons)) {
				c.bad = true
				return
			}
			late[i] = LateReading{Reading: r, Reason: reasons[reason]}
		}
		f.late[int(second)] = late
	}
}

// keyed is one value of the bucket of blocks.
type keyed struct{ key, value []byte }

// foldable reports whether blocks can give the step back: each reading is of
// a station of the list and of this step's second, in the order of time and
// station.
func foldable(st Step) bool {
	for i, r := range st.Readings {
		if r.Station < 0 || r.Station >= len(st.Stations) || r.Station >= math.MaxUint16-1 || r.Time.CeilSecond() != st.At {
			return false
		}
		if d := r.Arrival - r.Time; d > 1<<50 || d < -1<<50 || i > 0 && after(st.Readings[i-1], r) {
			return false
		}
	}
	return true
}

// after reports whether a comes after b in the order of a step as far as
// blocks know it; those of one station at one time keep their order.
func after(a, b sensors.Reading) bool {
	return a.Time > b.Time || a.Time == b.Time && a.Station > b.Station
}

// encodeWindow makes the values for steps of one list of stations, ascending
// and foldable, none longest than a frame may be.
func encodeWindow(table uint64, steps []Step) []keyed {
	base := steps[0].At
	f := &frame{table: table}
	by := make([][]sensors.Reading, len(steps[0].Stations))
	for _, st := range steps {
		second := int((st.At - base) / sensors.Second)
		f.seconds = append(f.seconds, second)
		if len(st.Late) > 0 {
			if f.late == nil {
				f.late = map[int][]LateReading{}
			}
			f.late[second] = st.Late
		}
		for _, r := range st.Readings {
			by[r.Station] = append(by[r.Station], r)
		}
	}
	var out []keyed
	for s, rs := range by {
		if len(rs) > 0 {
			f.stations = append(f.stations, s)
			key := blockKey(base, s+1)
			out = append(out, keyed{key, seal(key, appendBlock(nil, base, rs))})
		}
	}
	key := blockKey(base, stationFrame)
	return append([]keyed{{key, seal(key, f.encode(base))}}, out...)
}

// rawWindow is a frame with its blocks as stored, copied out of a transaction.
type rawWindow struct {
	base   sensors.Instant
	frame  *frame // nil if it is damaged
	blocks []keyed
}

// decodeWindow gives the steps of a window. A block that is damaged or missing
// leaves its station out of them; the error names it.
func decodeWindow(w rawWindow, ids []string) ([]Step, error) {
	var (
		f      = w.frame
		faults []error
		s      scratch
		all    []sensors.Reading
		ends   []int // of each station that could be read, in all
		blocks = w.blocks
	)
	for _, number := range f.stations {
		for len(blocks) > 0 && blockNumber(blocks[0]) < number+1 {
			blocks = blocks[1:]
		}
		var err error = errors.New("is missing")
		if len(blocks) > 0 && blockNumber(blocks[0]) == number+1 {
			var body []byte
			if body, err = unseal(blocks[0].key, blocks[0].value); err == nil {
				c := cursor{b: body}
				if all = c.block(w.base, number, all, &s); c.bad || len(c.b) != 0 || number >= len(ids) {
					err = errBlock
				}
			}
		}
		if err != nil {
			name := fmt.Sprintf("number %d", number)
			if number < len(ids) {
				name = ids[number]
			}
			faults = append(faults, fmt.Errorf("readings of station %s from %s to %s: the block %w",
				name, w.base, w.base+sensors.Instant(f.last())*sensors.Second, err))
			all = all[:endOf(ends)]
			continue
		}
		ends = append(ends, len(all))
	}
	return mergeStations(w.base, f, ids, all, ends), errors.Join(faults...)
}

func blockNumber(k keyed) int {
	_, number := keyBlock(k.key)
	return number
}

func endOf(ends []int) int {
	if len(ends) == 0 {
		return 0
	}
	return ends[len(ends)-1]
}

// mergeStations puts the readings of each step together again, in its order.
func mergeStations(base sensors.Instant, f *frame, ids []string, all []sensors.Reading, ends []int) []Step {
	steps := make([]Step, 0, len(f.seconds))
	out := make([]sensors.Reading, 0, len(all))
	next := make([]int, len(ends)) // of each station in all
	for i := range next[min(1, len(next)):] {
		next[i+1] = ends[i]
	}
	// Stations report in much the same order in each second: begin with that.
	order := make([]int, len(ends))
	for i := range order {
		order[i] = i
	}
	for _, second := range f.seconds {
		at := base + sensors.Instant(second)*sensors.Second
		from := len(out)
		for _, s := range order {
			n := next[s]
			for n < ends[s] && all[n].Time <= at {
				out = append(out, all[n])
				n++
			}
			next[s] = n
		}
		rs := out[from:len(out):len(out)]
		if sortStep(rs) && len(rs) == len(order) {
			slices.SortStableFunc(order, func(a, b int) int {
				return int(all[max(next[a]-1, 0)].Time - all[max(next[b]-1, 0)].Time)
			})
		}
		st := Step{At: at, Stations: ids, Late: f.late[second]}
		if len(rs) > 0 {
			st.Readings = rs
		}
		steps = append(steps, st)
	}
	return steps
}

// sortStep puts the readings into the order of a step and reports whether that
// moved any. Nearly sorted, as they are, insertion is the quickest.
func sortStep(rs []sensors.Reading) (moved bool) {
	for i := 1; i < len(rs); i++ {
		if !after(rs[i-1], rs[i]) {
			continue
		}
		moved = true
		r, j := rs[i], i
		for ; j > 0 && after(rs[j-1], r); j-- {
			rs[j] = rs[j-1]
		}
		rs[j] = r
	}
	return moved
}

// sameStep compares bit by bit.
func sameStep(a, b Step) bool {
	if a.At != b.At || len(a.Readings) != len(b.Readings) || len(a.Late) != len(b.Late) || !equalStrings(a.Stations, b.Stations) {
		return false
	}
	for i := range a.Readings {
		if !sameBits(a.Readings[i], b.Readings[i]) {
			return false
		}
	}
	for i := range a.Late {
		if a.Late[i].Reason != b.Late[i].Reason || !sameBits(a.Late[i].Reading, b.Late[i].Reading) {
			return false
		}
	}
	return true
}

func sameBits(a, b sensors.Reading) bool {
	bits := math.Float64bits
	return a.Station == b.Station && a.Time == b.Time && a.Arrival == b.Arrival &&
		bits(a.Speed) == bits(b.Speed) && bits(a.From) == bits(b.From) && bits(a.Gust) == bits(b.Gust) &&
		a.HasGust == b.HasGust && a.Exercise == b.Exercise && a.Retained == b.Retained
}

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
		folded, err := decodeWindow(w, tables[w.frame.table])
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
	got, err := decodeWindow(rawWindow{base: base, frame: f, blocks: made[1:]}, ids)
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
	c := cursor{b: r.value[1:]}
	return c.uvarint()
}
