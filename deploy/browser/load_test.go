package browser_test

import (
	"fmt"
	"os"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/cdp"
	"github.com/chromedp/cdproto/network"
	"github.com/chromedp/chromedp"

	"sockline/alerting/page"
)

// hostile gives 500 texts that would do harm where text becomes markup, a
// script, a style or an address.
func hostile() []string {
	cores := []string{
		`<script>hit()</script>`, `<img src=x onerror=hit()>`, `<svg onload=hit()>`, `<svg><script>hit()</script></svg>`, `<iframe srcdoc="<script>parent.hit()</script>"></iframe>`,
		`javascript:hit()`, `data:text/html,<script>hit()</script>`, `<a href="javascript:hit()">x</a>`, `<style>*{display:none}</style>`, `<link rel=stylesheet href=//elsewhere.example/x.css>`,
		`<meta http-equiv=refresh content="0;url=//elsewhere.example">`, `<base href=//elsewhere.example/>`, `<form action=//elsewhere.example><button autofocus>x</button></form>`, `<details open ontoggle=hit()>`, `<body onload=hit()>`,
		`<video><source onerror=hit()></video>`, `<input autofocus onfocus=hit()>`, `<math><mtext></mtext><script>hit()</script></math>`, `<!--<img src=x onerror=hit()>-->`, `${hit()}`,
		`{{hit()}}`, `{{.Notice}}`, `\u003cscript\u003ehit()\u003c/script\u003e`, `&lt;script&gt;hit()&lt;/script&gt;`, `%3Cscript%3Ehit()%3C/script%3E`,
	}
	wraps := []string{"%s", `">%s`, `'>%s`, `</title>%s`, `</style>%s`, `</script>%s`, `-->%s`, `]]>%s`, "\u202e%s", `" onmouseover=hit() x="%s`,
		"\x00%s", "`%s`", `</textarea>%s`, `</template>%s`, `</noscript>%s`, "\n%s\n", `'-%s-'`, `"-%s-"`, `</svg>%s`, "\ufeff%s"}
	var out []string
	for _, w := range wraps {
		for _, c := range cores {
			out = append(out, fmt.Sprintf(w, c))
		}
	}
	return out
}

// TestHostileText gives 500 hostile texts as names of masts and runways, as
// payloads, sentences, books and reasons: none runs, none becomes a node, none
// is asked for, and all are there to be read.
func TestHostileText(t *testing.T) {
	t.Parallel()
	texts := hostile()
	if len(texts) != 500 {
		t.Fatalf("%d texts, want 500", len(texts))
	}
	const each = 125
	for from := 0; from < len(texts); from += each {
		some := texts[from : from+each]
		s := newStage(t, func(v *page.View) { poison(v, some) })
		for i, x := range some {
			s.events = append(s.events, object(dict{"id": fmt.Sprintf("e%d", i), "occurrence": x, "runway": x, "operation": x, "kind": x, "level": x, "cause": x, "state": "closed", "closed_because": x,
				"opened": "2026-07-01T14:15:03Z", "updated": "2026-07-01T14:15:03Z", "closed": "2026-07-01T14:16:03Z", "text": x, "exercise": false, "stations": dict{"used": []string{x}, "missing": []string{x}}}))
		}
		for _, v := range append(views[:len(views):len(views)], struct{ name, path, ready string }{"event", "/past/e1", `document.querySelector("#issues tbody tr")`}) {
			t.Run(fmt.Sprintf("%d/%s", from, v.name), func(t *testing.T) {
				b := open(t, s.url+"/healthz", screens[1], "404 (Not Found)", "503 (Service Unavailable)")
				// What would run is counted from the first moment on.
				eval[bool](b, `(window.hit = undefined, true)`)
				b.do(chromedp.Navigate(s.url + v.path))
				eval[bool](b, `(window.hits = 0, window.hit = () => window.hits++, document.addEventListener("securitypolicyviolation", (e) => { window.violated = e.violatedDirective + " " + e.blockedURI; }), true)`)
				b.until(20*time.Second, v.ready)
				<-time.NewTimer(300 * time.Millisecond).C
				if n := eval[float64](b, `window.hits`); n != 0 {
					t.Errorf("%.0f texts ran", n)
				}
				if nodes := eval[string](b, `[...document.querySelectorAll("script:not([src]), img, iframe, style, base, form[action*='elsewhere'], link[href*='elsewhere'], meta[content*='elsewhere'], video, math, details, [onerror], [onload], [onmouseover], [onfocus], a[href^='javascript'], a[href^='data']")].map((n) => n.outerHTML).join(" ").slice(0, 300)`); nodes != "" {
					t.Errorf("a text became a node: %s", nodes)
				}
				if violated := eval[string](b, `String(window.violated || "")`); violated != "" {
					t.Errorf("the policy had to stop something: %s", violated)
				}
				if v.name == "masts" {
					said := eval[string](b, `document.getElementById("main").textContent`)
					for _, x := range some {
						if x := strings.Trim(x, "\x00\n\ufeff"); !strings.Contains(said, x) && !strings.Contains(x, "\x00") {
							t.Errorf("%q is not shown", x)
						}
					}
				}
			})
		}
	}
}

// poison puts texts wherever a text from outside can stand.
func poison(v *page.View, texts []string) {
	at := func(i int) string { return texts[i%len(texts)] }
	masts := v.Stations[:0:0]
	for i, x := range texts {
		masts = append(masts, page.Station{ID: x, State: x, JSON: object(dict{"id": x, "state": x, "live": i%2 == 0, "age_s": 1, "problem": x, "rejected_payload": x, "rejected_why": x, "rejected_at": x,
			"findings": []string{x}, "maintenance": dict{"from": x, "to": x, "reason": x}, "book": dict{"model": x, "serial": x, "installed": x, "calibrated": x, "next_due": x, "notes": x}})})
	}
	v.Stations, v.MastsOut, v.RunwayInUse = masts, texts[:2], at(3)
	v.StatusJSON = object(dict{"version": at(4), "instance": at(5), "history": dict{"degraded": true, "reason": at(6)}, "remarks": texts[7:12]})
	v.Remarks = texts[7:12]
	for i := range v.Occurrences {
		o := &v.Occurrences[i]
		who, why := at(i+12), at(i+14)
		until := v.At.Time().Add(time.Minute).Format(time.RFC3339)
		o.Sentence, o.Trend, o.AcknowledgedBy, o.ShelvedBy, o.ShelvedReason, o.ShelvedUntil = at(i), at(i+9), &who, &who, &why, &until
	}
	for i := range v.Ends {
		v.Ends[i].Runway, v.Ends[i].Sentence = at(i), at(i+20)
		v.Ends[i].JSON = object(dict{"runway": at(i), "observed": false, "sentence": at(i + 20)})
	}
	for i := range v.Paths {
		v.Paths[i].Name, v.Paths[i].Sentence = at(i), at(i+30)
		v.Paths[i].JSON = object(dict{"runway": stagePaths[i].runway, "operation": stagePaths[i].operation, "state": "not-observed", "reason": at(i + 30), "observed": []any{}, "alerts": []any{}})
	}
	for i := range v.Alerts {
		v.Alerts[i].Sentence = at(i + 40)
	}
	var layout map[string]any
	mustJSON(v.LayoutJSON, &layout)
	for i, m := range layout["masts"].([]any) {
		m.(map[string]any)["id"] = at(i)
	}
	layout["name"] = at(2)
	v.LayoutJSON = object(layout)
	v.Outflows[0] = with(v.Outflows[0], "text", at(16), "extent", at(17))
	v.Fronts[0] = with(v.Fronts[0], "text", at(18), "kind", at(19))
}

// TestWeightAndPaint: the page Now weighs under 150 KB and is painted within a
// second, and a second of it costs less than a tenth of a core.
func TestWeightAndPaint(t *testing.T) {
	d := demo(t, "1")
	b := open(t, d.url+"/healthz", screens[0], "404 (Not Found)", "503 (Service Unavailable)")
	// The best of some: whatever else this machine does is not the page's doing.
	paint, weight := 1e9, 0.0
	for range 4 {
		if _, err := chromedp.Call(b.ctx, network.ClearBrowserCache, cdp.Empty{}); err != nil {
			t.Fatal(err)
		}
		b.mu.Lock()
		b.bytes = 0
		b.mu.Unlock()
		b.do(chromedp.Navigate(d.url))
		b.glass()
		b.until(10*time.Second, `document.querySelector("#plan svg")`)
		b.mu.Lock()
		weight = max(weight, b.bytes)
		b.mu.Unlock()
		b.until(10*time.Second, `performance.getEntriesByName("first-contentful-paint").length > 0`)
		paint = min(paint, eval[float64](b, `performance.getEntriesByName("first-contentful-paint")[0].startTime`))
	}
	t.Logf("%.1f KB were received, painted first after %.0f ms", weight/1000, paint)
	if weight > 150_000 || weight < 60_000 {
		t.Errorf("%.0f bytes were received, want at most 150000", weight)
	}
	if paint > 1000 {
		t.Errorf("painted first after %.0f ms, want 1000 at most", paint)
	}
	<-time.NewTimer(5 * time.Second).C // what is done once is done
	const seconds = 20
	steps := eval[float64](b, `(window.steps = 0, new MutationObserver(() => window.steps++).observe(document.getElementById("clock"), {childList: true, characterData: true, subtree: true}), 0)`)
	before := chromiumTime(t)
	<-time.NewTimer(seconds * time.Second).C
	used := chromiumTime(t) - before
	if steps = eval[float64](b, `window.steps`); steps < seconds-2 {
		t.Errorf("the clock moved %.0f times in %d s", steps, seconds)
	}
	share := used.Seconds() / seconds
	t.Logf("a second costs %.1f %% of a core, in all processes of the browser", 100*share)
	if share > 0.10 {
		t.Errorf("a second costs %.1f %% of a core, want 10 at most", 100*share)
	}
}

// chromiumTime is the processor time that all processes of the browser of this
// test have used: it and what descends from it.
func chromiumTime(t *testing.T) time.Duration {
	t.Helper()
	type process struct {
		parent int
		ticks  int64
		name   string
	}
	all := map[int]process{}
	stats, err := filepath.Glob("/proc/[0-9]*/stat")
	if err != nil {
		t.Fatal(err)
	}
	for _, name := range stats {
		data, err := os.ReadFile(name)
		if err != nil {
			continue // it has ended
		}
		line := string(data)
		end := strings.LastIndexByte(line, ')')
		fields := strings.Fields(line[end+1:])
		id, _ := strconv.Atoi(filepath.Base(filepath.Dir(name)))
		parent, _ := strconv.Atoi(fields[1])
		user, _ := strconv.ParseInt(fields[11], 10, 64)
		system, _ := strconv.ParseInt(fields[12], 10, 64)
		all[id] = process{parent, user + system, line[strings.IndexByte(line, '(')+1 : end]}
	}
	var total int64
	for id, p := range all {
		for up := id; up > 1; up = all[up].parent {
			if up == os.Getpid() {
				if strings.Contains(p.name, "chrom") {
					total += p.ticks
				}
				break
			}
		}
	}
	return time.Duration(total) * 10 * time.Millisecond // USER_HZ is 100 on Linux
}
