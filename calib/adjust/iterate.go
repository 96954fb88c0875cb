package adjust

import (
	"math"
)

// A whitener applies L⁻¹ and L⁻ᵀ for Σ = L Lᵀ. The rows from n on are
// uncorrelated with the others and have one variance.
type whitener struct {
	l  *Matrix
	n  int
	sd float64
}

func (w *whitener) apply(b []float64) {
	SolveLower(w.l, b[:w.n])
	for i := w.n; i < len(b); i++ {
		b[i] /= w.sd
	}
}

func (w *whitener) applyTransposed(b []float64) {
	SolveLowerTransposed(w.l, b[:w.n])
	for i := w.n; i < len(b); i++ {
		b[i] /= w.sd
	}
}

// work is one start's state.
type work struct {
	pr             *Problem
	white          whitener
	theta, trial   []float64
	f, slope       []float64
	e, white1      []float64 // e and L⁻¹e
	weighted, tau  []float64
	qr             *QR
	step, rhs      []float64
	chi2           float64
	iterations     int
	best           float64 // shortest step so far
	stale          int     // steps since
	rows           []float64
	determinedOnly bool   // Σ is singular
	pairs          []pair // of Σ, for extended precision
}

func newWork(pr *Problem) *work {
	n, p, m := len(pr.Observed), pr.Parameters, len(pr.Values)
	buffer := make([]float64, 6*n+4*p+m)
	take := func(k int) []float64 {
		b := buffer[:k:k]
		buffer = buffer[k:]
		return b
	}
	coupled := n
	if pr.Noise == nil {
		coupled = 0
		for i, k := range pr.Latent {
			if k >= 0 {
				coupled = i + 1
			}
		}
	}
	return &work{
		pr: pr, white: whitener{l: NewMatrix(coupled, coupled), n: coupled, sd: math.Sqrt(pr.NoiseVariance)},
		theta: take(p), trial: take(p), step: take(p), rhs: take(n),
		f: take(n), slope: take(n), e: take(n), white1: take(n), weighted: take(n), tau: take(m),
		qr: newQR(p, n),
	}
}

// evaluate computes e, Σ and its factor, and χ² at θ.
func (w *work) evaluate(theta []float64) error {
	pr := w.pr
	pr.Model.Evaluate(theta, pr.Values, w.f, w.slope, nil)
	for i, r := range pr.Observed {
		w.e[i] = r - w.f[i]
	}
	if err := w.factorSigma(); err != nil {
		return err
	}
	if w.white.n < len(w.e) && !(w.white.sd > 0) {
		return &SingularError{Row: w.white.n}
	}
	copy(w.white1, w.e)
	w.white.apply(w.white1)
	w.chi2 = Dot(w.white1, w.white1)
	if math.IsNaN(w.chi2) || math.IsInf(w.chi2, 0) {
		return &SingularError{Row: 0, Pivot: w.chi2}
	}
	return nil
}

// fillSigma writes the lower triangle of Σ for the coupled rows.
func (w *work) fillSigma() {
	for i := 0; i < w.white.n; i++ {
		row := w.white.l.Row(i)
		for j := 0; j <= i; j++ {
			row[j] = w.sigma(i, j)
		}
	}
}

// sigma is element (i, j) of Σ at the current slopes.
func (w *work) sigma(i, j int) float64 {
	pr := w.pr
	var v float64
	switch {
	case pr.Noise != nil:
		v = pr.Noise.At(i, j)
	case i == j:
		v = pr.NoiseVariance
	}
	ki, kj := pr.Latent[i], pr.Latent[j]
	if pr.ValueCovariance != nil && ki >= 0 && kj >= 0 {
		v += float64(w.slope[i] * w.slope[j] * pr.ValueCovariance.At(ki, kj))
	}
	if pr.Cross != nil {
		if ki >= 0 {
			v -= float64(w.slope[i] * pr.Cross.At(j, ki))
		}
		if kj >= 0 {
			v -= float64(w.slope[j] * pr.Cross.At(i, kj))
		}
	}
	return v
}

// adjustLatent computes Σ⁻¹e and τ̂ from L⁻¹e.
func (w *work) adjustLatent() {
	copy(w.weighted, w.white1)
	w.white.applyTransposed(w.weighted)
	w.spread(w.weighted, w.slope, w.tau)
	for k, y := range w.pr.Values {
		w.tau[k] += y
	}
}

// spread writes (V_y Gᵀ S − V_yr) v into tau.
func (w *work) spread(v, slope, tau []float64) {
	pr := w.pr
	for k := range tau {
		tau[k] = 0
	}
	if pr.ValueCovariance != nil {
		for i, l := range pr.Latent {
			if l < 0 {
				continue
			}
			if c := float64(slope[i] * v[i]); c != 0 {
				AddScaled(tau, c, pr.ValueCovariance.Row(l))
			}
		}
	}
	if pr.Cross != nil {
		for i := range v {
			AddScaled(tau, -v[i], pr.Cross.Row(i))
		}
	}
}

// linearise factors the whitened X at τ̂ and computes the Gauss–Newton step
// into w.step; it returns the step's length in standard uncertainties.
func (w *work) linearise() (float64, error) {
	w.adjustLatent()
	w.pr.Model.Evaluate(w.theta, w.tau, nil, nil, w.qr.columns)
	for k := 0; k < w.pr.Parameters; k++ {
		w.white.apply(w.qr.columns.Row(k))
	}
	if err := w.qr.factor(); err != nil {
		return 0, err
	}
	copy(w.rhs, w.white1)
	w.qr.transposed(w.rhs)
	w.qr.solve(w.rhs, w.step)
	return Norm(w.rhs[:w.pr.Parameters]), nil
}

// slowStep is the step, in standard uncertainties, at which the last iteration
// counts as settled although its steps still get smaller: where residuals are
// large, Gauss–Newton converges slowly.
const slowStep = 1e-7

// minimise iterates to stagnation.
func (w *work) minimise() error {
	if err := w.evaluate(w.theta); err != nil {
		return err
	}
	w.best = math.Inf(1)
	for w.iterations = 1; ; w.iterations++ {
		length, err := w.linearise()
		if err != nil {
			return err
		}
		if w.settled(length) {
			break
		}
		if w.iterations == 1 || w.iterations == maxIterations {
			// Steps along a direction that is hardly determined need not settle.
			if err := w.qr.checkCondition(10 * conditionLimit); err != nil {
				return err
			}
		}
		if w.iterations == maxIterations {
			if length <= float64(slowStep*(1+math.Sqrt(w.chi2))) {
				break // slow, and still getting smaller, far below any uncertainty
			}
			return &ConvergenceError{Iterations: w.iterations, Step: length}
		}
		if err := w.advance(); err != nil {
			return err
		}
	}
	return w.qr.checkCondition(conditionLimit)
}

// settled says that the step is lost in rounding, or no longer gets smaller.
func (w *work) settled(length float64) bool {
	if length < w.best {
		w.best, w.stale = length, 0
	} else {
		w.stale++
	}
	// Readings that agree to rounding make steps of rounding look large beside
	// their uncertainty; those are told from slow progress by their persistence.
	size := 1 + math.Sqrt(w.chi2)
	if w.stale > 0 && w.best <= float64(1e-6*size) || w.stale > 3 && w.best <= float64(1e-3*size) {
		return true
	}
	for k, d := range w.step {
		// The column's scale is 1/u of the parameter with the others held.
		u := 1 / w.qr.scale[k]
		if math.Abs(d) > float64(2e-16*math.Abs(w.theta[k]))+float64(1e-15*u) {
			return false
		}
	}
	return true
}

// advance takes the step, halved while it raises χ².
func (w *work) advance() error {
	before := w.chi2
	factor := 1.0
	var failure error
	for h := 0; h < maxHalvings; h++ {
		for k := range w.trial {
			w.trial[k] = w.theta[k] + float64(factor*w.step[k])
		}
		failure = w.evaluate(w.trial)
		if failure == nil && w.chi2 <= before+float64(1e-11*before)+1e-20 {
			copy(w.theta, w.trial)
			return nil
		}
		factor /= 2
	}
	// No part of the step lowers χ²: the minimum is here, to rounding.
	if failure != nil {
		return failure
	}
	copy(w.trial, w.theta)
	return w.evaluate(w.theta)
}

// determine solves F(θ, y) = r for as many rows as parameters: Σ does not enter.
func (w *work) determine() error {
	copy(w.tau, w.pr.Values)
	last := math.Inf(1)
	for w.iterations = 1; ; w.iterations++ {
		w.pr.Model.Evaluate(w.theta, w.tau, w.f, w.slope, w.qr.columns)
		w.equilibrate()
		for i, r := range w.pr.Observed {
			w.rhs[i] = float64((r - w.f[i]) * w.rows[i])
		}
		if err := w.qr.factor(); err != nil {
			return err
		}
		w.qr.transposed(w.rhs)
		w.qr.solve(w.rhs, w.step)
		length, small := 0.0, true
		for k, d := range w.step {
			length = math.Max(length, math.Abs(d)*w.qr.scale[k])
			small = small && math.Abs(d) <= 2e-16*math.Abs(w.theta[k])
		}
		if math.IsNaN(length) {
			return &ConvergenceError{Iterations: w.iterations, Step: length}
		}
		if small || (length >= last && w.iterations > 2) {
			break
		}
		if w.iterations == maxIterations {
			return &ConvergenceError{Iterations: w.iterations, Step: length}
		}
		last = length
		for k, d := range w.step {
			w.theta[k] += d
		}
	}
	if err := w.qr.checkCondition(conditionLimit); err != nil {
		return err
	}
	// Σ is wanted for diagnostics only, and may be singular.
	w.determinedOnly = w.evaluate(w.theta) != nil
	w.chi2 = 0
	for i := range w.weighted {
		w.weighted[i] = 0
	}
	return nil
}

// equilibrate scales the rows of X to unit length: rows of very different
// uncertainty are no reason to refuse what no uncertainty enters.
func (w *work) equilibrate() {
	if w.rows == nil {
		w.rows = make([]float64, len(w.pr.Observed))
	}
	clear(w.rows)
	x := w.qr.columns
	for k := 0; k < x.Rows; k++ {
		for i, v := range x.Row(k) {
			w.rows[i] += float64(v * v)
		}
	}
	for i, v := range w.rows {
		w.rows[i] = 1
		if v > 0 {
			w.rows[i] = 1 / math.Sqrt(v)
		}
	}
	for k := 0; k < x.Rows; k++ {
		for i, v := range x.Row(k) {
			x.Set(k, i, float64(v*w.rows[i]))
		}
	}
}
