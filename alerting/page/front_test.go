package page

import (
	"bytes"
	"compress/gzip"
	"io"
	"net/http"
	"net/http/httptest"
	"regexp"
	"strings"
	"testing"
	"time"

	"sockline/alerting"
)

// TestOldViewsAreNoInformation holds the rule that nothing stale is ever
// shown: neither to programs nor to people.
func TestOldViewsAreNoInformation(t *testing.T) {
	tests := []struct {
		name  string
		view  *View
		known bool
	}{
		{"fresh", sample(0), true},
		{"just young enough", sample(MaxAge), true},
		{"too old", sample(MaxAge + time.Millisecond), false},
		{"made in the future: the clock was set back", sample(-time.Hour), false},
		{"none yet", nil, false},
	}
	for _, tt := range tests {
		t.Run(tt.name, func(t *testing.T) {
			p, _ := serve(t, tt.view, nil)
			status := http.StatusOK
			if !tt.known {
				status = http.StatusServiceUnavailable
			}
			for _, address := range []string{"/api/v1/now", "/readyz"} {
				r := get(p, address)
				object(t, r)
				if r.StatusCode != status {
					t.Errorf("%s answers %d, want %d", address, r.StatusCode, status)
				}
			}
			html := text(t, get(p, "/"))
			if !strings.Contains(html, alerting.Notice) {
				t.Error("the page is without the notice")
			}
			for _, value := range []string{"14 kt", "28 kt", "One alert is open.", "Below limits", "below", "Partly observing",
				"0.4 s old", "stale", "disk is full", "That does not mean"} {
				body := html[strings.Index(html, "<body"):]
				if !tt.known && strings.Contains(body, value) {
					t.Errorf("a page without information shows %q", value)
				}
			}
			if got := strings.Contains(html, "<h1>Partly observing</h1>"); got != tt.known {
				t.Errorf("the condition is shown: %v, want %v", got, tt.known)
			}
		})
	}
}

func TestFront(t *testing.T) {
	p, _ := serve(t, sample(1500*time.Millisecond), nil)
	r := get(p, "/")
	if got := r.Header.Get("Content-Type"); r.StatusCode != 200 || got != "text/html; charset=utf-8" {
		t.Fatalf("answer %d, %s", r.StatusCode, got)
	}
	html := text(t, r)
	for _, want := range []string{
		"Partly observing", "2026-07-01 14:15:39 UTC", "Skerry Moor",
		"The headwind falls by about 28 kt", "Level 3 of 3, beyond margin", `"alert fall level3"`, `"alert rise level1 unseen"`,
		"Alert open", "Below limits", "Not observed", "Not observed: 5.0 to 4.0 km before the threshold.",
		"From 240 degrees magnetic", "touch07", "stale", "The history is not being recorded",
		`<noscript><meta http-equiv="refresh" content="2"></noscript>`,
		`"words known lasts3"`, `"expired lasts3"`, // 1.5 s old: at most 3 whole seconds are left of 5
	} {
		if !strings.Contains(html, want) {
			t.Errorf("the page is without %q", want)
		}
	}
	for _, forbidden := range []string{"<script>", "http://", "https://", " style=", "<style", "EXERCISE"} {
		if strings.Contains(html, forbidden) {
			t.Errorf("the page contains %q", forbidden)
		}
	}
}

func TestNoOpenAlertIsNotCalledCalm(t *testing.T) {
	v := sample(0)
	v.Alerts = nil
	p, _ := serve(t, v, nil)
	html := text(t, get(p, "/"))
	if !strings.Contains(html, "No alert is open. That does not mean no windshear.") {
		t.Error("the page does not say what no alert means")
	}
	for _, word := range []string{"clear", "safe", "normal", "calm", "all good"} {
		if strings.Contains(strings.ToLower(html[strings.Index(html, "<body"):]), word) {
			t.Errorf("the page uses the word %q", word)
		}
	}
}

func TestExerciseIsUnmistakable(t *testing.T) {
	for _, tt := range []struct {
		name            string
		program, marked bool
	}{{"the program", true, false}, {"the view", false, true}} {
		t.Run(tt.name, func(t *testing.T) {
			v := sample(0)
			v.Exercise = tt.marked
			p, _ := serve(t, v, func(o *Options) { o.Exercise = tt.program })
			html := text(t, get(p, "/"))
			if !strings.Contains(html, `<body class="view-now exercise"`) || strings.Count(html, "EXERCISE: nothing here is real weather") != 2 ||
				!strings.Contains(html, "<title>EXERCISE: ") {
				t.Error("the page of an exercise has not its pattern, its words and its title")
			}
			for _, address := range []string{"/api/v1/now", "/api/v1/events", "/readyz", "/healthz", "/nowhere"} {
				if m := object(t, get(p, address)); m["exercise"] != true {
					t.Errorf("%s does not say that this is an exercise", address)
				}
			}
		})
	}
}

// TestHostileText: nothing that comes from outside becomes markup.
func TestHostileText(t *testing.T) {
	for _, hostile := range []string{
		`<script>alert(1)</script>`, `"><img src=x onerror=alert(1)>`, `</style><script>x</script>`,
		`'-alert(1)-'`, `{{.}}`, "\x00<b>", `<svg/onload=x>`, `</title><script>`, `&lt;script&gt;<i>`,
	} {
		v := sample(0)
		v.Stations[0].ID, v.Stations[0].State, v.Stations[0].Sentence = hostile, hostile, hostile
		v.Paths[0].Name, v.Paths[0].Sentence, v.Paths[0].Unobserved = hostile, hostile, []string{hostile}
		v.Alerts[0].Sentence, v.Ends[0].Runway, v.Ends[0].Sentence = hostile, hostile, hostile
		v.Remarks = []string{hostile}
		clean, _ := serve(t, sample(0), nil)
		p, _ := serve(t, v, func(o *Options) { o.Airfield = hostile })
		// Text that stays text adds no tag: the page has as many as before.
		got, want := text(t, get(p, "/")), text(t, get(clean, "/"))
		if g, w := strings.Count(got, "<"), strings.Count(want, "<"); g != w {
			t.Errorf("%q becomes markup: %d tags, want %d", hostile, g, w)
		}
	}
}

// views is every page that a person visits.
var views = [...]string{"/", "/past", "/past/x", "/masts", "/basis", "/handover"}

// TestEveryViewCarriesTheNotice, and asks for nothing from elsewhere.
func TestEveryViewCarriesTheNotice(t *testing.T) {
	for _, exercise := range []bool{false, true} {
		p, _ := serve(t, sample(0), func(o *Options) { o.Exercise = exercise })
		for _, address := range views {
			r := get(p, address)
			html := text(t, r)
			if r.StatusCode != 200 || !strings.Contains(html, `<footer class="notice"><p>`+alerting.Notice) {
				t.Errorf("%s answers %d, or without the notice", address, r.StatusCode)
			}
			if got := strings.Contains(html, "EXERCISE: nothing here is real weather"); got != exercise {
				t.Errorf("%s says that it is an exercise: %v, want %v", address, got, exercise)
			}
			for _, forbidden := range []string{"<script>", "http://", "https://", " style=", "<style", "onclick="} {
				if strings.Contains(html, forbidden) {
					t.Errorf("%s contains %q", address, forbidden)
				}
			}
		}
	}
}

// TestRecordOfExercisesStandsApart: the record of exercises is never shown on
// a page that is live.
func TestRecordOfExercisesStandsApart(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	for address, want := range map[string]bool{
		"/past": false, "/past?record=exercise": true, "/past/x?record=exercise": true, "/masts?record=exercise": false, "/?record=exercise": false,
	} {
		html := text(t, get(p, address))
		if got := strings.Contains(html, `data-live="false"`) && strings.Contains(html, "EXERCISE"); got != want {
			t.Errorf("%s is the record of exercises: %v, want %v", address, got, want)
		}
	}
}

// TestFilesOfThePage: each file that a page names is there, may be kept for
// good, and is the same packed and plain.
func TestFilesOfThePage(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	named := regexp.MustCompile(`/assets/[^"]+`)
	found := map[string]bool{}
	for _, address := range views {
		for _, name := range named.FindAllString(text(t, get(p, address)), -1) {
			found[name] = true
		}
	}
	if len(found) < 9 {
		t.Fatalf("the pages name %d files only", len(found))
	}
	for name := range found {
		plain := get(p, name)
		body := text(t, plain)
		if plain.StatusCode != 200 || !strings.Contains(plain.Header.Get("Cache-Control"), "immutable") {
			t.Errorf("%s answers %d, %v", name, plain.StatusCode, plain.Header)
		}
		request := httptest.NewRequest(http.MethodGet, "http://127.0.0.1:7625"+name, nil)
		request.Header.Set("Accept-Encoding", "gzip, br")
		w := httptest.NewRecorder()
		p.ServeHTTP(w, request)
		packed, err := gzip.NewReader(w.Body)
		if err != nil {
			t.Fatalf("%s is not packed: %v", name, err)
		}
		unpacked, err := io.ReadAll(packed)
		if err != nil || !bytes.Equal(unpacked, []byte(body)) || w.Header().Get("Content-Encoding") != "gzip" {
			t.Errorf("%s is another one when packed: %v", name, err)
		}
	}
	for _, name := range []string{"/assets/" + p.glass.build + "/nothing.js", "/assets/0000/now.js", "/assets/" + p.glass.build + "/..%2ffront.go"} {
		if r := get(p, name); r.StatusCode != 404 {
			t.Errorf("%s answers %d, want 404", name, r.StatusCode)
		}
	}
}

// TestModulesTakeNoMarkup: no module makes markup or code of a string, and
// none names a place outside.
func TestModulesTakeNoMarkup(t *testing.T) {
	for name, a := range (mustGlass(t)).assets {
		for _, forbidden := range []string{"innerHTML", "outerHTML", "insertAdjacentHTML", "document.write", "eval(", "new Function", "https://"} {
			if strings.Contains(string(a.plain), forbidden) && !strings.HasPrefix(name, "uplot") {
				t.Errorf("%s uses %s", name, forbidden)
			}
			if name == "uplot.js" && forbidden != "https://" && strings.Contains(string(a.plain), forbidden) {
				t.Errorf("%s uses %s", name, forbidden)
			}
		}
	}
}

// TestOddsAreSaidInOnePlace: a probability gets its words from one function,
// which holds back at either end.
func TestOddsAreSaidInOnePlace(t *testing.T) {
	said := 0
	for name, a := range (mustGlass(t)).assets {
		if strings.HasPrefix(name, "uplot") || !strings.HasSuffix(name, ".js") {
			continue
		}
		said += strings.Count(string(a.plain), "odds(")
		for line := range strings.Lines(string(a.plain)) {
			if name != "words.js" && (strings.Contains(line, " in 100\"") || strings.Contains(line, "probability") && !strings.Contains(line, "odds(")) {
				t.Errorf("%s words a probability itself: %s", name, line)
			}
		}
	}
	if said < 2 {
		t.Error("no module asks for the odds: this test looks for another name")
	}
}

func mustGlass(t *testing.T) *glass {
	t.Helper()
	g, err := newGlass()
	if err != nil {
		t.Fatal(err)
	}
	return g
}

// TestWeight: what a browser is given for the page Now, packed, stays under
// 150 KB together with every other view.
func TestWeight(t *testing.T) {
	p, _ := serve(t, sample(0), nil)
	total := 0
	for _, a := range p.glass.assets {
		packed, err := a.packed()
		if err != nil {
			t.Fatal(err)
		}
		total += len(packed)
	}
	for _, address := range views {
		total += len(text(t, get(p, address)))
	}
	if total > 150_000 {
		t.Errorf("all files and all views are %d bytes, want at most 150000", total)
	}
	t.Logf("%d bytes", total)
}
