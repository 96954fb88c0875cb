package calib

import (
	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// A Refitter solves a result's fit again for moved readings and anchors, at
// the result's own variances and weights, and predicts its subjects: one trial
// of a propagation of distributions. Data are moved about the adjusted values,
// where the fit returns its own estimate. It belongs to one goroutine.
type Refitter struct {
	c        *calibrated
	resolver *adjust.Resolver
	// base is the raw delta of each reading, the fitted ones at the model; seen
	// is what the reading after it saw, the raw delta itself.
	base, raw, seen []float64
	observed        []float64
	values          []float64
	whitened        []float64
	z               []float64
	theta           []float64
	subjects        []refitSubject
}

type refitSubject struct {
	readings []int
	weights  []float64
}

// Refitter makes one for the result.
func (r *Result) Refitter() (*Refitter, error) {
	c := r.calibrated.private()
	n := len(c.in.readings)
	f := &Refitter{c: c, base: make([]float64, n), raw: make([]float64, n), seen: make([]float64, n), values: make([]float64, len(c.values)),
		whitened: make([]float64, c.r.n), z: make([]float64, len(c.r.z))}
	for i := range c.in.readings {
		f.base[i] = c.in.readings[i].raw
	}
	f.observed = append([]float64(nil), f.base...)
	for j, e := range c.residuals() {
		f.base[c.fitted[j]] -= e
	}
	// The readings' own places in the model are copies, so that trials may move them.
	in := *c.in
	in.readings = append([]reading(nil), c.in.readings...)
	copied := *c.solved.problem
	copied.in = &in
	model := *c.r.model
	model.previous = append([]float64(nil), model.previous...)
	reduced := *c.r
	reduced.model = &model
	s := *c.solved
	s.problem, s.r = &copied, &reduced
	c.solved = &s
	linear := c.layout.memory < 0 && c.layout.gas < 0 && c.layout.blank < 0
	base, err := f.rebase()
	if err != nil {
		return nil, err
	}
	if f.resolver, err = base.Resolver(linear); err != nil {
		return nil, err
	}
	at := r.calibrated.positions()
	for i := range r.Subjects {
		s := refitSubject{}
		for _, index := range r.Subjects[i].Readings {
			s.readings = append(s.readings, at[index])
		}
		c.grow(len(s.readings))
		lines := c.lines[:len(s.readings)]
		for k, p := range s.readings {
			lines[k] = c.invert(&in.readings[p], 0, nil)
		}
		s.weights = make([]float64, len(s.readings))
		c.meanWeights(s.readings, lines, s.weights)
		f.subjects = append(f.subjects, s)
	}
	return f, nil
}

// rebase solves the fit at the adjusted data: its own estimate, without residuals.
func (f *Refitter) rebase() (*adjust.Solution, error) {
	pr := *f.c.s.Problem
	pr.Model = f.c.r.model
	f.move(nil, nil)
	f.observe()
	pr.Observed = append([]float64(nil), f.z...)
	pr.Values = append([]float64(nil), f.c.s.Adjusted...)
	return adjust.Solve(&pr, f.c.s.Theta)
}

// move adds noise and corrections to every reading.
func (f *Refitter) move(noise, corrections []float64) {
	c := f.c
	for i := range f.raw {
		var d float64
		if noise != nil {
			d = noise[i]
		}
		if corrections != nil && c.in.corrected != nil {
			d += adjust.Dot(corrections, c.in.corrected.Row(i))
		}
		f.raw[i], f.seen[i] = f.base[i]+d, f.observed[i]+d
	}
}

// observe turns raw into the rows of the problem.
func (f *Refitter) observe() {
	c := f.c
	for j, i := range c.fitted {
		f.whitened[j] = f.raw[i] - c.r0
	}
	f.toRows(f.whitened, f.z)
	if c.layout.memory < 0 {
		return
	}
	// The rows' own predecessors move too: the part of them that the rows can see.
	for j, i := range c.fitted {
		f.whitened[j] = f.seen[c.in.readings[i].previous] - c.r0
	}
	f.toRows(f.whitened, c.r.model.previous)
}

func (f *Refitter) toRows(v, out []float64) {
	c := f.c
	if c.r.white == nil {
		copy(out, v)
		return
	}
	c.r.white.apply(v)
	clear(out)
	for j, k := range c.class {
		out[c.r.rowOf[k]] += float64(c.r.own[j] * v[j])
		if i := c.r.contrastRow[k]; i >= 0 {
			out[i] += float64(c.r.contrast[j] * v[j])
		}
	}
	for t := 0; t < c.r.pooled.Rows; t++ {
		out[c.r.firstPooled+t] = adjust.Dot(c.r.pooled.Row(t), v)
	}
}

// Solve solves one trial. noise is added to each reading, by its place in
// [Refitter.Noise]; anchors and corrections are deviations from their values
// (‰, or the correction's own unit), in the session's order.
func (f *Refitter) Solve(noise, anchors, corrections []float64) error {
	c := f.c
	f.move(noise, corrections)
	for l, k := range c.anchors {
		f.values[l] = c.s.Adjusted[l] + anchors[c.in.anchors[k].index]
	}
	f.observe()
	var err error
	if f.theta, err = f.resolver.Solve(f.z, f.values); err != nil {
		return c.refuse(err)
	}
	c.state = c.layout.state(f.theta)
	return nil
}

// Value is subject i's value in the trial solved last.
func (f *Refitter) Value(i int) float64 {
	c := f.c
	s := &f.subjects[i]
	var v float64
	for k, p := range s.readings {
		rd := &c.in.readings[p]
		rd.raw = f.raw[p]
		if rd.previous >= 0 {
			rd.previousRaw = f.seen[rd.previous]
		}
		v += float64(s.weights[k] * (c.invertAt(f.theta, rd) - c.y0))
	}
	return v + c.y0
}

// A NoiseTerm is one reading's dependence on the sources of the readings'
// noise and preparations, or on the anchors' where the two are correlated.
type NoiseTerm struct {
	Reading int // place among the readings of [Refitter.Solve]
	uncertain.Term
}

// Noise lists what moves each reading, and the number of readings' places.
func (f *Refitter) Noise() (terms []NoiseTerm, readings int) {
	c := f.c
	n := len(f.base)
	unit := make([]float64, n)
	needed := make([]bool, n)
	need := func(i int) {
		needed[i] = true
		if p := c.in.readings[i].previous; p >= 0 {
			needed[p] = true
		}
	}
	for _, i := range c.fitted {
		need(i)
	}
	for _, s := range f.subjects {
		for _, i := range s.readings {
			need(i)
		}
	}
	for i := range unit {
		if !needed[i] {
			continue
		}
		unit[i] = 1
		for _, t := range c.nz.terms(unit) {
			terms = append(terms, NoiseTerm{i, t})
		}
		if c.nz.crossLoads != nil {
			for s, src := range c.sources.list {
				if q := c.nz.crossLoads.At(i, s); q != 0 && src.U > 0 {
					terms = append(terms, NoiseTerm{i, uncertain.Term{Source: src, Sensitivity: q / src.U}})
				}
			}
		}
		unit[i] = 0
	}
	return terms, n
}

// BetweenSession is subject i's between-session source; ok is false for none.
func (r *Result) BetweenSession(i int) (t uncertain.Term, ok bool) {
	if r.Subjects[i].BetweenSession == 0 {
		return t, false
	}
	return r.betweenTerm(i), true
}

// Homogeneity is subject i's source of its own heterogeneity; ok is false for none.
func (r *Result) Homogeneity(i int) (t uncertain.Term, ok bool) {
	s, c := &r.Subjects[i], r.calibrated
	if s.Homogeneity == 0 {
		return t, false
	}
	return uncertain.Term{Sensitivity: 1, Source: uncertain.Source{ID: c.homogeneityID(s.Subject), Kind: uncertain.KindUnit, U: s.Homogeneity, Group: c.homogeneityGroup()}}, true
}

// AnchorNumbers are the session's assigned values, in its order.
func (r *Result) AnchorNumbers() []uncertain.Number {
	var out []uncertain.Number
	for _, a := range r.calibrated.in.session.Anchors {
		out = append(out, a.Value)
	}
	return out
}

// CorrectionNumbers are the session's correction inputs, in its order.
func (r *Result) CorrectionNumbers() []uncertain.Number {
	var out []uncertain.Number
	for _, a := range r.calibrated.in.session.Corrections {
		out = append(out, a.Input)
	}
	return out
}
