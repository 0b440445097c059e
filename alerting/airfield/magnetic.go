package airfield

import (
	_ "embed" // the coefficients travel inside the program
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// wmmSource is the World Magnetic Model 2025 as a table: n, m, g, h and their
// yearly change. It is read, never written.
//
//go:embed wmm2025_coefficients.csv
var wmmSource string

const (
	wmmDegree = 12
	wmmEpoch  = 2025.0
	wmmEnd    = 2030.0
	wmmRadius = 6371200.0 // geomagnetic reference radius, m
)

// gauss are the Schmidt quasi-normalised coefficients, nT, and their change,
// nT a year, by degree n and order m.
type gauss struct {
	g, h, gDot, hDot [wmmDegree + 1][wmmDegree + 1]float64
}

// Declination is the angle from true to magnetic north, degrees, east
// positive, at lat, lon (WGS-84 degrees), heightM metres above the ellipsoid
// and time t, by the World Magnetic Model 2025 (NOAA NCEI and British
// Geological Survey, 2024). It fails outside 2025.0 to 2030.0, where the model
// is not valid, and within 0.01 degree of a pole, where true north is not one
// direction.
func Declination(lat, lon, heightM float64, t time.Time) (deg float64, err error) {
	return declination(lat, lon, heightM, decimalYear(t))
}

// RoundedVariation is the Declination at 0 h UTC of the UTC date of t,
// rounded to 0.1 degree: what stays the same through a whole day of steps.
func RoundedVariation(lat, lon, heightM float64, t time.Time) (deg float64, err error) {
	u := t.UTC()
	deg, err = Declination(lat, lon, heightM, time.Date(u.Year(), u.Month(), u.Day(), 0, 0, 0, 0, time.UTC))
	if err != nil {
		return 0, err
	}
	return roundTenth(deg), nil
}

// roundTenth rounds to 0.1, and gives 0 rather than -0.
func roundTenth(deg float64) float64 { return math.Round(deg*10)/10 + 0 }

// decimalYear is Y + (time into the year)/(length of the year).
func decimalYear(t time.Time) float64 {
	t = t.UTC()
	start := time.Date(t.Year(), 1, 1, 0, 0, 0, 0, time.UTC)
	next := time.Date(t.Year()+1, 1, 1, 0, 0, 0, 0, time.UTC)
	return float64(t.Year()) + t.Sub(start).Seconds()/next.Sub(start).Seconds()
}

func declination(lat, lon, height, year float64) (float64, error) {
	if !(year >= wmmEpoch && year <= wmmEnd) {
		return 0, fmt.Errorf("magnetic variation for the year %.1f: the World Magnetic Model 2025 is valid "+
			"from 2025.0 to 2030.0; set magnetic_variation in [airfield]", year)
	}
	if !(math.Abs(lat) <= 89.99) || !(math.Abs(lon) <= 360) || !(math.Abs(height) < 1e6) {
		return 0, fmt.Errorf("magnetic variation at latitude %g, longitude %g, height %g m: no such place, or too near a pole",
			lat, lon, height)
	}
	c, err := readGauss(wmmSource)
	if err != nil {
		return 0, err
	}
	north, east := c.horizontal(lat, lon, height, year-wmmEpoch)
	return math.Atan2(east, north) / degree, nil
}

// readGauss reads the table of coefficients.
func readGauss(table string) (*gauss, error) {
	c := new(gauss)
	rows := 0
	for line := range strings.Lines(table) {
		line = strings.TrimSpace(line)
		if line == "" || line[0] == '#' || line[0] == 'n' {
			continue
		}
		var v [6]float64
		fields := strings.Split(line, ",")
		if len(fields) != len(v) {
			return nil, fmt.Errorf("reading the magnetic model: %d fields in %q", len(fields), line)
		}
		for i, f := range fields {
			x, err := strconv.ParseFloat(f, 64)
			if err != nil {
				return nil, fmt.Errorf("reading the magnetic model: %w", err)
			}
			v[i] = x
		}
		n, m := int(v[0]), int(v[1])
		if n < 1 || n > wmmDegree || m < 0 || m > n {
			return nil, fmt.Errorf("reading the magnetic model: degree %d, order %d", n, m)
		}
		c.g[n][m], c.h[n][m], c.gDot[n][m], c.hDot[n][m] = v[2], v[3], v[4], v[5]
		rows++
	}
	if want := wmmDegree * (wmmDegree + 3) / 2; rows != want {
		return nil, fmt.Errorf("reading the magnetic model: %d rows, want %d", rows, want)
	}
	return c, nil
}

// horizontal is the north and east component of the field in nT, years after
// the epoch. With the potential V = a sum (a/r)^(n+1) (g cos ml + h sin ml)
// P_n^m(cos th), th the geocentric colatitude, B = -grad V:
//
//	X' = sum (a/r)^(n+2) (g cos ml + h sin ml) dP/dth
//	Y' = sum (a/r)^(n+2) m (g sin ml - h cos ml) P / sin th
//	Z' = -sum (n+1) (a/r)^(n+2) (g cos ml + h sin ml) P
//
// and X = X' cos(la'-la) - Z' sin(la'-la) turns from the geocentric to the
// geodetic vertical (NOAA NCEI/BGS, The US/UK World Magnetic Model for
// 2020-2025: Technical Report, 2020, section 1.2; from memory).
func (c *gauss) horizontal(lat, lon, height, years float64) (north, east float64) {
	p := earthCentred(lat, 0, height)
	r, geocentric := math.Hypot(p[0], p[2]), math.Atan2(p[2], p[0])
	sinTh, cosTh := math.Cos(geocentric), math.Sin(geocentric)
	leg, dLeg := schmidt(sinTh, cosTh)

	var x, y, z float64
	ratio := wmmRadius / r
	scale := ratio * ratio
	for n := 1; n <= wmmDegree; n++ {
		scale *= ratio
		for m := 0; m <= n; m++ {
			g := c.g[n][m] + float64(years*c.gDot[n][m])
			h := c.h[n][m] + float64(years*c.hDot[n][m])
			sin, cos := math.Sincos(float64(m) * lon * degree)
			x += float64(scale * (float64(g*cos) + float64(h*sin)) * dLeg[n][m])
			y += float64(scale * float64(m) * (float64(g*sin) - float64(h*cos)) * leg[n][m] / sinTh)
			z -= float64(scale * float64(n+1) * (float64(g*cos) + float64(h*sin)) * leg[n][m])
		}
	}
	sin, cos := math.Sincos(geocentric - float64(lat*degree))
	return float64(x*cos) - float64(z*sin), y
}

// schmidt are the Schmidt quasi-normalised associated Legendre functions
// without the Condon-Shortley phase, and their derivatives by colatitude.
//
//	P_m^m = sqrt((2m-1)/(2m)) sin th P_(m-1)^(m-1), P_1^1 = sin th
//	sqrt(n2-m2) P_n^m = (2n-1) cos th P_(n-1)^m - sqrt((n-1)2-m2) P_(n-2)^m
//
// The derivatives come from differentiating these, not from the shorter form
// that divides by sin th and fails at the poles (R.A. Langel in J.A. Jacobs,
// Geomagnetism vol. 1, 1987, eq. 27; from memory).
func schmidt(sinTh, cosTh float64) (p, d [wmmDegree + 1][wmmDegree + 1]float64) {
	p[0][0] = 1
	for m := 0; m <= wmmDegree; m++ {
		if m > 0 {
			f := 1.0
			if m > 1 {
				f = math.Sqrt(float64(2*m-1) / float64(2*m))
			}
			p[m][m] = f * sinTh * p[m-1][m-1]
			d[m][m] = f * (float64(cosTh*p[m-1][m-1]) + float64(sinTh*d[m-1][m-1]))
		}
		for n := m + 1; n <= wmmDegree; n++ {
			a := float64(2*n - 1)
			norm := math.Sqrt(float64(n*n - m*m))
			p[n][m] = a * cosTh * p[n-1][m] / norm
			d[n][m] = a * (float64(cosTh*d[n-1][m]) - float64(sinTh*p[n-1][m])) / norm
			if n > m+1 {
				b := math.Sqrt(float64((n-1)*(n-1)-m*m)) / norm
				p[n][m] -= float64(b * p[n-2][m])
				d[n][m] -= float64(b * d[n-2][m])
			}
		}
	}
	return p, d
}
