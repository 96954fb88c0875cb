package calib

import (
	"math"
	"strconv"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/adjust"
)

func format(v float64) string { return strconv.FormatFloat(v, 'g', 4, 64) }

// chiSquareP is the probability of a larger chi-square.
func chiSquareP(x, nu float64) float64 { return distuv.ChiSquared{K: nu}.Survival(x) }

// fisherP is the probability of a larger F.
func fisherP(f, nu1, nu2 float64) float64 {
	switch {
	case math.IsInf(f, 1):
		return 0
	case nu2 > 1e7: // known, to all digits that matter
		return chiSquareP(float64(f*nu1), nu1)
	}
	return distuv.F{D1: nu1, D2: nu2}.Survival(f)
}

// knownVariances says that the readings' variances are known, so that
// chi-square is a test and not an estimate.
func (c *calibrated) knownVariances() bool { return c.variances == nil }

// diagnose fills in what the fit says of itself.
func (c *calibrated) diagnose(r *Result) error {
	n, p := c.r.n, c.layout.p
	nu := n - p
	r.DegreesOfFreedom = nu
	chi2 := c.chiSquare()
	known := c.knownVariances()
	if known && nu > 0 {
		r.ChiSquare = pointer(chi2)
		r.PValue = pointer(chiSquareP(chi2, float64(nu)))
		r.BirgeRatio = pointer(math.Sqrt(chi2 / float64(nu)))
	}
	residuals := c.residuals()
	var rss float64
	for _, e := range residuals {
		rss += float64(e * e)
	}
	switch {
	case c.in.model.estimated():
		if len(c.variances.phi) == 1 {
			r.ResidualSD = pointer(math.Sqrt(c.variances.phi[0]))
		}
	case nu > 0:
		r.ResidualSD = pointer(math.Sqrt(rss / float64(nu)))
	}
	r.AICc = c.aicc(chi2, rss, n, p)
	c.diagnoseReadings(r, residuals)
	r.LackOfFit = c.lackOfFit()
	c.diagnoseAnchors(r)
	c.takeNeeds(r)
	return nil
}

// chiSquare is eᵀΣ⁻¹e over all fitted readings.
func (c *solved) chiSquare() float64 {
	if c.r.white == nil {
		return c.s.ChiSquare
	}
	return c.s.ChiSquare + c.r.tailSquares/c.unit
}

// aicc is Akaike's criterion, corrected for few readings (Hurvich and Tsai
// 1989, doi:10.1093/biomet/76.2.297), by maximum likelihood: of known
// variances, or of one that is estimated; nil otherwise.
func (c *solved) aicc(chi2, rss float64, n, p int) *float64 {
	q, base := p, chi2
	if c.in.model.estimated() {
		if len(c.variances.phi) > 1 || rss <= 0 {
			return nil
		}
		q, base = p+1, float64(float64(n)*adjust.NaturalLog(rss/float64(n)))
	} else if c.variances != nil {
		return nil // declared with degrees of freedom: neither known nor estimated here
	}
	divisor := n - q - 1
	if divisor <= 0 {
		return nil
	}
	return pointer(base + float64(2*q) + float64(2*q*(q+1))/float64(divisor))
}

// residuals are r − f(θ̂, τ̂) of the fitted readings.
func (c *solved) residuals() []float64 {
	residuals := make([]float64, c.r.n)
	basis := make([]float64, c.layout.globals+1)
	l, s := &c.layout, c.layout.state(c.s.Theta)
	for j, i := range c.fitted {
		rd := &c.in.readings[i]
		c.columns(rd, basis)
		k := c.class[j]
		var line, tau float64
		if a := c.classes[k].anchor; a >= 0 {
			tau = c.s.Adjusted[a]
			line = s.alpha + float64(s.beta*tau)
		} else {
			line = c.s.Theta[l.levels[k]]
			tau = (line - s.alpha) / s.beta
		}
		for t := 0; t < l.globals; t++ {
			line += float64(basis[t] * c.s.Theta[l.firstGlobal+t])
		}
		if l.blank >= 0 {
			line += float64(c.size.value(rd.size) * (s.k0 + float64(s.k1*tau)))
		}
		if l.memory >= 0 {
			line = float64(s.rest*line) + float64(s.mu*basis[l.globals])
		}
		residuals[j] = rd.raw - c.r0 - line
	}
	return residuals
}

// diagnoseReadings: with P = Σ⁻¹ − Σ⁻¹XCXᵀΣ⁻¹,
//
//	standardised t = (Σ⁻¹e)_i/√P_ii, the leave-one-reading-out prediction error over its own u
//	studentised  t·√((ν−1)/(ν−t²)), for an estimated σ, ν > 1
//	leverage     h = 1 − P_ii/(Σ⁻¹)_ii
//	Cook         D = t²h/(p(1−h))
func (c *calibrated) diagnoseReadings(r *Result, residuals []float64) {
	r.Readings = make([]ReadingResult, len(c.in.session.Readings))
	for i := range r.Readings {
		r.Readings[i].Index = i
	}
	slab := make([]float64, 6*c.r.n)
	store := func(v float64) *float64 {
		slab[0] = v
		p := &slab[0]
		slab = slab[1:]
		return p
	}
	proj, inverse := c.s.Projection()
	var lambda []float64
	if proj != nil {
		lambda = c.weightedReadings()
	}
	coordinates := make([]float64, len(c.r.z))
	nu, p := float64(c.r.n-c.layout.p), float64(c.layout.p)
	for j, i := range c.fitted {
		out := &r.Readings[c.in.readings[i].index]
		out.Predicted, out.Residual = store(c.in.readings[i].raw-residuals[j]), store(residuals[j])
		if proj == nil || nu <= 0 {
			continue
		}
		pii, sii := c.diagonals(j, proj, inverse, coordinates)
		if !(pii > 1e-12*sii) {
			out.Leverage = store(1)
			continue
		}
		t := lambda[j] / math.Sqrt(pii)
		h := math.Max(0, 1-pii/sii)
		out.StandardizedResidual, out.Leverage = store(t), store(h)
		out.CooksDistance = store(float64(float64(t*t)*h) / float64(p*(1-h)))
		if c.in.model.estimated() && nu > 1 {
			if left := nu - float64(t*t); left > 0 {
				out.StudentizedResidual = store(float64(t * math.Sqrt((nu-1)/left)))
			}
		}
	}
}

// diagonals are P_ii and (Σ⁻¹)_ii of a fitted reading.
func (c *calibrated) diagonals(j int, proj, inverse *adjust.Matrix, v []float64) (pii, sii float64) {
	r := c.r
	if r.white == nil {
		return proj.At(j, j), inverse.At(j, j)
	}
	clear(v)
	square := c.whitenedUnit(j, v)
	rest := square - adjust.Dot(v, v)
	if rest < 1e-13*square {
		rest = 0
	}
	rest /= c.unit
	return rest + adjust.Quadratic(v, proj, v), rest + adjust.Quadratic(v, inverse, v)
}

// whitenedUnit writes the coordinates of L⁻¹e_j into v and returns its square
// length.
func (c *calibrated) whitenedUnit(j int, v []float64) float64 {
	w := c.r.white
	if s := w.single[j]; s != 0 {
		c.r.coordinates(c.problem, j, s, v)
		return float64(s * s)
	}
	for _, g := range w.groups {
		for k, row := range g.rows {
			if row != j {
				continue
			}
			unit := make([]float64, len(g.rows))
			unit[k] = 1
			adjust.SolveLower(g.l, unit)
			for m, other := range g.rows {
				c.r.coordinates(c.problem, other, unit[m], v)
			}
			return adjust.Dot(unit, unit)
		}
	}
	return 0
}

// lackOfFit tests the line against free levels, for weights replicate: with l
// the free levels of the anchors and d = l − Xθ̂,
//
//	F = dᵀ[Cov(l) + β²V_y]⁻¹d/ν_l against (ν_l, ν_w), ν_l = anchors − 2
//
// The free levels are the class rows less what the pooled rows say of the
// terms, so Cov(l) is made of the reduction alone.
func (c *calibrated) lackOfFit() *LackOfFit {
	if c.in.model.weights() != WeightsReplicate || len(c.variances.phi) != 1 || c.layout.blank >= 0 || c.ratio {
		return nil
	}
	var rows []int
	for k, l := range c.classes {
		if l.anchor >= 0 {
			rows = append(rows, c.r.rowOf[k])
		}
	}
	nu := len(rows) - 2
	if nu < 1 {
		return nil
	}
	// Free terms from the pooled rows: R·coef = z.
	t := c.r.pooled.Rows
	upper := adjust.NewMatrix(t, t)
	for j := 0; j < t; j++ {
		for i := 0; i < t; i++ {
			upper.Set(j, i, c.pooledEntry(j, c.r.firstPooled+i))
		}
	}
	unit := make([]float64, t)
	inverse := adjust.NewMatrix(t, t) // row i: solution for unit vector i
	for i := 0; i < t; i++ {
		clear(unit)
		unit[i] = 1
		x, err := adjust.LeastSquares(upper, unit)
		if err != nil {
			return nil
		}
		copy(inverse.Row(i), x)
	}
	// l_k = (z_k − Σ_t g_tk coef_t)/c_k: its weights on the rows z.
	weights := adjust.NewMatrix(len(rows), len(c.r.z))
	for a, i := range rows {
		w := weights.Row(a)
		w[i] = 1
		for s := 0; s < t; s++ {
			var v float64
			for j := 0; j < t; j++ {
				v += float64(c.pooledEntry(j, i) * inverse.At(s, j))
			}
			w[c.r.firstPooled+s] -= v
		}
		for k := range w {
			w[k] /= c.r.model.c[i]
		}
	}
	// With memory the free levels are (1 − μ) times those of the line; the
	// line's own are taken with the fitted μ.
	scale := c.state.rest
	d := make([]float64, len(rows))
	v := adjust.NewMatrix(len(rows), len(rows))
	for a, i := range rows {
		l := c.r.model.latent[i]
		d[a] = adjust.Dot(weights.Row(a), c.r.z) - float64(scale*(c.state.alpha+float64(c.state.beta*c.values[l])))
		for b, j := range rows[:a+1] {
			x := float64(c.unit * adjust.Dot(weights.Row(a), weights.Row(b)))
			if c.vy != nil {
				slope := float64(scale * c.state.beta)
				x += float64(float64(slope*slope) * c.vy.At(l, c.r.model.latent[j]))
			}
			v.Set(a, b, x)
		}
	}
	if adjust.Cholesky(v, len(rows)) != nil {
		return nil
	}
	adjust.SolveLower(v, d)
	within := c.variances.degreesOfFreedom(0)
	f := adjust.Dot(d, d) / float64(nu)
	return &LackOfFit{F: f, NumeratorDF: float64(nu), DenominatorDF: within, PValue: fisherP(f, float64(nu), within)}
}

// pooledEntry is row i's coefficient of global column j, memory's last.
func (c *calibrated) pooledEntry(j, i int) float64 {
	if j < c.layout.globals {
		return c.r.model.global.At(j, i)
	}
	return c.r.model.previous[i]
}

// diagnoseAnchors fills in the adjusted values, and what the session says of
// each anchor without its help.
func (c *calibrated) diagnoseAnchors(r *Result) {
	r.Anchors = make([]AnchorResult, len(c.in.anchors))
	for l, k := range c.anchors {
		a := &c.in.anchors[k]
		r.Anchors[a.index] = AnchorResult{Material: a.material, Value: a.value, Adjusted: c.s.Adjusted[l] + c.y0}
	}
	fitted := 0
	for _, l := range c.classes {
		if l.anchor >= 0 {
			fitted++
		}
	}
	if fitted < 3 && !c.in.model.AllowSingleAnchor || fitted > MaxLeftOutAnchors {
		return
	}
	for _, l := range c.classes {
		if l.anchor >= 0 {
			k := c.anchors[l.anchor]
			r.Anchors[c.in.anchors[k].index].LeftOut = c.leaveOut(k)
		}
	}
}

// leaveOut predicts an anchor from a full refit without its readings and
// value; nil when what is left cannot be fitted.
//
//	z = (predicted − y_k)/u(predicted − y_k)
func (c *calibrated) leaveOut(k int) *LeftOut {
	p, err := c.in.newProblem(k)
	if err != nil {
		return nil
	}
	s, err := p.solve()
	if err != nil {
		return nil
	}
	rest, err := s.calibrate()
	if err != nil {
		return nil
	}
	var readings []int
	for _, i := range c.fitted {
		if c.in.readings[i].class == k {
			readings = append(readings, i)
		}
	}
	gradient, anchors := make([]float64, p.layout.p), make([]float64, len(c.in.inputs))
	own := make([]float64, len(readings))
	pred := rest.predict(readings, gradient, own, anchors)
	// The difference's sources: the prediction's less the value's own, whatever
	// they share.
	var w []float64
	if rest.nz.general {
		w = rest.functional(readings, gradient, own, rest.lags)
	}
	q := rest.anchorLoads(anchors, w)
	variance := pred.variance - adjust.Dot(q, q)
	for j, t := range c.in.anchors[k].terms {
		q[c.in.sources.index[k][j]] -= float64(t.Sensitivity * t.U)
	}
	u := math.Sqrt(math.Max(0, variance+adjust.Dot(q, q)))
	if u == 0 {
		return nil
	}
	value := c.in.anchors[k].value
	return &LeftOut{Predicted: pred.value, StandardUncertainty: u, Z: (pred.value - value) / u}
}
