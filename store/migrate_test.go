package store_test

import (
	"context"
	"errors"
	"sync/atomic"
	"testing"
	"time"

	"deltamoor/migrations"
	"deltamoor/store"
	"deltamoor/store/storetest"
)

func TestOfProcessesThatStartAtOnceExactlyOneMigrates(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			database := storetest.EmptyDatabase(t, e)
			list, err := migrations.List(string(e))
			if err != nil {
				t.Fatal(err)
			}
			var migrated atomic.Int32
			together(5, func(int) {
				s, err := store.OpenUnchecked(context.Background(), store.Options{Database: database})
				if err != nil {
					t.Error(err)
					return
				}
				defer s.Close()
				applied, err := s.Migrate(context.Background())
				if err != nil {
					t.Error(err)
				}
				switch len(applied) {
				case len(list):
					migrated.Add(1)
				case 0:
				default:
					t.Errorf("applied %v, want all or none", applied)
				}
				if found, err := store.ReadSchema(context.Background(), s); err != nil || found != list[len(list)-1].Number {
					t.Errorf("schema %d, %v, want %d", found, err, list[len(list)-1].Number)
				}
			})
			if migrated.Load() != 1 {
				t.Errorf("%d processes migrated, want 1", migrated.Load())
			}
		})
	}
}

func TestLeaseOfADeadProcessIsTakenOver(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			database := storetest.Database(t, e)
			s := storetest.Open(t, e, store.Options{Database: database})
			v := newVandal(t, e, database)
			hold := func(until time.Time) {
				t.Helper()
				if _, err := v.db.Exec(`DELETE FROM migration_lease`); err != nil {
					t.Fatal(err)
				}
				if _, err := v.db.Exec(`INSERT INTO migration_lease (name, holder, until) VALUES ('schema', 'dead', $1)`, until.UnixMicro()); err != nil {
					t.Fatal(err)
				}
			}
			hold(time.Now().Add(time.Hour))
			ctx, cancel := context.WithTimeout(t.Context(), 300*time.Millisecond)
			defer cancel()
			if _, err := s.Migrate(ctx); !errors.Is(err, context.DeadlineExceeded) {
				t.Errorf("migrating beside a living holder: %v, want to wait", err)
			}
			hold(time.Now().Add(-time.Second))
			if _, err := s.Migrate(t.Context()); err != nil {
				t.Errorf("migrating after a dead holder: %v", err)
			}
		})
	}
}

func TestNewerDatabaseIsRefused(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			database := storetest.Database(t, e)
			s := storetest.Open(t, e, store.Options{Database: database})
			v := newVandal(t, e, database)
			insert := `INSERT INTO goose_db_version (version_id, is_applied) VALUES (9999, 1)`
			if e == storetest.Postgres {
				insert = `INSERT INTO goose_db_version (version_id, is_applied) VALUES (9999, true)`
			}
			if _, err := v.db.Exec(insert); err != nil {
				t.Fatal(err)
			}
			for _, migrate := range []bool{false, true} {
				_, err := store.Open(t.Context(), store.Options{Database: database, Migrate: migrate})
				if !errors.Is(err, store.ErrNewer) {
					t.Errorf("migrate %v: error %v, want ErrNewer", migrate, err)
				}
				if found, ok := errors.AsType[*store.SchemaError](err); !ok || found.Found != 9999 {
					t.Errorf("error %v does not say what was found", err)
				}
			}
			if _, err := s.Migrate(t.Context()); !errors.Is(err, store.ErrNewer) {
				t.Errorf("Migrate: %v, want ErrNewer", err)
			}
		})
	}
}
