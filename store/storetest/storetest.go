// Package storetest opens throw-away registries for tests, on every engine.
//
// SQLite always runs. Postgres runs where its programs are installed: one
// cluster for each test binary, on a socket in a temporary directory, and one
// database for each test, copied from a template that is migrated once. Where
// they are not installed the tests say loudly that they were skipped, unless the
// variable DELTAMOOR_TEST_REQUIRE, a list separated by commas, names postgres: then
// they fail.
//
// A package whose tests use Postgres gives the cluster back with
//
//	func TestMain(m *testing.M) { os.Exit(storetest.Main(m)) }
//
// Without it the cluster dies with the test binary, and its directory is
// removed by the next test that starts one.
package storetest

import (
	"context"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"sync/atomic"
	"testing"

	"deltamoor/store"
)

// An Engine is a kind of database tests run on.
type Engine string

// The engines.
const (
	SQLite   Engine = "sqlite"
	Postgres Engine = "postgres"
)

// RequireVariable names the engines whose absence fails a test.
const RequireVariable = "DELTAMOOR_TEST_REQUIRE"

func required(e Engine) bool {
	return slices.Contains(strings.Split(os.Getenv(RequireVariable), ","), string(e))
}

// Engines returns the engines to run a test on.
func Engines(t testing.TB) []Engine {
	t.Helper()
	engines := []Engine{SQLite}
	if _, err := programs(); err != nil {
		if required(Postgres) {
			t.Fatalf("%s asks for postgres: %v", RequireVariable, err)
		}
		t.Logf("POSTGRES IS SKIPPED: %v", err)
		return engines
	}
	return append(engines, Postgres)
}

// ForEachEngine runs a test once on each engine; open opens a new, empty
// registry, closed at the end of the test.
func ForEachEngine(t *testing.T, f func(t *testing.T, open func(store.Options) *store.Store)) {
	t.Helper()
	for _, e := range Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			f(t, func(o store.Options) *store.Store { return Open(t, e, o) })
		})
	}
}

// Open opens a registry on the engine, closed at the end of the test. Where the
// options name no database it is a new, empty one.
func Open(t testing.TB, e Engine, o store.Options) *store.Store {
	t.Helper()
	if o.Database == "" {
		o.Database = Database(t, e)
	}
	o.Migrate = !o.ReadOnly
	s, err := store.Open(context.Background(), o)
	if err != nil {
		t.Fatalf("open %s registry: %v", e, err)
	}
	t.Cleanup(func() {
		if err := s.Close(); err != nil {
			t.Errorf("close %s registry: %v", e, err)
		}
	})
	return s
}

// numbered gives each database of the test binary a name of its own.
var numbered atomic.Int64

// Database returns the name of a new database, migrated on Postgres and absent
// on SQLite, for Options.Database. It vanishes at the end of the test.
func Database(t testing.TB, e Engine) string {
	t.Helper()
	if e == SQLite {
		return filepath.Join(t.TempDir(), "registry.db")
	}
	return cluster(t).create(t, fmt.Sprintf("test_%d", numbered.Add(1)), template)
}

// EmptyDatabase is a Database before the first migration.
func EmptyDatabase(t testing.TB, e Engine) string {
	t.Helper()
	if e == SQLite {
		return Database(t, e)
	}
	return cluster(t).create(t, fmt.Sprintf("test_%d", numbered.Add(1)), "template0")
}
