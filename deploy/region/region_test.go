// Package region_test takes the issues of five airfields, once through the sink
// and the connection that a daemon publishes with, once from five daemons with
// masts, and gives them to one reader in the region, by way of a cluster of
// three real brokers of which one is killed.
// It is a module of its own, so that no broker cluster is among the program's
// dependencies. Next: nothing.
package region_test

import (
	"encoding/json"
	"fmt"
	"os"
	"os/signal"
	"slices"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"

	mqtt "github.com/eclipse/paho.mqtt.golang"
	"github.com/nats-io/nats-server/v2/server"
	"github.com/rs/zerolog"

	"sockline/alerting"
	"sockline/alerting/publish"
	"sockline/sensors/feed"
)

// nodeVariable makes the test binary one node of the cluster, by the
// configuration that it names.
const nodeVariable = "REGION_NODE"

func TestMain(m *testing.M) {
	if path := os.Getenv(nodeVariable); path != "" {
		if err := serveNode(path); err != nil {
			fmt.Fprintln(os.Stderr, err)
			os.Exit(1)
		}
		os.Exit(0)
	}
	os.Exit(m.Run())
}

// serveNode runs one broker until it is told to stop, or killed.
func serveNode(path string) error {
	opts, err := server.ProcessConfigFile(path)
	if err != nil {
		return fmt.Errorf("configure the node: %w", err)
	}
	opts.NoSigs = true
	s, err := server.NewServer(opts)
	if err != nil {
		return fmt.Errorf("make the node: %w", err)
	}
	s.ConfigureLogger()
	s.Start()
	stop := make(chan os.Signal, 1)
	signal.Notify(stop, syscall.SIGTERM)
	<-stop
	s.Shutdown()
	s.WaitForShutdown()
	return nil
}

const (
	// before, after and the life of an alert: the load runs on all the time.
	before    = 15 * time.Second // of load before the kill
	after     = 25 * time.Second // of load after it
	openEvery = time.Second      // each airfield opens an alert
	life      = 3 * time.Second  // and closes it
	turn      = 100 * time.Millisecond
	// within is what is promised: from the issue to the reader.
	within = 60 * time.Second
)

// airfields are five invented ones.
var airfields = [...]string{"skerrymoor", "pellmark", "tarnholm", "ostrey", "lingrava"}

// event is what this test sends as an alert.
type event struct {
	Airfield string    `json:"airfield"`
	ID       string    `json:"id"`
	Phase    int       `json:"phase"`
	Delayed  bool      `json:"delayed"`
	Issued   time.Time `json:"issued"`
}

func (e event) key() string { return fmt.Sprintf("%s/%d", e.ID, e.Phase) }

// TestClusterLosesANode is the test of the region: every opening and closing
// reaches its reader within 60 s, in the order of each airfield, none lost.
func TestClusterLosesANode(t *testing.T) {
	c := startCluster(t)
	reader := readRegion(t, c.front(t, 1)) // the reader and two airfields hang on the node that will go
	fields := make([]*field, len(airfields))
	for i, id := range airfields {
		fields[i] = newField(t, id, c.front(t, i%len(c.nodes)))
	}
	await(t, "every airfield to publish", func() bool {
		return !slices.ContainsFunc(fields, func(f *field) bool { return f.sink.State().Mode != publish.Sending })
	})
	t.Log("the cluster stands, five airfields publish")

	load := time.NewTicker(turn)
	defer load.Stop()
	begun, killed := time.Now(), false
	for now := range load.C {
		since := now.Sub(begun)
		if !killed && since >= before {
			c.nodes[1].kill(t)
			killed = true
			t.Log("one node is killed")
		}
		if since >= before+after {
			break
		}
		for _, f := range fields {
			f.turn(t, now)
		}
	}
	for _, f := range fields {
		f.closeAll(t, time.Now())
	}
	expected := 0
	for _, f := range fields {
		expected += len(f.issued)
	}
	end := time.NewTimer(within)
	defer end.Stop()
	look := time.NewTicker(turn)
	defer look.Stop()
	for waiting := true; waiting && reader.seen() < expected; {
		select {
		case <-end.C:
			waiting = false
		case <-look.C:
		}
	}
	slowest := time.Duration(0)
	for _, f := range fields {
		got := reader.of(f.id)
		if len(f.issued) < 60 {
			t.Errorf("%s issued %d openings and closings only", f.id, len(f.issued))
		}
		for i, want := range f.issued {
			if i >= len(got) || got[i].key() != want.key() {
				t.Errorf("%s: as number %d of %d, %s is missing or out of order; %d came", f.id, i+1, len(f.issued), want.key(), len(got))
				break
			}
			took := got[i].arrived.Sub(want.Issued)
			slowest = max(slowest, took)
			if took > within {
				t.Errorf("%s: %s took %v", f.id, want.key(), took)
			}
		}
	}
	t.Logf("%d openings and closings, all told; the slowest after %v; %d came twice; retained and updates beside them: %d",
		expected, slowest.Round(time.Millisecond), reader.twice(), reader.others())
}

// field is one airfield: the sink and the connection of a daemon.
type field struct {
	id     string
	sink   *publish.Sink
	link   *feed.Publisher
	count  int
	opened time.Time
	open   []event
	issued []event // openings and closings, in order
}

// Publish and Connected make the field the broker of its sink.
func (f *field) Publish(topic string, payload []byte, qos byte, retained bool) error {
	return f.link.Publish(topic, payload, qos, retained)
}

func (f *field) Connected() bool { return f.link != nil && f.link.Connected() }

func newField(t *testing.T, id, broker string) *field {
	t.Helper()
	f := &field{id: id}
	prefix := publish.Prefix("", id, false)
	ticks := time.NewTicker(publish.Tick)
	t.Cleanup(ticks.Stop)
	log := zerolog.Nop()
	status := func(c alerting.Condition) []byte {
		now := time.Now().UTC()
		return fmt.Appendf(nil, `{"condition":%q,"instance":%q,"at":%q,"valid_until":%q,"notice":%q}`,
			c, id, now.Format(time.RFC3339Nano), now.Add(5*time.Second).Format(time.RFC3339Nano), alerting.Notice)
	}
	var err error
	f.link, err = feed.NewPublisher(t.Context(), feed.PublisherOptions{
		Broker: feed.Broker{URL: broker}, ClientID: id, Log: log,
		Will: &feed.Will{Topic: publish.StatusTopic(prefix), Payload: status(alerting.NoContact)},
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(f.link.Close)
	f.sink, err = publish.New(f, publish.Options{
		Prefix: prefix, Instance: id, Now: time.Now, Tick: ticks.C, Log: log, Listen: time.Second,
		NotObserved: func() []publish.Retained {
			return []publish.Retained{{Topic: publish.PathTopic("07", "landing"), Payload: []byte(`{"state":"not-observed"}`)}}
		},
		Farewell: func() []byte { return status(alerting.NoContact) },
	})
	if err != nil {
		t.Fatal(err)
	}
	f.link.WatchRetained(publish.StatusTopic(prefix), f.sink.ObserveStatus)
	f.sink.SetStatus(alerting.Observing, status(alerting.Observing))
	var running sync.WaitGroup
	running.Go(func() { f.sink.Run(t.Context()) })
	t.Cleanup(running.Wait)
	return f
}

// turn is a tenth of a second of an airfield's life: an alert a second that
// opens, changes five times a second and closes; four paths and eight masts.
func (f *field) turn(t *testing.T, now time.Time) {
	t.Helper()
	f.count++
	stamp := now.UTC().Format(time.RFC3339Nano)
	f.sink.SetStatus(alerting.Observing, fmt.Appendf(nil, `{"condition":"observing","instance":%q,"at":%q,"valid_until":%q}`,
		f.id, stamp, now.Add(5*time.Second).UTC().Format(time.RFC3339Nano)))
	for _, runway := range []string{"07", "25"} {
		for _, operation := range []string{"landing", "take-off"} {
			f.sink.SetPath(runway, operation, alerting.Raised, fmt.Appendf(nil, `{"state":"raised","at":%q}`, stamp))
		}
	}
	for i := range 8 {
		f.sink.SetStation(fmt.Sprint("mast", i), "live", fmt.Appendf(nil, `{"state":"live","at":%q}`, stamp))
	}
	if now.Sub(f.opened) >= openEvery {
		f.opened = now
		e := event{Airfield: f.id, ID: fmt.Sprintf("%s-%04d", f.id, f.count), Phase: int(publish.Opening), Issued: now}
		f.open = append(f.open, e)
		f.issue(t, e)
	}
	for len(f.open) > 0 && now.Sub(f.open[0].Issued) >= life {
		f.close(t, now)
	}
	if f.count%2 == 0 {
		for _, e := range f.open {
			e.Phase, e.Issued = int(publish.Update), now
			f.issue(t, e)
		}
	}
}

func (f *field) close(t *testing.T, now time.Time) {
	t.Helper()
	e := f.open[0]
	f.open = f.open[1:]
	e.Phase, e.Issued = int(publish.Closing), now
	f.issue(t, e)
}

func (f *field) closeAll(t *testing.T, now time.Time) {
	t.Helper()
	for len(f.open) > 0 {
		f.close(t, now)
	}
}

func (f *field) issue(t *testing.T, e event) {
	t.Helper()
	if e.Phase != int(publish.Update) {
		f.issued = append(f.issued, e)
	}
	err := f.sink.Issue(publish.Issue{AlertID: e.ID, Phase: publish.Phase(e.Phase), JSON: func(delayed bool) []byte {
		e := e
		e.Delayed = delayed
		b, err := json.Marshal(e)
		if err != nil {
			return nil // an event can always be written
		}
		return b
	}})
	if err != nil {
		t.Error(err)
	}
}

// arrival is an event with the time at which the reader had it.
type arrival struct {
	event
	arrived time.Time
}

// regionReader is a reader in the region: one persistent session at QoS 1.
type regionReader struct {
	mu       sync.Mutex
	first    map[string]bool
	fields   map[string][]arrival // openings and closings, at their first arrival
	repeated int
	beside   int
}

func readRegion(t *testing.T, broker string) *regionReader {
	t.Helper()
	r := &regionReader{first: map[string]bool{}, fields: map[string][]arrival{}}
	subscribe(t, broker, map[string]byte{"sockline/+/alert": 1, "sockline/+/status": 0, "sockline/+/path/#": 0}, r.take)
	return r
}

// subscribe gives what arrives, one message at a time, until the test ends.
func subscribe(t *testing.T, broker string, topics map[string]byte, take func(mqtt.Message)) {
	t.Helper()
	granted := make(chan struct{}, 1)
	o := mqtt.NewClientOptions().AddBroker(strings.Replace(broker, "mqtt://", "tcp://", 1)).SetClientID("region").
		SetCleanSession(false).SetConnectRetry(true).SetConnectRetryInterval(500 * time.Millisecond).
		SetMaxReconnectInterval(time.Second).SetKeepAlive(5 * time.Second).SetPingTimeout(3 * time.Second).SetOrderMatters(true)
	o.SetOnConnectHandler(func(c mqtt.Client) {
		go func() { // a handler must not wait for an answer
			token := c.SubscribeMultiple(topics, nil)
			if token.WaitTimeout(10*time.Second) && token.Error() == nil {
				select {
				case granted <- struct{}{}:
				default:
				}
			}
		}()
	})
	o.SetDefaultPublishHandler(func(_ mqtt.Client, m mqtt.Message) { take(m) })
	c := mqtt.NewClient(o)
	c.Connect()
	t.Cleanup(func() { c.Disconnect(250) })
	select {
	case <-granted:
	case <-time.After(patience):
		t.Fatalf("the reader got no subscription within %v", patience)
	}
}

func (r *regionReader) take(m mqtt.Message) {
	var e event
	r.mu.Lock()
	defer r.mu.Unlock()
	if !strings.HasSuffix(m.Topic(), "/alert") || json.Unmarshal(m.Payload(), &e) != nil || e.Phase == int(publish.Update) {
		r.beside++
		return
	}
	if r.first[e.key()] {
		r.repeated++
		return
	}
	r.first[e.key()] = true
	r.fields[e.Airfield] = append(r.fields[e.Airfield], arrival{e, time.Now()})
}

func (r *regionReader) seen() int {
	r.mu.Lock()
	defer r.mu.Unlock()
	return len(r.first)
}

func (r *regionReader) of(airfield string) []arrival {
	r.mu.Lock()
	defer r.mu.Unlock()
	return slices.Clone(r.fields[airfield])
}

func (r *regionReader) twice() int {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.repeated
}

func (r *regionReader) others() int {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.beside
}
