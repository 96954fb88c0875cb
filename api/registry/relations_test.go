package registry_test

import (
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// Values on both scales as printed: NBS 19 −2.2 and +28.65 (definition and
// CIAAW oxygen table), NBS 18 −23.01 and +7.20 (CIAAW), to the prints' rounding.
func TestSeededRelationConvertsPublishedPairs(t *testing.T) {
	b := openBench(t)
	for _, c := range []struct{ vpdb, vsmow float64 }{{-2.2, 28.65}, {-23.01, 7.2}} {
		there, err := b.Convert(b.ctx, b.auditor, registry.ConversionRequest{Relation: "d18O-VPDB-VSMOW", Scale: "d18O-VPDB", Value: c.vpdb, U: 0.1})
		b.must(err)
		near(t, "on VSMOW-SLAP", there.Value, c.vsmow, 0.006)
		near(t, "u", there.StandardUncertainty, 0.103092, 1e-12) // 1.03092 × 0.1
		back, err := b.Convert(b.ctx, b.auditor, registry.ConversionRequest{Relation: "d18O-VPDB-VSMOW", Scale: "d18O-VSMOW-SLAP", Value: there.Value, U: there.StandardUncertainty})
		b.must(err)
		near(t, "and back", back.Value, c.vpdb, 1e-12)
		near(t, "u and back", back.StandardUncertainty, 0.1, 1e-12)
		if back.Scale != "d18O-VPDB" || there.Relation.Ref.Version != 2 {
			t.Errorf("back on %s by version %d: want d18O-VPDB by the relation of 2014", back.Scale, there.Relation.Ref.Version)
		}
	}
	old, err := b.Convert(b.ctx, b.auditor, registry.ConversionRequest{Relation: "d18O-VPDB-VSMOW", Version: 1, Scale: "d18O-VPDB", Value: -2.2})
	b.must(err)
	// Coplen, Kendall and Hopple 1983: 1.03091 × −2.2 + 30.91 (constants from memory, as the table marks them).
	near(t, "by the relation of 1983", old.Value, 1.03091*-2.2+30.91, 1e-12)
	if !old.Relation.Value.Provisional {
		t.Error("constants from memory are not marked as provisional")
	}
	for name, q := range map[string]registry.ConversionRequest{
		"no such relation":    {Relation: "nothing", Scale: "d18O-VPDB"},
		"scale not in it":     {Relation: "d18O-VPDB-VSMOW", Scale: "d13C-VPDB"},
		"a constant":          {Relation: "lambda17", Scale: "d18O-VPDB"},
		"a rule in words":     {Relation: "d13C-one-scale", Scale: "d13C-VPDB"},
		"not a number":        {Relation: "d18O-VPDB-VSMOW", Scale: "d18O-VPDB", Value: math.NaN()},
		"no such version":     {Relation: "d18O-VPDB-VSMOW", Version: 9, Scale: "d18O-VPDB"},
		"negative uncertain.": {Relation: "d18O-VPDB-VSMOW", Scale: "d18O-VPDB", U: -1},
	} {
		if _, err := b.Convert(b.ctx, b.auditor, q); err == nil || registry.MeaningOf(err) == registry.Internal {
			t.Errorf("%s: %v, want a refusal", name, err)
		}
	}
}

// oxygenMethod measures δ18O of carbonates on VPDB.
func oxygenMethod() store.Method {
	m := carbonMethod()
	m.Title = "δ18O of carbonates"
	m.Quantities[0].Quantity, m.Quantities[0].Scale = "d18O", "d18O-VPDB"
	m.Quantities[0].Model = calib.Model{Weights: calib.WeightsReplicate}
	m.Quantities[0].Limits = store.Limits{}
	m.Quantities[0].Roles = []store.MaterialRole{{Material: "NBS-19", Role: calib.Anchor}, {Material: "NBS-18", Role: calib.Anchor}}
	m.Corrections = nil
	return m
}

func (b *bench) oxygenFinal(sample string, seed byte) registry.Item[store.Final] {
	b.t.Helper()
	rows := []row{{"NBS-19", "", -2.2}, {"NBS-18", "", -23.01}, {sample, "", -9}, {"NBS-19", "", -2.2}, {"NBS-18", "", -23.01}, {sample, "", -9}}
	tab := table(rows...)
	for i := range tab.Readings {
		tab.Readings[i].Quantity = "d18O"
		tab.Readings[i].Raw += 0.001 * float64(seed)
	}
	session := b.importTable("O-carb", tab).Session.Code
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d18O"})
	b.must(err)
	b.approve(store.KindCalibration, c.Code)
	b.must(second(b.StateOutcome(b.ctx, b.analyst, session, store.Outcome{Quantity: "d18O", Outcome: "accepted"}, registry.Edit{})))
	f, err := b.FinalValue(b.ctx, b.analyst, registry.FinalRequest{Sample: sample, Scale: "d18O-VPDB"})
	b.must(err)
	b.approve(store.KindFinal, f.Code)
	return f
}

func TestConvertedFinalValueTracesThroughItsRelation(t *testing.T) {
	b := openBench(t)
	b.method("O-carb", oxygenMethod())
	one, two := b.sample("Marsh survey", "A1"), b.sample("Marsh survey", "A2")
	first, other := b.oxygenFinal(one, 1), b.oxygenFinal(two, 2)
	// A relation of the laboratory with uncertain constants, beside the published one.
	from := store.InstantOf(time.Date(2020, 1, 1, 0, 0, 0, 0, time.UTC))
	rel := store.Relation{Sort: registry.Conversion, Title: "with uncertainty", From: "d18O-VPDB", To: "d18O-VSMOW-SLAP", Factor: "1.03092", Offset: "30.92",
		Covariance: &[2][2]float64{{1e-10, 0}, {0, 4e-4}}, Evidence: "an invented evaluation", Lowest: pointer(-60.0), Highest: pointer(40.0)}
	b.must(second(b.StateRelation(b.ctx, b.manager, "O-OWN", rel, registry.Edit{ValidFrom: &from})))
	if _, err := b.ConvertFinal(b.ctx, b.analyst, first.Code, registry.ConvertRequest{Relation: "O-OWN"}); err == nil {
		t.Error("a relation that nobody approved was used")
	}
	b.approve(store.KindRelation, "O-OWN")
	var codes []string
	for _, f := range []registry.Item[store.Final]{first, other} {
		c, err := b.ConvertFinal(b.ctx, b.analyst, f.Code, registry.ConvertRequest{Relation: "O-OWN"})
		b.must(err)
		x, u := f.Value.Value, f.Value.StandardUncertainty
		near(t, "converted value", c.Value.Value, 1.03092*x+30.92, 1e-12)
		// u² = A²u²(x) + x²u²(A) + u²(B), JCGM 100:2008 5.1.2.
		near(t, "converted u", c.Value.StandardUncertainty, math.Sqrt(1.03092*1.03092*u*u+x*x*1e-10+4e-4), 1e-12)
		b.approve(store.KindFinal, c.Code)
		codes = append(codes, c.Code)
	}
	rep := b.report("Marsh survey", codes...)
	trace, err := b.Trace(b.ctx, b.auditor, "", rep.Lines[0].Code, 0)
	b.must(err)
	kinds := map[store.Kind]bool{}
	for _, n := range trace.Nodes {
		kinds[n.Kind] = true
	}
	for _, k := range []store.Kind{store.KindRelation, store.KindCalibration, store.KindSession} {
		if !kinds[k] {
			t.Errorf("the trace of the converted delta reaches no %s", k)
		}
	}
	if trace.Nodes[1].Code != codes[0] || !slices.ContainsFunc(trace.Nodes, func(n registry.TraceNode) bool { return n.Code == first.Code }) {
		t.Error("the trace does not go from the converted value to the original")
	}
	// The constants are common to both, so they cancel in the difference.
	c, err := b.Compare(b.ctx, b.auditor, []string{rep.Lines[0].Code, rep.Lines[1].Code}, 0)
	b.must(err)
	original, err := b.Compare(b.ctx, b.auditor, []string{b.report("Marsh survey", first.Code).Lines[0].Code, b.report("Marsh survey", other.Code).Lines[0].Code}, 0)
	b.must(err)
	near(t, "u of the difference", c.Pair.StandardUncertainty, 1.03092*original.Pair.StandardUncertainty, 1e-6)
	// The distributions go through the relation too, its constants drawn once for
	// both: the interval of the difference is that of the originals, in new per mil.
	half := func(codes []string) registry.Propagated {
		p, err := b.PropagateComparison(b.ctx, b.auditor, codes, registry.PropagationRequest{MaxTrials: 400_000})
		b.must(err)
		return p.Quantities[2]
	}
	d, o := half([]string{rep.Lines[0].Code, rep.Lines[1].Code}), half([]string{original.Deltas[0].Code, original.Deltas[1].Code})
	near(t, "interval of the difference", d.High-d.Low, 1.03092*(o.High-o.Low), 0.02*(o.High-o.Low))
	near(t, "U of the difference", d.Check.FirstOrder.U, c.Pair.Expanded.U, 1e-9)
	b.verified()
}

func TestConvertedValueStaysCorrelatedWithItsOrigin(t *testing.T) {
	b := openBench(t)
	from := store.InstantOf(time.Date(2020, 1, 1, 0, 0, 0, 0, time.UTC))
	v, err := b.ConvertValue(b.ctx, b.manager, "NBS-18", "d18O-VPDB", "", registry.ConvertRequest{Relation: "d18O-VPDB-CO2-VSMOW"}, &from)
	if err == nil {
		t.Fatalf("a value on VPDB was converted by a relation from VPDB-CO2: %v", v.Value)
	}
	old, err := registry.One[store.Value](b.ctx, b.Registry, b.auditor, store.KindValue, registry.ValueCode("NBS-18", "d18O-VPDB", ""), 0, store.Moment{})
	b.must(err)
	v, err = b.ConvertValue(b.ctx, b.manager, "NBS-18", "d18O-VPDB", "", registry.ConvertRequest{Relation: "d18O-VPDB-VSMOW"}, &from)
	b.must(err)
	if v.Value.Basis != "conversion" || !strings.HasPrefix(string(v.Value.Value), "7.198") { // 1.03092 × −23.01 + 30.92 = 7.1985308
		t.Errorf("converted value %s on the basis %s", v.Value.Value, v.Value.Basis)
	}
	near(t, "u", v.Value.StandardUncertainty, 1.03092*old.Value.StandardUncertainty, 1e-12)
	if len(v.Value.Sources) != 1 || !strings.Contains(v.Value.Sources[0].ID, "NBS-18") {
		t.Errorf("sources %+v: want that of the original value", v.Value.Sources)
	}
	b.approve(store.KindValue, v.Code)
	p, err := b.PropagateVersion(b.ctx, b.auditor, store.KindValue, v.Code, 0, registry.PropagationRequest{MaxTrials: 100_000})
	b.must(err)
	near(t, "u of the distribution", *p.Quantities[0].StandardUncertainty, v.Value.StandardUncertainty, 0.02*v.Value.StandardUncertainty)
	b.verified()
}
