package calib

import "deltamoor/calib/adjust"

// A layout says where each internal parameter is. The internal parameters are
// those of the centred problem: raw − r0 against τ − y0.
type layout struct {
	p int
	// intercept and slope; with one anchor, gas is the working gas' delta, in
	// place of both.
	intercept, slope, gas int
	// additive size coefficient and drift are global columns, from firstGlobal;
	// the blank's two coefficients; memory. −1 for none.
	firstGlobal, globals      int
	blank, blankSlope, memory int
	// level of each class, −1 for anchors.
	levels []int
}

// rows is the model of one fit in the form that [adjust.Solve] takes: row i is
//
//	(1 − μ)[c_i·L + h_i·B + Σ_t g_ti·coef_t] + μ·previous_i
//
// with L = α + βτ of an anchor or the free level of a monitor, and B the
// blank's κ0 + κ1·τ. A raw reading has c = 1; the compressed rows of [reduce]
// are combinations of the readings of one material.
type rows struct {
	layout
	class    []int // −1 for rows that are free of any level
	latent   []int // anchor of the row, −1 for none
	c, h     []float64
	global   *adjust.Matrix // one row for each global column
	previous []float64      // nil without memory
}

// state is θ in the words of the model.
type state struct {
	alpha, beta, b1, b2 float64 // β and its first two derivatives by the gas' delta
	gas                 float64
	k0, k1, mu, rest    float64
}

func (l *layout) state(theta []float64) state {
	s := state{rest: 1}
	if l.gas >= 0 {
		// β = 1/(1 + δ_gas/1000), α = −β·δ_gas
		s.gas = theta[l.gas]
		s.beta = 1 / (1 + s.gas/1000)
		s.b1 = -float64(s.beta*s.beta) / 1000
		s.b2 = float64(-2*s.beta*s.b1) / 1000
		s.alpha = -float64(s.beta * s.gas)
	} else {
		s.alpha, s.beta = theta[l.intercept], theta[l.slope]
	}
	if l.blank >= 0 {
		s.k0, s.k1 = theta[l.blank], theta[l.blankSlope]
	}
	if l.memory >= 0 {
		s.mu = theta[l.memory]
		s.rest = 1 - s.mu
	}
	return s
}

// base is Σ_t g_ti·coef_t of row i.
func (r *rows) base(theta []float64, i int) float64 {
	var v float64
	for t := 0; t < r.globals; t++ {
		v += float64(r.global.At(t, i) * theta[r.firstGlobal+t])
	}
	return v
}

// Evaluate implements [adjust.Model].
func (r *rows) Evaluate(theta, tau, f, slope []float64, x *adjust.Matrix) {
	s := r.state(theta)
	if x != nil {
		clear(x.Data)
	}
	for i, class := range r.class {
		lin := r.base(theta, i)
		switch l := r.latent[i]; {
		case l >= 0:
			lin += r.latentRow(i, tau[l], s, x)
			if slope != nil {
				slope[i] = float64(s.rest * (float64(r.c[i]*s.beta) + float64(r.h[i]*s.k1)))
			}
		case class >= 0:
			lin += r.levelRow(i, theta[r.levels[class]], s, x)
			if slope != nil {
				slope[i] = 0
			}
		default:
			if slope != nil {
				slope[i] = 0
			}
		}
		fi := float64(s.rest * lin)
		if r.memory >= 0 {
			fi += float64(s.mu * r.previous[i])
		}
		if f != nil {
			f[i] = fi
		}
		if x == nil {
			continue
		}
		for t := 0; t < r.globals; t++ {
			x.Set(r.firstGlobal+t, i, float64(s.rest*r.global.At(t, i)))
		}
		if r.memory >= 0 {
			x.Set(r.memory, i, r.previous[i]-lin)
		}
	}
}

// latentRow is c·(α + βτ) + h·(κ0 + κ1τ), and the derivatives that go with it.
func (r *rows) latentRow(i int, tau float64, s state, x *adjust.Matrix) float64 {
	c, h := r.c[i], r.h[i]
	if x != nil {
		if r.gas >= 0 {
			x.Set(r.gas, i, float64(s.rest*float64(c*(float64(s.b1*(tau-s.gas))-s.beta))))
		} else {
			x.Set(r.intercept, i, float64(s.rest*c))
			x.Set(r.slope, i, float64(s.rest*float64(c*tau)))
		}
		if r.blank >= 0 {
			x.Set(r.blank, i, float64(s.rest*h))
			x.Set(r.blankSlope, i, float64(s.rest*float64(h*tau)))
		}
	}
	line := s.alpha + float64(s.beta*tau)
	if r.gas >= 0 {
		line = float64(s.beta * (tau - s.gas))
	}
	if r.blank < 0 {
		return float64(c * line)
	}
	return float64(c*line) + float64(h*(s.k0+float64(s.k1*tau)))
}

// levelRow is c·λ + h·(κ0 + κ1(λ − α)/β) for a monitor.
func (r *rows) levelRow(i int, level float64, s state, x *adjust.Matrix) float64 {
	c, h := r.c[i], r.h[i]
	at := r.levels[r.class[i]]
	if r.blank < 0 {
		if x != nil {
			x.Set(at, i, float64(s.rest*c))
		}
		return float64(c * level)
	}
	tau := (level - s.alpha) / s.beta
	q := s.k1 / s.beta
	if x != nil {
		x.Set(r.intercept, i, -float64(s.rest*float64(h*q)))
		x.Set(r.slope, i, -float64(s.rest*float64(float64(h*q)*tau)))
		x.Set(at, i, float64(s.rest*(c+float64(h*q))))
		x.Set(r.blank, i, float64(s.rest*h))
		x.Set(r.blankSlope, i, float64(s.rest*float64(h*tau)))
	}
	return float64(c*level) + float64(h*(s.k0+float64(s.k1*tau)))
}

// Bend implements [adjust.Model]: the second derivatives of the rows, in one
// direction.
func (r *rows) Bend(theta, tau, dtheta, dtau []float64, dx *adjust.Matrix, dslope []float64) {
	s := r.state(theta)
	var d state // the change of the state
	if r.gas >= 0 {
		d.gas = dtheta[r.gas]
		d.beta = float64(s.b1 * d.gas)
		d.b1 = float64(s.b2 * d.gas)
	} else {
		d.alpha, d.beta = dtheta[r.intercept], dtheta[r.slope]
	}
	if r.blank >= 0 {
		d.k0, d.k1 = dtheta[r.blank], dtheta[r.blankSlope]
	}
	if r.memory >= 0 {
		d.mu = dtheta[r.memory]
		d.rest = -d.mu
	}
	clear(dx.Data)
	for i, class := range r.class {
		dlin := r.base(dtheta, i)
		dslope[i] = 0
		switch l := r.latent[i]; {
		case l >= 0:
			dlin += r.bendLatent(i, tau[l], dtau[l], s, d, dx)
			dslope[i] = float64(d.rest*(float64(r.c[i]*s.beta)+float64(r.h[i]*s.k1))) +
				float64(s.rest*(float64(r.c[i]*d.beta)+float64(r.h[i]*d.k1)))
		case class >= 0:
			at := r.levels[class]
			dlin += r.bendLevel(i, theta[at], dtheta[at], s, d, dx)
		}
		for t := 0; t < r.globals; t++ {
			dx.Set(r.firstGlobal+t, i, float64(d.rest*r.global.At(t, i)))
		}
		if r.memory >= 0 {
			dx.Set(r.memory, i, -dlin)
		}
	}
}

func (r *rows) bendLatent(i int, tau, dtau float64, s, d state, dx *adjust.Matrix) float64 {
	c, h := r.c[i], r.h[i]
	var dline float64
	if r.gas >= 0 {
		away := tau - s.gas
		first := float64(s.b1*away) - s.beta
		second := float64(d.b1*away) + float64(s.b1*(dtau-d.gas)) - d.beta
		dx.Set(r.gas, i, float64(d.rest*float64(c*first))+float64(s.rest*float64(c*second)))
		dline = float64(d.beta*away) + float64(s.beta*(dtau-d.gas))
	} else {
		dx.Set(r.intercept, i, float64(d.rest*c))
		dx.Set(r.slope, i, float64(d.rest*float64(c*tau))+float64(s.rest*float64(c*dtau)))
		dline = d.alpha + float64(d.beta*tau) + float64(s.beta*dtau)
	}
	if r.blank < 0 {
		return float64(c * dline)
	}
	dx.Set(r.blank, i, float64(d.rest*h))
	dx.Set(r.blankSlope, i, float64(d.rest*float64(h*tau))+float64(s.rest*float64(h*dtau)))
	return float64(c*dline) + float64(h*(d.k0+float64(d.k1*tau)+float64(s.k1*dtau)))
}

func (r *rows) bendLevel(i int, level, dlevel float64, s, d state, dx *adjust.Matrix) float64 {
	c, h := r.c[i], r.h[i]
	at := r.levels[r.class[i]]
	if r.blank < 0 {
		dx.Set(at, i, float64(d.rest*c))
		return float64(c * dlevel)
	}
	tau := (level - s.alpha) / s.beta
	dtau := (dlevel - d.alpha - float64(tau*d.beta)) / s.beta
	q := s.k1 / s.beta
	dq := (d.k1 - float64(q*d.beta)) / s.beta
	whole := float64(d.rest*q) + float64(s.rest*dq)
	dx.Set(r.intercept, i, -float64(h*whole))
	dx.Set(r.slope, i, -float64(h*(float64(whole*tau)+float64(float64(s.rest*q)*dtau))))
	dx.Set(at, i, float64(d.rest*c)+float64(h*whole))
	dx.Set(r.blank, i, float64(d.rest*h))
	dx.Set(r.blankSlope, i, float64(h*(float64(d.rest*tau)+float64(s.rest*dtau))))
	return float64(c*dlevel) + float64(h*(d.k0+float64(d.k1*tau)+float64(s.k1*dtau)))
}
