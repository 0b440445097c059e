package synthetic

import (
	"encoding/csv"
	"math"
	"os"
	"strconv"
	"testing"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if math.IsNaN(got) || math.Abs(got-want) > tolerance {
		t.Errorf("%s = %.6f, want %.6f within %g", what, got, want, tolerance)
	}
}

// Expected values: the published formulas evaluated independently in Python,
// printed to four decimals.
func TestDownburstValues(t *testing.T) {
	ob := OsegueraBowles{Max: 20, Radius: 1000, Height: 70}
	vicroy := Vicroy{Max: 20, Radius: 1121, Height: 70, Shape: 2}
	for _, row := range []struct {
		name         string
		wind         func(x, y, z float64) (u, v, w float64)
		x, y, z      float64
		wantU, wantV float64
		wantW        float64
	}{
		{"stagnation flow at its ring", ob.Wind, 1120.906, 0, 70, 20, 0, -0.9418},
		{"stagnation flow inside, mast height", ob.Wind, 500, 300, 10, 5.2794, 3.1676, -0.0950},
		{"stagnation flow inside, 70 m", ob.Wind, 500, 300, 70, 13.2838, 7.9703, -2.3549},
		{"stagnation flow far out", ob.Wind, 2000, 0, 10, 6.1136, 0, -0.0024},
		{"stagnation flow axis, 300 m", ob.Wind, 0, 0, 300, 0, 0, -14.3316},
		{"stagnation flow axis, 100 m", ob.Wind, 0, 0, 100, 0, 0, -5.1630},
		{"stagnation flow aloft", ob.Wind, 800, 0, 300, 9.7813, 0, -7.5569},
		{"shaped ring at its peak", vicroy.Wind, 1121, 0, 70, 20, 0, -0.9591},
		{"shaped ring inside, mast height", vicroy.Wind, 500, 300, 10, 4.7594, 2.8556, -0.0991},
		{"shaped ring inside, 70 m", vicroy.Wind, 500, 300, 70, 11.2466, 6.7479, -2.3299},
		{"shaped ring far out rises", vicroy.Wind, 2000, 0, 10, 1.5399, 0, 0.0338},
		{"shaped ring axis, 300 m", vicroy.Wind, 0, 0, 300, 0, 0, -11.1405},
		{"shaped ring axis, 100 m", vicroy.Wind, 0, 0, 100, 0, 0, -3.8230},
		{"shaped ring aloft", vicroy.Wind, 800, 0, 300, 11.0047, 0, -9.0869},
	} {
		t.Run(row.name, func(t *testing.T) {
			u, v, w := row.wind(row.x, row.y, row.z)
			// half a unit of the last printed digit, and the 0.2 % by which
			// the height of Vicroy's peak differs from zm
			near(t, "u", u, row.wantU, 6e-5)
			near(t, "v", v, row.wantV, 6e-5)
			near(t, "w", w, row.wantW, 6e-5)
		})
	}
}

// Mass is conserved: du/dx + dv/dy + dw/dz = 0, by central differences.
func TestDownburstsConserveMass(t *testing.T) {
	for name, wind := range map[string]func(x, y, z float64) (u, v, w float64){
		"oseguera-bowles": OsegueraBowles{Max: 20, Radius: 1000, Height: 70}.Wind,
		"vicroy":          Vicroy{Max: 20, Radius: 1121, Height: 70, Shape: 2}.Wind,
	} {
		for _, p := range [][3]float64{{600, 400, 90}, {100, -200, 10}, {-1500, 700, 250}} {
			const h = 0.01
			x, y, z := p[0], p[1], p[2]
			u1, _, _ := wind(x+h, y, z)
			u0, _, _ := wind(x-h, y, z)
			_, v1, _ := wind(x, y+h, z)
			_, v0, _ := wind(x, y-h, z)
			_, _, w1 := wind(x, y, z+h)
			_, _, w0 := wind(x, y, z-h)
			near(t, name+" divergence", (u1-u0+v1-v0+w1-w0)/(2*h), 0, 1e-8)
		}
	}
}

// Expected values: Holmes and Oliver's formula by hand.
func TestHolmesOliverValues(t *testing.T) {
	m := HolmesOliver{Max: 40, Radius: 1000, Length: 500, MotionX: 10, Decay: 300}
	for _, row := range []struct{ x, y, t, wantU, wantV float64 }{
		{500, 0, 0, 30, 0},
		{1000, 0, 0, 50, 0},
		{1500, 0, 0, 24.715, 0},
		{-1000, 0, 0, -30, 0},
		{0, 1000, 0, 10, 40},
		{1000 + 10*120, 0, 120, 36.813, 0}, // the centre has moved 1200 m
	} {
		u, v := m.Wind(row.x, row.y, row.t)
		near(t, "u", u, row.wantU, 5e-4)
		near(t, "v", v, row.wantV, 5e-4)
	}
}

// The table's own head says how it was made (scipy).
func TestOsegueraBowlesTable(t *testing.T) {
	file, err := os.Open("../../testdata/outside/downburst_ob88.csv")
	if err != nil {
		t.Fatal(err)
	}
	defer file.Close()
	reader := csv.NewReader(file)
	reader.Comment = '#'
	rows, err := reader.ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) < 300 {
		t.Fatalf("the table has %d rows, want more than 300", len(rows))
	}
	for _, row := range rows[1:] {
		var c [13]float64
		for i := range c {
			if c[i], err = strconv.ParseFloat(row[i+1], 64); err != nil {
				t.Fatal(err)
			}
		}
		m := OsegueraBowles{Max: c[0], Radius: c[1], Height: c[2]}
		u, v, w := m.Wind(c[7]-c[3], c[8]-c[4], c[9])
		// Positions in the table are rounded to 0.1 mm, winds to 1e-6.
		near(t, row[0]+" u", u+c[5], c[10], 3e-6)
		near(t, row[0]+" v", v+c[6], c[11], 3e-6)
		near(t, row[0]+" w", w, c[12], 3e-6)
	}
}

// From memory of the paper: peak 1 near z/d = 0.184, half at z/d = 1.
func TestWallJetProfile(t *testing.T) {
	near(t, "peak", woodProfile(0.184), 1, 1e-3)
	near(t, "at d", woodProfile(1), 0.4994, 1e-4)
	near(t, "at 0.1 d", woodProfile(0.1), 0.9727, 1e-4)
}

// An outflow of a scene is its model, scaled so that the peak at 10 m is the
// strength asked for.
func TestOutflowFollowsItsModel(t *testing.T) {
	ob := OsegueraBowles{Max: 20, Radius: 1000, Height: 75}
	ring := math.Sqrt(obPeakSquare) * 1000
	peak10, _, _ := ob.Wind(ring, 0, 10)
	outflow := Outflow{Model: ModelOsegueraBowles, Strength: peak10, Radius: ring, History: History{Holds: 100}}
	vicroy := Vicroy{Max: 20, Radius: 900, Height: 75, Shape: 2}
	vicroy10, _, _ := vicroy.Wind(900, 0, 10)
	shaped := Outflow{Model: ModelVicroy, Strength: vicroy10, Radius: 900, History: History{Holds: 100}}
	holmes := HolmesOliver{Max: 12, Radius: 800, Length: 400, Decay: 120}
	travelling := Outflow{Model: ModelHolmesOliver, Strength: 12, Radius: 800, History: History{Fades: 120}}
	for _, p := range [][3]float64{{0, 0, 10}, {300, -500, 10}, {2000, 10, 10}, {700, 700, 40}, {-1200, 300, 100}} {
		wantU, wantV, _ := ob.Wind(p[0], p[1], p[2])
		u, v := outflow.Wind(p[0], p[1], p[2], 5)
		near(t, "stagnation flow u", u, wantU, 1e-9)
		near(t, "stagnation flow v", v, wantV, 1e-9)
		wantU, wantV, _ = vicroy.Wind(p[0], p[1], p[2])
		u, v = shaped.Wind(p[0], p[1], p[2], 5)
		near(t, "shaped ring u", u, wantU, 1e-9)
		near(t, "shaped ring v", v, wantV, 1e-9)
		wantU, wantV = holmes.Wind(p[0], p[1], 60)
		u, v = travelling.Wind(p[0], p[1], 10, 60)
		near(t, "travelling u", u, wantU, 1e-9)
		near(t, "travelling v", v, wantV, 1e-9)
	}
}

func TestStretchedOutflow(t *testing.T) {
	o := Outflow{
		Model: ModelVicroy, Strength: 14, Radius: 1000, Stretch: 2, Axis: 60,
		MotionX: 5, History: History{Starts: 10, Grows: 100, Holds: 50, Fades: 40},
	}
	sin, cos := math.Sincos(60 * math.Pi / 180)
	// At 110 s it stands 500 m east at full strength.
	u, v := o.Wind(500+1000*sin, 1000*cos, 10, 110)
	near(t, "along the axis", u*sin+v*cos, 14, 1e-9)
	near(t, "across there", u*cos-v*sin, 0, 1e-9)
	u, v = o.Wind(500+500*cos, -500*sin, 10, 110)
	near(t, "on the weak axis", u*cos-v*sin, 7, 1e-9)
	// Divergence at the centre is that of the round model: a linear map.
	const h = 0.1
	u1, _ := o.Wind(500+h, 0, 10, 110)
	u0, _ := o.Wind(500-h, 0, 10, 110)
	_, v1 := o.Wind(500, h, 10, 110)
	_, v0 := o.Wind(500, -h, 10, 110)
	near(t, "divergence", (u1-u0+v1-v0)/(2*h), 2*14*math.Exp(0.25)/1000, 1e-6)
	for _, row := range []struct{ at, want float64 }{
		{0, 0}, {10, 0}, {60, 0.5}, {110, 1}, {160, 1}, {180, 0.5}, {200, 0}, {900, 0},
	} {
		near(t, "history", o.History.At(row.at), row.want, 1e-12)
	}
}
