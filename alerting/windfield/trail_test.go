package windfield

import (
	"math"
	"testing"

	"sockline/sensors"
	"sockline/sensors/averages"
)

// trailRig is a bank around four masts 3 km apart, with what its trail keeps.
func trailRig() ([]template, averages.Layout, Prior) {
	p := DefaultPrior()
	masts := []Mast{{X: 0}, {X: 3000}, {X: 0, Y: 3000}, {X: 3000, Y: 3000}}
	return outflowTemplates(masts, p), averages.Layout{Seconds: [blocks]int{10, 20, 60}}, p
}

// say keeps at now that an outflow within 600 m of template j (-1: nowhere) is so
// many times likelier than none, and one elsewhere half as likely as none.
func (t *trail) say(now sensors.Instant, templates []template, j int, odds, front float64, wind [2]float64) {
	for i := range t.sum {
		t.sum[i] = 0.5
	}
	for i := range t.sum {
		if j >= 0 && math.Hypot(templates[i].x-templates[j].x, templates[i].y-templates[j].y) < 600 {
			t.sum[i] = odds
		}
	}
	t.remember(now, 1, front, nil, nil)
	t.wind[int(now/trailEvery)%trailSlots] = wind
}

// near is the believed share of the outflows whose centre lies within reach of a
// place.
func (t *trail) near(templates []template, x, y, reach float64) float64 {
	sum := 0.0
	for j, o := range templates {
		if math.Hypot(o.x-x, o.y-y) <= reach {
			sum += math.Exp(t.odds[j]) * t.share / float64(t.templates)
		}
	}
	return sum
}

func find(templates []template, x, y float64) int {
	for j, o := range templates {
		if o.x == x && o.y == y {
			return j
		}
	}
	return -1
}

// An outflow that was there a stride ago is believed to be where the wind took
// it, and ever less so.
func TestTrailFollowsTheWind(t *testing.T) {
	templates, layout, p := trailRig()
	tr := newTrail(templates, layout, p)
	j := find(templates, 500, 1500)
	now := 1000000 * trailEvery
	tr.recall(now)
	before := tr.share
	tr.say(now, templates, j, 1e6, 0.2, [2]float64{10, 0})
	// 0.75 of 10 m/s for 90 s.
	tr.recall(now + tr.stride)
	if tr.share < 1.2*before {
		t.Errorf("an outflow of a stride ago is believed with %.3f, one without any with %.3f", tr.share, before)
	}
	there, behind := tr.near(templates, 500+675, 1500, 600), tr.near(templates, 500-675, 1500, 600)
	if there < 3*behind {
		t.Errorf("it has moved 675 m with the wind, but %.3f of it are there and %.3f as far the other way", there, behind)
	}
	if far := tr.near(templates, 3000, 3000, 600); far > there/3 {
		t.Errorf("%.3f of it are believed far away, %.3f where it went", far, there)
	}
	last := tr.share
	for link := sensors.Instant(2); link <= trailLinks+1; link++ {
		tr.say(now+(link-1)*tr.stride, templates, -1, 0, 0.2, [2]float64{10, 0})
		tr.recall(now + link*tr.stride)
		if tr.share > last {
			t.Errorf("after %d strides without it the outflow is believed with %.4f, before with %.4f", link, tr.share, last)
		}
		last = tr.share
	}
	if last > before+0.01 {
		t.Errorf("an outflow is still believed with %.4f, from the first %.4f", last, before)
	}
}

// A front that passes is not taken for an outflow at the next mast.
func TestTrailKnowsFronts(t *testing.T) {
	templates, layout, p := trailRig()
	tr := newTrail(templates, layout, p)
	now := 1000000 * trailEvery
	tr.recall(now)
	front := tr.front
	tr.say(now, templates, find(templates, 500, 1500), 1e4, 1e6, [2]float64{5, 0})
	tr.recall(now + tr.stride)
	if tr.front < 1.5*front || tr.share > 1.1*p.OutflowShare {
		t.Errorf("after a front: believed in a front %.3f (%.3f before), in an outflow %.3f", tr.front, front, tr.share)
	}
}

// What is believed depends on the last minutes alone, and on nothing that a
// step has seen within the reach of its own means.
func TestTrailIsFinite(t *testing.T) {
	templates, layout, p := trailRig()
	long, short := newTrail(templates, layout, p), newTrail(templates, layout, p)
	start := 1000000 * trailEvery
	span := sensors.Instant(trailLinks+1) * long.stride
	for now := start; now < start+2*span; now += trailEvery {
		j, wind := int(now/trailEvery*37)%len(templates), [2]float64{float64(now / trailEvery % 7), -3}
		for _, tr := range []*trail{&long, &short} {
			if tr == &long || now >= start+span {
				tr.say(now, templates, j, 20, 3, wind)
			}
		}
	}
	now := start + 2*span
	long.recall(now)
	short.recall(now)
	if long.share != short.share || long.front != short.front {
		t.Errorf("begun earlier %v and %v, later %v and %v", long.share, long.front, short.share, short.front)
	}
	for j := range long.odds {
		if long.odds[j] != short.odds[j] {
			t.Fatalf("template %d: begun earlier %v, later %v", j, long.odds[j], short.odds[j])
		}
	}
	// The same to one second before, and nothing at all where the other has been
	// told of an outflow that is beyond doubt.
	long.say(now, templates, 0, 1e6, 1e6, [2]float64{})
	soon := now + long.stride - sensors.Second
	long.recall(soon)
	short.recall(soon)
	if long.share != short.share || long.front != short.front {
		t.Errorf("what was seen less than a stride ago counts: %v and %v, without it %v and %v", long.share, long.front, short.share, short.front)
	}
	long.recall(now + long.stride)
	short.recall(now + long.stride)
	if long.share == short.share {
		t.Error("what was seen a stride ago does not count")
	}
}

// Evidence that vanishes on either side leaves numbers.
func TestTrailBounds(t *testing.T) {
	for _, test := range []struct{ one, other, want float64 }{
		{0, 0, 0}, {1, 0, trailWorst}, {0, 1, -trailWorst}, {math.Inf(1), 1, trailWorst}, {math.E, 1, 1},
	} {
		if got := odds(test.one, test.other); math.Abs(got-test.want) > 1e-12 {
			t.Errorf("odds(%v, %v) = %v, want %v", test.one, test.other, got, test.want)
		}
	}
}
