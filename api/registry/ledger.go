package registry

import (
	"context"
	"io"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// LedgerRoot is the root of the Merkle tree of the actor's laboratory at a
// size, and that size; a negative size means the present one.
func (r *Registry) LedgerRoot(ctx context.Context, actor Actor, size int64) (store.Hash, int64, error) {
	var root ledger.Hash
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		root, size, err = v.Root(ctx, actor.Laboratory, size)
		return beyond(err, "the ledger of %s is shorter than that", actor.Laboratory)
	})
	return store.Hash(root), size, err
}

// LedgerEntries are up to limit entries from a position on.
func (r *Registry) LedgerEntries(ctx context.Context, actor Actor, from int64, limit int) ([]store.Entry, error) {
	var entries []store.Entry
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		entries, err = v.Entries(ctx, actor.Laboratory, from, Query{Limit: limit}.limit())
		return err
	})
	return entries, err
}

// LedgerInclusion is the audit path of the entry at a position in the tree of
// a size (RFC 6962, 2.1.1).
func (r *Registry) LedgerInclusion(ctx context.Context, actor Actor, position, size int64) ([]store.Hash, error) {
	return r.proof(ctx, actor, size, func(reader ledger.HashReader) ([]ledger.Hash, error) {
		if position < 0 || position >= size {
			return nil, Refuse(NotFound, "no entry %d in a ledger of %d entries", position, size)
		}
		return ledger.ProveInclusion(size, position, reader)
	})
}

// LedgerConsistency proves that the tree of the first size is a prefix of that
// of the second (RFC 6962, 2.1.2).
func (r *Registry) LedgerConsistency(ctx context.Context, actor Actor, first, second int64) ([]store.Hash, error) {
	return r.proof(ctx, actor, second, func(reader ledger.HashReader) ([]ledger.Hash, error) {
		if first < 0 || first > second {
			return nil, Complain("no such proof", []Complaint{{Place: "query.first", Found: text(first), Expected: "a size from 0 to the second"}})
		}
		return ledger.ProveConsistency(second, first, reader)
	})
}

func (r *Registry) proof(ctx context.Context, actor Actor, size int64, prove func(ledger.HashReader) ([]ledger.Hash, error)) ([]store.Hash, error) {
	var out []store.Hash
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		head, err := v.Head(ctx, actor.Laboratory)
		if err != nil {
			return err
		}
		if size > head.Size {
			return Refuse(NotFound, "the ledger of %s has %d entries", actor.Laboratory, head.Size)
		}
		hashes, err := prove(v.TreeHashReader(ctx, actor.Laboratory))
		out = each(hashes, func(h ledger.Hash) store.Hash { return store.Hash(h) })
		return err
	})
	return out, err
}

// LastCheckpoint is the newest signed checkpoint of the actor's laboratory.
func (r *Registry) LastCheckpoint(ctx context.Context, actor Actor) (store.Checkpoint, error) {
	var c store.Checkpoint
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		c, err = v.LastCheckpoint(ctx, actor.Laboratory)
		return beyond(err, "laboratory %s has no signed checkpoint", actor.Laboratory)
	})
	return c, err
}

// UploadInfo is what is known of an upload of the actor's laboratory.
func (r *Registry) UploadInfo(ctx context.Context, actor Actor, hash store.Hash) (store.UploadInfo, error) {
	var info store.UploadInfo
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		info, err = v.UploadInfo(ctx, actor.Laboratory, hash)
		return beyond(err, "no upload %s in laboratory %s", hash, actor.Laboratory)
	})
	return info, err
}

// Upload writes an upload's bytes as they came, checked against their hash as they go.
func (r *Registry) Upload(ctx context.Context, actor Actor, hash store.Hash, w io.Writer) (store.UploadInfo, error) {
	var info store.UploadInfo
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		info, err = v.Upload(ctx, actor.Laboratory, hash, w)
		return beyond(err, "no upload %s in laboratory %s", hash, actor.Laboratory)
	})
	return info, err
}

// beyond gives a not-found error its own sentence.
func beyond(err error, format string, args ...any) error {
	if err != nil && ignoreNotFound(err) == nil {
		e := Refuse(NotFound, format, args...)
		e.Err = err
		return e
	}
	return err
}
