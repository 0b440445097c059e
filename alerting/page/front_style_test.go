package page

import (
	"math"
	"regexp"
	"strconv"
	"strings"
	"testing"
)

// styles is all that the style sheets say.
func styles(t *testing.T) string {
	t.Helper()
	g := mustGlass(t)
	return string(g.assets["frame.css"].plain) + string(g.assets["views.css"].plain)
}

// tokens reads the colours of the lights from the style sheet.
func tokens(t *testing.T) map[string]map[string][3]float64 {
	t.Helper()
	themes := map[string]map[string][3]float64{}
	for _, block := range regexp.MustCompile(`(?s):root([^{}]*) \{([^{}]*--ground[^{}]*)\}`).FindAllStringSubmatch(styles(t), -1) {
		theme := map[string][3]float64{}
		for _, m := range regexp.MustCompile(`--([a-z-]+): #([0-9a-f]{6});`).FindAllStringSubmatch(block[2], -1) {
			var c [3]float64
			for i := range c {
				v, err := strconv.ParseUint(m[2][2*i:2*i+2], 16, 8)
				if err != nil {
					t.Fatal(err)
				}
				c[i] = float64(v) / 255
			}
			theme[m[1]] = c
		}
		themes["root"+block[1]] = theme
	}
	if len(themes) != 5 { // day, the default of a dark system, dusk, night, late
		t.Fatalf("the style sheet has %d lights, want 5", len(themes))
	}
	return themes
}

// contrast is the ratio of WCAG 2.2, "contrast ratio" and "relative luminance".
func contrast(a, b [3]float64) float64 {
	luminance := func(c [3]float64) float64 {
		var l float64
		for i, w := range []float64{0.2126, 0.7152, 0.0722} {
			v := c[i] / 12.92
			if c[i] > 0.04045 {
				v = math.Pow((c[i]+0.055)/1.055, 2.4)
			}
			l += w * v
		}
		return l
	}
	la, lb := luminance(a), luminance(b)
	return (max(la, lb) + 0.05) / (min(la, lb) + 0.05)
}

func TestContrastFormula(t *testing.T) {
	black, white := [3]float64{}, [3]float64{1, 1, 1}
	if c := contrast(black, white); math.Abs(c-21) > 1e-9 { // by definition: 1.05/0.05
		t.Errorf("black on white is %.3f, want 21", c)
	}
}

// TestContrast holds 7:1 for every text and 3:1 for every shape, on each
// ground that it can stand on, in both themes.
func TestContrast(t *testing.T) {
	pairs := []struct {
		front, back string
		least       float64
	}{
		{"ink", "panel", 7}, {"ink", "stripe", 7}, {"ink", "ground", 7},
		{"quiet", "panel", 7}, {"quiet", "stripe", 7}, {"on-band", "band", 7},
		{"fall", "panel", 3}, {"rise", "panel", 3}, {"rule", "panel", 3}, {"hatch", "panel", 3},
		{"fall", "stripe", 3}, {"rise", "stripe", 3}, {"rule", "stripe", 3}, {"band", "ground", 3},
		{"ink", "field", 7}, {"quiet", "field", 7}, {"middle", "panel", 3}, {"quiet", "ground", 7},
	}
	for name, theme := range tokens(t) {
		for _, p := range pairs {
			front, ok1 := theme[p.front]
			back, ok2 := theme[p.back]
			if !ok1 || !ok2 {
				t.Errorf("%s theme: no colour %s or %s", name, p.front, p.back)
				continue
			}
			if c := contrast(front, back); c < p.least {
				t.Errorf("%s theme: %s on %s is %.2f:1, want %.0f:1", name, p.front, p.back, c, p.least)
			}
		}
	}
}

// TestNoGreen: green would say that a path is in order, which cannot be said.
func TestNoGreen(t *testing.T) {
	for name, theme := range tokens(t) {
		for token, c := range theme {
			if c[1] > c[0]+0.06 && c[1] > c[2]+0.06 {
				t.Errorf("%s theme: %s is green", name, token)
			}
		}
	}
	for _, word := range []string{"green", "lime", "olive", "teal"} {
		if strings.Contains(styles(t), word) {
			t.Errorf("the style sheet names %s", word)
		}
	}
}

// TestStatesDifferWithoutColour: each state of a path has its own shape, and
// each level its own weight.
func TestStatesDifferWithoutColour(t *testing.T) {
	rules := map[string]string{}
	for _, selector := range []string{".below .swatch", ".unknown .swatch", ".raised .swatch", ".level1", ".level2", ".level3"} {
		m := regexp.MustCompile(`(?m)^` + regexp.QuoteMeta(selector) + ` \{(.*)\}$`).FindStringSubmatch(styles(t))
		if m == nil {
			t.Fatalf("no rule for %s", selector)
		}
		body := regexp.MustCompile(`var\(--[a-z-]+\)`).ReplaceAllString(m[1], "C")
		for other, same := range rules {
			if same == body {
				t.Errorf("%s and %s differ by colour only", selector, other)
			}
		}
		rules[selector] = body
	}
	if regexp.MustCompile(`url\([^#]`).MatchString(styles(t)) || strings.Contains(styles(t), "@import") {
		t.Error("the style sheet asks for something from elsewhere")
	}
}

// TestOnlyAMarkerFlashes: 2 times a second or once in two seconds, never the
// text, and not at all where motion is to be reduced.
func TestOnlyAMarkerFlashes(t *testing.T) {
	css := styles(t)
	endless := regexp.MustCompile(`([^{}]+)\{[^{}]*animation:([^;{}]*)infinite[^{}]*\}`).FindAllStringSubmatch(css, -1)
	if len(endless) != 2 {
		t.Fatalf("%d rules go on without end, want the two of the marker", len(endless))
	}
	for i, want := range []string{"500ms", "2s"} {
		if !strings.Contains(endless[i][1], ".blink.") || !strings.Contains(endless[i][2], " "+want+" ") {
			t.Errorf("the rule %s flashes with%s, want a marker with %s", strings.TrimSpace(endless[i][1]), endless[i][2], want)
		}
	}
	if !regexp.MustCompile(`prefers-reduced-motion: reduce\) \{ \.blink\.fast, \.blink\.slow \{ animation: none`).MatchString(css) {
		t.Error("the marker flashes where motion is to be reduced")
	}
}
