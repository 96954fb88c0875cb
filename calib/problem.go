package calib

import (
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/adjust"
)

// newProblem selects the readings to fit, without those of one anchor (its
// position in in.anchors; −1 for all), and lays the parameters out.
func (in *input) newProblem(without int) (*problem, error) {
	p := &problem{in: in}
	p.takeClasses(without)
	if err := p.checkAnchors(without); err != nil {
		return nil, err
	}
	p.centre()
	if err := p.checkRange(); err != nil {
		return nil, err
	}
	var err error
	if p.time, err = in.takeTime(p.fitted); err != nil {
		return nil, err
	}
	if p.size, err = in.takeSize(p.fitted); err != nil {
		return nil, err
	}
	if p.ratio && p.size.kind == SizeBlank {
		return nil, &UnsupportedTermError{Refusal{Place: "model.size", Found: "blank with one anchor", Expected: "at least 2 anchors (a blank acts in proportion to the difference from it)"}}
	}
	p.lay()
	return p, nil
}

func (p *problem) takeClasses(without int) {
	in := p.in
	local := make([]int, len(in.anchors))
	p.anchors = make([]int, 0, len(in.anchors))
	for k := range in.anchors {
		local[k] = -1
		if k != without {
			local[k] = len(p.anchors)
			p.anchors = append(p.anchors, k)
		}
	}
	highest := len(in.anchors)
	for i := range in.readings {
		highest = max(highest, in.readings[i].class+1)
	}
	names := make([]string, highest)
	used := make([]bool, highest)
	p.fitted = make([]int, 0, len(in.readings))
	for i := range in.readings {
		if rd := &in.readings[i]; rd.usable && rd.class >= 0 && rd.class != without {
			used[rd.class], names[rd.class] = true, rd.Subject
			p.fitted = append(p.fitted, i)
		}
	}
	position := make([]int, highest)
	p.classes = make([]class, 0, highest)
	for k, ok := range used {
		if !ok {
			continue
		}
		c := class{name: names[k], anchor: -1}
		if k < len(in.anchors) {
			c.anchor = local[k]
		}
		position[k] = len(p.classes)
		p.classes = append(p.classes, c)
	}
	p.class = make([]int, len(p.fitted))
	for j, i := range p.fitted {
		p.class[j] = position[in.readings[i].class]
	}
}

// checkAnchors refuses what gives no slope.
func (p *problem) checkAnchors(without int) error {
	in := p.in
	low, high := math.Inf(1), math.Inf(-1)
	count, distinct := 0, 0
	var values []float64
	for _, c := range p.classes {
		if c.anchor < 0 {
			continue
		}
		v := in.anchors[p.anchors[c.anchor]].value
		low, high = math.Min(low, v), math.Max(high, v)
		count++
		if !slices.Contains(values, v) {
			values = append(values, v)
			distinct++
		}
	}
	switch {
	case count == 0:
		return &NoAnchorsError{Refusal{Place: "readings", Found: "no anchor reading that can be fitted", Expected: "readings with role anchor"}}
	case distinct == 1 && in.model.AllowSingleAnchor:
		p.ratio = true
	case count == 1:
		return &SingleAnchorError{Refusal{Place: "anchors", Found: "one anchor", Expected: "at least 2 of different value, or the model's explicit allow_single_anchor"}}
	case distinct == 1:
		return &EqualAnchorsError{Refusal{Place: "anchors", Found: fmt.Sprintf("%d anchors of one value, %v", count, low), Expected: "at least 2 different values"}}
	}
	if span := in.policy.MinimumSpan; without < 0 && !p.ratio && high-low < span {
		return &AnchorSpanError{Refusal{Place: "anchors", Found: fmt.Sprintf("anchors %.4g ‰ apart", high-low), Expected: fmt.Sprintf("at least %v ‰", span)}}
	}
	return nil
}

// centre subtracts the anchors' mean value and mean raw delta. The ratio form
// is not affine in its parameter and stays where it is.
func (p *problem) centre() {
	if !p.ratio {
		var value, raw, count float64
		for j, i := range p.fitted {
			if l := p.classes[p.class[j]].anchor; l >= 0 {
				value += p.in.anchors[p.anchors[l]].value
				raw += p.in.readings[i].raw
				count++
			}
		}
		p.y0, p.r0 = value/count, raw/count
	}
	p.values = make([]float64, len(p.anchors))
	for l, k := range p.anchors {
		p.values[l] = p.in.anchors[k].value - p.y0
	}
	if p.in.exact {
		return
	}
	p.vy = p.in.vy.Pick(p.anchors)
	if p.in.vyLow != nil {
		p.vyLow = p.in.vyLow.Pick(p.anchors)
	}
}

// checkRange refuses readings or values whose differences are so small that
// variances of them have no square: another unit is meant, or nothing.
func (p *problem) checkRange() error {
	var raw, value float64
	for _, i := range p.fitted {
		raw = math.Max(raw, math.Abs(p.in.readings[i].raw-p.r0))
	}
	for _, v := range p.values {
		value = math.Max(value, math.Abs(v))
	}
	if raw > 0 && raw < smallest || value > 0 && value < smallest && !p.ratio {
		return &RangeError{Refusal{Place: "readings", Found: fmt.Sprintf("raw deltas within %.3g and values within %.3g of their mean", raw, value), Expected: fmt.Sprintf("differences of at least %g ‰", smallest)}}
	}
	return nil
}

// lay gives each internal parameter its place.
func (p *problem) lay() {
	l := &p.layout
	p.names = nil
	*l = layout{intercept: -1, slope: -1, gas: -1, blank: -1, blankSlope: -1, memory: -1}
	next := func() int { l.p++; return l.p - 1 }
	if p.ratio {
		l.gas = next()
	} else {
		l.intercept, l.slope = next(), next()
	}
	if p.size.kind == SizeBlank {
		l.blank, l.blankSlope = next(), next()
	} else {
		p.names = p.size.names()
	}
	p.names = append(p.names, p.time.names()[:p.time.columns()]...)
	if p.extra != nil {
		p.names = append(p.names, "drift.slope")
	}
	l.globals = len(p.names)
	l.firstGlobal = l.p
	l.p += l.globals
	if p.in.model.Memory == MemoryCarryover {
		l.memory = next()
		p.names = append(p.names, "memory")
	}
	l.levels = make([]int, len(p.classes))
	for k, c := range p.classes {
		l.levels[k] = -1
		if c.anchor < 0 {
			l.levels[k] = next()
		}
	}
}

// parameterName is the reported name nearest to an internal parameter.
func (p *problem) parameterName(k int) string {
	l := &p.layout
	switch {
	case k == l.gas, k == l.intercept:
		return "intercept"
	case k == l.slope:
		return "slope"
	case k == l.blank:
		return "size"
	case k == l.blankSlope:
		return "size.slope"
	case k >= l.firstGlobal && k < l.firstGlobal+l.globals:
		return p.names[k-l.firstGlobal]
	case k == l.memory:
		return "memory"
	}
	for c, at := range l.levels {
		if at == k {
			return "level." + p.classes[c].name
		}
	}
	return "parameter"
}

// A reported describes the parameters as they are reported: their names and
// values, and their derivatives by the internal ones.
type reported struct {
	names    []string
	values   []float64
	jacobian *adjust.Matrix // reported × internal
	// slope, size, drift, memory: positions of the first of each; −1 for none.
	intercept, slope, size, sizeSlope, drift, memory int
}

// report turns the internal parameters into the reported ones.
func (p *problem) report(theta []float64) *reported {
	l := &p.layout
	r := &reported{size: -1, sizeSlope: -1, drift: -1, memory: -1}
	type entry struct {
		at int
		by float64
	}
	var entries [][]entry
	add := func(name string, value float64, by ...entry) int {
		r.names, r.values = append(r.names, name), append(r.values, value)
		entries = append(entries, by)
		return len(r.names) - 1
	}
	s := l.state(theta)
	if p.ratio {
		// α = −β·δ_gas: dα/dδ = −β², dβ/dδ = −β²/1000
		square := float64(s.beta * s.beta)
		r.intercept = add("intercept", s.alpha, entry{l.gas, -square})
		r.slope = add("slope", s.beta, entry{l.gas, -square / 1000})
	} else {
		r.intercept = add("intercept", s.alpha+p.r0-float64(s.beta*p.y0), entry{l.intercept, 1}, entry{l.slope, -p.y0})
		r.slope = add("slope", s.beta, entry{l.slope, 1})
	}
	firstDrift := l.firstGlobal
	if l.blank < 0 && p.size.kind != SizeNone {
		firstDrift++
	}
	names := p.time.names()
	for j := 0; j < p.time.columns(); j++ {
		at := add(names[j], theta[firstDrift+j], entry{firstDrift + j, 1})
		if j == 0 {
			r.drift = at
		}
	}
	if p.time.kind == DriftBracketed {
		var sum float64
		var by []entry
		for j := 0; j < p.time.columns(); j++ {
			sum += theta[firstDrift+j]
			by = append(by, entry{firstDrift + j, -1})
		}
		add(names[len(names)-1], -sum, by...)
	}
	switch {
	case l.blank >= 0:
		r.size = add("size", s.k0-float64(s.k1*p.y0), entry{l.blank, 1}, entry{l.blankSlope, -p.y0})
		r.sizeSlope = add("size.slope", s.k1, entry{l.blankSlope, 1})
	case p.size.kind != SizeNone:
		r.size = add("size", theta[l.firstGlobal], entry{l.firstGlobal, 1})
	}
	if l.memory >= 0 {
		r.memory = add("memory", s.mu, entry{l.memory, 1})
	}
	for k, at := range l.levels {
		if at >= 0 {
			add("level."+p.classes[k].name, theta[at]+p.r0, entry{at, 1})
		}
	}
	r.jacobian = adjust.NewMatrix(len(r.names), l.p)
	for i, by := range entries {
		for _, e := range by {
			r.jacobian.Set(i, e.at, e.by)
		}
	}
	return r
}

// outward multiplies by the Jacobian: J·a for a with one row for each internal
// parameter.
func (r *reported) outward(a *adjust.Matrix) *adjust.Matrix { return product(r.jacobian, a) }

// covariance is J·c·Jᵀ, symmetric to the bit.
func (r *reported) covariance(c *adjust.Matrix) *adjust.Matrix {
	half := product(r.jacobian, c)
	out := adjust.NewMatrix(half.Rows, half.Rows)
	for i := 0; i < half.Rows; i++ {
		for j := 0; j <= i; j++ {
			v := adjust.Dot(half.Row(i), r.jacobian.Row(j))
			out.Set(i, j, v)
			out.Set(j, i, v)
		}
	}
	return out
}
