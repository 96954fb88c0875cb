package calib

import (
	"math"

	"deltamoor/calib/adjust"
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
	// sensitivity is ∂θ/∂y, and ∂θ/∂x of the corrections after it, internal
	// parameters × the input's inputs.
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
	c.sensitivity = adjust.NewMatrix(p, len(in.inputs))
	for a := 0; a < p; a++ {
		for l, k := range s.anchors {
			c.sensitivity.Set(a, k, local.At(a, l))
		}
		if in.corrected == nil {
			continue
		}
		for i, x := range c.kraw.Row(a) {
			if x != 0 {
				adjust.AddScaled(c.sensitivity.Row(a)[len(in.anchors):], x, in.corrected.Row(i))
			}
		}
	}
	buffer := make([]float64, s.layout.globals+1+s.time.reportedColumns()+2*in.preparations+len(c.sources.list)+c.sources.phis)
	take := func(k int) []float64 {
		b := buffer[:k:k]
		buffer = buffer[k:]
		return b
	}
	c.basis, c.nodes = take(s.layout.globals+1), take(s.time.reportedColumns())
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
	r.AnchorSensitivities, r.CorrectionSensitivities = c.toSession(c.reported.outward(c.sensitivity))
	if d, err := c.exactDerivatives(); err == nil {
		r.AnchorDerivatives, r.CorrectionDerivatives = c.toSession(c.reported.outward(d))
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

// exactDerivatives is the exact derivative of the internal parameters by each
// input at fixed variances. A correction moves the readings, and with memory
// the readings before them.
func (c *calibrated) exactDerivatives() (*adjust.Matrix, error) {
	in := c.in
	m := len(in.anchors)
	q := len(in.inputs) - m
	var directions []adjust.Direction
	for j := 0; j < q; j++ {
		moved, before := make([]float64, c.r.n), make([]float64, c.r.n)
		for k, i := range c.fitted {
			moved[k] = in.corrected.At(i, j)
			if p := in.readings[i].previous; p >= 0 && c.layout.memory >= 0 {
				before[k] = in.corrected.At(p, j)
				moved[k] -= float64(c.state.mu * before[k])
			}
		}
		d := adjust.Direction{Observed: moved}
		if c.layout.memory >= 0 {
			d.Score = make([]float64, c.layout.p)
			d.Score[c.layout.memory] = adjust.Dot(before, c.weightedReadings())
		}
		if c.r.white != nil {
			c.r.white.apply(moved)
			d.Observed = make([]float64, len(c.r.z))
			c.r.project(c.problem, moved, d.Observed)
		}
		directions = append(directions, d)
	}
	values, observed, err := c.s.Derivatives(directions)
	if err != nil {
		return nil, err
	}
	wide := adjust.NewMatrix(c.layout.p, len(in.inputs))
	for a := 0; a < c.layout.p; a++ {
		for l, k := range c.anchors {
			wide.Set(a, k, values.At(a, l))
		}
		for j := 0; j < q; j++ {
			wide.Set(a, m+j, observed.At(a, j))
		}
	}
	return wide, nil
}

// toSession puts the columns of inputs into the session's order: those of the
// anchors, and those of the corrections (nil for none).
func (c *calibrated) toSession(a *adjust.Matrix) (anchors, corrections [][]float64) {
	m := len(c.in.anchors)
	x, y := adjust.NewMatrix(a.Rows, m), adjust.NewMatrix(a.Rows, a.Cols-m)
	for k, input := range c.in.inputs {
		for i := 0; i < a.Rows; i++ {
			if k < m {
				x.Set(i, input.index, a.At(i, k))
			} else {
				y.Set(i, input.index, a.At(i, k))
			}
		}
	}
	if y.Cols == 0 {
		return x.Slices(), nil
	}
	return x.Slices(), y.Slices()
}
