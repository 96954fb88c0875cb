package store

import (
	"context"
	"database/sql"
)

// SetCommit replaces how transactions are ended, to lose the answer of one.
func SetCommit(s *Store, f func(*sql.Tx) error) { s.commit = f }

// LostConnection is an error of the driver that leaves open whether a commit took effect.
func LostConnection() error { return sql.ErrConnDone }

// ReadingLineByHand is the canonical line as an import writes it.
func ReadingLineByHand(r Reading) []byte { return r.appendLine(nil) }

// PackPart and UnpackPart are the stored form of a part of content.
var (
	PackPart   = packPart
	UnpackPart = unpackPart
)

// OpenUnchecked opens a registry whatever its migrations, to migrate it.
func OpenUnchecked(ctx context.Context, o Options) (*Store, error) {
	s := newStore(o)
	var err error
	s.write, s.read, err = s.engine.open(ctx, o)
	return s, err
}

// ReadSchema returns the number of the newest migration applied.
func ReadSchema(ctx context.Context, s *Store) (int64, error) { return s.schema(ctx) }
