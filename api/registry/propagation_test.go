package registry_test

import (
	"fmt"
	"math"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// Where every variance is known, the distributions of the whole chain, down to
// the primary values, agree with the first order: u within what the trials
// leave, and both end points within the tolerance (JCGM 101:2008, clause 8).
// The deltas rest on one, two and three generations.
func TestPropagationThroughTheWholeChainAgreesWithFirstOrder(t *testing.T) {
	c := openChain(t, 3, 0.03, calib.WeightsDeclared)
	before := c.roots()
	for g, rep := range c.reports {
		d := rep.Lines[0]
		p, err := c.PropagateReported(c.ctx, c.auditor, d.Code, registry.PropagationRequest{Digits: 1, MaxTrials: 1_000_000})
		c.must(err)
		// Of each generation both sessions, and in the first a material more.
		if p.Fits != 2*(g+1) || p.Generations != g || !p.Settled || len(p.Quantities) != 1 {
			t.Errorf("generation %d: %d fits, %d generations, settled %v, %d quantities", g, p.Fits, p.Generations, p.Settled, len(p.Quantities))
		}
		x := p.Quantities[0]
		if x.Check.Value != d.Value || math.Abs(x.Check.FirstOrder.U-d.K*d.StandardUncertainty) > 1e-9*x.Check.FirstOrder.U {
			t.Errorf("generation %d: first order %v ± %v, reported %v ± %v", g, x.Check.Value, x.Check.FirstOrder.U, d.Value, d.K*d.StandardUncertainty)
		}
		if !x.Check.Valid {
			t.Errorf("generation %d: end points differ by %v and %v, tolerance %v, u %v", g, x.Check.LowDifference, x.Check.HighDifference, x.Check.Tolerance, d.StandardUncertainty)
		}
		if u := x.StandardUncertainty; u == nil || math.Abs(*u-d.StandardUncertainty) > 0.02*d.StandardUncertainty {
			t.Errorf("generation %d: u %v of the trials, %v reported", g, u, d.StandardUncertainty)
		}
	}
	if c.roots() != before {
		t.Error("propagating wrote something")
	}
}

func TestSameSeedIsTheSameAnswer(t *testing.T) {
	c := openChain(t, 2, 0.03, calib.WeightsDeclared)
	code := c.reports[1].Lines[0].Code
	ask := func(seed *uint64) registry.Propagation {
		p, err := c.PropagateReported(c.ctx, c.auditor, code, registry.PropagationRequest{Seed: seed, MaxTrials: 50_000})
		c.must(err)
		return p
	}
	seven, eight := uint64(7), uint64(8)
	if diff := cmp.Diff(ask(&seven), ask(&seven)); diff != "" {
		t.Errorf("one seed, two answers:\n%s", diff)
	}
	own := ask(nil)
	if diff := cmp.Diff(own, ask(&own.Seed)); diff != "" {
		t.Errorf("the delta's own seed, asked for, gives another answer:\n%s", diff)
	}
	if own.Seed > registry.MaxSeed {
		t.Errorf("seed %d is beyond %d", own.Seed, uint64(registry.MaxSeed))
	}
	if cmp.Equal(ask(&seven).Quantities, ask(&eight).Quantities) {
		t.Error("two seeds, one answer")
	}
}

// u of the difference of two reported deltas against the distributions of both
// whole chains, what they share drawn once: of one session, of two instruments
// that share anchors, and of two that share nothing. Within 2 %.
func TestComparisonAgreesWithTheDistributionsOfBothChains(t *testing.T) {
	c := openChain(t, 2, 0.03, calib.WeightsDeclared)
	_, err := c.StateInstrument(c.ctx, c.manager, "EA2", store.Instrument{Name: "second instrument"}, registry.Edit{})
	c.must(err)
	session := func(instrument string, day int, subjects ...string) {
		tab := registry.ReadingTable{Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
		for round := range 3 {
			for i, name := range append([]string{"LO-1", "HI-1"}, subjects...) {
				at := store.InstantOf(c.day(day, 0).Add(time.Duration(len(tab.Readings)) * 10 * time.Minute))
				position, u := len(tab.Readings)+1, 0.03
				role := "sample"
				if i < 2 {
					role = "anchor"
				}
				tab.Readings = append(tab.Readings, registry.RawReading{Name: name, Role: role, Quantity: "d13C", Time: &at, Position: &position, U: &u,
					Raw: 0.5 + 0.97*c.truth[name] + 0.02*float64((round+i)%3-1)})
			}
		}
		tab.Rows = len(tab.Readings)
		if at := c.day(day, 0).Add(12 * time.Hour); c.clock.Before(at) {
			c.clock = at
		}
		label := instrument + fmt.Sprint(day)
		answer, err := c.ImportReadings(c.ctx, c.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: instrument, Method: "C-solid", Label: label},
			Name: label + ".csv", MediaType: "text/csv", Bytes: []byte(label), Table: tab})
		c.must(err)
		fit, err := c.Fit(c.ctx, c.analyst, registry.FitRequest{Session: answer.Session.Code, Quantity: "d13C"})
		c.must(err)
		_, err = c.Decide(c.ctx, c.signatory, store.KindCalibration, fit.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		c.must(err)
		_, err = c.StateOutcome(c.ctx, c.analyst, answer.Session.Code, store.Outcome{Quantity: "d13C", Outcome: "accepted"}, registry.Edit{})
		c.must(err)
	}
	samples := map[string]float64{"P": -25, "Q": -24, "R": 5}
	codes := map[string]string{}
	for _, name := range []string{"P", "Q", "R"} {
		codes[name] = c.sample("client "+name, name)
		c.truth[codes[name]] = samples[name]
	}
	session("EA1", 30, codes["P"], codes["Q"])
	session("EA2", 31, codes["R"])
	line := func(name string) string {
		return c.report("client "+name, c.finalOf(codes[name])).Lines[0].Code
	}
	p, q, r := line("P"), line("Q"), line("R")
	for _, x := range []struct {
		name string
		a, b string
		// least and most of u(difference) over the root sum of squares.
		least, most float64
	}{
		{"one session", p, q, 0, 0.95},
		{"two instruments sharing anchors", p, r, 0, 0.999},
		{"an older generation", p, c.reports[1].Lines[0].Code, 0, 0.99},
		{"nothing shared", p, c.other.Lines[0].Code, 1, 1},
	} {
		compared, err := c.Compare(c.ctx, c.auditor, []string{x.a, x.b}, 0)
		c.must(err)
		pair := compared.Pair
		seed := uint64(11)
		m, err := c.PropagateComparison(c.ctx, c.auditor, []string{x.a, x.b}, registry.PropagationRequest{Seed: &seed, MaxTrials: 400_000})
		c.must(err)
		if len(m.Quantities) != 3 {
			t.Fatalf("%s: %d quantities, want both deltas and the difference", x.name, len(m.Quantities))
		}
		d := m.Quantities[2]
		if ratio := *d.StandardUncertainty / pair.StandardUncertainty; math.Abs(ratio-1) > 0.02 {
			t.Errorf("%s: u of the difference %v by distributions, %v by first order (ratio %.4f)", x.name, *d.StandardUncertainty, pair.StandardUncertainty, ratio)
		}
		if math.Abs(*d.Mean-pair.Difference) > 0.02*pair.StandardUncertainty {
			t.Errorf("%s: difference %v by distributions, %v by first order", x.name, *d.Mean, pair.Difference)
		}
		shared := pair.StandardUncertainty / pair.RootSumOfSquares
		if shared < x.least-1e-9 || shared > x.most+1e-9 {
			t.Errorf("%s: u of the difference is %.4f of the root sum of squares, want %v to %v", x.name, shared, x.least, x.most)
		}
		// Without what is shared the trials would show it: their own root sum of squares.
		both := math.Hypot(*m.Quantities[0].StandardUncertainty, *m.Quantities[1].StandardUncertainty)
		if got := *d.StandardUncertainty / both; math.Abs(got-shared) > 0.02 {
			t.Errorf("%s: %.4f of the root sum of squares by distributions, %.4f by first order", x.name, got, shared)
		}
	}
}

// A delta that rests on a campaign's value: its chain holds the campaign's
// sessions with their stored weights, session effects, the unit and stability,
// all of variances estimated with few degrees of freedom. There Welch and
// Satterthwaite's U is too short (by a fifth here, at ν_eff 2.3), which is what
// the distributions are for; they stay symmetric about the value.
func TestPropagationFollowsACampaign(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 4)
	v := b.campaign("PEAT-LO", -28, bottles, 4, 5, 6, 7)
	sample := b.sample("Marsh survey", "A1")
	cal := b.measured(21, useAsAnchor(sample, bottles[0])...)
	rep := b.report("Marsh survey", b.final(sample))
	q := registry.PropagationRequest{Digits: 1, MaxTrials: 300_000}
	p, err := b.PropagateReported(b.ctx, b.auditor, rep.Lines[0].Code, q)
	b.must(err)
	if p.Fits != 5 || p.Generations != 1 {
		t.Errorf("%d fits and %d generations, want the session and the four of the campaign", p.Fits, p.Generations)
	}
	whole, err := b.PropagateVersion(b.ctx, b.auditor, store.KindCalibration, cal.Code, 0, q)
	b.must(err)
	if len(whole.Quantities) != len(cal.Value.Results) {
		t.Errorf("%d quantities of the calibration, want its %d results", len(whole.Quantities), len(cal.Value.Results))
	}
	value, err := b.PropagateVersion(b.ctx, b.auditor, store.KindValue, v.Code, v.Ref.Version, q)
	b.must(err)
	if value.Fits != 4 || value.Quantities[0].Name != "PEAT-LO" {
		t.Errorf("the value's chain has %d fits: %+v", value.Fits, value.Quantities[0].Name)
	}
	for _, x := range append(append(whole.Quantities, p.Quantities...), value.Quantities...) {
		k := x.Check
		if middle := (x.Low + x.High) / 2; math.Abs(middle-k.Value) > 0.04*k.FirstOrder.U {
			t.Errorf("%s: interval about %v, value %v", x.Name, middle, k.Value)
		}
		if ratio := (x.High - x.Low) / 2 / k.FirstOrder.U; !(ratio > 0.9 && ratio < 1.35) {
			t.Errorf("%s: half the interval is %.3f U, ν_eff %.3g", x.Name, ratio, k.FirstOrder.DegreesOfFreedom)
		}
	}
}

func TestPropagationRefusals(t *testing.T) {
	c := openChain(t, 1, 0.03, calib.WeightsDeclared)
	code := c.reports[0].Lines[0].Code
	large := uint64(registry.MaxSeed) + 1
	for name, q := range map[string]registry.PropagationRequest{
		"seed": {Seed: &large}, "probability": {Probability: 1}, "max_trials": {MaxTrials: registry.MaxPropagationTrials + 1}, "digits": {Digits: 3},
	} {
		_, err := c.PropagateReported(c.ctx, c.auditor, code, q)
		refused, ok := err.(*registry.Error)
		if !ok || refused.Meaning != registry.Invalid || len(refused.Complaints) != 1 || refused.Complaints[0].Place != "body."+name {
			t.Errorf("%s: error %v", name, err)
		}
	}
	if _, err := c.PropagateReported(c.ctx, c.auditor, "D0000000", registry.PropagationRequest{}); registry.MeaningOf(err) != registry.NotFound {
		t.Errorf("an unknown delta: error %v", err)
	}
	if _, err := c.PropagateVersion(c.ctx, c.auditor, store.KindSample, c.samples[0], 0, registry.PropagationRequest{}); registry.MeaningOf(err) != registry.Invalid {
		t.Errorf("a sample: error %v", err)
	}
	if _, err := c.PropagateComparison(c.ctx, c.auditor, []string{code}, registry.PropagationRequest{}); registry.MeaningOf(err) != registry.Invalid {
		t.Errorf("one delta to compare: error %v", err)
	}
}
