package calib

import (
	"math"

	"deltamoor/calib/adjust"
)

// A LineForm is a fit, at its own variances and weights, as a line through as
// many points as it has anchors, with everything else taken out exactly:
//
//	x = α + β·τ + ε,  y = τ + e,  Cov(ε) = Noise, Cov(e) = ValueCovariance
//	value of subject s = Centre + (R_s − α − terms_s·Σ⁻¹(x − α − β·y))/β,
//	Σ = Noise + β²·ValueCovariance
//
// x is each anchor's mean raw delta less its share of drift and size, as the
// differences within materials give them; what the line's residuals add to
// those reaches a subject through terms. x and R are linear in the readings, so
// that the form propagates distributions without any matrix in the trial. With
// a single anchor (Ratio) x = (τ − δ_gas)/(1 + δ_gas/1000) = α + β·τ. Deltas
// in ‰, less Centre.
type LineForm struct {
	// Anchors is the session's index of each point.
	Anchors []int
	// Points and Subjects hold ∂x/∂r and ∂R/∂r, one row for each point or
	// subject over the readings' places of [Refitter.Noise]; PointsBy and
	// SubjectsBy the same by the session's corrections.
	Points, Subjects     [][]float64
	PointsBy, SubjectsBy [][]float64
	// PointsAtRest, SubjectsAtRest and Values are x, R and y where nothing is
	// moved: there the line fits without residual.
	PointsAtRest, SubjectsAtRest, Values []float64
	// Noise and ValueCovariance are what the weights rest on; nil with two
	// points or one, which determine the line.
	Noise, ValueCovariance *adjust.Matrix
	// Terms has one row for each subject; nil for a fit without drift and size,
	// or with two points or one.
	Terms            *adjust.Matrix
	Intercept, Slope float64 // at rest
	Centre           float64
	Ratio            bool
}

// MaxLinePoints bounds the anchors of a [LineForm].
const MaxLinePoints = 16

// Line gives the fit in line form; ok is false for fits that have none: with
// memory, a blank, exact or correlated readings, or too many anchors.
func (f *Refitter) Line() (line *LineForm, ok bool) {
	c := f.c
	l, m := &c.layout, c.r.model
	if c.r.white == nil || l.memory >= 0 || l.blank >= 0 || c.nz.loads != nil {
		return nil, false
	}
	var rows []int // of anchors
	for i, latent := range m.latent {
		if latent >= 0 {
			rows = append(rows, i)
		}
	}
	k := len(rows)
	if k > MaxLinePoints || (l.gas >= 0) != (k == 1) {
		return nil, false
	}
	out := &LineForm{Ratio: l.gas >= 0, Centre: c.y0, Intercept: c.state.alpha, Slope: c.state.beta}
	z := f.rowsByReading()
	n, globals := len(f.base), l.globals
	free := c.freeCoefficients(z, n)
	// The readings at rest, as the rows see them.
	rest := make([]float64, n)
	for i, r := range f.base {
		rest[i] = r - c.r0
	}
	for _, i := range rows {
		a := c.in.anchors[c.anchors[m.latent[i]]].index
		out.Anchors = append(out.Anchors, a)
		out.Values = append(out.Values, c.s.Adjusted[m.latent[i]])
		x := make([]float64, n)
		adjust.AddScaled(x, 1/m.c[i], z.Row(i))
		for t := 0; t < globals; t++ {
			adjust.AddScaled(x, -(m.global.At(t, i) / m.c[i]), free.Row(t))
		}
		out.Points = append(out.Points, x)
		out.PointsAtRest = append(out.PointsAtRest, adjust.Dot(x, rest))
		out.PointsBy = append(out.PointsBy, f.byCorrections(x))
	}
	basis := adjust.NewMatrix(len(f.subjects), globals)
	for s := range f.subjects {
		x := make([]float64, n)
		for j, p := range f.subjects[s].readings {
			w := f.subjects[s].weights[j]
			x[p] += w
			c.columns(&c.in.readings[p], c.basis)
			adjust.AddScaled(basis.Row(s), w, c.basis[:globals])
		}
		for t := 0; t < globals; t++ {
			adjust.AddScaled(x, -basis.At(s, t), free.Row(t))
		}
		out.Subjects = append(out.Subjects, x)
		out.SubjectsAtRest = append(out.SubjectsAtRest, adjust.Dot(x, rest))
		out.SubjectsBy = append(out.SubjectsBy, f.byCorrections(x))
	}
	if k > 2 {
		f.weigh(out, rows, basis)
	}
	// At rest the points are on the line, or the form is not this fit's.
	return out, out.residual() <= 1e-9*(1+math.Abs(out.Intercept)+math.Abs(out.Slope))
}

// rowsByReading is ∂z/∂r: the reduction's rows by the readings' places.
func (f *Refitter) rowsByReading() *adjust.Matrix {
	c := f.c
	out := adjust.NewMatrix(len(c.r.z), len(f.base))
	v, z := make([]float64, c.r.n), make([]float64, len(c.r.z))
	for j, i := range c.fitted {
		clear(v)
		v[j] = 1
		f.toRows(v, z)
		for row, x := range z {
			out.Set(row, i, x)
		}
	}
	return out
}

// freeCoefficients is ∂γ/∂r of the drift and size coefficients as the fit with
// every level free gives them: the pooled rows are triangular in them.
func (c *calibrated) freeCoefficients(z *adjust.Matrix, n int) *adjust.Matrix {
	globals, first := c.layout.globals, c.r.firstPooled
	out := adjust.NewMatrix(globals, n)
	for t := globals - 1; t >= 0; t-- {
		row := out.Row(t)
		copy(row, z.Row(first+t))
		for u := t + 1; u < globals; u++ {
			adjust.AddScaled(row, -c.r.model.global.At(u, first+t), out.Row(u))
		}
		length := c.r.model.global.At(t, first+t)
		for i := range row {
			row[i] /= length
		}
	}
	return out
}

// weigh fills in what the weights of three or more points rest on. With G the
// coefficients' triangle and g the points' shares of the coefficients,
//
//	Noise = φ·(diag(1/c²) + g G⁻¹G⁻ᵀ gᵀ),  Terms = φ·b G⁻¹G⁻ᵀ gᵀ
func (f *Refitter) weigh(out *LineForm, rows []int, basis *adjust.Matrix) {
	c := f.c
	globals, first := c.layout.globals, c.r.firstPooled
	m := c.r.model
	// toEnd solves x·G = v for a row v: x = v G⁻¹, with G[t][u] = global(u, first+t), u ≥ t.
	toEnd := func(v []float64) {
		for u := 0; u < globals; u++ {
			for t := 0; t < u; t++ {
				v[u] -= float64(v[t] * m.global.At(u, first+t))
			}
			v[u] /= m.global.At(u, first+u)
		}
	}
	k := len(rows)
	share := adjust.NewMatrix(k, globals)
	out.Noise = adjust.NewMatrix(k, k)
	for a, i := range rows {
		for t := 0; t < globals; t++ {
			share.Set(a, t, m.global.At(t, i)/m.c[i])
		}
		toEnd(share.Row(a))
		for b := 0; b <= a; b++ {
			v := float64(c.unit * adjust.Dot(share.Row(a), share.Row(b)))
			if a == b {
				v += c.unit / float64(m.c[i]*m.c[i])
			}
			out.Noise.Set(a, b, v)
			out.Noise.Set(b, a, v)
		}
	}
	if globals > 0 {
		out.Terms = adjust.NewMatrix(basis.Rows, k)
		for s := 0; s < basis.Rows; s++ {
			toEnd(basis.Row(s))
			for a := range rows {
				out.Terms.Set(s, a, float64(c.unit*adjust.Dot(basis.Row(s), share.Row(a))))
			}
		}
	}
	if vy := c.s.Problem.ValueCovariance; vy != nil {
		out.ValueCovariance = adjust.NewMatrix(k, k)
		for a, i := range rows {
			for b, j := range rows {
				out.ValueCovariance.Set(a, b, vy.At(m.latent[i], m.latent[j]))
			}
		}
	}
}

// byCorrections is a row over the readings as one over the session's corrections.
func (f *Refitter) byCorrections(row []float64) []float64 {
	in := f.c.in
	if in.corrected == nil {
		return nil
	}
	out := make([]float64, in.corrected.Cols)
	for i, v := range row {
		if v != 0 {
			adjust.AddScaled(out, v, in.corrected.Row(i))
		}
	}
	return out
}

// Live tells which readings' places the given subjects' values depend on.
func (f *Refitter) Live(subjects []int) []bool {
	c := f.c
	out := make([]bool, len(f.base))
	need := func(i int) {
		out[i] = true
		if p := c.in.readings[i].previous; p >= 0 && c.layout.memory >= 0 {
			out[p] = true
		}
	}
	for _, i := range c.fitted {
		need(i)
	}
	for _, s := range subjects {
		for _, i := range f.subjects[s].readings {
			need(i)
		}
	}
	return out
}

// residual is the largest residual of the points at rest: rounding.
func (l *LineForm) residual() float64 {
	worst := 0.0
	for k, x := range l.PointsAtRest {
		worst = math.Max(worst, math.Abs(x-l.Intercept-float64(l.Slope*l.Values[k])))
	}
	return worst
}
