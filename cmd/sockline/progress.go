package main

import (
	"fmt"
	"io"
	"os"
	"strings"
	"time"

	"golang.org/x/term"
)

const (
	progressAfter = 2 * time.Second        // what is over sooner needs no bar
	progressEvery = 200 * time.Millisecond // between two drawings
	progressWidth = 30                     // characters
)

// progress draws how far a command has come: on a terminal only, and only
// once it has taken a while.
type progress struct {
	out        io.Writer // nil where nobody would see it
	now        func() time.Time
	label      string
	began, was time.Time
	calls      uint
	left       bool // say how long it will take, too
	drawn      bool
}

// newProgress begins a bar. Its drawings go to the standard error of p.
func newProgress(p *program, label string) *progress {
	g := &progress{now: p.now, label: label}
	if f, ok := p.stderr.(*os.File); ok && term.IsTerminal(int(f.Fd())) {
		g.out = f
		g.began = g.now()
		g.was = g.began
	}
	return g
}

// withLeft also says how long the rest will take.
func (g *progress) withLeft() *progress {
	g.left = true
	return g
}

// at draws the share (0 to 1) that is done. It looks at the clock on every
// 64th call only, because a replay calls it with each step.
func (g *progress) at(share func() float64) {
	if g.out == nil {
		return
	}
	if g.calls++; g.calls%64 == 0 {
		g.draw(share)
	}
}

// draw is at for those who call seldom.
func (g *progress) draw(share func() float64) {
	if g.out == nil {
		return
	}
	now := g.now()
	if now.Sub(g.began) < progressAfter || now.Sub(g.was) < progressEvery {
		return
	}
	g.was, g.drawn = now, true
	done := min(max(share(), 0), 1)
	n := int(done * progressWidth)
	fmt.Fprintf(g.out, "\r%s [%s%s] %3.0f %%", g.label, strings.Repeat("=", n), strings.Repeat(" ", progressWidth-n), done*100)
	if g.left && done > 0 {
		fmt.Fprintf(g.out, ", %-*s", leftWidth, timeLeft(time.Duration(float64(now.Sub(g.began))*(1-done)/done)))
	}
}

// leftWidth is the length of the longest words of timeLeft.
const leftWidth = 18

// timeLeft is how long something will take, in words.
func timeLeft(d time.Duration) string {
	switch {
	case d < time.Minute:
		return fmt.Sprintf("%d s left", max(int(d.Seconds()), 1))
	case d < 2*time.Hour:
		return fmt.Sprintf("%.0f min left", d.Minutes())
	}
	return fmt.Sprintf("%.0f h left", d.Hours())
}

// end wipes the bar away.
func (g *progress) end() {
	if g.drawn {
		fmt.Fprintf(g.out, "\r%s\r", strings.Repeat(" ", len(g.label)+progressWidth+11+leftWidth))
	}
}
