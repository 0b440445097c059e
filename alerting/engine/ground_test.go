package engine

import (
	"testing"

	"sockline/alerting/airfield"
)

// Landing on one end and take-off from the other look at the same ground and
// share a stretch, but only while both are as long: what is observed near the
// far end would differ otherwise.
func TestStretchesAreSharedOnTheSameGroundOnly(t *testing.T) {
	for _, test := range []struct {
		takeOff float64 // length looked at beyond the far end, m
		want    bool
	}{{5000, true}, {5100, false}} {
		end := func(designator string, lon float64) airfield.EndSpec {
			return airfield.EndSpec{
				Designator: designator, Latitude: 0, Longitude: lon, GlidePath: 3, CrossingHeight: 15,
				LandingLength: 5000, TakeoffLength: test.takeOff,
			}
		}
		a, err := airfield.New(airfield.Spec{
			ID: "equator", Name: "Equator",
			Runways: []airfield.RunwaySpec{{Width: 18, Ends: []airfield.EndSpec{end("09", 0), end("27", 0.0115)}}},
			Masts:   []airfield.MastSpec{{ID: "one", Latitude: 0, Longitude: 0, Height: 10}},
		})
		if err != nil {
			t.Fatal(err)
		}
		// Paths: landing 09, take-off 09, landing 27, take-off 27.
		p := newGround(a, airfield.Reach).paths
		if got := p[0].stretch == p[3].stretch; got != test.want {
			t.Errorf("take-off looked at over %.0f m, landing over 5000 m: shared is %v", test.takeOff, got)
		}
		if p[0].stretch == p[2].stretch {
			t.Error("the landings on both ends share a stretch")
		}
	}
}
