package store

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"time"

	"github.com/pressly/goose/v3"

	"deltamoor/migrations"
)

// How long a process that migrates may be silent before another takes over,
// and how often it says that it is alive.
const (
	migrationLease = 30 * time.Second
	migrationRenew = 5 * time.Second
)

// The lease row exists before the first migration, so it has a table of its
// own. A row works on every engine; advisory locks do not.
const (
	createMigrationLease = `CREATE TABLE IF NOT EXISTS migration_lease (
		name text NOT NULL PRIMARY KEY, holder text NOT NULL, until bigint NOT NULL)`
	takeMigrationLease = `INSERT INTO migration_lease (name, holder, until) VALUES ('schema', $1, $2)
		ON CONFLICT (name) DO UPDATE SET holder = excluded.holder, until = excluded.until
		WHERE migration_lease.until < $3 OR migration_lease.holder = excluded.holder`
	renewMigrationLease = `UPDATE migration_lease SET until = $2 WHERE name = 'schema' AND holder = $1`
	dropMigrationLease  = `DELETE FROM migration_lease WHERE name = 'schema' AND holder = $1`
	readSchema          = `SELECT coalesce(max(version_id), 0) FROM goose_db_version WHERE is_applied`
)

// checkSchema compares the database with the program: nil, or a SchemaError.
func (s *Store) checkSchema(ctx context.Context) error {
	expected, err := migrations.Newest(s.engine.name)
	if err != nil {
		return err
	}
	found, err := s.schema(ctx)
	if err != nil {
		return err
	}
	if found != expected {
		return &SchemaError{Found: found, Expected: expected}
	}
	return nil
}

// schema returns the number of the newest migration applied, 0 for an empty database.
func (s *Store) schema(ctx context.Context) (int64, error) {
	var tables int
	if err := s.read.QueryRowContext(ctx, s.engine.hasTable, "goose_db_version").Scan(&tables); err != nil {
		return 0, fmt.Errorf("read the database's migrations: %w", err)
	}
	if tables == 0 {
		return 0, nil
	}
	var found int64
	if err := s.read.QueryRowContext(ctx, readSchema).Scan(&found); err != nil {
		return 0, fmt.Errorf("read the database's migrations: %w", err)
	}
	return found, nil
}

// Migrate brings the database to the program's tables and returns the names of
// the migrations applied. Of several processes that start at once one does the
// work; the others wait for it and find nothing left to do. A database newer
// than the program is left alone: ErrNewer.
func (s *Store) Migrate(ctx context.Context) (applied []string, err error) {
	if s.readOnly {
		return nil, ErrReadOnly
	}
	holder, err := s.random(16)
	if err != nil {
		return nil, err
	}
	release, err := s.leaseMigration(ctx, fmt.Sprintf("%x", holder))
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, release()) }()

	if err := s.checkSchema(ctx); err == nil || !errors.Is(err, ErrOutdated) {
		return nil, errors.Join(err, s.rebuild(ctx, err))
	}
	folder, err := migrations.Files(s.engine.name)
	if err != nil {
		return nil, err
	}
	provider, err := goose.NewProvider(s.engine.dialect, s.write, folder,
		goose.WithDisableGlobalRegistry(true), goose.WithLogger(goose.NopLogger()))
	if err != nil {
		return nil, fmt.Errorf("migrate: %w", err)
	}
	results, err := provider.Up(ctx)
	for _, r := range results {
		applied = append(applied, r.Source.Path)
	}
	if err != nil {
		return applied, fmt.Errorf("migrate: %w", err)
	}
	err = s.checkSchema(ctx)
	return applied, errors.Join(err, s.rebuild(ctx, err))
}

// leaseMigration waits for the lease, keeps it alive, and returns what gives it back.
func (s *Store) leaseMigration(ctx context.Context, holder string) (release func() error, err error) {
	// Of two processes that create the table at once one may be told that the type
	// exists already; then it does.
	if _, err := s.write.ExecContext(ctx, createMigrationLease); err != nil && s.engine.class(err) != classUnique {
		if _, err := s.write.ExecContext(ctx, createMigrationLease); err != nil {
			return nil, fmt.Errorf("take the lease for migrating: %w", err)
		}
	}
	take := func() (bool, error) {
		// The lease compares the clocks of machines. A holder whose clock is behind by
		// more than the lease could be overtaken, so a migration must also run in a
		// transaction of its own, which it does.
		now := InstantOf(time.Now())
		result, err := s.write.ExecContext(ctx, takeMigrationLease, holder, int64(now)+migrationLease.Microseconds(), int64(now))
		if err != nil {
			if c := s.engine.class(err); c == classRetry {
				return false, nil
			}
			return false, fmt.Errorf("take the lease for migrating: %w", err)
		}
		n, err := result.RowsAffected()
		return n == 1, err
	}
	for {
		got, err := take()
		if err != nil {
			return nil, err
		}
		if got {
			break
		}
		select {
		case <-ctx.Done():
			return nil, fmt.Errorf("wait for another process to migrate: %w", ctx.Err())
		case <-time.After(50 * time.Millisecond):
		}
	}
	alive, stop := context.WithCancel(ctx)
	done := make(chan struct{})
	go func() {
		defer close(done)
		renewLease(alive, s.write, holder)
	}()
	return func() error {
		stop()
		<-done
		_, err := s.write.ExecContext(context.WithoutCancel(ctx), dropMigrationLease, holder)
		return err
	}, nil
}

func renewLease(ctx context.Context, db *sql.DB, holder string) {
	for {
		select {
		case <-ctx.Done():
			return
		case <-time.After(migrationRenew):
			// A renewal that fails is tried again; when none succeeds the lease runs out.
			_, _ = db.ExecContext(ctx, renewMigrationLease, holder, InstantOf(time.Now().Add(migrationLease)))
		}
	}
}
