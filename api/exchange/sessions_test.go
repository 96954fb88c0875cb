package exchange

import (
	"bytes"
	"encoding/json"
	"errors"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

type calibRole = calib.Role

var update = flag.Bool("update", false, "write testdata/sessions and the golden texts anew")

// session reads one file of testdata/sessions and its mapping from disk.
func session(t testing.TB, folder, name string) (store.Mapping, []byte) {
	t.Helper()
	path := filepath.Join(sessionFolder, folder, name)
	data, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	text, err := os.ReadFile(path + ".mapping.json")
	if err != nil {
		t.Fatal(err)
	}
	var m store.Mapping
	if err := json.Unmarshal(text, &m); err != nil {
		t.Fatal(err)
	}
	return m, data
}

// sessionNames lists the files of a folder that have a mapping.
func sessionNames(t testing.TB, folder string) []string {
	t.Helper()
	list, err := filepath.Glob(filepath.Join(sessionFolder, folder, "*.mapping.json"))
	if err != nil {
		t.Fatal(err)
	}
	for i, p := range list {
		list[i] = strings.TrimSuffix(filepath.Base(p), ".mapping.json")
	}
	return list
}

// golden compares a text with a file, or writes the file under -update.
func golden(t *testing.T, path, got string) {
	t.Helper()
	if *update {
		if err := os.WriteFile(path, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(string(want), got); diff != "" {
		t.Errorf("%s (-want +got):\n%s", path, diff)
	}
}

// baseReadings are the base session's readings, written out by hand from baseRows.
func baseReadings() []registry.RawReading {
	f := func(x float64) *float64 { return &x }
	var out []registry.RawReading
	// Helsinki is two hours ahead of UTC in March; seats are 12 minutes apart from 08:15 on.
	start := time.Date(2026, 3, 2, 6, 15, 0, 0, time.UTC)
	add := func(seat int, name, role, portion string, mass *float64, warning string, c float64, cu *float64, cs float64, n float64, nu *float64, ns float64) {
		at := store.InstantOf(start.Add(time.Duration(seat-1) * 12 * time.Minute))
		r := registry.RawReading{Name: name, Role: role, Preparation: portion, Position: &seat, Time: &at, Amount: mass, Warning: warning}
		r.Quantity, r.Raw, r.U, r.Size = "d13C", c, cu, f(cs)
		out = append(out, r)
		r.Quantity, r.Raw, r.U, r.Size = "d15N", n, nu, f(ns)
		out = append(out, r)
	}
	add(1, "rinse", "conditioning", "", nil, "first seat", -27.1, nil, 4.9, 2.31, nil, 1.7)
	add(2, "MOOR-1", "anchor", "MOOR-1 a", f(0.412), "", -33.104, f(0.05), 5.12, -4.52, f(0.08), 1.93)
	add(3, "MOOR-2", "anchor", "MOOR-2 a", f(0.398), "", -10.45, f(0.05), 5.03, 47.6, f(0.1), 1.88)
	add(4, "Rübe 3", "sample", "Rübe 3 a", f(0.55), `drawer "B", top`, -25.123456789012345, f(0.05), 6.2, 0, f(0.08), 2.4)
	add(5, "Rübe 3", "sample", "Rübe 3 b", f(0.541), "", -25.09, f(0.05), 6.11, 0.07, f(0.08), 2.36)
	add(6, "KELP", "control", "KELP a", f(0.471), "", -18.2, f(0.05), 5.4, 9.81, f(0.08), 2.05)
	add(7, "MOOR-1", "anchor", "MOOR-1 b", f(0.405), "", -33.07, f(0.05), 5.07, -4.47, f(0.08), 1.9)
	add(8, "MOOR-2", "anchor", "MOOR-2 b", f(0.391), "", -10.48, f(0.05), 4.98, 47.52, f(0.1), 1.85)
	return out
}

// describe writes a table for a golden file, one reading a line, with where its raw delta stands.
func describe(table registry.ReadingTable) string {
	var b strings.Builder
	fmt.Fprintf(&b, "encoding %q delimiter %q sheet %q rows %d ignored %q\n", table.Encoding, table.Delimiter, table.Sheet, table.Rows, table.Ignored)
	for i, r := range table.Readings {
		line, _ := json.Marshal(r)
		fmt.Fprintf(&b, "%s: %s\n", table.Place(i, "raw"), line)
	}
	return b.String()
}

func TestUpdateSessionFiles(t *testing.T) {
	good, broken := goodFiles(t), brokenFiles(t)
	if *update {
		writeSessionFiles(t, "good", good)
		writeSessionFiles(t, "broken", broken)
	}
	// What is on disk is what the tables of this test say, but for the workbook,
	// whose archive need not have the same bytes twice.
	for folder, files := range map[string]map[string]sessionFile{"good": good, "broken": broken} {
		if got := sessionNames(t, folder); len(got) != len(files) {
			t.Errorf("%s holds %d files, expected %d", folder, len(got), len(files))
		}
		for name, f := range files {
			m, data := session(t, folder, name)
			if diff := cmp.Diff(f.mapping, m); diff != "" {
				t.Errorf("%s/%s mapping (-want +got):\n%s", folder, name, diff)
			}
			if name != "workbook.xlsx" && !bytes.Equal(data, f.data) {
				t.Errorf("%s/%s is not what the test makes; run with -update", folder, name)
			}
		}
	}
}

func TestReadTableReadsWhatLaboratoriesExport(t *testing.T) {
	for _, name := range sessionNames(t, "good") {
		t.Run(name, func(t *testing.T) {
			m, data := session(t, "good", name)
			table, err := ReadTable(m, name, data)
			if err != nil {
				t.Fatal(err)
			}
			golden(t, filepath.Join(sessionFolder, "good", name+".readings.txt"), describe(table))
		})
	}
}

func TestReadTableStoresTheSameReadingsWhateverTheDialect(t *testing.T) {
	want := baseReadings()
	n := 0
	for name, f := range goodFiles(t) {
		if !f.sameAsBase {
			continue
		}
		n++
		t.Run(name, func(t *testing.T) {
			m, data := session(t, "good", name)
			table, err := ReadTable(m, name, data)
			if err != nil {
				t.Fatal(err)
			}
			if diff := cmp.Diff(want, table.Readings); diff != "" {
				t.Errorf("readings (-want +got):\n%s", diff)
			}
		})
	}
	if n < 10 {
		t.Errorf("%d dialects compared, expected at least 10", n)
	}
}

func TestReadTableRefusesBrokenFilesWithPlaceFoundAndExpected(t *testing.T) {
	for _, name := range sessionNames(t, "broken") {
		t.Run(name, func(t *testing.T) {
			m, data := session(t, "broken", name)
			table, err := ReadTable(m, name, data)
			var refusal *registry.Error
			if !errors.As(err, &refusal) {
				t.Fatalf("error %v (%T), expected a refusal", err, err)
			}
			if refusal.Meaning != registry.Invalid || len(refusal.Complaints) == 0 {
				t.Errorf("meaning %s with %d complaints, expected invalid with some", refusal.Meaning, len(refusal.Complaints))
			}
			for _, c := range refusal.Complaints {
				if c.Place == "" || c.Found == "" || c.Expected == "" {
					t.Errorf("complaint %+v lacks a part", c)
				}
			}
			if len(table.Readings) != 0 {
				t.Errorf("%d readings beside the refusal", len(table.Readings))
			}
			golden(t, filepath.Join(sessionFolder, "broken", name+".refusal.txt"), err.Error()+"\n")
		})
	}
}
