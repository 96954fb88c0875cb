package store_test

import (
	"context"
	"fmt"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/calib"
	"deltamoor/store"
)

func TestListPagesByCodeWithoutGapsOrRepeats(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		var codes []string
		// Codes that sort differently by bytes than by language.
		for i, c := range []string{"a", "a-1", "a.1", "A", "B", "b", "Z9", "_", "aa"} {
			if c == "A" || c == "B" {
				c += "x" // codes are unique without regard to case
			}
			codes = append(codes, c)
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
				ref, err := tx.Append(ctx, value(c, "1", day(t, "2018-01-01")))
				if err == nil && i%3 != 0 { // every third stays a draft
					_, err = tx.Append(ctx, decision(ref, store.ActApproved))
				}
				return err
			})
		}
		slices.Sort(codes)
		approved := func(c string) bool { return c != "a" && c != "Ax" && c != "Z9" }
		for _, newest := range []bool{false, true} {
			for _, past := range []bool{false, true} {
				var want []string
				for _, c := range codes {
					if newest || approved(c) {
						want = append(want, c)
					}
				}
				read(t, s, func(ctx context.Context, v *store.View) error {
					q := store.ListQuery{Laboratory: lab, Kind: store.KindValue, Limit: 2, Newest: newest}
					if past {
						m, _, err := v.Moment(ctx, lab, store.Moment{})
						if err != nil {
							return err
						}
						q.Moment = m
					}
					var got []string
					for {
						page, next, err := v.List(ctx, q)
						if err != nil {
							return err
						}
						for _, h := range page {
							got = append(got, h.Code)
							if want := map[bool]store.State{true: store.Approved, false: store.Drafted}[approved(h.Code)]; h.State != want || len(h.Value) == 0 {
								t.Errorf("%s is %s with a body of %d bytes, want %s", h.Code, h.State, len(h.Value), want)
							}
						}
						if next == "" {
							break
						}
						q.After = next
					}
					if diff := cmp.Diff(want, got); diff != "" {
						t.Errorf("newest %v, past %v: list differs (-want +got):\n%s", newest, past, diff)
					}
					q.After, q.Prefix, q.Newest, q.Limit = "", "a.", true, 0
					page, next, err := v.List(ctx, q)
					if len(page) != 1 || page[0].Code != "a.1" || next != "" {
						t.Errorf("list with prefix a.: %v", page)
					}
					return err
				})
			}
		}
	})
}

func TestRecentListsLatestFirst(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		fill(t, s, lab, 1)
		fill(t, s, lab, 2)
		read(t, s, func(ctx context.Context, v *store.View) error {
			for _, kind := range []store.Kind{"", store.KindDecision} {
				var got []store.Raw
				for before := int64(0); ; {
					page, next, err := v.Recent(ctx, store.RecentQuery{Laboratory: lab, Kind: kind, Before: before, Limit: 3})
					if err != nil {
						return err
					}
					got = append(got, page...)
					if next == 0 {
						break
					}
					before = next
				}
				h, err := v.Head(ctx, lab)
				if err != nil {
					return err
				}
				if kind == "" && int64(len(got)) != h.Size {
					t.Errorf("%d recent versions, want all %d", len(got), h.Size)
				}
				if kind != "" && len(got) != 4 { // two approvals in each fill
					t.Errorf("%d recent decisions, want 4", len(got))
				}
				for i := 1; i < len(got); i++ {
					if got[i].Position >= got[i-1].Position {
						t.Errorf("position %d comes after %d", got[i].Position, got[i-1].Position)
					}
				}
				early := got[len(got)-1].RecordedAt
				page, _, err := v.Recent(ctx, store.RecentQuery{Laboratory: lab, Kind: kind, AsOf: &early})
				if err != nil || len(page) == 0 || page[0].RecordedAt != early {
					t.Errorf("as of %s: %d versions, %v", early, len(page), err)
				}
			}
			return nil
		})
	})
}

func TestResolveFindsCodesNamesAndAliasesOfNewestVersions(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			for _, d := range []store.Draft{material("GLY-1", "Glycin", "Straße 1"), material("GLY-2", "glycin"), material("GLY-3", "old name")} {
				if _, err := tx.Append(ctx, d); err != nil {
					return err
				}
			}
			_, err := tx.Append(ctx, material("GLY-3", "new  name"))
			return err
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			for name, want := range map[string][]string{
				"gly-1": {"GLY-1"}, "GLYCIN": {"GLY-1", "GLY-2"}, "STRASSE 1": {"GLY-1"}, "old name": nil, " New Name ": {"GLY-3"}, "glycine gly-2": {"GLY-2"},
			} {
				keys, err := v.Resolve(ctx, lab, store.KindMaterial, name)
				if err != nil {
					return err
				}
				var got []string
				for _, k := range keys {
					got = append(got, k.Code)
				}
				if diff := cmp.Diff(want, got); diff != "" {
					t.Errorf("%q resolves with a difference (-want +got):\n%s", name, diff)
				}
				if keys, err := v.Resolve(ctx, "OTHER", store.KindMaterial, name); err != nil || len(keys) != 0 {
					t.Errorf("%q resolves in another laboratory: %v, %v", name, keys, err)
				}
			}
			return nil
		})
	})
}

func TestEdgesLeadDownToTheValuesAndUpFromThem(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		r := fill(t, s, lab, 1)
		for i := range 5 {
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
				_, err := tx.Append(ctx, calibrationDraft(fmt.Sprintf("CX%d", i), r.session, r.value))
				return err
			})
		}
		read(t, s, func(ctx context.Context, v *store.View) error {
			down, err := v.EdgesFrom(ctx, r.calibration)
			if err != nil {
				return err
			}
			bare := func(ref store.Ref) store.Ref { ref.Hash = store.Hash{}; return ref }
			want := []store.Edge{{Part: "anchor", From: bare(r.calibration), To: bare(r.value)}, {Part: "session", From: bare(r.calibration), To: bare(r.session)}}
			if diff := cmp.Diff(want, down); diff != "" {
				t.Errorf("edges from the calibration differ (-want +got):\n%s", diff)
			}
			all, err := v.Down(ctx, r.report, 100)
			if err != nil {
				return err
			}
			var parts []string
			for _, e := range all {
				parts = append(parts, e.From.String()+" "+e.Part+" "+e.To.String())
			}
			wantParts := []string{
				"calibration FJO/C1.1 anchor value FJO/GLY1/d13C-VPDB/total.1", "calibration FJO/C1.1 session session FJO/S1.1",
				"final FJO/V1.1 member calibration FJO/C1.1", "report FJO/R1.1 final final FJO/V1.1",
				"value FJO/GLY1/d13C-VPDB/total.1 material material FJO/GLY1.1",
			}
			if diff := cmp.Diff(wantParts, parts); diff != "" {
				t.Errorf("edges all the way down differ (-want +got):\n%s", diff)
			}
			var up []string
			for q := (store.EdgeQuery{To: r.value.Key, FromKind: store.KindCalibration, Version: 1, Limit: 2}); ; {
				page, next, err := v.EdgesTo(ctx, q)
				if err != nil {
					return err
				}
				for _, e := range page {
					up = append(up, e.From.Code)
				}
				if q.After = next; next == "" {
					break
				}
			}
			if diff := cmp.Diff([]string{"C1", "CX0", "CX1", "CX2", "CX3", "CX4"}, up); diff != "" {
				t.Errorf("what rests on the value differs (-want +got):\n%s", diff)
			}
			first, err := v.Version(ctx, r.calibration.Key, 1)
			if err != nil {
				return err
			}
			page, _, err := v.EdgesTo(ctx, store.EdgeQuery{To: r.value.Key, FromKind: store.KindCalibration, AsOf: &first.RecordedAt})
			if err != nil || len(page) != 1 {
				t.Errorf("as of the first calibration %d rest on the value, %v, want 1", len(page), err)
			}
			foreign, _, err := v.EdgesTo(ctx, store.EdgeQuery{Laboratory: "OTHER", To: r.value.Key})
			if err != nil || len(foreign) != 0 {
				t.Errorf("another laboratory sees %d edges, %v", len(foreign), err)
			}
			return nil
		})
	})
}

func TestResultsAndReportedDeltasFollowFromTheirBodies(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		r := fill(t, s, lab, 1)
		fill(t, s, lab, 2)
		read(t, s, func(ctx context.Context, v *store.View) error {
			var got []store.ResultRow
			for q := (store.ResultQuery{Laboratory: lab, Scale: "d13C-VPDB", Limit: 1}); ; {
				page, next, err := v.Results(ctx, q)
				if err != nil {
					return err
				}
				got = append(got, page...)
				if q.After = next; next == "" {
					break
				}
			}
			if len(got) != 4 {
				t.Fatalf("%d results on the scale, want 2 of each of 2 calibrations", len(got))
			}
			first, err := v.Version(ctx, r.calibration.Key, 1)
			if err != nil {
				return err
			}
			want := store.ResultRow{Laboratory: lab, Calibration: "C1", Version: 1, Line: 0, Subject: "P1234567", Role: calib.Sample, Session: "S1",
				Scale: "d13C-VPDB", Measurand: "total", Instrument: "EA-1", At: ptr(store.Instant(1772439300000000)), Value: -25.31,
				StandardUncertainty: 0.07, Flags: []string{"extrapolated"}, RecordedAt: first.RecordedAt}
			if diff := cmp.Diff(want, got[0]); diff != "" {
				t.Errorf("first result differs (-want +got):\n%s", diff)
			}
			controls, _, err := v.Results(ctx, store.ResultQuery{Laboratory: lab, Subject: "GLY", Role: calib.Control, Instrument: "EA-1", Measurand: "total"})
			if err != nil || len(controls) != 2 {
				t.Errorf("%d results of the control, %v, want 2", len(controls), err)
			}
			none, _, err := v.Results(ctx, store.ResultQuery{Laboratory: lab, Subject: "GLY", From: ptr(store.Instant(1772439300000001))})
			if err != nil || len(none) != 0 {
				t.Errorf("%d results of later sessions, %v, want none", len(none), err)
			}
			_, _, err = v.Results(ctx, store.ResultQuery{Laboratory: lab})
			wantIs(t, err, store.ErrInvalid)

			sens, err := v.Sensitivities(ctx, lab, "C1", 1)
			if err != nil {
				return err
			}
			body := decode[store.Calibration](t, first).Value
			wantSens := store.Sensitivities{AnchorSensitivities: body.AnchorSensitivities, AnchorDerivatives: body.AnchorDerivatives, NoiseCovariance: body.NoiseCovariance}
			for _, l := range body.Results {
				wantSens.Results = append(wantSens.Results, store.ResultSensitivity{Value: l.Value, StandardUncertainty: l.StandardUncertainty, Gradient: l.Gradient, Coefficients: l.Coefficients})
			}
			if diff := cmp.Diff(wantSens, sens); diff != "" {
				t.Errorf("sensitivities differ from the body's (-want +got):\n%s", diff)
			}

			d, err := v.Reported(ctx, r.reported[1])
			if err != nil {
				return err
			}
			final, err := v.Version(ctx, r.final.Key, 1)
			if err != nil {
				return err
			}
			hash, err := store.ReportLineHash(store.NewReportLine(r.reported[1], "R1", 1, decode[store.Final](t, final)))
			if err != nil {
				return err
			}
			bare := r.final
			bare.Hash = store.Hash{}
			wantD := store.Reported{Code: r.reported[1], Laboratory: lab, Report: "R1", Version: 1, Line: 1, Final: bare, Value: -25.31, StandardUncertainty: 0.07, Hash: hash}
			if diff := cmp.Diff(wantD, d); diff != "" {
				t.Errorf("reported delta differs (-want +got):\n%s", diff)
			}
			_, err = v.Reported(ctx, "D0000000000")
			wantIs(t, err, store.ErrNotFound)
			return nil
		})
	})
}

func TestReportedCodeIsTakenOnceInTheWholeRegistry(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		s := open(store.Options{})
		r := fill(t, s, lab, 1)
		var final store.Version[store.Final]
		read(t, s, func(ctx context.Context, v *store.View) error {
			raw, err := v.Version(ctx, r.final.Key, 1)
			final = decode[store.Final](t, raw)
			return err
		})
		_, err := s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error {
			_, err := tx.Append(ctx, reportDraft(t, "R2", r.reported[:1], final))
			return err
		})
		wantIs(t, err, store.ErrConflict)
		wantClean(t, s, lab, store.VerifyOptions{})
	})
}
