package calib

import "math"

// missingLevel is the p-value below which a term that the model lacks is
// flagged: stricter than the tests of the fit, since several are tried.
const missingLevel = 0.01

// takeNeeds tests each term of the model against the fit without it, and each
// term that the session's data would allow against the fit with it. Both fits
// of a test use the same readings and the larger one's variances:
//
//	known variances      Δχ² on Δp
//	estimated variances  F = (Δχ²/Δp)/(χ²₁/ν₁) on (Δp, ν₁)
//
// A term that the readings cannot determine is not tested.
func (c *calibrated) takeNeeds(r *Result) {
	if c.ratio {
		return
	}
	m := c.in.model
	add := func(n *TermNeed, inModel bool) {
		if n != nil {
			n.Model = inModel
			r.Needs = append(r.Needs, *n)
		}
	}
	without := func(term string, change func(*Model)) {
		smaller := m
		change(&smaller)
		add(compareModels(term, c.solved, smaller), true)
	}
	with := func(term string, change func(*Model)) {
		larger := m
		change(&larger)
		if l := c.larger(larger); l != nil {
			add(compareModels(term, l, m), false)
		}
	}
	switch m.Drift {
	case DriftNone, "":
		with("drift", func(m *Model) { m.Drift = DriftLinear })
	case DriftQuadratic:
		without("drift.quadratic", func(m *Model) { m.Drift = DriftLinear })
		fallthrough
	default:
		without("drift", func(m *Model) { m.Drift = DriftNone })
	}
	if m.Size == SizeNone || m.Size == "" {
		with("size", func(m *Model) { m.Size = SizeLinear })
	} else {
		without("size", func(m *Model) { m.Size = SizeNone })
	}
	if m.Memory == MemoryCarryover {
		without("memory", func(m *Model) { m.Memory = MemoryNone })
	} else {
		with("memory", func(m *Model) { m.Memory = MemoryCarryover })
	}
	if l := c.slopeDrift(); l != nil {
		add(compareModels("drift.slope", l, m), false)
	}
}

// larger fits a larger model; nil when its term cannot be determined.
func (c *calibrated) larger(m Model) *solved {
	in := c.in
	if m.Memory == in.model.Memory {
		copied := *in
		copied.model = m
		in = &copied
	} else {
		var err error
		if in, err = prepare(c.in.session, m, c.in.policy); err != nil {
			return nil
		}
	}
	p, err := in.newProblem(-1)
	if err != nil {
		return nil
	}
	s, err := p.solve()
	if err != nil {
		return nil
	}
	return s
}

// slopeDrift fits one more column, (t − t̄)(τ̂ − y0): a slope that changes with
// time, to first order, at the adjusted values of this fit. Nil without times.
func (c *calibrated) slopeDrift() *solved {
	var mean float64
	for _, i := range c.fitted {
		mean += c.in.readings[i].time / float64(c.r.n)
	}
	if math.IsNaN(mean) {
		return nil
	}
	column := make([]float64, len(c.in.readings))
	for j, i := range c.fitted {
		k := c.class[j]
		tau := 0.0
		if l := c.classes[k].anchor; l >= 0 {
			tau = c.s.Adjusted[l]
		} else {
			tau = (c.s.Theta[c.layout.levels[k]] - c.state.alpha) / c.state.beta
		}
		column[i] = float64((c.in.readings[i].time - mean) * tau)
	}
	p, err := c.in.newProblem(-1)
	if err != nil {
		return nil
	}
	p.extra = column
	p.lay()
	s, err := p.solve()
	if err != nil {
		return nil
	}
	return s
}

// compareModels tests the larger fit against a smaller model of the same
// readings at the larger one's variances.
func compareModels(term string, larger *solved, m Model) *TermNeed {
	in := *larger.in
	in.model = m
	p, err := in.newProblem(-1)
	if err != nil {
		return nil
	}
	smaller, err := p.solveFixed(larger.variances)
	if err != nil {
		return nil
	}
	n := larger.r.n
	chi2, nu := larger.chiSquare(), float64(n-larger.layout.p)
	need := &TermNeed{
		Term: term, DeltaChiSquare: math.Max(0, smaller.chiSquare()-chi2), DeltaParameters: larger.layout.p - smaller.layout.p,
		AICcWith: larger.criterion(), AICcWithout: smaller.criterion(),
	}
	if need.DeltaParameters < 1 {
		return nil
	}
	per := need.DeltaChiSquare / float64(need.DeltaParameters)
	if larger.variances == nil {
		need.PValue = chiSquareP(need.DeltaChiSquare, float64(need.DeltaParameters))
		return need
	}
	if nu < 1 || !(chi2 > 0) {
		return nil
	}
	f := per / (chi2 / nu)
	need.F = &f
	need.PValue = fisherP(f, float64(need.DeltaParameters), nu)
	return need
}

// solveFixed adjusts at given variances; nil ones are declared.
func (p *problem) solveFixed(v *variances) (*solved, error) {
	if len(p.fitted) < p.layout.p {
		return nil, p.noDegrees(0)
	}
	if !p.in.model.estimated() {
		return p.solveDeclared()
	}
	w := p.whiten(v)
	if w == nil {
		return nil, p.noDegrees(0)
	}
	r, err := p.reduce(w)
	if err != nil {
		return nil, err
	}
	return p.finish(r, v, 1, nil)
}

// criterion is AICc of a solved problem.
func (s *solved) criterion() *float64 {
	var rss float64
	for _, e := range s.residuals() {
		rss += float64(e * e)
	}
	return s.aicc(s.chiSquare(), rss, s.r.n, s.layout.p)
}
