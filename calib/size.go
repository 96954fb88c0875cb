package calib

import (
	"fmt"
	"math"

	"deltamoor/calib/adjust"
)

// A sizeTerm is the effect of the size of a peak, around the reference size,
// the mean size of the fitted readings:
//
//	linear   h = s − s_ref          one coefficient, the same shift for every material
//	log      h = ln(s/s_ref)
//	inverse  h = 1/s − 1/s_ref
//	blank    (κ0 + κ1·τ)(1/s − 1/s_ref): a constant blank, which acts in
//	         proportion to the difference between reading and blank
//
// s is the measured size, blank included.
type sizeTerm struct {
	kind      Size
	reference float64
}

func (t *sizeTerm) value(size float64) float64 {
	switch t.kind {
	case SizeLinear:
		return size - t.reference
	case SizeInverse, SizeBlank:
		return 1/size - 1/t.reference
	case SizeLog:
		return naturalLog(size / t.reference)
	}
	return 0
}

// names lists the reported parameters.
func (t *sizeTerm) names() []string {
	switch t.kind {
	case SizeNone:
		return nil
	case SizeBlank:
		return []string{"size", "size.slope"}
	}
	return []string{"size"}
}

// takeSize makes the size term for the fitted readings.
func (in *input) takeSize(fitted []int) (sizeTerm, error) {
	t := sizeTerm{kind: in.model.Size, reference: math.NaN()}
	weighted := in.model.weights() == WeightsSize
	if t.kind == "" {
		t.kind = SizeNone
	}
	if t.kind == SizeNone && !weighted {
		return t, nil
	}
	why := "size " + string(t.kind)
	if weighted {
		why = "weights size"
	}
	positive := weighted || t.kind != SizeLinear
	for i := range in.readings {
		rd := &in.readings[i]
		if !rd.usable {
			continue
		}
		switch {
		case math.IsNaN(rd.size):
			return t, &TermInputError{Refusal{Place: fmt.Sprintf("readings[%d].size", rd.index), Found: "nothing", Expected: "a size (" + why + ")"}}
		case positive && rd.size <= 0:
			return t, &TermInputError{Refusal{Place: fmt.Sprintf("readings[%d].size", rd.index), Found: fmt.Sprint(rd.size), Expected: "a positive size (" + why + ")"}}
		}
	}
	var sum float64
	var distinct distinctValues
	for _, i := range fitted {
		sum += in.readings[i].size
		distinct.add(in.readings[i].size)
	}
	t.reference = sum / float64(len(fitted))
	if t.kind != SizeNone && distinct.n < 2 {
		return t, &TermInputError{Refusal{Place: "model.size", Found: "one size of fitted readings", Expected: "at least 2 (" + why + ")"}}
	}
	return t, nil
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

// Double-double constant ln 2 = ln2High + ln2Low, and √½.
const (
	ln2High  = 6.93147180369123816490e-01
	ln2Low   = 1.90821492927058770002e-10
	rootHalf = math.Sqrt2 / 2
)

// naturalLog is ln x for positive finite x, the same bits on every
// architecture: only rounded multiplications, additions and divisions. With
// x = 2^k·m, √½ ≤ m < √2, and z = (m − 1)/(m + 1),
//
//	ln x = k·ln 2 + 2(z + z³/3 + z⁵/5 + …)
//
// The series is summed until its terms are lost; |z| < 0.172 makes that at
// most 11 terms.
func naturalLog(x float64) float64 {
	m, k := math.Frexp(x)
	if m < rootHalf {
		m += m
		k--
	}
	z := (m - 1) / (m + 1)
	z2 := float64(z * z)
	var tail float64
	for n := 23; n >= 3; n -= 2 {
		tail = float64(z2 * (1/float64(n) + tail))
	}
	series := float64(2*z) + float64(float64(2*z)*tail)
	return float64(float64(k)*ln2High) + (series + float64(float64(k)*ln2Low))
}
