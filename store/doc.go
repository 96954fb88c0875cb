// Package store keeps the registry: every statement as a version of a record,
// each version in the ledger of its laboratory, over SQLite or Postgres.
//
// # What it promises
//
// Nothing is overwritten. A record is (laboratory, kind, code); its versions are
// numbered 1, 2, 3 … without gaps. What is later said about a version (submitted,
// approved, declined, withdrawn) is a version too, of a record of kind decision.
// States are read off decisions; nothing is updated.
//
// Everything is bound. A version's body is canonical JSON (RFC 8785) that names its
// inputs by their hashes; its SHA-256 stands in an entry of the laboratory's Merkle
// tree (package ledger). Rows in bulk are bound by their session's body, uploads by a
// version of kind document. Verify recomputes all of it and names every place
// that differs.
//
// Acknowledged is on disk. When Write returns, the act is committed and synced,
// whole; when it returns an error nothing of it is.
//
// # Two times
//
// A Moment has ValidAt, which chooses what held, and AsOf, which chooses what had
// been said. Of a record with periods, among the versions approved by AsOf with
// valid_from by ValidAt, the greatest valid_from holds, then the greatest number;
// a withdrawal that has taken effect by ValidAt makes it withdrawn, and nothing
// else takes its place. Records without periods go by AsOf alone. recorded_at never
// falls along a ledger and grows from act to act, whatever the clock does, so
// AsOf is one number for each ledger.
//
// # Reading and writing
//
//	err := s.Read(ctx, func(ctx context.Context, v *store.View) error {
//		raw, state, err := v.InForce(ctx, key, store.Moment{ValidAt: &start})
//		…
//	})
//
//	commit, err := s.Write(ctx, "FJO", func(ctx context.Context, tx *store.Tx) error {
//		ref, err := tx.Append(ctx, store.Draft{Kind: store.KindValue, Code: code, By: "mara", Value: body})
//		if err != nil {
//			return err
//		}
//		_, err = tx.Append(ctx, store.Draft{Kind: store.KindDecision, Code: store.DecisionCode(ref), …})
//		return err
//	})
//
// The closure of a write may run several times; its only effect is on Tx. Append
// numbers and hashes at once and queues; the queue is recorded after the closure,
// behind the one row for which a laboratory's writers wait, so a slow closure keeps
// nobody waiting. A Guard says what must still be true at that moment. Inside a
// Write, reads see the laboratory as it was when the transaction began, and what
// the transaction itself has queued.
//
// # Tables
//
// Of three classes. History (versions, readings, uploads, content, entries,
// tree_hashes, checkpoints) is inserted only. Derived (edges, results,
// sensitivities, lines, reported, names, uses, currents, ledger_heads) is written in the
// transaction of the version it comes from, by derive, and can be made again. Working
// (credentials, sign_ins, tokens, idempotency, jobs, leases) may change or vanish
// without any number moving.
//
// # Errors
//
// ErrNotFound, ErrConflict (somebody was first), ErrStale (Draft.After is not the
// newest), ErrInvalid (content that cannot be stored), ErrUnavailable (try later),
// ErrNewer and ErrOutdated (database and program do not fit), ErrReadOnly,
// ErrKeyReused. Behind each stands a type that says what was found and what was
// expected.
package store
