package store_test

import (
	"context"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/store"
	"deltamoor/store/storetest"
)

// A database that is older than the table of lines gets them from history when
// it is opened, once; the next opening finds nothing left to do.
func TestLinesAreFilledFromHistory(t *testing.T) {
	for _, e := range storetest.Engines(t) {
		t.Run(string(e), func(t *testing.T) {
			database := storetest.Database(t, e)
			s := storetest.Open(t, e, store.Options{Database: database})
			fill(t, s, lab, 1)
			lines := func(s *store.Store) (rows []store.LineRow) {
				t.Helper()
				err := s.Read(t.Context(), func(ctx context.Context, v *store.View) (err error) {
					rows, _, err = v.Lines(ctx, store.LineQuery{Laboratory: lab, Instrument: "EA-1"})
					return err
				})
				if err != nil {
					t.Fatal(err)
				}
				return rows
			}
			before := lines(s)
			if len(before) == 0 || before[0].Slope != 1.01 || before[0].UIntercept != 0.05 || before[0].Drift != nil {
				t.Fatalf("lines %+v", before)
			}
			v := newVandal(t, e, database)
			for _, statement := range []string{"DELETE FROM lines", "INSERT INTO rebuilds (laboratory, name, position) VALUES ('" + lab + "', 'lines', 0)"} {
				if _, err := v.db.Exec(statement); err != nil {
					t.Fatal(err)
				}
			}
			if n := len(lines(s)); n != 0 {
				t.Fatalf("%d lines after they were deleted", n)
			}
			if _, err := s.Migrate(t.Context()); err != nil {
				t.Fatal(err)
			}
			if diff := cmp.Diff(before, lines(s)); diff != "" {
				t.Errorf("filled lines differ (-before +after):\n%s", diff)
			}
			wantClean(t, s, lab, store.VerifyOptions{})
		})
	}
}
