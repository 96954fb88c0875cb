package calib

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

func newMatrixFor(rows, cols int) *adjust.Matrix { return adjust.NewMatrix(rows, cols) }

// The standardised residual is the leave-one-out prediction error over its own
// standard uncertainty: refit without the reading, predict it. Exact anchors,
// where the model is linear and the statement exact.
func TestStandardizedResidualIsTheLeftOutPrediction(t *testing.T) {
	s := randomSession(31, false)
	for i := range s.Anchors {
		s.Anchors[i].Value.Terms = nil
	}
	m := Model{Drift: DriftLinear, Size: SizeLinear}
	r := mustFit(t, s, m, Policy{})
	for i, x := range r.Readings {
		if x.StandardizedResidual == nil || s.Readings[i].Role != Anchor {
			continue
		}
		left := s
		left.Readings = slices.Clone(s.Readings)
		left.Readings[i].Excluded = true
		l := mustFit(t, left, m, Policy{})
		rd := s.Readings[i]
		value := 0.0
		for _, a := range s.Anchors {
			if a.Material == rd.Subject {
				value = a.Value.Value
			}
		}
		// r̂ = α + βy + γ(t − t_ref) + κ(s − s_ref), with its variance.
		g := make([]float64, len(l.Parameters))
		g[0], g[1], g[2], g[3] = 1, value, *rd.Time-*l.ReferenceTime, *rd.Size-*l.ReferenceSize
		predicted, variance := 0.0, *rd.StandardUncertainty**rd.StandardUncertainty
		for a := range g {
			predicted += g[a] * l.Parameters[a].Value
			for b := range g {
				variance += g[a] * g[b] * l.Covariance[a][b]
			}
		}
		near(t, fmt.Sprint("standardised residual of ", rd.ID), *x.StandardizedResidual, (rd.Raw-predicted)/math.Sqrt(variance), 1e-8)
	}
}

// Leverages of a line sum to the number of parameters; Cook's distance is its
// formula; studentised residuals are the t of the left-out reading.
func TestLeverageCookAndStudentizedAgreeWithDefinitions(t *testing.T) {
	var s Session
	raw := []float64{4642, 4612, 4565, 4513, 4476, 4433, 4389, 4347} // Natrella 5-4.1, first half
	for i, y := range raw {
		code := fmt.Sprintf("M%d", i)
		s.Anchors = append(s.Anchors, assigned(code, []float64{30, 100, 200, 300, 400, 500, 600, 700}[i], 0))
		s.read(code, Anchor, y, 1)
	}
	r := mustFit(t, s, Model{Weights: WeightsEqual}, Policy{})
	var sum float64
	for i, x := range r.Readings {
		h, e := *x.Leverage, *x.Residual
		sum += h
		sd := *r.ResidualSD
		near(t, "standardised", *x.StandardizedResidual, e/(sd*math.Sqrt(1-h)), 1e-9)
		near(t, "Cook", *x.CooksDistance, e*e*h/(2*sd*sd*(1-h)*(1-h)), 1e-9)
		// Externally studentised: the residual over the sd of the others' fit.
		left := s
		left.Readings = slices.Clone(s.Readings)
		left.Readings[i].Excluded = true
		l := mustFit(t, left, Model{Weights: WeightsEqual}, Policy{})
		near(t, "studentised", *x.StudentizedResidual, e/(*l.ResidualSD*math.Sqrt(1-h)), 1e-8)
	}
	near(t, "sum of leverages", sum, 2, 1e-10)
}

// Leaving an anchor out is the same as making it a sample: prediction from the
// other anchors, compared with its value with shared sources cancelled.
func TestLeftOutAnchorIsAComparisonWithItsOwnPrediction(t *testing.T) {
	for _, m := range []Model{{}, {Drift: DriftLinear, Weights: WeightsReplicate}, {Weights: WeightsEqual, Size: SizeLinear}, {Drift: DriftLinear, Memory: MemoryCarryover}} {
		s := randomSession(41, false)
		r := mustFit(t, s, m, Policy{})
		for k, a := range r.Anchors {
			left := s
			left.Readings = slices.Clone(s.Readings)
			left.Anchors = slices.Delete(slices.Clone(s.Anchors), k, k+1)
			for i := range left.Readings {
				if left.Readings[i].Subject == a.Material {
					left.Readings[i].Role = Sample
				}
			}
			l := mustFit(t, left, m, Policy{})
			at := slices.IndexFunc(l.Subjects, func(x SubjectResult) bool { return x.Subject == a.Material })
			c, err := uncertain.Compare(l.Number(at), s.Anchors[k].Value, l.Groups(), uncertain.Coverage{})
			if err != nil {
				t.Fatal(err)
			}
			near(t, m.label()+" predicted", a.LeftOut.Predicted, l.Subjects[at].Value, 1e-9)
			near(t, m.label()+" u", a.LeftOut.StandardUncertainty, c.StandardUncertainty, 1e-8*c.StandardUncertainty)
			near(t, m.label()+" z", a.LeftOut.Z, *c.Zeta, 1e-7*math.Abs(*c.Zeta)+1e-9)
		}
	}
}

// The number of a result carries exactly the u and ν that are reported, and
// its budget shares sum to 1.
func TestNumbersCarryTheReportedUncertainty(t *testing.T) {
	for _, m := range models {
		for _, prepared := range []bool{false, true} {
			s := randomSession(51, prepared)
			policy := Policy{BetweenSession: BetweenSession{StandardUncertainty: 0.04, DegreesOfFreedom: 9, Session: "S-1", Scale: "d13C-VPDB"}}
			r := mustFit(t, s, m, policy)
			for i, x := range r.Subjects {
				n := r.Number(i)
				if err := n.Validate(); err != nil {
					t.Fatal(err)
				}
				e, err := uncertain.Expand(n, r.Groups(), uncertain.Coverage{})
				if err != nil {
					t.Fatal(err)
				}
				what := fmt.Sprintf("%s prepared=%v %s", m.label(), prepared, x.Subject)
				near(t, what+": value", n.Value, x.Value, 0)
				near(t, what+": u", n.StandardUncertainty(), x.StandardUncertainty, 1e-10*x.StandardUncertainty)
				if a, b := e.DegreesOfFreedom, x.Expanded.DegreesOfFreedom; !(math.IsInf(a, 1) && math.IsInf(b, 1)) {
					near(t, what+": ν", a, b, 1e-7*b)
				}
				var sum float64
				for _, c := range x.Sources {
					sum += c.VarianceShare
				}
				near(t, what+": shares", sum, 1, 1e-12)
			}
		}
	}
}

// Within one fit, the covariance of two samples is g1ᵀ N g2 plus the anchors'
// shared part (metrology 1).
func TestCovarianceOfTwoSamplesFollowsFromWhatIsStored(t *testing.T) {
	s := randomSession(61, false)
	r := mustFit(t, s, Model{Drift: DriftLinear}, Policy{})
	x, y := r.Subjects[0], r.Subjects[1]
	var want float64
	for a := range x.Gradient {
		for b := range y.Gradient {
			want += x.Gradient[a] * r.NoiseCovariance[a][b] * y.Gradient[b]
		}
	}
	for k := range s.Anchors {
		for l := range s.Anchors {
			var hx, hy float64
			for a := range x.Gradient {
				hx += x.Gradient[a] * r.AnchorSensitivities[a][k]
				hy += y.Gradient[a] * r.AnchorSensitivities[a][l]
			}
			want += hx * hy * uncertain.Covariance(s.Anchors[k].Value, s.Anchors[l].Value)
		}
	}
	near(t, "covariance", uncertain.Covariance(r.Number(0), r.Number(1)), want, 1e-9*math.Abs(want))
}

// Two calibrations of one session share its readings: leaving one reading out
// moves a sample by far less than two independent results would differ.
func TestTwoFitsOfOneSessionShareTheirReadings(t *testing.T) {
	s := randomSession(71, false)
	m := Model{Drift: DriftLinear, Weights: WeightsReplicate}
	first := mustFit(t, s, m, Policy{})
	s.Readings = slices.Clone(s.Readings)
	s.Readings[7].Excluded = true
	s.NoiseGroup = "fit:second"
	second := mustFit(t, s, m, Policy{})
	groups := append(first.Groups(), second.Groups()...)
	c, err := uncertain.Compare(first.Number(0), second.Number(0), groups, uncertain.Coverage{})
	if err != nil {
		t.Fatal(err)
	}
	if !(c.StandardUncertainty < 0.5*c.RootSumOfSquares) {
		t.Errorf("u of the difference %v, %v if nothing were shared", c.StandardUncertainty, c.RootSumOfSquares)
	}
	if c.Different {
		t.Errorf("the same session differs from itself: %+v", c)
	}
}

// Simulated laboratories: the covariance that numbers predict is the one that
// happens.
func TestPredictedCovarianceIsTheOneThatHappens(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 4))
	w := truth{intercept: 0.3, slope: 0.98, drift: 0.01, noise: 0.06, anchorU: 0.05, anchors: []float64{-35, -10, 20}, repeats: 3, samples: 3}
	const n = 4000
	var sum [2][2]float64
	var predicted [2][2]float64
	for range n {
		s, values := w.session(r)
		fit := valuesOnly(t, s, Model{Drift: DriftLinear})
		var d [2]float64
		for i := range 2 {
			d[i] = fit.Subjects[i].Value - values[fit.Subjects[i].Subject]
		}
		for i := range 2 {
			for j := range 2 {
				sum[i][j] += d[i] * d[j] / n
				predicted[i][j] += uncertain.Covariance(fit.Number(i), fit.Number(j)) / n
			}
		}
	}
	for i := range 2 {
		for j := range 2 {
			scale := math.Sqrt(predicted[i][i] * predicted[j][j])
			near(t, fmt.Sprint("covariance ", i, j), sum[i][j]/scale, predicted[i][j]/scale, 0.07) // 3 of √(2/n)
		}
	}
}

func TestParametersAreNumbersToo(t *testing.T) {
	for _, m := range models {
		r := mustFit(t, randomSession(81, true), m, Policy{})
		for i, p := range r.Parameters {
			n := r.ParameterNumber(i)
			near(t, m.label()+" "+p.Name, n.Value, p.Value, 0)
			near(t, m.label()+" u of "+p.Name, n.StandardUncertainty(), p.StandardUncertainty, 1e-9*p.StandardUncertainty)
			for j := range r.Parameters {
				near(t, "covariance", uncertain.Covariance(n, r.ParameterNumber(j)), r.Covariance[i][j], 1e-9*math.Sqrt(r.Covariance[i][i]*r.Covariance[j][j])+1e-25)
			}
		}
	}
}

// With known variances and no terms, the covariance is C = (XᵀΣ⁻¹X)⁻¹ exactly.
func TestSourcesSumToTheGaussNewtonCovariance(t *testing.T) {
	for _, m := range []Model{{}, {Drift: DriftQuadratic, Size: SizeLog}, {Size: SizeBlank}, {Drift: DriftBracketed}} {
		r := mustFit(t, randomSession(91, false), m, Policy{})
		c := r.calibrated.reported.covariance(r.calibrated.s.Covariance())
		for i := range r.Covariance {
			for j := range r.Covariance {
				near(t, fmt.Sprint(m.label(), i, j), r.Covariance[i][j], c.At(i, j), 1e-9*math.Sqrt(c.At(i, i)*c.At(j, j)))
			}
		}
	}
}

// Correlated readings: a common error of all readings cancels in the results.
func TestCommonErrorOfReadingsCancels(t *testing.T) {
	s := randomSession(101, false)
	n := len(s.Readings)
	plain, common := make([][]float64, n), make([][]float64, n)
	for i := range plain {
		plain[i], common[i] = make([]float64, n), make([]float64, n)
		u := *s.Readings[i].StandardUncertainty
		for j := range common {
			common[i][j] = 4
		}
		plain[i][i] = u * u
		common[i][i] += u * u
	}
	want := mustFit(t, s, Model{}, Policy{})
	s.ReadingCovariance = plain
	same := mustFit(t, s, Model{}, Policy{})
	s.ReadingCovariance = common
	got := mustFit(t, s, Model{}, Policy{})
	for i, x := range want.Subjects {
		near(t, "value", same.Subjects[i].Value, x.Value, 1e-10)
		near(t, "u", same.Subjects[i].StandardUncertainty, x.StandardUncertainty, 1e-9)
		near(t, "value with a common error", got.Subjects[i].Value, x.Value, 1e-6)
		near(t, "u with a common error", got.Subjects[i].StandardUncertainty, x.StandardUncertainty, 1e-5)
		near(t, "u of the number", got.Number(i).StandardUncertainty(), got.Subjects[i].StandardUncertainty, 1e-9)
	}
}

// Readings correlated with assigned values: an error that both share cancels
// from the residual, and the decomposition still adds up.
func TestCrossCovarianceAddsUp(t *testing.T) {
	r := rand.New(rand.NewPCG(7, 8))
	s := randomSession(111, false)
	n, m := len(s.Readings), len(s.Anchors)
	s.CrossCovariance = make([][]float64, n)
	for i := range s.CrossCovariance {
		s.CrossCovariance[i] = make([]float64, m)
		for k := range m {
			s.CrossCovariance[i][k] = 0.0002 * r.NormFloat64()
		}
	}
	got := mustFit(t, s, Model{Drift: DriftLinear}, Policy{})
	for i, x := range got.Subjects {
		near(t, "u of the number", got.Number(i).StandardUncertainty(), x.StandardUncertainty, 1e-9*x.StandardUncertainty)
	}
	// Cov θ = K Σ Kᵀ with the engine's own K.
	c := got.calibrated
	cov := c.covariance()
	sigma := c.s.Covariance()
	for a := range cov.Rows {
		for b := range cov.Rows {
			near(t, fmt.Sprint("Cov θ ", a, b), cov.At(a, b), sigma.At(a, b), 1e-8*math.Sqrt(sigma.At(a, a)*sigma.At(b, b)))
		}
	}
}

func TestNullsWhereNothingCanBeComputed(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -30, 0.05), assigned("B", 10, 0.05)}
	s.read("A", Anchor, -30, 0.1)
	s.read("B", Anchor, 10, 0.1)
	r := mustFit(t, s, Model{}, Policy{})
	if r.ChiSquare != nil || r.PValue != nil || r.ResidualSD != nil || r.AICc != nil || r.LackOfFit != nil {
		t.Errorf("ν = 0: %v %v %v %v %v, want all nil", r.ChiSquare, r.PValue, r.ResidualSD, r.AICc, r.LackOfFit)
	}
	for _, x := range r.Readings {
		if x.Predicted == nil || x.Residual == nil || x.StandardizedResidual != nil || x.StudentizedResidual != nil {
			t.Errorf("ν = 0: %+v, want a residual and nothing standardised", x)
		}
	}
	for _, a := range r.Anchors {
		if a.LeftOut != nil {
			t.Errorf("two anchors: %+v left out", a)
		}
	}
	if diff := cmp.Diff([]float64{-30, 10}, []float64{r.Anchors[0].Adjusted, r.Anchors[1].Adjusted}); diff != "" {
		t.Error(diff)
	}
}
