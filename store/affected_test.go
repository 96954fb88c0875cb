package store_test

import (
	"context"
	"crypto/sha256"
	"fmt"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/store"
)

// A value of common, a calibration on it, a value assigned from that, a
// calibration on the assigned value, its final value and a report; beside them a
// calibration on another value. A revision then drafts the first calibration and
// the final value again.
func TestWhatRestsOnAValueIsFoundAtAnyDepthOnBothEngines(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		from := day(t, "2020-01-01")
		var top, other, revision store.Ref
		write(t, s, store.Common, func(ctx context.Context, tx *store.Tx) (err error) {
			if top, err = tx.Append(ctx, value("ROOT/d13C-VPDB/total", "-10.0", from)); err != nil {
				return err
			}
			other, err = tx.Append(ctx, value("OTHER/d13C-VPDB/total", "5.0", from))
			return err
		})
		var first, assigned, second, aside, final, report store.Ref
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			if err := tx.AppendReadings(ctx, readings("S1", 4)); err != nil {
				return err
			}
			session, err := tx.Append(ctx, sessionDraft("S1", readings("S1", 4), nil))
			if err != nil {
				return err
			}
			if first, err = tx.Append(ctx, calibrationDraft("C1", session, top)); err != nil {
				return err
			}
			if assigned, err = tx.Append(ctx, value("GLY/d13C-VPDB/total", "-33.1", from, store.Input{Part: "member", Ref: first})); err != nil {
				return err
			}
			d := calibrationDraft("C2", session, assigned)
			d.Inputs = append(d.Inputs, store.Input{Part: "anchor", Ref: other}, store.Input{Part: "control", Ref: top})
			if second, err = tx.Append(ctx, d); err != nil {
				return err
			}
			if aside, err = tx.Append(ctx, calibrationDraft("C3", session, other)); err != nil {
				return err
			}
			final, err = tx.Append(ctx, finalDraft("V1", second))
			return err
		})
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			raw, err := tx.Version(ctx, final.Key, 1)
			if err != nil {
				return err
			}
			d := reportDraft(t, "R1", []string{"D1"}, decode[store.Final](t, raw))
			d.Inputs[0].Part = "line"
			report, err = tx.Append(ctx, d)
			if err != nil {
				return err
			}
			_, err = tx.Append(ctx, decision(second, store.ActApproved))
			return err
		})
		var frozen store.Instant
		read(t, s, func(ctx context.Context, v *store.View) error {
			head, err := v.Head(ctx, lab)
			frozen = head.At
			return err
		})
		// Upwards through any part: what is checked by a value rests on it too, and
		// each version's depth is that of its shortest way.
		read(t, s, func(ctx context.Context, v *store.View) error {
			var got []string
			last := int64(-1)
			for page := 0; page < 20; page++ {
				n := 0
				err := v.Above(ctx, store.AboveQuery{Laboratory: lab, Roots: []store.Ref{top}, After: last, Limit: 2}, func(a store.VersionAbove) error {
					got = append(got, fmt.Sprintf("%s %d", a.Code, a.Depth))
					last = a.Position
					n++
					return nil
				})
				if err != nil || n == 0 {
					if diff := cmp.Diff([]string{"C1 1", "GLY/d13C-VPDB/total 2", "C2 1", "V1 2", "R1 3"}, got); diff != "" {
						t.Errorf("what rests on the value of common (-want +got):\n%s", diff)
					}
					return err
				}
			}
			return nil
		})
		var drafts []store.Ref
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
			revision, err = tx.Append(ctx, store.Draft{Kind: store.KindRevision, Code: "X1", By: "mara", Reason: "r", Value: store.Revision{Phase: store.RevisionProposed}})
			if err != nil {
				return err
			}
			c, f := calibrationDraft("C1", first, top), finalDraft("V1", second)
			c.Inputs = append(c.Inputs[1:], store.Input{Part: "revision", Ref: revision})
			f.Inputs = append(f.Inputs, store.Input{Part: "revision", Ref: revision})
			for _, d := range []store.Draft{c, f} {
				ref, err := tx.Append(ctx, d)
				if err != nil {
					return err
				}
				drafts = append(drafts, ref)
			}
			return nil
		})

		read(t, s, func(ctx context.Context, v *store.View) error {
			q := store.AffectedQuery{Laboratory: lab, Roots: []store.Ref{top}, AsOf: &frozen, After: -1}
			var found []store.Ref
			states := map[store.Ref]store.State{}
			if err := v.Affected(ctx, q, func(a store.AffectedVersion) error {
				found, states[a.Ref] = append(found, a.Ref), a.State
				return nil
			}); err != nil {
				return err
			}
			if diff := cmp.Diff([]store.Ref{first, assigned, second, final, report}, found); diff != "" {
				t.Errorf("what rests on the root, in the order of the ledger (-want +got):\n%s", diff)
			}
			if states[second] != store.Approved || states[assigned] != store.Drafted || states[first] != store.Superseded {
				t.Errorf("states %v: want the second calibration approved, the value a draft, and the first not the newest", states)
			}
			q.Limit = 2
			var page []store.AffectedVersion
			if err := v.Affected(ctx, q, func(a store.AffectedVersion) error { page = append(page, a); return nil }); err != nil {
				return err
			}
			q.After = page[1].Position
			if err := v.Affected(ctx, q, func(a store.AffectedVersion) error { page = append(page, a); return nil }); err != nil {
				return err
			}
			if len(page) != 4 || page[2].Ref != second || page[3].Ref != final {
				t.Errorf("two pages of two: %v", page)
			}
			q = store.AffectedQuery{Laboratory: lab, Roots: []store.Ref{aside}, After: -1}
			if err := v.Affected(ctx, q, func(a store.AffectedVersion) error {
				if a.Ref != aside {
					t.Errorf("%s rests on %s", a.Ref, aside)
				}
				return nil
			}); err != nil {
				return err
			}

			blocks, err := v.Blocks(ctx, lab, []store.Ref{first.Bare(), second.Bare()})
			if err != nil {
				return err
			}
			b := blocks[second.Bare()]
			if diff := cmp.Diff([]store.Ref{assigned.Bare(), other.Bare()}, b.Anchors); diff != "" {
				t.Errorf("anchors by material (-want +got):\n%s", diff)
			}
			if len(blocks) != 2 || b.AnchorDerivatives[1][0] != 0.26 || len(b.Results) != 2 || b.Session != "S1" || b.StartedAt == nil || *b.StartedAt != 1772439300000000 {
				t.Errorf("block %+v", b)
			}
			shares, err := v.Shares(ctx, []store.Ref{final.Bare()})
			if err != nil {
				return err
			}
			want := map[store.Ref]store.FinalShares{final.Bare(): {Scale: "d13C-VPDB", Value: -25.31, StandardUncertainty: 0.07, Members: []store.FinalShare{{Calibration: second.Bare(), Weight: 1}}}}
			if diff := cmp.Diff(want, shares); diff != "" {
				t.Errorf("shares (-want +got):\n%s", diff)
			}
			lines, err := v.LinesOfReport(ctx, report)
			if err != nil {
				return err
			}
			if len(lines) != 1 || lines[0].Code != "D1" || lines[0].Final != final.Bare() {
				t.Errorf("lines of the report: %+v", lines)
			}
			// The second calibration is the one in force, and its control is judged by the root.
			if n, err := v.Judged(ctx, lab, []store.Ref{top}); err != nil || n != 1 {
				t.Errorf("%d calibrations judged, %v; want 1", n, err)
			}

			draft, err := v.DraftOf(ctx, "X1", final.Key, nil)
			if err != nil || draft != drafts[1] {
				t.Errorf("draft %v, %v; want %v", draft, err, drafts[1])
			}
			_, err = v.DraftOf(ctx, "X1", second.Key, nil)
			wantIs(t, err, store.ErrNotFound)
			members, err := v.Drafts(ctx, lab, "X1", -1, 0)
			if err != nil || len(members) != 2 || members[0].Ref != drafts[0] || members[1].Ref != drafts[1] {
				t.Errorf("members %v, %v; want %v", members, err, drafts)
			}
			set, err := v.DraftedSet(ctx, lab, "X1")
			hashes := []string{string(drafts[0].Hash[:]), string(drafts[1].Hash[:])}
			slices.Sort(hashes)
			if err != nil || set.Hash != sha256.Sum256([]byte(hashes[0]+hashes[1])) || set.Calibrations != 1 || set.Finals != 1 {
				t.Errorf("set %+v, %v", set, err)
			}
			reports, err := v.ReportsOfRevision(ctx, lab, "X1", "", "", 0)
			if diff := cmp.Diff([]store.RevisionReport{{Report: "R1", Lines: 1}}, reports); err != nil || diff != "" {
				t.Errorf("reports: %v (-want +got):\n%s", err, diff)
			}
			return nil
		})
	})
}
