package adjust

// Sensitivity is ∂θ/∂y = −K S G, parameters × values: the Gauss–Newton
// sensitivity, which belongs to the uncertainty of the parameters.
func (s *Solution) Sensitivity() *Matrix {
	p, m := s.Problem.Parameters, len(s.Problem.Values)
	d := NewMatrix(p, m)
	for k := 0; k < p; k++ {
		row, kk := d.Row(k), s.K.Row(k)
		for i, l := range s.Problem.Latent {
			if l >= 0 {
				row[l] -= float64(kk[i] * s.Slope[i])
			}
		}
	}
	return d
}

// Derivative is the exact dθ/dy of the minimiser at fixed variances,
// parameters × values, which belongs to the prediction of shifts. From the
// score s(θ, y) = Xᵀ Σ⁻¹ e = 0,
//
//	dθ/dy = −(∂s/∂θ)⁻¹ ∂s/∂y
//
// with τ̂, Σ and X differentiated too. It equals [Solution.Sensitivity] where
// the residuals are zero or the values exact. A singular ∂s/∂θ (a flat
// minimum) is a *RankError.
func (s *Solution) Derivative() (*Matrix, error) {
	d, _, err := s.Derivatives(nil)
	return d, err
}

// A Direction is a change of the observations, and what else it changes of the
// score (nil for nothing): that of a column of X that holds observations.
type Direction struct {
	Observed []float64
	Score    []float64
}

// Derivatives is [Solution.Derivative] by the values, and by each direction
// of the observations, parameters × directions.
func (s *Solution) Derivatives(directions []Direction) (values, observed *Matrix, err error) {
	p, m := s.Problem.Parameters, len(s.Problem.Values)
	observed = NewMatrix(p, len(directions))
	if s.Determined || s.whitener == nil {
		for k := 0; k < p; k++ {
			for j, d := range directions {
				observed.Set(k, j, Dot(s.K.Row(k), d.Observed))
			}
		}
		return s.Sensitivity(), observed, nil
	}
	b := s.newBend()
	columns := newQR(p, p)
	still := make([]float64, len(s.Problem.Observed))
	dtheta, dy := make([]float64, p), make([]float64, m)
	for k := 0; k < p; k++ {
		dtheta[k] = 1
		b.score(dtheta, dy, still, columns.columns.Row(k))
		dtheta[k] = 0
	}
	if err := columns.factor(); err != nil {
		return nil, nil, err
	}
	values = NewMatrix(p, m)
	ds, x := make([]float64, p), make([]float64, p)
	answer := func(out *Matrix, at int) {
		columns.transposed(ds)
		columns.solve(ds, x)
		for k := range x {
			out.Set(k, at, -x[k])
		}
	}
	for l := 0; l < m; l++ {
		dy[l] = 1
		b.score(dtheta, dy, still, ds)
		dy[l] = 0
		answer(values, l)
	}
	for j, d := range directions {
		b.score(dtheta, dy, d.Observed, ds)
		for k, v := range d.Score {
			ds[k] += v
		}
		answer(observed, j)
	}
	return values, observed, nil
}

// bend holds the buffers of directional derivatives of the score.
type bend struct {
	s                    *Solution
	atY, dx              *Matrix
	dslope, de, dlambda  []float64
	dtau, tau1, tau2, at []float64
	work                 *work
}

func (s *Solution) newBend() *bend {
	n, p, m := len(s.Problem.Observed), s.Problem.Parameters, len(s.Problem.Values)
	b := &bend{s: s, atY: NewMatrix(p, n), dx: NewMatrix(p, n), work: &work{pr: s.Problem}}
	b.dslope, b.de, b.dlambda = make([]float64, n), make([]float64, n), make([]float64, n)
	b.dtau, b.tau1, b.tau2, b.at = make([]float64, m), make([]float64, m), make([]float64, m), make([]float64, m)
	s.Problem.Model.Evaluate(s.Theta, s.Problem.Values, nil, nil, b.atY)
	return b
}

// score writes the change of s(θ, y) in the direction (dtheta, dy, dr) into ds.
func (b *bend) score(dtheta, dy, dr, ds []float64) {
	s, pr := b.s, b.s.Problem
	lambda := s.Weighted
	// The change of the slopes does not depend on that of τ: F is linear in τ.
	clear(b.dtau)
	pr.Model.Bend(s.Theta, s.Adjusted, dtheta, b.dtau, b.dx, b.dslope)
	// de = dr − X(y) dθ − S G dy
	for i := range b.de {
		b.de[i] = dr[i]
		if l := pr.Latent[i]; l >= 0 {
			b.de[i] -= float64(s.Slope[i] * dy[l])
		}
	}
	for k, d := range dtheta {
		if d != 0 {
			AddScaled(b.de, -d, b.atY.Row(k))
		}
	}
	// dΣ λ = dS G (V_y Gᵀ S − V_yr) λ + (S G V_y Gᵀ − V_ry Gᵀ) dS λ
	b.work.spread(lambda, s.Slope, b.tau1)
	for l := range b.tau2 {
		b.tau2[l], b.at[l] = 0, 0
	}
	for i, l := range pr.Latent {
		if l < 0 {
			continue
		}
		if c := float64(b.dslope[i] * lambda[i]); c != 0 {
			b.at[l] += c
			if pr.ValueCovariance != nil {
				AddScaled(b.tau2, c, pr.ValueCovariance.Row(l))
			}
		}
	}
	for i, l := range pr.Latent {
		if l >= 0 {
			b.de[i] -= float64(b.dslope[i]*b.tau1[l]) + float64(s.Slope[i]*b.tau2[l])
		}
		if pr.Cross != nil {
			b.de[i] += Dot(pr.Cross.Row(i), b.at)
		}
	}
	copy(b.dlambda, b.de)
	s.whitener.apply(b.dlambda)
	s.whitener.applyTransposed(b.dlambda)
	// dτ̂ = dy + V_y Gᵀ (dS λ + S dλ) − V_yr dλ
	b.work.spread(b.dlambda, s.Slope, b.dtau)
	for l := range b.dtau {
		b.dtau[l] += dy[l] + b.tau2[l]
	}
	pr.Model.Bend(s.Theta, s.Adjusted, dtheta, b.dtau, b.dx, b.dslope)
	for k := range ds {
		ds[k] = Dot(b.dx.Row(k), lambda) + Dot(s.X.Row(k), b.dlambda)
	}
}
