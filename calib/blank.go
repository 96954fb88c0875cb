package calib

import (
	"fmt"
	"math"

	"deltamoor/calib/adjust"
)

// blankContrasts are the rows that determine the blank and the other terms
// with every level free: each anchor's contrast with 1/s, on (1, τ) at the
// assigned value, and the pooled rows. A monitor's τ is not known, so its
// contrast says nothing here. It returns the columns, what they are to
// explain, and the number of contrasts.
func (p *problem) blankContrasts(r *reduction) (*adjust.Matrix, []float64, int) {
	var at []int
	for k, l := range p.classes {
		if i := r.contrastRow[k]; i >= 0 && l.anchor >= 0 {
			at = append(at, i)
		}
	}
	contrasts := len(at)
	for t := 0; t < r.pooled.Rows; t++ {
		at = append(at, r.firstPooled+t)
	}
	x, z := adjust.NewMatrix(2+r.pooled.Rows, len(at)), make([]float64, len(at))
	for j, i := range at {
		z[j] = r.z[i]
		if l := r.model.latent[i]; l >= 0 {
			x.Set(0, j, r.model.h[i])
			x.Set(1, j, float64(r.model.h[i]*p.values[l]))
		}
		for t := 0; t < p.layout.globals; t++ {
			x.Set(2+t, j, r.model.global.At(t, i))
		}
		if p.layout.memory >= 0 {
			x.Set(2+p.layout.globals, j, r.model.previous[i])
		}
	}
	return x, z, contrasts
}

func (p *problem) blankRefusal() error {
	return &NotEstimableError{Refusal{Place: "model.size", Found: fmt.Sprintf("%d materials measured at different sizes", p.sizedClasses()), Expected: "at least 2 anchors of different value, each at different sizes (size blank)"}}
}

func (p *problem) sizedClasses() int {
	sizes := map[int]map[float64]bool{}
	for j, i := range p.fitted {
		k := p.class[j]
		if p.classes[k].anchor < 0 {
			continue
		}
		if sizes[k] == nil {
			sizes[k] = map[float64]bool{}
		}
		sizes[k][p.in.readings[i].size] = true
	}
	count := 0
	for _, s := range sizes {
		if len(s) > 1 {
			count++
		}
	}
	return count
}

// takeBlank reports the constant blank that size blank means, with the
// covariance of its two numbers by the Jacobian.
func (c *calibrated) takeBlank(r *Result) {
	if c.layout.blank < 0 {
		return
	}
	at := c.reported
	alpha, beta := r.Parameters[at.intercept].Value, r.Parameters[at.slope].Value
	k0, k1 := r.Parameters[at.size].Value, r.Parameters[at.sizeSlope].Value
	s := c.size.reference
	alpha0, beta0 := alpha-k0/s, beta-k1/s
	b := -k1 / beta0
	if b == 0 || !finite(b) || !finite(k0/b) {
		return
	}
	g, h := make([]float64, len(r.Parameters)), make([]float64, len(r.Parameters))
	g[at.slope] = k1 / float64(beta0*beta0)
	g[at.sizeSlope] = -1/beta0 - k1/float64(float64(s*beta0)*beta0)
	// r_b = α − κ0/s + κ0/b
	perB := -k0 / float64(b*b)
	h[at.intercept], h[at.size] = 1, 1/b-1/s
	h[at.slope], h[at.sizeSlope] = float64(perB*g[at.slope]), float64(perB*g[at.sizeSlope])
	cov := adjust.FromRows(r.Covariance)
	r.Blank = &BlankResult{
		Size: b, RawDelta: alpha0 + k0/b,
		USize:      math.Sqrt(math.Max(0, adjust.Quadratic(g, cov, g))),
		URawDelta:  math.Sqrt(math.Max(0, adjust.Quadratic(h, cov, h))),
		Covariance: adjust.Quadratic(g, cov, h),
	}
}
