package registry

import (
	"context"

	"deltamoor/store"
)

// A source gives what a recomputation reads: versions by number, and the
// readings of a session by number. A view of the store is one and a pack is
// the other, so that what is stored and what was handed on are computed again
// by the same code.
type source interface {
	Version(ctx context.Context, key store.Key, version int) (store.Raw, error)
	Readings(ctx context.Context, laboratory, session string, f func(store.Reading) error) error
}
