package calib

import (
	"math"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

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
	anchors := make([]float64, len(c.in.inputs))
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
