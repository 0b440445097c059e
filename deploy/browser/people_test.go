package browser_test

import (
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/chromedp"
	"github.com/chromedp/chromedp/kb"
)

const password = "gannet over the moor"

// tower is a daemon with a user of each role, and weather that raises an alert
// soon.
func tower(t *testing.T) *daemon {
	t.Helper()
	dir := t.TempDir()
	source, err := os.ReadFile(filepath.Join("..", "..", "testdata", "airfields", "skerrymoor.toml"))
	if err != nil {
		t.Fatal(err)
	}
	port, broker := freePort(t), freePort(t)
	text := strings.NewReplacer(
		"embedded://127.0.0.1:1883", fmt.Sprintf("embedded://127.0.0.1:%d", broker),
		`directory = "./sockline-data"`, fmt.Sprintf("directory = %q", filepath.Join(dir, "history")),
		`listen = "127.0.0.1:7625"`, fmt.Sprintf("listen = \"127.0.0.1:%d\"\nusers_file = %q", port, filepath.Join(dir, "users")),
	).Replace(string(source))
	config, scene := filepath.Join(dir, "field.toml"), filepath.Join(dir, "soon.scene")
	if err := os.WriteFile(config, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(scene, []byte(soonScene), 0o600); err != nil {
		t.Fatal(err)
	}
	for _, role := range []string{"viewer", "tower", "officer"} {
		add := exec.Command(binary(t), "users", "add", "--file", filepath.Join(dir, "users"), "--role", role, "ada-"+role)
		add.Stdin = strings.NewReader(password + "\n")
		if out, err := add.CombinedOutput(); err != nil {
			t.Fatalf("add a user: %v\n%s", err, out)
		}
	}
	d := start(t, "run", "--config", config, "--exercise")
	feed := exec.Command(binary(t), "simulate", "--config", config, "--scene", scene, "--to", "broker")
	out, err := os.Create(filepath.Join(dir, "simulate.txt"))
	if err != nil {
		t.Fatal(err)
	}
	feed.Stdout, feed.Stderr = out, out
	if err := feed.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		_ = feed.Process.Kill()
		_ = feed.Wait()
		_ = out.Close()
	})
	return d
}

// logIn fills the form in with keys alone.
func (b *tab) logIn(name, word string) {
	b.t.Helper()
	b.do(chromedp.Focus(chromedp.CSS("#name")), chromedp.KeyEvent(name+"\t"+word+"\r"))
}

// TestPeople: a wrong password does not let anybody in and the right one does;
// each role finds what it may do, and no more.
func TestPeople(t *testing.T) {
	t.Parallel()
	d := tower(t)
	b := open(t, d.url+"/login", screens[1], "403 (Forbidden)", "422 (Unprocessable", "what-if", "503 (Service Unavailable)")
	b.shot("login")
	b.accessible("the log-in")
	b.logIn("ada-tower", "not the password")
	b.until(10*time.Second, `document.querySelector(".failed")`)
	b.shot("login-failed")
	b.logIn("ada-tower", password)
	b.until(10*time.Second, `document.body.dataset.role === "tower"`)
	b.glass()
	t.Run("runway in use", func(t *testing.T) {
		b.until(10*time.Second, `document.querySelector("#controls option[value='07']")`)
		eval[bool](b, `(() => { const f = document.querySelector("#controls select"); f.value = "07"; f.dispatchEvent(new Event("change")); return true })()`)
		b.until(10*time.Second, `document.querySelector("#ends tr.used th") && document.querySelector("#ends tr.used th").textContent === "07"`)
	})
	b.until(150*time.Second, `document.querySelector("#alerts .acknowledge")`)
	b.shot("raised")
	b.accessible("an open alert, with what can be done")
	t.Run("acknowledge by keyboard", func(t *testing.T) { acknowledge(t, b) })
	t.Run("shelve", func(t *testing.T) { shelve(t, b) })
	t.Run("pilot report", func(t *testing.T) { report(t, b) })
	t.Run("look back", func(t *testing.T) { lookBack(t, b, d.url) })
	t.Run("log out", func(t *testing.T) {
		eval[bool](b, `(document.querySelector(".who button").click(), true)`)
		b.until(10*time.Second, `document.body.dataset.role === "" && location.pathname === "/"`)
		b.glass()
		if n := eval[float64](b, `document.querySelectorAll(".acknowledge, .shelve").length`); n != 0 {
			t.Errorf("somebody who has logged out is offered %.0f deeds", n)
		}
	})
	t.Run("officer", func(t *testing.T) { officerDeeds(t, b, d.url) })
}

// acknowledge presses Tab until the button has the focus, and Enter: one
// action, which silences and never hides.
func acknowledge(t *testing.T, b *tab) {
	b.do(chromedp.Focus(chromedp.CSS("#main")))
	reached := false
	for range 60 {
		b.do(chromedp.KeyEvent("\t"))
		if reached = eval[bool](b, `document.activeElement.classList.contains("acknowledge")`); reached {
			break
		}
	}
	if !reached {
		t.Fatal("the keyboard does not reach Acknowledge")
	}
	count := eval[float64](b, `document.querySelectorAll("#alerts article").length`)
	b.do(chromedp.KeyEvent("\r"))
	took := b.until(5*time.Second, `/Acknowledged by ada-tower at/.test(document.getElementById("alerts").innerText)`)
	t.Logf("acknowledged, and shown as such, after %d ms", took.Milliseconds())
	if after := eval[float64](b, `document.querySelectorAll("#alerts article").length`); after < count {
		t.Errorf("%.0f of %.0f alerts are left after an acknowledgement", after, count)
	}
	b.shot("acknowledged")
}

// shelve wants a reason and an end.
func shelve(t *testing.T, b *tab) {
	b.until(30*time.Second, `[...document.querySelectorAll("#alerts .shelve")].some((n) => !n.hidden)`)
	eval[bool](b, `(() => { const n = [...document.querySelectorAll("#alerts .shelve")].find((n) => !n.hidden); n.click(); window.form = n.parentElement.querySelector("form"); return true })()`)
	b.do(chromedp.KeyEvent("\r")) // without a reason nothing is sent
	if eval[string](b, `document.getElementById("item-shelf").textContent`) != "0 shelved" {
		t.Error("an alert is shelved without a reason")
	}
	b.do(chromedp.KeyEvent("mowing beside the mast\r"))
	b.until(10*time.Second, `document.getElementById("item-shelf").textContent === "1 shelved" && /Shelved until .* by ada-tower: mowing/.test(document.getElementById("alerts").innerText)`)
	b.shot("shelved")
	eval[bool](b, `([...document.querySelectorAll("#alerts .unshelve")].find((n) => !n.hidden).click(), true)`)
	b.until(10*time.Second, `document.getElementById("item-shelf").textContent === "0 shelved"`)
}

// report enters what a crew felt.
func report(t *testing.T, b *tab) {
	b.until(10*time.Second, `document.querySelector("#report form")`)
	eval[bool](b, `(() => { document.querySelector("#report textarea").value = "fell through at a mile"; document.querySelector("#report form").requestSubmit(); return true })()`)
	b.until(10*time.Second, `/Recorded/.test(document.getElementById("report").innerText)`)
	if said := eval[string](b, `fetch("/api/v1/pilot-reports").then((r) => r.text())`); !strings.Contains(said, "fell through at a mile") {
		t.Errorf("the report is not listed: %.300s", said)
	}
}

// lookBack finds the event among the past ones, plays it back and moves to
// another moment.
func lookBack(t *testing.T, b *tab, url string) {
	b.do(chromedp.Navigate(url + "/past"))
	b.until(30*time.Second, `document.querySelector("#events tbody a")`)
	b.until(60*time.Second, `document.querySelectorAll("#statistics table").length > 3 || /not|nothing|busy/i.test(document.getElementById("statistics").innerText)`)
	b.shot("past")
	b.accessible("past events")
	eval[bool](b, `(document.querySelector("#events tbody a").click(), true)`)
	b.until(120*time.Second, `document.getElementById("at") && Number(document.getElementById("at").max) > 10 && document.querySelector("#plan svg") && document.querySelector("#series canvas")`)
	before := eval[string](b, `document.getElementById("at-told").textContent + document.getElementById("plan").innerHTML`)
	b.do(chromedp.Focus(chromedp.CSS("#at")))
	for range 5 {
		b.do(chromedp.KeyEvent(kb.ArrowLeft))
	}
	b.until(5*time.Second, fmt.Sprintf(`document.getElementById("at-told").textContent + document.getElementById("plan").innerHTML !== %q`, before))
	b.shot("event")
	b.accessible("one event")
	if offered := eval[string](b, `document.getElementById("downloads").innerText`); !strings.Contains(offered, "officer") {
		t.Errorf("tower is offered what is for officers: %s", offered)
	}
}

// TestKeyboard walks through every view with the Tab key: everything that can
// be pressed is reached, each once, and it is to be seen where one is.
func TestKeyboard(t *testing.T) {
	s := newStage(t, nil)
	for _, v := range views {
		t.Run(v.name, func(t *testing.T) {
			b := open(t, s.url+v.path, screens[1], "404 (Not Found)", "503 (Service Unavailable)")
			b.until(20*time.Second, v.ready)
			want := eval[float64](b, `(window.all = [...document.querySelectorAll("a[href], button, select, input, textarea, [tabindex='0']")].filter((n) => !n.disabled && n.getClientRects().length && getComputedStyle(n).visibility !== "hidden"), window.seen = new Set(), all.length)`)
			// Date fields hold several stops each.
			for range int(want)*2 + 60 {
				b.do(chromedp.KeyEvent("\t"))
				if bad := eval[string](b, `(() => {
					const n = document.activeElement;
					if (!n || n === document.body) return "";
					window.seen.add(n);
					const style = getComputedStyle(n);
					if (parseFloat(style.outlineWidth) < 2 || style.outlineStyle === "none") return n.tagName + " " + (n.id || n.textContent) + " does not show that it has the focus";
					return "";
				})()`); bad != "" {
					t.Error(bad)
				}
			}
			if missed := eval[string](b, `window.all.filter((n) => n.isConnected && !window.seen.has(n)).map((n) => n.tagName + " " + (n.id || n.textContent.slice(0, 40))).join(", ")`); missed != "" {
				t.Errorf("the keyboard does not reach: %s", missed)
			}
		})
	}
}

// soonScene is an outflow that grows over the final approach of runway 07
// within the first minute.
const soonScene = `title      An outflow that comes soon
airfield   skerrymoor
start      2026-07-01T14:00:00Z
length     8 min
seed       20260701
wind       080 deg 7 kt
turbulence B
outflow    at 2000 m before 07 offset 350 m  strength 24 kt radius 900 m  starts 14 s grows 30 s holds 6 min fades 70 s  moves toward 330 deg 0.1 m/s
`
