package mast

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"net"
	"strings"
	"sync/atomic"
	"testing"
	"time"

	"github.com/rs/zerolog"
	"go.uber.org/goleak"

	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/feed"
	"sockline/sensors/feed/brokertest"
)

const (
	topic    = "airfield/skerrymoor/station/touch07/wind"
	patience = 20 * time.Second
)

// rig is an agent with a real broker and a listener behind it.
type rig struct {
	t       *testing.T
	sub     *feed.Subscriber
	agent   *Agent
	out     *feed.Publisher
	queue   *Queue
	cancel  context.CancelFunc
	ended   chan error
	decoder *decode.Decoder
	since   sensors.Instant
	gate    *gate
	told    []status // came while readings were waited for
}

// gate is a publisher that can be made to say that it is not connected.
type gate struct {
	*feed.Publisher
	shut atomic.Bool
}

// Connected is false while the gate is shut.
func (g *gate) Connected() bool { return !g.shut.Load() && g.Publisher.Connected() }

// listen subscribes to what an agent sends.
func listen(t *testing.T, url string) *feed.Subscriber {
	t.Helper()
	granted := make(chan struct{}, 8)
	sub, err := feed.Subscribe(context.Background(), feed.SubscribeOptions{
		Broker: feed.Broker{URL: url}, ClientID: "test", Topics: []string{topic, StatusTopic(topic)}, Clock: feed.NewClock(), Log: zerolog.Nop(),
		OnState: func(_, subscribed bool) {
			if subscribed {
				select {
				case granted <- struct{}{}:
				default:
				}
			}
		},
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(sub.Close)
	select {
	case <-granted:
	case <-time.After(patience):
		t.Fatal("no subscription")
	}
	return sub
}

// start runs an agent against a broker.
func start(t *testing.T, url, dir, source string, stdin io.Reader) *rig {
	t.Helper()
	r := &rig{t: t, ended: make(chan error, 1)}
	s, err := ParseSource(source, stdin)
	if err != nil {
		t.Fatal(err)
	}
	r.queue = open(t, dir, LeastQueue)
	clock := feed.NewClock()
	r.since = clock.Now()
	r.agent, err = New(Options{
		Station: "touch07", Topic: topic, Source: s, Choose: Automatic, Queue: r.queue, Now: clock.Now, Since: r.since,
		Drain: patience, Log: zerolog.Nop(),
	})
	if err != nil {
		t.Fatal(err)
	}
	r.out, err = feed.NewPublisher(context.Background(), feed.PublisherOptions{
		Broker: feed.Broker{URL: url}, ClientID: "mast", Log: zerolog.Nop(), OnConnect: r.agent.Connect,
		Will: &feed.Will{Topic: StatusTopic(topic), Payload: Will("touch07", r.since)},
	})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(r.out.Close)
	if r.decoder, err = decode.New(sensors.Station{ID: "touch07", Format: sensors.FormatSenMLJSON}, 0); err != nil {
		t.Fatal(err)
	}
	r.gate = &gate{Publisher: r.out}
	ctx, cancel := context.WithCancel(context.Background())
	r.cancel = cancel
	gone := make(chan struct{})
	t.Cleanup(func() { cancel(); <-gone }) // before the queue is closed
	go func() {
		defer close(gone)
		r.ended <- r.agent.Run(ctx, r.gate)
	}()
	return r
}

// wait waits for the agent's end.
func (r *rig) wait() {
	r.t.Helper()
	select {
	case err := <-r.ended:
		if err != nil {
			r.t.Errorf("the agent ended with %v", err)
		}
	case <-time.After(patience):
		r.t.Fatal("the agent does not end")
	}
}

// readings waits for n readings and returns them in the order of arrival.
func (r *rig) readings(n int) (all []sensors.Reading) {
	r.t.Helper()
	limit := time.After(patience)
	for len(all) < n {
		select {
		case m := <-r.sub.Messages():
			if m.Topic != topic {
				r.told = append(r.told, parseStatus(r.t, m.Payload))
				continue
			}
			var err error
			if all, err = r.decoder.Decode(all, m, 0); err != nil {
				r.t.Fatalf("%.200s: %v", m.Payload, err)
			}
		case <-limit:
			r.t.Fatalf("%d readings came, want %d", len(all), n)
		}
	}
	return all
}

// status waits for a status that fits.
func (r *rig) status(what string, fits func(status) bool) status {
	r.t.Helper()
	limit := time.After(patience)
	for {
		for len(r.told) > 0 {
			s := r.told[0]
			r.told = r.told[1:]
			if fits(s) {
				return s
			}
		}
		select {
		case m := <-r.sub.Messages():
			if m.Topic == StatusTopic(topic) {
				r.told = append(r.told, parseStatus(r.t, m.Payload))
			}
		case <-limit:
			r.t.Fatalf("no status: %s", what)
		}
	}
}

func parseStatus(t *testing.T, payload []byte) (s status) {
	t.Helper()
	if err := json.Unmarshal(payload, &s); err != nil {
		t.Fatalf("%s: %v", payload, err)
	}
	return s
}

// wind is a sentence whose speed is i.
func wind(i int) string { return sentence(fmt.Sprintf("WIMWV,240.0,R,%d,M,A", i)) + "\r\n" }

// speeds checks that the readings are the winds first to last, in order, at
// times that go on.
func speeds(t *testing.T, all []sensors.Reading, first, last int) {
	t.Helper()
	if len(all) != last-first+1 {
		t.Fatalf("%d readings, want %d", len(all), last-first+1)
	}
	for k, r := range all {
		if r.Speed != float64(first+k) || r.From != 240 || k > 0 && r.Time <= all[k-1].Time {
			t.Fatalf("reading %d is %+v", k, r)
		}
	}
}

func TestStandardInput(t *testing.T) {
	b := brokertest.Start(t)
	sub := listen(t, b.URL())
	var stream strings.Builder
	for i := range 250 {
		stream.WriteString(wind(i) + "noise\n$WIMWV,1,R,1,M,A*00\r\n")
	}
	before := sensors.At(time.Now())
	r := start(t, b.URL(), t.TempDir(), "stdin", strings.NewReader(stream.String()))
	r.sub = sub
	all := r.readings(250)
	speeds(t, all, 0, 249)
	if d := all[0].Time.Sub(before); d < -time.Second || d > patience {
		t.Errorf("stamped %v after the start", d)
	}
	s := r.status("the end", func(s status) bool { return !s.Online })
	if s.Since != r.since.String() || s.Lines != 750 || s.Refused != 500 || s.Queued != 0 || s.State != "stopped" {
		t.Errorf("%+v", s)
	}
	r.wait()
}

func TestTCP(t *testing.T) {
	b := brokertest.Start(t)
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	sub := listen(t, b.URL())
	r := start(t, b.URL(), t.TempDir(), "tcp:"+l.Addr().String(), nil)
	r.sub = sub
	for k := range 2 { // the second time after the instrument has hung up
		conn, err := l.Accept()
		if err != nil {
			t.Fatal(err)
		}
		if _, err := io.WriteString(conn, wind(2*k)+wind(2*k+1)+"$WIMWV,240.0,R,9"); err != nil {
			t.Fatal(err)
		}
		speeds(t, r.readings(2), 2*k, 2*k+1)
		conn.Close()
		r.status("that it hung up", func(s status) bool { return strings.HasPrefix(s.State, "closed: ") })
	}
	r.cancel()
	r.wait()
}

func TestUDP(t *testing.T) {
	b := brokertest.Start(t)
	free, err := net.ListenPacket("udp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	address := free.LocalAddr().String()
	free.Close()
	sub := listen(t, b.URL())
	r := start(t, b.URL(), t.TempDir(), "udp:"+address, nil)
	r.sub = sub
	conn, err := net.Dial("udp", address)
	if err != nil {
		t.Fatal(err)
	}
	defer conn.Close()
	// Until the agent listens, datagrams are lost: send until one gets through.
	tick := time.NewTicker(20 * time.Millisecond)
	defer tick.Stop()
	limit := time.After(patience)
	for open := false; !open; {
		select {
		case <-tick.C:
			_, _ = io.WriteString(conn, strings.TrimSpace(wind(7))) // refused while nobody listens
		case m := <-sub.Messages():
			open = m.Topic == topic
		case <-limit:
			t.Fatal("nothing came")
		}
	}
	if _, err := io.WriteString(conn, wind(8)+strings.TrimSpace(wind(9))); err != nil {
		t.Fatal(err)
	}
	var got []float64
	for len(got) < 2 {
		for _, x := range r.readings(1) {
			if x.Speed != 7 {
				got = append(got, x.Speed)
			}
		}
	}
	if got[0] != 8 || got[1] != 9 {
		t.Errorf("%v, want 8 and 9", got)
	}
	r.cancel()
	r.wait()
}

func TestSerial(t *testing.T) {
	master, device := terminal(t)
	b := brokertest.Start(t)
	sub := listen(t, b.URL())
	r := start(t, b.URL(), t.TempDir(), "serial:"+device+"?baud=4800&parity=none", nil)
	r.sub = sub
	if _, err := io.WriteString(master, wind(1)+wind(2)+wind(3)); err != nil {
		t.Fatal(err)
	}
	speeds(t, r.readings(3), 1, 3)
	s := r.status("that it reads", func(s status) bool { return s.State == stateReading })
	if s.Source != "serial:"+device+"?baud=4800&parity=none" || !s.Online {
		t.Errorf("%+v", s)
	}
	r.cancel()
	r.wait()
}

// The broker goes away while the wind blows on: everything comes when it is
// back, in order, each reading at its own time.
func TestBrokerAwayAndBack(t *testing.T) {
	b := brokertest.Start(t)
	stdin, feeder := io.Pipe()
	dir := t.TempDir()
	sub := listen(t, b.URL())
	r := start(t, b.URL(), dir, "stdin", stdin)
	r.sub = sub
	write := func(from, to int) {
		for i := from; i < to; i++ {
			if _, err := io.WriteString(feeder, wind(i)); err != nil {
				t.Fatal(err)
			}
		}
	}
	write(0, 10)
	speeds(t, r.readings(10), 0, 9)
	sub.Close()
	b.Kill()
	away := sensors.At(time.Now())
	write(10, 700)
	// The listener must be there before the agent sends: messages at this
	// quality of service are for those who listen.
	r.gate.shut.Store(true)
	b.Run()
	r.sub = listen(t, b.URL())
	r.gate.shut.Store(false)
	write(700, 710)
	all := unique(r.readings(700))
	for len(all) < 700 { // one that was sent twice
		all = unique(append(all, r.readings(1)...))
	}
	speeds(t, all, 10, 709)
	if d := all[0].Time.Sub(away); d < -time.Second || d > 10*time.Second {
		t.Errorf("the first was stamped %v after the broker went away", d)
	}
	feeder.Close()
	r.wait()
	if r.queue.Len() != 0 || r.queue.Dropped() != 0 {
		t.Errorf("%d wait, %d dropped", r.queue.Len(), r.queue.Dropped())
	}
}

// unique takes out copies: what goes out may go out twice, also what was on
// its way when the broker went.
func unique(all []sensors.Reading) (one []sensors.Reading) {
	seen := map[float64]bool{}
	for _, r := range all {
		if !seen[r.Speed] && r.Speed >= 10 {
			one = append(one, r)
		}
		seen[r.Speed] = true
	}
	return one
}

// When the connection breaks off the broker tells, with the session of the
// birth; after a stop the agent itself does.
func TestBirthAndWill(t *testing.T) {
	b := brokertest.Start(t)
	relay := brokertest.StartRelay(t, b.Addr())
	sub := listen(t, b.URL())
	stdin, feeder := io.Pipe()
	defer feeder.Close()
	r := start(t, relay.URL(), t.TempDir(), "stdin", stdin)
	r.sub = sub
	birth := r.status("the birth", func(s status) bool { return s.Online })
	relay.Cut()
	will := r.status("the will", func(s status) bool { return !s.Online })
	if birth.Since != r.since.String() || will.Since != birth.Since || will.At != "" {
		t.Errorf("birth %+v, will %+v", birth, will)
	}
	r.status("a second birth", func(s status) bool { return s.Online && s.Since == birth.Since })
	r.cancel()
	end := r.status("the end", func(s status) bool { return !s.Online })
	if end.At == "" || end.State != "stopped" || end.Since != birth.Since {
		t.Errorf("%+v", end)
	}
	r.wait()
}

// What an earlier run left goes out first.
func TestQueueOfAnEarlierRun(t *testing.T) {
	dir := t.TempDir()
	q := open(t, dir, LeastQueue)
	for i := range 5 {
		if err := q.Append(Record{Time: noon + sensors.Instant(i), Speed: float64(i), From: 240, Exercise: i == 2}); err != nil {
			t.Fatal(err)
		}
	}
	if err := q.Close(); err != nil {
		t.Fatal(err)
	}
	b := brokertest.Start(t)
	sub := listen(t, b.URL())
	r := start(t, b.URL(), dir, "stdin", strings.NewReader(wind(5)))
	r.sub = sub
	all := r.readings(6)
	speeds(t, all, 0, 5)
	for i, x := range all {
		if x.Exercise != (i == 2) {
			t.Errorf("reading %d: exercise %v", i, x.Exercise)
		}
	}
	r.wait()
}

func TestParseSource(t *testing.T) {
	for _, good := range []string{"stdin", "tcp:127.0.0.1:10110", "tcp:[::1]:10110", "udp::10110", "udp:127.0.0.1:0", "serial:/dev/ttyUSB0",
		"serial:/dev/ttyS1?baud=38400&data=7&parity=even&stop=2"} {
		if s, err := ParseSource(good, nil); err != nil || s.String() != good {
			t.Errorf("%s: %v", good, err)
		}
	}
	for _, bad := range []string{"", "stdin:", "tcp:host", "tcp::80", "tcp:host:0", "tcp:host:x", "udp:1", "serial:", "serial:/dev/x?baud=12", "serial:/dev/x?speed=4800",
		"serial:/dev/x?parity=maybe", "serial:/dev/x?stop=3", "serial:/dev/x?%zz", "/dev/ttyUSB0", "http://x"} {
		if _, err := ParseSource(bad, nil); err == nil || !strings.Contains(err.Error(), Forms) {
			t.Errorf("%q: %v", bad, err)
		}
	}
}

// A source that is not there is waited for, and nothing is left running.
func TestSourceThatIsNotThere(t *testing.T) {
	b := brokertest.Start(t)
	defer goleak.VerifyNone(t, goleak.IgnoreCurrent())
	sub := listen(t, b.URL())
	r := start(t, b.URL(), t.TempDir(), "serial:/dev/there-is-no-such-line", nil)
	r.sub = sub
	s := r.status("why", func(s status) bool { return strings.HasPrefix(s.State, "closed: ") })
	if !strings.Contains(s.State, "/dev/there-is-no-such-line") {
		t.Errorf("%+v", s)
	}
	r.cancel()
	r.wait()
	r.out.Close()
	sub.Close()
}
