package migrations_test

import (
	"crypto/sha256"
	"database/sql"
	"fmt"
	"io/fs"
	"os"
	"regexp"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/migrations"
	"deltamoor/store"
	"deltamoor/store/storetest"
)

func TestMain(m *testing.M) { os.Exit(storetest.Main(m)) }

func list(t *testing.T, engine string) []migrations.Migration {
	t.Helper()
	l, err := migrations.List(engine)
	if err != nil {
		t.Fatal(err)
	}
	return l
}

func TestBothEnginesHaveTheSameMigrationsInOrder(t *testing.T) {
	lite, pg := list(t, migrations.SQLite), list(t, migrations.Postgres)
	if diff := cmp.Diff(lite, pg); diff != "" {
		t.Errorf("the folders differ (-sqlite +postgres):\n%s", diff)
	}
	if len(lite) == 0 {
		t.Error("there are no migrations")
	}
	last := int64(0)
	for i, m := range lite {
		if m.Number <= last || !strings.HasPrefix(m.Name, fmt.Sprintf("%04d_", m.Number)) {
			t.Errorf("migration %d is %s, number %d after %d", i+1, m.Name, m.Number, last)
		}
		last = m.Number
	}
	newest, err := migrations.Newest(migrations.SQLite)
	if err != nil || newest != last {
		t.Errorf("newest is %d, %v, want %d", newest, err, last)
	}
	if _, err := migrations.Files("mysql"); err == nil {
		t.Error("there are migrations for an engine that is none")
	}
}

// TestReleasedMigrationsAreUnchanged compares each file with the SHA-256 it was
// released with, in testdata/released. A file released is never changed: a new one
// follows it. Its line is added when it is first released.
func TestReleasedMigrationsAreUnchanged(t *testing.T) {
	text, err := os.ReadFile("testdata/released")
	if err != nil {
		t.Fatal(err)
	}
	released := make(map[string]string)
	for line := range strings.Lines(string(text)) {
		if sum, name, ok := strings.Cut(strings.TrimSpace(line), "  "); ok {
			released[name] = sum
		}
	}
	for _, engine := range []string{migrations.SQLite, migrations.Postgres} {
		folder, err := migrations.Files(engine)
		if err != nil {
			t.Fatal(err)
		}
		for _, m := range list(t, engine) {
			b, err := fs.ReadFile(folder, m.Name)
			if err != nil {
				t.Fatal(err)
			}
			name := engine + "/" + m.Name
			sum := fmt.Sprintf("%x", sha256.Sum256(b))
			if want, ok := released[name]; !ok {
				t.Errorf("%s is not in testdata/released; its line is\n%s  %s", name, sum, name)
			} else if sum != want {
				t.Errorf("%s has changed: found %s, released with %s", name, sum, want)
			}
			delete(released, name)
		}
	}
	for name := range released {
		t.Errorf("%s was released and is gone", name)
	}
}

// schema lists tables and columns, in order, with whether a column may be NULL,
// and the columns of every key and index.
func schema(t *testing.T, e storetest.Engine) []string {
	t.Helper()
	database := storetest.Database(t, e)
	storetest.Open(t, e, store.Options{Database: database})
	driver, name := "pgx", database
	query := `SELECT table_name, ordinal_position, column_name, is_nullable = 'NO' FROM information_schema.columns
		WHERE table_schema = 'public' AND table_name <> 'goose_db_version' ORDER BY 1, 2`
	if e == storetest.SQLite {
		driver, name = "sqlite", "file:"+database
		query = `SELECT m.name, c.cid + 1, c.name, c."notnull" FROM sqlite_master m JOIN pragma_table_info(m.name) c
			WHERE m.type = 'table' AND m.name NOT LIKE 'sqlite_%' AND m.name <> 'goose_db_version' ORDER BY 1, 2`
	}
	db, err := sql.Open(driver, name)
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	rows, err := db.Query(query)
	if err != nil {
		t.Fatal(err)
	}
	defer rows.Close()
	var all []string
	for rows.Next() {
		var table, column string
		var place int
		var required bool
		if err := rows.Scan(&table, &place, &column, &required); err != nil {
			t.Fatal(err)
		}
		all = append(all, fmt.Sprintf("%s %d %s required %v", table, place, column, required))
	}
	if err := rows.Err(); err != nil {
		t.Fatal(err)
	}
	return all
}

func TestBothEnginesEndWithTheSameTablesAndColumns(t *testing.T) {
	var first []string
	for _, e := range storetest.Engines(t) {
		s := schema(t, e)
		if first == nil {
			first = s
			tables := make(map[string]bool)
			for _, line := range s {
				table, _, _ := strings.Cut(line, " ")
				tables[table] = true
			}
			if len(tables) != 25 { // 21 of the registry, and the lease for migrating
				t.Errorf("%d tables, want 25", len(tables))
			}
			continue
		}
		if diff := cmp.Diff(first, s); diff != "" {
			t.Errorf("%s ends with other tables (-sqlite +%s):\n%s", e, e, diff)
		}
	}
}

// keys returns the keys and indexes a folder declares, by their columns.
func keys(t *testing.T, engine string) []string {
	t.Helper()
	folder, err := migrations.Files(engine)
	if err != nil {
		t.Fatal(err)
	}
	var all []string
	for _, m := range list(t, engine) {
		b, err := fs.ReadFile(folder, m.Name)
		if err != nil {
			t.Fatal(err)
		}
		for _, k := range regexp.MustCompile(`(?m)^(CREATE TABLE \w+|\s+PRIMARY KEY \(.*\)|CREATE (?:UNIQUE )?INDEX .*);?`).FindAllString(string(b), -1) {
			all = append(all, strings.TrimRight(strings.TrimSpace(k), ";"))
		}
	}
	return all
}

func TestBothEnginesDeclareTheSameKeysAndIndexes(t *testing.T) {
	lite, pg := keys(t, migrations.SQLite), keys(t, migrations.Postgres)
	if diff := cmp.Diff(lite, pg); diff != "" {
		t.Errorf("keys and indexes differ (-sqlite +postgres):\n%s", diff)
	}
	if len(lite) < 40 {
		t.Errorf("found %d keys and indexes, want those of 21 tables", len(lite))
	}
}

func TestEveryTableOfHistoryRefusesChangesOnBothEngines(t *testing.T) {
	history := []string{"versions", "readings", "uploads", "content", "entries", "tree_hashes", "checkpoints"}
	for _, engine := range []string{migrations.SQLite, migrations.Postgres} {
		folder, err := migrations.Files(engine)
		if err != nil {
			t.Fatal(err)
		}
		text, err := fs.ReadFile(folder, "0001_history.sql")
		if err != nil {
			t.Fatal(err)
		}
		var found []string
		for _, m := range regexp.MustCompile(`CREATE TRIGGER \w+ BEFORE (?:UPDATE|UPDATE OR DELETE) ON (\w+)`).FindAllStringSubmatch(string(text), -1) {
			found = append(found, m[1])
		}
		slices.Sort(found)
		want := slices.Sorted(slices.Values(history))
		if diff := cmp.Diff(want, found); diff != "" {
			t.Errorf("%s: tables with a trigger differ (-want +got):\n%s", engine, diff)
		}
	}
}
