package registry

import "sync"

// A known remembers what bodies say that are known by their hashes, at most
// twice most of them. Nothing in it can be out of date: which hash counts is
// asked of the store each time, and what has a hash never changes.
type known[K comparable, V any] struct {
	most int

	mu         sync.RWMutex
	young, old map[K]V
}

func (k *known[K, V]) find(key K) (V, bool) {
	k.mu.RLock()
	defer k.mu.RUnlock()
	if v, ok := k.young[key]; ok {
		return v, true
	}
	v, ok := k.old[key]
	return v, ok
}

func (k *known[K, V]) keep(key K, v V) {
	k.mu.Lock()
	defer k.mu.Unlock()
	if k.young == nil || len(k.young) >= k.most {
		k.young, k.old = map[K]V{}, k.young
	}
	k.young[key] = v
}
