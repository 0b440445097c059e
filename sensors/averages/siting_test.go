package averages

import (
	"math"
	"testing"

	"sockline/sensors/quantity"
)

// What a site does to a wind, removed, gives the wind: at the middles of the
// sectors exactly, between them by interpolation, and across north.
func TestRemoveSiting(t *testing.T) {
	var s Siting
	s.On = true
	for k := range SitingSectors {
		s.Turned[k], s.LogRatio[k] = 6, math.Log(0.8)
	}
	for from := 0.0; from < 360; from += 7.5 {
		v := s.remove(quantity.FromDirection(8, from+6))
		if math.Abs(v.Speed()-10) > 1e-9 || math.Abs(math.Remainder(v.From()-from, 360)) > 1e-9 {
			t.Errorf("from %g: %g m/s from %g", from, v.Speed(), v.From())
		}
	}
	s = Siting{On: true}
	s.Turned[11] = 10 // about 330 degrees only
	for from, want := range map[float64]float64{330: 320, 345: 340, 0: 0, 300: 300, 315: 310} {
		if v := s.remove(quantity.FromDirection(5, from)); math.Abs(math.Remainder(v.From()-want, 360)) > 1e-9 {
			t.Errorf("from %g: %g, want %g", from, v.From(), want)
		}
	}
	off := Siting{Turned: s.Turned}
	if v := off.remove(quantity.FromDirection(5, 330)); math.Abs(v.From()-330) > 1e-9 {
		t.Errorf("switched off: %g", v.From())
	}
}
