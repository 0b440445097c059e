package feed

import (
	"slices"
	"sync"

	mqtt "github.com/eclipse/paho.mqtt.golang"
)

// unacked keeps what was sent at QoS 1 and not acknowledged, so that the
// client can send it again on the next connection. It is a memory store with
// one difference: a listing shows only what earlier connections left. The
// client lists the store some time after it has announced a connection, and
// would otherwise send twice what its owner has published by then.
type unacked struct {
	mqtt.Store
	mu   sync.Mutex
	left []string // keys left by earlier connections
}

func newUnacked() *unacked {
	// The ordered store: what is sent again goes out in its first order.
	return &unacked{Store: mqtt.NewOrderedMemoryStore()}
}

// newConnection is called before each attempt to connect.
func (u *unacked) newConnection() {
	keys := u.Store.All()
	u.mu.Lock()
	u.left = keys
	u.mu.Unlock()
}

// All lists the keys that earlier connections left and that are still stored.
func (u *unacked) All() []string {
	u.mu.Lock()
	defer u.mu.Unlock()
	stored := u.Store.All()
	return slices.DeleteFunc(slices.Clone(u.left), func(key string) bool { return !slices.Contains(stored, key) })
}
