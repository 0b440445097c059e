package drift

import (
	"math"
	"slices"
	"strings"
	"testing"

	"sockline/sensors/quantity"
	"sockline/testdata/outside"
)

// regional is the kernel of the outside table.
func regional() Kernel { return Kernel{Length: 150e3, Variance: 16, Noise: 2.25} }

// Real winds of 122 stations: what each gets from the others is what
// scikit-learn makes of the same kernel, and better than the plain mean.
func TestLeaveOneOutAgainstTable(t *testing.T) {
	rows := outside.Rows(t, "sao_loo_1800z.csv")
	var all []Observation
	for _, r := range rows {
		all = append(all, Observation{outside.Number(t, r["x_m"]), outside.Number(t, r["y_m"]), quantity.Vector{East: outside.Number(t, r["u_ms"]), North: outside.Number(t, r["v_ms"])}})
	}
	got, err := regional().LeaveOneOut(all)
	if err != nil {
		t.Fatal(err)
	}
	var su, sv, mu, mv float64
	for _, o := range all {
		mu += o.Wind.East / float64(len(all))
		mv += o.Wind.North / float64(len(all))
	}
	var spreadU, spreadV float64
	for i, r := range rows {
		for _, c := range []struct {
			name   string
			got    float64
			within float64
		}{
			{"loo_u", got[i].Wind.East, 2e-5}, {"loo_v", got[i].Wind.North, 2e-5}, {"loo_sd", got[i].Deviation, 2e-5},
			{"z", regional().Score(all[i], got[i]), 1e-4},
		} {
			if want := outside.Number(t, r[c.name]); math.Abs(c.got-want) > c.within {
				t.Errorf("%s: %s %.6f, the table has %.6f", r["id"], c.name, c.got, want)
			}
		}
		su += math.Pow(all[i].Wind.East-got[i].Wind.East, 2)
		sv += math.Pow(all[i].Wind.North-got[i].Wind.North, 2)
		spreadU += math.Pow(all[i].Wind.East-mu, 2)
		spreadV += math.Pow(all[i].Wind.North-mv, 2)
	}
	n := float64(len(all))
	u, v := math.Sqrt(su/n), math.Sqrt(sv/n)
	// The head of the table: 1.987227 and 1.638105 m/s.
	if len(rows) != 122 || math.Abs(u-1.987227) > 1e-4 || math.Abs(v-1.638105) > 1e-4 {
		t.Errorf("%d stations are missed by %.6f and %.6f m/s", len(rows), u, v)
	}
	if plainU, plainV := math.Sqrt(spreadU/n), math.Sqrt(spreadV/n); u > 0.82*plainU || v > 0.60*plainV {
		t.Errorf("missed by %.3f and %.3f m/s where the plain mean misses by %.3f and %.3f", u, v, plainU, plainV)
	}
}

// report is the newest of a station in one hourly file.
type report struct {
	id, time string
	o        Observation
}

// hourly are the reports of one hour: the newest of each station, on a plane
// about 41 N 79 W. Distances are wrong by a few per cent at the corners, which
// is little against the kernel's length.
func hourly(t *testing.T) map[string][]report {
	t.Helper()
	newest := map[string]map[string]report{}
	for _, r := range outside.Rows(t, "sao_1995-03-18.csv") {
		if r["spd_kt"] == "" || r["dir"] == "" {
			continue
		}
		lat, lon := outside.Number(t, r["lat"]), outside.Number(t, r["lon"])
		const metres = math.Pi / 180 * 6371e3
		if newest[r["file_h"]] == nil {
			newest[r["file_h"]] = map[string]report{}
		}
		newest[r["file_h"]][r["id"]] = report{r["id"], r["time"], Observation{
			X: (lon + 79) * math.Cos(lat*math.Pi/180) * metres, Y: (lat - 41) * metres,
			Wind: quantity.FromDirection(outside.Number(t, r["spd_kt"])*quantity.Knot, outside.Number(t, r["dir"])),
		}}
	}
	out := map[string][]report{}
	for h, stations := range newest {
		for _, r := range stations {
			out[h] = append(out[h], r)
		}
		slices.SortFunc(out[h], func(a, b report) int { return strings.Compare(a.id, b.id) })
	}
	return out
}

// A day of hourly reports: the three that are gross errors beside their own
// hours (66, 55 and 34 kt where 3 to 12 kt blew before and after) are named,
// and nothing else; not the wind on a mountain top nor a real sea breeze.
func TestGrossErrorsOfADay(t *testing.T) {
	var named []string
	reports, mountain, breeze := 0, 0.0, 0.0
	for _, hour := range hourly(t) {
		all := make([]Observation, len(hour))
		for i := range hour {
			all[i] = hour[i].o
		}
		got, err := regional().LeaveOneOut(all)
		if err != nil {
			t.Fatal(err)
		}
		for i, r := range hour {
			reports++
			if regional().Gross(r.o, got[i]) {
				named = append(named, r.id+" "+r.time)
			}
			switch z := regional().Score(r.o, got[i]); r.id {
			case "MWN": // at 1910 m
				mountain = math.Max(mountain, z)
			case "HVN", "BOS": // on the coast, in the afternoon
				breeze = math.Max(breeze, z)
			}
		}
	}
	slices.Sort(named)
	want := []string{"MFD 1995-03-18T15:50Z", "NHZ 1995-03-18T05:55Z", "WRI 1995-03-18T08:55Z"}
	if !slices.Equal(named, want) {
		t.Errorf("named are %v, want %v", named, want)
	}
	// They stand out all the same: the test would mean nothing otherwise.
	if reports < 6000 || mountain < 5 || breeze < 5 {
		t.Errorf("%d reports; the mountain stands at %.1f, the sea breeze at %.1f", reports, mountain, breeze)
	}
	t.Logf("%d reports, the mountain top at %.2f, the sea breeze at %.2f standard deviations", reports, mountain, breeze)
}

func TestTooFewToCompare(t *testing.T) {
	if _, err := regional().LeaveOneOut(make([]Observation, 2)); err == nil {
		t.Error("two are compared with each other")
	}
	if _, err := (Kernel{Length: 1, Variance: 1}).LeaveOneOut(make([]Observation, 4)); err == nil {
		t.Error("a kernel without noise is taken")
	}
}
