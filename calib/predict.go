package calib

import (
	"math"

	"deltamoor/calib/adjust"
)

// A sampleLine is how one reading is inverted:
//
//	τ̂ = y0 + (f̂ − r0 − α − Σ terms − κ0·h)/(β + κ1·h),  f̂ = (r − μ·r_before)/(1 − μ)
//
// in internal parameters.
type sampleLine struct {
	value float64
	own   float64 // ∂τ̂/∂r
	lag   float64 // ∂τ̂/∂r_before
	slope float64 // (1 − μ)(β + κ1·h)
}

// invert computes a reading's value and its derivatives by the internal
// parameters (added to gradient with the given weight; nil for none).
func (c *calibrated) invert(rd *reading, weight float64, gradient []float64) sampleLine {
	l := &c.layout
	theta := c.s.Theta
	s := c.state
	basis := c.basis
	c.columns(rd, basis)
	f := rd.raw - c.r0
	if l.memory >= 0 {
		f = (f - float64(s.mu*basis[l.globals])) / s.rest
	}
	rest := f - s.alpha
	for t := 0; t < l.globals; t++ {
		rest -= float64(theta[l.firstGlobal+t] * basis[t])
	}
	b, h := s.beta, 0.0
	if l.blank >= 0 {
		h = c.size.value(rd.size)
		rest -= float64(s.k0 * h)
		b += float64(s.k1 * h)
	}
	tau := rest / b
	out := sampleLine{value: c.y0 + tau, slope: float64(s.rest * b)}
	out.own = 1 / out.slope
	if l.memory >= 0 {
		out.lag = -s.mu / out.slope
	}
	if gradient == nil {
		return out
	}
	if l.gas >= 0 {
		// τ = f/β + δ_gas less the terms over β: ∂τ/∂δ = 1 − β′(τ − δ_gas)/β
		gradient[l.gas] += float64(weight * (1 - float64(s.b1*(tau-s.gas))/b))
	} else {
		gradient[l.intercept] -= weight / b
		gradient[l.slope] -= float64(weight*tau) / b
	}
	for t := 0; t < l.globals; t++ {
		gradient[l.firstGlobal+t] -= float64(weight*basis[t]) / b
	}
	if l.blank >= 0 {
		gradient[l.blank] -= float64(weight*h) / b
		gradient[l.blankSlope] -= float64(float64(weight*h)*tau) / b
	}
	if l.memory >= 0 {
		gradient[l.memory] += float64(weight*(f-basis[l.globals])) / out.slope
	}
	return out
}

// invertAt is the value of a reading at other parameters, whose state c holds.
func (c *calibrated) invertAt(theta []float64, rd *reading) float64 {
	l, s := &c.layout, &c.state
	c.columns(rd, c.basis)
	f := rd.raw - c.r0
	if l.memory >= 0 {
		f = (f - float64(s.mu*c.basis[l.globals])) / s.rest
	}
	rest, b := f-s.alpha, s.beta
	for t := 0; t < l.globals; t++ {
		rest -= float64(theta[l.firstGlobal+t] * c.basis[t])
	}
	if l.blank >= 0 {
		h := c.size.value(rd.size)
		rest -= float64(s.k0 * h)
		b += float64(s.k1 * h)
	}
	return c.y0 + rest/b
}

// reportedGradient adds the derivatives by the reported parameters.
func (c *calibrated) reportedGradient(rd *reading, value, weight float64, gradient []float64) {
	s := c.state
	r := c.reported
	h := 0.0
	b := s.beta
	if c.layout.blank >= 0 {
		h = c.size.value(rd.size)
		b += float64(s.k1 * h)
	}
	w := weight / b
	gradient[r.intercept] -= w
	gradient[r.slope] -= float64(w * value)
	if r.drift >= 0 {
		n := c.time.reportedColumns()
		c.time.reported(rd.time, c.nodes[:n])
		for j, g := range c.nodes[:n] {
			gradient[r.drift+j] -= float64(w * g)
		}
	}
	switch {
	case c.layout.blank >= 0:
		gradient[r.size] -= float64(w * h)
		gradient[r.sizeSlope] -= float64(float64(w*h) * value)
	case r.size >= 0:
		gradient[r.size] -= float64(w * c.size.value(rd.size))
	}
	if r.memory >= 0 {
		f := (rd.raw - float64(s.mu*rd.previousRaw)) / s.rest
		gradient[r.memory] += float64(weight*(f-rd.previousRaw)) / float64(s.rest*b)
	}
}

// meanWeights are those of the generalised mean of readings (positions in
// in.readings) with the model's variances at their own slope, size and
// preparation: w = Ω⁻¹1/(1ᵀΩ⁻¹1). Exact readings, where there are any, count
// alone; readings with a singular full covariance are averaged plainly.
func (c *calibrated) meanWeights(own []int, lines []sampleLine, w []float64) {
	if c.nz.loads != nil {
		c.denseWeights(own, lines, w)
		return
	}
	exact := 0
	for _, i := range own {
		if c.nz.own[i]+c.nz.phiA == 0 {
			exact++
		}
	}
	if exact > 0 {
		for k, i := range own {
			w[k] = indicator(c.nz.own[i]+c.nz.phiA == 0) / float64(exact)
		}
		return
	}
	// Ω = B⁻¹VB⁻¹ with B the slopes: Ω⁻¹1 = B V⁻¹ b.
	for k := range own {
		w[k] = lines[k].slope
	}
	c.solveOwn(own, w)
	var total float64
	for k := range w {
		w[k] = float64(w[k] * lines[k].slope)
		total += w[k]
	}
	for k := range w {
		w[k] /= total
	}
}

// solveOwn overwrites x with V⁻¹x for readings with independent own variances
// that share φ_a within a preparation (Sherman and Morrison 1950).
func (c *calibrated) solveOwn(own []int, x []float64) {
	for k, i := range own {
		x[k] /= c.nz.own[i]
	}
	if c.nz.phiA == 0 {
		return
	}
	sum := c.preparationSums // of x/v and of 1/v
	for k, i := range own {
		p := c.in.readings[i].preparation
		sum[2*p] += x[k]
		sum[2*p+1] += 1 / c.nz.own[i]
	}
	for k, i := range own {
		p := c.in.readings[i].preparation
		x[k] -= float64(c.nz.phiA*sum[2*p]) / float64(c.nz.own[i]*(1+float64(c.nz.phiA*sum[2*p+1])))
	}
	for _, i := range own {
		p := c.in.readings[i].preparation
		sum[2*p], sum[2*p+1] = 0, 0
	}
}

// scatter is (τ − value)ᵀΩ⁻¹(τ − value), chi-square with one degree of freedom
// less than readings if the model's variances hold; NaN where it has none.
func (c *calibrated) scatter(own []int, lines []sampleLine, value float64, x []float64) float64 {
	if c.nz.loads != nil {
		return math.NaN()
	}
	for k, i := range own {
		if c.nz.own[i] == 0 {
			return math.NaN()
		}
		x[k] = float64((lines[k].value - value) * lines[k].slope)
	}
	y := x[len(own):]
	copy(y, x[:len(own)])
	c.solveOwn(own, x[:len(own)])
	return adjust.Dot(x[:len(own)], y)
}

func (c *calibrated) denseWeights(own []int, lines []sampleLine, w []float64) {
	n := len(own)
	omega := adjust.NewMatrix(n, n)
	for a, i := range own {
		for b, j := range own {
			v := 0.0
			switch {
			case c.in.covariance != nil:
				v = c.in.covariance.At(i, j)
			case i == j:
				v = c.nz.own[i]
			}
			omega.Set(a, b, v/float64(lines[a].slope*lines[b].slope))
		}
		w[a] = 1
	}
	if adjust.Cholesky(omega, n) == nil {
		adjust.SolveLower(omega, w)
		adjust.SolveLowerTransposed(omega, w)
	}
	var total float64
	for _, v := range w {
		total += v
	}
	for a := range w {
		w[a] /= total
	}
}

// A lagged is a predecessor's coefficient in a value.
type lagged struct {
	reading     int
	coefficient float64
}

// A prediction is the value of a set of readings by the fit, with what its
// uncertainty is made of.
type prediction struct {
	value    float64
	variance float64 // without the between-session component
	below    float64 // Σ_g d_gᵀ Cov(φ̂_g) d_g, the same
	scatter  float64
}

// predict forms the value of some readings. gradient (internal parameters),
// own (∂value/∂raw, one for each) and anchors (∂value/∂input, one for each input:
// the anchors through the fit, the corrections directly too) are written to. The coefficients of
// predecessors are left in c.lags.
func (c *calibrated) predict(readings []int, gradient, own, anchors []float64) prediction {
	clear(gradient)
	n := len(readings)
	c.grow(n)
	lines := c.lines[:n]
	for k, i := range readings {
		lines[k] = c.invert(&c.in.readings[i], 0, nil)
	}
	w := c.weights[:n]
	c.meanWeights(readings, lines, w)
	var p prediction
	for k, i := range readings {
		c.invert(&c.in.readings[i], w[k], gradient)
		p.value += float64(w[k] * (lines[k].value - c.y0))
		own[k] = float64(w[k] * lines[k].own)
	}
	p.value += c.y0
	p.scatter = math.NaN()
	if n > 1 {
		p.scatter = c.scatter(readings, lines, p.value, c.work[:2*n])
	}
	c.lags = c.lags[:0]
	if c.layout.memory >= 0 {
		for k, i := range readings {
			c.lags = append(c.lags, lagged{c.in.readings[i].previous, float64(w[k] * lines[k].lag)})
		}
	}
	clear(anchors)
	for k := range anchors {
		for a, g := range gradient {
			anchors[k] += float64(g * c.sensitivity.At(a, k))
		}
	}
	if c.in.corrected != nil {
		direct := anchors[len(c.in.anchors):]
		for k, i := range readings {
			adjust.AddScaled(direct, own[k], c.in.corrected.Row(i))
		}
		for _, l := range c.lags {
			adjust.AddScaled(direct, l.coefficient, c.in.corrected.Row(l.reading))
		}
	}
	c.spreadVariance(&p, readings, gradient, own, anchors)
	return p
}

// spreadVariance fills in the variance and its degrees of freedom.
func (c *calibrated) spreadVariance(p *prediction, readings []int, gradient, own, anchors []float64) {
	d := c.noisePhi
	clear(d)
	if c.nz.general {
		w := c.functional(readings, gradient, own, c.lags)
		p.variance = c.nz.variance(w)
		for j := range d {
			d[j] = c.nz.pattern(c.variances.patterns[j], w)
		}
		c.anchorVariance(p, anchors, w)
	} else {
		p.variance = adjust.Quadratic(gradient, c.noise, gradient)
		for k, i := range readings {
			p.variance += float64(float64(own[k]*own[k]) * c.nz.own[i])
		}
		if c.nz.phiA > 0 {
			p.variance += float64(c.nz.phiA * c.ownPattern(patternPreparation, readings, own))
		}
		for j := range d {
			k := c.variances.patterns[j]
			d[j] = adjust.Quadratic(gradient, c.patternNoise[j], gradient) + c.ownPattern(k, readings, own)
		}
		c.anchorVariance(p, anchors, nil)
	}
	for i, x := range d {
		for j, y := range d {
			p.below += float64(float64(x*y) * c.variances.cov.At(i, j))
		}
	}
}

// ownPattern is ownᵀV_j own over the readings.
func (c *calibrated) ownPattern(k pattern, readings []int, own []float64) float64 {
	var v float64
	if k != patternPreparation {
		for a, i := range readings {
			v += float64(float64(own[a]*own[a]) * k.diagonal(&c.in.readings[i]))
		}
		return v
	}
	sum := c.preparationSums
	for a, i := range readings {
		sum[2*c.in.readings[i].preparation] += own[a]
	}
	for _, i := range readings {
		s := &sum[2*c.in.readings[i].preparation]
		v += float64(*s * *s)
		*s = 0
	}
	return v
}

// functional is ∂value/∂raw over all readings, through the fit and directly.
func (c *calibrated) functional(readings []int, gradient, own []float64, lags []lagged) []float64 {
	w := make([]float64, len(c.in.readings))
	for a, g := range gradient {
		adjust.AddScaled(w, g, c.kraw.Row(a))
	}
	for k, i := range readings {
		w[i] += own[k]
	}
	for _, l := range lags {
		w[l.reading] += l.coefficient
	}
	return w
}

// anchorVariance adds what comes through the anchors' sources, for the
// readings' loads on them too where there are any.
func (c *calibrated) anchorVariance(p *prediction, anchors, w []float64) {
	if len(c.sources.list) == 0 {
		return
	}
	q := c.anchorLoads(anchors, w)
	p.variance += adjust.Dot(q, q)
	if c.sources.phis == 0 {
		return
	}
	clear(c.anchorPhi)
	c.sources.derivatives(q, c.anchorPhi)
	p.below += c.sources.below(c.anchorPhi)
}

// anchorLoads is the standardised sensitivity to each anchor source.
func (c *calibrated) anchorLoads(anchors, w []float64) []float64 {
	q := c.sourceWork
	clear(q)
	c.sources.standardised(c.in, anchors, q)
	if w != nil && c.nz.crossLoads != nil {
		for i, x := range w {
			if x != 0 {
				adjust.AddScaled(q, x, c.nz.crossLoads.Row(i))
			}
		}
	}
	return q
}

func (c *calibrated) grow(n int) {
	if cap(c.lines) < n {
		c.lines = make([]sampleLine, 2*n)
		c.weights = make([]float64, 2*n)
		c.work = make([]float64, 4*n)
	}
	c.lines, c.weights, c.work = c.lines[:cap(c.lines)], c.weights[:cap(c.weights)], c.work[:cap(c.work)]
}
