package calib

import (
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/uncertain"
)

// Number is the value of Subjects[i] with its full decomposition: the anchors'
// sources down to outside values, each fitted reading through the parameters,
// its own readings and preparations, and the session. Covariances of results
// of one fit, of two fits of one session, and of fits that share anchors are
// then [uncertain.Covariance] of the numbers. It panics for an index out of
// range, as indexing does.
func (r *Result) Number(i int) uncertain.Number {
	s := &r.Subjects[i]
	c := r.calibrated
	at := c.positions()
	readings := make([]int, len(s.Readings))
	for k, index := range s.Readings {
		readings[k] = at[index]
	}
	gradient, anchors, own := make([]float64, c.layout.p), make([]float64, len(c.in.inputs)), make([]float64, len(readings))
	p := c.private()
	pred := p.predict(readings, gradient, own, anchors)
	w := p.functional(readings, gradient, own, p.lags)
	n := p.compose(pred.value, anchors, w)
	if s.BetweenSession > 0 {
		n.Terms = append(n.Terms, r.betweenTerm(i))
	}
	if t, ok := r.Homogeneity(i); ok {
		n.Terms = append(n.Terms, t)
	}
	return c.clean(n)
}

// ParameterNumber is the k-th parameter with its full decomposition.
func (r *Result) ParameterNumber(k int) uncertain.Number {
	c := r.calibrated
	g := c.reported.jacobian.Row(k)
	w, anchors := make([]float64, len(c.in.readings)), make([]float64, len(c.in.inputs))
	for a, x := range g {
		for i, v := range c.kraw.Row(a) {
			w[i] += float64(x * v)
		}
		for l := range anchors {
			anchors[l] += float64(x * c.sensitivity.At(a, l))
		}
	}
	return c.clean(c.compose(r.Parameters[k].Value, anchors, w))
}

// Groups lists the variance groups that the numbers of the result name: those
// of the session's anchors, the readings' own, and that of the between-session
// component where it has degrees of freedom.
func (r *Result) Groups() []uncertain.Group {
	c := r.calibrated
	groups := append([]uncertain.Group(nil), c.in.session.Groups...)
	if g, ok := c.nz.groupOf(); ok {
		groups = append(groups, g)
	}
	add := func(id string, u, nu float64) {
		if id != "" && !slices.ContainsFunc(groups, func(g uncertain.Group) bool { return g.ID == id }) {
			groups = append(groups, uncertain.NewGroup(id, u*u, nu))
		}
	}
	b, h := c.in.policy.BetweenSession, c.in.policy.SampleHomogeneity
	add(c.betweenGroup(), b.StandardUncertainty, b.DegreesOfFreedom)
	add(c.homogeneityGroup(), h.StandardUncertainty, h.DegreesOfFreedom)
	return groups
}

// positions maps the session's reading indices to the sorted ones.
func (c *calibrated) positions() []int {
	at := make([]int, len(c.in.session.Readings))
	for i := range c.in.readings {
		if k := c.in.readings[i].index; k >= 0 {
			at[k] = i
		}
	}
	return at
}

// private is a copy with buffers of its own, so that a Result may be asked by
// several goroutines at once.
func (c *calibrated) private() *calibrated {
	p := *c
	fresh := func(v []float64) []float64 { return make([]float64, len(v)) }
	p.basis, p.nodes, p.preparationSums, p.noisePhi = fresh(c.basis), fresh(c.nodes), fresh(c.preparationSums), fresh(c.noisePhi)
	p.sourceWork, p.anchorPhi = fresh(c.sourceWork), fresh(c.anchorPhi)
	p.lines, p.weights, p.work, p.lags = nil, nil, nil, nil
	return &p
}

// compose builds a number from ∂value/∂y and ∂value/∂r; its terms are not
// sorted yet.
func (c *calibrated) compose(value float64, anchors, w []float64) uncertain.Number {
	n := uncertain.Number{Value: value + 0}
	numbers := make([]uncertain.Number, 0, len(anchors)+1)
	coefficients := make([]float64, 0, len(anchors)+1)
	for k, h := range anchors {
		if h != 0 && len(c.in.inputs[k].terms) > 0 {
			numbers = append(numbers, uncertain.Number{Terms: c.in.inputs[k].terms})
			coefficients = append(coefficients, h)
		}
	}
	if c.nz.crossLoads != nil {
		var loads uncertain.Number
		for s, src := range c.sources.list {
			var q float64
			for i, x := range w {
				q += float64(x * c.nz.crossLoads.At(i, s))
			}
			if q != 0 && src.U > 0 {
				loads.Terms = append(loads.Terms, uncertain.Term{Source: src, Sensitivity: q / src.U})
			}
		}
		numbers, coefficients = append(numbers, loads), append(coefficients, 1)
	}
	sum, err := uncertain.Linear(0, coefficients, numbers)
	if err != nil {
		// The anchors were validated and the coefficients come of a finite fit.
		panic(fmt.Sprintf("compose an uncertain number: %v", err))
	}
	n.Terms = append(sum.Terms, c.nz.terms(w)...)
	return n
}

// clean sorts the terms, adding those of one source.
func (c *calibrated) clean(n uncertain.Number) uncertain.Number {
	out, err := uncertain.New(n.Value, n.Terms...)
	if err != nil {
		panic(fmt.Sprintf("sort an uncertain number: %v", err))
	}
	return out
}

// betweenTerm is subject i's between-session source.
func (r *Result) betweenTerm(i int) uncertain.Term {
	c := r.calibrated
	s := &r.Subjects[i]
	id := ""
	for k := range s.Sources {
		if s.Sources[k].Kind == uncertain.KindBetweenSession {
			id = s.Sources[k].ID
		}
	}
	t := uncertain.Term{Sensitivity: 1, Source: uncertain.Source{ID: id, Kind: uncertain.KindBetweenSession, U: s.BetweenSession, Group: c.betweenGroup()}}
	if math.IsInf(c.in.policy.BetweenSession.DegreesOfFreedom, 1) {
		t.Group = ""
	}
	return t
}
