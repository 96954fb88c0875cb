package store

import (
	"context"
	"crypto/rand"
	"database/sql"
	"errors"
	"fmt"
	"io"
	mathrand "math/rand/v2"
	"sync"
	"time"
)

// Options say where the registry's data are and what the store takes from outside.
type Options struct {
	// Database is postgres://… for Postgres. Anything else is a file of the embedded
	// database, or a directory that holds it as deltamoor.db; "" is the current directory.
	Database string
	// Migrate brings an empty or older database to the program's tables at Open.
	// Without it such a database is refused: ErrOutdated.
	Migrate bool
	// ReadOnly opens for reading only; every Write is refused.
	ReadOnly bool
	// Now is the clock; nil is time.Now.
	Now func() time.Time
	// Rand gives the random part of transaction ids; nil is crypto/rand.
	Rand io.Reader
}

// A Store is an open registry. It is safe for concurrent use.
type Store struct {
	engine   *engine
	write    *sql.DB
	read     *sql.DB
	readOnly bool
	now      func() time.Time

	randMu sync.Mutex
	rand   io.Reader

	// commit ends a transaction; tests replace it to lose the answer.
	commit func(*sql.Tx) error
}

// Open opens a registry. The error is ErrOutdated or ErrNewer where database and
// program do not fit together.
func Open(ctx context.Context, o Options) (*Store, error) {
	s := newStore(o)
	var err error
	if s.write, s.read, err = s.engine.open(ctx, o); err != nil {
		return nil, err
	}
	err = s.checkSchema(ctx)
	if errors.Is(err, ErrOutdated) && o.Migrate && !o.ReadOnly {
		_, err = s.Migrate(ctx)
	}
	if err != nil {
		return nil, errors.Join(err, s.Close())
	}
	return s, nil
}

func newStore(o Options) *Store {
	s := &Store{engine: sqliteEngine(), readOnly: o.ReadOnly, now: o.Now, rand: o.Rand, commit: (*sql.Tx).Commit}
	if isPostgres(o.Database) {
		s.engine = postgresEngine()
	}
	if s.now == nil {
		s.now = time.Now
	}
	if s.rand == nil {
		s.rand = rand.Reader
	}
	return s
}

// Close ends all connections. Transactions still running fail.
func (s *Store) Close() error {
	if s.read == s.write {
		return s.write.Close()
	}
	return errors.Join(s.read.Close(), s.write.Close())
}

// Engine names the engine: sqlite or postgres.
func (s *Store) Engine() string { return s.engine.name }

// Ping asks the database whether it is there.
func (s *Store) Ping(ctx context.Context) error {
	if err := s.read.PingContext(ctx); err != nil {
		return &UnavailableError{Reason: "database does not answer", cause: err}
	}
	return nil
}

func (s *Store) random(n int) ([]byte, error) {
	s.randMu.Lock()
	defer s.randMu.Unlock()
	b := make([]byte, n)
	if _, err := io.ReadFull(s.rand, b); err != nil {
		return nil, fmt.Errorf("draw random bytes: %w", err)
	}
	return b, nil
}

// Read runs f in a transaction whose statements all see one state of the
// registry. The View is not valid after f returns.
func (s *Store) Read(ctx context.Context, f func(context.Context, *View) error) error {
	options := s.engine.read
	tx, err := s.read.BeginTx(ctx, &options)
	if err != nil {
		return s.unavailable(err)
	}
	defer tx.Rollback() // a read has nothing to commit
	return s.unavailable(f(ctx, &View{store: s, q: &queries{engine: s.engine, tx: tx}, now: InstantOf(s.now())}))
}

// unavailable gives errors of a lost or full database their meaning.
func (s *Store) unavailable(err error) error {
	if err == nil || errors.Is(err, ErrUnavailable) {
		return err
	}
	switch s.engine.class(err) {
	case classGone:
		return &UnavailableError{Reason: "database does not answer", cause: err}
	case classFull:
		return &UnavailableError{Reason: "database cannot be written", cause: err}
	case classRetry:
		return &UnavailableError{Reason: "database is busy", cause: err}
	}
	return err
}

// Limits of trying a write again.
const (
	writeTries   = 8
	writePeriod  = 10 * time.Second
	writeBackoff = 4 * time.Millisecond // doubled at each try, and jittered
)

// A Commit says what a Write recorded.
type Commit struct {
	Laboratory string
	// RecordedAt is the one time of everything in the act; zero if it recorded no version.
	RecordedAt Instant
	// First is the ledger position of the first version, Count how many there are.
	First, Count int64
}

// Write runs f and records what it queued, all or nothing, in the ledger of one
// laboratory. When Write returns without an error the act is on disk.
//
// f may run several times, and only its last run counts: its only effect must be
// on Tx and on variables it sets anew each time. It must not call Write. An error
// of f ends the write with nothing recorded.
//
// Errors: ErrConflict and ErrStale when somebody was first, ErrInvalid for
// content that cannot be stored, ErrUnavailable when it may be tried again later.
func (s *Store) Write(ctx context.Context, laboratory string, f func(context.Context, *Tx) error) (Commit, error) {
	if s.readOnly {
		return Commit{}, ErrReadOnly
	}
	if err := checkLaboratory(laboratory); err != nil {
		return Commit{}, err
	}
	var last error
	deadline := time.Now().Add(writePeriod)
	backoff := writeBackoff
	for try := 1; ; try++ {
		commit, class, err := s.tryWrite(ctx, laboratory, f)
		if err == nil {
			return commit, nil
		}
		if class != classRetry && class != classGone || ctx.Err() != nil {
			return Commit{}, s.unavailable(err)
		}
		last = err
		pause := backoff/2 + mathrand.N(backoff)
		if try == writeTries || time.Now().Add(pause).After(deadline) {
			return Commit{}, &UnavailableError{Reason: fmt.Sprintf("write given up after %d tries", try), cause: last}
		}
		select {
		case <-ctx.Done():
			return Commit{}, ctx.Err()
		case <-time.After(pause):
		}
		backoff *= 2
	}
}

// tryWrite is one run of a write. The class says whether another run may help.
func (s *Store) tryWrite(ctx context.Context, laboratory string, f func(context.Context, *Tx) error) (Commit, errorClass, error) {
	// Bulk rows go over the connection itself, so the transaction has one of its own.
	conn, err := s.write.Conn(ctx)
	if err != nil {
		return Commit{}, s.engine.class(err), err
	}
	defer conn.Close()
	options := s.engine.write
	sqlTx, err := conn.BeginTx(ctx, &options)
	if err != nil {
		return Commit{}, s.engine.class(err), err
	}
	defer sqlTx.Rollback() // after a commit it does nothing

	tx := &Tx{View: View{store: s, q: &queries{engine: s.engine, tx: sqlTx}, now: InstantOf(s.now()), cut: true}, laboratory: laboratory, conn: conn, sql: sqlTx}
	tx.View.tx = tx
	commit, err := tx.run(ctx, f)
	if err != nil {
		class := tx.q.class(err)
		if class == classUnique {
			// The answer needs a connection of its own, and on SQLite the only one that
			// writes is this one.
			_ = sqlTx.Rollback()
			return Commit{}, class, tx.conflict(ctx, err)
		}
		return Commit{}, class, err
	}
	if err := s.commit(sqlTx); err != nil {
		class := s.engine.class(err)
		_ = sqlTx.Rollback()
		if class != classGone && !errors.Is(err, sql.ErrConnDone) || commit.Count == 0 {
			return Commit{}, class, err
		}
		_ = conn.Close()
		if done, lookErr := s.wasCommitted(ctx, laboratory, tx.transactionID, commit); lookErr != nil {
			return Commit{}, classOther, &UnavailableError{Reason: "the answer to a commit was lost and could not be looked up", cause: errors.Join(err, lookErr)}
		} else if !done {
			return Commit{}, classGone, err
		}
	}
	return commit, classOther, nil
}
