package calib

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/adjust"
)

// huberConstant is k of the companion: readings further than k of their own
// standard uncertainties from the line pull on it as if they were at k. With
// 1.5 it is the estimator H15 of the Analytical Methods Committee (1989,
// doi:10.1039/AN9891401693), which has 96 % of least squares' efficiency where
// the noise is normal.
const huberConstant = 1.5

// companionIterations bounds the reweighting; companionTolerance is the change
// of a weight or of the scale at which it has settled, and companionSlow the
// one at which the last iteration is taken as it is: reweighting converges
// linearly, and an opinion needs no more digits.
const (
	companionIterations = 300
	companionTolerance  = 1e-12
	companionSlow       = 1e-6
)

// A Companion is a robust fit of the same session with the same model, as an
// opinion to be held beside the official fit. It never replaces it and enters
// no result: leaving a reading out needs a person and a reason.
//
// It is Huber's M-estimator, with the anchors' uncertainties kept as declared:
//
//	minimise Σ 2ρ((r_i − f_i)/(s·u_i)) + (τ − y)ᵀV_y⁻¹(τ − y),
//	ρ(t) = t²/2 for |t| ≤ k, k|t| − k²/2 beyond;  k = 1.5
//
// by reweighted least squares: a reading's variance is divided by its weight,
// w = min(1, k·s·u/|r − f|), until nothing changes; correlated readings keep
// their covariances, so that what is added is their own. Terms in time, size and memory are those of the model. With
// declared uncertainties s is 1. With estimated ones the scale is estimated too,
// by Huber's second proposal,
//
//	Σ min((r_i − f_i)²/u_i², k²s²) = s²·ν·E[min(z², k²)],  z standard normal,
//
// u_i being the official fit's, ν the degrees of freedom that its readings
// leave, Σ V_ii P_ii; with weights replicate about the free levels, as there.
//
// Huber's was chosen among robust estimators because where the terms are linear
// it is convex, so there is one answer and no random start, and because in a
// calibration the abscissae are known: what high-breakdown estimators (MM) guard
// against, a whole anchor that is off at the end of the line, is the question
// of [AnchorResult.LeftOut]. It cannot save a fit from such an anchor, and with
// an estimated scale not from more than a quarter of the readings.
//
// Sources: Huber 1964, Robust estimation of a location parameter,
// doi:10.1214/aoms/1177703732; Huber, Ronchetti 2009, Robust Statistics, chapter
// 7, doi:10.1002/9780470434697; Holland, Welsch 1977, Robust regression using
// iteratively reweighted least-squares, doi:10.1080/03610927708827533.
type Companion struct {
	// Method says in words what it is, TuningConstant its k.
	Method         string
	TuningConstant float64
	// Scale is s, by which it thinks the readings' estimated standard
	// uncertainties should be multiplied; nil for declared ones.
	Scale *float64
	// Parameters in the order of the official fit's.
	Parameters []CompanionParameter
	// Line is true = Slope·raw + Intercept, without uncertainties; nil for a slope of zero.
	Line *CompanionLine
	// Readings are those that were fitted, in the session's order.
	Readings []CompanionReading
	// Subjects are the samples and controls of the official fit, in its order. The
	// weights of a sample's own readings are the official ones.
	Subjects []CompanionSubject
	// Suggested lists the readings further from its line than the policy's limit
	// for studentised residuals: worth a look, no more.
	Suggested  []int
	Iterations int
}

// A CompanionParameter is one coefficient of the companion. It has no
// uncertainty of its own; Difference is from the official one, InUnits that by
// the official standard uncertainty, nil where that is zero.
type CompanionParameter struct {
	Name              string
	Value, Difference float64
	InUnits           *float64
}

// A CompanionLine is the line as usually quoted, without uncertainties.
type CompanionLine struct{ Slope, Intercept float64 }

// A CompanionReading is one fitted reading: its distance from the companion's
// line (‰, and in units of its own standard uncertainty, nil for an exact one)
// and its weight, 1 for a full one.
type CompanionReading struct {
	Index    int
	Residual float64
	InUnits  *float64
	Weight   float64
}

// A CompanionSubject is a sample's or control's value by the companion's line.
// InUnits is Difference, companion less official, by the official standard
// uncertainty; nil where that is zero.
type CompanionSubject struct {
	Subject           string
	Role              Role
	Value, Difference float64
	InUnits           *float64
}

// Companion fits the session of the result robustly. The cost grows with the
// square of the parameters and with the number of reweightings; more than
// [MaxDenseReadings] fitted readings are a *TooManyError, weights that do not
// settle a *ConvergenceError.
func (r *Result) Companion() (*Companion, error) { return r.companion(huberConstant) }

func (r *Result) companion(k float64) (*Companion, error) {
	c := r.calibrated.private()
	if n := len(c.fitted); n > MaxDenseReadings {
		return nil, &TooManyError{Refusal{Place: "readings", Found: fmt.Sprintf("%d fitted", n), Expected: fmt.Sprintf("at most %d for a robust companion", MaxDenseReadings)}}
	}
	if n := len(c.in.readings); n > MaxDenseReadings && c.nz.phiA > 0 {
		return nil, &TooManyError{Refusal{Place: "readings", Found: fmt.Sprint(n), Expected: fmt.Sprintf("at most %d for a robust companion with preparations", MaxDenseReadings)}}
	}
	b := c.newReweighting(k)
	s, err := b.run()
	if err != nil {
		return nil, err
	}
	robust, err := s.calibrate()
	if err != nil {
		return nil, err
	}
	return b.companion(r, robust), nil
}

// A reweighting is the iteration of one companion.
type reweighting struct {
	c     *calibrated
	k     float64
	in    *input // the session with its readings' variances divided by their weights
	u     []float64
	w     []float64 // of the fitted readings, in their order
	scale float64
	// covariance is the official one of correlated readings; nil for none.
	covariance *adjust.Matrix
	iterations int
}

func (c *calibrated) newReweighting(k float64) *reweighting {
	b := &reweighting{c: c, k: k, scale: 1, u: make([]float64, len(c.in.readings)), w: make([]float64, len(c.fitted))}
	for j := range b.w {
		b.w[j] = 1
	}
	in := *c.in
	in.readings = slices.Clone(c.in.readings)
	in.model.Weights, in.model.DeclaredDF = WeightsDeclared, nil
	b.in = &in
	for i := range in.readings {
		b.u[i] = math.Sqrt(c.nz.own[i] + c.nz.phiA)
		if c.in.covariance != nil {
			b.u[i] = math.Sqrt(math.Max(0, c.in.covariance.At(i, i)))
		}
	}
	if c.in.covariance != nil {
		b.covariance = c.in.covariance
	} else if c.nz.phiA > 0 {
		// Readings of one preparation share its variance.
		n := len(in.readings)
		b.covariance = adjust.NewMatrix(n, n)
		members := map[int][]int{}
		for i := range in.readings {
			b.covariance.Set(i, i, float64(b.u[i]*b.u[i]))
			for _, j := range members[in.readings[i].preparation] {
				b.covariance.Set(i, j, c.nz.phiA)
				b.covariance.Set(j, i, c.nz.phiA)
			}
			members[in.readings[i].preparation] = append(members[in.readings[i].preparation], i)
		}
	}
	return b
}

// run reweights until weights and scale settle.
func (b *reweighting) run() (*solved, error) {
	estimated := b.c.in.model.estimated()
	var residuals []float64
	var nu float64
	if estimated {
		if b.c.in.model.weights() == WeightsReplicate {
			if err := b.freeScale(); err != nil {
				return nil, err
			}
		} else {
			nu = b.degreesLeft()
			residuals = b.c.residuals()
			b.rescale(residuals, nu)
		}
	}
	for b.iterations = 1; ; b.iterations++ {
		s, err := b.solve()
		if err != nil {
			return nil, err
		}
		residuals = s.residuals()
		moved := 0.0
		if nu > 0 {
			moved = b.rescale(residuals, nu)
		}
		moved = math.Max(moved, b.reweight(residuals))
		if moved <= companionTolerance || b.iterations == companionIterations && moved <= companionSlow {
			return s, nil
		}
		if b.iterations == companionIterations {
			return nil, &ConvergenceError{Refusal{Place: "companion", Found: fmt.Sprintf("weights not settled after %d iterations", companionIterations), Expected: "a minimum of Huber's function"}}
		}
	}
}

// solve adjusts the session at the present weights.
func (b *reweighting) solve() (*solved, error) {
	in := b.in
	for i := range in.readings {
		in.readings[i].u = float64(b.u[i] * b.scale)
	}
	for j, i := range b.c.fitted {
		in.readings[i].u = float64(b.u[i]*b.scale) / math.Sqrt(b.w[j])
	}
	if b.covariance != nil {
		in.covariance = b.covariance.Copy()
		for i, v := range in.covariance.Data {
			in.covariance.Data[i] = float64(v * float64(b.scale*b.scale))
		}
		for _, i := range b.c.fitted {
			u := in.readings[i].u
			in.covariance.Set(i, i, float64(u*u))
		}
	}
	p, err := in.newProblem(-1)
	if err != nil {
		return nil, err
	}
	return p.solveDeclared()
}

// standardized is |residual|/u of a fitted reading; 0 for an exact one, which
// the fit goes through.
func (b *reweighting) standardized(j int, residual float64) float64 {
	if u := b.u[b.c.fitted[j]]; u > 0 {
		return math.Abs(residual) / u
	}
	return 0
}

// reweight sets w = min(1, k·s/|t|) and returns the largest change.
func (b *reweighting) reweight(residuals []float64) float64 {
	moved := 0.0
	for j, e := range residuals {
		w := huberWeight(b.standardized(j, e), float64(b.k*b.scale))
		moved = math.Max(moved, math.Abs(w-b.w[j]))
		b.w[j] = w
	}
	return moved
}

func huberWeight(t, limit float64) float64 {
	if t <= limit {
		return 1
	}
	return limit / t
}

// rescale takes one step of proposal 2 and returns the relative change.
func (b *reweighting) rescale(residuals []float64, nu float64) float64 {
	limit := float64(b.k * b.scale)
	var sum float64
	for j, e := range residuals {
		t := math.Min(b.standardized(j, e), limit)
		sum += float64(t * t)
	}
	next := math.Max(math.Sqrt(sum/float64(nu*expectedSquare(b.k))), leastScale)
	moved := math.Abs(next-b.scale) / b.scale
	b.scale = next
	return moved
}

// leastScale keeps the scale off zero where more than half of the readings agree exactly.
const leastScale = 1e-9

// expectedSquare is E[min(z², k²)] of a standard normal z:
// P(|z| ≤ k) − 2kφ(k) + k²·P(|z| > k).
func expectedSquare(k float64) float64 {
	beyond := float64(2 * distuv.UnitNormal.Survival(k))
	return 1 - beyond - float64(2*float64(k*distuv.UnitNormal.Prob(k))) + float64(float64(k*k)*beyond)
}

// degreesLeft is Σ V_ii P_ii of the official fit: how many degrees of freedom
// the fit leaves to its readings' residuals, n − p for exact anchors.
func (b *reweighting) degreesLeft() float64 {
	c := b.c
	n := float64(c.r.n - c.layout.p)
	proj, inverse := c.s.Projection()
	if proj == nil {
		return n
	}
	coordinates := make([]float64, len(c.r.z))
	var nu float64
	for j, i := range c.fitted {
		pii, _ := c.diagonals(j, proj, inverse, coordinates)
		nu += float64(float64(b.u[i]*b.u[i]) * pii)
	}
	return nu
}

// freeScale finds the scale about the free levels, for weights replicate: a
// robust regression of its own, of the raw deltas on one level for each
// material and all terms.
func (b *reweighting) freeScale() error {
	c := b.c
	n := len(c.fitted)
	x, y := b.freeColumns()
	nu := float64(n - x.Rows)
	residuals := make([]float64, n)
	scaled, target := adjust.NewMatrix(x.Rows, n), make([]float64, n)
	for iteration := 0; ; iteration++ {
		for j, i := range c.fitted {
			f := math.Sqrt(b.w[j]) / b.u[i]
			for k := 0; k < x.Rows; k++ {
				scaled.Set(k, j, float64(x.At(k, j)*f))
			}
			target[j] = float64(y[j] * f)
		}
		theta, err := adjust.LeastSquares(scaled, target)
		if err != nil {
			return c.refuse(err)
		}
		for j := range residuals {
			residuals[j] = y[j]
			for k, t := range theta {
				residuals[j] -= float64(x.At(k, j) * t)
			}
		}
		moved := math.Max(b.rescale(residuals, nu), b.reweight(residuals))
		if moved <= companionTolerance || iteration == companionIterations && moved <= companionSlow {
			return nil
		}
		if iteration == companionIterations {
			return &ConvergenceError{Refusal{Place: "companion", Found: fmt.Sprintf("scale not settled after %d iterations", companionIterations), Expected: "a scale of the readings about their materials' levels"}}
		}
	}
}

// freeColumns are the columns of the fit with every level free, as many as it
// has parameters, and the raw deltas.
func (b *reweighting) freeColumns() (x *adjust.Matrix, y []float64) {
	c := b.c
	n, first := len(c.fitted), len(c.classes)
	width := first + c.layout.globals
	if c.layout.memory >= 0 {
		width++
	}
	if c.layout.blank >= 0 {
		width += 2
	}
	x, y = adjust.NewMatrix(width, n), make([]float64, n)
	basis := make([]float64, c.layout.globals+1)
	for j, i := range c.fitted {
		rd := &c.in.readings[i]
		k := c.class[j]
		x.Set(k, j, 1)
		c.columns(rd, basis)
		for t := 0; t < c.layout.globals; t++ {
			x.Set(first+t, j, basis[t])
		}
		at := first + c.layout.globals
		if c.layout.memory >= 0 {
			x.Set(at, j, basis[c.layout.globals])
			at++
		}
		if c.layout.blank >= 0 {
			// At the assigned values, as the official variance.
			h := c.size.value(rd.size)
			tau := 0.0
			if a := c.classes[k].anchor; a >= 0 {
				tau = c.values[a]
			} else {
				tau = (c.s.Theta[c.layout.levels[k]] - c.state.alpha) / c.state.beta
			}
			x.Set(at, j, h)
			x.Set(at+1, j, float64(h*tau))
		}
		y[j] = rd.raw - c.r0
	}
	return x, y
}

// companion writes the settled fit beside the official result.
func (b *reweighting) companion(official *Result, robust *calibrated) *Companion {
	c := b.c
	out := &Companion{TuningConstant: b.k, Iterations: b.iterations,
		Method: fmt.Sprintf("Huber M-estimate, k = %g", b.k)}
	if c.in.model.estimated() {
		out.Scale = pointer(b.scale)
	}
	units := func(difference, u float64) *float64 {
		if !(u > 0) {
			return nil
		}
		return pointer(difference / u)
	}
	for i, p := range official.Parameters {
		d := robust.reported.values[i] - p.Value
		out.Parameters = append(out.Parameters, CompanionParameter{Name: p.Name, Value: robust.reported.values[i] + 0, Difference: d, InUnits: units(d, p.StandardUncertainty)})
	}
	alpha, beta := robust.reported.values[robust.reported.intercept], robust.reported.values[robust.reported.slope]
	if beta != 0 && finite(1/beta) {
		out.Line = &CompanionLine{Slope: 1 / beta, Intercept: -alpha / beta}
	}
	limit := c.in.policy.StudentizedLimit
	for j, e := range robust.residuals() {
		i := c.fitted[j]
		rd := CompanionReading{Index: c.in.readings[i].index, Residual: e, Weight: b.w[j]}
		if u := float64(b.u[i] * b.scale); u > 0 {
			rd.InUnits = pointer(e / u)
			if math.Abs(e) > float64(limit*u) {
				out.Suggested = append(out.Suggested, rd.Index)
			}
		}
		out.Readings = append(out.Readings, rd)
	}
	slices.SortFunc(out.Readings, func(a, b CompanionReading) int { return a.Index - b.Index })
	slices.Sort(out.Suggested)
	at := official.calibrated.positions()
	gradient, anchors := make([]float64, c.layout.p), make([]float64, len(c.in.inputs))
	for _, s := range official.Subjects {
		var readings []int
		for _, index := range s.Readings {
			readings = append(readings, at[index])
		}
		v := robust.predict(readings, gradient, make([]float64, len(readings)), anchors).value
		d := v - s.Value
		out.Subjects = append(out.Subjects, CompanionSubject{Subject: s.Subject, Role: s.Role, Value: v + 0, Difference: d, InUnits: units(d, s.StandardUncertainty)})
	}
	return out
}
