package feed

import (
	"slices"
	"testing"

	"github.com/eclipse/paho.mqtt.golang/packets"
)

func TestUnackedListsWhatEarlierConnectionsLeft(t *testing.T) {
	u := newUnacked()
	u.Open()
	defer u.Close()
	put := func(key string) { u.Put(key, packets.NewControlPacket(packets.Publish)) }
	list := func(when string, want ...string) {
		t.Helper()
		if got := u.All(); !slices.Equal(got, want) {
			t.Errorf("%s: lists %q, want %q", when, got, want)
		}
	}
	u.newConnection()
	put("o.1")
	put("o.2")
	put("o.3")
	list("on the first connection")
	u.newConnection()
	put("o.4")
	list("on the second", "o.1", "o.2", "o.3")
	u.Del("o.2") // acknowledged
	list("after an acknowledgement", "o.1", "o.3")
	u.newConnection()
	list("on the third", "o.1", "o.3", "o.4")
}
