package store_test

import (
	"bytes"
	"context"
	"database/sql"
	"encoding/hex"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	_ "github.com/jackc/pgx/v5/stdlib" // the driver "pgx"
	_ "modernc.org/sqlite"             // the driver "sqlite"

	"deltamoor/store"
	"deltamoor/store/storetest"
)

// tamperings is how many are tried on each engine, those included that edit every
// column, delete from, insert into and reorder every table once: the number of
// quality.md, and with -short a part of it.
func tamperings() int {
	if testing.Short() {
		return 250
	}
	return 1000
}

// tableKeys are the tables verification answers for, with their keys.
var tableKeys = map[string][]string{
	"versions":      {"laboratory", "kind", "code", "version"},
	"readings":      {"laboratory", "session", "number"},
	"uploads":       {"laboratory", "sha256"},
	"content":       {"laboratory", "sha256", "part"},
	"entries":       {"laboratory", "position"},
	"tree_hashes":   {"laboratory", "node"},
	"checkpoints":   {"laboratory", "size", "signer"},
	"edges":         {"laboratory", "from_kind", "from_code", "from_version", "part", "to_laboratory", "to_kind", "to_code", "to_version"},
	"results":       {"laboratory", "calibration", "version", "line"},
	"sensitivities": {"laboratory", "calibration", "version"},
	"lines":         {"laboratory", "calibration", "version"},
	"reported":      {"code"},
	"names":         {"laboratory", "kind", "name", "code", "version"},
	"shares":        {"laboratory", "calibration", "version", "kind", "code", "number"},
	"uses":          {"laboratory", "session", "unit"},
	"currents":      {"laboratory", "kind", "code"},
	"ledger_heads":  {"laboratory"},
}

// A vandal is the owner of the database, who can do anything to it.
type vandal struct {
	db      *sql.DB
	columns map[string][]string
}

func newVandal(t *testing.T, e storetest.Engine, database string) *vandal {
	t.Helper()
	driver, name := "pgx", database
	if e == storetest.SQLite {
		driver, name = "sqlite", "file:"+database+"?_pragma=busy_timeout(5000)"
	}
	db, err := sql.Open(driver, name)
	if err != nil {
		t.Fatal(err)
	}
	db.SetMaxOpenConns(1)
	t.Cleanup(func() { db.Close() })
	v := &vandal{db: db, columns: make(map[string][]string)}
	for table := range tableKeys {
		rows, err := db.Query("SELECT * FROM " + table + " WHERE 1 = 0")
		if err != nil {
			t.Fatal(err)
		}
		if v.columns[table], err = rows.Columns(); err != nil {
			t.Fatal(err)
		}
		rows.Close()
	}
	return v
}

// dropTriggers takes away what makes an honest mistake impossible.
func (v *vandal) dropTriggers(t *testing.T, e storetest.Engine) {
	t.Helper()
	list := "SELECT name, '' FROM sqlite_master WHERE type = 'trigger'"
	if e == storetest.Postgres {
		list = "SELECT DISTINCT trigger_name, event_object_table FROM information_schema.triggers"
	}
	rows, err := v.db.Query(list)
	if err != nil {
		t.Fatal(err)
	}
	var drop []string
	for rows.Next() {
		var name, table string
		if err := rows.Scan(&name, &table); err != nil {
			t.Fatal(err)
		}
		if table != "" {
			name += " ON " + table
		}
		drop = append(drop, "DROP TRIGGER "+name)
	}
	if err := rows.Err(); err != nil {
		t.Fatal(err)
	}
	if len(drop) < 7 {
		t.Fatalf("found %d triggers, want one for each table of history at least", len(drop))
	}
	for _, d := range drop {
		if _, err := v.db.Exec(d); err != nil {
			t.Fatal(err)
		}
	}
}

// rows returns all rows of the laboratory in a table.
func (v *vandal) rows(t *testing.T, table string) [][]any {
	t.Helper()
	rows, err := v.db.Query("SELECT * FROM "+table+" WHERE laboratory = $1 ORDER BY "+strings.Join(tableKeys[table], ", "), lab)
	if err != nil {
		t.Fatal(err)
	}
	defer rows.Close()
	var all [][]any
	for rows.Next() {
		row, into := make([]any, len(v.columns[table])), make([]any, len(v.columns[table]))
		for i := range row {
			into[i] = &row[i]
		}
		if err := rows.Scan(into...); err != nil {
			t.Fatal(err)
		}
		for i := range row {
			if b, ok := row[i].([]byte); ok {
				row[i] = bytes.Clone(b)
			}
		}
		all = append(all, row)
	}
	if err := rows.Err(); err != nil {
		t.Fatal(err)
	}
	return all
}

func (v *vandal) where(table string, row []any) (string, []any) {
	var terms []string
	var args []any
	for _, k := range tableKeys[table] {
		args = append(args, row[slices.Index(v.columns[table], k)])
		terms = append(terms, fmt.Sprintf("%s = $%d", k, len(args)))
	}
	return strings.Join(terms, " AND "), args
}

func (v *vandal) remove(tx *sql.Tx, table string, row []any) error {
	where, args := v.where(table, row)
	result, err := tx.Exec("DELETE FROM "+table+" WHERE "+where, args...)
	if err != nil {
		return err
	}
	if n, err := result.RowsAffected(); err != nil || n != 1 {
		return fmt.Errorf("deleted %d rows of %s: %v", n, table, err)
	}
	return nil
}

func (v *vandal) insert(tx *sql.Tx, table string, row []any) error {
	marks := make([]string, len(row))
	for i := range marks {
		marks[i] = fmt.Sprintf("$%d", i+1)
	}
	_, err := tx.Exec("INSERT INTO "+table+" ("+strings.Join(v.columns[table], ", ")+") VALUES ("+strings.Join(marks, ", ")+")", row...)
	return err
}

// replace swaps rows for others in one transaction.
func (v *vandal) replace(table string, old, new [][]any) error {
	tx, err := v.db.Begin()
	if err != nil {
		return err
	}
	defer tx.Rollback()
	for _, row := range old {
		if err := v.remove(tx, table, row); err != nil {
			return err
		}
	}
	for _, row := range new {
		if err := v.insert(tx, table, row); err != nil {
			return err
		}
	}
	return tx.Commit()
}

// other returns another value of the same type.
func other(r *rand.Rand, value any) any {
	switch x := value.(type) {
	case int64:
		return x + []int64{-1, 1, 2, 1000}[r.IntN(4)]
	case float64:
		if r.IntN(2) == 0 {
			return math.Nextafter(x, math.Inf(1))
		}
		return x + 0.01
	case string:
		if x == "" {
			return "x"
		}
		i := r.IntN(len(x))
		b := []byte(x)
		switch {
		case b[i] >= 0x80, r.IntN(3) == 0:
			return x + "x"
		case b[i] == 'x':
			b[i] = 'y'
		default:
			b[i] = 'x'
		}
		return string(b)
	case []byte:
		b := bytes.Clone(x)
		b[r.IntN(len(b))] ^= 1 << r.IntN(8)
		return b
	case nil:
		return []any{int64(7), float64(7), "x"}[r.IntN(3)]
	}
	panic(fmt.Sprintf("value of type %T", value))
}

func (v *vandal) key(table string, row []any) string {
	_, args := v.where(table, row)
	return fmt.Sprint(args...)
}

// A tampering is one change by hand: these rows instead of those.
type tampering struct {
	what     string
	table    string
	old, new [][]any
}

// names reports whether a finding names the place of the tampering.
func (v *vandal) names(f store.Finding, x tampering) bool {
	if f.Table != x.table {
		return false
	}
	column := func(row []any, name string) string {
		value := row[slices.Index(v.columns[x.table], name)]
		if b, ok := value.([]byte); ok {
			return hex.EncodeToString(b)
		}
		return fmt.Sprint(value)
	}
	for _, row := range append(slices.Clone(x.old), x.new...) {
		var key string
		switch x.table {
		case "versions":
			key = fmt.Sprintf("%s %s/%s.%s", column(row, "kind"), column(row, "laboratory"), column(row, "code"), column(row, "version"))
		case "entries":
			key = column(row, "laboratory") + " position " + column(row, "position")
		case "tree_hashes":
			key = column(row, "laboratory") + " node " + column(row, "node")
		case "content":
			if strings.HasPrefix(f.Key, column(row, "laboratory")+" "+column(row, "sha256")) {
				return true
			}
		case "checkpoints":
			key = fmt.Sprintf("%s size %s %s", column(row, "laboratory"), column(row, "size"), column(row, "signer"))
		case "readings":
			if f.Key == column(row, "laboratory")+"/"+column(row, "session") {
				return true // of a session that does not exist
			}
			rest, ok := strings.CutPrefix(f.Key, column(row, "laboratory")+"/"+column(row, "session")+" numbers ")
			var from, to, number int
			fmt.Sscanf(rest, "%d to %d", &from, &to)
			fmt.Sscan(column(row, "number"), &number)
			if ok && from <= number && number <= to {
				return true
			}
		case "edges":
			var parts []string
			for _, c := range []string{"laboratory", "from_kind", "from_code", "from_version", "to_laboratory", "to_kind", "to_code", "to_version", "part"} {
				parts = append(parts, column(row, c))
			}
			key = strings.Join(parts, " ")
		default:
			var parts []string
			for _, c := range tableKeys[x.table] {
				parts = append(parts, column(row, c))
			}
			key = strings.Join(parts, " ")
		}
		if key != "" && f.Key == key {
			return true
		}
	}
	return false
}

// try tampers, verifies, and puts everything back. It reports false where the
// database itself refused the change.
func (v *vandal) try(t *testing.T, s *store.Store, outside [][]byte, x tampering) bool {
	t.Helper()
	if err := v.replace(x.table, x.old, x.new); err != nil {
		return false
	}
	f, err := s.Verify(context.Background(), lab, store.VerifyOptions{Outside: outside})
	if err != nil {
		t.Errorf("%s: verify: %v", x.what, err)
	} else if !slices.ContainsFunc(f.List, func(f store.Finding) bool { return v.names(f, x) }) {
		var found []string
		for _, f := range f.List {
			found = append(found, f.Error())
		}
		t.Errorf("%s is not named; found:\n%s", x.what, strings.Join(found, "\n"))
	}
	if err := v.replace(x.table, x.new, x.old); err != nil {
		t.Fatalf("%s: put back: %v", x.what, err)
	}
	return true
}

func (v *vandal) edit(r *rand.Rand, table string, rows [][]any, column int) tampering {
	row := rows[r.IntN(len(rows))]
	changed := slices.Clone(row)
	changed[column] = other(r, row[column])
	return tampering{fmt.Sprintf("%s of %s %s changed from %.60q to %.60q", v.columns[table][column], table, v.key(table, row), fmt.Sprint(row[column]), fmt.Sprint(changed[column])), table, [][]any{row}, [][]any{changed}}
}

func (v *vandal) deletion(r *rand.Rand, table string, rows [][]any) tampering {
	row := rows[r.IntN(len(rows))]
	return tampering{fmt.Sprintf("deletion of %s %s", table, v.key(table, row)), table, [][]any{row}, nil}
}

func (v *vandal) insertion(r *rand.Rand, table string, rows [][]any) tampering {
	row := slices.Clone(rows[r.IntN(len(rows))])
	keys := tableKeys[table]
	change := func(column string) {
		i := slices.Index(v.columns[table], column)
		row[i] = other(r, row[i])
	}
	if table == "reported" {
		change("code")
		change("line")
	} else {
		change(keys[1+r.IntN(len(keys)-1)])
	}
	if table == "versions" {
		row[slices.Index(v.columns[table], "position")] = int64(1_000_000 + r.IntN(1000))
	}
	return tampering{fmt.Sprintf("insertion of %s %s", table, v.key(table, row)), table, nil, [][]any{row}}
}

// exchange gives two rows each other's content.
func (v *vandal) exchange(r *rand.Rand, table string, rows [][]any) (tampering, bool) {
	if len(rows) < 2 {
		return tampering{}, false
	}
	i, j := r.IntN(len(rows)), r.IntN(len(rows))
	a, b := slices.Clone(rows[i]), slices.Clone(rows[j])
	for k, column := range v.columns[table] {
		if !slices.Contains(tableKeys[table], column) {
			a[k], b[k] = b[k], a[k]
		}
	}
	if fmt.Sprint(a, b) == fmt.Sprint(rows[i], rows[j]) {
		return tampering{}, false
	}
	return tampering{fmt.Sprintf("exchange of %s %s and %s", table, v.key(table, rows[i]), v.key(table, rows[j])), table, [][]any{rows[i], rows[j]}, [][]any{a, b}}, true
}

func TestVerifyNamesThePlaceOfEveryTampering(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			t.Parallel()
			seed := rand.Uint64()
			t.Logf("seed %d", seed)
			r := rand.New(rand.NewPCG(seed, 0))
			database := storetest.Database(t, e)
			s := storetest.Open(t, e, store.Options{Database: database})
			var outside [][]byte
			for n := range 2 {
				outside = append(outside, fill(t, s, lab, n+1).checkpoints...)
			}
			fill(t, s, "OTHER", 1)
			// A body kept in content parts, a second version and a withdrawal.
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
				d := material("GLY1", "glycin again")
				m := d.Value.(store.Material)
				m.Note = strings.Repeat("a long note ", 50_000)
				d.Value = m
				_, err := tx.Append(ctx, d)
				return err
			})
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
				raw, err := tx.Version(ctx, store.Key{Laboratory: lab, Kind: store.KindValue, Code: "GLY1/d13C-VPDB/total"}, 1)
				if err != nil {
					return err
				}
				_, err = tx.Append(ctx, decision(raw.Ref, store.ActWithdrawn))
				return err
			})
			wantClean(t, s, lab, store.VerifyOptions{Outside: outside})

			v := newVandal(t, e, database)
			v.dropTriggers(t, e)
			tables := make([]string, 0, len(tableKeys))
			for table := range tableKeys {
				tables = append(tables, table)
			}
			slices.Sort(tables)
			tried := make(map[string]int)
			count := func(x tampering) bool {
				if v.try(t, s, outside, x) {
					tried[x.table]++
					return true
				}
				return false
			}
			rows := make(map[string][][]any)
			for _, table := range tables {
				rows[table] = v.rows(t, table)
				if len(rows[table]) == 0 {
					t.Fatalf("%s is empty: nothing to tamper with", table)
				}
				for column := range v.columns[table] {
					for range 5 { // a value the database accepts
						if count(v.edit(r, table, rows[table], column)) {
							break
						}
					}
				}
				count(v.deletion(r, table, rows[table]))
				if table != "ledger_heads" { // another row would be another laboratory
					for range 20 {
						if count(v.insertion(r, table, rows[table])) {
							break
						}
					}
				}
				for range 20 {
					if x, ok := v.exchange(r, table, rows[table]); ok && count(x) {
						break
					}
				}
			}
			total := 0
			for _, n := range tried {
				total += n
			}
			wanted := tamperings()
			for try := 0; total < wanted && try < 10*wanted; try++ {
				table := tables[r.IntN(len(tables))]
				var x tampering
				ok := true
				switch r.IntN(4) {
				case 0:
					x = v.deletion(r, table, rows[table])
				case 1:
					if ok = table != "ledger_heads"; ok {
						x = v.insertion(r, table, rows[table])
					}
				case 2:
					x, ok = v.exchange(r, table, rows[table])
				default:
					x = v.edit(r, table, rows[table], r.IntN(len(v.columns[table])))
				}
				if ok && count(x) {
					total++
				}
			}
			t.Logf("%d tamperings: %v", total, tried)
			if total < wanted {
				t.Errorf("tried %d tamperings, want %d", total, wanted)
			}
			wantClean(t, s, lab, store.VerifyOptions{Outside: outside})
		})
	}
}
