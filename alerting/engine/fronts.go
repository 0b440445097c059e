package engine

import (
	"sockline/alerting/airfield"
	"sockline/alerting/front"
	"sockline/sensors/averages"
)

// newFronts prepares the tracker of fronts: their arrival is told at every
// threshold and every mast.
func newFronts(a *airfield.Airfield, aloft []bool, layout averages.Layout) *front.Tracker {
	masts := make([]front.Mast, len(a.Masts))
	for i, m := range a.Masts {
		masts[i] = front.Mast{ID: m.ID, X: m.X, Y: m.Y, Aloft: aloft[i]}
	}
	var places []front.Place
	for _, r := range a.Runways {
		for _, e := range r.Ends {
			places = append(places, front.Place{Name: "threshold " + e.Designator, X: e.Threshold.X, Y: e.Threshold.Y})
		}
	}
	return front.New(masts, places, layout)
}
