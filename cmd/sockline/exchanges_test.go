package main

import (
	"encoding/json"
	"fmt"
	"net/http"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"sockline/alerting/page"
	"sockline/sensors/feed/brokertest"
)

// exchangesVariable names a file that gets every answer of the API in these
// tests, one a line: deploy/api holds them against the description of it.
const exchangesVariable = "SOCKLINE_TEST_EXCHANGES"

// exchange is one answer.
type exchange struct {
	Method, Path string
	Status       int
	Type, Body   string
}

// keepExchange adds an answer to the file.
func keepExchange(tb testing.TB, r *http.Request, w *http.Response, body []byte) {
	tb.Helper()
	name := os.Getenv(exchangesVariable)
	if name == "" {
		return
	}
	line, err := json.Marshal(exchange{r.Method, r.URL.RequestURI(), w.StatusCode, w.Header.Get("Content-Type"), string(body)})
	if err != nil {
		tb.Fatal(err)
	}
	f, err := os.OpenFile(name, os.O_CREATE|os.O_APPEND|os.O_WRONLY, 0o600)
	if err != nil {
		tb.Fatal(err)
	}
	defer f.Close()
	if _, err := f.Write(append(line, '\n')); err != nil {
		tb.Fatal(err)
	}
}

// TestExchanges asks a running daemon for everything there is, and for much
// that there is not: each answer is the one that is documented for it.
func TestExchanges(t *testing.T) {
	broker := brokertest.Start(t)
	path, address := siteWithUsers(t, broker.URL(), filepath.Join(t.TempDir(), "history"))
	h := newHurry(20)
	cfg := mustLoad(t, path)
	blow(t, cfg, steady, broker.URL(), h)
	startDaemon(t, cfg, h.clock(t), "")
	officer, keeper, guest := logIn(t, address, "safety"), logIn(t, address, "keeper"), logIn(t, address, "guest")
	nobody := &somebody{client: &http.Client{Timeout: patience}, base: "http://" + address}
	if _, answer := nobody.get(t, "/api/v1/now"); answer == nil {
		t.Fatal("no answer")
	}
	o := keeper.occurrence(t, "an occurrence with an outflow", func(o page.Occurrence) bool {
		return len(o.Alerts) > 0 && o.Level == "beyond-margin" && o.Ended == nil
	})
	event := o.Alerts[0]
	report := fmt.Sprintf(`{"at":%q,"runway":"07","operation":"landing","felt":"loss","amount_kt":20,"from_m":2000,"to_m":1000,"go_around":true,"aircraft":"light twin","text":"rough","event":%q}`, keeper.at(t), event)
	hold := ""
	for _, q := range []struct {
		who        *somebody
		path, body string
		status     int
	}{
		{keeper, "/api/v1/occurrences/" + o.ID + "/acknowledge", `{}`, 200},
		{keeper, "/api/v1/occurrences/" + o.ID + "/shelve", `{"reason":"mowing"}`, 200},
		{keeper, "/api/v1/occurrences/" + o.ID + "/unshelve", `{}`, 200},
		{keeper, "/api/v1/occurrences/" + o.ID + "/unshelve", `{}`, 409},
		{keeper, "/api/v1/occurrences/none/acknowledge", `{}`, 404},
		{keeper, "/api/v1/occurrences/none/shelve", `{"reason":"mowing"}`, 404},
		{keeper, "/api/v1/occurrences/" + o.ID + "/shelve", `{"reason":""}`, 422},
		{keeper, "/api/v1/events/" + event + "/acknowledge", `{}`, 200},
		{keeper, "/api/v1/events/none/acknowledge", `{}`, 404},
		{officer, "/api/v1/events/" + event + "/notes", `{"text":"seen from the tower"}`, 200},
		{officer, "/api/v1/events/none/notes", `{"text":"seen"}`, 404},
		{keeper, "/api/v1/events/" + event + "/notes", `{"text":"seen"}`, 403},
		{keeper, "/api/v1/pilot-reports", report, 200},
		{keeper, "/api/v1/pilot-reports", strings.Replace(report, `"07"`, `"08"`, 1), 422},
		{keeper, "/api/v1/pilot-reports", strings.Replace(report, `"at"`, `"when"`, 1), 400},
		{keeper, "/api/v1/runway-in-use", `{"runway":"07"}`, 200},
		{keeper, "/api/v1/runway-in-use", `{"runway":"99"}`, 422},
		{keeper, "/api/v1/sheets", `{"what":"handover","text":"nothing open"}`, 200},
		{officer, "/api/v1/holds", fmt.Sprintf(`{"reason":"inquiry","event":%q}`, event), 200},
		{officer, "/api/v1/holds", `{"reason":"inquiry","from":"2026-07-01T14:00:00Z","to":"2026-07-01T15:00:00Z"}`, 200},
		{officer, "/api/v1/holds/none/release", `{"reason":"done"}`, 404},
		{officer, "/api/v1/holds/HOLD/release", `{"reason":"done"}`, 200},
		{officer, "/api/v1/holds/HOLD/release", `{"reason":"done"}`, 422},
		{guest, "/api/v1/sheets", `{"what":"daily"}`, 403},
		{nobody, "/api/v1/sheets", `{"what":"daily"}`, 401},
		{nobody, "/api/v1/events", `{}`, 405},
	} {
		status, answer := q.who.do(t, strings.Replace(q.path, "HOLD", hold, 1), q.body)
		if status != q.status {
			t.Errorf("POST %s %s: answer %d %v, want %d", q.path, q.body, status, answer, q.status)
		}
		if id, _ := answer["id"].(string); q.path == "/api/v1/holds" && status == 200 {
			hold = id
		}
	}
	looks := map[string]int{
		"/api/v1/now": 200, "/api/v1/layout": 200, "/api/v1/stations": 200, "/api/v1/occurrences": 200, "/api/v1/basis": 200, "/api/v1/visitor": 200,
		"/api/v1/openapi.json": 200, "/healthz": 200, "/readyz": 200,
		"/api/v1/events": 200, "/api/v1/events?limit=0": 400, "/api/v1/events?runway=07&operation=landing&kind=headwind-loss&level=large": 200,
		"/api/v1/events/" + event: 200, "/api/v1/events/none": 404, "/api/v1/events/" + event + "/notes": 200, "/api/v1/events/none/notes": 404,
		"/api/v1/events/" + event + "/playback": 200, "/api/v1/events/none/playback": 404, "/api/v1/events/none/report": 404,
		"/api/v1/statistics": 200, "/api/v1/statistics?from=x": 400, "/api/v1/nothing": 404, "/api/v1/accesses": 403,
	}
	for _, list := range []string{"pilot-reports", "sheets", "holds", "notes", "acknowledgements", "shelvings", "runway-in-use"} {
		looks["/api/v1/"+list], looks["/api/v1/"+list+"?to=x"] = 200, 400
	}
	for look, want := range looks {
		if status, answer := officer.get(t, look); status != want {
			t.Errorf("GET %s: answer %d %v, want %d", look, status, answer, want)
		}
	}
	if status, _ := nobody.get(t, "/api/v1/accesses"); status != 401 {
		t.Errorf("accesses for nobody: answer %d", status)
	}
	_, described := nobody.get(t, "/api/v1/openapi.json")
	paths, _ := described["paths"].(map[string]any)
	if v, _ := described["openapi"].(string); !strings.HasPrefix(v, "3.1.") || !slices.Contains(keysOf(paths), "/api/v1/occurrences/{id}/acknowledge") {
		t.Errorf("described is openapi %v with %v", described["openapi"], keysOf(paths))
	}
}

func keysOf(m map[string]any) (keys []string) {
	for k := range m {
		keys = append(keys, k)
	}
	return keys
}
