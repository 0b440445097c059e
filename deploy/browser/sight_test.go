package browser_test

import (
	"bytes"
	"fmt"
	"image"
	"image/png"
	"math"
	"slices"
	"testing"
	"time"

	"github.com/chromedp/cdproto/emulation"
	"github.com/chromedp/chromedp"

	"sockline/alerting/page"
)

// pictures are parts of the window as they are painted, by their id.
func (b *tab) pictures(ids []string) map[string]image.Image {
	b.t.Helper()
	data, err := chromedp.Run(b.ctx, chromedp.CaptureScreenshot())
	if err != nil {
		b.t.Fatal(err)
	}
	whole, err := png.Decode(bytes.NewReader(data))
	if err != nil {
		b.t.Fatal(err)
	}
	out := map[string]image.Image{}
	for _, id := range ids {
		r := eval[[]float64](b, fmt.Sprintf(`(() => { const r = document.getElementById(%q).getBoundingClientRect(); return [r.left, r.top, r.right, r.bottom].map(Math.round) })()`, id))
		out[id] = whole.(interface {
			SubImage(image.Rectangle) image.Image
		}).SubImage(image.Rect(int(r[0]), int(r[1]), int(r[2]), int(r[3])))
	}
	return out
}

// luminance is that of WCAG 2.2.
func luminance(p image.Image, x, y int) float64 {
	r, g, b, _ := p.At(x, y).RGBA()
	linear := func(v uint32) float64 {
		c := float64(v) / 0xffff
		if c <= 0.04045 {
			return c / 12.92
		}
		return math.Pow((c+0.055)/1.055, 2.4)
	}
	return 0.2126*linear(r) + 0.7152*linear(g) + 0.0722*linear(b)
}

// differs is the part of two pictures where one is lighter than the other by
// 3 to 1 or more: what is left when every hue is gone.
func differs(p, q image.Image) float64 {
	w, h := min(p.Bounds().Dx(), q.Bounds().Dx()), min(p.Bounds().Dy(), q.Bounds().Dy())
	n := 0
	for y := range h {
		for x := range w {
			a := luminance(p, p.Bounds().Min.X+x, p.Bounds().Min.Y+y)
			b := luminance(q, q.Bounds().Min.X+x, q.Bounds().Min.Y+y)
			if (max(a, b)+0.05)/(min(a, b)+0.05) >= 3 {
				n++
			}
		}
	}
	return float64(n) / float64(w*h)
}

// gallery shows every shape beside one another, made by the page's own modules
// and style sheets.
const gallery = `(async () => {
	const build = document.documentElement.dataset.build;
	const [{ mastSign }, { mark, svg, el }] = await Promise.all([import("/assets/" + build + "/signs.js"), import("/assets/" + build + "/dom.js")]);
	document.getElementById("main").replaceChildren();
	const add = (id, node) => { const d = el("div", { id, class: "panel" }, node); document.getElementById("main").append(d); d.style.width = "130px"; d.style.height = "120px"; d.style.padding = "4px"; d.style.margin = "0"; d.style.overflow = "hidden"; d.style.flex = "none"; };
	for (const shape of ["full", "half", "empty", "none"]) add("condition-" + shape, mark(shape));
	for (const state of ["live", "late", "starting", "under-maintenance", "stale"]) { const m = svg("svg", { class: "mast-mark", viewBox: "0 0 30 30" }, mastSign(15, 15, state)); m.style.width = "110px"; m.style.height = "110px"; add("mast-" + state, m); }
	for (const state of ["raised", "below", "unknown"]) { const s = el("div", { class: state }, el("span", { class: "swatch" })); s.firstChild.style.display = "block"; s.firstChild.style.width = "90px"; s.firstChild.style.height = "90px"; add("path-" + state, s); }
	for (const side of ["fall", "rise", "other"]) for (const level of ["level1", "level2", "level3"]) add("alert-" + side + "-" + level, el("article", { class: "alert " + side + " " + level }));
	for (const node of document.querySelectorAll("article.alert")) { node.style.height = "105px"; node.style.padding = "0"; }
	document.querySelector("#main").style.display = "block";
	return true;
})()`

// TestStatesWithoutColour: whatever kind of sight somebody has, no two states
// of one thing look alike. Where the browser paints in grey only the shape is
// left.
func TestStatesWithoutColour(t *testing.T) {
	s := newStage(t, nil)
	b := open(t, s.url+"/basis", screen{"gallery", 800, 3200}, "404 (Not Found)", "503 (Service Unavailable)", "the page has no element")
	b.until(10*time.Second, `document.getElementById("status")`)
	families := [][]string{
		{"condition-full", "condition-half", "condition-empty", "condition-none"},
		{"mast-live", "mast-late", "mast-starting", "mast-under-maintenance", "mast-stale"},
		{"path-raised", "path-below", "path-unknown"},
		{"alert-fall-level1", "alert-fall-level2", "alert-fall-level3"},
		{"alert-rise-level1", "alert-rise-level2", "alert-rise-level3"},
		{"alert-fall-level2", "alert-rise-level2", "alert-other-level2"},
		{"alert-fall-level3", "alert-rise-level3", "alert-other-level3"},
	}
	eval[bool](b, gallery)
	for _, light := range []string{"day", "night"} {
		b.light(light)
		for _, sight := range []emulation.SetEmulatedVisionDeficiencyType{"achromatopsia", "deuteranopia", "protanopia", "tritanopia"} {
			if _, err := chromedp.Call(b.ctx, emulation.SetEmulatedVisionDeficiency, emulation.SetEmulatedVisionDeficiencyParams{Type: sight}); err != nil {
				t.Fatal(err)
			}
			b.shot(fmt.Sprintf("sight-%s-%s", light, sight))
			pictures := b.pictures(slices.Concat(families...))
			for _, family := range families {
				for i, x := range family {
					for _, y := range family[i+1:] {
						// Of a sign that fills the picture one part in a hundred is plain to see.
						if d := differs(pictures[x], pictures[y]); d < 0.01 {
							t.Errorf("%s, by %s: %s and %s differ in %.2f %% of their picture", sight, light, x, y, 100*d)
						}
					}
				}
			}
		}
	}
}

// TestSizes: at the pitch of the pixels and the distance that are set, the
// amount is 12.8 mm high, what is read at a glance 9.3 mm, and the mark of the
// condition 25 mm, each for 2 m.
func TestSizes(t *testing.T) {
	s := newStage(t, nil)
	b := open(t, s.url, screens[0])
	b.glass()
	for _, profile := range []struct {
		name            string
		pitch, distance float64
		size            screen
	}{
		{"24 inches, 1920x1080", 0.277, 2, screens[0]},
		{"27 inches, 2560x1440", 0.233, 2, screen{"", 2560, 1440}},
		{"10 inches, 1280x800, at 1.2 m", 0.17, 1.2, screens[1]},
		{"wall of 55 inches, 1920x1080, at 3 m", 0.634, 3, screens[0]},
	} {
		t.Run(profile.name, func(t *testing.T) {
			b.do(chromedp.EmulateViewport(profile.size.wide, profile.size.high))
			eval[bool](b, fmt.Sprintf(`(localStorage.setItem("sockline.pitch", "%g"), localStorage.setItem("sockline.distance", "%g"), window.dispatchEvent(new Event("sockline-screen")), true)`, profile.pitch, profile.distance))
			high := func(selector string) float64 {
				// The height of a capital in the very font that is used.
				px := eval[float64](b, fmt.Sprintf(`(() => { const s = getComputedStyle(document.querySelector(%q)); const c = document.createElement("canvas").getContext("2d"); c.font = s.fontWeight + " " + s.fontSize + " " + s.fontFamily; return c.measureText("H").actualBoundingBoxAscent; })()`, selector))
				return px * profile.pitch
			}
			scale := profile.distance / 2
			for selector, least := range map[string]float64{".alert .amount": 12.8, "#condition": 9.3, "#clock": 9.3, "#alerts article .sentence": 9.3, "#ends td": 9.3, "#item-masts": 9.3, "#item-shelf": 9.3, "#item-sound": 9.3} {
				if got := high(selector); got < least*scale*0.99 { // the canvas gives whole pixels
					t.Errorf("%s is %.1f mm high, want %.1f at %g m", selector, got, least*scale, profile.distance)
				}
			}
			if mark := eval[float64](b, `document.querySelector("#rail .mark").getBoundingClientRect().height`) * profile.pitch; mark < 25*scale*0.99 {
				t.Errorf("the mark is %.1f mm high, want %.1f", mark, 25*scale)
			}
			b.shot("size " + profile.name)
		})
	}
}

// TestStillness: where motion is to be reduced nothing flashes; elsewhere the
// marker does, and only it.
func TestStillness(t *testing.T) {
	s := newStage(t, nil)
	b := open(t, s.url, screens[0])
	b.glass()
	const flashing = `document.getAnimations().filter((a) => a.effect.getTiming().iterations === Infinity).map((a) => a.effect.target.className + " " + a.effect.getTiming().duration).sort().join(", ")`
	if got := eval[string](b, flashing); got != "blink fast 500, blink slow 2000" {
		t.Errorf("what flashes: %s", got)
	}
	if _, err := chromedp.Call(b.ctx, emulation.SetEmulatedMedia, emulation.SetEmulatedMediaParams{Features: []*emulation.MediaFeature{{Name: "prefers-reduced-motion", Value: "reduce"}}}); err != nil {
		t.Fatal(err)
	}
	b.until(5*time.Second, `(`+flashing+`) === ""`)
	// The watch of the style sheet goes on all the same.
	if n := eval[float64](b, `document.getAnimations().length`); n == 0 {
		t.Error("with reduced motion the page no longer blanks itself")
	}
}

// TestSound: the sound that is due is made, and a browser that forbids it is
// found out.
func TestSound(t *testing.T) {
	s := newStage(t, nil)
	b := open(t, s.url, screens[0])
	b.glass()
	b.until(5*time.Second, `document.getElementById("item-sound").textContent === "Sound blocked"`)
	eval[bool](b, `(window.tones = [], window.real = AudioContext.prototype.createOscillator, AudioContext.prototype.createOscillator = function () { const o = window.real.call(this); const start = o.start; o.start = function (...a) { window.tones.push(o.frequency.value); return start.apply(o, a); }; return o; }, true)`)
	b.do(chromedp.Click(chromedp.CSS("#item-sound")))
	b.until(5*time.Second, `document.getElementById("item-sound").textContent === "Sound on"`)
	b.until(10*time.Second, `window.tones.includes(1760) && window.tones.includes(740)`)
	if bad := eval[bool](b, `window.tones.some((f) => f < 500 || f > 3000)`); bad {
		t.Error("a tone lies outside 500 to 3000 Hz")
	}
	// What is acknowledged is silent.
	s.set(func(v *page.View) {
		for i := range v.Occurrences {
			v.Occurrences[i].Sound, v.Occurrences[i].State = "none", "raised-seen"
		}
	})
	b.until(5*time.Second, `document.querySelectorAll(".blink.seen").length === 2`)
	eval[bool](b, `(window.tones = [], true)`)
	<-time.NewTimer(4 * time.Second).C
	if n := eval[float64](b, `window.tones.length`); n != 0 {
		t.Errorf("%.0f tones though everything is acknowledged", n)
	}
}
