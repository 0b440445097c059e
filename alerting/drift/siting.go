package drift

import (
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"

	"sockline/sensors"
	"sockline/sensors/averages"
	"sockline/sensors/quantity"
)

// What where a mast stands does to its wind: learnt from steady weather, for
// each direction apart.
const (
	sitingSectors = averages.SitingSectors

	sitingSpeed   = 4.0  // m/s, of the others
	sitingScatter = 0.25 // of the speed: steadier than for naming a mast
	sitingChange  = 0.20 // of the speed, by which the others may change from block to block

	// Enough: ten hours of steady wind from a sector, on four days, of the last
	// ninety. Below, nothing is removed.
	sitingBlocks = 60
	sitingDays   = 4
	sitingKept   = 90 // days
	// sitingPrior is how many blocks of no bias are believed beforehand.
	sitingPrior = 30.0

	// Beyond these it is no matter of the site: the instrument is to be looked at.
	sitingMostTurn  = 20.0  // degrees
	sitingMostRatio = 0.288 // of the logarithm: a third more or a quarter less
)

const aDay = sensors.Instant(24 * 3600 * 1000)

// sitingSum is what one mast showed in one sector and hour.
type sitingSum struct {
	N        int     `json:"n"`
	Turned   float64 `json:"turned_deg"` // sum, degrees
	LogRatio float64 `json:"log_ratio"`  // sum
}

// sitingHour is what one UTC hour taught, as it is journalled.
type sitingHour struct {
	HourMS int64                           `json:"hour_ms"`
	Masts  map[string]map[string]sitingSum `json:"masts"` // by id, then sector
}

// Siting learns what the places of the masts do to their winds. Not safe for
// concurrent use.
type Siting struct {
	ids   []string
	out   []bool // masts that take no part
	watch *Watch // for its medians
	now   sitingHour
	last  quantity.Vector // the median of all in the block before
	known bool
	hours []sitingHour // ascending
}

// NewSiting learns for masts, named in the order in which their means will
// come. Those of out stand above another and neither learn nor teach.
func NewSiting(ids []string, out []bool) *Siting {
	return &Siting{ids: slices.Clone(ids), out: slices.Clone(out), watch: New(ids)}
}

// Take learns from the means of one block.
func (s *Siting) Take(means []Mean) {
	used := make([]Mean, len(means))
	copy(used, means)
	for i := range used {
		used[i].Present = used[i].Present && !s.out[i]
	}
	all, _, n := s.watch.others(used, -1)
	before, known := s.last, s.known
	s.last, s.known = all, n > 0
	change := math.Hypot(all.East-before.East, all.North-before.North)
	if !known || n < leastOthers+1 || all.Speed() < sitingSpeed || change > sitingChange*all.Speed() {
		return
	}
	for i := range used {
		others, scatter, n := s.watch.others(used, i)
		own, speed := used[i].Vector.Speed(), others.Speed()
		if !used[i].Present || n < leastOthers || own <= 0 || speed < sitingSpeed || scatter > sitingScatter*speed {
			continue
		}
		sector := strconv.Itoa(int(math.Round(used[i].Vector.From()/(360/sitingSectors))) % sitingSectors)
		if s.now.Masts == nil {
			s.now.Masts = map[string]map[string]sitingSum{}
		}
		if s.now.Masts[s.ids[i]] == nil {
			s.now.Masts[s.ids[i]] = map[string]sitingSum{}
		}
		sum := s.now.Masts[s.ids[i]][sector]
		sum.N++
		sum.Turned = rounded(sum.Turned + signed(used[i].Vector.From()-others.From()))
		sum.LogRatio = rounded(sum.LogRatio + math.Log(own/speed))
		s.now.Masts[s.ids[i]][sector] = sum
	}
}

// Turn ends the UTC hour t; it gives what was learnt in it as JSON, nil for
// nothing.
func (s *Siting) Turn(t sensors.Instant) []byte {
	h := s.now
	h.HourMS = int64(t)
	s.now = sitingHour{}
	if len(h.Masts) == 0 {
		return nil
	}
	b, err := json.Marshal(h)
	if err != nil { // finite numbers and ids always have a JSON form
		return nil
	}
	s.learn(h)
	return b
}

// learn takes an hour in. One that is there already stays: a start that reads
// back sees its first hour only in part, and the journal has the whole.
func (s *Siting) learn(h sitingHour) {
	at, found := slices.BinarySearchFunc(s.hours, h, func(a, b sitingHour) int { return int(min(max(a.HourMS-b.HourMS, -1), 1)) })
	if found {
		return
	}
	s.hours = slices.Insert(s.hours, at, h)
	oldest := s.hours[len(s.hours)-1].HourMS - sitingKept*int64(aDay)
	s.hours = slices.DeleteFunc(s.hours, func(o sitingHour) bool { return o.HourMS < oldest })
}

// Load takes up the table of an hour.
func (s *Siting) Load(table []byte) error {
	var h sitingHour
	if err := json.Unmarshal(table, &h); err != nil {
		return fmt.Errorf("read the table of the sites: %w", err)
	}
	for id, sectors := range h.Masts {
		for k, v := range sectors {
			n, err := strconv.Atoi(k)
			if err != nil || n < 0 || n >= sitingSectors || v.N < 1 || v.N > 6 || math.Abs(v.Turned) > 180*6 || math.Abs(v.LogRatio) > 60 {
				return fmt.Errorf("read the table of the sites: %s, sector %q: %+v cannot be what an hour taught", id, k, v)
			}
		}
	}
	s.learn(h)
	return nil
}

// InForce is what is to be removed on the UTC day of t, by mast: what the hours
// before that day have taught. The same hours give the same numbers, whenever
// they are asked for.
func (s *Siting) InForce(t sensors.Instant) []averages.Siting {
	day := t - t%aDay
	out := make([]averages.Siting, len(s.ids))
	for i, id := range s.ids {
		var sums [sitingSectors]sitingSum
		var days [sitingSectors]int
		var lastDay [sitingSectors]int64
		for h := range s.hours {
			hour := &s.hours[h]
			if at := sensors.Instant(hour.HourMS); at > day || at <= day-sitingKept*aDay {
				continue
			}
			for k := range sitingSectors {
				v, ok := hour.Masts[id][strconv.Itoa(k)]
				if !ok {
					continue
				}
				sums[k].N += v.N
				sums[k].Turned += v.Turned
				sums[k].LogRatio += v.LogRatio
				// The hour that ends at midnight belongs to the day before.
				if d := (hour.HourMS - 1) / int64(aDay); days[k] == 0 || d != lastDay[k] {
					days[k]++
					lastDay[k] = d
				}
			}
		}
		for k := range sitingSectors {
			n := float64(sums[k].N)
			if sums[k].N < sitingBlocks || days[k] < sitingDays {
				continue
			}
			// Shrunk toward none, as the mean of a normal prior and n values.
			turned, ratio := sums[k].Turned/(n+sitingPrior), sums[k].LogRatio/(n+sitingPrior)
			if math.Abs(turned) > sitingMostTurn || math.Abs(ratio) > sitingMostRatio {
				continue
			}
			out[i].On = true
			out[i].Turned[k], out[i].LogRatio[k] = turned, ratio
		}
	}
	return out
}

// TakeOver goes on with what another learnt, under the ids of both.
func (s *Siting) TakeOver(from *Siting) {
	s.hours = slices.Clone(from.hours)
	s.now, s.last, s.known = from.now, from.last, from.known
}
