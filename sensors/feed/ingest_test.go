package feed

import (
	"fmt"
	"io"
	"net"
	"sync/atomic"
	"testing"
	"time"

	mqtt "github.com/eclipse/paho.mqtt.golang"

	"sockline/sensors/feed/brokertest"
)

// BenchmarkIngest compares, on one broker and in one run, the client with an
// empty handler and nothing else against a Subscriber whose queue is emptied.
// Both are flooded with the same 118-byte messages on 20 topics; each counts
// what it receives within a second, in turns.
func BenchmarkIngest(b *testing.B) {
	for qos := range byte(2) {
		b.Run(fmt.Sprintf("qos%d", qos), func(b *testing.B) {
			broker := brokertest.Start(b, "max_queued_messages 100000", "max_inflight_messages 1000")
			conn := rawConnect(b, broker.Addr())
			stop, stopped := make(chan struct{}), make(chan struct{})
			go flood(conn, qos, stop, stopped)
			defer func() { close(stop); <-stopped }()
			var bare, ours float64
			for b.Loop() {
				bare += rateOfBareClient(b, broker.URL())
				ours += rateOfSubscriber(b, broker.URL())
			}
			b.ReportMetric(bare/float64(b.N), "bare-msg/s")
			b.ReportMetric(ours/float64(b.N), "ours-msg/s")
			b.ReportMetric(ours/bare, "ours/bare")
			b.ReportMetric(0, "ns/op")
		})
	}
}

// flood writes encoded packets as fast as the broker takes them.
func flood(conn net.Conn, qos byte, stop, stopped chan struct{}) {
	defer close(stopped)
	go func() { _, _ = io.Copy(io.Discard, conn) }() // acknowledgements
	payload := []byte(fmt.Sprintf("%-118s", `[{"n":"wind_speed","u":"m/s","v":4.1},{"n":"wind_direction","u":"deg","v":221}]`))
	var batch []byte
	for i := range 400 {
		batch = append(batch, publishPacket(fmt.Sprintf("flood/station/mast%02d/wind", i%20), payload, qos, uint16(i+1))...)
	}
	for {
		select {
		case <-stop:
			conn.Close()
			return
		default:
			if _, err := conn.Write(batch); err != nil {
				return
			}
		}
	}
}

// perSecond counts over one second.
func perSecond(count func() uint64) float64 {
	start, before := time.Now(), count()
	<-time.After(time.Second)
	return float64(count()-before) / time.Since(start).Seconds()
}

func rateOfBareClient(b *testing.B, url string) float64 {
	var n atomic.Uint64
	c := mqtt.NewClient(mqtt.NewClientOptions().AddBroker(url).SetClientID(fmt.Sprint("bare-", time.Now().UnixNano())))
	if token := c.Connect(); !token.WaitTimeout(patience) || token.Error() != nil {
		b.Fatal("the bare client does not connect")
	}
	defer c.Disconnect(quiesce)
	if token := c.Subscribe("flood/#", subscribeQoS, func(mqtt.Client, mqtt.Message) { n.Add(1) }); !token.WaitTimeout(patience) || token.Error() != nil {
		b.Fatal("the bare client does not subscribe")
	}
	return perSecond(n.Load)
}

func rateOfSubscriber(b *testing.B, url string) float64 {
	s, err := Subscribe(b.Context(), SubscribeOptions{
		Broker: Broker{URL: url}, ClientID: "bench", Topics: []string{"flood/#"}, Clock: NewClock(),
	})
	if err != nil {
		b.Fatal(err)
	}
	defer s.Close()
	var n atomic.Uint64
	go func() {
		for {
			select {
			case <-s.Messages():
				n.Add(1)
			case <-s.Done():
				return
			}
		}
	}()
	// Wait for the first message, as the bare client waits for its SUBACK.
	tick := time.NewTicker(time.Millisecond)
	defer tick.Stop()
	for n.Load() == 0 {
		<-tick.C
	}
	return perSecond(n.Load)
}
