package config

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"

	"sockline/sensors"
	"sockline/sensors/correction"
	"sockline/sensors/quantity"
)

const (
	// leastSector is the narrowest sector of roughness, in degrees: narrower
	// ones cannot be told apart from the wind (WMO-No. 8 works with 30).
	leastSector = 30.0
	// roughnessHeights is how many roughness lengths high an anemometer must
	// stand for the logarithmic law to mean anything.
	roughnessHeights = 3.0

	dateLayout = "2006-01-02"
	// maxMaintenance is the longest time for one piece of work.
	maxMaintenance = 366 * 24 * time.Hour
)

// siting is the ground around a mast: roughness and exposure_correction.
func (t *table) siting(s *sensors.Station) {
	s.Exposure = t.truth("exposure_correction")
	v, given := t.take("roughness")
	if !given {
		if s.Exposure {
			t.blame(t.key("exposure_correction"), "", "add roughness, or take the line out", "without roughness there is nothing to correct for")
		}
		return
	}
	key := t.key("roughness")
	switch v := v.(type) {
	case []any:
		s.Roughness = t.sectors(key, v)
	default:
		if z0, ok := t.roughnessLength(key, v); ok {
			s.Roughness = []sensors.RoughnessSector{{Length: z0}}
		}
	}
	for _, r := range s.Roughness {
		if s.Height > 0 && s.Height < roughnessHeights*r.Length {
			t.blame(key, render(v), "take a smoother class, or leave it out",
				"an anemometer at %g m stands within ground of a roughness length of %g m: no law holds there", s.Height, r.Length)
		}
	}
}

// roughnessLength is a class or a length in metres.
func (t *table) roughnessLength(path string, v any) (float64, bool) {
	var names []string
	for _, c := range correction.Classes() {
		names = append(names, c.Name)
	}
	mend := "write one of: " + strings.Join(names, ", ") + `; or a roughness length such as "0.03 m"`
	var z0 float64
	switch v := v.(type) {
	case string:
		if length, ok := correction.ClassLength(v); ok {
			return length, true
		}
		var err error
		if z0, err = quantity.ParseLength(v); err != nil {
			t.blame(path, v, mend, "this is no class of ground and no length")
			return 0, false
		}
	case float64:
		z0 = v
	case int64:
		z0 = float64(v)
	default:
		t.blame(path, render(v), mend, "%s is not what belongs here", typeName(v))
		return 0, false
	}
	if !(z0 >= 0.0001 && z0 <= 2) {
		t.blame(path, render(v), mend, "a roughness length is from 0.0001 m to 2 m")
		return 0, false
	}
	return z0, true
}

// sectors are pairs of a sector and its ground, such as ["030-090", "rough"],
// clockwise and all round.
func (t *table) sectors(path string, list []any) []sensors.RoughnessSector {
	const form = `write pairs such as [["030-090", "rough"], ["090-030", "open"]], clockwise and all round`
	var all []sensors.RoughnessSector
	for i, e := range list {
		at := join(path, strconv.Itoa(i))
		pair, ok := e.([]any)
		if !ok || len(pair) != 2 {
			t.blame(at, render(e), form, "this is not a pair of a sector and its ground")
			return nil
		}
		text, ok := pair[0].(string)
		from, to, good := sectorOf(text)
		if !ok || !good {
			t.blame(at, render(pair[0]), form, "this is not a sector of whole degrees")
			return nil
		}
		z0, ok := t.roughnessLength(at, pair[1])
		if !ok {
			return nil
		}
		all = append(all, sensors.RoughnessSector{From: from, To: to, Length: z0})
	}
	round := 0.0
	for i, s := range all {
		width := quantity.NormalizeDegrees(s.To - s.From)
		if len(all) == 1 && width == 0 {
			width = 360
		}
		round += width
		next := all[(i+1)%len(all)]
		switch {
		case width < leastSector:
			t.blame(join(path, strconv.Itoa(i)), render(list[i]), "join it to a neighbour", "a sector has at least %g degrees", leastSector)
			return nil
		case s.To != next.From:
			t.blame(path, render(list), form, "the sector that ends at %03.0f is not followed by one that begins there", s.To)
			return nil
		}
	}
	if round != 360 {
		t.blame(path, render(list), form, "the sectors make %g degrees, not 360", round)
		return nil
	}
	return all
}

// sectorOf reads "030-090".
func sectorOf(text string) (from, to float64, ok bool) {
	a, b, found := strings.Cut(text, "-")
	first, err1 := strconv.ParseUint(a, 10, 16)
	last, err2 := strconv.ParseUint(b, 10, 16)
	if !found || err1 != nil || err2 != nil || first > 360 || last > 360 {
		return 0, 0, false
	}
	return float64(first % 360), float64(last % 360), true
}

// clock says whether the error of the station's clock is taken out.
func (t *table) clock() bool {
	word, _ := t.oneOf("clock", "flag", "flag", "correct")
	return word == "correct"
}

// book is what is known of the instrument.
func (t *table) book() sensors.Book {
	b := t.table("book", false)
	if b.absent {
		return sensors.Book{}
	}
	var book sensors.Book
	book.Model, _ = b.text("model", "", "")
	book.Serial, _ = b.text("serial", "", "")
	book.Installed = b.date("installed")
	book.Calibrated = b.date("calibrated")
	book.NextDue = b.date("next_due")
	book.Notes, _ = b.text("notes", "", "")
	if book.Calibrated != "" && book.NextDue != "" && book.NextDue < book.Calibrated {
		b.blame(b.key("next_due"), book.NextDue, "correct one of the two", "it lies before the last calibration, %s", book.Calibrated)
	}
	b.done()
	return book
}

// date is a day; empty where the key is not there.
func (t *table) date(name string) string {
	v, ok := t.take(name)
	if !ok {
		return ""
	}
	switch v := v.(type) {
	case time.Time:
		return v.Format(dateLayout)
	case string:
		if _, err := time.Parse(dateLayout, v); err == nil {
			return v
		}
		t.blame(t.key(name), v, `write a day such as "2026-07-01"`, "this is not a day")
	default:
		t.mistyped(name, `a day such as "2026-07-01"`, v)
	}
	return ""
}

// maintenance are the times in which the station is worked on.
func (t *table) maintenance() []sensors.Maintenance {
	var all []sensors.Maintenance
	for _, m := range t.tables("maintenance") {
		from, okFrom := m.instant("from")
		to, okTo := m.instant("to")
		reason, okReason := m.text("reason", "", `"exchange of the cup"`)
		m.done()
		switch {
		case !okFrom || !okTo || !okReason:
		case to <= from:
			m.blame(m.key("to"), to.String(), "let it end after it begins", "this maintenance ends before it begins")
		case to.Sub(from) > maxMaintenance:
			m.blame(m.key("to"), to.String(), "take the station out of the configuration", "this maintenance is longer than a year")
		default:
			all = append(all, sensors.Maintenance{From: from, To: to, Reason: reason})
		}
	}
	slices.SortStableFunc(all, func(a, b sensors.Maintenance) int { return int(min(max(a.From-b.From, -1), 1)) })
	for i := 1; i < len(all); i++ {
		if all[i].From < all[i-1].To {
			t.blame(t.key("maintenance"), fmt.Sprint(all[i].From), "make one of the two", "two times of maintenance overlap")
		}
	}
	return all
}

// instant is a required moment with its offset from UTC.
func (t *table) instant(name string) (sensors.Instant, bool) {
	const example = `"2026-07-01T08:00:00Z"`
	v, ok := t.take(name)
	if !ok {
		t.missing(name, example)
		return 0, false
	}
	switch v := v.(type) {
	case time.Time:
		// TOML marks what has no offset by a zone of its own.
		if strings.HasSuffix(v.Location().String(), "-local") {
			t.blame(t.key(name), v.Format(time.DateTime), "write a moment such as "+example, "this has no offset from UTC")
			return 0, false
		}
		return sensors.At(v), true
	case string:
		at, err := time.Parse(time.RFC3339, v)
		if err != nil {
			t.blame(t.key(name), v, "write a moment such as "+example, "this is not a moment as RFC 3339 has it")
			return 0, false
		}
		return sensors.At(at), true
	}
	t.mistyped(name, "a moment such as "+example, v)
	return 0, false
}
