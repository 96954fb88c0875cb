package adjust

import "math"

// A Resolver solves one problem again and again for moved observations and
// values, at the covariances of the solution it comes from: for propagating
// distributions. It keeps its buffers and belongs to one goroutine.
type Resolver struct {
	base   *Solution
	w      *work
	pr     Problem
	values *Matrix // exact dθ/dy
	rows   *Matrix // exact dθ/dr
	linear bool
}

// resolved is the step, in standard uncertainties, that is the last one of a
// trial: what is left after it is smaller by the rate of convergence, and far
// below what trials can show.
const resolved = 1e-7

// Resolver makes one. linear says that the model is linear in θ for values
// that do not move, so that the derivatives are the whole answer.
func (s *Solution) Resolver(linear bool) (*Resolver, error) {
	n := len(s.Problem.Observed)
	directions := make([]Direction, n)
	for i := range directions {
		directions[i].Observed = make([]float64, n)
		directions[i].Observed[i] = 1
	}
	values, rows, err := s.Derivatives(directions)
	if err != nil {
		return nil, err
	}
	r := &Resolver{base: s, values: values, rows: rows, pr: *s.Problem, linear: linear && s.Problem.ValueCovariance == nil}
	r.w = newWork(&r.pr)
	return r, nil
}

// Solve returns the parameters for the given observations and values. The
// slice is the resolver's own, valid until the next call.
func (r *Resolver) Solve(observed, values []float64) ([]float64, error) {
	w, base := r.w, r.base
	copy(w.theta, base.Theta)
	for k := range w.theta {
		var d float64
		row := r.rows.Row(k)
		for i, v := range observed {
			d += float64(row[i] * (v - base.Problem.Observed[i]))
		}
		row = r.values.Row(k)
		for l, v := range values {
			d += float64(row[l] * (v - base.Problem.Values[l]))
		}
		w.theta[k] += d
	}
	if r.linear {
		return w.theta, nil
	}
	r.pr.Observed, r.pr.Values = observed, values
	if base.Determined {
		if err := w.determine(); err != nil {
			return nil, err
		}
		return w.theta, nil
	}
	if err := w.evaluate(w.theta); err != nil {
		return nil, err
	}
	for range maxIterations {
		length, err := w.linearise()
		if err != nil {
			return nil, err
		}
		if length <= resolved*(1+math.Sqrt(w.chi2)) {
			// The last step is in hand: take it.
			for k, d := range w.step {
				w.theta[k] += d
			}
			return w.theta, nil
		}
		if err := w.advance(); err != nil {
			return nil, err
		}
	}
	return nil, &ConvergenceError{Iterations: maxIterations}
}
