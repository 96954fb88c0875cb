package registry

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// KeyCode is the code of the record, one in each laboratory, whose versions are
// the public halves of the keys that sign its ledger.
const KeyCode = "ledger"

// Name is what the registry is called: the first part of every ledger's origin.
func (r *Registry) Name() string { return r.name }

// Origin names the ledger of a laboratory in checkpoints: <registry>/<laboratory>.
func (r *Registry) Origin(laboratory string) string { return ledger.Origin(r.name, laboratory) }

// Checkpoint gives a checkpoint of the actor's laboratory that covers the whole
// ledger as it stands, signed now with the registry's own key unless the newest
// one does. Without a key it refuses.
func (r *Registry) Checkpoint(ctx context.Context, actor Actor) (store.Checkpoint, error) {
	if err := actor.need(MayRead); err != nil {
		return store.Checkpoint{}, err
	}
	key := r.key.Load()
	if key == nil {
		return store.Checkpoint{}, Refuse(Conflict, "this registry has no signing key: its ledgers are unsigned")
	}
	return r.SignCheckpoint(ctx, actor.Laboratory, *key)
}

// SignCheckpoint signs the head of a laboratory's ledger and keeps the note; a
// head that the key has signed already is answered with that note. A ledger's
// first key is recorded as a version of its key record; a key other than the
// newest recorded one is refused, because it has to be brought in by RotateKey.
// It is an operation of whoever holds the private key, so it takes no actor.
func (r *Registry) SignCheckpoint(ctx context.Context, laboratory string, key ledger.Key) (store.Checkpoint, error) {
	origin := r.Origin(laboratory)
	verifier, err := key.Verifier(origin)
	if err != nil {
		return store.Checkpoint{}, fmt.Errorf("sign ledger %s: %w", laboratory, err)
	}
	newest, err := r.newestKey(ctx, laboratory)
	switch {
	case err != nil:
		return store.Checkpoint{}, err
	case newest == nil:
		if _, err := r.stateKey(ctx, laboratory, RegistryPerson, "", 0, verifier); err != nil {
			return store.Checkpoint{}, err
		}
	case newest.Value.Verifier != verifier:
		return store.Checkpoint{}, Refuse(Conflict, "the ledger %s is signed by %s, not by %s: a new key has to be signed by the old one first",
			origin, shortVerifier(newest.Value.Verifier), shortVerifier(verifier))
	}
	return r.sign(ctx, laboratory, key, verifier)
}

// sign signs the present head, whichever key it is.
func (r *Registry) sign(ctx context.Context, laboratory string, key ledger.Key, verifier string) (store.Checkpoint, error) {
	var out store.Checkpoint
	_, err := r.store.Write(ctx, laboratory, func(ctx context.Context, tx *store.Tx) error {
		root, size, err := tx.Root(ctx, laboratory, -1)
		if err != nil {
			return err
		}
		note, err := ledger.Sign(ledger.Checkpoint{Origin: r.Origin(laboratory), Size: size, Root: root}, key)
		if err != nil {
			return err
		}
		out = store.Checkpoint{Size: size, Signer: shortVerifier(verifier), Note: note}
		return tx.AppendCheckpoint(ctx, note, verifier) // Ed25519 signs the same text to the same bytes: again changes nothing
	})
	if err != nil {
		return store.Checkpoint{}, fmt.Errorf("sign ledger %s: %w", laboratory, err)
	}
	return out, nil
}

// RotateKey replaces the key that signs a laboratory's ledger: the new key's
// public half is recorded as a further version of the key record, and the head
// that holds it is signed by the old key, then by the new one. Who trusts the
// old key can therefore follow to the new one. It may be repeated after an
// interruption. by is the person's code, reason why the key is replaced.
func (r *Registry) RotateKey(ctx context.Context, laboratory, by, reason string, old, replacement ledger.Key) (store.Checkpoint, error) {
	origin := r.Origin(laboratory)
	before, err := old.Verifier(origin)
	if err != nil {
		return store.Checkpoint{}, fmt.Errorf("rotate key of %s: %w", laboratory, err)
	}
	after, err := replacement.Verifier(origin)
	if err != nil {
		return store.Checkpoint{}, fmt.Errorf("rotate key of %s: %w", laboratory, err)
	}
	var c complaints
	c.code("by", by)
	c.text("reason", strings.TrimSpace(reason), 1000)
	if before == after {
		c.add("replacement", "the key that signs already", "another key")
	}
	if err := Complain("the key cannot be replaced", c); err != nil {
		return store.Checkpoint{}, err
	}
	newest, err := r.newestKey(ctx, laboratory)
	if err != nil {
		return store.Checkpoint{}, err
	}
	if newest == nil {
		return store.Checkpoint{}, Refuse(Conflict, "the ledger %s has no key yet: sign it, there is nothing to replace", origin)
	}
	switch newest.Value.Verifier {
	case before:
		if _, err := r.stateKey(ctx, laboratory, by, strings.TrimSpace(reason), newest.Ref.Version, after); err != nil {
			return store.Checkpoint{}, err
		}
	case after: // recorded by an attempt that did not come to its end
	default:
		return store.Checkpoint{}, Refuse(Conflict, "the ledger %s is signed by %s, not by %s", origin, shortVerifier(newest.Value.Verifier), shortVerifier(before))
	}
	if _, err := r.sign(ctx, laboratory, old, before); err != nil {
		return store.Checkpoint{}, err
	}
	return r.sign(ctx, laboratory, replacement, after)
}

// stateKey records a public key; after is the version it follows.
func (r *Registry) stateKey(ctx context.Context, laboratory, by, reason string, after int, verifier string) (store.Ref, error) {
	var ref store.Ref
	_, err := r.store.Write(ctx, laboratory, func(ctx context.Context, tx *store.Tx) error {
		var err error
		key := store.Key{Laboratory: laboratory, Kind: store.KindKey, Code: KeyCode}
		ref, err = appendVersion(ctx, tx, Actor{Person: by, Laboratory: laboratory}, key, Edit{After: after, Reason: reason}, nil, store.SigningKey{Verifier: verifier})
		return err
	})
	return ref, err
}

// newestKey is the newest recorded key of a ledger, nil where there is none.
func (r *Registry) newestKey(ctx context.Context, laboratory string) (*store.Version[store.SigningKey], error) {
	var out *store.Version[store.SigningKey]
	err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		out = nil
		raw, err := v.Newest(ctx, store.Key{Laboratory: laboratory, Kind: store.KindKey, Code: KeyCode})
		if errors.Is(err, store.ErrNotFound) {
			return nil
		}
		if err != nil {
			return err
		}
		key, err := store.Decode[store.SigningKey](raw)
		out = &key
		return err
	})
	return out, err
}

// Checkpoints lists signed checkpoints of the actor's laboratory, smallest
// first, with a size greater than after.
func (r *Registry) Checkpoints(ctx context.Context, actor Actor, after int64, limit int) ([]store.Checkpoint, error) {
	var out []store.Checkpoint
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		out, err = v.Checkpoints(ctx, actor.Laboratory, after, Query{Limit: limit}.limit())
		return err
	})
	return out, err
}

// Keys lists the recorded public keys of the actor's laboratory, oldest first.
func (r *Registry) Keys(ctx context.Context, actor Actor) ([]store.Version[store.SigningKey], error) {
	var out []store.Version[store.SigningKey]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		out, err = keysOf(ctx, v, actor.Laboratory)
		return err
	})
	return out, err
}

// keysOf reads every version of a ledger's key record.
func keysOf(ctx context.Context, v *store.View, laboratory string) ([]store.Version[store.SigningKey], error) {
	var out []store.Version[store.SigningKey]
	key := store.Key{Laboratory: laboratory, Kind: store.KindKey, Code: KeyCode}
	for after := 0; ; {
		raws, err := v.Versions(ctx, key, after, MaxPage)
		if err != nil {
			return nil, err
		}
		for _, raw := range raws {
			version, err := store.Decode[store.SigningKey](raw)
			if err != nil {
				return nil, err
			}
			out = append(out, version)
			after = version.Ref.Version
		}
		if len(raws) < MaxPage {
			return out, nil
		}
	}
}

// allCheckpoints reads every checkpoint of a ledger.
func allCheckpoints(ctx context.Context, v *store.View, laboratory string) ([]store.Checkpoint, error) {
	var out []store.Checkpoint
	for after := int64(-1); ; {
		page, err := v.Checkpoints(ctx, laboratory, after, MaxPage)
		if err != nil {
			return nil, err
		}
		if len(page) < MaxPage {
			return append(out, page...), nil
		}
		// A page may end between two notes of one size: what has the last size is read again.
		last := page[len(page)-1].Size
		for len(page) > 0 && page[len(page)-1].Size == last {
			page = page[:len(page)-1]
		}
		if len(page) == 0 {
			return nil, fmt.Errorf("ledger %s: more than %d checkpoints of size %d", laboratory, MaxPage, last)
		}
		out = append(out, page...)
		after = page[len(page)-1].Size
	}
}

// vouching finds, for every key of a ledger after its first, the first
// checkpoint by which the key before vouches for it: one that covers the entry
// of the new key. A nil stands where there is none.
func vouching(keys []store.Version[store.SigningKey], checkpoints []store.Checkpoint) []*store.Checkpoint {
	var out []*store.Checkpoint
	for i := 1; i < len(keys); i++ {
		var found *store.Checkpoint
		for j, c := range checkpoints {
			if c.Size <= keys[i].Position {
				continue
			}
			if _, err := ledger.Open(c.Note, keys[i-1].Value.Verifier); err == nil {
				found = &checkpoints[j]
				break
			}
		}
		out = append(out, found)
	}
	return out
}

// keyFindings tells of keys that the key before them did not sign.
func (r *Registry) keyFindings(ctx context.Context, laboratory string) ([]store.Finding, error) {
	var out []store.Finding
	err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		out = nil
		keys, err := keysOf(ctx, v, laboratory)
		if err != nil && ctx.Err() != nil {
			return err
		}
		if err != nil || len(keys) < 2 {
			return nil // that a version cannot be read, the store's own checks tell
		}
		checkpoints, err := allCheckpoints(ctx, v, laboratory)
		if err != nil {
			return err
		}
		for i, c := range vouching(keys, checkpoints) {
			if c == nil {
				out = append(out, store.Finding{Position: keys[i+1].Position, Table: "versions", Key: keys[i+1].Ref.String(),
					Found:    "a key that the one before has not signed",
					Expected: "a checkpoint by " + shortVerifier(keys[i].Value.Verifier) + " that covers it"})
			}
		}
		return nil
	})
	return out, err
}

// shortVerifier is a verifier without the key itself: <origin>+<8 hexadecimal digits>.
func shortVerifier(verifier string) string {
	if i := strings.IndexByte(verifier, '+'); i >= 0 {
		if j := strings.IndexByte(verifier[i+1:], '+'); j >= 0 {
			return verifier[:i+1+j]
		}
	}
	return verifier
}

// outsideOf chooses, of checkpoints kept outside, those of one laboratory's
// ledger, and those that are of none of the laboratories, so that they are told.
func (r *Registry) outsideOf(laboratory string, laboratories []string, notes [][]byte) [][]byte {
	var out [][]byte
	for _, note := range notes {
		origin, _, _ := strings.Cut(string(note), "\n")
		known := slices.ContainsFunc(laboratories, func(other string) bool { return r.Origin(other) == origin })
		if !known || origin == r.Origin(laboratory) {
			out = append(out, note)
		}
	}
	return out
}
