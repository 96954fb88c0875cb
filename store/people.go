package store

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
)

// Working rows of people: what lets them in. That a person, a role, a token or
// its revocation exists is a version; here are only the secrets' hashes, which
// may change or vanish without any number moving. They are written within
// Write; an act that queues no version leaves the ledger alone.

// A Credential is the hash of a person's password.
type Credential struct {
	Person string
	// PasswordHash is whatever the caller's hash function writes; never a password.
	PasswordHash string
	// Temporary passwords are to be changed at the next sign-in.
	Temporary bool
	ChangedAt Instant
}

const selectCredential = `SELECT password_hash, temporary, changed_at FROM credentials WHERE laboratory = $1 AND person = $2`

// Credential returns a person's password hash, or ErrNotFound.
func (v *View) Credential(ctx context.Context, laboratory, person string) (Credential, error) {
	c := Credential{Person: person}
	var temporary int
	err := v.q.one(ctx, selectCredential, []any{laboratory, person}, &c.PasswordHash, &temporary, &c.ChangedAt)
	if errors.Is(err, sql.ErrNoRows) {
		return Credential{}, notFound("credential of %s/%s", laboratory, person)
	}
	if err != nil {
		return Credential{}, fmt.Errorf("read the credential of %s/%s: %w", laboratory, person, err)
	}
	c.Temporary = temporary != 0
	return c, nil
}

const upsertCredential = `INSERT INTO credentials (laboratory, person, password_hash, temporary, changed_at) VALUES ($1, $2, $3, $4, $5)
	ON CONFLICT (laboratory, person) DO UPDATE SET password_hash = excluded.password_hash,
		temporary = excluded.temporary, changed_at = excluded.changed_at`

// SetCredential sets or replaces a person's password hash.
func (tx *Tx) SetCredential(ctx context.Context, c Credential) error {
	if c.Person == "" || c.PasswordHash == "" {
		return &InvalidError{Place: "credential", Found: "no person or no hash", Expected: "both"}
	}
	temporary := 0
	if c.Temporary {
		temporary = 1
	}
	if _, err := tx.q.exec(ctx, upsertCredential, tx.laboratory, c.Person, c.PasswordHash, temporary, int64(tx.now)); err != nil {
		return fmt.Errorf("set the credential of %s/%s: %w", tx.laboratory, c.Person, err)
	}
	return nil
}

const deleteCredential = `DELETE FROM credentials WHERE laboratory = $1 AND person = $2`

// DropCredential removes a person's password hash; none is no error.
func (tx *Tx) DropCredential(ctx context.Context, person string) error {
	if _, err := tx.q.exec(ctx, deleteCredential, tx.laboratory, person); err != nil {
		return fmt.Errorf("drop the credential of %s/%s: %w", tx.laboratory, person, err)
	}
	return nil
}

// A TokenSecret ties the SHA-256 of a token's secret to the token's record.
type TokenSecret struct {
	Hash   Hash
	Code   string // of the record of kind token
	Person string
	// UsedAt is the last use noted; nil if none.
	UsedAt *Instant
}

const selectToken = `SELECT code, person, used_at FROM tokens WHERE laboratory = $1 AND hash = $2`

// TokenSecret finds a token by the SHA-256 of its secret, or ErrNotFound.
func (v *View) TokenSecret(ctx context.Context, laboratory string, hash Hash) (TokenSecret, error) {
	t := TokenSecret{Hash: hash}
	var used sql.Null[int64]
	err := v.q.one(ctx, selectToken, []any{laboratory, hash[:]}, &t.Code, &t.Person, &used)
	if errors.Is(err, sql.ErrNoRows) {
		return TokenSecret{}, notFound("token in %s", laboratory)
	}
	if err != nil {
		return TokenSecret{}, fmt.Errorf("read a token of %s: %w", laboratory, err)
	}
	t.UsedAt = instantOrNil(used)
	return t, nil
}

const (
	insertToken    = `INSERT INTO tokens (laboratory, hash, code, person, used_at) VALUES ($1, $2, $3, $4, NULL)`
	touchToken     = `UPDATE tokens SET used_at = $3 WHERE laboratory = $1 AND code = $2`
	deleteToken    = `DELETE FROM tokens WHERE laboratory = $1 AND code = $2`
	selectLastUsed = `SELECT used_at FROM tokens WHERE laboratory = $1 AND code = $2`
)

// AddTokenSecret keeps the hash of a new token's secret.
func (tx *Tx) AddTokenSecret(ctx context.Context, t TokenSecret) error {
	if _, err := tx.q.exec(ctx, insertToken, tx.laboratory, t.Hash[:], t.Code, t.Person); err != nil {
		return fmt.Errorf("keep token %s: %w", t.Code, err)
	}
	return nil
}

// TouchToken notes a use of a token.
func (tx *Tx) TouchToken(ctx context.Context, code string) error {
	if _, err := tx.q.exec(ctx, touchToken, tx.laboratory, code, int64(tx.now)); err != nil {
		return fmt.Errorf("note the use of token %s: %w", code, err)
	}
	return nil
}

// DropTokenSecret removes the hash of a token's secret, after which the secret
// lets nobody in; none is no error.
func (tx *Tx) DropTokenSecret(ctx context.Context, code string) error {
	if _, err := tx.q.exec(ctx, deleteToken, tx.laboratory, code); err != nil {
		return fmt.Errorf("drop token %s: %w", code, err)
	}
	return nil
}

// TokenUsedAt returns the last noted use of a token by its code; nil if none
// was noted or its secret is gone.
func (v *View) TokenUsedAt(ctx context.Context, laboratory, code string) (*Instant, error) {
	var used sql.Null[int64]
	err := v.q.one(ctx, selectLastUsed, []any{laboratory, code}, &used)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return nil, fmt.Errorf("read the last use of token %s: %w", code, err)
	}
	return instantOrNil(used), nil
}

// A SignIn is a browser that has signed in.
type SignIn struct {
	// Hash is the SHA-256 of the secret in the browser's cookie.
	Hash      Hash
	Person    string
	CreatedAt Instant
	SeenAt    Instant
	ExpiresAt Instant
	// Data is whatever the caller keeps with it.
	Data string
}

const selectSignIn = `SELECT person, created_at, seen_at, expires_at, data FROM sign_ins
	WHERE laboratory = $1 AND hash = $2 AND expires_at > $3`

// SignIn finds a sign-in that has not expired, or ErrNotFound.
func (v *View) SignIn(ctx context.Context, laboratory string, hash Hash) (SignIn, error) {
	s := SignIn{Hash: hash}
	err := v.q.one(ctx, selectSignIn, []any{laboratory, hash[:], int64(v.now)}, &s.Person, &s.CreatedAt, &s.SeenAt, &s.ExpiresAt, &s.Data)
	if errors.Is(err, sql.ErrNoRows) {
		return SignIn{}, notFound("sign-in in %s", laboratory)
	}
	if err != nil {
		return SignIn{}, fmt.Errorf("read a sign-in of %s: %w", laboratory, err)
	}
	return s, nil
}

const (
	upsertSignIn = `INSERT INTO sign_ins (laboratory, hash, person, created_at, seen_at, expires_at, data) VALUES ($1, $2, $3, $4, $4, $5, $6)
		ON CONFLICT (laboratory, hash) DO UPDATE SET seen_at = excluded.seen_at, expires_at = excluded.expires_at, data = excluded.data`
	deleteSignIn  = `DELETE FROM sign_ins WHERE laboratory = $1 AND hash = $2`
	deleteSignIns = `DELETE FROM sign_ins WHERE laboratory = $1 AND (person = $2 OR expires_at <= $3)`
)

// KeepSignIn keeps a new sign-in, or renews one: last seen now, expiry and data as given.
func (tx *Tx) KeepSignIn(ctx context.Context, s SignIn) error {
	if s.Person == "" || s.Hash == (Hash{}) {
		return &InvalidError{Place: "sign-in", Found: "no person or no hash", Expected: "both"}
	}
	if _, err := tx.q.exec(ctx, upsertSignIn, tx.laboratory, s.Hash[:], s.Person, int64(tx.now), int64(s.ExpiresAt), s.Data); err != nil {
		return fmt.Errorf("keep the sign-in of %s/%s: %w", tx.laboratory, s.Person, err)
	}
	return nil
}

// DropSignIn ends one sign-in; none is no error.
func (tx *Tx) DropSignIn(ctx context.Context, hash Hash) error {
	if _, err := tx.q.exec(ctx, deleteSignIn, tx.laboratory, hash[:]); err != nil {
		return fmt.Errorf("end a sign-in in %s: %w", tx.laboratory, err)
	}
	return nil
}

// DropSignIns ends every sign-in of a person, and all that have expired; person
// "" ends the expired ones alone.
func (tx *Tx) DropSignIns(ctx context.Context, person string) error {
	if _, err := tx.q.exec(ctx, deleteSignIns, tx.laboratory, person, int64(tx.now)); err != nil {
		return fmt.Errorf("end the sign-ins of %s/%s: %w", tx.laboratory, person, err)
	}
	return nil
}
