package access

import (
	"net/netip"
	"sync"
	"time"
)

// pace is how many tries there are at first, and how often there is another.
type pace struct {
	most  float64
	every time.Duration
}

// paces are those of one name from one address, of an address, and of everybody.
// A name alone has none: others could keep its owner out.
func paces() (pair, address, all pace) {
	return pace{5, 30 * time.Second}, pace{20, 5 * time.Second}, pace{100, time.Second}
}

// limiter bounds how often somebody may try. It holds little: what is full
// again is forgotten, and everybody together fills slowly.
type limiter struct {
	mu      sync.Mutex
	buckets map[string]*bucket
	tidied  time.Time
}

type bucket struct {
	pace
	left float64
	at   time.Time
}

// fill adds what has come since; a clock that was set back adds nothing.
func (b *bucket) fill(now time.Time) {
	if d := now.Sub(b.at); d > 0 {
		b.left = min(b.most, b.left+d.Seconds()/b.every.Seconds())
	}
	b.at = now
}

// take takes one try from each bucket, or none from any.
func (l *limiter) take(name, address string, now time.Time) bool {
	l.mu.Lock()
	defer l.mu.Unlock()
	l.tidy(now)
	pair, from, all := paces()
	where := network(address)
	var buckets []*bucket
	for _, want := range []struct {
		key string
		pace
	}{{"all", all}, {"a " + where, from}, {"p " + where + " " + shortened(name), pair}} {
		// One that is new has tries and gets used: refusals add none, and so
		// there are never more than everybody has had tries.
		b := l.bucket(want.key, want.pace, now)
		if b.left < 1 {
			return false
		}
		buckets = append(buckets, b)
	}
	for _, b := range buckets {
		b.left--
	}
	return true
}

func (l *limiter) bucket(key string, p pace, now time.Time) *bucket {
	b := l.buckets[key]
	if b == nil {
		b = &bucket{pace: p, left: p.most, at: now}
		l.buckets[key] = b
	}
	b.fill(now)
	return b
}

// forgive gives the tries of a name from an address back after it got in.
func (l *limiter) forgive(name, address string) {
	l.mu.Lock()
	defer l.mu.Unlock()
	delete(l.buckets, "p "+network(address)+" "+shortened(name))
}

// tidy forgets, once a minute, whoever has all tries again.
func (l *limiter) tidy(now time.Time) {
	if d := now.Sub(l.tidied); d >= 0 && d < time.Minute {
		return
	}
	l.tidied = now
	for key, b := range l.buckets {
		b.fill(now)
		if b.left >= b.most {
			delete(l.buckets, key)
		}
	}
}

// shortened keeps a name from filling the memory.
func shortened(name string) string { return name[:min(len(name), maxName)] }

// network is the address, or of an IPv6 address the 64 bits that one customer
// has for himself.
func network(address string) string {
	a, err := netip.ParseAddr(address)
	if err != nil || a.Is4() || a.Is4In6() {
		return address
	}
	p, err := a.WithZone("").Prefix(64)
	if err != nil {
		return address
	}
	return p.String()
}
