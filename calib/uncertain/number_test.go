package uncertain

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.17g, want %.17g (allowed %.2g)", what, got, want, tolerance)
	}
}

// of makes a number of one source, with its own group of ν degrees of freedom
// (0: known).
func of(value float64, id string, u, nu float64) (Number, []Group) {
	s := Source{ID: id, Kind: KindCorrection, U: u}
	var groups []Group
	if nu > 0 {
		s.Group = "group:" + id
		groups = []Group{NewGroup(s.Group, u*u, nu)}
	}
	return Number{Value: value, Terms: []Term{{Source: s, Sensitivity: 1}}}, groups
}

func combine(t *testing.T, coefficients []float64, numbers ...Number) Number {
	t.Helper()
	n, err := Linear(0, coefficients, numbers)
	if err != nil {
		t.Fatal(err)
	}
	return n
}

// JCGM 100:2008 G.4.1 (printed 1.03, 19.0 and 2.09; the figures are recalled,
// the values below recomputed with scipy from the components).
func TestEffectiveDFMatchesGUMG41(t *testing.T) {
	var numbers []Number
	var groups []Group
	for i, u := range []float64{0.25, 0.57, 0.82} {
		n, g := of(0, fmt.Sprint("x", i), u, []float64{9, 4, 14}[i])
		numbers, groups = append(numbers, n), append(groups, g...)
	}
	y := combine(t, []float64{1, 1, 1}, numbers...)
	near(t, "u", y.StandardUncertainty(), 1.0294658809304948, 1e-15)
	x, err := Expand(y, groups, Coverage{})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "ν_eff", x.DegreesOfFreedom, 18.998742314267957, 1e-12)
	near(t, "k", x.CoverageFactor, 2.093024054408263, 0.0001) // scipy, ν = 19
	near(t, "U", x.U, 2.2, 0.05)                              // as printed
}

// JCGM 100:2008 H.1.6: components with their degrees of freedom; u_l printed
// 32, ν_eff 16.7 and U99 93 from rounded components; the unrounded values are
// scipy's.
func TestEffectiveDFMatchesGUMH1(t *testing.T) {
	ls := 50000623.0
	components := []struct{ u, nu float64 }{
		{25, 18}, {5.8, 24}, {3.9, 5}, {6.7, 8},
		{ls * 0.1 * 1e-6 / math.Sqrt(3), 50}, {ls * 11.5e-6 * 0.05 / math.Sqrt(3), 2},
	}
	var numbers []Number
	var groups []Group
	one := make([]float64, len(components))
	for i, c := range components {
		n, g := of(0, fmt.Sprint("c", i), c.u, c.nu)
		numbers, groups, one[i] = append(numbers, n), append(groups, g...), 1
	}
	y := combine(t, one, numbers...)
	near(t, "u_l", y.StandardUncertainty(), 31.663879111008633, 1e-12)
	nu, err := EffectiveDF(y, groups)
	if err != nil {
		t.Fatal(err)
	}
	// The example nests u_d as one component of ν 25.4; over independent
	// variances the formula is the same sum of u⁴/ν.
	near(t, "ν_eff", nu, 16.751855737627242, 1e-9)
}

// JCGM 100:2008 H.2, Tables H.2 to H.4: correlated inputs, three outputs.
func TestLinearMatchesGUMH2(t *testing.T) {
	data := [][]float64{
		{5.007, 4.994, 5.005, 4.990, 4.999},
		{0.019663, 0.019639, 0.019640, 0.019685, 0.019678},
		{1.0456, 1.0438, 1.0468, 1.0428, 1.0433},
	}
	mean := make([]float64, 3)
	for i, d := range data {
		for _, v := range d {
			mean[i] += v / 5
		}
	}
	cov := make([][]float64, 3)
	for i := range cov {
		cov[i] = make([]float64, 3)
		for j := range cov {
			for k := range data[i] {
				cov[i][j] += (data[i][k] - mean[i]) * (data[j][k] - mean[j]) / 20
			}
		}
	}
	x, err := FromCovariance("input:", KindCorrection, []string{"V", "I", "phi"}, mean, cov)
	if err != nil {
		t.Fatal(err)
	}
	v, i, phi := mean[0], mean[1], mean[2]
	z := v / i
	outputs := [][]float64{
		{math.Cos(phi) / i, -z * math.Cos(phi) / i, -z * math.Sin(phi)},
		{math.Sin(phi) / i, -z * math.Sin(phi) / i, z * math.Cos(phi)},
		{1 / i, -z / i, 0},
	}
	var y []Number
	for _, c := range outputs {
		y = append(y, combine(t, c, x...))
	}
	for k, want := range []float64{0.07107140739699545, 0.295581677358644, 0.23633613008237758} { // general-purpose library
		near(t, fmt.Sprint("u of output ", k), y[k].StandardUncertainty(), want, 1e-11)
	}
	for _, c := range []struct {
		a, b    int
		printed float64
	}{{0, 1, -0.588}, {0, 2, -0.485}, {1, 2, 0.993}} { // Table H.4
		r := Covariance(y[c.a], y[c.b]) / (y[c.a].StandardUncertainty() * y[c.b].StandardUncertainty())
		near(t, fmt.Sprint("correlation ", c.a, c.b), r, c.printed, 0.0005)
	}
}

// Student's t quantiles by 40-digit root finding of the incomplete beta
// function (mpmath).
func TestCoverageFactorMatchesQuantiles(t *testing.T) {
	for _, c := range []struct{ cumulative, nu, want float64 }{
		{0.975, 1, 12.706204736174705}, {0.975, 2, 4.3026527297494639}, {0.975, 3, 3.1824463052837096},
		{0.975, 4, 2.7764451051977944}, {0.975, 5, 2.5705818356363155}, {0.975, 8, 2.3060041352041667},
		{0.975, 10, 2.2281388519862747}, {0.975, 16, 2.1199052992212547}, {0.975, 20, 2.0859634472658648},
		{0.975, 30, 2.0422724563012383}, {0.975, 100, 1.9839715185235523}, {0.995, 1, 63.656741162871581},
		{0.995, 4, 4.6040948713499932}, {0.995, 9, 3.2498355415921263}, {0.995, 16, 2.9207816224251},
		{0.995, 50, 2.6777932709408442}, {0.95, 3, 2.3533634348018239}, {0.975, 16.7, 2.1127064206595908},
		{0.9999, 6, 8.0247927731163755},
	} {
		near(t, fmt.Sprintf("t(%v, %v)", c.cumulative, c.nu), CoverageFactor(2*c.cumulative-1, c.nu), c.want, 1e-10*c.want)
	}
	near(t, "normal", CoverageFactor(0.95, math.Inf(1)), 1.959963984540054, 1e-14) // standard tables
	near(t, "ν below 1 counts as 1", CoverageFactor(0.95, 0.3), 12.706204736174705, 1e-8)
}

// The coverage factor is a smooth, falling function of ν however it is found.
func TestCoverageFactorFallsWithDegreesOfFreedom(t *testing.T) {
	last := math.Inf(1)
	for nu := 1.0; nu < 1e7; nu *= 1.01 {
		k := CoverageFactor(0.95, nu)
		if !(k < last) {
			t.Fatalf("t(%v) = %v is not below %v", nu, k, last)
		}
		last = k
	}
	near(t, "k at a ν beyond all use", CoverageFactor(0.95, 1e30), 1.959963984540054, 1e-14)
}

func TestFitNoiseAndReplicatesAreOneTerm(t *testing.T) {
	// Two sources scaled by one σ² with ν = 2: ν_eff is 2, not 4.
	g := []Group{NewGroup("fit", 0.04, 2)}
	source := func(id string) Source { return Source{ID: id, Kind: KindReading, U: 0.2, Group: "fit"} }
	y := Number{Terms: []Term{{Source: source("reading:1"), Sensitivity: 0.7}, {Source: source("reading:2"), Sensitivity: 0.4}}}
	nu, err := EffectiveDF(y, g)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "ν_eff", nu, 2, 1e-12)
}

func TestEffectiveDFUsesCovarianceOfVariances(t *testing.T) {
	// u² = 2φ1 + 3φ2 with correlated estimates: ν = 2u⁴/(dᵀ C d), by hand.
	g := []Group{{ID: "g", Variances: []float64{0.5, 0.2}, Covariance: [][]float64{{0.1, -0.02}, {-0.02, 0.05}}}}
	y := Number{Terms: []Term{
		{Source: Source{ID: "a", U: math.Sqrt(0.5), Group: "g", Per: []float64{1, 0}}, Sensitivity: math.Sqrt2},
		{Source: Source{ID: "b", U: math.Sqrt(0.2), Group: "g", Per: []float64{0, 1}}, Sensitivity: math.Sqrt(3)},
	}}
	nu, err := EffectiveDF(y, g)
	if err != nil {
		t.Fatal(err)
	}
	u2 := 2*0.5 + 3*0.2
	near(t, "ν_eff", nu, 2*u2*u2/(4*0.1+2*2*3*-0.02+9*0.05), 1e-12)
}

func TestZeroVarianceEstimateStillCosts(t *testing.T) {
	// φ̂ = 0 with Var(φ̂) > 0: the source adds nothing to u², but ν_eff is finite.
	g := []Group{{ID: "tau", Variances: []float64{0}, Covariance: [][]float64{{0.01}}}}
	y := Number{Terms: []Term{
		{Source: Source{ID: "a", U: 1}, Sensitivity: 1},
		{Source: Source{ID: "b", U: 0, Group: "tau", Per: []float64{1}}, Sensitivity: 0.5},
	}}
	nu, err := EffectiveDF(y, g)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "ν_eff", nu, 2/(0.25*0.25*0.01), 1e-9)
}

func TestCompareCancelsSharedSources(t *testing.T) {
	shared := Source{ID: "anchor:A", Kind: KindAnchor, U: 0.1}
	own := func(id string) Source { return Source{ID: id, Kind: KindReading, U: 0.02} }
	a := Number{Value: 1.05, Terms: []Term{{Source: shared, Sensitivity: 0.9}, {Source: own("reading:1"), Sensitivity: 1}}}
	b := Number{Value: 1.00, Terms: []Term{{Source: shared, Sensitivity: 0.8}, {Source: own("reading:2"), Sensitivity: 1}}}
	c, err := Compare(a, b, nil, Coverage{})
	if err != nil {
		t.Fatal(err)
	}
	u := math.Sqrt(0.1*0.1*0.1*0.1 + 2*0.02*0.02) // (0.9 − 0.8)·0.1, and both readings
	near(t, "u(d)", c.StandardUncertainty, u, 1e-15)
	near(t, "root sum of squares", c.RootSumOfSquares, math.Sqrt(0.09*0.09+0.08*0.08+2*0.02*0.02), 1e-15)
	near(t, "zeta", *c.Zeta, 0.05/u, 1e-9)
	near(t, "E_n", *c.En, 0.05/(2*u), 1e-9)
	if c.Different {
		t.Errorf("difference %.3g with u %.3g is not beyond %.3g u", 0.05, u, c.CoverageFactor)
	}
	same, err := Compare(a, a, nil, Coverage{})
	if err != nil {
		t.Fatal(err)
	}
	if same.Zeta != nil || same.En != nil || same.Different {
		t.Errorf("a number compared with itself: %+v, want no ratios and no difference", same)
	}
	if d, _ := Compare(Exact(1), Exact(2), nil, Coverage{}); !d.Different || d.Zeta != nil {
		t.Errorf("two exact values that differ: %+v, want different, no ratio", d)
	}
}

// Two fits of one session: one reading, two variance estimates. The covariance
// takes the product of the two u, and each estimate keeps its share of ν.
func TestOneSourceWithTwoVarianceEstimates(t *testing.T) {
	groups := []Group{NewGroup("fit:1", 0.04, 5), NewGroup("fit:2", 0.09, 7)}
	a := Number{Terms: []Term{{Source: Source{ID: "reading:1", U: 0.2, Group: "fit:1"}, Sensitivity: 1}}}
	b := Number{Terms: []Term{{Source: Source{ID: "reading:1", U: 0.3, Group: "fit:2"}, Sensitivity: 0.5}}}
	near(t, "covariance", Covariance(a, b), 0.2*0.5*0.3, 1e-17)
	sum := combine(t, []float64{1, 1}, a, b)
	near(t, "u", sum.StandardUncertainty(), 0.2+0.15, 1e-15)
	nu, err := EffectiveDF(sum, groups)
	if err != nil {
		t.Fatal(err)
	}
	// u² = (√φ1 + ½√φ2)²; by difference quotients of that formula.
	u2 := func(p1, p2 float64) float64 { q := math.Sqrt(p1) + 0.5*math.Sqrt(p2); return q * q }
	h := 1e-6
	d1 := (u2(0.04+h, 0.09) - u2(0.04-h, 0.09)) / (2 * h)
	d2 := (u2(0.04, 0.09+h) - u2(0.04, 0.09-h)) / (2 * h)
	below := d1*d1*2*0.04*0.04/5 + d2*d2*2*0.09*0.09/7
	near(t, "ν_eff", nu, 2*u2(0.04, 0.09)*u2(0.04, 0.09)/below, 1e-6)
	// Adding in two steps changes nothing.
	again := combine(t, []float64{1, 1}, sum, combine(t, []float64{0}, a))
	nu2, err := EffectiveDF(again, groups)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "ν_eff again", nu2, nu, 1e-9)
}

func TestLinearDropsWhatCancels(t *testing.T) {
	n, _ := of(3, "a", 0.5, 0)
	d := combine(t, []float64{1, -1}, n, n)
	if diff := cmp.Diff(Number{Terms: []Term{}}, d); diff != "" {
		t.Errorf("x − x (-want +got):\n%s", diff)
	}
}

func TestFromCovarianceHandlesSingularAndZero(t *testing.T) {
	cov := [][]float64{{0.04, 0.04, 0}, {0.04, 0.04, 0}, {0, 0, 0}} // B = A, C exact
	n, err := FromCovariance("anchor:", KindAnchor, []string{"B", "A", "C"}, []float64{1, 2, 3}, cov)
	if err != nil {
		t.Fatal(err)
	}
	want := []Term{{Source: Source{ID: "anchor:A", Kind: KindAnchor, U: 0.2}, Sensitivity: 1}}
	for i := range 2 {
		if diff := cmp.Diff(want, n[i].Terms); diff != "" {
			t.Errorf("number %d (-want +got):\n%s", i, diff)
		}
	}
	if len(n[2].Terms) != 0 {
		t.Errorf("the exact value has terms: %v", n[2].Terms)
	}
}

func TestFromCovarianceRefuses(t *testing.T) {
	for name, c := range map[string]struct {
		codes []string
		cov   [][]float64
		place string
	}{
		"not positive":  {[]string{"A", "B"}, [][]float64{{1, 2}, {2, 1}}, "covariance"},
		"not symmetric": {[]string{"A", "B"}, [][]float64{{1, 0.5}, {0.4, 1}}, "covariance[0][1]"},
		"negative":      {[]string{"A"}, [][]float64{{-1}}, "covariance[0][0]"},
		"NaN":           {[]string{"A"}, [][]float64{{math.NaN()}}, "covariance[0][0]"},
		"shape":         {[]string{"A", "B"}, [][]float64{{1, 0}}, "covariance"},
		"twice":         {[]string{"A", "A"}, [][]float64{{1, 0}, {0, 1}}, "codes[1]"},
	} {
		_, err := FromCovariance("anchor:", KindAnchor, c.codes, make([]float64, len(c.codes)), c.cov)
		var v *ValueError
		if !errors.As(err, &v) || v.Place != c.place {
			t.Errorf("%s: error %v, want a ValueError at %s", name, err, c.place)
		}
	}
}

func TestNumberRefusesWhatItCannotHold(t *testing.T) {
	term := func(id string, u, c float64) Term { return Term{Source: Source{ID: id, U: u}, Sensitivity: c} }
	for name, n := range map[string]Number{
		"value":        {Value: math.NaN()},
		"u":            {Terms: []Term{term("a", -1, 1)}},
		"infinite u":   {Terms: []Term{term("a", math.Inf(1), 1)}},
		"sensitivity":  {Terms: []Term{term("a", 1, math.NaN())}},
		"no identity":  {Terms: []Term{term("", 1, 1)}},
		"unsorted":     {Terms: []Term{term("b", 1, 1), term("a", 1, 1)}},
		"source twice": {Terms: []Term{term("a", 1, 1), term("a", 1, 1)}},
	} {
		var v *ValueError
		if err := n.Validate(); !errors.As(err, &v) {
			t.Errorf("%s: error %v, want a ValueError", name, err)
		}
	}
	if _, err := Linear(0, []float64{math.Inf(1)}, []Number{Exact(1)}); err == nil {
		t.Error("an infinite coefficient was taken")
	}
	n, err := New(1, term("b", 1, 1), term("a", 2, 1), term("b", 1, 2))
	if err != nil {
		t.Fatal(err)
	}
	want := Number{Value: 1, Terms: []Term{term("a", 2, 1), term("b", 1, 3)}}
	if diff := cmp.Diff(want, n); diff != "" {
		t.Errorf("New sorts and adds (-want +got):\n%s", diff)
	}
	y, _ := of(1, "a", 1, 3)
	var g *GroupError
	if _, err := EffectiveDF(y, nil); !errors.As(err, &g) {
		t.Errorf("a group that is not given: error %v, want a GroupError", err)
	}
}

func TestCovarianceIsThatOfTheCovarianceGiven(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(1, 6).Draw(t, "n")
		rank := rapid.IntRange(0, n).Draw(t, "rank")
		factor := make([][]float64, n)
		for i := range factor {
			for _, v := range rapid.SliceOfN(rapid.IntRange(-300, 300), rank, rank).Draw(t, "row") {
				factor[i] = append(factor[i], float64(v)/100)
			}
		}
		cov := make([][]float64, n)
		codes := make([]string, n)
		for i := range cov {
			cov[i] = make([]float64, n)
			codes[i] = fmt.Sprintf("M%d", (i*7+3)%n*10+i)
			for j := range cov {
				for k := range rank {
					cov[i][j] += factor[i][k] * factor[j][k]
				}
			}
		}
		numbers, err := FromCovariance("a:", KindAnchor, codes, make([]float64, n), cov)
		if err != nil {
			t.Fatal(err)
		}
		for i := range numbers {
			for j := range numbers {
				got := Covariance(numbers[i], numbers[j])
				if math.Abs(got-cov[i][j]) > 1e-5*math.Sqrt(cov[i][i]*cov[j][j])+1e-9 {
					t.Fatalf("covariance(%d, %d) = %v, want %v", i, j, got, cov[i][j])
				}
			}
		}
	})
}

func TestLinearDoesNotDependOnOrder(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		draw := func(label string) Number {
			var terms []Term
			for _, id := range rapid.SliceOfDistinct(rapid.SampledFrom([]string{"a", "b", "c", "d", "e"}), func(s string) string { return s }).Draw(t, label) {
				terms = append(terms, Term{Source: Source{ID: id, U: float64(len(terms)) + 0.5}, Sensitivity: rapid.Float64Range(-2, 2).Draw(t, "c")})
			}
			for i := range terms {
				terms[i].U = float64(terms[i].ID[0]-'a') + 0.5 // one u for each source
			}
			n, err := New(rapid.Float64Range(-100, 100).Draw(t, "value"), terms...)
			if err != nil {
				t.Fatal(err)
			}
			return n
		}
		a, b := draw("a"), draw("b")
		before := slices.Clone(a.Terms)
		x, err1 := Linear(0, []float64{2, -1}, []Number{a, b})
		y, err2 := Linear(0, []float64{-1, 2}, []Number{b, a})
		if err1 != nil || err2 != nil {
			t.Fatal(err1, err2)
		}
		if diff := cmp.Diff(x, y); diff != "" {
			t.Fatalf("2a − b and −b + 2a (-first +second):\n%s", diff)
		}
		want := 4*a.Variance() + b.Variance() - 4*Covariance(a, b)
		if math.Abs(x.Variance()-want) > 1e-9*(1+want) {
			t.Fatalf("variance %v, want %v", x.Variance(), want)
		}
		if !slices.EqualFunc(before, a.Terms, func(p, q Term) bool { return p.ID == q.ID && p.Sensitivity == q.Sensitivity }) {
			t.Fatal("Linear wrote to its argument")
		}
	})
}
