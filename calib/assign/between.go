package assign

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// An Estimator says how the variance between sessions, τ², is estimated. It is
// fixed by the plan, before the data; the others are shown beside it.
type Estimator string

// The estimators.
const (
	// PauleMandel solves xᵀP(τ²)x = m − 1, or 0 where Q ≤ m − 1 (Paule and
	// Mandel 1982, doi:10.6028/jres.087.022). The default.
	PauleMandel Estimator = "paule_mandel"
	// DerSimonianLaird is max(0, (Q − (m − 1))/tr P(0)) (DerSimonian and Laird
	// 1986, doi:10.1016/0197-2456(86)90046-2), for a full covariance.
	DerSimonianLaird Estimator = "dersimonian_laird"
	// RestrictedLikelihood maximises the restricted likelihood, xᵀPPx = tr P, by
	// Fisher scoring from DerSimonian–Laird, held ≥ 0 (Viechtbauer 2005,
	// doi:10.3102/10769986030003261).
	RestrictedLikelihood Estimator = "reml"
	// NoBetween takes τ² = 0: all that differs between sessions is in the
	// results' own uncertainty.
	NoBetween Estimator = "none"
)

// estimators in the order they are shown.
var estimators = [...]Estimator{DerSimonianLaird, PauleMandel, RestrictedLikelihood}

// scatter is what the estimators ask of values and their covariance, for any
// τ² = t: xᵀPx, xᵀPPx, tr P and tr PP, and the sum of squares about the mean.
type scatter interface {
	df() float64
	// determined says that P(0) exists.
	determined() bool
	q(t float64) float64
	qq(t float64) float64
	traces(t float64) (p, pp float64)
	square() float64
}

// estimate is τ̂²; ok is false where it does not exist.
func estimate(s scatter, e Estimator) (tau2 float64, ok bool) {
	switch {
	case e == NoBetween || s.df() == 0:
		return 0, true
	case e == PauleMandel:
		return solve(s, s.df()), true
	case !s.determined():
		// P(0) does not exist. REML does where the values differ, from 0.
		if e == RestrictedLikelihood {
			return restricted(s, solve(s, s.df())), true
		}
		return 0, false
	case e == RestrictedLikelihood:
		return restricted(s, moment(s)), true
	default:
		return moment(s), true
	}
}

// moment is the DerSimonian–Laird estimate.
func moment(s scatter) float64 {
	p, _ := s.traces(0)
	return math.Max(0, (s.q(0)-s.df())/p)
}

// solve finds t ≥ 0 with q(t) = target, 0 where q(0) is not above it. q falls
// and is convex, and q(t) ≤ Σ(x − x̄)²/t brackets the root.
func solve(s scatter, target float64) float64 {
	if s.q(0) <= target {
		return 0
	}
	low, high, t := 0.0, s.square()/target, 0.0
	for i := 0; i < 300; i++ {
		excess := s.q(t) - target
		if excess > 0 {
			low = t
		} else {
			high = t
		}
		next := t + excess/s.qq(t)
		if math.Abs(next-t) <= 1e-16*t {
			return t
		}
		if !(next > low && next < high) {
			next = low + float64(0.5*(high-low))
			if next <= low || next >= high {
				return t
			}
		}
		t = next
	}
	return t
}

// restricted solves xᵀPPx = tr P from the start. The score is negative above
// the sum of squares; a step that leaves the bracket of its sign is halved into it.
func restricted(s scatter, start float64) float64 {
	score := func(t float64) (value, step float64) {
		p, pp := s.traces(t)
		value = s.qq(t) - p
		return value, value / pp
	}
	low, high := 0.0, s.square()
	t := math.Min(start, high)
	for i := 0; i < 2000; i++ {
		value, step := score(t)
		if math.IsNaN(value) || math.IsInf(value, 0) || math.IsNaN(step) {
			return t
		}
		switch {
		case value > 0:
			low = t
		case t == 0:
			return 0
		default:
			high = t
		}
		next := t + step
		if next <= 0 {
			if v, _ := score(0); v <= 0 {
				return 0
			}
		}
		if math.Abs(next-t) <= 2e-16*t {
			return t
		}
		if !(next > low && next < high) {
			next = low + float64(0.5*(high-low))
			if next <= low || next >= high {
				return t
			}
		}
		t = next
	}
	return t
}

// Heterogeneity is what the results say about their own agreement.
type Heterogeneity struct {
	// Q is xᵀP(0)x on DegreesOfFreedom = m − 1; nil where results without any
	// variance of their own make it undefined, as are P and the I² then.
	Q                *float64 `json:"q,omitempty"`
	DegreesOfFreedom int      `json:"degrees_of_freedom"`
	// P is the probability of a larger Q when nothing but V separates the results.
	P *float64 `json:"p,omitempty"`
	// ISquared is max(0, 1 − (m−1)/Q): the part of Q that V does not explain
	// (Higgins and Thompson 2002, doi:10.1002/sim.1186).
	ISquared *float64 `json:"i_squared,omitempty"`
	// RandomISquared is τ²/(τ² + (m−1)/tr P(0)), as meta-analysis prints it.
	RandomISquared *float64 `json:"random_i_squared,omitempty"`
	// BetweenLow and BetweenHigh hold τ at 95 % by the Q profile, q(τ²) = the
	// quantiles of χ²(m−1) (Viechtbauer 2007, doi:10.1002/sim.2514).
	BetweenLow  *float64 `json:"between_low,omitempty"`
	BetweenHigh *float64 `json:"between_high,omitempty"`
}

// heterogeneity of the results, with τ² for the random-effect I².
func heterogeneity(s scatter, tau2 float64) Heterogeneity {
	h := agreement(s, tau2)
	if s.df() > 0 {
		chi := distuv.ChiSquared{K: s.df()}
		low, high := math.Sqrt(solve(s, chi.Quantile(0.975))), math.Sqrt(solve(s, chi.Quantile(0.025)))
		h.BetweenLow, h.BetweenHigh = &low, &high
	}
	return h
}

// agreement is heterogeneity without the interval of τ.
func agreement(s scatter, tau2 float64) Heterogeneity {
	h := Heterogeneity{DegreesOfFreedom: int(s.df())}
	if !s.determined() {
		return h
	}
	df := s.df()
	q := s.q(0)
	p := distuv.ChiSquared{K: df}.Survival(q)
	trace, _ := s.traces(0)
	random := 0.0
	if tau2 > 0 {
		random = tau2 / (tau2 + df/trace)
	}
	i2 := 0.0
	if q > df {
		i2 = 1 - df/q
	}
	h.Q, h.P, h.ISquared, h.RandomISquared = &q, &p, &i2, &random
	return h
}

// A Between is an estimate of the variance between sessions.
type Between struct {
	Variance float64 // τ̂² (‰²)
	// VarianceVariance is Var(τ̂²) = 2/tr(PP), also where τ̂² is 0.
	VarianceVariance float64
	Heterogeneity    Heterogeneity
}

// EstimateBetween estimates τ² from values of sessions that share nothing, with
// their private variances (‰²): a control's long-term component from many
// session values, in time and memory proportional to their number. Fewer than
// two values, variances below 0, and numbers that are not finite are an
// *InputError, and so is DerSimonian–Laird where a variance is 0.
func EstimateBetween(values, variances []float64, e Estimator) (Between, error) {
	if e == "" {
		e = PauleMandel
	}
	if _, err := (Policy{Estimator: e}).complete(); err != nil {
		return Between{}, err
	}
	if err := checkValues(values, 2); err != nil {
		return Between{}, err
	}
	if len(variances) != len(values) {
		return Between{}, &InputError{Place: "variances", Found: fmt.Sprint(len(variances)), Expected: fmt.Sprintf("one for each of %d values", len(values))}
	}
	for i, v := range variances {
		if !finite(v) || v < 0 {
			return Between{}, &InputError{Place: fmt.Sprintf("variances[%d]", i), Found: fmt.Sprint(v), Expected: "a variance, not negative"}
		}
	}
	s := newUnshared(values, variances)
	tau2, ok := estimate(s, e)
	if !ok {
		return Between{}, &InputError{Place: "variances", Found: "a variance of 0", Expected: "none, for the estimator " + string(e)}
	}
	out := Between{Variance: tau2, Heterogeneity: heterogeneity(s, tau2)}
	if _, pp := s.traces(tau2); tau2 > 0 || s.determined() {
		out.VarianceVariance = 2 / pp
	}
	return out, nil
}

// unshared are values that share no source: P by its weights w = 1/(v + t).
type unshared struct {
	x, v []float64 // x about the first value
}

func newUnshared(values, variances []float64) *unshared {
	u := &unshared{x: make([]float64, len(values)), v: variances}
	for i, x := range values {
		u.x[i] = x - values[0]
	}
	return u
}

func (u *unshared) df() float64 { return float64(len(u.x) - 1) }

func (u *unshared) determined() bool {
	for _, v := range u.v {
		if v == 0 {
			return false
		}
	}
	return len(u.v) > 1
}

// sums are Σw, Σw², Σw³ and the weighted mean.
func (u *unshared) sums(t float64) (w1, w2, w3, mean float64) {
	for i, v := range u.v {
		w := 1 / (v + t)
		w1 += w
		w2 += float64(w * w)
		w3 += float64(float64(w*w) * w)
		mean += float64(w * u.x[i])
	}
	return w1, w2, w3, mean / w1
}

func (u *unshared) q(t float64) float64 {
	if t == 0 && !u.determined() {
		if u.square() == 0 {
			return 0
		}
		return math.Inf(1)
	}
	_, _, _, mean := u.sums(t)
	var sum float64
	for i, v := range u.v {
		d := u.x[i] - mean
		sum += float64(d*d) / (v + t)
	}
	return sum
}

func (u *unshared) qq(t float64) float64 {
	_, _, _, mean := u.sums(t)
	var sum float64
	for i, v := range u.v {
		r := (u.x[i] - mean) / (v + t)
		sum += float64(r * r)
	}
	return sum
}

func (u *unshared) traces(t float64) (p, pp float64) {
	w1, w2, w3, _ := u.sums(t)
	r := w2 / w1
	return w1 - r, w2 - 2*w3/w1 + float64(r*r)
}

func (u *unshared) square() float64 {
	var mean, sum float64
	for _, x := range u.x {
		mean += x / float64(len(u.x))
	}
	for _, x := range u.x {
		d := x - mean
		sum += float64(d * d)
	}
	return sum
}
