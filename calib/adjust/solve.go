package adjust

import (
	"errors"
)

// Limits of the iteration.
const (
	maxIterations  = 200
	maxHalvings    = 50
	conditionLimit = 1e10
)

// A Model is F(θ, τ): linear in each row's own latent value, otherwise free.
// A row has at most one latent value.
type Model interface {
	// Evaluate writes F into f and ∂F/∂τ into slope (either may be nil), and
	// ∂F/∂θ into x, one row of x for each parameter (nil for none).
	Evaluate(theta, tau, f, slope []float64, x *Matrix)
	// Bend writes the change of X in the direction (dtheta, dtau) into dx, one
	// row for each parameter, and that of the slopes into dslope.
	Bend(theta, tau, dtheta, dtau []float64, dx *Matrix, dslope []float64)
}

// A Problem is what [Solve] minimises; see the package comment.
type Problem struct {
	Model      Model
	Parameters int
	// Observed is r.
	Observed []float64
	// Latent is the index of each row's latent value, or −1. With Noise nil,
	// rows with a latent value come first: the others stay outside Σ's Cholesky.
	Latent []int
	// Values is y, and ValueCovariance V_y (nil means all exact).
	Values          []float64
	ValueCovariance *Matrix
	// ValueCovarianceLow is what V_y exceeds ValueCovariance by, where it is
	// known beyond double precision; nil for nothing. It counts with Noise only.
	ValueCovarianceLow *Matrix
	// Noise is V_r; nil means NoiseVariance times the identity.
	Noise         *Matrix
	NoiseVariance float64
	// Cross is V_ry, rows × values; nil means zero.
	Cross *Matrix
}

// A Solution is a minimum of a [Problem].
type Solution struct {
	Problem *Problem
	Theta   []float64
	// Adjusted is τ̂.
	Adjusted []float64
	// Fitted is F(θ̂, τ̂), Slope ∂F/∂τ.
	Fitted, Slope []float64
	// X is ∂F/∂θ at τ̂, one row for each parameter.
	X *Matrix
	// K is ∂θ/∂r in the Gauss–Newton sense, parameters × rows.
	K *Matrix
	// Weighted is Σ⁻¹e, zero for a solution that is Determined.
	Weighted  []float64
	ChiSquare float64
	// Iterations counts the steps of the start that won.
	Iterations int
	// Determined says that there are as many rows as parameters, so that no
	// covariance enters the estimate.
	Determined bool

	whitener *whitener // nil if Σ is singular, which only a determined solution survives
	qr       *QR
}

// Solve minimises χ² from each of the starts and keeps the lowest; of equal
// ones, the first. It writes to none of its arguments. Errors are *RankError,
// *ConditionError, *SingularError and *ConvergenceError: that of the first
// start, when every start fails.
func Solve(pr *Problem, starts ...[]float64) (*Solution, error) {
	if len(pr.Observed) < pr.Parameters {
		return nil, &RankError{Rows: len(pr.Observed), Parameters: pr.Parameters}
	}
	if len(starts) == 0 {
		return nil, errors.New("no starting point")
	}
	var best *work
	var first error
	for _, start := range starts {
		w := newWork(pr)
		copy(w.theta, start)
		var err error
		if len(pr.Observed) == pr.Parameters {
			err = w.determine()
		} else {
			err = w.minimise()
		}
		if err != nil {
			if first == nil {
				first = err
			}
			continue
		}
		if best == nil || w.chi2 < best.chi2-float64(1e-12*best.chi2) {
			best = w
		}
		if len(pr.Observed) == pr.Parameters {
			break
		}
	}
	if best == nil {
		return nil, first
	}
	return best.solution()
}

// solution gathers what follows from the last state.
func (w *work) solution() (*Solution, error) {
	pr := w.pr
	n, p := len(pr.Observed), pr.Parameters
	s := &Solution{
		Problem: pr, Theta: w.theta, Adjusted: w.tau, Slope: w.slope, Weighted: w.weighted,
		ChiSquare: w.chi2, Iterations: w.iterations,
		Determined: n == p, Fitted: make([]float64, n), X: NewMatrix(p, n), K: NewMatrix(p, n),
		qr: w.qr,
	}
	if !w.determinedOnly {
		s.whitener = &w.white
	}
	pr.Model.Evaluate(s.Theta, s.Adjusted, s.Fitted, nil, s.X)
	s.fillK(w.rows)
	return s, nil
}

// Condition is the condition number of the whitened X with columns of unit
// length (of a determined solution, with rows of unit length).
func (s *Solution) Condition() float64 { return s.qr.condition() }

// fillK computes K = (R D)⁻¹ Qᵀ L⁻¹, column by column of Qᵀ; for a determined
// solution without L.
func (s *Solution) fillK(rows []float64) {
	n, p := len(s.Problem.Observed), s.Problem.Parameters
	// Row k of K, transposed, is L⁻ᵀ Q (R D)⁻ᵀ applied to unit vector k.
	v := make([]float64, n)
	for k := 0; k < p; k++ {
		for i := range v {
			v[i] = 0
		}
		v[k] = 1
		s.qr.solveTransposed(v[:p])
		for j := p - 1; j >= 0; j-- {
			s.qr.reflect(j, v)
		}
		if s.Determined {
			for i, r := range rows {
				v[i] = float64(v[i] * r)
			}
		} else {
			s.whitener.applyTransposed(v)
		}
		copy(s.K.Row(k), v)
	}
}

// Covariance is C = (Xᵀ Σ⁻¹ X)⁻¹ = K Σ Kᵀ for a solution that is not determined.
func (s *Solution) Covariance() *Matrix {
	p := s.Problem.Parameters
	c := NewMatrix(p, p)
	half := NewMatrix(p, p) // row k is (R D)⁻ᵀ applied to unit vector k, row k of (R D)⁻¹
	for k := 0; k < p; k++ {
		row := half.Row(k)
		row[k] = 1
		s.qr.solveTransposed(row)
	}
	for i := 0; i < p; i++ {
		for j := 0; j <= i; j++ {
			v := Dot(half.Row(i), half.Row(j))
			c.Set(i, j, v)
			c.Set(j, i, v)
		}
	}
	return c
}

// Projection returns P = Σ⁻¹ − Σ⁻¹ X C Xᵀ Σ⁻¹ and Σ⁻¹, rows × rows; nil and nil
// where Σ is singular.
func (s *Solution) Projection() (p, inverse *Matrix) {
	if s.whitener == nil {
		return nil, nil
	}
	n, q := len(s.Problem.Observed), s.Problem.Parameters
	// Column i of L⁻¹, before and after Qᵀ: the last n − q rows after it are
	// what no parameter explains, so P is a sum of squares and never negative.
	w := NewMatrix(n, n)
	for i := 0; i < n; i++ {
		row := w.Row(i)
		row[i] = 1
		s.whitener.apply(row)
	}
	inverse = gram(w, 0)
	if s.Determined {
		return NewMatrix(n, n), inverse
	}
	for i := 0; i < n; i++ {
		s.qr.transposed(w.Row(i))
	}
	return gram(w, q), inverse
}

// gram returns the products of the rows of w, from column start on.
func gram(w *Matrix, start int) *Matrix {
	g := NewMatrix(w.Rows, w.Rows)
	for i := 0; i < w.Rows; i++ {
		a := w.Row(i)[start:]
		for j := 0; j <= i; j++ {
			v := Dot(a, w.Row(j)[start:])
			g.Set(i, j, v)
			g.Set(j, i, v)
		}
	}
	return g
}
