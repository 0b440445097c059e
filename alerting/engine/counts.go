package engine

import (
	"errors"

	"sockline/sensors/decode"
	"sockline/sensors/quality"
)

// Counts is what came in since the start, by station and reason. Owned by the
// engine's goroutine.
type Counts struct {
	Unknown uint64 // messages on topics of no station
	// Withdrawn counts readings that no step used because their station was
	// taken away or changed by a reload.
	Withdrawn uint64
	Messages  []uint64 // by station
	Accepted  []uint64 // readings that entered a step, by station
	Suspect   []uint64
	Copies    []uint64                    // readings that were there already
	Decode    []map[decode.Reason]uint64  // payloads or parts refused, by station and reason
	Quality   []map[quality.Reason]uint64 // readings refused or flagged, by station and reason
	LastWhy   []string                    // what was last wrong with a station's payloads
}

func newCounts(stations int) Counts {
	c := Counts{
		Messages: make([]uint64, stations), Accepted: make([]uint64, stations), Suspect: make([]uint64, stations), Copies: make([]uint64, stations),
		Decode: make([]map[decode.Reason]uint64, stations), Quality: make([]map[quality.Reason]uint64, stations),
		LastWhy: make([]string, stations),
	}
	for i := range stations {
		c.Decode[i] = make(map[decode.Reason]uint64)
		c.Quality[i] = make(map[quality.Reason]uint64)
	}
	return c
}

func (c *Counts) rejected(station int, err error) {
	c.LastWhy[station] = err.Error()
	var all decode.Rejections
	if errors.As(err, &all) {
		for _, r := range all {
			c.Decode[station][r.Reason] += uint64(r.Count)
		}
	}
}

func (c *Counts) refused(station int, reason quality.Reason) { c.Quality[station][reason]++ }

func (c *Counts) checked(station int, r quality.Checked) {
	switch r.Verdict() {
	case quality.Accepted:
		c.Accepted[station]++
	case quality.Suspect:
		c.Accepted[station]++
		c.Suspect[station]++
	}
	for _, reason := range r.Flags().Reasons() {
		c.Quality[station][reason]++
	}
}
