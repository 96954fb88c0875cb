package calib

import (
	"math"
	"slices"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// Fit adjusts the session's line through its anchors, with the model's terms,
// in one generalised least-squares problem with latent anchor values:
//
//	r_i = α + β·τ_m(i) + Σ_j γ_j g_j(t_i) + Σ_j κ_j h_j(s_i) + ε_i,   y = τ + e
//	minimising (r − f)ᵀV_r⁻¹(r − f) + (τ − y)ᵀV_y⁻¹(τ − y)
//
// and predicts every sample and control from it. Deltas and their standard
// uncertainties are in ‰, times in hours; a nil time or size means that none
// is known, a zero uncertainty an exact value. NaN and infinities are refused.
//
// Only anchors and monitors are fitted. The zero [Model] is the plain line
// with declared weights, the zero [Policy] the documented default. The result
// does not depend on the order of readings or anchors, and the arguments are
// never written to.
//
// Errors are refusals that say where, what was found and what was expected;
// several come joined. See the package comment for the mathematics and its
// sources.
func Fit(session Session, model Model, policy Policy) (*Result, error) {
	return FitWith(EngineNumber, session, model, policy)
}

func fit1(session Session, model Model, policy Policy) (*Result, error) {
	if err := validate(&session, model, policy); err != nil {
		return nil, err
	}
	in, err := prepare(&session, model, policy)
	if err != nil {
		return nil, err
	}
	p, err := in.newProblem(-1)
	if err != nil {
		return nil, err
	}
	s, err := p.solve()
	if err != nil {
		return nil, err
	}
	c, err := s.calibrate()
	if err != nil {
		return nil, err
	}
	return c.result()
}

// A calibrated is a solved problem with everything that predictions need.
type calibrated struct {
	*solved
	state    state
	reported *reported
	nz       *noise
	sources  *anchorSources
	// kraw is ∂θ/∂r, internal parameters × all readings; noise K V_r Kᵀ, and
	// patternNoise K V_j Kᵀ for each variance pattern.
	kraw         *adjust.Matrix
	noise        *adjust.Matrix
	patternNoise []*adjust.Matrix
	// sensitivity is ∂θ/∂y, internal parameters × the input's anchors.
	sensitivity *adjust.Matrix

	// Buffers, so that predictions do not allocate.
	basis, nodes              []float64
	lines                     []sampleLine
	weights, work             []float64
	lags                      []lagged
	preparationSums, noisePhi []float64
	sourceWork, anchorPhi     []float64
}

// calibrate gathers the propagation matrices.
func (s *solved) calibrate() (*calibrated, error) {
	in := s.in
	c := &calibrated{solved: s, state: s.layout.state(s.s.Theta), reported: s.report(s.s.Theta), sources: in.sources}
	var err error
	if c.nz, err = s.newNoise(c.sources); err != nil {
		return nil, err
	}
	n, p := len(in.readings), s.layout.p
	c.kraw = adjust.NewMatrix(p, n)
	fitted := make([]float64, s.r.n)
	for a := 0; a < p; a++ {
		row := c.kraw.Row(a)
		if s.r.white == nil {
			copy(fitted, s.s.K.Row(a))
		} else {
			s.r.spread(s.problem, s.s.K.Row(a), fitted)
			s.r.white.applyTransposed(fitted)
		}
		for j, i := range s.fitted {
			row[i] = fitted[j]
		}
		in.lag(row, s.fitted, c.state.mu)
	}
	c.noise = symmetric(p, func(a, b int) float64 { return c.nz.bilinear(c.kraw.Row(a), c.kraw.Row(b)) })
	if s.variances != nil {
		for _, k := range s.variances.patterns {
			c.patternNoise = append(c.patternNoise, c.patternCovariance(k))
		}
		c.noisePhi = make([]float64, len(s.variances.patterns))
	}
	local := s.s.Sensitivity()
	c.sensitivity = adjust.NewMatrix(p, len(in.anchors))
	for a := 0; a < p; a++ {
		for l, k := range s.anchors {
			c.sensitivity.Set(a, k, local.At(a, l))
		}
	}
	buffer := make([]float64, s.layout.globals+1+len(s.time.names())+2*in.preparations+len(c.sources.list)+c.sources.phis)
	take := func(k int) []float64 {
		b := buffer[:k:k]
		buffer = buffer[k:]
		return b
	}
	c.basis, c.nodes = take(s.layout.globals+1), take(len(s.time.names()))
	c.preparationSums = take(2 * in.preparations)
	c.sourceWork, c.anchorPhi = take(len(c.sources.list)), take(c.sources.phis)
	return c, nil
}

func symmetric(n int, at func(i, j int) float64) *adjust.Matrix {
	m := adjust.NewMatrix(n, n)
	for i := 0; i < n; i++ {
		for j := 0; j <= i; j++ {
			v := at(i, j)
			m.Set(i, j, v)
			m.Set(j, i, v)
		}
	}
	return m
}

// patternCovariance is K V_j Kᵀ.
func (c *calibrated) patternCovariance(k pattern) *adjust.Matrix {
	if k == patternPreparation {
		return symmetric(c.layout.p, func(a, b int) float64 { return c.nz.patternBilinear(c.kraw.Row(a), c.kraw.Row(b)) })
	}
	diagonal := make([]float64, len(c.in.readings))
	for i := range diagonal {
		if d := k.diagonal(&c.in.readings[i]); finite(d) {
			diagonal[i] = d
		}
	}
	scaled := make([]float64, len(diagonal))
	out := adjust.NewMatrix(c.layout.p, c.layout.p)
	for a := 0; a < c.layout.p; a++ {
		for i, v := range c.kraw.Row(a) {
			scaled[i] = float64(v * diagonal[i])
		}
		for b := 0; b <= a; b++ {
			v := adjust.Dot(scaled, c.kraw.Row(b))
			out.Set(a, b, v)
			out.Set(b, a, v)
		}
	}
	return out
}

// covariance is that of the internal parameters, the sum of all sources:
// K V_r Kᵀ + S V_y Sᵀ, and the cross-covariance's part, each as products of
// standardised sensitivities, which cannot cancel.
func (c *calibrated) covariance() *adjust.Matrix {
	q := adjust.NewMatrix(c.layout.p, len(c.sources.list))
	for a := 0; a < c.layout.p; a++ {
		var w []float64
		if c.nz.crossLoads != nil {
			w = c.kraw.Row(a)
		}
		copy(q.Row(a), c.anchorLoads(c.sensitivity.Row(a), w))
	}
	return symmetric(c.layout.p, func(a, b int) float64 {
		v := adjust.Dot(q.Row(a), q.Row(b))
		if c.nz.crossLoads == nil {
			return v + c.noise.At(a, b)
		}
		return v + adjust.Dot(c.nz.standardised(c.kraw.Row(a)), c.nz.standardised(c.kraw.Row(b)))
	})
}

// result writes everything out.
func (c *calibrated) result() (*Result, error) {
	p := c.problem
	r := &Result{Engine: EngineNumber, calibrated: c, ConditionNumber: c.s.Condition(), Iterations: c.iterations}
	covariance := c.covariance()
	outward := c.reported.covariance(covariance)
	for i, name := range c.reported.names {
		r.Parameters = append(r.Parameters, Parameter{Name: name, Value: c.reported.values[i], StandardUncertainty: math.Sqrt(math.Max(0, outward.At(i, i)))})
	}
	r.Covariance = outward.Slices()
	r.NoiseCovariance = c.reported.covariance(c.noise).Slices()
	r.AnchorSensitivities = c.toSession(c.reported.outward(c.sensitivity))
	if d, err := c.s.Derivative(); err == nil {
		wide := adjust.NewMatrix(c.layout.p, len(c.in.anchors))
		for a := 0; a < c.layout.p; a++ {
			for l, k := range c.anchors {
				wide.Set(a, k, d.At(a, l))
			}
		}
		r.AnchorDerivatives = c.toSession(c.reported.outward(wide))
	}
	if v := c.variances; v != nil {
		for j, name := range v.names {
			r.Variances = append(r.Variances, Variance{Name: name, Value: v.phi[j], DegreesOfFreedom: v.degreesOfFreedom(j)})
		}
		r.VarianceCovariance = v.cov.Slices()
	}
	if p.time.kind != DriftNone {
		r.ReferenceTime = pointer(p.time.reference)
	}
	if p.size.kind != SizeNone || p.in.model.weights() == WeightsSize {
		r.ReferenceSize = pointer(p.size.reference)
	}
	if err := c.takeLine(r, covariance); err != nil {
		return nil, err
	}
	c.takeBlank(r)
	if err := c.diagnose(r); err != nil {
		return nil, err
	}
	c.takeSubjects(r)
	c.flag(r)
	return r, nil
}

func pointer(v float64) *float64 { return &v }

// toSession puts the columns of anchors into the session's order.
func (c *calibrated) toSession(a *adjust.Matrix) [][]float64 {
	out := adjust.NewMatrix(a.Rows, a.Cols)
	for k, anchor := range c.in.anchors {
		for i := 0; i < a.Rows; i++ {
			out.Set(i, anchor.index, a.At(i, k))
		}
	}
	return out.Slices()
}

// takeLine quotes the fit as true = Slope·raw + Intercept, and refuses a slope
// that cannot be inverted: (t_p·u(β)/β)² above 1.
func (c *calibrated) takeLine(r *Result, covariance *adjust.Matrix) error {
	alpha, beta := r.Parameters[c.reported.intercept].Value, r.Parameters[c.reported.slope].Value
	if beta == 0 || !finite(1/beta) {
		return c.weakSlope(beta, r.Parameters[c.reported.slope].StandardUncertainty)
	}
	caa, cab, cbb := r.Covariance[c.reported.intercept][c.reported.intercept], r.Covariance[c.reported.intercept][c.reported.slope], r.Covariance[c.reported.slope][c.reported.slope]
	// slope 1/β, intercept −α/β
	s, i := 1/beta, -alpha/beta
	ds := -float64(s * s)       // ∂(1/β)/∂β
	da, db := -s, -float64(i*s) // ∂(−α/β)/∂α, ∂/∂β = α/β²
	l := &Line{Slope: s, Intercept: i, USlope: float64(math.Abs(ds) * math.Sqrt(math.Max(0, cbb)))}
	variance := float64(float64(da*da)*caa) + float64(2*float64(da*db)*cab) + float64(float64(db*db)*cbb)
	l.UIntercept = math.Sqrt(math.Max(0, variance))
	l.Covariance = float64(ds * (float64(da*cab) + float64(db*cbb)))
	r.Line = l
	if g := c.slopeRatio(beta, math.Sqrt(math.Max(0, cbb))); g > 1 && !c.ratio {
		return c.weakSlope(beta, math.Sqrt(cbb))
	}
	return nil
}

// slopeRatio is (t_p·u(β)/β)², with ν of the slope.
func (c *calibrated) slopeRatio(beta, u float64) float64 {
	if u == 0 {
		return 0
	}
	t := float64(uncertain.CoverageFactor(c.in.policy.Probability, c.slopeDF())*u) / beta
	return float64(t * t)
}

// slopeDF is ν_eff of the slope.
func (c *calibrated) slopeDF() float64 {
	g := c.reported.jacobian.Row(c.reported.slope)
	var variance, below float64
	variance = adjust.Quadratic(g, c.noise, g)
	anchors := make([]float64, len(c.in.anchors))
	for k := range anchors {
		for a, x := range g {
			anchors[k] += float64(x * c.sensitivity.At(a, k))
		}
	}
	p := prediction{variance: variance}
	for i := range c.noisePhi {
		for j := range c.noisePhi {
			below += float64(adjust.Quadratic(g, c.patternNoise[i], g) * float64(adjust.Quadratic(g, c.patternNoise[j], g)*c.variances.cov.At(i, j)))
		}
	}
	p.below = below
	c.anchorVariance(&p, anchors, nil)
	return uncertain.SatterthwaiteDF(p.variance, p.below)
}

func (c *calibrated) weakSlope(beta, u float64) error {
	return &WeakSlopeError{Refusal{Place: "anchors", Found: "slope " + format(beta) + " with standard uncertainty " + format(u), Expected: "a slope that is clearly not zero: anchors further apart, or more readings of them"}}
}

// takeSubjects predicts every sample and control, in the order of their first
// readings.
func (c *calibrated) takeSubjects(r *Result) {
	groups := c.subjects()
	p, m := len(c.reported.names), len(c.in.anchors)
	total := 0
	for _, g := range groups {
		total += len(g.readings)
	}
	r.Subjects = make([]SubjectResult, len(groups))
	// One array for all subjects of each kind of slice.
	floats := make([]float64, len(groups)*p+total)
	indices := make([]int, total)
	lines := make([]Contribution, 0, len(groups)*(len(c.sources.list)+2)+total*(1+indicatorInt(c.nz.preparations)))
	ids := c.subjectIDs(groups, total)
	gradient, anchors := make([]float64, c.layout.p), make([]float64, m)
	id := 0
	for k, g := range groups {
		s := &r.Subjects[k]
		rd := &c.in.readings[g.readings[0]]
		s.Subject, s.Role, s.N = rd.Subject, rd.Role, g.preparations
		n := len(g.readings)
		s.Readings, indices = indices[:n:n], indices[n:]
		s.Gradient, floats = floats[:p:p], floats[p:]
		s.Coefficients, floats = floats[:n:n], floats[n:]
		pred := c.predict(g.readings, gradient, s.Coefficients, anchors)
		var w []float64
		if c.nz.general {
			w = c.functional(g.readings, gradient, s.Coefficients, c.lags)
		}
		c.fillSubject(s, g, pred)
		start := len(lines)
		lines = c.budget(lines, s, g, w, gradient, anchors, ids[id:])
		s.Sources = lines[start:len(lines):len(lines)]
		id += n + 1
	}
}

func indicatorInt(b bool) int {
	if b {
		return 1
	}
	return 0
}

// A subjectGroup is one sample's or control's readings, by position.
type subjectGroup struct {
	readings     []int
	preparations int
	// ambiguous says that a sample and a control of the session have one code.
	ambiguous bool
}

// subjects collects the usable readings of samples and controls. A control
// reading of a material that is an anchor is shown, and flagged.
func (c *calibrated) subjects() []subjectGroup {
	type key struct {
		subject string
		sample  bool
	}
	count := 0
	for i := range c.in.readings {
		if rd := &c.in.readings[i]; rd.usable && rd.class < 0 {
			count++
		}
	}
	at := make(map[key]int, count)
	var groups []subjectGroup
	which := make([]int, 0, count)
	for i := range c.in.readings {
		rd := &c.in.readings[i]
		if !rd.usable || rd.class >= 0 {
			continue
		}
		k := key{rd.Subject, rd.Role == Sample}
		g, ok := at[k]
		if !ok {
			g = len(groups)
			at[k] = g
			groups = append(groups, subjectGroup{})
		}
		groups[g].preparations++ // readings, for now
		which = append(which, g)
	}
	slab := make([]int, count)
	for g := range groups {
		n := groups[g].preparations
		groups[g].readings, slab = slab[:0:n], slab[n:]
	}
	j := 0
	for i := range c.in.readings {
		if rd := &c.in.readings[i]; rd.usable && rd.class < 0 {
			groups[which[j]].readings = append(groups[which[j]].readings, i)
			j++
		}
	}
	for k, g := range at {
		_, groups[g].ambiguous = at[key{k.subject, !k.sample}]
	}
	seen := make([]bool, c.in.preparations)
	for g := range groups {
		groups[g].preparations = 0
		for _, i := range groups[g].readings {
			if p := c.in.readings[i].preparation; !seen[p] {
				seen[p] = true
				groups[g].preparations++
			}
		}
	}
	return groups
}

// fillSubject sets value, uncertainty and coverage.
func (c *calibrated) fillSubject(s *SubjectResult, g subjectGroup, pred prediction) {
	for k, i := range g.readings {
		s.Readings[k] = c.in.readings[i].index
	}
	s.Value, s.scatter = pred.value+0, pred.scatter
	between := c.in.policy.BetweenSession
	s.BetweenSession = between.StandardUncertainty
	b2 := float64(between.StandardUncertainty * between.StandardUncertainty)
	variance := pred.variance + b2
	below := pred.below
	if nu := between.DegreesOfFreedom; nu > 0 {
		below += float64(2*float64(b2*b2)) / nu
	}
	s.StandardUncertainty = math.Sqrt(math.Max(0, variance))
	nu := uncertain.SatterthwaiteDF(variance, below)
	s.Expanded, _ = uncertain.ExpandedFrom(s.StandardUncertainty, nu, c.in.policy.coverage()) // the policy was validated
	for k, i := range g.readings {
		rd := &c.in.readings[i]
		// The readings' weights in the value are own·slope.
		line := c.invert(rd, 0, nil)
		c.reportedGradient(rd, line.value, float64(s.Coefficients[k]*line.slope), s.Gradient)
	}
	for _, l := range c.lags {
		if k := slices.Index(g.readings, l.reading); k >= 0 {
			s.Coefficients[k] += l.coefficient
			continue
		}
		s.OtherReadings = append(s.OtherReadings, c.in.readings[l.reading].index)
		s.OtherCoefficients = append(s.OtherCoefficients, l.coefficient)
	}
}
