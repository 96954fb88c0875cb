package registry

import (
	"context"
	"errors"

	"deltamoor/store"
)

// An IdempotencyKey is what a program calls one request of its own, and the
// SHA-256 of that request, so that another request under the same name shows.
type IdempotencyKey struct {
	Key     string
	Request store.Hash
}

type requestKey struct{}

// WithKey gives a request the identity that its sender chose. Whatever the
// request records is recorded together with the key, in one transaction: of two
// requests with one key, in this process or another, only one has an effect.
func WithKey(ctx context.Context, k IdempotencyKey) context.Context {
	return context.WithValue(ctx, requestKey{}, k)
}

// keep records the request's key beside its effect; the answer follows by Remember.
func keep(ctx context.Context, tx *store.Tx, actor Actor) error {
	k, ok := ctx.Value(requestKey{}).(IdempotencyKey)
	if !ok {
		return nil
	}
	err := tx.Remember(ctx, actor.Person, k.Key, k.Request, nil)
	if errors.Is(err, store.ErrConflict) {
		return &Error{Meaning: Conflict, Message: "a request with this Idempotency-Key has been carried out already, or is at this moment", Err: err}
	}
	return err
}

// Recall finds the answer that an earlier request with the key was given. The
// same key with another request is refused as invalid.
func (r *Registry) Recall(ctx context.Context, actor Actor, k IdempotencyKey) (answer []byte, found bool, err error) {
	if actor.Person == "" || actor.Laboratory == "" {
		return nil, false, Refuse(Unauthenticated, "sign in or send a token first")
	}
	err = r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		var err error
		answer, err = v.Recall(ctx, actor.Laboratory, actor.Person, k.Key, k.Request)
		return err
	})
	switch {
	case errors.Is(err, store.ErrNotFound):
		return nil, false, nil
	case errors.Is(err, store.ErrKeyReused):
		return nil, false, &Error{Meaning: Invalid, Message: "this Idempotency-Key was used for another request", Err: err,
			Complaints: []Complaint{{Place: "header.Idempotency-Key", Found: quote(k.Key), Expected: "a key of its own for every request"}}}
	}
	if err == nil && len(answer) == 0 {
		return nil, false, Refuse(Conflict, "the request with this Idempotency-Key was carried out and its answer was lost on the way: look at what it made")
	}
	return answer, err == nil, err
}

// Remember keeps the answer to a request whose effect was recorded with its key,
// for as long as store.IdempotencyPeriod. A request that recorded nothing has none to keep.
func (r *Registry) Remember(ctx context.Context, actor Actor, k IdempotencyKey, answer []byte) error {
	if actor.Person == "" || actor.Laboratory == "" {
		return Refuse(Unauthenticated, "sign in or send a token first")
	}
	_, err := r.store.Write(ctx, actor.Laboratory, func(ctx context.Context, tx *store.Tx) error {
		return tx.Answer(ctx, actor.Person, k.Key, k.Request, answer)
	})
	return ignoreNotFound(err)
}
