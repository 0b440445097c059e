package airfield

import (
	"math"
	"strconv"
	"testing"

	"sockline/testdata/outside"
)

// num is the number in a row's column.
func num(t *testing.T, row map[string]string, key string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(row[key], 64)
	if err != nil {
		t.Fatalf("column %s: %v", key, err)
	}
	return v
}

// The table holds GeographicLib's local Cartesian coordinates. A spherical or
// equirectangular short cut misses them by metres, so 1 cm tells them apart.
func TestPlaneAgainstOutsideTable(t *testing.T) {
	rows := outside.Rows(t, "geodesy_enu.csv")
	if len(rows) != 70 {
		t.Fatalf("%d rows, want 70", len(rows))
	}
	worst := 0.0
	for i, r := range rows {
		p := NewPlane(num(t, r, "lat0_deg"), num(t, r, "lon0_deg"), num(t, r, "h0_m"))
		e, n, u := p.EastNorthUp(num(t, r, "lat_deg"), num(t, r, "lon_deg"), num(t, r, "h_m"))
		for _, d := range []float64{e - num(t, r, "e_m"), n - num(t, r, "n_m"), u - num(t, r, "u_m")} {
			if worst = max(worst, math.Abs(d)); !(math.Abs(d) < 0.01) {
				t.Errorf("row %d %s/%s: off by %.4f m", i, r["airfield"], r["sensor"], d)
			}
		}
	}
	t.Logf("largest difference %.1e m", worst)
}

// Worked values of the textbook formula, computed once with plain Python.
func TestPlaneWorkedValues(t *testing.T) {
	p := NewPlane(45, 10, 100)
	for _, c := range []struct{ lat, lon, h, e, n, u float64 }{
		{45.01, 10.02, 120, 1576.6920, 1111.5343, 19.7084},
		{45, 10.02, 100, 1576.9614, 0.1946, -0.1946},
		{45.02, 10, 100, 0, 2222.6743, -0.3879},
		{45, 10, 100, 0, 0, 0},
	} {
		e, n, u := p.EastNorthUp(c.lat, c.lon, c.h)
		if math.Abs(e-c.e) > 1e-4 || math.Abs(n-c.n) > 1e-4 || math.Abs(u-c.u) > 1e-4 {
			t.Errorf("%v, %v, %v: %.4f %.4f %.4f, want %.4f %.4f %.4f", c.lat, c.lon, c.h, e, n, u, c.e, c.n, c.u)
		}
	}
	// Vincenty's inverse solution for the same pair at height 0.
	deg, dist := Azimuth(45, 10, 45.01, 10.02, 0)
	if math.Abs(deg-54.81698) > 1e-4 || math.Abs(dist-1929.0739) > 1e-3 {
		t.Errorf("45 10 to 45.01 10.02: %.5f deg, %.4f m, want 54.81698, 1929.0739", deg, dist)
	}
}

// The table holds the inverse geodesic solution of GeographicLib and PROJ. A
// chord in the tangent plane is shorter than the geodesic by d^3/6R^2, 0.2 mm
// at 3.7 km.
func TestAzimuthAgainstOutsideTable(t *testing.T) {
	rows := outside.Rows(t, "geodesy_runways.csv")
	if len(rows) != 20 {
		t.Fatalf("%d rows, want 20", len(rows))
	}
	for _, r := range rows {
		latA, lonA := num(t, r, "latA_deg"), num(t, r, "lonA_deg")
		latB, lonB := num(t, r, "latB_deg"), num(t, r, "lonB_deg")
		deg, dist := Azimuth(latA, lonA, latB, lonB, 0)
		if math.Abs(deg-num(t, r, "az12_deg")) > 1e-4 || math.Abs(dist-num(t, r, "dist_m")) > 1e-3 {
			t.Errorf("%s: %.6f deg %.4f m, want %s %s", r["airfield"], deg, dist, r["az12_deg"], r["dist_m"])
		}
		// az21 continues A to B, so the reverse runway bearing is its opposite.
		back, _ := Azimuth(latB, lonB, latA, lonA, 0)
		if d := turn(back, num(t, r, "az21_deg")+180); d > 1e-4 {
			t.Errorf("%s: reverse %.6f deg is %.6f off", r["airfield"], back, d)
		}
	}
}

// The table read backwards: from GeographicLib's east and north to its
// latitude and longitude. 1e-7 degree is 1 cm.
func TestPlaneInverseAgainstOutsideTable(t *testing.T) {
	worst := 0.0
	for i, r := range outside.Rows(t, "geodesy_enu.csv") {
		p := NewPlane(num(t, r, "lat0_deg"), num(t, r, "lon0_deg"), num(t, r, "h0_m"))
		lat, lon := p.LatLon(num(t, r, "e_m"), num(t, r, "n_m"), num(t, r, "h_m"))
		for _, d := range []float64{lat - num(t, r, "lat_deg"), math.Remainder(lon-num(t, r, "lon_deg"), 360)} {
			if worst = max(worst, math.Abs(d)); !(math.Abs(d) < 1e-7) {
				t.Errorf("row %d %s/%s: off by %.1e degree", i, r["airfield"], r["sensor"], d)
			}
		}
	}
	t.Logf("largest difference %.1e degree", worst)
	lat, lon := NewPlane(-10, 179.99, 0).LatLon(5000, 0, 0) // beyond the date line
	if e, n, _ := NewPlane(-10, 179.99, 0).EastNorthUp(lat, lon, 0); lon > -179 || math.Abs(e-5000) > 1e-3 || math.Abs(n) > 1e-3 {
		t.Errorf("over the date line: %v %v is at %v %v", lat, lon, e, n)
	}
}
