package engine_test

import (
	"fmt"
	"math"
	"os"
	"runtime"
	"slices"
	"strconv"
	"strings"
	"sync"
	"testing"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/alerting/contingency"
	"sockline/alerting/engine"
	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// The study of skill: drawn episodes of 25 minutes over Skerry Moor through
// the real engine, from readings on. The truth is M as the design defines it,
// on the ground observed with all masts live, at points 100 m apart. Seeds from
// skillSeed on are for reporting only; the prior was tuned on others.
const (
	skillSeed = 5_000_000
	warmUp    = 240 // s: the masts' turbulence is not known before
	// recentPeak: an opening is false when the true change stayed below 10 kt
	// in the minute before it.
	recentPeak = 60
)

// skillOf is what one path made of one episode.
type skillOf struct {
	kind    synthetic.EpisodeKind
	peak    float64 // greatest true loss, kt
	found   bool    // level 2 or more opened
	delay   float64 // s from the true loss passing 15 kt to level 2; -1 without one of them
	falsely int     // openings of level 2 or more while the loss was under 10 kt
	hours   float64
	inside  int // issues whose interval holds the truth
	below   int // ... whose interval lies above it
	issues  int
}

// TestSkill keeps the analysis from getting worse unnoticed. The number of
// episodes of each kind comes from SOCKLINE_EPISODES; without it a handful are
// run, enough to see that the study works.
func TestSkill(t *testing.T) {
	if racing {
		t.Skip("the race detector has nothing to find in a study of one goroutine an episode")
	}
	episodes := 4
	if n := os.Getenv("SOCKLINE_EPISODES"); n != "" {
		var err error
		if episodes, err = strconv.Atoi(n); err != nil || episodes < 1 {
			t.Fatalf("SOCKLINE_EPISODES=%q: give a number of episodes of each kind", n)
		}
	}
	kinds := synthetic.EpisodeKinds()
	results := make([][]skillOf, episodes*len(kinds))
	var wait sync.WaitGroup
	next := make(chan int)
	for range runtime.GOMAXPROCS(0) {
		wait.Go(func() {
			for i := range next {
				results[i] = playEpisode(t, skillSeed+uint64(i/len(kinds)), kinds[i%len(kinds)])
			}
		})
	}
	for i := range results {
		next <- i
	}
	close(next)
	wait.Wait()
	judgeSkill(t, slices.Concat(results...), episodes)
}

// playEpisode runs an episode and judges both landing paths.
func playEpisode(t *testing.T, seed uint64, kind synthetic.EpisodeKind) []skillOf {
	a := loadAerodrome(t, "skerrymoor", sensors.At(time.Date(2026, 7, 1, 0, 0, 0, 0, time.UTC)))
	field := a.cfg.Airfield
	lead := field.Paths[0]
	x, y := lead.At(4000)
	scene := synthetic.DrawEpisode(seed, kind, synthetic.Line{X: x, Y: y, Bearing: lead.BearingTrue(), Length: 9000})
	sampler, err := scene.NewSampler(a.specs)
	if err != nil {
		t.Error(err)
		return nil
	}
	e := a.engine(t)
	var out []skillOf
	var paths []int
	for i, p := range field.Paths {
		if p.Operation() == airfield.Landing {
			paths = append(paths, i)
			out = append(out, skillOf{kind: kind, delay: -1, hours: float64(scene.Seconds()-warmUp) / 3600})
		}
	}
	truth := make([][]float64, len(paths)) // kt, by second
	passed := make([]float64, len(paths))
	opened := make([]float64, len(paths))
	var readings []sensors.Reading
	for step := scene.Start + sensors.Second; ; step += sensors.Second {
		var more bool
		if readings, more = sampler.Next(readings[:0]); !more {
			break
		}
		for _, r := range readings {
			e.Offer(r)
		}
		found := e.Step(step)
		for k, p := range paths {
			second := sampler.Second()
			m := quantity.Knots(trueLoss(sampler.Weather(), field.Paths[p], field.MastPoints(), float64(second)))
			truth[k] = append(truth[k], m)
			if second <= warmUp {
				continue
			}
			out[k].peak = math.Max(out[k].peak, m)
			if m >= 15 && passed[k] == 0 {
				passed[k] = float64(second)
			}
			out[k].judge(found, p, truth[k], &opened[k])
		}
	}
	for k := range out {
		out[k].found = opened[k] > 0
		if passed[k] > 0 && opened[k] > 0 {
			out[k].delay = opened[k] - passed[k]
		}
	}
	return out
}

// judge takes the issues of a step on one path.
func (s *skillOf) judge(found *engine.Result, path int, truth []float64, opened *float64) {
	now := truth[len(truth)-1]
	for _, tr := range found.Transitions {
		a := &tr.Alert
		if a.Path != path || a.Kind != alerting.HeadwindLoss || a.Closed != 0 {
			continue
		}
		if a.Observed {
			s.issues++
			switch low, high := -quantity.Knots(a.ChangeHigh), -quantity.Knots(a.ChangeLow); {
			case now < low:
				s.below++
			case now <= high:
				s.inside++
			}
		}
		if a.Level >= alerting.Large && tr.From < alerting.Large {
			if slices.Max(truth[max(0, len(truth)-recentPeak):]) < 10 {
				s.falsely++
			} else if *opened == 0 {
				*opened = float64(len(truth))
			}
		}
	}
}

// trueLoss is M of the true wind in m/s: the greatest fall between two points
// at most 4 km apart on the ground observed with all masts live.
func trueLoss(w *synthetic.Weather, p airfield.Path, masts []airfield.Point, second float64) float64 {
	const spacing = 100.0
	observed := airfield.Observed(p, masts, airfield.Reach, airfield.Beyond)[0]
	east, north := p.Direction()
	x, y := p.At(observed.From)
	wind := make([]quantity.Vector, int(observed.Length()/spacing)+1)
	w.WindAlong(wind, x, y, east*spacing, north*spacing, 10, second)
	loss := 0.0
	head := make([]float64, len(wind))
	for j, v := range wind {
		head[j] = -(v.East*east + v.North*north)
		for i := max(0, j-int(4000/spacing)); i < j; i++ {
			loss = math.Max(loss, head[i]-head[j])
		}
	}
	return loss
}

// judgeSkill prints the table and holds it to bounds that leave room for
// chance and none for a broken analysis.
func judgeSkill(t *testing.T, all []skillOf, episodes int) {
	var b strings.Builder
	fmt.Fprintf(&b, "Skerry Moor, %d episodes of each kind from seed %d, headwind losses on landing paths\n", episodes, skillSeed)
	strong, strongFound := 0, 0
	for class := range 8 {
		n, found := 0, 0
		for _, s := range all {
			if int(s.peak/5) == class || class == 7 && s.peak >= 40 {
				n++
				if s.found {
					found++
				}
			}
		}
		share := float64(found) / float64(max(n, 1))
		low, high := contingency.Wilson(share, float64(n))
		fmt.Fprintf(&b, "true loss %2d to %2d kt: level 2 found %3d of %3d (%.2f, %.2f to %.2f)\n", 5*class, 5*class+5, found, n, share, low, high)
		if class >= 5 {
			strong, strongFound = strong+n, strongFound+found
		}
	}
	var delays []float64
	issues, inside, below := 0, 0, 0
	for _, kind := range synthetic.EpisodeKinds() {
		falsely, hours := 0, 0.0
		for _, s := range all {
			if s.kind == kind {
				falsely, hours = falsely+s.falsely, hours+s.hours
				issues, inside, below = issues+s.issues, inside+s.inside, below+s.below
				if s.delay != -1 && s.peak >= 20 {
					delays = append(delays, s.delay)
				}
			}
		}
		fmt.Fprintf(&b, "%s: %d false openings of level 2 or more in %.0f path-hours\n", kind, falsely, hours)
		if limit := 2 + hours/12; float64(falsely) > limit {
			t.Errorf("%s: %d false openings in %.0f path-hours, at most %.0f are borne", kind, falsely, hours, limit)
		}
	}
	slices.Sort(delays)
	if n := len(delays); n > 0 {
		fmt.Fprintf(&b, "delay from 15 kt, losses of 20 kt or more: median %.0f s, 90th percentile %.0f s (%d)\n", delays[n/2], delays[n*9/10], n)
	}
	if issues > 0 {
		fmt.Fprintf(&b, "interval of the issued alerts: holds the truth in %.1f %%, lies above it in %.1f %%, below it in %.1f %% of %d\n",
			100*float64(inside)/float64(issues), 100*float64(below)/float64(issues), 100*float64(issues-inside-below)/float64(issues), issues)
		if episodes >= 20 && float64(inside) < 0.75*float64(issues) {
			t.Errorf("the interval holds the truth in %d of %d issues; 90 %% are promised and three quarters are the least borne", inside, issues)
		}
	}
	if s := contingency.Share(strongFound, strong); s.Of > 0 && *s.High < 0.9 {
		t.Errorf("level 2 was found in %d of %d losses of 25 kt or more", strongFound, strong)
	}
	t.Log("\n" + b.String())
}
