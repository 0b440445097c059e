package browser_test

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"syscall"
	"testing"
	"time"

	"sockline/alerting/page"
)

// blanked is true where no value is left to be read.
const blanked = `document.body.classList.contains("blank") && !document.getElementById("gone").hidden`

// shownValues gives every text of the page Now, but of what never changes, that
// could be taken for a value.
const shownValues = `[...document.querySelectorAll("#glance, #look, #gone-why, #live-line")].map((n) => getComputedStyle(n).visibility === "hidden" ? "" : n.innerText).join(" ")`

// TestDeadMan stops the program with SIGSTOP: it can then say nothing, close
// nothing and help with nothing. Within five seconds every value is gone, and
// when it goes on they come again.
func TestDeadMan(t *testing.T) {
	d := tower(t)
	for _, view := range []struct{ path, gone, back string }{
		{"/", blanked, `!document.body.classList.contains("blank") && document.querySelectorAll("#ends tbody tr").length === 2`},
		{"/masts", `document.querySelectorAll(".mast-card").length === 0`, `document.querySelectorAll(".mast-card").length === 8`},
	} {
		t.Run(view.path, func(t *testing.T) {
			b := open(t, d.url+view.path, screens[0], "503 (Service Unavailable)", "ERR_", "404 (Not Found)", "503 (Service Unavailable)")
			b.until(60*time.Second, view.back)
			if view.path == "/" {
				b.until(60*time.Second, `(`+shownValues+`).includes("kt")`)
			}
			if err := d.cmd.Process.Signal(syscall.SIGSTOP); err != nil {
				t.Fatal(err)
			}
			begun := time.Now()
			b.until(8*time.Second, view.gone)
			took := time.Since(begun)
			t.Logf("%s was blank %.1f s after the program stopped", view.path, took.Seconds())
			if took > 5*time.Second {
				t.Errorf("%s was blank after %s, want 5 s at most", view.path, took)
			}
			if view.path == "/" {
				if said := eval[string](b, shownValues); strings.Contains(said, "kt") || strings.Contains(said, "Observing") {
					t.Errorf("a page without information still says: %.300s", said)
				}
				if title := eval[string](b, `document.title`); !strings.HasPrefix(title, "No information") {
					t.Errorf("its title is %q", title)
				}
				b.shot("dead-man")
				b.accessible("the page without information")
			}
			if err := d.cmd.Process.Signal(syscall.SIGCONT); err != nil {
				t.Fatal(err)
			}
			b.until(60*time.Second, view.back)
		})
	}
}

// TestServerThatRepeatsItself: a program whose steps stand still, while its
// stream goes on, is no information either.
func TestServerThatRepeatsItself(t *testing.T) {
	t.Parallel()
	s := newStage(t, nil)
	b := open(t, s.url, screens[1])
	b.glass()
	s.mu.Lock()
	s.frozen = true
	s.mu.Unlock()
	if took := b.until(8*time.Second, blanked); took > 6*time.Second { // the last step may have come up to a second ago
		t.Errorf("blank after %s", took)
	}
	s.mu.Lock()
	s.frozen = false
	s.mu.Unlock()
	b.glass()
}

// TestModulesThatStandStill: the style sheet takes the values away where no
// module runs any more.
func TestModulesThatStandStill(t *testing.T) {
	t.Parallel()
	s := newStage(t, nil)
	b := open(t, s.url, screens[1], "ERR_INCOMPLETE_CHUNKED_ENCODING")
	b.glass()
	// Every timer and every message of the stream ends; painting goes on.
	eval[bool](b, `(() => { for (let i = 0; i < 10000; i++) { clearInterval(i); clearTimeout(i); } return true })()`)
	s.mu.Lock()
	s.frozen = true
	s.mu.Unlock()
	s.cut()
	eval[bool](b, `(window.fetch = () => new Promise(() => {}), true)`)
	b.until(8*time.Second, `getComputedStyle(document.getElementById("glass")).visibility === "hidden"`)
}

// TestCuts breaks every connection off at random moments, and wants each issue
// of an alert once, in order, and none missing.
func TestCuts(t *testing.T) {
	cuts := 100
	if long() {
		cuts = 1000
	}
	s := newStage(t, nil)
	b := open(t, s.url+"/basis", screens[1], "ERR_", "404 (Not Found)", "503 (Service Unavailable)")
	build := eval[string](b, `document.documentElement.dataset.build`)
	eval[bool](b, fmt.Sprintf(`import("/assets/%s/stream.js").then(({Stream}) => {
		window.had = []; window.resyncs = 0;
		const stream = new Stream("/api/v1/stream", { step() {}, alert(a) { window.had.push(a.n); }, resync() { window.resyncs++; }, link() {} });
		stream.start();
		return true;
	})`, build))
	b.until(10*time.Second, `window.had !== undefined`)
	random := rand.New(rand.NewPCG(7, 25))
	next := time.NewTimer(0)
	sent := 0
	issue := func() {
		sent++
		s.tape.Issue(object(dict{"n": sent, "id": "x", "state": "open", "level": "large", "text": "x", "exercise": false}))
	}
	// One that is had before the first cut marks where to go on from.
	<-time.NewTimer(500 * time.Millisecond).C
	issue()
	b.until(10*time.Second, `window.had.length === 1`)
	for range cuts {
		for range random.IntN(4) {
			issue()
		}
		next.Reset(time.Duration(random.IntN(60)) * time.Millisecond)
		<-next.C
		s.cut()
	}
	issue()
	b.until(30*time.Second, fmt.Sprintf(`window.had.at(-1) === %d`, sent))
	if wrong := eval[string](b, `window.had.filter((n, i) => n !== i + 1).slice(0, 10).join(" ")`); wrong != "" {
		t.Errorf("of %d issues over %d cuts these are not where they belong: %s", sent, cuts, wrong)
	}
	if n := eval[float64](b, `window.resyncs`); n != 0 {
		t.Errorf("%.0f resyncs, though nothing was too old", n)
	}
	t.Logf("%d issues, each once and in order, over %d cuts", sent, cuts)
}

// TestExerciseStandsAlone: a page that shows live wind never shows an exercise,
// nor the other way round.
func TestExerciseStandsAlone(t *testing.T) {
	t.Parallel()
	s := newStage(t, nil)
	b := open(t, s.url, screens[0])
	b.glass()
	mark := func(on bool) {
		s.mu.Lock()
		s.exercise = on
		s.mu.Unlock()
		s.step()
	}
	mark(true)
	b.until(10*time.Second, `document.body.dataset.exercise === "true" && document.body.classList.contains("exercise")`)
	b.glass()
	b.shot("exercise")
	b.accessible("an exercise")
	if !eval[bool](b, `document.title.startsWith("EXERCISE")`) {
		t.Error("the title of an exercise does not say so")
	}
	mark(false)
	b.until(10*time.Second, `document.body.dataset.exercise === "false" && !document.body.classList.contains("exercise")`)
}

// TestNothingIsKnown: a page that is opened when nothing is known says
// so, and shows no value.
func TestNothingIsKnown(t *testing.T) {
	t.Parallel()
	s := newStage(t, func(v *page.View) { v.Made = v.Made.Add(-time.Hour) })
	b := open(t, s.url, screens[1], "503 (Service Unavailable)")
	if said := eval[string](b, `document.body.innerText`); !strings.Contains(said, "No information") || strings.Contains(said, "28 kt") {
		t.Errorf("the page says: %.300s", said)
	}
	b.until(8*time.Second, blanked)
	b.shot("nothing-known")
}
