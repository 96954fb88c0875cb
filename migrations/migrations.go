// Package migrations holds the tables of the registry: one folder of numbered
// SQL files for each engine, with the same names in both. Each file is applied
// once, in order, in a transaction; a released file never changes again.
//
// The two texts of one number differ where the engines do: types (text
// compared by bytes, bigint, bytea against TEXT, INTEGER, BLOB), STRICT and
// WITHOUT ROWID on SQLite, and how a trigger refuses. Tables, columns and keys
// are the same. There are no scripts that go back: an append-only registry
// goes forward, and back only by restoring a backup.
package migrations

import (
	"embed"
	"fmt"
	"io/fs"
	"strconv"
	"strings"
)

//go:embed sqlite/*.sql postgres/*.sql
var files embed.FS

// The engines, by the name of their folder.
const (
	SQLite   = "sqlite"
	Postgres = "postgres"
)

// Files returns the folder of an engine.
func Files(engine string) (fs.FS, error) {
	if engine != SQLite && engine != Postgres {
		return nil, fmt.Errorf("migrations for %q: expected %s or %s", engine, SQLite, Postgres)
	}
	return fs.Sub(files, engine)
}

// A Migration is one file: its number, and its name without the folder.
type Migration struct {
	Number int64
	Name   string
}

// List returns the migrations of an engine in the order they are applied. A
// name that does not begin with a number is an error.
func List(engine string) ([]Migration, error) {
	folder, err := Files(engine)
	if err != nil {
		return nil, err
	}
	entries, err := fs.ReadDir(folder, ".") // sorted by name
	if err != nil {
		return nil, fmt.Errorf("list migrations for %s: %w", engine, err)
	}
	list := make([]Migration, 0, len(entries))
	for _, e := range entries {
		digits, _, _ := strings.Cut(e.Name(), "_")
		number, err := strconv.ParseInt(digits, 10, 64)
		if err != nil || number < 1 {
			return nil, fmt.Errorf("migration %s/%s: found number %q, expected a number from 1", engine, e.Name(), digits)
		}
		list = append(list, Migration{Number: number, Name: e.Name()})
	}
	return list, nil
}

// Newest returns the number of the last migration of an engine.
func Newest(engine string) (int64, error) {
	list, err := List(engine)
	if err != nil {
		return 0, err
	}
	if len(list) == 0 {
		return 0, fmt.Errorf("migrations for %s: found none", engine)
	}
	return list[len(list)-1].Number, nil
}
