package auth

import (
	"container/list"
	"net/netip"
	"sync"
	"time"
)

// maxAddresses bounds the limiter's memory; the address that failed longest ago
// is forgotten first.
const maxAddresses = 10_000

// A limiter counts failures by address, and forgives one at a time.
type limiter struct {
	burst   float64
	forgive time.Duration

	mu        sync.Mutex
	addresses map[netip.Prefix]*list.Element
	recent    *list.List // of *failures, newest first
}

// failures of one address; count falls by one every forgive.
type failures struct {
	address netip.Prefix
	count   float64
	at      time.Time
}

func newLimiter(burst int, forgive time.Duration) limiter {
	return limiter{burst: float64(burst), forgive: forgive, addresses: map[netip.Prefix]*list.Element{}, recent: list.New()}
}

// failed counts a failure and returns how long the address has to wait, 0 while
// it is within the limit.
func (l *limiter) failed(address netip.Addr, now time.Time) time.Duration {
	key := keyOf(address)
	l.mu.Lock()
	defer l.mu.Unlock()
	element, ok := l.addresses[key]
	if !ok {
		if l.recent.Len() >= maxAddresses {
			oldest := l.recent.Back()
			l.recent.Remove(oldest)
			delete(l.addresses, oldest.Value.(*failures).address)
		}
		element = l.recent.PushFront(&failures{address: key, at: now})
		l.addresses[key] = element
	}
	l.recent.MoveToFront(element)
	f := element.Value.(*failures)
	if passed := now.Sub(f.at); passed > 0 {
		f.count = max(0, f.count-float64(passed)/float64(l.forgive))
	}
	f.at = now
	if f.count+1 > l.burst {
		return time.Duration((f.count + 1 - l.burst) * float64(l.forgive))
	}
	f.count++
	return 0
}

// keyOf takes IPv6 addresses by their /64, since whoever has one has all of it.
func keyOf(address netip.Addr) netip.Prefix {
	bits := address.BitLen()
	if address.Is6() && !address.Is4In6() {
		bits = 64
	}
	p, err := address.WithZone("").Prefix(bits)
	if err != nil { // no address: everybody without one counts together
		return netip.Prefix{}
	}
	return p
}
