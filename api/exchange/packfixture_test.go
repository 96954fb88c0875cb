package exchange

import (
	"bytes"
	"context"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A chain is a small registry with one reported delta, three calibrations deep:
// published materials → two working standards → a client's sample in two
// sessions. The second session also holds a sample of another client.
type chain struct {
	*registry.Registry
	t       testing.TB
	ctx     context.Context
	store   *store.Store
	reader  registry.Actor
	code    string
	foreign string // the other client's label
	key     ledger.Key
}

func openChain(t testing.TB, signed bool) *chain {
	t.Helper()
	c := &chain{t: t, ctx: context.Background(), foreign: "Secret spring 7"}
	clock := time.Date(2026, 3, 20, 8, 0, 0, 0, time.UTC)
	now := func() time.Time { clock = clock.Add(time.Second); return clock }
	s, err := store.Open(c.ctx, store.Options{Database: filepath.Join(t.TempDir(), "registry.db"), Now: now, Migrate: true})
	c.must(err)
	t.Cleanup(func() { s.Close() })
	c.store = s
	c.key, err = ledger.NewKey(rand.NewChaCha8([32]byte{9}))
	c.must(err)
	o := registry.Options{Now: now, Rand: rand.NewChaCha8([32]byte{1}), Name: "registry.example"}
	if signed {
		o.Key = &c.key
	}
	c.Registry = registry.New(s, o)
	_, err = c.Init(c.ctx, registry.InitRequest{Laboratory: "FJO", Name: "Fjord laboratory", Person: "ada", PersonName: "Ada"})
	c.must(err)
	man := registry.Actor{Person: "man", Laboratory: "FJO", Roles: []string{registry.Manager}}
	sig := registry.Actor{Person: "sig", Laboratory: "FJO", Roles: []string{registry.Signatory}}
	c.reader = registry.Actor{Person: "aud", Laboratory: "FJO", Roles: []string{registry.Auditor}}
	_, err = c.StateInstrument(c.ctx, man, "EA1", store.Instrument{Name: "first instrument"}, registry.Edit{})
	c.must(err)
	for _, m := range []string{"PEAT-LO", "PEAT-HI"} {
		_, err = c.StateMaterial(c.ctx, man, m, store.Material{Name: m, Kind: "working", Substance: "peat"}, registry.Edit{})
		c.must(err)
	}
	method := func(code string, anchors ...string) {
		m := store.Method{Title: "δ13C of solids, " + code, Final: store.FinalRule{Rule: registry.RuleAll}, Quantities: []store.MethodQuantity{{Quantity: "d13C", Scale: "d13C-VPDB-LSVEC",
			Model: calib.Model{Weights: calib.WeightsReplicate}, Roles: []store.MaterialRole{{Material: anchors[0], Role: calib.Anchor}, {Material: anchors[1], Role: calib.Anchor}, {Material: "IAEA-CH-6", Role: calib.Control}}}},
			Corrections: []store.Correction{{Name: "o17", State: "earlier", By: "acquisition software"}}}
		_, err := c.StateMethod(c.ctx, man, code, m, registry.Edit{})
		c.must(err)
		_, err = c.Decide(c.ctx, sig, store.KindMethod, code, registry.DecisionRequest{Act: "approved", Version: 1})
		c.must(err)
	}
	method("C-assign", "USGS40", "USGS41")
	method("C-house", "PEAT-LO", "PEAT-HI")
	// Deltas as simulated, no published figures: raw = 0.3 + 1.01·delta and a ripple of 0.04 for noise.
	session := func(day int, method string, rows ...any) {
		table := registry.ReadingTable{Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
		for repeat := range 4 {
			for i := 0; i < len(rows); i += 2 {
				n := len(table.Readings)
				at := store.InstantOf(time.Date(2026, 3, day, 9, 10*n, 0, 0, time.UTC))
				name, _ := rows[i].(string)
				delta, _ := rows[i+1].(float64)
				table.Readings = append(table.Readings, registry.RawReading{Name: name, Quantity: "d13C", Time: &at,
					Raw: 0.3 + 1.01*delta + 0.02*float64((n*7+repeat)%5-2)})
			}
		}
		table.Rows = len(table.Readings)
		answer, err := c.ImportReadings(c.ctx, man, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: method, Label: fmt.Sprint("day ", day)},
			Name: fmt.Sprintf("run%d.csv", day), MediaType: "text/csv", Bytes: []byte(fmt.Sprint(c.foreign, rows)), Table: table})
		c.must(err)
		fit, err := c.Fit(c.ctx, man, registry.FitRequest{Session: answer.Session.Code, Quantity: "d13C"})
		c.must(err)
		_, err = c.Decide(c.ctx, sig, store.KindCalibration, fit.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		c.must(err)
		_, err = c.StateOutcome(c.ctx, man, answer.Session.Code, store.Outcome{Quantity: "d13C", Outcome: "accepted"}, registry.Edit{})
		c.must(err)
	}
	session(2, "C-assign", "USGS40", -26.39, "PEAT-LO", -28.1, "IAEA-CH-6", -10.45, "PEAT-HI", 3.2, "USGS41", 37.63)
	from := store.InstantOf(time.Date(2026, 3, 3, 0, 0, 0, 0, time.UTC))
	for _, m := range []string{"PEAT-LO", "PEAT-HI"} {
		value, err := c.AssignValue(c.ctx, man, registry.AssignRequest{Material: m, Scale: "d13C-VPDB-LSVEC"}, registry.Edit{ValidFrom: &from})
		c.must(err)
		_, err = c.Decide(c.ctx, sig, store.KindValue, value.Code, registry.DecisionRequest{Act: "approved", Version: 1, Reason: "fit for use"})
		c.must(err)
	}
	wanted := []store.Wanted{{Scale: "d13C-VPDB-LSVEC"}}
	samples, err := c.AddSamples(c.ctx, man, []store.Sample{{Client: "Marsh survey", Label: "A1 <core> & top", Wanted: wanted}, {Client: "Somebody else", Label: c.foreign, Wanted: wanted}})
	c.must(err)
	mine, other := samples[0].Code, samples[1].Code
	session(5, "C-house", "PEAT-LO", -28.1, mine, -18.2, "IAEA-CH-6", -10.45, "PEAT-HI", 3.2)
	session(6, "C-house", "PEAT-LO", -28.1, mine, -18.25, other, -7.0, "IAEA-CH-6", -10.45, "PEAT-HI", 3.2)
	var finals []string
	for _, sample := range []string{mine, other} {
		f, err := c.FinalValue(c.ctx, man, registry.FinalRequest{Sample: sample, Scale: "d13C-VPDB-LSVEC"})
		c.must(err)
		_, err = c.Decide(c.ctx, sig, store.KindFinal, f.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		c.must(err)
		finals = append(finals, f.Code)
	}
	report, err := c.Issue(c.ctx, sig, registry.ReportRequest{Client: "Marsh survey", Title: "Core A", Finals: finals[:1]})
	c.must(err)
	c.code = report.Lines[0].Code
	return c
}

func (c *chain) must(err error) {
	c.t.Helper()
	if err != nil {
		c.t.Fatal(err)
	}
}

func (c *chain) pack() registry.Pack {
	c.t.Helper()
	p, err := c.Pack(c.ctx, c.reader, c.code)
	c.must(err)
	return p
}

func packBytes(t testing.TB, p registry.Pack) []byte {
	t.Helper()
	var b bytes.Buffer
	if err := WritePack(t.Context(), &b, p); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

func verifyBytes(t testing.TB, b []byte, q registry.PackCheckRequest) (registry.PackVerification, error) {
	t.Helper()
	return VerifyPack(t.Context(), bytes.NewReader(b), int64(len(b)), q)
}

func keyOf(t testing.TB, n byte) ledger.Key {
	t.Helper()
	key, err := ledger.NewKey(rand.NewChaCha8([32]byte{n}))
	if err != nil {
		t.Fatal(err)
	}
	return key
}
