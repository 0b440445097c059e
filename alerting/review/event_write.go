package review

import (
	_ "embed"
	"fmt"
	"html/template"
	"io"
	"time"
)

//go:embed event.html
var eventPage string

// WriteHTML writes the report as one page that needs nothing else, for a screen
// or for paper.
func (e *Event) WriteHTML(w io.Writer) error {
	t, err := template.New("event").Funcs(template.FuncMap{
		"css":   func() template.CSS { return template.CSS(sheetStyle) },
		"clock": anyClock, "fellrose": fellRose, "upper": upperFirst,
	}).Parse(eventPage)
	if err != nil {
		return fmt.Errorf("prepare the report of an event: %w", err)
	}
	drawn := struct {
		*Event
		Plan, Profiles, OverTime template.HTML
		Winds                    []template.HTML
	}{e, e.plan(), e.profiles(), e.overTime(), e.winds()}
	if err := t.Execute(w, drawn); err != nil {
		return fmt.Errorf("write the report of event %s: %w", e.ID, err)
	}
	return nil
}

// anyClock is the time of day of a time or of a pointer to one.
func anyClock(v any) string {
	switch t := v.(type) {
	case time.Time:
		return clock(t)
	case *time.Time:
		return clock(*t)
	}
	return ""
}
