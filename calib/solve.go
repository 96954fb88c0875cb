package calib

import (
	"errors"
	"fmt"
	"math"

	"deltamoor/calib/adjust"
)

// A solved problem is a fit with its variances.
type solved struct {
	*problem
	r         *reduction
	s         *adjust.Solution
	variances *variances // nil for declared, known
	// unit is the variance of the reduction's rows: φ for one estimated
	// variance, 1 otherwise.
	unit       float64
	iterations int
}

// solve adjusts the problem with the model's weights.
func (p *problem) solve() (*solved, error) {
	if len(p.fitted) < p.layout.p {
		return nil, &TooFewReadingsError{Refusal{Place: "readings", Found: fmt.Sprintf("%d fitted", len(p.fitted)), Expected: fmt.Sprintf("at least %d, one for each parameter", p.layout.p)}}
	}
	if !p.in.model.estimated() {
		return p.solveDeclared()
	}
	if len(p.fitted) == p.layout.p {
		return nil, p.noDegrees(0)
	}
	patterns, names := p.patternsFor()
	v := &variances{patterns: patterns, names: names, phi: make([]float64, len(patterns))}
	switch {
	case p.in.model.weights() == WeightsReplicate && len(patterns) == 1:
		return p.solveReplicate(v)
	case p.in.model.weights() == WeightsReplicate:
		return p.solveReplicatePreparations(v)
	case len(patterns) == 1:
		return p.solveEqual(v)
	}
	return p.solveComponents(v)
}

func (p *problem) noDegrees(nu int) error {
	what := "at least one more fitted reading than parameters"
	if p.in.model.weights() == WeightsReplicate {
		what = "repeated readings of a material"
	}
	return &NoReplicatesError{Refusal{Place: "model.weights", Found: fmt.Sprintf("%d degrees of freedom for weights %s", nu, p.in.model.weights()), Expected: what + ", or declared weights"}}
}

func (p *problem) solveDeclared() (*solved, error) {
	var v *variances
	if nu := p.in.model.DeclaredDF; nu != nil && !math.IsInf(*nu, 1) {
		v = &variances{patterns: []pattern{patternDeclared}, names: []string{"declared"}, phi: []float64{1}, cov: adjust.NewMatrix(1, 1)}
		v.cov.Set(0, 0, 2 / *nu)
	}
	w := (*whitening)(nil)
	if p.in.covariance == nil && p.in.cross == nil {
		w = p.whiten(v)
	}
	if w == nil {
		return p.solveDense(v)
	}
	r, err := p.reduce(w)
	if err != nil {
		return nil, err
	}
	return p.finish(r, v, 1, nil)
}

// solveDense adjusts without reduction.
func (p *problem) solveDense(v *variances) (*solved, error) {
	if len(p.fitted) > MaxDenseReadings {
		return nil, &TooManyError{Refusal{Place: "readings", Found: fmt.Sprint(len(p.fitted)), Expected: fmt.Sprintf("at most %d with exact or correlated readings", MaxDenseReadings)}}
	}
	// The reduction is still made, for its refusals.
	if _, err := p.reduce(p.unitWhitening()); err != nil {
		return nil, err
	}
	r := p.raw()
	r.noise = adjust.NewMatrix(r.n, r.n)
	for a, i := range p.fitted {
		if p.in.covariance == nil {
			r.noise.Set(a, a, float64(p.in.readings[i].u*p.in.readings[i].u))
			continue
		}
		for b, j := range p.fitted {
			r.noise.Set(a, b, p.in.covariance.At(i, j))
		}
	}
	if p.in.cross != nil {
		r.cross = adjust.NewMatrix(r.n, len(p.anchors))
		for a, i := range p.fitted {
			for k, l := range p.anchors {
				r.cross.Set(a, k, p.in.cross.At(i, l))
			}
		}
	}
	s, err := p.finish(r, v, 1, nil)
	var singular *SingularError
	if errors.As(err, &singular) && adjust.SemiCholesky(r.noise.Copy()) != nil {
		return nil, notPositive()
	}
	return s, err
}

func notPositive() error {
	return &CovarianceError{Refusal{Place: "reading_covariance", Found: "a negative variance of some combination of readings and anchors", Expected: "a covariance that is positive semidefinite together with the anchors' and the cross-covariance"}}
}

// finish solves the reduction at fixed variances.
func (p *problem) finish(r *reduction, v *variances, unit float64, start []float64) (*solved, error) {
	pr := &adjust.Problem{
		Model: r.model, Parameters: p.layout.p, Observed: r.z, Latent: r.model.latent,
		Values: p.values, ValueCovariance: p.vy, ValueCovarianceLow: p.vyLow, Noise: r.noise, NoiseVariance: unit, Cross: r.cross,
	}
	var starts [][]float64
	if start != nil {
		starts = [][]float64{start}
	} else {
		var err error
		if starts, err = p.starts(r); err != nil {
			return nil, p.refuse(err)
		}
	}
	s, err := adjust.Solve(pr, starts...)
	if err != nil {
		return nil, p.refuse(err)
	}
	return &solved{problem: p, r: r, s: s, variances: v, unit: unit, iterations: s.Iterations}, nil
}

// solveReplicate takes σ² from the fit with every level free.
func (p *problem) solveReplicate(v *variances) (*solved, error) {
	r, err := p.reduce(p.unitWhitening())
	if err != nil {
		return nil, err
	}
	rss, nu, err := p.freeResidual(r)
	if err != nil {
		return nil, err
	}
	if nu <= 0 {
		return nil, p.noDegrees(nu)
	}
	phi := math.Max(rss/float64(nu), p.leastVariance())
	v.phi[0] = phi
	v.cov = adjust.NewMatrix(1, 1)
	v.cov.Set(0, 0, float64(2*phi*phi)/float64(nu))
	return p.finish(r, v, phi, nil)
}

// freeResidual is the residual sum of squares with every level free, and its
// degrees of freedom, at unit variance. With a blank the free fit keeps the
// blank's two coefficients, at the assigned values.
func (p *problem) freeResidual(r *reduction) (rss float64, nu int, err error) {
	nu = r.freeDF()
	rss = r.tailSquares
	if p.layout.blank < 0 {
		return rss, nu, nil
	}
	x, b, contrasts := p.blankContrasts(r)
	if contrasts < 2 {
		return 0, 0, p.blankRefusal()
	}
	k, err := adjust.LeastSquares(x, b)
	if err != nil {
		return 0, 0, p.blankRefusal()
	}
	for i, z := range b {
		d := z
		for t, c := range k {
			d -= float64(x.At(t, i) * c)
		}
		rss += float64(d * d)
	}
	return rss, nu + contrasts - 2, nil
}

// solveEqual estimates one σ² by REML with V_y held: eᵀΣ⁻¹Σ⁻¹e = tr P.
func (p *problem) solveEqual(v *variances) (*solved, error) {
	r, err := p.reduce(p.unitWhitening())
	if err != nil {
		return nil, err
	}
	least := p.leastVariance()
	phi, err := p.firstVariance(r)
	if err != nil {
		return nil, err
	}
	phi = math.Max(phi, least)
	var start []float64
	free := float64(r.freeDF())
	last, low, high := math.Inf(1), 0.0, math.Inf(1)
	for iteration := 1; ; iteration++ {
		s, err := p.finish(r, v, phi, start)
		if err != nil {
			return nil, err
		}
		start = s.s.Theta
		proj, _ := s.s.Projection()
		if proj == nil {
			return nil, p.refuse(&adjust.SingularError{})
		}
		trace, square := free/phi, free/float64(phi*phi)
		for i := 0; i < proj.Rows; i++ {
			trace += proj.At(i, i)
			square += adjust.Dot(proj.Row(i), proj.Row(i))
		}
		quadratic := adjust.Dot(s.s.Weighted, s.s.Weighted) + r.tailSquares/float64(phi*phi)
		step := (quadratic - trace) / square
		if step > 0 {
			low = phi
		} else {
			high = phi
		}
		next := math.Max(phi+step, least)
		if next < phi/10 {
			next = math.Max(phi/10, least)
		}
		if next < low || next > high {
			// Where the score changes sign between two values, it is between them.
			next = math.Max(low+float64(0.5*(high-low)), least)
		}
		move := math.Abs(next-phi) / phi
		if move <= 1e-15 || (move >= last && last < 1e-9) || next == phi {
			v.phi[0] = phi
			v.cov = adjust.NewMatrix(1, 1)
			v.cov.Set(0, 0, 2/square)
			s.iterations = iteration
			// The last start was the solution; both starts decide which minimum it is.
			return p.confirm(s, v)
		}
		if iteration == 500 {
			return nil, &ConvergenceError{Refusal{Place: "model.weights", Found: "variance not settled after 500 iterations", Expected: "a maximum of the restricted likelihood"}}
		}
		phi, last = next, move
	}
}

// confirm solves once more from both starts at the settled variance.
func (p *problem) confirm(s *solved, v *variances) (*solved, error) {
	if p.vy == nil && p.layout.memory < 0 && p.layout.gas < 0 {
		return s, nil // linear: one minimum
	}
	again, err := p.finish(s.r, v, s.unit, nil)
	if err != nil || !(again.s.ChiSquare < s.s.ChiSquare-float64(1e-9*s.s.ChiSquare)) {
		return s, nil
	}
	again.iterations = s.iterations
	return again, nil
}

// firstVariance starts the iteration: the free levels' residual where there is
// one, else that of least squares at the assigned values.
func (p *problem) firstVariance(r *reduction) (float64, error) {
	rss, nu, err := p.freeResidual(r)
	if err != nil {
		return 0, err
	}
	if nu > 0 {
		return rss / float64(nu), nil
	}
	starts, err := p.starts(r)
	if err != nil {
		return 0, p.refuse(err)
	}
	f := make([]float64, len(r.z))
	r.model.Evaluate(starts[0], p.values, f, nil, nil)
	rss = r.tailSquares
	for i, z := range r.z {
		rss += float64((z - f[i]) * (z - f[i]))
	}
	return rss / float64(r.n-p.layout.p), nil
}
