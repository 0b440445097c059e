package main

import (
	"fmt"
	"os"
	"strings"
	"time"

	"sockline/alerting/airfield"
	"sockline/config"
	"sockline/sensors/synthetic"
	"sockline/testdata/scenes"
)

// sceneSuffix tells the path of a scene file from the name of a built-in one.
const sceneSuffix = ".scene"

// loadScene reads a scene that plays on this airfield: one of the built-in
// ones by its name, or a file.
func loadScene(cfg *config.Config, name string) (*synthetic.Scene, error) {
	var source []byte
	var err error
	if strings.HasSuffix(name, sceneSuffix) {
		if source, err = os.ReadFile(name); err != nil {
			return nil, fmt.Errorf("read the scene: %w", err)
		}
	} else if source, err = scenes.Source(name); err != nil {
		return nil, usagef("%v; or give the path of a %s file", err, sceneSuffix)
	}
	// First of all: on the wrong airfield no place of the scene is known.
	if id := airfieldOf(source); id != "" && id != cfg.Airfield.ID {
		return nil, fmt.Errorf("scene %s plays on the airfield %q, but the configuration describes %q: choose a scene of this airfield",
			name, id, cfg.Airfield.ID)
	}
	scene, err := synthetic.Parse(name, source, geometry{cfg.Airfield})
	if err != nil {
		return nil, fmt.Errorf("scene %s: %w", name, err)
	}
	return scene, nil
}

// airfieldOf is the airfield that a scene names; empty if none can be found,
// which Parse explains.
func airfieldOf(source []byte) string {
	for line := range strings.Lines(string(source)) {
		if words := strings.Fields(line); len(words) >= 2 && words[0] == "airfield" {
			return words[1]
		}
	}
	return ""
}

// stationSpecs is the masts as the generator of weather needs them. at gives
// the day whose magnetic variation the instruments use.
func stationSpecs(cfg *config.Config, at time.Time) ([]synthetic.StationSpec, error) {
	variation, err := cfg.Airfield.Variation(at)
	if err != nil {
		return nil, err
	}
	specs := make([]synthetic.StationSpec, len(cfg.Stations))
	for i, s := range cfg.Stations {
		m := cfg.Airfield.Masts[i]
		specs[i] = synthetic.StationSpec{Station: s, X: m.X, Y: m.Y, Variation: variation}
	}
	return specs, nil
}

// geometry is an airfield as scenes see it.
type geometry struct{ *airfield.Airfield }

// Along is the place beforeThreshold metres before the threshold of a runway
// end and offset metres to the right of the flight.
func (g geometry) Along(runway string, beforeThreshold, offset float64) (x, y float64, err error) {
	p, ok := g.Path(runway, airfield.Landing)
	if !ok {
		var ends []string
		for _, r := range g.Runways {
			ends = append(ends, r.Ends[0].Designator, r.Ends[1].Designator)
		}
		return 0, 0, fmt.Errorf("there is no runway end %q on this airfield; there are %s", runway, strings.Join(ends, ", "))
	}
	x, y = p.Beside(beforeThreshold, offset)
	return x, y, nil
}

// Station is the place of a mast.
func (g geometry) Station(id string) (x, y float64, ok bool) {
	for _, m := range g.Masts {
		if m.ID == id {
			return m.X, m.Y, true
		}
	}
	return 0, 0, false
}
