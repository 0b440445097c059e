package main

import (
	"fmt"
	"path/filepath"
	"strings"

	"sockline/sensors/decode"
	"sockline/sensors/quality"
)

// note keeps something for the summary.
func (r *replayer) note(format string, args ...any) {
	r.notes = append(r.notes, fmt.Sprintf(format, args...))
}

// isPacked reports whether a capture of this name is compressed.
func isPacked(path string) bool {
	ext := filepath.Ext(path)
	return ext == ".gz" || ext == ".zst"
}

// summarize says on standard error what was replayed and what of it was of no
// use: nothing that is wrong with the input may pass in silence.
func (r *replayer) summarize() {
	// The wall clock is for this line alone: nothing that is printed as data
	// may depend on it.
	took := max(r.p.now().Sub(r.began).Seconds(), 1e-3)
	w := r.p.stderr
	fmt.Fprintf(w, "EXERCISE: %d readings in %d steps replayed in %.1f s (%.0f readings/s, %.0f times real time): %d alerts opened, %d issues\n",
		r.readings, r.steps, took, float64(r.readings)/took, float64(r.steps)/took, r.alerts, r.issues)
	for _, note := range r.notes {
		fmt.Fprintf(w, "note: %s\n", note)
	}
	if r.foreign > 0 {
		fmt.Fprintf(w, "note: %d messages on topics of no configured station\n", r.foreign)
	}
	counts := r.engine.Counts()
	for i, s := range r.cfg.Stations {
		var parts []string
		for _, reason := range decode.Reasons() {
			if n := counts.Decode[i][reason]; n > 0 {
				parts = append(parts, fmt.Sprintf("%d %s", n, reason))
			}
		}
		for _, reason := range quality.Reasons() {
			if n := counts.Quality[i][reason]; n > 0 {
				parts = append(parts, fmt.Sprintf("%d %s", n, reason))
			}
		}
		if n := counts.Copies[i]; n > 0 {
			parts = append(parts, fmt.Sprintf("%d copies", n))
		}
		if len(parts) > 0 { // a station without complaint needs no line
			fmt.Fprintf(w, "station %s: %s", s.ID, strings.Join(parts, ", "))
			if why := counts.LastWhy[i]; why != "" {
				fmt.Fprintf(w, " (last: %s)", why)
			}
			fmt.Fprintln(w)
		}
	}
}
