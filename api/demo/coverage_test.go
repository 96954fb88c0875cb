package demo

import (
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// TestDeviationsFitTheirStatedCovariance holds the deviations of one
// calibration's samples from the truth against the covariance that the stored
// calibration gives them: g_iᵀ C g_j, and on the diagonal what is the sample's
// own. T = dᵀC⁻¹d is about n·F(n, ν), ν of the fit's variance; the probabilities
// of independent calibrations are pooled by Fisher's −2 Σ ln p ~ χ²(2m). Each of
// the two bounds is passed by chance with a probability of 0.001; the seeds are
// fixed, so the test does not vary. Deviations multiplied by 1.5 or by 0.6 fail it
// (tried).
func TestDeviationsFitTheirStatedCovariance(t *testing.T) {
	t.Parallel()
	var small, large float64
	m := 0
	for _, seed := range []uint64{testSeed, 1000, 1001} {
		p, s := laboratory(t, seed)
		// Different quantities share nothing; two sessions of one quantity share their anchors.
		for _, use := range []struct{ label, quantity string }{{"solids of April, 1", "d13C"}, {"solids of April, 1", "d15N"}, {"waters of April, 2", "d2H"}} {
			i := slices.IndexFunc(s.Sessions, func(x Session) bool { return x.Label == use.label })
			c, err := registry.One[store.Calibration](t.Context(), p.Registry, s.Auditor, store.KindCalibration, s.Sessions[i].Calibrations[use.quantity], 0, store.Moment{})
			if err != nil {
				t.Fatal(err)
			}
			probability := deviationProbability(t, s, c.Value)
			t.Logf("seed %d, %s: p = %.3f", seed, use.quantity, probability)
			small += -2 * math.Log(probability)
			large += -2 * math.Log(1-probability)
			m++
		}
	}
	bound := distuv.ChiSquared{K: float64(2 * m)}.Quantile(0.999)
	if small > bound {
		t.Errorf("deviations are larger than their uncertainties say: %.1f beyond χ²(%d) = %.1f", small, 2*m, bound)
	}
	if large > bound {
		t.Errorf("deviations are smaller than their uncertainties say: %.1f beyond χ²(%d) = %.1f", large, 2*m, bound)
	}
}

// deviationProbability is the probability of deviations at least as large.
func deviationProbability(t *testing.T, s *Summary, c store.Calibration) float64 {
	t.Helper()
	var results []store.Result
	for _, r := range c.Results {
		if r.Role == calib.Sample {
			results = append(results, r)
		}
	}
	n := len(results)
	covariance := mat.NewSymDense(n, nil)
	d := mat.NewVecDense(n, nil)
	for i, a := range results {
		true_, ok := s.True(a.Subject, c.Scale)
		if !ok {
			t.Fatalf("no truth for %s on %s", a.Subject, c.Scale)
		}
		d.SetVec(i, a.Value-true_)
		covariance.SetSym(i, i, a.StandardUncertainty*a.StandardUncertainty)
		for j, b := range results[:i] {
			sum := 0.0
			for p := range a.Gradient {
				for q := range b.Gradient {
					sum += a.Gradient[p] * c.Covariance[p][q] * b.Gradient[q]
				}
			}
			covariance.SetSym(i, j, sum)
		}
	}
	var cholesky mat.Cholesky
	if !cholesky.Factorize(covariance) {
		t.Fatalf("the covariance of the results of session %s is not positive definite", c.Session)
	}
	var x mat.VecDense
	if err := cholesky.SolveVecTo(&x, d); err != nil {
		t.Fatal(err)
	}
	if len(c.Variances) != 1 || c.Variances[0].DegreesOfFreedom == nil {
		t.Fatalf("variances %v, want one with degrees of freedom", c.Variances)
	}
	return distuv.F{D1: float64(n), D2: *c.Variances[0].DegreesOfFreedom}.Survival(mat.Dot(d, &x) / float64(n))
}
