package history

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
	"slices"

	"sockline/sensors"
)

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
	c := cursorAt(b)
	f := &frame{table: c.Uvarint()}
	n := c.Uvarint()
	if n == 0 || n > longestFrame {
		return nil, errBlock
	}
	for second := uint64(0); !c.Bad; {
		run := c.Uvarint()
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
		if second += c.Uvarint(); second > longestFrame {
			return nil, errBlock
		}
	}
	before := -1
	for k := c.Uvarint(); k > 0 && !c.Bad; k-- {
		if before += int(c.Uvarint()&math.MaxUint16) + 1; before >= math.MaxUint16 {
			return nil, errBlock
		}
		f.stations = append(f.stations, before)
	}
	f.parseLate(&c, base)
	if c.Bad || len(c.Left) != 0 {
		return nil, errBlock
	}
	return f, nil
}

// parseLate takes late readings only in the order of steps that the frame has,
// and never a step without any: anything else would be lost when written again.
func (f *frame) parseLate(c *cursor, base sensors.Instant) {
	steps := c.Uvarint()
	if steps == 0 || c.Bad {
		return
	}
	var reasons []string
	for k := c.Uvarint(); k > 0 && !c.Bad; k-- {
		reasons = append(reasons, string(c.Bytes(c.Uvarint())))
	}
	f.late = map[int][]LateReading{}
	later := f.seconds
	for ; steps > 0 && !c.Bad; steps-- {
		second := c.Uvarint()
		place := slices.Index(later, int(second&math.MaxUint16))
		if second > longestFrame || place < 0 {
			c.Bad = true
			return
		}
		later = later[place+1:]
		rs := c.readings(base+sensors.Instant(second)*sensors.Second, nil)
		c.Bad = c.Bad || len(rs) == 0
		late := make([]LateReading, len(rs))
		for i, r := range rs {
			reason := c.Uvarint()
			if reason >= uint64(len(reasons)) {
				c.Bad = true
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
func decodeWindow(w rawWindow, ids []string, s *scratch) ([]Step, error) {
	var (
		f      = w.frame
		faults []error
		all    = s.readings[:0]
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
				c := cursorAt(body)
				if all = c.block(w.base, number, all, s); c.Bad || len(c.Left) != 0 || number >= len(ids) {
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
	s.readings = all
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
