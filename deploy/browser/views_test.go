package browser_test

import (
	"fmt"
	"os"
	"path/filepath"
	"testing"
	"time"

	"sockline/alerting/page"
)

// views is every page that a person visits.
var views = [...]struct{ name, path, ready string }{
	{"now", "/", `!document.getElementById("glass").hidden && document.querySelector("#plan svg")`},
	{"past", "/past", `document.getElementById("events-told").textContent.match(/event/) && !document.getElementById("events-told").textContent.match(/Loading/)`},
	{"masts", "/masts", `document.querySelectorAll(".mast-card").length > 0`},
	{"basis", "/basis", `document.getElementById("status") && document.getElementById("status").childElementCount > 0 && !document.getElementById("configuration").textContent.match(/Loading/)`},
	{"handover", "/handover", `!document.getElementById("open").textContent.match(/Loading/) && !document.getElementById("last").textContent.match(/Loading/)`},
}

// axe is the checker of accessibility.
func axe(t *testing.T) string {
	t.Helper()
	source, err := os.ReadFile(filepath.Join("node_modules", "axe-core", "axe.min.js"))
	if err != nil {
		t.Fatalf("axe-core is missing; run npm ci in deploy/browser: %v", err)
	}
	return string(source)
}

// accessible fails the test for everything that axe-core finds.
func (b *tab) accessible(name string) {
	b.t.Helper()
	eval[bool](b, axe(b.t)+`; true`)
	found := eval[[]string](b, `axe.run(document, {resultTypes: ["violations"], runOnly: ["wcag2a", "wcag2aa", "wcag21a", "wcag21aa", "wcag22aa", "best-practice"]}).then((r) =>
		r.violations.map((v) => v.id + ": " + v.help + " at " + v.nodes.slice(0, 4).map((n) => n.target.join(" ") + " (" + n.failureSummary.replaceAll("\n", " ") + ")").join("; ")))`)
	for _, v := range found {
		b.t.Errorf("%s: axe-core finds %s", name, v)
	}
}

// TestViews looks at every view by day and by night on three screens: nothing
// goes wrong, nothing is cut off at the side, what is pressed is large enough,
// the notice is there, and axe-core finds nothing.
func TestViews(t *testing.T) {
	s := newStage(t, nil)
	for _, v := range views {
		for _, size := range screens {
			t.Run(v.name+"/"+size.name, func(t *testing.T) {
				b := open(t, s.url+v.path, size, "404 (Not Found)", "503 (Service Unavailable)")
				b.until(20*time.Second, v.ready)
				lights := []string{"day", "night"}
				if long() {
					lights = []string{"day", "dusk", "night", "late"}
				}
				for _, light := range lights {
					b.light(light)
					b.shot(fmt.Sprintf("%s-%s-%s", v.name, size.name, light))
					b.accessible(v.name + " on " + size.name + " by " + light)
				}
				if over := eval[float64](b, `document.documentElement.scrollWidth - window.innerWidth`); over > 0 {
					t.Errorf("the page is %.0f pixels wider than the screen: %s", over, eval[string](b, `[...document.querySelectorAll("body *")].filter((n) => n.getBoundingClientRect().right > innerWidth + 1 && getComputedStyle(n).position !== "fixed").slice(0, 4).map((n) => n.tagName + "." + n.className + "#" + n.id).join(", ")`))
				}
				if small := eval[string](b, smallTargets); small != "" {
					t.Errorf("too small to be touched: %s", small)
				}
				if !eval[bool](b, `document.querySelector("footer.notice p").getBoundingClientRect().height > 10 && /Supplementary to certified systems/.test(document.querySelector("footer.notice").innerText)`) {
					t.Error("the notice is not to be seen")
				}
			})
		}
	}
}

// smallTargets names what can be pressed and is less than 44 pixels high or
// wide. Links within a running text are excepted, as WCAG 2.2 (2.5.8) has it.
const smallTargets = `[...document.querySelectorAll("button, select, input, textarea, a[href]")].filter((n) => {
	const r = n.getBoundingClientRect();
	if (r.width === 0 || n.closest("p, dd, #last, .skip") && n.tagName === "A" || n.classList.contains("skip")) return false;
	if (n.tagName === "INPUT" && (n.type === "checkbox" || n.type === "radio")) return r.width < 43.5 || r.height < 43.5;
	return r.height < 43.5 || r.width < 43.5;
}).map((n) => n.tagName + " " + (n.id || n.textContent) + " " + Math.round(n.getBoundingClientRect().width) + "x" + Math.round(n.getBoundingClientRect().height)).join(", ")`

// TestStates looks at what is shown when little or nothing is known.
func TestStates(t *testing.T) {
	tests := []struct {
		name   string
		change func(*page.View)
		want   string // that the page says
	}{
		{"nothing-open", func(v *page.View) { v.Alerts, v.Occurrences, v.Outflows, v.Fronts = nil, nil, nil, nil }, "No alert is open on what is observed. That does not mean no windshear."},
		{"blind", func(v *page.View) {
			stormless(v)
			v.Condition = "blind"
		}, "No path is observed."},
		{"empty", func(v *page.View) {
			*v = page.View{Seq: v.Seq, Made: v.Made, At: v.At, ValidUntil: v.ValidUntil, Condition: "blind"}
		}, "Blind"},
		{"degraded", func(v *page.View) {
			v.StatusJSON = object(dict{"condition": "observing", "history": dict{"degraded": true, "reason": "the disk is full"}, "remarks": []string{"The broker is built in."}})
		}, "the disk is full"},
		{"acknowledged", func(v *page.View) {
			who, at := "ada", v.At.Time().Format(time.RFC3339)
			v.Occurrences[0].State, v.Occurrences[0].AcknowledgedBy, v.Occurrences[0].AcknowledgedAt = "raised-seen", &who, &at
			until, why := v.At.Time().Add(15*time.Minute).Format(time.RFC3339), "mowing beside the mast"
			v.Occurrences[1].State, v.Occurrences[1].ShelvedBy, v.Occurrences[1].ShelvedUntil, v.Occurrences[1].ShelvedReason = "shelved", &who, &until, &why
		}, "Acknowledged by ada"},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			s := newStage(t, tt.change)
			b := open(t, s.url, screens[0], "503 (Service Unavailable)")
			b.glass()
			b.until(5*time.Second, fmt.Sprintf(`document.body.innerText.includes(%q)`, tt.want))
			b.shot("state-" + tt.name)
			b.accessible(tt.name)
		})
	}
}

// stormless takes all numbers out of a view.
func stormless(v *page.View) {
	v.Alerts, v.Occurrences, v.Outflows, v.Fronts, v.Profiles = nil, nil, nil, nil, nil
	for i := range v.Paths {
		v.Paths[i].JSON = object(dict{"runway": stagePaths[i].runway, "operation": stagePaths[i].operation, "state": "not-observed", "reason": "no mast beside this path reports", "observed": []any{}, "alerts": []any{}})
	}
	for i := range v.Ends {
		v.Ends[i].JSON = object(dict{"runway": v.Ends[i].Runway, "observed": false, "sentence": "Wind at runway " + v.Ends[i].Runway + ": not observed, because its mast is lost."})
	}
	v.AgeS = nil
}
