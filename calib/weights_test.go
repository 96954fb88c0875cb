package calib

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/uncertain"
)

// A plain line with exact anchors: σ² = RSS/(n − p), ν = n − p (ordinary least
// squares).
func TestEqualWeightsOfExactAnchorsAreOrdinaryLeastSquares(t *testing.T) {
	var s Session
	raw := []float64{3.014, 5.225, 7.004, 9.061, 11.201, 12.762} // ISO/TS 28037 annex E
	for i, r := range raw {
		code := fmt.Sprintf("M%d", i)
		s.Anchors = append(s.Anchors, assigned(code, float64(i+1), 0))
		s.read(code, Anchor, r, 0)
	}
	r := mustFit(t, s, Model{Weights: WeightsEqual}, Policy{})
	near(t, "σ²", r.Variances[0].Value, 0.116498285714286/4, 1e-13) // printed sum of squares 0.11649828571
	near(t, "ν", r.Variances[0].DegreesOfFreedom, 4, 1e-9)
	near(t, "residual sd", *r.ResidualSD, math.Sqrt(0.116498285714286/4), 1e-12)
	if r.ChiSquare != nil || r.PValue != nil || r.BirgeRatio != nil {
		t.Error("σ is estimated from the residuals, yet chi-square is reported")
	}
}

// With anchors so uncertain that they say nothing of the readings' scatter, σ²
// and ν are those within materials.
func TestEqualWeightsOfVagueAnchorsAreTheScatterWithinMaterials(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	w := truth{intercept: 0.1, slope: 1, noise: 0.05, anchorU: 1e-9, anchors: []float64{-30, 0, 30}, repeats: 5, samples: 1}
	s, _ := w.session(r)
	for i := range s.Anchors {
		s.Anchors[i] = assigned(s.Anchors[i].Material, s.Anchors[i].Value.Value+r.NormFloat64(), 1e4)
	}
	equal, err := Fit(s, Model{Weights: WeightsEqual}, Policy{LeftOutLimit: 1e9})
	var weak *WeakSlopeError
	if errors.As(err, &weak) {
		// Such anchors rightly give no slope; half their vagueness is enough.
		for i := range s.Anchors {
			s.Anchors[i].Value.Terms[0].U = 3
		}
		equal, err = Fit(s, Model{Weights: WeightsEqual}, Policy{})
	}
	if err != nil {
		t.Fatal(err)
	}
	within := mustFit(t, s, Model{Weights: WeightsReplicate}, Policy{})
	near(t, "σ²", equal.Variances[0].Value, within.Variances[0].Value, 1e-4*within.Variances[0].Value)
	near(t, "ν", equal.Variances[0].DegreesOfFreedom, 12, 0.01) // 15 readings of 3 materials
	near(t, "ν within", within.Variances[0].DegreesOfFreedom, 12, 1e-9)
}

// Balanced nested data: by the analysis of variance, σ² is the mean square
// within preparations and φ_a = (MS between − MS within)/k (Searle, Casella
// and McCulloch, Variance Components, 3.8: REML equals ANOVA where positive).
func TestReplicatePreparationsMatchAnalysisOfVariance(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	var s Session
	const preparations, k = 4, 3
	var within, between float64
	for m, value := range []float64{-30, 0, 30} {
		code := fmt.Sprintf("A%d", m)
		s.Anchors = append(s.Anchors, assigned(code, value, 0.02))
		var means []float64
		var all float64
		for p := range preparations {
			effect := 0.2 * r.NormFloat64()
			var mean float64
			var group []float64
			for range k {
				raw := value + effect + 0.05*r.NormFloat64()
				s.read(code, Anchor, raw, 0).of(fmt.Sprint(code, "-", p))
				group, mean = append(group, raw), mean+raw/k
			}
			for _, v := range group {
				within += (v - mean) * (v - mean)
			}
			means, all = append(means, mean), all+mean/preparations
		}
		for _, v := range means {
			between += k * (v - all) * (v - all)
		}
	}
	msw, msb := within/(3*preparations*(k-1)), between/(3*(preparations-1))
	fit := mustFit(t, s, Model{Weights: WeightsReplicate}, Policy{})
	near(t, "σ²", fit.Variances[0].Value, msw, 1e-9*msw)
	near(t, "φ_a", fit.Variances[1].Value, (msb-msw)/k, 1e-9*msb)
	near(t, "ν of σ²", fit.Variances[0].DegreesOfFreedom, 3*preparations*(k-1), 1e-6)
	// Var(φ_a) = 2[MSB²/ν_B + MSW²/ν_W]/k²
	want := 2 * (msb*msb/(3*(preparations-1)) + msw*msw/(3*preparations*(k-1))) / (k * k)
	near(t, "Var(φ_a)", fit.VarianceCovariance[1][1], want, 1e-6*want)
}

// The restricted likelihood's own equations, with gonum's dense matrices:
// eᵀΣ⁻¹V_jΣ⁻¹e = tr(P V_j) at the reported φ, Cov(φ̂) = 2[tr(P V_j P V_k)]⁻¹.
func TestEstimatedVariancesSolveTheRestrictedLikelihood(t *testing.T) {
	for name, c := range map[string]struct {
		model    Model
		prepared bool
	}{
		"equal":                 {Model{Weights: WeightsEqual, Drift: DriftLinear}, false},
		"equal, preparations":   {Model{Weights: WeightsEqual}, true},
		"size":                  {Model{Weights: WeightsSize}, false},
		"size, preparations":    {Model{Weights: WeightsSize, Drift: DriftLinear}, true},
		"equal, inverse, drift": {Model{Weights: WeightsEqual, Drift: DriftQuadratic, Size: SizeInverse}, false},
	} {
		t.Run(name, func(t *testing.T) {
			s := scatteredSession(17, c.prepared)
			r := mustFit(t, s, c.model, Policy{})
			p, lambda, patterns := densePatterns(t, r)
			for j, v := range patterns {
				left := mat.Inner(lambda, v, lambda)
				var pv mat.Dense
				pv.Mul(p, v)
				right := mat.Trace(&pv)
				if r.Variances[j].Value > 1e-12 {
					near(t, "score of "+r.Variances[j].Name, left/right, 1, 1e-7)
				} else if left > right*(1+1e-6) {
					t.Errorf("%s is at zero although the likelihood rises there", r.Variances[j].Name)
				}
			}
			m := len(patterns)
			information := mat.NewDense(m, m, nil)
			for j := range m {
				for k := range m {
					var a, b, ab mat.Dense
					a.Mul(p, patterns[j])
					b.Mul(p, patterns[k])
					ab.Mul(&a, &b)
					information.Set(j, k, mat.Trace(&ab))
				}
			}
			var cov mat.Dense
			if err := cov.Inverse(information); err != nil {
				t.Fatal(err)
			}
			for j := range m {
				for k := range m {
					want := 2 * cov.At(j, k)
					near(t, fmt.Sprint("Cov(φ) ", j, k), r.VarianceCovariance[j][k], want, 1e-6*2*math.Sqrt(cov.At(j, j)*cov.At(k, k)))
				}
			}
		})
	}
}

// scatteredSession has noise that grows as 1/size and preparations that differ.
func scatteredSession(seed uint64, prepared bool) Session {
	r := rand.New(rand.NewPCG(seed, 3))
	s, _ := truth{intercept: 0.4, slope: 0.97, drift: 0.004, noise: 0.03, anchorU: 0.03,
		anchors: []float64{-38, -12, 4, 35}, repeats: 9, samples: 6, monitor: true}.session(r)
	effects := map[string]float64{}
	for i := range s.Readings {
		rd := &s.Readings[i]
		rd.Raw += 0.4 / *rd.Size * r.NormFloat64()
		if prepared {
			rd.Preparation = fmt.Sprintf("%s-%d", rd.Subject, i/18)
			if _, ok := effects[rd.Preparation]; !ok {
				effects[rd.Preparation] = 0.15 * r.NormFloat64()
			}
			rd.Raw += effects[rd.Preparation]
		}
	}
	return s
}

// densePatterns rebuilds Σ, P and Σ⁻¹e over the fitted readings from a result,
// without the engine's reductions.
func densePatterns(t *testing.T, r *Result) (p *mat.Dense, lambda *mat.VecDense, patterns []*mat.Dense) {
	t.Helper()
	c := r.calibrated
	n := len(c.fitted)
	raw := c.raw() // one row for each reading
	theta, tau := c.s.Theta, c.s.Adjusted
	design := mat.NewDense(n, c.layout.p, nil)
	f, slope := make([]float64, n), make([]float64, n)
	columns := newMatrixFor(c.layout.p, n)
	raw.model.Evaluate(theta, tau, nil, nil, columns)
	raw.model.Evaluate(theta, c.values, f, slope, nil)
	e := mat.NewVecDense(n, nil)
	sigma := mat.NewDense(n, n, nil)
	for j := range n {
		e.SetVec(j, raw.z[j]-f[j])
		for k := range c.layout.p {
			design.Set(j, k, columns.At(k, j))
		}
		for k := range n {
			a, b := raw.model.latent[j], raw.model.latent[k]
			if a >= 0 && b >= 0 {
				sigma.Set(j, k, slope[j]*slope[k]*c.vy.At(a, b))
			}
		}
	}
	for j, k := range c.variances.patterns {
		v := mat.NewDense(n, n, nil)
		for a := range n {
			for b := range n {
				ra, rb := &c.in.readings[c.fitted[a]], &c.in.readings[c.fitted[b]]
				switch {
				case k == patternPreparation && ra.preparation == rb.preparation:
					v.Set(a, b, 1)
				case k == patternSize && a == b:
					v.Set(a, b, 1/(ra.size*ra.size))
				case k == patternUnit && a == b:
					v.Set(a, b, 1)
				}
			}
		}
		patterns = append(patterns, v)
		var scaled mat.Dense
		scaled.Scale(c.variances.phi[j], v)
		sigma.Add(sigma, &scaled)
	}
	var inverse, ix, xix, cov, half mat.Dense
	if err := inverse.Inverse(sigma); err != nil {
		t.Fatal(err)
	}
	ix.Mul(&inverse, design)
	xix.Mul(design.T(), &ix)
	if err := cov.Inverse(&xix); err != nil {
		t.Fatal(err)
	}
	half.Mul(&ix, &cov)
	p = new(mat.Dense)
	p.Mul(&half, ix.T())
	p.Sub(&inverse, p)
	lambda = new(mat.VecDense)
	lambda.MulVec(&inverse, e)
	return p, lambda, patterns
}

// Lack of fit with exact anchors is the usual F of pure error:
// F = [(RSS − RSS_pure)/(m − 2)]/[RSS_pure/(n − m)] (Draper and Smith, 2.1).
func TestLackOfFitIsTheFOfPureError(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 9))
	var s Session
	var pure float64
	for m := range 5 {
		code := fmt.Sprintf("A%d", m)
		s.Anchors = append(s.Anchors, assigned(code, float64(10*m), 0))
		var all []float64
		var mean float64
		for range 4 {
			v := 0.3 + 9.8*float64(m) + 0.02*float64(m*m) + 0.1*r.NormFloat64()
			s.read(code, Anchor, v, 0)
			all, mean = append(all, v), mean+v/4
		}
		for _, v := range all {
			pure += (v - mean) * (v - mean)
		}
	}
	fit := mustFit(t, s, Model{Weights: WeightsReplicate}, Policy{})
	var rss float64
	for _, x := range fit.Readings {
		rss += *x.Residual * *x.Residual
	}
	f := (rss - pure) / 3 / (pure / 15)
	near(t, "F", fit.LackOfFit.F, f, 1e-9*f)
	near(t, "p", fit.LackOfFit.PValue, distuv.F{D1: 3, D2: 15}.Survival(f), 1e-9)
	near(t, "σ²", fit.Variances[0].Value, pure/15, 1e-12)
}

func TestEstimatedWeightsNeedReplicates(t *testing.T) {
	var s Session
	for i := range 2 {
		code := fmt.Sprintf("A%d", i)
		s.Anchors = append(s.Anchors, assigned(code, float64(10*i), 0))
		s.read(code, Anchor, float64(10*i), 0.1)
	}
	for _, w := range []Weights{WeightsEqual, WeightsReplicate} {
		_, err := Fit(s, Model{Weights: w}, Policy{})
		var refused *NoReplicatesError
		if !errors.As(err, &refused) {
			t.Errorf("%s with two readings: error %v, want a NoReplicatesError", w, err)
		}
	}
	// One preparation of each anchor, read three times: not replicates.
	s.Readings = nil
	for i := range 2 {
		for range 3 {
			s.read(fmt.Sprintf("A%d", i), Anchor, float64(10*i)+0.01*float64(len(s.Readings)%3), 0.1).of(fmt.Sprint("P", i))
		}
	}
	for _, w := range []Weights{WeightsEqual, WeightsReplicate} {
		_, err := Fit(s, Model{Weights: w}, Policy{})
		var refused *PreparationError
		if !errors.As(err, &refused) {
			t.Errorf("%s with one preparation each: error %v, want a PreparationError", w, err)
		}
	}
}

// Ten injections of one preparation are not ten replicates.
func TestInjectionsOfOnePreparationDoNotCountAsReplicates(t *testing.T) {
	s := scatteredSession(23, true)
	independent := mustFit(t, stripped(s), Model{Weights: WeightsEqual}, Policy{})
	nested := mustFit(t, s, Model{Weights: WeightsEqual}, Policy{})
	a, b := independent.parameter(t, "intercept").StandardUncertainty, nested.parameter(t, "intercept").StandardUncertainty
	if !(b > 1.2*a) {
		t.Errorf("u(intercept) %v with preparations, %v without: want clearly more", b, a)
	}
	if len(nested.Variances) != 2 || nested.Variances[1].Name != "preparation" {
		t.Errorf("variances %v, want sigma2 and preparation", nested.Variances)
	}
}

func stripped(s Session) Session {
	out := s
	out.Readings = append([]Reading(nil), s.Readings...)
	for i := range out.Readings {
		out.Readings[i].Preparation = ""
	}
	return out
}

func TestDeclaredDegreesOfFreedomReachTheResult(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -30, 0), assigned("B", 10, 0)}
	s.read("A", Anchor, -30, 0.1)
	s.read("B", Anchor, 10, 0.1)
	s.read("S", Sample, -10, 0.1)
	nu := 7.0
	r := mustFit(t, s, Model{DeclaredDF: &nu}, Policy{})
	near(t, "ν_eff", r.Subjects[0].Expanded.DegreesOfFreedom, 7, 1e-9) // one φ scales everything
	if r.Variances[0].Name != "declared" || r.Variances[0].DegreesOfFreedom != 7 {
		t.Errorf("variances %v", r.Variances)
	}
	n := r.Number(0)
	x, err := uncertain.Expand(n, r.Groups(), uncertain.Coverage{})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "ν_eff of the number", x.DegreesOfFreedom, 7, 1e-9)
}
