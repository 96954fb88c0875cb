package main

import (
	"crypto/rand"
	"database/sql"
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	_ "modernc.org/sqlite" // the driver "sqlite"

	"deltamoor/api/demo"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A tampered is a registry of the invented laboratory to be edited by hand.
type tampered struct {
	file    string // of the untouched database
	shown   string // a reported delta
	lab     string
	outside string // file with a signed checkpoint
}

// buildTampered builds the laboratory once; what is edited are copies.
func buildTampered(t *testing.T) tampered {
	t.Helper()
	dir := t.TempDir()
	out := tampered{file: filepath.Join(dir, "deltamoor.db"), outside: filepath.Join(dir, "kept.txt")}
	place, err := demo.Open(t.Context(), store.Options{Database: out.file}, demoSeed)
	if err != nil {
		t.Fatal(err)
	}
	s, err := demo.Build(t.Context(), place.Registry, place.Clock, demoSeed)
	if err != nil {
		t.Fatal(err)
	}
	key, err := ledger.NewKey(rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	checkpoint, err := place.Registry.SignCheckpoint(t.Context(), s.Laboratory, key)
	if err != nil {
		t.Fatal(err)
	}
	if err := os.WriteFile(out.outside, checkpoint.Note, 0o600); err != nil {
		t.Fatal(err)
	}
	if err := place.Close(); err != nil {
		t.Fatal(err)
	}
	out.shown, out.lab = store.FormatCode(s.Shown), s.Laboratory
	return out
}

// edit copies the database and runs statements on it as its owner would: the
// triggers are no obstacle to one.
func (x tampered) edit(t *testing.T, statements ...string) (folder string) {
	t.Helper()
	folder = t.TempDir()
	data, err := os.ReadFile(x.file)
	if err != nil {
		t.Fatal(err)
	}
	file := filepath.Join(folder, "deltamoor.db")
	if err := os.WriteFile(file, data, 0o600); err != nil {
		t.Fatal(err)
	}
	db, err := sql.Open("sqlite", "file:"+file)
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	rows, err := db.Query("SELECT name FROM sqlite_master WHERE type = 'trigger'")
	if err != nil {
		t.Fatal(err)
	}
	var triggers []string
	for rows.Next() {
		var name string
		if err := rows.Scan(&name); err != nil {
			t.Fatal(err)
		}
		triggers = append(triggers, name)
	}
	if err := rows.Err(); err != nil {
		t.Fatal(err)
	}
	for _, name := range triggers {
		if _, err := db.Exec("DROP TRIGGER " + name); err != nil {
			t.Fatal(err)
		}
	}
	for _, s := range statements {
		result, err := db.Exec(strings.ReplaceAll(s, "$LAB", x.lab))
		if err != nil {
			t.Fatalf("%s: %v", s, err)
		}
		if n, err := result.RowsAffected(); err != nil || n == 0 {
			t.Fatalf("%s: %d rows, %v", s, n, err)
		}
	}
	return folder
}

func verifyJSON(t *testing.T, args ...string) (int, verifyAnswer) {
	t.Helper()
	status, stdout, stderr := call(t.Context(), nil, "", append([]string{"verify", "--json"}, args...)...)
	var answer verifyAnswer
	if err := json.Unmarshal([]byte(stdout), &answer); err != nil {
		t.Fatalf("verify %v: status %d, %v: %s%s", args, status, err, stdout, stderr)
	}
	return status, answer
}

// history is one edit of one row in each table of history, and what names it.
var history = []struct {
	table, statement string
	// key is part of the name of the row in the finding.
	key string
}{
	{"versions", `UPDATE versions SET body = replace(body, '"accepted"', '"rejected"') WHERE (laboratory, kind, code, version) =
		(SELECT laboratory, kind, code, version FROM versions WHERE kind = 'outcome' AND body LIKE '%"accepted"%' ORDER BY code LIMIT 1)`, "outcome $LAB/"},
	{"readings", `UPDATE readings SET raw = raw + 0.001 WHERE number = 7 AND session = (SELECT min(session) FROM readings)`, "$LAB/"},
	{"uploads", `UPDATE uploads SET name = 'other.csv' WHERE sha256 = (SELECT min(sha256) FROM uploads)`, "$LAB "},
	{"content", `UPDATE content SET data = zeroblob(40) WHERE sha256 = (SELECT min(sha256) FROM uploads) AND part = 0`, ""},
	{"entries", `UPDATE entries SET entry = replace(entry, '"version":1', '"version":2') WHERE laboratory = '$LAB' AND position = 12`, "$LAB position 12"},
	{"tree_hashes", `UPDATE tree_hashes SET hash = zeroblob(32) WHERE laboratory = '$LAB' AND node = 5`, "$LAB node 5"},
	{"checkpoints", `UPDATE checkpoints SET note = replace(note, '— ', '—  ') WHERE laboratory = '$LAB'`, "$LAB size "},
}

func TestVerifyNamesTheRowThatWasEditedByHand(t *testing.T) {
	x := buildTampered(t)
	status, answer := verifyJSON(t, "--data", x.edit(t), "--checkpoint", x.outside)
	if status != statusDone || !answer.Clean || answer.Recomputed == 0 || answer.Equal != answer.Recomputed {
		t.Fatalf("untouched: status %d, %+v", status, answer)
	}
	if n := *answer.Ledgers[0].Checkpoints; n == 0 {
		t.Errorf("untouched: %d checkpoints lead to the root, want the signed one", n)
	}
	for _, h := range history {
		for _, act := range []string{"edit", "delete"} {
			t.Run(h.table+" "+act, func(t *testing.T) {
				statement := h.statement
				if act == "delete" {
					_, where, _ := strings.Cut(statement, " WHERE ")
					statement = "DELETE FROM " + h.table + " WHERE " + where
				}
				args := []string{"--data", x.edit(t, statement)}
				if h.table == "checkpoints" && act == "delete" { // nothing stored can tell
					args = append(args, "--checkpoint", x.outside)
				}
				status, answer := verifyJSON(t, args...)
				named := ""
				for _, f := range answer.Findings {
					if f.Table == h.table && strings.Contains(f.Key, strings.ReplaceAll(h.key, "$LAB", x.lab)) && f.Found != "" && f.Expected != "" && f.Found != f.Expected {
						named = f.Key
					}
				}
				if status != statusRefused || answer.Clean || named == "" {
					t.Errorf("status %d, no finding of a row of %s with %q: %+v", status, h.table, h.key, answer.Findings)
				}
			})
		}
	}
}

func TestCutOffTailShowsAgainstACheckpointKeptOutside(t *testing.T) {
	x := buildTampered(t)
	// The newest act goes, with everything that was derived from it.
	folder := x.edit(t,
		`UPDATE ledger_heads SET size = size - 1, recorded_at = (SELECT max(recorded_at) FROM versions WHERE laboratory = '$LAB' AND position < ledger_heads.size - 1) WHERE laboratory = '$LAB'`,
		`DELETE FROM currents WHERE (laboratory, kind, code) = (SELECT laboratory, kind, code FROM versions WHERE laboratory = '$LAB' ORDER BY position DESC LIMIT 1)`,
		`DELETE FROM tree_hashes WHERE laboratory = '$LAB' AND node >= (SELECT count(*) FROM tree_hashes WHERE laboratory = '$LAB') - 1`,
		`DELETE FROM entries WHERE laboratory = '$LAB' AND position = (SELECT max(position) FROM entries WHERE laboratory = '$LAB')`,
		`DELETE FROM versions WHERE laboratory = '$LAB' AND position = (SELECT max(position) FROM versions WHERE laboratory = '$LAB')`,
		`DELETE FROM checkpoints WHERE laboratory = '$LAB'`)
	status, answer := verifyJSON(t, "--data", folder, "--laboratory", x.lab, "--checkpoint", x.outside)
	if status != statusRefused {
		t.Fatalf("status %d, %+v", status, answer)
	}
	told := false
	for _, f := range answer.Findings {
		told = told || f.Table == "checkpoints"
	}
	if !told {
		t.Errorf("no finding tells of the checkpoint: %+v", answer.Findings)
	}
}

// TestVerifyOfOneCodeNamesWhatDiffersInItsChain edits rows that one reported
// delta rests on; and one it does not rest on, which is none of its business.
func TestVerifyOfOneCodeNamesWhatDiffersInItsChain(t *testing.T) {
	x := buildTampered(t)
	status, answer := verifyJSON(t, "--data", x.edit(t), x.shown)
	if status != statusDone || !answer.Clean || answer.Recomputed < 3 || answer.Equal != answer.Recomputed {
		t.Fatalf("untouched: status %d, %+v", status, answer)
	}
	in := map[string]nodeAnswer{} // by kind
	for _, n := range answer.Versions {
		if !n.Proved {
			t.Errorf("untouched: %s %s is not proved", n.Kind, n.Code)
		}
		if _, ok := in[n.Kind]; !ok && n.Laboratory == x.lab {
			in[n.Kind] = n
		}
	}
	stored := func(kind string) string { return strings.ReplaceAll(in[kind].Code, "-", "") }
	position := func(kind string) string { return jsonText(t, in[kind].Position) }
	for _, c := range []struct {
		name, statement, table, key string
	}{
		{"a reading", `UPDATE readings SET raw = raw + 0.001 WHERE number = 7 AND session = '` + stored("session") + `'`, "readings", stored("session") + " numbers 1 to "},
		{"a missing reading", `DELETE FROM readings WHERE number = 7 AND session = '` + stored("session") + `'`, "readings", stored("session")},
		{"the upload", `UPDATE content SET data = zeroblob(40) WHERE lower(hex(sha256)) = (SELECT json_extract(body, '$.value.upload') FROM versions WHERE kind = 'session' AND code = '` + stored("session") + `')`,
			"content", stored("session")},
		{"a body", `UPDATE versions SET body = replace(body, '"value":-', '"value":-1') WHERE kind = 'final' AND code = '` + stored("final") + `'`, "versions", stored("final")},
		{"the time of a version", `UPDATE versions SET recorded_at = recorded_at + 1 WHERE kind = 'calibration' AND code = '` + stored("calibration") + `'`, "entries", "$LAB position " + position("calibration")},
		{"a missing version", `DELETE FROM versions WHERE kind = 'method' AND code = '` + in["method"].Code + `'`, "versions", in["method"].Code},
		{"an entry", `UPDATE entries SET entry = replace(entry, '"by":"', '"by":"x') WHERE laboratory = '$LAB' AND position = ` + position("session"), "entries", "$LAB position " + position("session")},
		{"a node beside the entry", `UPDATE tree_hashes SET hash = zeroblob(32) WHERE laboratory = '$LAB' AND node = ` + jsonText(t, ledger.LeafIndex(in["session"].Position^1)), "tree_hashes", "$LAB position " + position("session")},
		// The last node is part of the root itself: only the signed checkpoint can tell.
		{"the last node of the tree", `UPDATE tree_hashes SET hash = zeroblob(32) WHERE laboratory = '$LAB' AND node = (SELECT max(node) FROM tree_hashes WHERE laboratory = '$LAB')`, "checkpoints", "$LAB size "},
		{"the derived row of the code", `UPDATE reported SET value = value + 0.1 WHERE code = '` + strings.ReplaceAll(x.shown, "-", "") + `'`, "reported", strings.ReplaceAll(x.shown, "-", "")},
	} {
		t.Run(c.name, func(t *testing.T) {
			folder := x.edit(t, c.statement)
			status, stdout, stderr := call(t.Context(), nil, "", "verify", "--data", folder, x.shown)
			if status != statusRefused || stderr != "" {
				t.Errorf("status %d\n%s%s", status, stdout, stderr)
			}
			if want := "  " + c.table + " "; !strings.Contains(stdout, want) {
				t.Errorf("no finding in %s:\n%s", c.table, stdout)
			}
			_, answer := verifyJSON(t, "--data", folder, x.shown)
			named := false
			for _, f := range answer.Findings {
				named = named || f.Table == c.table && strings.Contains(f.Key, strings.ReplaceAll(c.key, "$LAB", x.lab))
			}
			if !named {
				t.Errorf("no finding names %s %q: %+v", c.table, c.key, answer.Findings)
			}
		})
	}
	elsewhere := x.edit(t, `UPDATE readings SET raw = raw + 0.001 WHERE number = 7 AND session =
		(SELECT session FROM readings WHERE session NOT IN (SELECT to_code FROM edges WHERE to_kind = 'session' AND from_kind = 'calibration' AND from_code IN
			(SELECT from_code FROM edges WHERE from_kind = 'calibration' AND to_kind = 'session' AND to_code = '`+stored("session")+`')) AND session NOT IN ('`+
		strings.Join(sessionsIn(answer), "', '")+`') ORDER BY session LIMIT 1)`)
	if status, answer := verifyJSON(t, "--data", elsewhere, x.shown); status != statusDone {
		t.Errorf("a row that the chain does not rest on: status %d, %+v", status, answer.Findings)
	}
	if status, _ := verifyJSON(t, "--data", elsewhere); status != statusRefused {
		t.Errorf("… and verify of everything does not find it")
	}
}

func sessionsIn(a verifyAnswer) []string {
	var out []string
	for _, n := range a.Versions {
		if n.Kind == string(store.KindSession) {
			out = append(out, strings.ReplaceAll(n.Code, "-", ""))
		}
	}
	return out
}

func jsonText(t *testing.T, v any) string {
	t.Helper()
	text, err := json.Marshal(v)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// TestTamperingCoversEveryTableOfHistory keeps the list above complete.
func TestTamperingCoversEveryTableOfHistory(t *testing.T) {
	folder := filepath.Join(t.TempDir(), "lab")
	initRegistry(t, "--data", folder)
	db, err := sql.Open("sqlite", "file:"+filepath.Join(folder, "deltamoor.db"))
	if err != nil {
		t.Fatal(err)
	}
	defer db.Close()
	rows, err := db.Query("SELECT DISTINCT tbl_name FROM sqlite_master WHERE type = 'trigger'")
	if err != nil {
		t.Fatal(err)
	}
	defer rows.Close()
	covered := map[string]bool{}
	for _, h := range history {
		covered[h.table] = true
	}
	for rows.Next() {
		var table string
		if err := rows.Scan(&table); err != nil {
			t.Fatal(err)
		}
		if !covered[table] {
			t.Errorf("table %s is inserted only, and no test edits it", table)
		}
		delete(covered, table)
	}
	if err := rows.Err(); err != nil {
		t.Fatal(err)
	}
	if len(covered) > 0 {
		t.Errorf("%v are no tables of history", covered)
	}
}

// The list of laboratories must not rest on a derived row alone.
func TestVerifySeesALaboratoryWhoseHeadWasTakenAway(t *testing.T) {
	x := buildTampered(t)
	status, answer := verifyJSON(t, "--data", x.edit(t, `DELETE FROM ledger_heads WHERE laboratory = '$LAB'`))
	if status != statusRefused || answer.Clean {
		t.Fatalf("verify without the head of %s: status %d, clean %v", x.lab, status, answer.Clean)
	}
	for _, l := range answer.Ledgers {
		if l.Laboratory == x.lab {
			return
		}
	}
	t.Errorf("laboratory %s was passed over: %+v", x.lab, answer.Ledgers)
}
