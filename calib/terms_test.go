package calib

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

func TestNaturalLogIsTheLibrarysWithinOneUnit(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for k := range 200_000 {
		x := math.Exp(40 * (r.Float64() - 0.5))
		if k%2 == 0 {
			x = 1 + 0.3*(r.Float64()-0.5)
		}
		got, want := adjust.NaturalLog(x), math.Log(x)
		if math.Abs(got-want) > 2*(math.Nextafter(math.Abs(want), math.Inf(1))-math.Abs(want)) {
			t.Fatalf("ln %v = %.17g, library %.17g", x, got, want)
		}
	}
	if adjust.NaturalLog(1) != 0 {
		t.Errorf("ln 1 = %v", adjust.NaturalLog(1))
	}
}

// Without noise every term is recovered exactly, and so is every sample.
func TestTermsAreRecovered(t *testing.T) {
	base := truth{intercept: 0.4, slope: 0.97, noise: 0, anchors: []float64{-38, -12, 4, 35}, repeats: 5, samples: 6, monitor: true, kind: SizeLinear}
	for _, c := range []struct {
		name  string
		model Model
		truth func(truth) truth
		want  map[string]float64
	}{
		{"linear drift", Model{Drift: DriftLinear}, func(w truth) truth { w.drift = 0.01; return w }, map[string]float64{"drift.linear": 0.01}},
		{"quadratic drift", Model{Drift: DriftQuadratic}, func(w truth) truth { w.drift, w.curve = 0.01, 0.002; return w }, map[string]float64{"drift.quadratic": 0.002}},
		{"size linear", Model{Size: SizeLinear}, func(w truth) truth { w.size = 0.05; return w }, map[string]float64{"size": 0.05}},
		{"size inverse", Model{Size: SizeInverse}, func(w truth) truth { w.size, w.kind = 0.3, SizeInverse; return w }, map[string]float64{"size": 0.3}},
		{"size log", Model{Size: SizeLog}, func(w truth) truth { w.size, w.kind = 0.3, SizeLog; return w }, map[string]float64{"size": 0.3}},
		{"memory", Model{Memory: MemoryCarryover}, func(w truth) truth { w.memory = 0.04; return w }, map[string]float64{"memory": 0.04, "slope": 0.97}},
		{"drift, size and memory", Model{Drift: DriftLinear, Size: SizeLinear, Memory: MemoryCarryover}, func(w truth) truth {
			w.drift, w.size, w.memory = 0.01, 0.05, 0.04
			return w
		}, map[string]float64{"memory": 0.04, "drift.linear": 0.01, "size": 0.05}},
	} {
		t.Run(c.name, func(t *testing.T) {
			s, values := c.truth(base).session(rand.New(rand.NewPCG(4, 4)))
			r := mustFit(t, s, c.model, Policy{})
			for name, want := range c.want {
				near(t, name, r.parameter(t, name).Value, want, 1e-9)
			}
			for _, x := range r.Subjects {
				near(t, x.Subject, x.Value, values[x.Subject], 1e-8)
			}
		})
	}
}

// Memory of 2 % after a material at −150: m_i = (1 − M)t_i + M·m_{i−1}, with the
// observed raw delta before. The sample's value is that of the usual example,
// −10.204082 for a measured −13, where the predecessor is taken at its true value.
func TestMemoryIsTakenOutOfASample(t *testing.T) {
	mu := 0.02
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -150, 0), assigned("B", 10, 0)}
	before := 0.0
	put := func(subject string, role Role, value float64) float64 {
		raw := (1-mu)*value + mu*before
		s.read(subject, role, raw, 0.01).at(float64(len(s.Readings)))
		before = raw
		return raw
	}
	put("X", Conditioning, 0)
	for range 3 {
		put("A", Anchor, -150)
		put("A", Anchor, -150)
		put("B", Anchor, 10)
		put("B", Anchor, 10)
	}
	put("A", Anchor, -150)
	put("S", Sample, -10.204082)
	r := mustFit(t, s, Model{Memory: MemoryCarryover}, Policy{})
	near(t, "memory", r.parameter(t, "memory").Value, mu, 1e-12)
	near(t, "sample", r.Subjects[0].Value, -10.204082, 1e-9)
	x := r.Subjects[0]
	near(t, "coefficient of its own reading", x.Coefficients[0], 1/(1-mu), 1e-9)
	if len(x.OtherReadings) != 1 || x.OtherReadings[0] != len(s.Readings)-2 {
		t.Fatalf("other readings %v, want the one before", x.OtherReadings)
	}
	near(t, "coefficient of the reading before", x.OtherCoefficients[0], -mu/(1-mu), 1e-9)
}

// Memory's rules: samples, controls, excluded and conditioning readings are
// predecessors, gas and blanks are not; a declared previous stands in.
func TestPredecessors(t *testing.T) {
	r := rand.New(rand.NewPCG(6, 6))
	w := truth{intercept: 0.4, slope: 0.97, memory: 0.03, noise: 0, anchors: []float64{-38, 4, 35}, repeats: 5, samples: 5}
	s, values := w.session(r)
	m := Model{Memory: MemoryCarryover}
	want := mustFit(t, s, m, Policy{})
	near(t, "memory", want.parameter(t, "memory").Value, 0.03, 1e-10)
	if f := want.flagged("no_predecessor"); f == nil || !slices.Equal(f.Readings, []int{0}) {
		t.Errorf("the first reading: %+v, want it flagged", f)
	}
	// An excluded reading stays a predecessor.
	excluded := s
	excluded.Readings = slices.Clone(s.Readings)
	excluded.Readings[4].Excluded = true
	near(t, "memory with an exclusion", mustFit(t, excluded, m, Policy{}).parameter(t, "memory").Value, 0.03, 1e-10)
	// A gas pulse between two readings is no predecessor.
	gas := s
	gas.Readings = slices.Clone(s.Readings)
	gas.read("REF", Gas, 1000, 0.1).at(3.5)
	near(t, "memory with a pulse", mustFit(t, gas, m, Policy{}).parameter(t, "memory").Value, 0.03, 1e-10)
	// A conditioning reading is: the one after it no longer fits.
	conditioned := s
	conditioned.Readings = slices.Clone(s.Readings)
	conditioned.read("X", Conditioning, 1000, 0.1).at(3.5)
	if v := mustFit(t, conditioned, m, Policy{}).parameter(t, "memory").Value; math.Abs(v-0.03) < 1e-3 {
		t.Errorf("memory %v although an invented reading came between", v)
	}
	// A declared previous makes the first reading usable.
	declared := s
	declared.Readings = slices.Clone(s.Readings)
	zero := 0.0
	declared.Readings[0].Previous = &zero
	d := mustFit(t, declared, m, Policy{})
	if d.flagged("no_predecessor") != nil || d.DegreesOfFreedom != want.DegreesOfFreedom+1 {
		t.Errorf("with a declared previous: ν = %d, was %d; %v", d.DegreesOfFreedom, want.DegreesOfFreedom, d.Flags)
	}
	near(t, "sample", d.Subjects[0].Value, values[d.Subjects[0].Subject], 1e-9)
}

// A constant blank acts in proportion to the difference from it
// (r = (1 − b/s)f + (b/s)r_b): 0.05 V at −27 shifts +36 by 3 ‰ at 1 V and −26
// by 0.05; the mixing form finds both numbers and every sample.
func TestBlankIsFoundAndTakenOut(t *testing.T) {
	const b, rb, alpha, beta = 0.05, -27.0, 0.3, 0.98
	mixed := func(value, size float64) float64 {
		f := alpha + beta*value
		return (1-b/size)*f + b/size*rb
	}
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -26, 0.02), assigned("B", 36, 0.02), assigned("C", 5, 0.02)}
	for _, size := range []float64{0.5, 1, 2, 4} {
		for i, code := range []string{"A", "B", "C"} {
			s.read(code, Anchor, mixed([]float64{-26, 36, 5}[i], size), 0.02).sized(size)
		}
	}
	s.read("M", Monitor, mixed(12, 0.7), 0.02).sized(0.7)
	s.read("M", Monitor, mixed(12, 3), 0.02).sized(3)
	for i, size := range []float64{0.6, 1.5, 3} {
		s.read(fmt.Sprint("P", i), Sample, mixed(-10+20*float64(i), size), 0.02).sized(size)
	}
	for _, weights := range []Weights{WeightsDeclared, WeightsEqual, WeightsReplicate} {
		r := mustFit(t, s, Model{Size: SizeBlank, Weights: weights}, Policy{})
		near(t, "b", r.Blank.Size, b, 1e-7)
		near(t, "r_b", r.Blank.RawDelta, rb, 1e-4)
		for i, x := range r.Subjects {
			near(t, x.Subject, x.Value, -10+20*float64(i), 1e-7)
		}
		near(t, "level.M", r.parameter(t, "level.M").Value, r.parameter(t, "intercept").Value+12*r.parameter(t, "slope").Value, 1e-7)
	}
	// u of both by simulation.
	random := rand.New(rand.NewPCG(9, 9))
	r := mustFit(t, s, Model{Size: SizeBlank}, Policy{})
	var db, dr, n float64
	for range 1500 {
		noisy := s
		noisy.Readings = slices.Clone(s.Readings)
		noisy.Anchors = slices.Clone(s.Anchors)
		for i := range noisy.Readings {
			noisy.Readings[i].Raw += 0.02 * random.NormFloat64()
		}
		for i := range noisy.Anchors {
			noisy.Anchors[i].Value.Value += 0.02 * random.NormFloat64()
		}
		x := valuesOnly(t, noisy, Model{Size: SizeBlank})
		db += (x.Blank.Size - b) * (x.Blank.Size - b)
		dr += (x.Blank.RawDelta - rb) * (x.Blank.RawDelta - rb)
		n++
	}
	near(t, "u(b) against simulation", math.Sqrt(db/n)/r.Blank.USize, 1, 0.06)
	near(t, "u(r_b) against simulation", math.Sqrt(dr/n)/r.Blank.URawDelta, 1, 0.08)
}

// An additive 1/s term is not a blank: with sizes of one anchor only it misses
// a sample of another delta by permils, which is why blank exists.
func TestAdditiveSizeTermMissesABlank(t *testing.T) {
	const b = 0.4 // of 20 nmol, at 0 ‰: practice 2
	mixed := func(value, size float64) float64 { return (1 - b/size) * value }
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -1.8, 0.02), assigned("B", 180, 0.02)}
	for _, size := range []float64{5, 10, 20, 40} {
		s.read("A", Anchor, mixed(-1.8, size), 0.02).sized(size)
	}
	s.read("B", Anchor, mixed(180, 20), 0.02).sized(20)
	s.read("B", Anchor, mixed(180, 10), 0.02).sized(10)
	s.read("P", Sample, mixed(100, 10), 0.02).sized(10)
	exact := mustFit(t, s, Model{Size: SizeBlank}, Policy{})
	near(t, "sample by the mixing form", exact.Subjects[0].Value, 100, 1e-7)
	additive := mustFit(t, s, Model{Size: SizeInverse}, Policy{})
	if d := math.Abs(additive.Subjects[0].Value - 100); d < 0.5 {
		t.Errorf("the additive term is off by %v only", d)
	}
}

func TestBlankNeedsTwoMaterialsAtDifferentSizes(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -26, 0.02), assigned("B", 36, 0.02), assigned("C", 5, 0.02)}
	for _, size := range []float64{0.5, 1, 2, 4} {
		s.read("A", Anchor, -26+0.1/size, 0.02).sized(size)
	}
	for range 4 {
		s.read("B", Anchor, 36, 0.02).sized(2)
		s.read("C", Anchor, 5, 0.02).sized(2)
	}
	var refused *NotEstimableError
	for _, w := range []Weights{WeightsDeclared, WeightsEqual, WeightsReplicate} {
		if _, err := Fit(s, Model{Size: SizeBlank, Weights: w}, Policy{}); !errors.As(err, &refused) {
			t.Errorf("weights %s: error %v, want a NotEstimableError", w, err)
		}
	}
}

// Bracketed drift of sessions where every fitted reading sits in a group is
// the classic interpolation between the groups' means.
func TestBracketedDriftIsInterpolationBetweenGroups(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -30, 0), assigned("B", 20, 0)}
	drift := []float64{0, 0.3, 0.1, 0.5} // at hours 0.5, 10.5, 20.5, 30.5
	at := func(time float64) float64 {
		x := (time - 0.5) / 10
		switch {
		case x <= 0:
			return drift[0]
		case x >= 3:
			return drift[3]
		}
		k := int(x)
		return drift[k] + (x-float64(k))*(drift[k+1]-drift[k])
	}
	for g := range 4 {
		t0 := 10 * float64(g)
		// A pair symmetric about the group's mean time, both at the node's drift.
		s.read("A", Anchor, 1+0.98*-30+drift[g], 0.05).at(t0 + 0.5)
		s.read("B", Anchor, 1+0.98*20+drift[g], 0.05).at(t0 + 0.5)
		if g < 3 {
			s.read("REF", Gas, 0, 0.05).at(t0 + 1)
			for k, dt := range []float64{3, 5.5, 8} {
				s.read(fmt.Sprintf("P%d%d", g, k), Sample, 1+0.98*-5+at(t0+dt), 0.05).at(t0 + dt)
			}
		}
	}
	s.read("LATE", Sample, 1+0.98*-5+drift[3], 0.05).at(33)
	r := mustFit(t, s, Model{Drift: DriftBracketed}, Policy{})
	var mean float64
	for _, d := range drift {
		mean += d / 4
	}
	var sum float64
	for j, d := range drift {
		v := r.parameter(t, fmt.Sprintf("drift.node.%d", j+1)).Value
		near(t, fmt.Sprint("node ", j+1), v, d-mean, 1e-12)
		sum += v
	}
	near(t, "sum of nodes", sum, 0, 1e-14)
	for _, x := range r.Subjects {
		near(t, x.Subject, x.Value, -5, 1e-11)
	}
	if f := r.flagged("unbracketed"); f == nil || !slices.Equal(f.Readings, []int{len(s.Readings) - 1}) {
		t.Errorf("the late sample: %+v", f)
	}
	// The nodes' covariance has rank N − 1: their sum is known.
	var v float64
	for i := range 4 {
		for j := range 4 {
			v += r.Covariance[2+i][2+j]
		}
	}
	near(t, "variance of the sum of nodes", v, 0, 1e-17)
}

// Groups are runs of monitor readings where there are monitors; anchors
// between nodes then inform the nodes too.
func TestBracketsAreMonitorsWhereThereAreAny(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 9))
	s, values := truth{intercept: 0.4, slope: 0.97, drift: 0.01, noise: 0, anchors: []float64{-38, -12, 4, 35}, repeats: 6, samples: 12, monitor: true}.session(r)
	fit := mustFit(t, s, Model{Drift: DriftBracketed}, Policy{})
	nodes := 0
	for _, p := range fit.Parameters {
		if len(p.Name) > 11 && p.Name[:11] == "drift.node." {
			nodes++
		}
	}
	if nodes != 6 { // one monitor a round, anchors and samples between
		t.Errorf("%d nodes, want 6", nodes)
	}
	for _, x := range fit.Subjects {
		inside := *s.Readings[x.Readings[0]].Time
		if inside > fit.calibrated.time.nodes[0] && inside < fit.calibrated.time.nodes[5] {
			// The anchors outside the end nodes see a drift that the term holds
			// constant there: a little is left.
			near(t, x.Subject, x.Value, values[x.Subject], 0.05)
		}
	}
}

// The ratio form, not an additive shift: 1.8 ‰ apart over 60 ‰ at a working
// gas of 30 ‰ (metrology 2).
func TestSingleAnchorIsInRatioForm(t *testing.T) {
	gas := 30.0
	raw := func(value float64) float64 { return ((1+value/1000)/(1+gas/1000) - 1) * 1000 }
	var s Session
	s.Anchors = []AssignedValue{assigned("A", 10, 0.1)}
	s.read("A", Anchor, raw(10), 0.05)
	s.read("P", Sample, raw(-50), 0.05)
	r := mustFit(t, s, Model{AllowSingleAnchor: true}, Policy{})
	near(t, "value", r.Subjects[0].Value, -50, 1e-10)
	near(t, "slope", r.parameter(t, "slope").Value, 1/1.03, 1e-13)
	shift := raw(-50) + 10 - raw(10)
	near(t, "an additive shift", shift-(-50), 1.747, 0.001) // 60·(1 − 1/1.03)
	// u by the law of propagation: δ = (1000 + r)(1000 + y)/(1000 + r_A) − 1000.
	ratio := (1000 + raw(-50)) / (1000 + raw(10))
	dA := ratio * (1000 + 10.0) / (1000 + raw(10))
	dr := (1000 + 10.0) / (1000 + raw(10))
	u := math.Sqrt(math.Pow(ratio*0.1, 2) + math.Pow(dA*0.05, 2) + math.Pow(dr*0.05, 2))
	near(t, "u", r.Subjects[0].StandardUncertainty, u, 1e-9)
	if f := r.flagged("single_anchor"); f == nil || f.Severity != Serious {
		t.Errorf("flag %+v", f)
	}
}

// An anchor that is monitor too is an anchor; its control readings stay out.
func TestRolesOfOneMaterial(t *testing.T) {
	s := plain()
	s.read("A", Monitor, -30.02, 0.05).at(3).sized(5)
	r := mustFit(t, s, Model{}, Policy{})
	if len(r.Parameters) != 2 || r.DegreesOfFreedom != 5 {
		t.Errorf("anchor and monitor: %d parameters, ν = %d, want the reading with its anchor", len(r.Parameters), r.DegreesOfFreedom)
	}
	s.read("A", Control, -29, 0.05).at(3.5).sized(5)
	again := mustFit(t, s, Model{}, Policy{})
	near(t, "slope", again.parameter(t, "slope").Value, r.parameter(t, "slope").Value, 0)
	f := again.flagged("anchor_is_control")
	if f == nil || !slices.Equal(f.Readings, []int{8}) {
		t.Errorf("flag %+v", f)
	}
}

func TestSampleAndMaterialOfOneCodeAreTwo(t *testing.T) {
	s := plain()
	s.read("A", Sample, -12, 0.05).at(3).sized(5)
	s.read("X", Control, 3, 0.05).at(3.2).sized(5)
	s.read("X", Sample, 5, 0.05).at(3.4).sized(5)
	p := Policy{BetweenSession: BetweenSession{StandardUncertainty: 0.05, Session: "S-1", Scale: "d13C-VPDB"}}
	r := mustFit(t, s, Model{}, p)
	if len(r.Subjects) != 4 {
		t.Fatalf("subjects %v", r.Subjects)
	}
	ids := map[string]bool{}
	for i := range r.Subjects {
		for _, c := range r.Subjects[i].Sources {
			if c.Kind == "between_session" {
				ids[c.ID] = true
			}
		}
	}
	if len(ids) != 4 {
		t.Errorf("between-session sources %v, want four", ids)
	}
	p.BetweenSession.Common = true
	r = mustFit(t, s, Model{}, p)
	a, b := r.Number(0), r.Number(1)
	near(t, "common effect", a.Terms[slices.IndexFunc(a.Terms, isBetween)].U, b.Terms[slices.IndexFunc(b.Terms, isBetween)].U, 0)
	if a.Terms[slices.IndexFunc(a.Terms, isBetween)].ID != "between_session:S-1/d13C-VPDB" {
		t.Errorf("common source %v", a.Terms[slices.IndexFunc(a.Terms, isBetween)].ID)
	}
}

// A term that is there is needed; one that is not is not.
func TestNeedsOfTerms(t *testing.T) {
	w := usualTruth
	w.drift, w.size, w.noise = 0.02, 0, 0.05
	s, _ := w.session(rand.New(rand.NewPCG(12, 12)))
	need := func(r *Result, term string) *TermNeed {
		for i := range r.Needs {
			if r.Needs[i].Term == term {
				return &r.Needs[i]
			}
		}
		t.Fatalf("no test of %s among %v", term, r.Needs)
		return nil
	}
	for _, weights := range []Weights{WeightsDeclared, WeightsReplicate, WeightsEqual} {
		plainLine := mustFit(t, s, Model{Weights: weights}, Policy{})
		if n := need(plainLine, "drift"); n.Model || n.PValue > 1e-4 || (n.F == nil) != (weights == WeightsDeclared) {
			t.Errorf("%s: drift missing from the model: %+v", weights, *n)
		}
		if plainLine.flagged("term_missing") == nil {
			t.Errorf("%s: the missing drift is not flagged: %v", weights, plainLine.Flags)
		}
		drift := mustFit(t, s, Model{Drift: DriftLinear, Size: SizeLinear, Weights: weights}, Policy{})
		if n := need(drift, "drift"); !n.Model || n.PValue > 1e-4 {
			t.Errorf("%s: drift in the model: %+v", weights, *n)
		}
		n := need(drift, "size")
		if !n.Model || n.PValue < 0.001 {
			t.Errorf("%s: size, which is not there: %+v", weights, *n)
		}
		if n.AICcWith == nil || n.AICcWithout == nil || *n.AICcWithout > *n.AICcWith+5 {
			t.Errorf("%s: AICc %v with, %v without size", weights, n.AICcWith, n.AICcWithout)
		}
		if f := drift.flagged("slope_drift"); f != nil {
			t.Errorf("%s: %+v", weights, f)
		}
	}
	// With known variances Δχ² is that of two fits of one's own.
	small, large := mustFit(t, s, Model{}, Policy{}), mustFit(t, s, Model{Drift: DriftLinear}, Policy{})
	near(t, "Δχ²", need(small, "drift").DeltaChiSquare, *small.ChiSquare-*large.ChiSquare, 1e-7)
	near(t, "Δχ²", need(large, "drift").DeltaChiSquare, *small.ChiSquare-*large.ChiSquare, 1e-7)
	near(t, "AICc", *need(large, "drift").AICcWith, *large.AICc, 1e-9)
	near(t, "AICc", *need(large, "drift").AICcWithout, *small.AICc, 1e-9)
}

func TestSlopeThatChangesWithTimeIsFlagged(t *testing.T) {
	s, _ := usualTruth.session(rand.New(rand.NewPCG(13, 13)))
	for i := range s.Readings {
		rd := &s.Readings[i]
		rd.Raw += 0.0006 * (*rd.Time - 13) * rd.Raw
	}
	for _, weights := range []Weights{WeightsDeclared, WeightsReplicate} {
		if f := mustFit(t, s, Model{Drift: DriftLinear, Weights: weights}, Policy{}).flagged("slope_drift"); f == nil {
			t.Errorf("weights %s: not flagged", weights)
		}
	}
}

func isBetween(t uncertain.Term) bool { return t.Kind == uncertain.KindBetweenSession }
