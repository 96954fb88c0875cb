package assign

import (
	"errors"
	"math"
	"math/rand/v2"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/calib/uncertain"
)

func planned(t testing.TB) Plan {
	anchor := func(name string, value, u float64) PlannedAnchor {
		return PlannedAnchor{Name: name, Value: number(t, value, source("anchor:"+name+".1", uncertain.KindAnchor, u, 1))}
	}
	return Plan{
		Candidate: -20, Sessions: 6, Replicates: 4,
		Anchors: []PlannedAnchor{anchor("LOW", -40, 0.04), anchor("HIGH", 0, 0.03)}, AnchorReplicates: 5,
		Offered:       []PlannedAnchor{anchor("MIDDLE", -21, 0.02)},
		Repeatability: 0.06, BetweenSession: 0.05,
		Units: 10, UnitMeasurements: 2, BetweenUnit: 0.02,
		StabilityTimes: []float64{0, 6, 12, 24}, StabilityMeasurements: 4, ShelfLife: 36,
	}
}

func evaluate(t testing.TB, p Plan) *Prospect {
	t.Helper()
	out, err := Evaluate(p)
	if err != nil {
		t.Fatal(err)
	}
	return out
}

func TestPlanAddsItsPartsAsTheDecisionWill(t *testing.T) {
	p := planned(t)
	r := evaluate(t, p)
	// Half way between two anchors: c = ½ each.
	near(t, "c", r.AnchorSensitivities[0], 0.5, 1e-14)
	near(t, "anchors", r.AnchorUncertainty, 0.5*math.Hypot(0.04, 0.03), 1e-13)
	near(t, "sessions", r.SessionUncertainty, math.Sqrt((0.0036/4+0.0036*0.5/5+0.0025)/6), 1e-13)
	near(t, "homogeneity: the floor is larger than 0.02", r.HomogeneityUncertainty, 0.06/math.Sqrt2*math.Pow(2.0/10, 0.25), 1e-13)
	// Times 0, 6, 12, 24: Σ(t − 10.5)² = 315, four of each.
	near(t, "stability", r.StabilityUncertainty, 36*math.Sqrt(0.0036+0.0004)/math.Sqrt(315*4), 1e-13)
	sum := r.SessionUncertainty*r.SessionUncertainty + r.AnchorUncertainty*r.AnchorUncertainty + r.HomogeneityUncertainty*r.HomogeneityUncertainty + r.StabilityUncertainty*r.StabilityUncertainty
	near(t, "u²", r.StandardUncertainty*r.StandardUncertainty, sum, 1e-12)
	p.Sessions = 100000
	if many := evaluate(t, p); math.Abs(many.StandardUncertainty-r.Unreduced) > 1e-5 {
		t.Errorf("u of very many sessions %g, said to end at %g", many.StandardUncertainty, r.Unreduced)
	}
}

// A plan evaluated by formula and the same plan run through the whole chain.
func TestPlanByFormulaAgreesWithItsSimulation(t *testing.T) {
	p := planned(t)
	p.Units, p.BetweenUnit = 20, 0.08 // well above the floor
	p.BetweenSession = 0.10
	p.Sessions = 12
	want := evaluate(t, p)
	got, err := Simulate(p, 1500, rand.New(rand.NewPCG(4, 4)))
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("formula u %.4f U %.4f; simulated median u %.4f U %.4f (5 %% %.4f, 95 %% %.4f); coverage %.3f and %.3f", want.StandardUncertainty, want.Expanded.U, got.MedianU1, got.MedianU, got.LowU, got.HighU, got.CharacterisationCoverage, got.CertificateCoverage)
	// The median of an estimated u lies a few per cent below its expectation.
	if r := got.MedianU1 / want.StandardUncertainty; r < 0.92 || r > 1.02 {
		t.Errorf("median u %.4f, formula %.4f", got.MedianU1, want.StandardUncertainty)
	}
	if r := got.MedianU / want.Expanded.U; r < 0.92 || r > 1.04 {
		t.Errorf("median U %.4f, formula %.4f", got.MedianU, want.Expanded.U)
	}
	if got.LowU >= want.Expanded.U || got.HighU <= want.Expanded.U {
		t.Errorf("formula U %.4f outside %.4f to %.4f", want.Expanded.U, got.LowU, got.HighU)
	}
	if c := got.CharacterisationCoverage; c < 0.93 || c > 0.98 { // 0.95 and a little more, ± 3·0.006
		t.Errorf("coverage of the characterisation %.3f", c)
	}
	if c := got.CertificateCoverage; c < 0.93 { // more: the value is simulated as stable, u_lts is added all the same
		t.Errorf("coverage of the certificate %.3f", c)
	}
	if got.Trends < 0.03 || got.Trends > 0.07 { // the level of the test, 5 % ± 3·0.6 %
		t.Errorf("a trend in %.3f of the studies of a stable value", got.Trends)
	}
}

func TestSimulationRepeatsItselfFromOneSeed(t *testing.T) {
	p := planned(t)
	a, err := Simulate(p, 20, rand.New(rand.NewPCG(1, 9)))
	if err != nil {
		t.Fatal(err)
	}
	b, err := Simulate(p, 20, rand.New(rand.NewPCG(1, 9)))
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(a, b); d != "" {
		t.Error(d)
	}
}

func TestOptionsNameWhatBuysTheMost(t *testing.T) {
	p := planned(t)
	p.Units, p.StabilityTimes = 0, nil
	best := func(p Plan) string {
		t.Helper()
		o, err := Options(p)
		if err != nil {
			t.Fatal(err)
		}
		for i := 1; i < len(o); i++ {
			if o[i].GainU > o[i-1].GainU {
				t.Errorf("%q before %q", o[i-1].Change, o[i].Change)
			}
		}
		for _, v := range o {
			if v.Gain < -1e-15 && v.Change != "anchor MIDDLE added" {
				t.Errorf("%s makes u larger by %g", v.Change, -v.Gain)
			}
		}
		return o[0].Change
	}
	// Few sessions that scatter: sessions. Anchors that dominate: the good anchor.
	p.Sessions, p.BetweenSession = 3, 0.2
	if got := best(p); got != "twice the sessions" {
		t.Errorf("best is %q for few, scattered sessions", got)
	}
	p.Sessions, p.BetweenSession = 40, 0.01
	for i := range p.Anchors {
		p.Anchors[i].Value.Terms[0].U = 0.2
	}
	if got := best(p); got != "anchor MIDDLE added" {
		t.Errorf("best is %q for bad anchors", got)
	}
	p = planned(t)
	p.Units, p.Sessions, p.StabilityTimes, p.BetweenUnit = 3, 40, nil, 0.3
	if got := best(p); got != "twice the units for homogeneity" {
		t.Errorf("best is %q for three units", got)
	}
}

func TestPlanUsesTheLongTermComponent(t *testing.T) {
	p := planned(t)
	p.Units, p.StabilityTimes = 0, nil
	long := uncertain.NewGroup("long_term:EA.2", 0.01, 60)
	p.LongTerm = &long
	r := evaluate(t, p)
	near(t, "sessions", r.SessionUncertainty, math.Sqrt((0.0036/4+0.0036*0.5/5+0.01)/6), 1e-12)
	if r.Expanded.DegreesOfFreedom < 60 {
		t.Errorf("ν %g", r.Expanded.DegreesOfFreedom)
	}
}

func TestPlanRefusesWhatItCannotEvaluate(t *testing.T) {
	for name, change := range map[string]func(*Plan){
		"sessions":    func(p *Plan) { p.Sessions = 0 },
		"replicates":  func(p *Plan) { p.Replicates = 0 },
		"anchors":     func(p *Plan) { p.Anchors = nil },
		"same anchor": func(p *Plan) { p.Anchors[1] = p.Anchors[0] },
		"one unit":    func(p *Plan) { p.Units = 1 },
		"single":      func(p *Plan) { p.UnitMeasurements = 1 },
		"one time":    func(p *Plan) { p.StabilityTimes = []float64{3, 3} },
		"shelf life":  func(p *Plan) { p.ShelfLife = 0 },
		"spread":      func(p *Plan) { p.Repeatability = -1 },
		"candidate":   func(p *Plan) { p.Candidate = math.NaN() },
	} {
		p := planned(t)
		change(&p)
		var refused *InputError
		if _, err := Evaluate(p); !errors.As(err, &refused) {
			t.Errorf("%s: got %v", name, err)
		}
	}
	if _, err := Simulate(planned(t), 0, rand.New(rand.NewPCG(1, 1))); err == nil {
		t.Error("no trial is accepted")
	}
	if _, err := Simulate(planned(t), 5, nil); err == nil {
		t.Error("no random source is accepted")
	}
}
