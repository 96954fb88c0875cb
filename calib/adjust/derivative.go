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
	p, m := s.Problem.Parameters, len(s.Problem.Values)
	if s.Determined || s.whitener == nil {
		return s.Sensitivity(), nil
	}
	b := s.newBend()
	columns := newQR(p, p)
	dtheta, dy := make([]float64, p), make([]float64, m)
	for k := 0; k < p; k++ {
		// In units of its own column, so that all are comparable.
		dtheta[k] = 1
		b.score(dtheta, dy, columns.columns.Row(k))
		dtheta[k] = 0
	}
	if err := columns.factor(); err != nil {
		return nil, err
	}
	out := NewMatrix(p, m)
	ds, x := make([]float64, p), make([]float64, p)
	for l := 0; l < m; l++ {
		dy[l] = 1
		b.score(dtheta, dy, ds)
		dy[l] = 0
		columns.transposed(ds)
		columns.solve(ds, x)
		for k := range x {
			out.Set(k, l, -x[k])
		}
	}
	return out, nil
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

// score writes the change of s(θ, y) in the direction (dtheta, dy) into ds.
func (b *bend) score(dtheta, dy, ds []float64) {
	s, pr := b.s, b.s.Problem
	lambda := s.Weighted
	// The change of the slopes does not depend on that of τ: F is linear in τ.
	pr.Model.Bend(s.Theta, s.Adjusted, dtheta, b.dtau, b.dx, b.dslope)
	// de = −X(y) dθ − S G dy
	for i := range b.de {
		b.de[i] = 0
		if l := pr.Latent[i]; l >= 0 {
			b.de[i] = -float64(s.Slope[i] * dy[l])
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
