package main

import (
	"bufio"
	"bytes"
	"encoding/json"
	"fmt"
	"os"
	"strconv"
	"strings"

	"sockline/alerting/airfield"
	"sockline/alerting/survey"
)

// candidatesFor are the places that a file allows; without a file, those within
// reach of the paths and off the runway strips.
func candidatesFor(n *survey.Network, path string) ([]survey.Candidate, error) {
	if path == "" {
		return survey.Anywhere(n), nil
	}
	source, err := os.ReadFile(path)
	if err != nil {
		return nil, fmt.Errorf("read where masts may stand: %w", err)
	}
	var area survey.Area
	if trimmed := bytes.TrimSpace(source); len(trimmed) > 0 && trimmed[0] == '{' {
		err = readGeoJSON(&area, trimmed, n.Settings.Airfield)
	} else {
		err = readSiteLines(&area, source, n.Settings.Airfield)
	}
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	sites, err := area.Candidates(n.Settings.Airfield)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", path, err)
	}
	return sites, nil
}

// geoJSON is as much of RFC 7946 as says where masts may stand.
type geoJSON struct {
	Type        string          `json:"type"`
	Features    []geoJSON       `json:"features"`
	Geometry    *geoJSON        `json:"geometry"`
	Geometries  []geoJSON       `json:"geometries"`
	Coordinates json.RawMessage `json:"coordinates"`
	Properties  struct {
		Name string `json:"name"`
	} `json:"properties"`
}

// readGeoJSON takes the polygons and points of a GeoJSON text. Holes in polygons
// are refused rather than overlooked.
func readGeoJSON(area *survey.Area, source []byte, a *airfield.Airfield) error {
	var g geoJSON
	if err := json.Unmarshal(source, &g); err != nil {
		return fmt.Errorf("it begins like GeoJSON and is none: %w", err)
	}
	return addGeoJSON(area, &g, g.Properties.Name, a)
}

func addGeoJSON(area *survey.Area, g *geoJSON, name string, a *airfield.Airfield) error {
	for _, parts := range [][]geoJSON{g.Features, g.Geometries} {
		for i := range parts {
			if err := addGeoJSON(area, &parts[i], parts[i].Properties.Name, a); err != nil {
				return err
			}
		}
	}
	if g.Geometry != nil {
		return addGeoJSON(area, g.Geometry, name, a)
	}
	var polygons [][][][2]float64
	var points [][2]float64
	var err error
	switch g.Type {
	case "Polygon":
		polygons = make([][][][2]float64, 1)
		err = json.Unmarshal(g.Coordinates, &polygons[0])
	case "MultiPolygon":
		err = json.Unmarshal(g.Coordinates, &polygons)
	case "Point":
		points = make([][2]float64, 1)
		err = json.Unmarshal(g.Coordinates, &points[0])
	case "MultiPoint":
		err = json.Unmarshal(g.Coordinates, &points)
	case "FeatureCollection", "GeometryCollection", "Feature":
	default:
		return fmt.Errorf("a GeoJSON %q says nothing of where a mast may stand: draw polygons or points", g.Type)
	}
	if err != nil {
		return fmt.Errorf("the coordinates of a GeoJSON %s: %w", g.Type, err)
	}
	for _, p := range points {
		at, err := located(a, p[1], p[0]) // RFC 7946: longitude first
		if err != nil {
			return err
		}
		area.Sites = append(area.Sites, survey.Candidate{Point: at, Name: name})
	}
	for _, rings := range polygons {
		if len(rings) != 1 {
			return fmt.Errorf("a polygon has %d rings: one with a hole has to be cut into polygons without", len(rings))
		}
		ring := rings[0]
		if len(ring) < 4 || ring[0] != ring[len(ring)-1] {
			return fmt.Errorf("a polygon needs at least three corners and ends with its first (RFC 7946)")
		}
		var polygon []airfield.Point
		for _, c := range ring[:len(ring)-1] {
			at, err := located(a, c[1], c[0])
			if err != nil {
				return err
			}
			polygon = append(polygon, at)
		}
		area.Polygons = append(area.Polygons, polygon)
	}
	return nil
}

func located(a *airfield.Airfield, lat, lon float64) (airfield.Point, error) {
	if !(lat >= -90 && lat <= 90 && lon >= -180 && lon <= 180) {
		return airfield.Point{}, fmt.Errorf("latitude %g, longitude %g is no place on earth", lat, lon)
	}
	return a.Locate(lat, lon), nil
}

// readSiteLines takes lines "latitude longitude name"; # begins a comment.
func readSiteLines(area *survey.Area, source []byte, a *airfield.Airfield) error {
	lines := bufio.NewScanner(bytes.NewReader(source))
	for n := 1; lines.Scan(); n++ {
		text, _, _ := strings.Cut(lines.Text(), "#")
		words := strings.Fields(strings.ReplaceAll(text, ",", " "))
		if len(words) == 0 {
			continue
		}
		if len(words) < 2 {
			return fmt.Errorf("line %d: write latitude, longitude and, if you like, a name", n)
		}
		lat, err1 := strconv.ParseFloat(words[0], 64)
		lon, err2 := strconv.ParseFloat(words[1], 64)
		if err1 != nil || err2 != nil {
			return fmt.Errorf("line %d: %q and %q are not latitude and longitude in degrees, such as 53.9935 -20.0224", n, words[0], words[1])
		}
		at, err := located(a, lat, lon)
		if err != nil {
			return fmt.Errorf("line %d: %w", n, err)
		}
		area.Sites = append(area.Sites, survey.Candidate{Point: at, Name: strings.Join(words[2:], " ")})
	}
	return lines.Err()
}
