package main

import (
	"fmt"
	"io"
	"math"
	"strings"

	"sockline/alerting"
	"sockline/alerting/lifecycle"
	"sockline/alerting/wording"
	"sockline/config"
	"sockline/sensors"
	"sockline/sensors/quantity"
	"sockline/sensors/synthetic"
)

const (
	// windEvery is the event time between two accounts of the wind.
	windEvery = 30 * sensors.Second
	// storyWidth is the length at which the story's lines are broken.
	storyWidth = 100
)

// story tells what happens in the demo as sentences: the wind at the runway
// ends every half minute, the state of a path when it changes, and of an alert
// what opens it, changes its level or trend, and closes it. It is written by
// the loop, step by step, so the same weather gives the same text.
type story struct {
	out    io.Writer
	cfg    *config.Config
	scene  *synthetic.Scene
	states map[string]alerting.PathState
	told   map[string]lifecycle.Alert // as last told

	steps    int
	masts    int // the most that reported at a time
	alerts   int
	greatest lifecycle.Alert // the largest change
	err      error           // the first failure to write
}

func newStory(out io.Writer, cfg *config.Config, scene *synthetic.Scene) *story {
	return &story{out: out, cfg: cfg, scene: scene,
		states: make(map[string]alerting.PathState), told: make(map[string]lifecycle.Alert)}
}

func (s *story) print(text string) {
	if _, err := io.WriteString(s.out, text); err != nil && s.err == nil {
		s.err = fmt.Errorf("tell the story: %w", err)
	}
}

// say prints a paragraph, its first line led by the time of day.
func (s *story) say(at sensors.Instant, text string) {
	s.print(wrap(at.Time().Format("15:04:05")+"  ", text, storyWidth))
}

// wrap breaks a text into lines of at most width characters, where it has
// blanks; the first begins with lead, the others with as many blanks.
func wrap(lead, text string, width int) string {
	var b strings.Builder
	b.WriteString(lead)
	room := width - len(lead)
	used := 0
	for _, word := range strings.Fields(text) {
		if used > 0 && used+1+len(word) > room {
			b.WriteString("\n" + strings.Repeat(" ", len(lead)))
			used = 0
		}
		if used > 0 {
			b.WriteByte(' ')
			used++
		}
		b.WriteString(word)
		used += len(word)
	}
	b.WriteByte('\n')
	return b.String()
}

func (s *story) begin() {
	s.print(wrap("", fmt.Sprintf("EXERCISE: %s, an invented airfield with %d masts; the weather is synthetic, from %s UTC on.",
		s.scene.Title, len(s.cfg.Stations), s.scene.Start.Time().Format("2006-01-02 15:04:05")), storyWidth))
	s.print(wrap("", alerting.Notice, storyWidth) + "\n")
}

// step tells what is new in a step.
func (s *story) step(rep *report) {
	s.steps++
	s.masts = max(s.masts, rep.Live)
	for i := range rep.Paths {
		p := &rep.Paths[i]
		if name := p.Path.Name(); s.states[name] != p.State {
			s.states[name] = p.State
			s.say(rep.At, p.Text())
		}
	}
	s.notices(rep)
	if rep.At%windEvery == 0 {
		for _, e := range rep.Ends {
			s.say(rep.At, wording.EndText(e))
		}
	}
}

// notices tells the issues of a step that say more than how an open alert goes
// on, and after them the sentence that goes with all of them.
func (s *story) notices(rep *report) {
	var texts []string
	for _, n := range rep.Notices {
		if s.news(n) {
			texts = append(texts, n.Text())
		}
	}
	for i, text := range texts {
		if i == len(texts)-1 {
			text += " " + alerting.Notice
		}
		s.say(rep.At, text)
	}
}

// news reports whether an issue opens or closes an alert, or changes its level
// or trend.
func (s *story) news(n wording.Notice) bool {
	a := n.Alert()
	was := s.told[a.ID]
	if n.Opening() {
		s.alerts++
	}
	if math.Abs(a.PeakChange) > math.Abs(s.greatest.PeakChange) {
		s.greatest = a
	}
	if !n.Opening() && !n.Closing() && a.Level == was.Level && a.Trend == was.Trend {
		return false
	}
	s.told[a.ID] = a
	return true
}

// end sums up.
func (s *story) end() {
	text := fmt.Sprintf("EXERCISE ended after %d steps of one second. Masts that reported: %d of %d. Alerts that opened: %d.",
		s.steps, s.masts, len(s.cfg.Stations), s.alerts)
	if g := s.greatest; s.alerts > 0 {
		verb := "a fall of the headwind"
		switch g.Kind {
		case alerting.HeadwindLoss:
		case alerting.HeadwindGain:
			verb = "a rise of the headwind"
		default: // whichever is the first thing that changed
			verb = "a change of the wind"
		}
		text += fmt.Sprintf(" The largest change: %s by about %.0f kt, %s %s, at %s.",
			verb, quantity.Knots(math.Abs(g.PeakChange)), g.Operation, g.Runway, g.PeakAt.Time().Format("15:04:05"))
	}
	s.print("\n" + wrap("", text, storyWidth) + wrap("", alerting.Notice, storyWidth))
}
