package registry_test

import (
	"math"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A changed H3 factor reaches every number that rests on it: the predicted
// shift is the refitted one, the drafts name the right factor, and a delta whose
// session had it applied by a program has it undone first.
func TestChangedFactorReachesTheReportedDelta(t *testing.T) {
	b := openBench(t)
	b.method("H-water", hydrogenMethod())
	earlier := hydrogenMethod()
	earlier.Corrections[0].State = "earlier"
	b.must(second(b.StateMethod(b.ctx, b.manager, "H-done", earlier, registry.Edit{})))
	b.approve(store.KindMethod, "H-done")
	// The pulses were typed wrong: 4.2 where the source had 5.
	wrong := furnace
	wrong.k = 4.2
	at := store.InstantOf(sessionStart.Add(-time.Hour))
	b.factor(store.Factor{Origin: registry.FromPulses, DeterminedAt: at, RatioUnit: "ppm", IntensityUnit: "nA", Shape: "flat", Pulses: wrong.pulses(0.05)})

	here, done := b.waterSample("W1"), b.waterSample("W2")
	b.acceptedWater(b.importTable("H-water", hydrogenTable(furnace, here)).Session.Code)
	table := hydrogenTable(furnace, done)
	for i := range table.Readings {
		r := &table.Readings[i]
		measured := *r.GasRatio * (1 + r.Raw/1000)
		r.Raw = ((measured-4.2**r.Intensity)/(*r.GasRatio-4.2**r.GasIntensity) - 1) * 1000
	}
	b.acceptedWater(b.importTable("H-done", table).Session.Code)
	var finals []string
	for _, sample := range []string{here, done} {
		f, err := b.FinalValue(b.ctx, b.analyst, registry.FinalRequest{Sample: sample, Scale: "d2H-VSMOW-SLAP"})
		b.must(err)
		b.approve(store.KindFinal, f.Code)
		finals = append(finals, f.Code)
	}
	b.report("Marsh survey", finals...)

	right := b.factor(store.Factor{Origin: registry.FromPulses, DeterminedAt: at, RatioUnit: "ppm", IntensityUnit: "nA", Shape: "flat", Pulses: furnace.pulses(0.05)})
	p := registry.Proposal{Reason: "the pulses were typed wrong", Factors: []registry.ProposedFactor{{Instrument: "EA1", Version: 1, Use: right.Ref.Version}}}
	full := p
	full.Full = true
	seen := 0
	summary, err := b.PreviewRevision(b.ctx, b.auditor, full, func(a registry.Affected) error {
		if a.Reported == "" {
			return nil
		}
		seen++
		if a.Full == nil || a.Full.Why != "" {
			t.Errorf("%s was not evaluated: %+v", a.Reported, a.Full)
			return nil
		}
		// What a revision changes directly is fitted again, so the prediction is the evaluation.
		near(t, "predicted and full shift", a.Shift, a.Full.Shift, 1e-9)
		// Both samples are at −120 in truth, the ripple leaves 0.6.
		near(t, "value after the revision", a.Value+a.Full.Shift, -120, 0.6)
		if math.Abs(a.Shift) < 0.5 {
			t.Errorf("%s moves by %v only", a.Reported, a.Shift)
		}
		return nil
	})
	b.must(err)
	if seen != 2 || summary.Reported.Moved != 2 || summary.Calibrations.Moved != 2 {
		t.Fatalf("%d reported deltas seen, summary %+v: want 2", seen, summary)
	}
	it, _, err := b.ProposeRevision(b.ctx, b.manager, p)
	b.must(err)
	b.worked()
	drafted, err := registry.One[store.Revision](b.ctx, b.Registry, b.auditor, store.KindRevision, it.Code, 0, store.Moment{})
	b.must(err)
	if drafted.Value.Drafted == nil || drafted.Value.Drafted.Calibrations != 2 || drafted.Value.Drafted.Finals != 2 {
		t.Errorf("drafted %+v: want 2 calibrations and 2 final values", drafted.Value.Drafted)
	}
	b.verified()

	p.Factors[0].Use = 9
	if _, err := b.PreviewRevision(b.ctx, b.auditor, p, nil); err == nil || !strings.Contains(err.Error(), "body.factors[0]") {
		t.Errorf("a factor that nobody recorded: %v", err)
	}
}

func (b *bench) worked() {
	b.t.Helper()
	for range 50 {
		did, err := b.Work(b.ctx, "TST", "test")
		b.must(err)
		if !did {
			return
		}
	}
	b.t.Fatal("work without end")
}

func (b *bench) acceptedWater(session string) {
	b.t.Helper()
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d2H"})
	b.must(err)
	b.approve(store.KindCalibration, c.Code)
	b.must(second(b.StateOutcome(b.ctx, b.analyst, session, store.Outcome{Quantity: "d2H", Outcome: "accepted"}, registry.Edit{})))
}

// A changed value moves what was converted from it, and what was measured with
// the converted value: by the relation's slope.
func TestChangedValueReachesWhatWasConverted(t *testing.T) {
	b := openBench(t)
	from := store.InstantOf(time.Date(2020, 1, 1, 0, 0, 0, 0, time.UTC))
	b.method("O-carb", oxygenMethod())
	it, err := b.ConvertValue(b.ctx, b.manager, "NBS-18", "d18O-VPDB", "", registry.ConvertRequest{Relation: "d18O-VPDB-VSMOW"}, &from)
	b.must(err)
	b.approve(store.KindValue, it.Code)
	one := b.sample("Marsh survey", "A1")
	original := b.oxygenFinal(one, 1)
	moved, err := b.ConvertFinal(b.ctx, b.analyst, original.Code, registry.ConvertRequest{Relation: "d18O-VPDB-VSMOW"})
	b.must(err)
	b.approve(store.KindFinal, moved.Code)
	b.report("Marsh survey", original.Code, moved.Code)

	p := registry.Proposal{Full: true, Reason: "announced", Values: []registry.ProposedValue{{Material: "NBS-18", Scale: "d18O-VPDB", Value: "-23.11", Stated: store.Stated{Text: "0.1", Kind: "standard"}}}}
	shifts := map[string]registry.Affected{}
	_, err = b.PreviewRevision(b.ctx, b.auditor, p, func(a registry.Affected) error {
		if a.Reported == "" {
			shifts[string(a.Kind)+" "+a.Code] = a
		}
		return nil
	})
	b.must(err)
	value := shifts["value "+registry.ValueCode("NBS-18", "d18O-VSMOW-SLAP", "")]
	near(t, "shift of the converted value", value.Shift, 1.03092*-0.10, 1e-9)
	if value.Full == nil {
		t.Error("the converted value was not evaluated again")
	} else {
		near(t, "its full shift", value.Full.Shift, 1.03092*-0.10, 1e-9)
	}
	a, c := shifts["final "+original.Code], shifts["final "+moved.Code]
	if a.Shift == 0 {
		t.Fatalf("the original final value does not move: %+v", shifts)
	}
	near(t, "shift of the converted final value", c.Shift, 1.03092*a.Shift, 1e-9)
	if c.Full == nil || c.Full.Why != "" {
		t.Fatalf("the converted final value was not evaluated: %+v", c.Full)
	}
	near(t, "its full shift", c.Full.Shift, 1.03092*a.Full.Shift, 1e-9)
	if c.Scale != "d18O-VSMOW-SLAP" {
		t.Errorf("the converted final value is shown on %s", c.Scale)
	}
	b.must(thirdOf(b.ProposeRevision(b.ctx, b.manager, registry.Proposal{Reason: "announced", Values: p.Values})))
	b.worked()
	b.verified()
}

func thirdOf[A, B any](_ A, _ B, err error) error { return err }
