package main

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"os"
	"time"

	"sockline/alerting"
	"sockline/alerting/airfield"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

// How the truth is looked at: at mast height, between observed points at most
// 4 km apart, as M is defined; the points lie closer than those of the
// analysis, so that its spacing shows as an error.
const (
	truthHeight  = 10.0   // m
	truthSpacing = 100.0  // m
	truthReach   = 4000.0 // m
)

// truthHead is the first line of a truth file.
type truthHead struct {
	Truth    int     `json:"truth"` // version of the format
	Airfield string  `json:"airfield"`
	Scene    string  `json:"scene"`
	Seed     uint64  `json:"seed"`
	HeightM  float64 `json:"height_m"`
	Spacing  float64 `json:"spacing_m"`
	Exercise bool    `json:"exercise"`
	Notice   string  `json:"notice"`
}

// truthLine is one path in one second.
type truthLine struct {
	At        string      `json:"at"`
	Runway    string      `json:"runway"`
	Operation string      `json:"operation"`
	Loss      truthChange `json:"loss"`
	Gain      truthChange `json:"gain"`
}

// truthChange is the true M: a loss is negative.
type truthChange struct {
	Change float64 `json:"change_kt"`
	From   float64 `json:"from_m"`
	To     float64 `json:"to_m"`
}

// writeTruth writes what the true wind does on every path, second by second,
// on the ground that is observed while all masts are live.
func writeTruth(ctx context.Context, p *program, path string, cfg *config.Config, scene *synthetic.Scene) (err error) {
	f, err := os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	if errors.Is(err, os.ErrExist) {
		return fmt.Errorf("write the truth: %s exists already: move it away or choose another name", path)
	}
	if err != nil {
		return fmt.Errorf("write the truth: %w", err)
	}
	defer func() {
		if err = errors.Join(err, f.Close()); err != nil {
			err = errors.Join(fmt.Errorf("write the truth %s: %w", path, err), os.Remove(path))
		}
	}()
	buffer := bufio.NewWriter(f)
	out := json.NewEncoder(buffer)
	err = out.Encode(truthHead{Truth: 1, Airfield: cfg.Airfield.ID, Scene: scene.Name, Seed: scene.Seed,
		HeightM: truthHeight, Spacing: truthSpacing, Exercise: true, Notice: alerting.Notice})
	if err != nil {
		return err
	}
	weather, lines := scene.Weather(), truthPaths(cfg)
	bar := newProgress(p, "truth")
	defer bar.end()
	for second := 1; second <= scene.Seconds(); second++ {
		bar.at(func() float64 { return float64(second) / float64(scene.Seconds()) })
		if err := ctx.Err(); err != nil {
			return err
		}
		at := (scene.Start + sensors.Instant(second)*sensors.Second).Time().Format(time.RFC3339)
		for _, l := range lines {
			l.look(weather, float64(second))
			line := truthLine{At: at, Runway: l.path.Runway(), Operation: l.path.Operation(), Loss: l.extreme(-1), Gain: l.extreme(1)}
			if err := out.Encode(line); err != nil {
				return err
			}
		}
	}
	return buffer.Flush()
}

// truthPath is the observed points of a path and the true headwind there.
type truthPath struct {
	path     airfield.Path
	before   []float64 // m before the threshold, falling
	headwind []float64 // m/s
	wind     []quantity.Vector
	observed []airfield.Interval
}

func truthPaths(cfg *config.Config) []*truthPath {
	masts := cfg.Airfield.MastPoints()
	paths := make([]*truthPath, len(cfg.Airfield.Paths))
	for i, p := range cfg.Airfield.Paths {
		l := &truthPath{path: p, observed: airfield.Observed(p, masts, cfg.Analysis.Reach, airfield.Beyond)}
		for _, o := range l.observed {
			for k := math.Floor(o.From / truthSpacing); k*truthSpacing >= o.To; k-- {
				l.before = append(l.before, k*truthSpacing)
			}
		}
		l.headwind = make([]float64, len(l.before))
		l.wind = make([]quantity.Vector, len(l.before))
		paths[i] = l
	}
	return paths
}

// look takes the headwind at every point, t seconds after the start.
func (l *truthPath) look(weather *synthetic.Weather, t float64) {
	east, north := l.path.Direction()
	for first := 0; first < len(l.before); {
		// A run of points without a gap is asked for at once.
		n := 1
		for first+n < len(l.before) && l.before[first+n-1]-l.before[first+n] <= truthSpacing {
			n++
		}
		x, y := l.path.At(l.before[first])
		weather.WindAlong(l.wind[first:first+n], x, y, east*truthSpacing, north*truthSpacing, truthHeight, t)
		first += n
	}
	for i, w := range l.wind {
		l.headwind[i] = -(w.East*east + w.North*north)
	}
}

// extreme is the greatest loss (sign -1) or gain (sign 1) of headwind from a
// point to a later one at most truthReach on. Nothing observed, or a wind that
// only changes the other way, is a change of 0 over no distance.
func (l *truthPath) extreme(sign float64) truthChange {
	best, from, to := 0.0, 0, 0
	for i := range l.before {
		for j := i + 1; j < len(l.before) && l.before[i]-l.before[j] <= truthReach; j++ {
			if change := sign * (l.headwind[j] - l.headwind[i]); change > best {
				best, from, to = change, i, j
			}
		}
	}
	if best == 0 {
		return truthChange{}
	}
	return truthChange{Change: math.Round(sign*quantity.Knots(best)*100) / 100, From: l.before[from], To: l.before[to]}
}
