package store_test

import (
	"context"
	"errors"
	"fmt"
	"os"
	"strings"
	"testing"
	"time"

	"deltamoor/calib"
	"deltamoor/store"
	"deltamoor/store/ledger"
	"deltamoor/store/storetest"
)

func TestMain(m *testing.M) {
	if database := os.Getenv(writerVariable); database != "" {
		writeUntilKilled(database)
	}
	os.Exit(storetest.Main(m))
}

const lab = "FJO"

func forEachEngine(t *testing.T, f func(t *testing.T, open func(store.Options) *store.Store)) {
	t.Helper()
	storetest.ForEachEngine(t, f)
}

func write(t testing.TB, s *store.Store, laboratory string, f func(ctx context.Context, tx *store.Tx) error) store.Commit {
	t.Helper()
	c, err := s.Write(t.Context(), laboratory, f)
	if err != nil {
		t.Fatalf("write %s: %v", laboratory, err)
	}
	return c
}

func read(t testing.TB, s *store.Store, f func(ctx context.Context, v *store.View) error) {
	t.Helper()
	if err := s.Read(t.Context(), f); err != nil {
		t.Fatalf("read: %v", err)
	}
}

// day is noon UTC of a date.
func day(t testing.TB, date string) store.Instant {
	t.Helper()
	at, err := time.Parse(time.DateOnly, date)
	if err != nil {
		t.Fatal(err)
	}
	return store.InstantOf(at.Add(12 * time.Hour))
}

func ptr[T any](v T) *T { return &v }

// clock is a clock that tests set.
type clock struct{ at time.Time }

func (c *clock) now() time.Time { return c.at }

func material(code string, aliases ...string) store.Draft {
	return store.Draft{Kind: store.KindMaterial, Code: code, By: "mara", Reason: "new lot",
		Value: store.Material{Name: "Glycine " + code, Kind: "control", Aliases: aliases}}
}

func value(code string, number store.Decimal, from store.Instant, inputs ...store.Input) store.Draft {
	return store.Draft{Kind: store.KindValue, Code: code, By: "mara", Reason: "certificate", ValidFrom: &from, Inputs: inputs,
		Value: store.Value{Material: "GLY", MaterialLaboratory: lab, Scale: "d13C-VPDB", Measurand: "total", Value: number, StandardUncertainty: 0.05, Basis: "certificate"}}
}

func decision(ref store.Ref, act string) store.Draft {
	return store.Draft{Kind: store.KindDecision, Code: store.DecisionCode(ref), By: "ada", Reason: "checked",
		Inputs: []store.Input{{Part: "subject", Ref: ref}}, Value: store.Decision{Act: act}}
}

func readings(session string, n int) []store.Reading {
	rs := make([]store.Reading, n)
	for i := range rs {
		at := store.InstantOf(time.Date(2026, 3, 2, 8, 15, 0, 0, time.UTC).Add(time.Duration(i) * 10 * time.Minute))
		rs[i] = store.Reading{Session: session, Number: i + 1, Analysis: fmt.Sprint(i/2 + 1), Preparation: fmt.Sprint(i/2 + 1),
			Position: ptr(i/2 + 1), Quantity: "d13C", Role: calib.Sample, Sample: "P1234567", At: &at, Raw: -25.1 - float64(i)/7}
		switch i % 4 {
		case 0:
			rs[i].Role, rs[i].Sample, rs[i].Material, rs[i].Unit = calib.Anchor, "", "GLY", fmt.Sprintf("BTL-%d", i%3)
		case 1:
			rs[i].U, rs[i].Size = ptr(0.04), ptr(5.25+float64(i))
		case 2:
			rs[i].Extra, rs[i].Compound, rs[i].Group, rs[i].Peak = `{"retention":312.5}`, "C16:0 \"methyl\"", "a", ptr(3)
		}
	}
	return rs
}

func sessionDraft(code string, rs []store.Reading, upload *store.Hash) store.Draft {
	return store.Draft{Kind: store.KindSession, Code: code, By: "mara", Reason: "import",
		Value: store.Session{Instrument: "EA-1", Method: "EA-C", Operator: "mara", StartedAt: ptr(store.Instant(1772439300000000)),
			Upload: upload, UploadName: "run.csv", Readings: len(rs), Blocks: store.ReadingBlocks(rs)}}
}

// registry is a small laboratory with a row in every table.
type registry struct {
	material, value, session, calibration, final, report store.Ref
	reported                                             []string
	upload                                               store.Hash
	key                                                  ledger.Key
	origin, verifier                                     string
	checkpoints                                          [][]byte
}

func calibrationDraft(code string, session, anchor store.Ref) store.Draft {
	return store.Draft{Kind: store.KindCalibration, Code: code, By: "mara", Reason: "first fit",
		Inputs: []store.Input{{Part: "session", Ref: session}, {Part: "anchor", Ref: anchor}},
		Value: store.Calibration{Engine: "1", Session: session.Code, Instrument: "EA-1", StartedAt: ptr(store.Instant(1772439300000000)),
			Quantity: "d13C", Scale: "d13C-VPDB", Measurand: "total",
			Parameters:          []store.Parameter{{Name: "intercept", Value: 0.21, StandardUncertainty: 0.05}, {Name: "slope", Value: 1.01, StandardUncertainty: 0.002}},
			Covariance:          [][]float64{{0.0025, 1e-5}, {1e-5, 4e-6}},
			NoiseCovariance:     [][]float64{{0.002, 1e-5}, {1e-5, 3e-6}},
			AnchorSensitivities: [][]float64{{0.5}, {0.25}},
			AnchorDerivatives:   [][]float64{{0.5}, {0.26}},
			Anchors:             []store.CalibrationAnchor{{Material: "GLY", Value: -33.1, StandardUncertainty: 0.05, Adjusted: -33.09}},
			Results: []store.Result{
				{Subject: "P1234567", Role: calib.Sample, N: 3, Value: -25.31, StandardUncertainty: 0.07, Gradient: []float64{1, -25}, Readings: []int{2, 3}, Coefficients: []float64{0.5, 0.5}, Flags: []string{"extrapolated"}},
				{Subject: "GLY", Role: calib.Control, N: 2, Value: -33.08, StandardUncertainty: 0.06, Gradient: []float64{1, -33}, Readings: []int{1}, Coefficients: []float64{1}},
			}}}
}

func finalDraft(code string, calibration store.Ref) store.Draft {
	return store.Draft{Kind: store.KindFinal, Code: code, By: "mara", Reason: "rule", Inputs: []store.Input{{Part: "member", Ref: calibration}},
		Value: store.Final{Sample: "P1234567", Quantity: "d13C", Scale: "d13C-VPDB", Measurand: "total", Rule: "one accepted session",
			Members: []store.FinalMember{{Input: 0, Line: 0, Weight: 1}}, Value: -25.31, StandardUncertainty: 0.07, K: 2, Expanded: 0.14, Probability: 0.95}}
}

// reportDraft makes a report of one line for each final value.
func reportDraft(t testing.TB, code string, codes []string, finals ...store.Version[store.Final]) store.Draft {
	t.Helper()
	var lines []store.ReportHash
	d := store.Draft{Kind: store.KindReport, Code: code, By: "ada", Reason: "issue"}
	for i, f := range finals {
		hash, err := store.ReportLineHash(store.NewReportLine(codes[i], code, i, f))
		if err != nil {
			t.Fatal(err)
		}
		lines = append(lines, store.ReportHash{Code: codes[i], Hash: hash})
		d.Inputs = append(d.Inputs, store.Input{Part: "final", Ref: f.Ref})
	}
	d.Value = store.Report{Client: "Institute", Title: "Report", Lines: lines}
	return d
}

func decode[T store.Body](t testing.TB, raw store.Raw) store.Version[T] {
	t.Helper()
	v, err := store.Decode[T](raw)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// fill writes the small laboratory; n numbers it, so that several can be told apart.
func fill(t testing.TB, s *store.Store, laboratory string, n int) registry {
	t.Helper()
	var r registry
	code := func(prefix string) string { return fmt.Sprintf("%s%d", prefix, n) }
	add := func(into *store.Ref) func(store.Ref, error) error {
		return func(ref store.Ref, err error) error {
			*into = ref
			return err
		}
	}
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		return add(&r.material)(tx.Append(ctx, material(code("GLY"), "glycin "+code(""))))
	})
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		return add(&r.value)(tx.Append(ctx, value(code("GLY")+"/d13C-VPDB/total", "-33.10", day(t, "2018-01-01"), store.Input{Part: "material", Ref: r.material})))
	})
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		_, err := tx.Append(ctx, decision(r.value, store.ActApproved))
		return err
	})
	rs := readings(code("S"), 150)
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		var err error
		if r.upload, _, err = tx.PutUpload(ctx, "run.csv", "text/csv", []byte(strings.Repeat("row;of;a;table\n", 40_000)+fmt.Sprint(n))); err != nil {
			return err
		}
		if err := tx.AppendReadings(ctx, rs[:100]); err != nil {
			return err
		}
		if err := tx.AppendReadings(ctx, rs[100:]); err != nil {
			return err
		}
		return add(&r.session)(tx.Append(ctx, sessionDraft(code("S"), rs, &r.upload)))
	})
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		if err := add(&r.calibration)(tx.Append(ctx, calibrationDraft(code("C"), r.session, r.value))); err != nil {
			return err
		}
		_, err := tx.Append(ctx, decision(r.calibration, store.ActApproved))
		return err
	})
	r.reported = []string{code("D1-" + laboratory), code("D2-" + laboratory)}
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		if err := add(&r.final)(tx.Append(ctx, finalDraft(code("V"), r.calibration))); err != nil {
			return err
		}
		raw, err := tx.Version(ctx, r.final.Key, 1)
		if err != nil {
			return err
		}
		final := decode[store.Final](t, raw)
		return add(&r.report)(tx.Append(ctx, reportDraft(t, code("R"), r.reported, final, final)))
	})
	var err error
	if r.key, err = ledger.NewKey(strings.NewReader(strings.Repeat("k", 32))); err != nil {
		t.Fatal(err)
	}
	r.origin = ledger.Origin("registry.example", laboratory)
	if r.verifier, err = r.key.Verifier(r.origin); err != nil {
		t.Fatal(err)
	}
	if n == 1 {
		write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
			_, err := tx.Append(ctx, store.Draft{Kind: store.KindKey, Code: "key-1", By: "ada", Value: store.SigningKey{Verifier: r.verifier}})
			return err
		})
	}
	write(t, s, laboratory, func(ctx context.Context, tx *store.Tx) error {
		root, size, err := tx.Root(ctx, laboratory, -1)
		if err != nil {
			return err
		}
		signed, err := ledger.Sign(ledger.Checkpoint{Origin: r.origin, Size: size, Root: root}, r.key)
		if err != nil {
			return err
		}
		r.checkpoints = append(r.checkpoints, signed)
		return tx.AppendCheckpoint(ctx, signed, r.verifier)
	})
	return r
}

func wantIs(t testing.TB, err, target error) {
	t.Helper()
	if !errors.Is(err, target) {
		t.Fatalf("error %v, want %v", err, target)
	}
}
