package region_test

import (
	"context"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	mqtt "github.com/eclipse/paho.mqtt.golang"
	"github.com/rs/zerolog"

	"sockline/sensors/feed"
)

const (
	// rounds is how often the wind turns at each airfield, and back.
	rounds = 2
	// settle is how long the wind stands before it turns: a mast counts after
	// about twelve seconds.
	settle = 15 * time.Second
	// turned is for how long it stays turned at least; an alert opens in about 5 s.
	turned = 15 * time.Second
	// storyLimit bounds the whole story: twice the length that it should have.
	storyLimit = 8 * time.Minute
	// killAfter is when the node goes, after the wind has turned for the second
	// time at an airfield that hangs on it: about when its alert opens.
	killAfter = 4 * time.Second
	lostNode  = 1
)

// mast is where one stands, and whether it feels the wind that turns.
type mast struct {
	id       string
	position string
	outer    bool
}

// masts are those of an airfield, by how many it has: of the invented Skerry
// Moor, the inner ones and the outer ones of landing on 07.
var masts = [...]mast{
	{"touch07", "[53.998763, -20.008477]", false},
	{"final07", "[53.989422, -20.033655]", true},
	{"far07", "[53.984933, -20.057929]", true},
	{"touch25", "[54.003174, -19.993126]", false},
}

// TestDaemonsLoseANode is the same promise with everything in it that an
// airfield has: five daemons, each a process with masts and a history of its
// own. What their histories hold is what the region must have been told.
func TestDaemonsLoseANode(t *testing.T) {
	binary := filepath.Join(t.TempDir(), "sockline")
	build := exec.Command("go", "build", "-o", binary, "./cmd/sockline")
	build.Dir = filepath.Join("..", "..")
	if out, err := build.CombinedOutput(); err != nil {
		t.Fatalf("build the daemon: %v\n%s", err, out)
	}
	c := startCluster(t)
	reader := readAlerts(t, c.front(t, 0)) // a node that stays
	sites := make([]*site, len(airfields))
	for i, id := range airfields {
		sites[i] = newSite(t, binary, id, i, c.front(t, i%len(c.nodes)))
	}
	for _, s := range sites {
		await(t, s.id+" to be ready", func() bool { _, err := s.openAlerts(t.Context()); return err == nil })
	}
	t.Log("the cluster stands, five daemons run")

	begun := time.Now()
	ctx, stop := context.WithTimeout(t.Context(), storyLimit)
	defer stop()
	var running sync.WaitGroup
	for _, s := range sites {
		running.Go(func() {
			if err := s.live(ctx); err != nil {
				t.Error(err)
				stop() // the others need not go on
			}
		})
	}
	for i, id := range airfields { // the load beside them
		f := newField(t, "load-"+id, c.front(t, i%len(c.nodes)))
		running.Go(func() { f.keepOn(ctx, t) })
	}
	killed := false
	for _, wait := range []<-chan struct{}{sites[lostNode].again, sites[0].told, sites[1].told, sites[2].told, sites[3].told, sites[4].told} {
		select {
		case <-wait:
		case <-ctx.Done():
			running.Wait()
			t.Fatalf("the story did not come to its end within %v", time.Since(begun).Round(time.Second))
		}
		if !killed {
			select { // a place in the story, not a wait for something
			case <-time.After(killAfter):
			case <-ctx.Done():
			}
			open := 0
			for _, s := range sites {
				n, err := s.openAlerts(ctx)
				if err != nil {
					t.Error(err)
				}
				open += n
			}
			c.nodes[lostNode].kill(t)
			killed = true
			t.Logf("one node is killed, %v after the start, with %d alerts open", time.Since(begun).Round(time.Second), open)
		}
	}
	t.Logf("the wind has turned %d times everywhere, within %v", rounds, time.Since(begun).Round(time.Second))
	compare(t, sites, reader)
	stop()
	running.Wait()
}

// keepOn publishes as the other test does, until ctx ends. What comes of it is
// the business of that test.
func (f *field) keepOn(ctx context.Context, t *testing.T) {
	load := time.NewTicker(turn)
	defer load.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case now := <-load.C:
			f.turn(t, now)
		}
	}
}

// compare holds what the reader got against what the histories hold.
func compare(t *testing.T, sites []*site, reader *alertReader) {
	t.Helper()
	var slowest time.Duration
	total, delayed := 0, 0
	for _, s := range sites {
		want := s.kept(t)
		last := want[len(want)-1]
		due := time.After(time.Until(last.Updated.Add(within)))
		look := time.NewTicker(turn)
		for late := false; !late && len(reader.missing(s.id, want)) > 0; {
			select {
			case <-due:
				late = true
			case <-look.C:
			}
		}
		look.Stop()
		if missing := reader.missing(s.id, want); len(missing) > 0 {
			t.Errorf("%s: %d of %d openings and closings did not come: %s", s.id, len(missing), len(want), strings.Join(missing, ", "))
		}
		known := map[string]bool{}
		for _, a := range want {
			known[a.key()] = true
		}
		var before alertArrival
		var slowestHere time.Duration
		for _, a := range reader.of(s.id) {
			if !known[a.key()] {
				if a.State == "closed" {
					t.Errorf("%s: %s came, and is no closing of the history", s.id, a.key())
				}
				continue // an update
			}
			if a.Updated.Before(before.Updated) {
				t.Errorf("%s: %s came after %s, which is newer", s.id, a.key(), before.key())
			}
			if !a.Exercise {
				t.Errorf("%s: %s is not marked as an exercise", s.id, a.key())
			}
			if a.Delayed {
				delayed++
			}
			took := a.arrived.Sub(a.Updated)
			slowestHere = max(slowestHere, took)
			if took > within {
				t.Errorf("%s: %s took %v", s.id, a.key(), took)
			}
			before = a
		}
		t.Logf("%s: %d openings and closings, the slowest after %v", s.id, len(want), slowestHere.Round(time.Millisecond))
		total, slowest = total+len(want), max(slowest, slowestHere)
	}
	t.Logf("%d openings and closings in five histories; the slowest after %v; %d delayed; %d messages came twice; %d updates beside them",
		total, slowest.Round(time.Millisecond), delayed, reader.twice(), reader.count()-total)
}

// site is one airfield: a daemon, and its masts.
type site struct {
	id             string
	binary, config string
	page           string // host:port
	masts          []mast
	link           *feed.Publisher // that of the masts
	random         *rand.Rand
	settle         time.Duration // before the first turn of the wind

	again chan struct{} // closed when the wind turns for the second time
	told  chan struct{} // closed when every round is over
}

// newSite starts a daemon that reaches the region, and its masts, by one
// address.
func newSite(t *testing.T, binary, id string, number int, broker string) *site {
	t.Helper()
	dir := t.TempDir()
	s := &site{
		id: id, binary: binary, config: filepath.Join(dir, id+".toml"), page: fmt.Sprintf("127.0.0.1:%d", freePort(t)),
		masts: masts[:2+number%3], random: rand.New(rand.NewPCG(1, uint64(number))),
		settle: settle + time.Duration(number)*2*time.Second, again: make(chan struct{}), told: make(chan struct{}),
	}
	if err := os.WriteFile(s.config, []byte(s.configuration(broker, filepath.Join(dir, "history"))), 0o600); err != nil {
		t.Fatal(err)
	}
	log, err := os.Create(filepath.Join(dir, "log"))
	if err != nil {
		t.Fatal(err)
	}
	daemon := exec.Command(binary, "run", "--exercise", "--config", s.config)
	daemon.Stdout, daemon.Stderr = log, log
	if err := daemon.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		_ = daemon.Process.Signal(syscall.SIGTERM) // Wait tells if it has ended before
		late := time.AfterFunc(patience, func() { _ = daemon.Process.Kill() })
		defer late.Stop()
		if err := daemon.Wait(); err != nil {
			t.Errorf("%s: the daemon ended with %v", id, err)
		}
		if t.Failed() {
			text, _ := os.ReadFile(log.Name())
			t.Logf("%s: ...%s", id, text[max(0, len(text)-3000):])
		}
		log.Close()
	})
	s.link, err = feed.NewPublisher(t.Context(), feed.PublisherOptions{Broker: feed.Broker{URL: broker}, ClientID: "masts-" + id, Log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(s.link.Close)
	return s
}

// configuration is that of Skerry Moor under another name, with fewer masts.
func (s *site) configuration(broker, history string) string {
	var b strings.Builder
	fmt.Fprintf(&b, `
[airfield]
id        = %q
name      = %q
position  = [54.0, -20.0]
elevation = "42 m"

[[runway]]
width = "18 m"
  [[runway.end]]
  designator = "07"
  threshold  = [53.997479, -20.008771]
  elevation  = "41 m"
  [[runway.end]]
  designator = "25"
  threshold  = [54.002520, -19.991228]
  elevation  = "43 m"

[broker]
url = %q

[alerts]
approach_speed         = "75 kt"
fastest_approach_speed = "120 kt"

[history]
directory = %q

[page]
listen = %q
`, s.id, s.id, broker, history, s.page)
	for _, m := range s.masts {
		fmt.Fprintf(&b, "\n[[station]]\nid = %q\nposition = %s\nheight = \"10 m\"\ntopic = %q\nformat = \"senml+json\"\ninterval = \"1 s\"\n",
			m.id, m.position, s.topic(m))
	}
	return b.String()
}

func (s *site) topic(m mast) string {
	return fmt.Sprintf("airfield/%s/station/%s/wind", s.id, m.id)
}

// live is the story of one airfield, until ctx ends: the wind at the outer
// masts turns to a headwind once nothing is open, and back once an alert is.
func (s *site) live(ctx context.Context) error {
	tick := time.NewTicker(time.Second)
	defer tick.Stop()
	since, wait := time.Now(), s.settle
	round, headwind, opened := 0, false, false
	for {
		select {
		case <-ctx.Done():
			if round < rounds {
				return fmt.Errorf("%s: %d rounds of %d; headwind outside: %v, an alert opened: %v", s.id, round, rounds, headwind, opened)
			}
			return nil
		case <-tick.C:
		}
		s.blow(headwind)
		if round == rounds {
			continue
		}
		open, err := s.openAlerts(ctx)
		if err != nil {
			return err
		}
		passed := time.Since(since) >= wait
		switch {
		case headwind && open > 0 && passed:
			headwind, opened, since = false, true, time.Now()
		case !headwind && opened && open == 0:
			round, opened, since, wait = round+1, false, time.Now(), settle
			if round == rounds {
				close(s.told)
			}
		case !headwind && !opened && passed:
			headwind, since, wait = true, time.Now(), turned
			if round == 1 {
				close(s.again)
			}
		}
	}
}

// blow sends a reading of each mast. What cannot be sent is lost, as on a real
// one. Runway 07 lands towards 064 degrees: 240 degrees is a tailwind.
func (s *site) blow(headwind bool) {
	for _, m := range s.masts {
		from, speed := 240, 5.0
		if m.outer && headwind {
			from, speed = 60, 6
		}
		// A little unsteady, or it would be taken for stuck.
		payload := fmt.Appendf(nil, `[{"n":"wind_speed","u":"m/s","v":%.1f},{"n":"wind_direction","u":"deg","v":%d},{"n":"exercise","vb":true}]`,
			speed+0.1*float64(s.random.IntN(10)), from+s.random.IntN(10))
		_ = s.link.Publish(s.topic(m), payload, 0, false)
	}
}

// openAlerts asks the daemon how many there are.
func (s *site) openAlerts(ctx context.Context) (int, error) {
	ctx, cancel := context.WithTimeout(ctx, 10*time.Second)
	defer cancel()
	request, err := http.NewRequestWithContext(ctx, http.MethodGet, "http://"+s.page+"/api/v1/events?open=true", nil)
	if err != nil {
		return 0, fmt.Errorf("ask %s: %w", s.id, err)
	}
	response, err := http.DefaultClient.Do(request)
	if err != nil {
		return 0, fmt.Errorf("ask %s: %w", s.id, err)
	}
	defer response.Body.Close()
	if response.StatusCode != http.StatusOK {
		return 0, fmt.Errorf("ask %s: it answers %s", s.id, response.Status)
	}
	var answer struct{ Events []alertObject }
	if err := json.NewDecoder(response.Body).Decode(&answer); err != nil {
		return 0, fmt.Errorf("ask %s: %w", s.id, err)
	}
	return len(answer.Events), nil
}

// kept is every opening and closing that the history holds, oldest first.
func (s *site) kept(t *testing.T) []alertObject {
	t.Helper()
	var list struct{ Events []alertObject }
	s.ask(t, &list, "events", "list", "--config", s.config, "--limit", "1000", "--output", "json")
	var all []alertObject
	landing := 0
	for _, e := range list.Events {
		var shown struct{ Issues []alertObject }
		s.ask(t, &shown, "events", "show", "--config", s.config, "--output", "json", e.ID)
		first, last := shown.Issues[0], shown.Issues[len(shown.Issues)-1]
		if first.State != "open" || last.State != "closed" {
			t.Errorf("%s: %s is %s first and %s last", s.id, e.ID, first.State, last.State)
		}
		if strings.HasSuffix(e.ID, "-07-landing-headwind-loss") {
			landing++
		}
		all = append(all, first, last)
	}
	if landing < rounds {
		t.Fatalf("%s: %d losses of headwind for landing on 07 in the history, want %d at least", s.id, landing, rounds)
	}
	slices.SortStableFunc(all, func(a, b alertObject) int { return a.Updated.Compare(b.Updated) })
	return all
}

func (s *site) ask(t *testing.T, answer any, words ...string) {
	t.Helper()
	command := exec.Command(s.binary, words...)
	var complaint strings.Builder
	command.Stderr = &complaint
	out, err := command.Output()
	if err == nil {
		err = json.Unmarshal(out, answer)
	}
	if err != nil {
		t.Fatalf("%s: sockline %s: %v\n%s", s.id, strings.Join(words, " "), err, complaint.String())
	}
}

// alertObject is what this test looks at of an alert.
type alertObject struct {
	ID, Airfield, State string
	Revision            int
	Updated             time.Time
	Delayed, Exercise   bool
}

func (a alertObject) key() string { return fmt.Sprintf("%s revision %d", a.ID, a.Revision) }

// alertArrival is an alert with the time at which the reader had it.
type alertArrival struct {
	alertObject
	arrived time.Time
}

// alertReader is a reader in the region that takes the alerts of daemons.
type alertReader struct {
	mu       sync.Mutex
	first    map[string]bool
	alerts   map[string][]alertArrival // by airfield, each issue at its first arrival
	repeated int
}

func readAlerts(t *testing.T, broker string) *alertReader {
	t.Helper()
	r := &alertReader{first: map[string]bool{}, alerts: map[string][]alertArrival{}}
	subscribe(t, broker, map[string]byte{"sockline-exercise/+/alert": 1}, func(m mqtt.Message) {
		var a alertObject
		if err := json.Unmarshal(m.Payload(), &a); err != nil {
			t.Errorf("on %s: %v", m.Topic(), err)
			return
		}
		r.mu.Lock()
		defer r.mu.Unlock()
		if r.first[a.key()] {
			r.repeated++
			return
		}
		r.first[a.key()] = true
		r.alerts[a.Airfield] = append(r.alerts[a.Airfield], alertArrival{a, time.Now()})
	})
	return r
}

func (r *alertReader) missing(airfield string, want []alertObject) (keys []string) {
	r.mu.Lock()
	defer r.mu.Unlock()
	for _, a := range want {
		if !slices.ContainsFunc(r.alerts[airfield], func(got alertArrival) bool { return got.key() == a.key() }) {
			keys = append(keys, a.key())
		}
	}
	return keys
}

func (r *alertReader) of(airfield string) []alertArrival {
	r.mu.Lock()
	defer r.mu.Unlock()
	return slices.Clone(r.alerts[airfield])
}

func (r *alertReader) twice() int {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.repeated
}

func (r *alertReader) count() int {
	r.mu.Lock()
	defer r.mu.Unlock()
	return len(r.first)
}
