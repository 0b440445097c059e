package main

import (
	"encoding/json"
	"encoding/pem"
	"io"
	"log"
	"net/http"
	"net/http/httptest"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"

	"sockline/alerting/publish/webhook"
	"sockline/sensors/feed/brokertest"
)

// told is a web server that is told of alerts.
type told struct {
	*httptest.Server
	ca     string // file of its certificate
	secret string // file of the shared secret
	mu     sync.Mutex
	events []map[string]any
	bodies []string
	bad    int // requests whose seal does not fit
}

const sharedSecret = "an invented secret of this test"

// newTold serves on address, or on a free port. It keeps what it is told.
func newTold(tb testing.TB) *told {
	tb.Helper()
	s := &told{}
	s.Server = httptest.NewUnstartedServer(s)
	s.Config.ErrorLog = log.New(io.Discard, "", 0)
	s.StartTLS()
	tb.Cleanup(s.Close)
	s.ca = writeFile(tb, "authority.pem", string(pem.EncodeToMemory(&pem.Block{Type: "CERTIFICATE", Bytes: s.Certificate().Raw})))
	s.secret = writeFile(tb, "secret", sharedSecret+"\n")
	return s
}

func (s *told) ServeHTTP(w http.ResponseWriter, q *http.Request) {
	body, err := io.ReadAll(q.Body)
	s.mu.Lock()
	defer s.mu.Unlock()
	if err != nil || q.Header.Get(webhook.HeaderSeal) != webhook.Seal([]byte(sharedSecret), q.Header.Get(webhook.HeaderSent), body) {
		s.bad++
	}
	var e map[string]any
	if json.Unmarshal(body, &e) == nil {
		s.events = append(s.events, e)
	}
	s.bodies = append(s.bodies, string(body))
}

// ofType is the events of a type so far.
func (s *told) ofType(name string) (all []map[string]any) {
	s.mu.Lock()
	defer s.mu.Unlock()
	for _, e := range s.events {
		if e["type"] == name {
			all = append(all, e)
		}
	}
	return all
}

// body is the i-th body as it came.
func (s *told) body(i int) string {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.bodies[i]
}

// unsealed counts the requests whose seal does not fit.
func (s *told) unsealed() int {
	s.mu.Lock()
	defer s.mu.Unlock()
	return s.bad
}

func (s *told) count() int {
	s.mu.Lock()
	defer s.mu.Unlock()
	return len(s.bodies)
}

// hookText is the configuration of a webhook.
func hookText(s *told, more string) string {
	return "\n[[webhook]]\nurl = \"" + s.URL + "/\"\nca_file = \"" + s.ca + "\"\nsecret_file = \"" + s.secret + "\"\n" + more + "\n"
}

// siteWith is site with more at its end.
func siteWith(tb testing.TB, broker, dir, more string) string {
	tb.Helper()
	text, err := os.ReadFile(site(tb, broker, dir))
	if err != nil {
		tb.Fatal(err)
	}
	return writeFile(tb, "site-told.toml", string(text)+more)
}

// TestDaemonTells: one alert of a drill reaches every receiver that may have
// it, in the form that it asks for, and none that may not.
func TestDaemonTells(t *testing.T) {
	broker := brokertest.Start(t)
	objects, messages, live := newTold(t), newTold(t), newTold(t)
	spool := filepath.Join(t.TempDir(), "spool")
	cfg := mustLoad(t, siteWith(t, broker.URL(), t.TempDir(), "\n[cap]\nsender = \"sockline@skerrymoor.example\"\nspool = \""+spool+"\"\ntopic = \"cap\"\n"+
		hookText(objects, "name = \"objects\"\nexercise = true\nheartbeat = true")+
		hookText(messages, "name = \"messages\"\nexercise = true\nformat = \"cap\"")+
		hookText(live, "name = \"live\"\nheartbeat = true")))
	h := newHurry(8)
	ears := listenTo(t, broker.URL())
	d := startDaemon(t, cfg, h.clock(t), "")
	until(t, "the daemon to listen", func() bool { return d.subscribed.Load() })
	blow(t, cfg, steady, broker.URL(), h)

	until(t, "the webhook to be told of an opening", func() bool { return len(objects.ofType("sockline.alert.opened")) > 0 })
	e := objects.ofType("sockline.alert.opened")[0]
	data, _ := e["data"].(map[string]any)
	if e["source"] != "/sockline-exercise/skerrymoor" || e["exercise"] != true || data["exercise"] != true || e["id"] != e["subject"].(string)+"/1" ||
		data["notice"] == "" || !strings.HasPrefix(data["text"].(string), "EXERCISE") {
		t.Errorf("%v", e)
	}
	until(t, "the standard message at its webhook", func() bool { return messages.count() > 0 })
	if b := messages.body(0); !strings.Contains(b, "<status>Exercise</status>") || !strings.Contains(b, "<msgType>Alert</msgType>") {
		t.Error(b)
	}
	until(t, "the standard message on its topic", func() bool { return strings.Contains(ears.topic("cap"), "urn:oasis:names:tc:emergency:cap:1.2") })
	until(t, "the standard message in the spool", func() bool {
		files, err := filepath.Glob(filepath.Join(spool, "exercise", "*-r00001.xml"))
		return err == nil && len(files) > 0
	})
	until(t, "heartbeats", func() bool { return len(objects.ofType("sockline.heartbeat")) > 1 && ears.topic("heartbeat") != "" })
	var beat map[string]any
	if err := json.Unmarshal([]byte(ears.topic("heartbeat")), &beat); err != nil || beat["instance"] != "under-test" || beat["exercise"] != true {
		t.Errorf("heartbeat %v, %v", beat, err)
	}
	if live.count() != 0 {
		t.Errorf("a receiver of live alerts only is told of a drill: %s", live.body(0))
	}
	if objects.unsealed()+messages.unsealed() != 0 {
		t.Errorf("%d seals do not fit", objects.unsealed()+messages.unsealed())
	}
	_, metrics := d.get(t, "metrics")
	for _, line := range []string{`sockline_webhook_failing{webhook="objects"} 0`, `sockline_webhook_queue_degraded{webhook="live"} 0`, "sockline_spool_failing 0"} {
		if !strings.Contains(metrics, line+"\n") {
			t.Errorf("/metrics lacks %s", line)
		}
	}
	if err := d.stop(); err != nil {
		t.Error(err)
	}
}

// TestDaemonCannotTell: nobody answers, the spool and the queue have no place.
// The alert comes over the broker all the same, the status says what is wrong,
// and the next run tells what waited.
func TestDaemonCannotTell(t *testing.T) {
	broker := brokertest.Start(t)
	away := newTold(t)
	dir := t.TempDir()
	spool := writeFile(t, "not-a-directory", "")
	more := "\n[cap]\nsender = \"sockline@skerrymoor.example\"\nspool = \"" + filepath.Join(spool, "spool") + "\"\n" +
		strings.Replace(hookText(away, "name = \"away\"\nexercise = true"), away.URL, "https://127.0.0.1:1", 1) +
		// Somebody answers, whose certificate nobody vouches for.
		"\n[[webhook]]\nname = \"stranger\"\nexercise = true\nurl = \"" + away.URL + "/\"\n"
	cfg := mustLoad(t, siteWith(t, broker.URL(), dir, more))
	h := newHurry(8)
	ears := listenTo(t, broker.URL())
	d := startDaemon(t, cfg, h.clock(t), "")
	until(t, "the daemon to listen", func() bool { return d.subscribed.Load() })
	blow(t, cfg, steady, broker.URL(), h)
	ears.awaitAlert(t, "an alert over the broker", 0, landingLoss)
	for _, words := range []string{"The webhook away does not take what is sent: dial tcp", "The webhook stranger does not take what is sent: tls: failed to verify", "Standard alert messages are not written"} {
		until(t, words, func() bool { return strings.Contains(ears.topic("status"), words) })
	}
	if err := d.stop(); err != nil {
		t.Error(err)
	}
	if away.count() != 0 {
		t.Error("a server that nobody vouches for was told")
	}
	// The receiver is where it should be, now.
	cfg = mustLoad(t, siteWith(t, broker.URL(), dir, hookText(away, "name = \"away\"\nexercise = true")))
	d = startDaemon(t, cfg, h.clock(t), "")
	until(t, "what waited", func() bool { return len(away.ofType("sockline.alert.opened")) > 0 })
	if err := d.stop(); err != nil {
		t.Error(err)
	}
}

// TestCheckTellsWhoIsTold, and what of it will not work.
func TestCheckTellsWhoIsTold(t *testing.T) {
	inTheWay := writeFile(t, "in-the-way", "")
	text, err := os.ReadFile(skerrymoor)
	if err != nil {
		t.Fatal(err)
	}
	secret := writeFile(t, "secret", sharedSecret)
	file := writeFile(t, "told.toml", strings.Replace(string(text), "./sockline-data", filepath.Join(inTheWay, "data"), 1)+`
[cap]
sender = "sockline@skerrymoor.example"
spool  = "`+filepath.Join(inTheWay, "spool")+`"
topic  = "cap"

[[webhook]]
url         = "https://tower.example/alerts?token=canary"
secret_file = "`+secret+`"
heartbeat   = true

[[webhook]]
name     = "drills"
url      = "http://127.0.0.1:8080/"
format   = "cap"
exercise = true
`)
	got := succeed(t, "check", "--config", file).stdout
	for _, words := range []string{
		"  topic        sockline/skerrymoor/cap, cap\n",
		"  tower-example tower.example, cloudevents, sealed, with a heartbeat\n",
		"  drills       127.0.0.1:8080, cap, exercises, too\n",
		"The directory of the spool of standard alert messages cannot be written",
		"The directory of the history, which keeps what waits for receivers, cannot be written",
		"What is sent to the webhook drills is not sealed",
	} {
		if !strings.Contains(got, words) {
			t.Errorf("check does not say %q:\n%s", words, got)
		}
	}
	if got += succeed(t, "check", "--config", file, "--output", "json").stdout; strings.Contains(got, "canary") || strings.Contains(got, sharedSecret) {
		t.Error("check gives a secret away")
	}
}

// TestTakeUpAfterAKill: what the history has and the queue of a webhook has
// not, because a kill came between them, is told by the next run.
func TestTakeUpAfterAKill(t *testing.T) {
	broker := brokertest.Start(t)
	tower := newTold(t)
	dir := t.TempDir()
	more := hookText(tower, "name = \"tower\"\nexercise = true")
	h := newHurry(8)
	ears := listenTo(t, broker.URL())
	away := strings.Replace(more, tower.URL, "https://127.0.0.1:1", 1)
	d := startDaemon(t, mustLoad(t, siteWith(t, broker.URL(), dir, away)), h.clock(t), "")
	until(t, "the daemon to listen", func() bool { return d.subscribed.Load() })
	stop := newBlower(t, d.current(), steady, broker.URL(), h)
	opened := ears.awaitAlert(t, "an alert", 0, landingLoss)
	stop()
	if err := d.stop(); err != nil {
		t.Error(err)
	}
	if err := os.RemoveAll(filepath.Join(dir, "webhooks")); err != nil {
		t.Fatal(err)
	}
	d = startDaemon(t, mustLoad(t, siteWith(t, broker.URL(), dir, more)), h.clock(t), "")
	until(t, "the opening", func() bool {
		for _, e := range tower.ofType("sockline.alert.opened") {
			if e["subject"] == opened.ID && e["id"] == opened.ID+"/1" {
				return true
			}
		}
		return false
	})
	if err := d.stop(); err != nil {
		t.Error(err)
	}
}
