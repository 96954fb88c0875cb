package montecarlo

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

func near(t testing.TB, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.10g, want %.10g (off by %.2g, allowed %.2g)", what, got, want, math.Abs(got-want), tolerance)
	}
}

func number(value float64, id string, u float64) uncertain.Number {
	return uncertain.Number{Value: value, Terms: []uncertain.Term{{Source: uncertain.Source{ID: id, Kind: uncertain.KindAnchor, U: u}, Sensitivity: 1}}}
}

func add(t testing.TB, c *Chain, n uncertain.Number) Handle {
	t.Helper()
	h, err := c.Number(n)
	if err != nil {
		t.Fatal(err)
	}
	return h
}

func run(t testing.TB, c *Chain, o Options, of ...Handle) []Outcome {
	t.Helper()
	out, err := c.Run(of, o)
	if err != nil {
		t.Fatal(err)
	}
	return out
}

// JCGM 101:2008 9.2.2 Table 2 and 9.2.3 Table 3: the sum of four inputs of unit
// standard deviation, normal (u 2.0, ±3.92) and rectangular (u 2.0, ±3.88; the
// exact end point is 3.8794, from the piecewise polynomial of the sum).
func TestAdditiveModelMatchesJCGM101(t *testing.T) {
	for _, c := range []struct {
		d    Distribution
		high float64
	}{{Normal, 3.919927968080108}, {Rectangular, 3.8794067413478207564}} {
		distributions := map[string]Distribution{}
		for i := range 4 {
			distributions[fmt.Sprint("x", i)] = c.d
		}
		chain := NewChain(nil, distributions)
		var of []Handle
		for i := range 4 {
			of = append(of, add(t, chain, number(0, fmt.Sprint("x", i), 1)))
		}
		y, err := chain.Linear(0, []float64{1, 1, 1, 1}, of)
		if err != nil {
			t.Fatal(err)
		}
		x := run(t, chain, Options{Seed: 1, MaxTrials: 3_000_000}, y)[0]
		if !x.Settled {
			t.Fatalf("%s: not settled after %d trials", c.d, x.Trials)
		}
		// Settled means known to δ/5 = 0.01 at two standard deviations.
		near(t, string(c.d)+" mean", *x.Mean, 0, 0.015)
		near(t, string(c.d)+" u", *x.StandardUncertainty, 2, 0.015)
		near(t, string(c.d)+" low", x.Low, -c.high, 0.015)
		near(t, string(c.d)+" high", x.High, c.high, 0.015)
		near(t, "δ", x.Check.Tolerance, 0.05, 1e-12) // u = 2.0 = 20·10⁻¹
	}
}

// sumOfRectangular is the distribution function of a sum of rectangular numbers
// on ±a_i, exactly: 1/(n!·Π2a_i)·Σ_s Πs_i·(x + Σs_i·a_i)₊ⁿ over all signs s.
func sumOfRectangular(x float64, a []float64) float64 {
	n := len(a)
	var sum float64
	for signs := range 1 << n {
		at, sign := x, 1.0
		for i, v := range a {
			if signs>>i&1 == 1 {
				at, sign = at-v, -sign
			} else {
				at += v
			}
		}
		if at > 0 {
			sum += sign * math.Pow(at, float64(n))
		}
	}
	for i, v := range a {
		sum /= 2 * v * float64(i+1)
	}
	return sum
}

// JCGM 101:2008 9.2.4: three rectangular inputs of unit standard deviation and
// one of 10. The interval is the exact one of the sum (the clause prints ±17.0
// beside the first order's ±19.9, from memory), the check says that the first
// order does not hold, and a sum of four equal ones has 9.2.3's end point.
func TestDominantRectangularInputMatchesJCGM101(t *testing.T) {
	unit := math.Sqrt(3)
	equal := []float64{unit, unit, unit, unit}
	near(t, "9.2.3's end point by the exact sum", quantileOf(func(x float64) float64 { return sumOfRectangular(x, equal) }, 0.975, 0, 7), 3.8794067413478207564, 1e-9)
	distributions := map[string]Distribution{}
	for i := range 4 {
		distributions[fmt.Sprint("x", i)] = Rectangular
	}
	chain := NewChain(nil, distributions)
	var of []Handle
	for i := range 4 {
		u := 1.0
		if i == 3 {
			u = 10
		}
		of = append(of, add(t, chain, number(0, fmt.Sprint("x", i), u)))
	}
	y, err := chain.Linear(0, []float64{1, 1, 1, 1}, of)
	if err != nil {
		t.Fatal(err)
	}
	x := run(t, chain, Options{Seed: 6, MaxTrials: 3_000_000}, y)[0]
	high := quantileOf(func(x float64) float64 { return sumOfRectangular(x, []float64{unit, unit, unit, 10 * unit}) }, 0.975, 0, 30)
	near(t, "the clause's interval, from memory", high, 17.0, 0.05)
	near(t, "first order, from memory", x.Check.FirstOrder.U, 19.9, 0.05)
	// δ = ½·10⁰ for u = 10 (two digits); settled is known to δ/5.
	near(t, "δ", x.Check.Tolerance, 0.5, 1e-12)
	if !x.Settled || x.Check.Valid {
		t.Errorf("settled %v, valid %v; want settled and not valid", x.Settled, x.Check.Valid)
	}
	near(t, "low", x.Low, -high, 0.1)
	near(t, "high", x.High, high, 0.1)
	near(t, "u", *x.StandardUncertainty, math.Sqrt(103), 0.1)
}

func TestToleranceIsHalfTheSecondDigit(t *testing.T) {
	for u, want := range map[float64]float64{2.0: 0.5, 0.0432: 0.005, 0.096: 0.05, 9.6: 5, 43: 5, 0: 0} {
		near(t, fmt.Sprint("δ of one digit of ", u), Tolerance(u, 1), want, 1e-12*want)
	}
	for u, want := range map[float64]float64{2.0: 0.05, 0.0432: 0.0005, 0.0999: 0.005, 9.96: 0.5, 43: 0.5, 120: 5, 0: 0} {
		near(t, fmt.Sprint("δ of ", u), Tolerance(u, 2), want, 1e-12*want)
	}
}

// Every layer of the ziggurat has the area of the base with its tail, the last
// ends at height 1, and heights and steps belong to the edges.
func TestZigguratLayersHaveEqualAreas(t *testing.T) {
	r := zigguratEdges[1]
	area := r*math.Exp(-r*r/2) + math.Sqrt(math.Pi/2)*math.Erfc(r/math.Sqrt2)
	for i := range 256 {
		if i > 0 {
			near(t, fmt.Sprint("area of layer ", i), zigguratEdges[i]*(zigguratHeights[i+1]-zigguratHeights[i]), area, 1e-15)
		}
		if got := zigguratEdges[i] / (1 << 52); zigguratSteps[i] != got {
			t.Errorf("step %d = %v, want %v", i, zigguratSteps[i], got)
		}
	}
	near(t, "base", zigguratEdges[0]*math.Exp(-r*r/2), area, 1e-15)
	for i, x := range zigguratEdges {
		near(t, fmt.Sprint("height ", i), zigguratHeights[i], math.Exp(-x*x/2), 1e-15)
	}
	near(t, "top", zigguratHeights[256], 1, 0)
}

// The draws have the normal distribution function: of a million, the largest
// distance (Kolmogorov–Smirnov) is below 1.63/√n but for 1 % of seeds (Stephens
// 1974, doi:10.1080/01621459.1974.10480196), and the tail beyond the base and
// both sides have their share.
func TestNormalDraws(t *testing.T) {
	const n = 1_000_000
	s := newStream(7, 9)
	values := make([]float64, n)
	s.normals(values)
	slices.Sort(values)
	var worst float64
	beyond := 0
	for i, x := range values {
		f := distuv.UnitNormal.CDF(x)
		worst = max(worst, math.Abs(f-float64(i)/n), math.Abs(f-float64(i+1)/n))
		if math.Abs(x) > zigguratEdges[1] {
			beyond++
		}
	}
	if worst > 1.63/math.Sqrt(n) {
		t.Errorf("distance %.3g from the normal distribution, allowed %.3g", worst, 1.63/math.Sqrt(n))
	}
	share := n * 2 * distuv.UnitNormal.CDF(-zigguratEdges[1])
	near(t, "draws in the tail", float64(beyond), share, 3*math.Sqrt(share))
}

// One at a time and many at once are the same draws.
func TestNormalsAreTheSameOneByOne(t *testing.T) {
	a, b := newStream(1, 2), newStream(1, 2)
	many := make([]float64, 10_000)
	a.normals(many)
	for i, x := range many {
		if y := b.normal(); x != y {
			t.Fatalf("draw %d: %v and %v", i, x, y)
		}
	}
}

func TestExpIsTheLibrarys(t *testing.T) {
	for x := 0.0; x > -700; x = 1.1*x - 0.01 {
		near(t, fmt.Sprint("exp ", x), exp(x), math.Exp(x), 1e-12*math.Exp(x))
	}
}

// Mean ν and variance 2ν, and the distribution function at the quartiles.
func TestChiSquareDraws(t *testing.T) {
	for _, nu := range []float64{0.7, 1, 2.5, 9, 60} {
		s := newStream(3, 4)
		const n = 40_000
		var mean, square, below float64
		median := distuv.ChiSquared{K: nu}.Quantile(0.5)
		for range n {
			v := s.chiSquare(nu)
			mean += v / n
			square += v * v / n
			if v < median {
				below++
			}
		}
		near(t, fmt.Sprint("mean, ν = ", nu), mean, nu, 4*math.Sqrt(2*nu/n))
		near(t, fmt.Sprint("variance, ν = ", nu), square-mean*mean, 2*nu, 0.06*2*nu)
		near(t, fmt.Sprint("half below the median, ν = ", nu), below/n, 0.5, 4*0.5/math.Sqrt(n))
	}
}

// A source of ν degrees of freedom is Student's t: the end points are t·u, u of
// the trials is larger by √(ν/(ν−2)), and undefined for ν ≤ 2.
func TestSourceWithDegreesOfFreedomIsStudents(t *testing.T) {
	for _, nu := range []float64{2, 5, 12} {
		g := uncertain.NewGroup("g", 0.04, nu)
		n := uncertain.Number{Terms: []uncertain.Term{{Source: uncertain.Source{ID: "a", U: 0.2, Group: "g"}, Sensitivity: 1}}}
		chain := NewChain([]uncertain.Group{g}, nil)
		x := run(t, chain, Options{Seed: 5, MaxTrials: 200_000}, add(t, chain, n))[0]
		k := uncertain.CoverageFactor(0.95, nu)
		near(t, fmt.Sprint("high, ν = ", nu), x.High, 0.2*k, 0.02*0.2*k)
		if nu <= 2 {
			if x.StandardUncertainty != nil {
				t.Errorf("ν = %v: u %v, want undefined", nu, *x.StandardUncertainty)
			}
			continue
		}
		near(t, fmt.Sprint("u, ν = ", nu), *x.StandardUncertainty, 0.2*math.Sqrt(nu/(nu-2)), 0.02*0.2*math.Sqrt(nu/(nu-2)))
	}
}

// session is three anchors read three times and two samples, with the given
// anchor numbers; ids tells sessions apart.
func session(ids string, anchors []calib.AssignedValue, seed uint64) calib.Session {
	r := rand.New(rand.NewPCG(seed, 1))
	s := calib.Session{Anchors: anchors, NoiseGroup: "fit:" + ids}
	put := func(subject string, role calib.Role, value float64) {
		u, time, size := 0.05, float64(len(s.Readings)), 3+float64(2*r.Float64())
		s.Readings = append(s.Readings, calib.Reading{
			ID: fmt.Sprintf("%s/%d", ids, len(s.Readings)+1), Subject: subject, Role: role, Time: &time, Size: &size, StandardUncertainty: &u,
			Raw: 0.3 + float64(0.98*value) + float64(0.05*r.NormFloat64()),
		})
	}
	for range 3 {
		for _, a := range anchors {
			put(a.Material, calib.Anchor, a.Value.Value)
		}
		put("P1", calib.Sample, -12)
		put("P2", calib.Sample, 3)
	}
	return s
}

func outside() []calib.AssignedValue {
	var out []calib.AssignedValue
	for i, v := range []float64{-35, -10, 20} {
		code := fmt.Sprint("A", i)
		out = append(out, calib.AssignedValue{Material: code, Value: number(v, "anchor:"+code, 0.04)})
	}
	return out
}

func fit(t testing.TB, s calib.Session, m calib.Model) *calib.Result {
	t.Helper()
	r, err := calib.Fit(s, m, calib.Policy{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

var models = []calib.Model{
	{}, {Weights: calib.WeightsReplicate}, {Drift: calib.DriftLinear, Weights: calib.WeightsEqual}, {Memory: calib.MemoryCarryover}, {Drift: calib.DriftBracketed, Size: calib.SizeLinear},
}

// mixture is the distribution function of a·Z + b·T with Z normal and T
// Student's t of ν degrees of freedom, by quadrature: what a linear fit with one
// estimated variance has.
func mixture(x, a, b, nu float64) float64 {
	t := distuv.StudentsT{Sigma: 1, Nu: nu}
	var sum float64
	const n = 4000
	for k := range n {
		sum += distuv.UnitNormal.CDF((x-b*t.Quantile((float64(k)+0.5)/n))/a) / n
	}
	return sum
}

// quantileOf inverts a rising function by bisection.
func quantileOf(f func(float64) float64, p, low, high float64) float64 {
	for range 60 {
		if mid := (low + high) / 2; f(mid) < p {
			low = mid
		} else {
			high = mid
		}
	}
	return (low + high) / 2
}

// For an ordinary session, whatever its terms, the interval is that of the
// first order: normal where variances are known, a mixture of normal and t
// where one is estimated. Welch and Satterthwaite's k is an approximation to
// the latter, so only the former need be valid to two digits.
func TestOrdinarySessionsHaveFirstOrderIntervals(t *testing.T) {
	for _, m := range models {
		r := fit(t, session("S-1", outside(), 3), m)
		chain := NewChain(nil, nil)
		of, err := chain.Fit(r, nil)
		if err != nil {
			t.Fatal(err)
		}
		for i, x := range run(t, chain, Options{Seed: 7, MaxTrials: 300_000}, of...) {
			what := fmt.Sprintf("%+v %s", m, r.Subjects[i].Subject)
			u := r.Subjects[i].StandardUncertainty
			half := x.Check.FirstOrder.U
			if r.Variances != nil {
				var known, estimated float64
				for _, s := range r.Number(i).Terms {
					if v := s.Sensitivity * s.Sensitivity * s.U * s.U; s.Group == "" {
						known += v
					} else {
						estimated += v
					}
				}
				nu := r.Variances[0].DegreesOfFreedom
				half = quantileOf(func(v float64) float64 {
					return mixture(v, math.Sqrt(known), math.Sqrt(estimated), nu)
				}, 0.975, 0, 10*u)
				near(t, what+": Welch–Satterthwaite", x.Check.FirstOrder.U, half, 0.1*half)
			}
			// Three standard deviations of an end point of that many trials, whose
			// density there is φ(1.96)/u, and δ for what is not linear.
			allowed := x.Check.Tolerance + 3*math.Sqrt(0.025*0.975/float64(x.Trials))*u/0.05845
			near(t, what+" mean", *x.Mean, r.Subjects[i].Value, allowed)
			near(t, what+" low", x.Low, r.Subjects[i].Value-half, allowed)
			near(t, what+" high", x.High, r.Subjects[i].Value+half, allowed)
		}
	}
}

// Without any draw a refit is the fit.
func TestRefitAtRestIsTheFit(t *testing.T) {
	for _, m := range append(models, calib.Model{Size: calib.SizeBlank}) {
		s := session("S-1", outside(), 3)
		r := fit(t, s, m)
		f, err := r.Refitter()
		if err != nil {
			t.Fatal(err)
		}
		_, n := f.Noise()
		if err := f.Solve(make([]float64, n), make([]float64, len(s.Anchors)), nil); err != nil {
			t.Fatal(err)
		}
		for i, x := range r.Subjects {
			near(t, fmt.Sprintf("%+v %s", m, x.Subject), f.Value(i), x.Value, 1e-9)
		}
	}
}

// Small moves of readings and anchors do to a refit what the number's
// sensitivities say.
func TestRefitMovesByTheSensitivities(t *testing.T) {
	for _, m := range models {
		s := session("S-1", outside(), 3)
		r := fit(t, s, m)
		f, err := r.Refitter()
		if err != nil {
			t.Fatal(err)
		}
		terms, n := f.Noise()
		numbers := r.Number(0)
		sensitivity := map[string]float64{}
		for _, x := range numbers.Terms {
			sensitivity[x.ID] = x.Sensitivity
		}
		const h = 1e-3
		for _, x := range terms {
			noise := make([]float64, n)
			noise[x.Reading] = h * x.Sensitivity
			if err := f.Solve(noise, make([]float64, len(s.Anchors)), nil); err != nil {
				t.Fatal(err)
			}
			near(t, fmt.Sprintf("%+v %s", m, x.ID), (f.Value(0)-r.Subjects[0].Value)/h, sensitivity[x.ID], 2e-3)
		}
		for k, a := range s.Anchors {
			moved := make([]float64, len(s.Anchors))
			moved[k] = h
			if err := f.Solve(make([]float64, n), moved, nil); err != nil {
				t.Fatal(err)
			}
			near(t, fmt.Sprintf("%+v %s", m, a.Material), (f.Value(0)-r.Subjects[0].Value)/h, sensitivity["anchor:"+a.Material], 2e-3)
		}
	}
}

// Three generations: two sessions give a working standard its value, with a
// unit's inhomogeneity; it is an anchor of a third; u of the last result and of
// a difference that shares everything with it agree with the first order.
func TestThreeGenerations(t *testing.T) {
	chain, last, first := threeGenerations(t)
	out := run(t, chain, Options{Seed: 11, MaxTrials: 400_000}, last, first)
	for i, x := range out {
		if !x.Check.Valid {
			t.Errorf("quantity %d: differences %.3g and %.3g, δ %.3g, %d trials", i, x.Check.LowDifference, x.Check.HighDifference, x.Check.Tolerance, x.Trials)
		}
	}
}

func threeGenerations(t testing.TB) (c *Chain, last, difference Handle) {
	t.Helper()
	chain := NewChain(nil, nil)
	must := func(h Handle, err error) Handle {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
		return h
	}
	outer := outside()
	var anchors []Handle
	for _, a := range outer {
		anchors = append(anchors, add(t, chain, a.Value))
	}
	one, two := fit(t, session("S-1", outer, 3), calib.Model{}), fit(t, session("S-2", outer, 4), calib.Model{Drift: calib.DriftLinear})
	a, err := chain.Fit(one, anchors)
	if err != nil {
		t.Fatal(err)
	}
	b, err := chain.Fit(two, anchors)
	if err != nil {
		t.Fatal(err)
	}
	unit := uncertain.Term{Source: uncertain.Source{ID: "unit:B-1", Kind: uncertain.KindUnit, U: 0.02}, Sensitivity: 1}
	standard := must(chain.Linear(0, []float64{0.5, 0.5}, []Handle{a[0], b[0]}, unit))
	extra, err := uncertain.New(0, unit)
	if err != nil {
		t.Fatal(err)
	}
	value, err := uncertain.Linear(0, []float64{0.5, 0.5, 1}, []uncertain.Number{one.Number(0), two.Number(0), extra})
	if err != nil {
		t.Fatal(err)
	}
	inner := append(outer[:1:1], calib.AssignedValue{Material: "W", Value: value}, outer[2])
	third := session("S-3", inner, 5)
	// Groups of the sessions that W rests on.
	third.Groups = append(one.Groups(), two.Groups()...)
	three, err := calib.Fit(third, calib.Model{}, calib.Policy{})
	if err != nil {
		t.Fatal(err)
	}
	c3, err := chain.Fit(three, []Handle{anchors[0], standard, anchors[2]})
	if err != nil {
		t.Fatal(err)
	}
	return chain, c3[1], must(chain.Linear(0, []float64{1, -1}, []Handle{c3[0], standard}))
}

// Draws do not depend on how many run at once, and the same seed is the same
// answer.
func TestAnswerDependsOnTheSeedAlone(t *testing.T) {
	answer := func(workers int, seed uint64) []Outcome {
		chain, last, difference := threeGenerations(t)
		return run(t, chain, Options{Seed: seed, Workers: workers, MaxTrials: 60_000}, last, difference)
	}
	one := answer(1, 42)
	for _, workers := range []int{2, 3, 7} {
		if diff := cmp.Diff(one, answer(workers, 42)); diff != "" {
			t.Errorf("%d workers (-one +many):\n%s", workers, diff)
		}
	}
	if cmp.Equal(one, answer(1, 43)) {
		t.Error("another seed gives the same trials")
	}
}

// A slope that is hardly known cannot be inverted to first order, and the
// check says so.
func TestWeakSlopeIsFoundOut(t *testing.T) {
	s := calib.Session{}
	for i, v := range []float64{0, 1} {
		code := fmt.Sprint("A", i)
		s.Anchors = append(s.Anchors, calib.AssignedValue{Material: code, Value: uncertain.Exact(v)})
		u := 0.15
		s.Readings = append(s.Readings, calib.Reading{ID: fmt.Sprint("S/", i+1), Subject: code, Role: calib.Anchor, Raw: v, StandardUncertainty: &u})
	}
	u := 0.01
	s.Readings = append(s.Readings, calib.Reading{ID: "S/9", Subject: "P", Role: calib.Sample, Raw: 4, StandardUncertainty: &u})
	chain := NewChain(nil, nil)
	of, err := chain.Fit(fit(t, s, calib.Model{}), nil)
	if err != nil {
		t.Fatal(err)
	}
	x := run(t, chain, Options{Seed: 2, MaxTrials: 100_000}, of...)[0]
	if x.Check.Valid {
		t.Errorf("4 by a slope of 1 ± 0.21: %+v, want it not valid", x.Check)
	}
	if !(x.Check.HighDifference > x.Check.Tolerance) {
		t.Errorf("%+v: the upper end is where it fails", x.Check)
	}
}

func TestRefusals(t *testing.T) {
	var refused *ChainError
	chain := NewChain(nil, map[string]Distribution{"a": "cauchy"})
	if _, err := chain.Number(number(0, "a", 1)); !errors.As(err, &refused) {
		t.Errorf("an unknown distribution: error %v", err)
	}
	chain = NewChain(nil, nil)
	h := add(t, chain, number(0, "a", 1))
	if _, err := chain.Linear(0, []float64{1}, nil); !errors.As(err, &refused) {
		t.Errorf("a coefficient without quantity: error %v", err)
	}
	if _, err := chain.Linear(0, []float64{1}, []Handle{9}); !errors.As(err, &refused) {
		t.Errorf("a foreign quantity: error %v", err)
	}
	if _, err := chain.Run([]Handle{h}, Options{Probability: 2}); !errors.As(err, &refused) {
		t.Errorf("a probability of 2: error %v", err)
	}
	if _, err := chain.Run([]Handle{-1}, Options{}); !errors.As(err, &refused) {
		t.Errorf("no such quantity: error %v", err)
	}
	r := fit(t, session("S-1", outside(), 3), calib.Model{})
	if _, err := chain.Fit(r, []Handle{h}); !errors.As(err, &refused) {
		t.Errorf("one anchor of three: error %v", err)
	}
	var v *uncertain.ValueError
	if _, err := chain.Number(uncertain.Number{Value: math.NaN()}); !errors.As(err, &v) {
		t.Errorf("NaN: error %v", err)
	}
}
