package browser_test

import (
	"encoding/csv"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/chromedp/cdproto/browser"
	"github.com/chromedp/chromedp"
)

// officerDeeds is what only an officer may do with an event: a note, a hold, and
// the three downloads, of which the bundle verifies away from the store.
func officerDeeds(t *testing.T, b *tab, url string) {
	b.do(chromedp.Navigate(url + "/login"))
	b.until(10*time.Second, `document.getElementById("name")`)
	b.logIn("ada-officer", password)
	b.until(10*time.Second, `document.body.dataset.role === "officer"`)
	b.do(chromedp.Navigate(url + "/past"))
	b.until(30*time.Second, `document.querySelector("#events tbody a")`)
	eval[bool](b, `(document.querySelector("#events tbody a").click(), true)`)
	b.until(60*time.Second, `document.querySelector("#note form") && document.querySelectorAll("#downloads a").length === 3`)

	eval[bool](b, `(() => { document.querySelector("#note textarea").value = "seen from the apron, <b>dust</b> under it"; document.querySelector("#note form").requestSubmit(); return true })()`)
	b.until(10*time.Second, `/ada-officer: seen from the apron, <b>dust<.b> under it/.test(document.getElementById("people").innerText)`)
	eval[bool](b, `(() => { document.querySelector("#hold input").value = "occurrence under review"; document.querySelector("#hold form").requestSubmit(); return true })()`)
	b.until(10*time.Second, `/Recorded/.test(document.getElementById("hold").innerText)`)
	if holds := eval[string](b, `fetch("/api/v1/holds").then((r) => r.text())`); !strings.Contains(holds, "occurrence under review") {
		t.Errorf("the hold is not listed: %.300s", holds)
	}
	b.shot("officer")
	b.accessible("one event, for an officer")

	dir := t.TempDir()
	ended := make(chan string, 3)
	if err := chromedp.ListenBrowser(b.ctx, func(e any) {
		if p, ok := e.(*browser.EventDownloadProgress); ok && p.State == browser.DownloadProgressStateCompleted {
			ended <- p.GUID
		}
	}); err != nil {
		t.Fatal(err)
	}
	watched := true
	if _, err := chromedp.CallBrowser(b.ctx, browser.SetDownloadBehavior, browser.SetDownloadBehaviorParams{
		Behavior: browser.SetDownloadBehaviorBehaviorAllowAndName, DownloadPath: dir, EventsEnabled: &watched,
	}); err != nil {
		t.Fatal(err)
	}
	fetched := func(part string) string {
		t.Helper()
		eval[bool](b, `(document.querySelector("#downloads a[href$='`+part+`']").click(), true)`)
		select {
		case id := <-ended:
			return filepath.Join(dir, id)
		case <-time.After(60 * time.Second):
			t.Fatalf("the download of %s does not end", part)
			return ""
		}
	}
	read := func(path string) string {
		t.Helper()
		body, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		return string(body)
	}
	report := read(fetched("/report"))
	for _, want := range []string{"Supplementary to certified systems", "seen from the apron, &lt;b&gt;dust&lt;/b&gt; under it", "<svg"} {
		if !strings.Contains(report, want) {
			t.Errorf("the report of %d bytes does not hold %q", len(report), want)
		}
	}
	table := csv.NewReader(strings.NewReader(read(fetched("/csv"))))
	table.FieldsPerRecord, table.Comment = -1, '#'
	if rows, err := table.ReadAll(); err != nil || len(rows) < 100 {
		t.Errorf("the table has %d rows, %v", len(rows), err)
	}
	bundle := fetched("/bundle")
	if out, err := exec.Command(binary(t), "history", "verify", "--bundle", bundle).CombinedOutput(); err != nil {
		t.Errorf("the bundle does not verify: %v\n%s", err, out)
	}
}
