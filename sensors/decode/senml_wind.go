package decode

import (
	"bytes"

	"sockline/sensors"
	"sockline/sensors/quantity"
)

// The roles of records that make a wind, by the ending of their names.
const (
	roleSpeed = iota
	roleDirection
	roleGust
	roleCount
)

// roleOf finds the role of a name and what stands before its ending.
func roleOf(name []byte) (role int, prefix []byte, ok bool) {
	for role, ending := range [roleCount]string{"wind_speed", "wind_direction", "wind_gust"} {
		if cut := len(name) - len(ending); cut >= 0 && string(name[cut:]) == ending {
			return role, name[:cut], true
		}
	}
	return 0, nil, false
}

// group is the records of one prefix and time.
type group struct {
	at     sensors.Instant
	prefix []byte // in Decoder.names, or in an earlier array of it
	value  [roleCount]float64
	has    [roleCount]bool
	bad    bool // speed or direction was refused: no reading, and no second complaint
	place  int  // of its first record, from 1
}

// collect puts a record into its group. It reports whether the record marks
// the pack as synthetic.
func (d *Decoder) collect(p *pack, r *record, received sensors.Instant) (exercise bool) {
	start := len(d.names) - len(r.name)
	role, prefix, ok := roleOf(r.name)
	if !ok {
		exercise := bytes.HasSuffix(r.name, []byte("exercise"))
		d.names = d.names[:start]
		// Whatever is not plainly false marks: better an exercise that was
		// meant to be real than the reverse.
		return exercise && !(r.value.kind == boolean && !r.value.truth)
	}
	if id, ok := d.foreign(prefix); ok {
		d.refuse(ForeignStation, "record %d: %s names the station %s, but came on the topic of %s", p.count, excerpt(r.name), id, d.station.ID)
		d.names = d.names[:start]
		return false
	}
	at, ok := instantOf(r.time, received)
	if !ok {
		d.names = d.names[:start]
		d.refuse(BadTime, "record %d: time %v is not between 1970 and 9999", p.count, r.time)
		return false
	}
	g := d.group(at, prefix, start, p.count)
	if g == nil {
		d.refuse(TooLarge, "record %d: one pack speaks of more than %d places or times", p.count, MaxReadings)
		d.names = d.names[:start]
		return false
	}
	value, ok := d.quantity(p, r, role)
	switch {
	case !ok:
		g.bad = g.bad || role != roleGust // a reading without its gust is still a reading
	case g.has[role] && g.value[role] != value:
		d.refuse(Contradiction, "record %d: a second, different value of %s for the same time", p.count, excerpt(r.name))
		g.bad = true
	default:
		g.has[role], g.value[role] = true, value
	}
	return false
}

// foreign tells whether the last element of a name's beginning ("far07" of
// "urn:dev:mast:far07:") is the id of another station. Elements before it are
// the maker's or the site's business.
func (d *Decoder) foreign(prefix []byte) (id string, ok bool) {
	end := len(prefix)
	for end > 0 && !isAlphanumeric(prefix[end-1]) {
		end--
	}
	start := end
	for start > 0 && (isAlphanumeric(prefix[start-1]) || prefix[start-1] == '-') {
		start--
	}
	if element := prefix[start:end]; string(element) != d.station.ID {
		id, ok = d.others[string(element)]
	}
	return id, ok
}

// group finds or adds a group; nil when there are too many. Packs are written
// in order, so that the search from the back ends at once.
func (d *Decoder) group(at sensors.Instant, prefix []byte, start, place int) *group {
	for i := len(d.groups) - 1; i >= 0; i-- {
		if g := &d.groups[i]; g.at == at && bytes.Equal(g.prefix, prefix) {
			d.names = d.names[:start] // the name is not needed a second time
			return g
		}
	}
	if len(d.groups) == MaxReadings {
		return nil
	}
	d.groups = append(d.groups, group{at: at, prefix: prefix, place: place})
	return &d.groups[len(d.groups)-1]
}

// quantity checks the value and unit of a record and turns it into SI. What is
// wrong with it is then on record.
func (d *Decoder) quantity(p *pack, r *record, role int) (float64, bool) {
	switch r.value.kind {
	case numeric:
	case absent:
		d.refuse(NoValue, "record %d: %s has no value", p.count, excerpt(r.name))
		return 0, false
	default:
		d.refuse(Malformed, "record %d: %s is %s; a number is expected", p.count, excerpt(r.name), r.value.kind)
		return 0, false
	}
	if role == roleDirection {
		factor, ok := quantity.AngleUnit(string(r.unit))
		if !ok {
			d.refuse(Units, "record %d: unit %s of %s; expected \"deg\" or \"rad\"", p.count, excerpt(r.unit), excerpt(r.name))
			return 0, false
		}
		return d.direction(r.value.number, factor)
	}
	factor, ok := quantity.SpeedUnit(string(r.unit))
	if !ok {
		d.refuse(Units, "record %d: unit %s of %s; expected \"m/s\", \"km/h\", \"kt\", \"mph\" or \"ft/s\"",
			p.count, excerpt(r.unit), excerpt(r.name))
		return 0, false
	}
	label := "speed"
	if role == roleGust {
		label = "gust"
	}
	return d.speed(label, r.value.number, factor)
}

// joined makes a wind of a group that holds a speed and a direction.
func (d *Decoder) joined(g *group) (w wind, ok bool) {
	if g.bad {
		return w, false
	}
	if !g.has[roleSpeed] || !g.has[roleDirection] {
		d.refuse(Incomplete, "record %d: %swind_... at %s lacks its speed or its direction", g.place, g.prefix, g.at)
		return w, false
	}
	return wind{
		at:        g.at,
		speed:     g.value[roleSpeed],
		direction: g.value[roleDirection],
		gust:      g.value[roleGust],
		hasGust:   g.has[roleGust],
	}, true
}
