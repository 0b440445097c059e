package config

import (
	"path/filepath"
	"reflect"
	"testing"
	"time"

	"sockline/sensors"
)

func TestMastKeysArrive(t *testing.T) {
	cfg := mustLoad(t, filepath.Join(cases, "mast.good.toml"))
	at := func(day, hour, minute int) sensors.Instant {
		return sensors.At(time.Date(2026, 7, day, hour, minute, 0, 0, time.UTC))
	}
	s := cfg.Stations[1]
	if want := []sensors.RoughnessSector{{From: 30, To: 90, Length: 0.25}, {From: 90, To: 30, Length: 0.05}}; !reflect.DeepEqual(s.Roughness, want) {
		t.Errorf("%+v", s.Roughness)
	}
	if !s.Exposure || !s.CorrectClock {
		t.Errorf("exposure %v, clock %v", s.Exposure, s.CorrectClock)
	}
	if want := (sensors.Book{Model: "Ardel 3", Serial: "0417", Installed: "2025-03-02", Calibrated: "2026-03-02",
		NextDue: "2028-03-02", Notes: "an invented instrument"}); s.Book != want {
		t.Errorf("%+v", s.Book)
	}
	want := []sensors.Maintenance{
		{From: at(1, 8, 0), To: at(1, 10, 0), Reason: "cups"},
		{From: at(2, 8, 0), To: at(2, 10, 30), Reason: "new bearings"},
	}
	if !reflect.DeepEqual(s.Maintenance, want) {
		t.Errorf("%+v", s.Maintenance)
	}
	for _, c := range []struct {
		at    sensors.Instant
		under bool
	}{{at(1, 8, 0) - 1, false}, {at(1, 8, 0), true}, {at(1, 10, 0) - 1, true}, {at(1, 10, 0), false}, {at(2, 9, 0), true}} {
		if _, under := s.UnderMaintenance(c.at); under != c.under {
			t.Errorf("%v: under maintenance %v", c.at, under)
		}
	}
	// Without these keys nothing is corrected.
	if plain := cfg.Stations[0]; plain.Roughness != nil || plain.Exposure || plain.CorrectClock || plain.Maintenance != nil {
		t.Errorf("%+v", plain)
	}
}
