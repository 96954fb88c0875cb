package demo

import (
	"context"
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"io"
	"math/rand/v2"
	"sync"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Clock is a time that moves only when told, and never back. It is safe for
// concurrent use.
type Clock struct {
	mu sync.Mutex
	at time.Time
}

// NewClock returns a clock that stands at a time.
func NewClock(at time.Time) *Clock { return &Clock{at: at} }

// Now is the time the clock stands at.
func (c *Clock) Now() time.Time {
	c.mu.Lock()
	defer c.mu.Unlock()
	return c.at
}

// Advance moves the clock on; a negative duration leaves it where it is.
func (c *Clock) Advance(d time.Duration) {
	c.mu.Lock()
	defer c.mu.Unlock()
	if d > 0 {
		c.at = c.at.Add(d)
	}
}

// Until moves the clock on to a time; one that is past leaves it where it is.
func (c *Clock) Until(at time.Time) { c.Advance(at.Sub(c.Now())) }

// Start is when the invented laboratory opens its registry.
func Start() time.Time { return time.Date(2025, time.March, 3, 9, 0, 0, 0, time.UTC) }

// stream returns a source of randomness for one purpose of one seed: what one
// purpose draws does not shift what another gets.
func stream(seed uint64, purpose string) *rand.ChaCha8 {
	key := binary.BigEndian.AppendUint64([]byte("deltamoor demo\x00"), seed)
	return rand.NewChaCha8(sha256.Sum256(append(key, purpose...)))
}

// Random returns the reader that codes and secrets of a seed are drawn from. It
// is safe for concurrent use, and no secret drawn from it is one.
func Random(seed uint64) io.Reader { return &random{source: stream(seed, "codes")} }

type random struct {
	mu     sync.Mutex
	source *rand.ChaCha8
}

func (r *random) Read(p []byte) (int, error) {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.source.Read(p)
}

// A Place is an open store with the registry and clock of one seed.
type Place struct {
	Store    *store.Store
	Registry *registry.Registry
	Clock    *Clock
}

// Open opens a store, which may not exist yet, and a registry over it, both on
// the clock and the randomness of a seed. Now and Rand of the options are replaced.
func Open(ctx context.Context, o store.Options, seed uint64) (*Place, error) {
	clock, random := NewClock(Start()), Random(seed)
	o.Migrate, o.Now, o.Rand = true, clock.Now, random
	s, err := store.Open(ctx, o)
	if err != nil {
		return nil, fmt.Errorf("open the store of the invented laboratory: %w", err)
	}
	return &Place{Store: s, Registry: registry.New(s, registry.Options{Now: clock.Now, Rand: random}), Clock: clock}, nil
}

// Close closes the store.
func (p *Place) Close() error { return p.Store.Close() }
