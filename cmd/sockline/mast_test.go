package main

import (
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"sockline/sensors"
	"sockline/sensors/decode"
	"sockline/sensors/feed"
	"sockline/sensors/feed/brokertest"
	"sockline/sensors/mast"
)

// TestMast runs the agent on standard input against a real broker: what is
// sound comes out as a message of the station, the rest is kept back.
func TestMast(t *testing.T) {
	const topic = "airfield/skerrymoor/station/touch07/wind"
	b := brokertest.Start(t)
	granted := make(chan struct{}, 8)
	sub, err := feed.Subscribe(t.Context(), feed.SubscribeOptions{
		Broker: feed.Broker{URL: b.URL()}, ClientID: "test", Topics: []string{topic, mast.StatusTopic(topic)}, Clock: feed.NewClock(), Log: zerolog.Nop(),
		OnState: func(_, subscribed bool) {
			if subscribed {
				granted <- struct{}{}
			}
		},
	})
	if err != nil {
		t.Fatal(err)
	}
	defer sub.Close()
	limit := time.After(20 * time.Second)
	select {
	case <-granted:
	case <-limit:
		t.Fatal("no subscription")
	}
	// The first and the last are published sentences; the second has a wrong
	// checksum.
	lines := "$WIMWV,350.0,R,6.4,M,A*24\r\n$WIMWV,350.0,R,9.4,M,A*24\r\n$WIMWV,045.0,T,12.5,N,A*12\r\n"
	queue := filepath.Join(t.TempDir(), "queue")
	o := callIn(t, t.Context(), strings.NewReader(lines), "mast", "--source", "stdin", "--station", "touch07", "--topic", topic,
		"--broker", b.URL(), "--queue", queue, "--queue-size", "1MiB")
	if o.code != exitDone || o.stdout != "" {
		t.Fatalf("%+v", o)
	}
	d, err := decode.New(sensors.Station{ID: "touch07", Format: sensors.FormatSenMLJSON}, 0)
	if err != nil {
		t.Fatal(err)
	}
	var got []sensors.Reading
	for offline := false; !offline || len(got) < 2; {
		select {
		case m := <-sub.Messages():
			if m.Topic != topic {
				offline = strings.Contains(string(m.Payload), `"online":false`)
			} else if got, err = d.Decode(got, m, 0); err != nil {
				t.Fatal(err)
			}
		case <-limit:
			t.Fatalf("%d readings, goodbye %v", len(got), offline)
		}
	}
	// 12.5 kn are 6.4306 m/s to four decimals.
	if len(got) != 2 || got[0].Speed != 6.4 || got[0].From != 350 || got[1].Speed != 6.4306 || got[1].From != 45 {
		t.Errorf("%+v", got)
	}
}

func TestMastUsage(t *testing.T) {
	queue := t.TempDir()
	whole := []string{"--source", "stdin", "--station", "touch07", "--topic", "a/b/wind", "--broker", "mqtt://127.0.0.1:1", "--queue", queue}
	for i := 0; i < len(whole); i += 2 {
		args := append([]string{"mast"}, whole[:i]...)
		o := call(t, append(args, whole[i+2:]...)...)
		if o.code != exitUsage || !strings.Contains(o.stderr, whole[i]+" is missing") {
			t.Errorf("without %s: %+v", whole[i], o)
		}
	}
	for _, bad := range [][2]string{
		{"--station", "Touch 07"}, {"--topic", "a/+"}, {"--topic", "a/status"}, {"--sentence", "GGA"}, {"--queue-size", "16 MB"},
		{"--queue-size", "1KiB"}, {"--queue-size", "-1"}, {"--source", "/dev/ttyUSB0"},
	} {
		args := append([]string{"mast"}, whole...)
		o := call(t, append(args, bad[0], bad[1])...)
		if o.code != exitUsage || !strings.Contains(o.stderr, bad[0]) {
			t.Errorf("%v: %+v", bad, o)
		}
	}
	q, err := mast.OpenQueue(queue, mast.LeastQueue)
	if err != nil {
		t.Fatal(err)
	}
	defer q.Close()
	if o := call(t, append([]string{"mast"}, whole...)...); o.code != exitFailed || !strings.Contains(o.stderr, "another agent is using it") {
		t.Errorf("two agents on one queue: %+v", o)
	}
}

func TestByteSize(t *testing.T) {
	for text, want := range map[string]int64{"262144": 262144, "512KiB": 512 << 10, "16MiB": 16 << 20, "1GiB": 1 << 30} {
		if got, err := byteSize(text); err != nil || got != want {
			t.Errorf("%s: %d, %v", text, got, err)
		}
	}
}
