package assign

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// QHampel is the Q method for the standard deviation with Hampel's estimate
// of the value (ISO 13528:2022, C.5.2.2 for single results and C.5.3.2). From the
// differences of all pairs, H their distribution function, G its mean of left
// and right limits, joined by straight lines,
//
//	s* = G⁻¹(0.25 + 0.75·H(0)) / (√2·Φ⁻¹(0.625 + 0.375·H(0)))
//
// and x* solves Σψ((xᵢ − x*)/s*) = 0 nearest to the median, ψ the identity to
// 1.5, constant to 3, falling to 0 at 4.5. Unlike [Huber], values far away count
// for nothing at all. Fewer than two values are an *InputError. Values that are
// all equal have s* = 0.
func QHampel(values []float64) (Robust, error) {
	if err := checkValues(values, 2); err != nil {
		return Robust{}, err
	}
	s := qDeviation(values)
	m := median(values)
	if s == 0 {
		return robust(m, 0, len(values)), nil
	}
	return robust(hampel(values, s, m), s, len(values)), nil
}

func qDeviation(values []float64) float64 {
	var d []float64
	for i, a := range values {
		for _, b := range values[:i] {
			d = append(d, math.Abs(a-b))
		}
	}
	slices.Sort(d)
	n := float64(len(d))
	zero := 0
	for zero < len(d) && d[zero] == 0 {
		zero++
	}
	h0 := float64(zero) / n
	target := 0.25 + float64(0.75*h0)
	scale := math.Sqrt2 * distuv.UnitNormal.Quantile(0.625+float64(0.375*h0))
	// Walk over the distinct differences with G at each.
	lastX, lastG := 0.0, 0.0
	for i := zero; i < len(d); {
		j := i
		for j < len(d) && d[j] == d[i] {
			j++
		}
		g := 0.5 * (float64(i) + float64(j)) / n
		if g >= target {
			x := d[i]
			if g > lastG {
				x = lastX + float64((d[i]-lastX)*((target-lastG)/(g-lastG)))
			}
			return x / scale
		}
		lastX, lastG = d[i], g
		i = j
	}
	return lastX / scale
}

// hampelPsi is ψ.
func hampelPsi(q float64) float64 {
	a := math.Abs(q)
	switch {
	case a <= 1.5:
		return q
	case a <= 3:
		return math.Copysign(1.5, q)
	case a < 4.5:
		return math.Copysign(4.5-a, q)
	}
	return 0
}

// hampel finds the root nearest to the median. The sum is piecewise linear in
// x*, so that between two neighbouring kinks the root is exact.
func hampel(values []float64, s, middle float64) float64 {
	var kinks []float64
	for _, v := range values {
		for _, c := range [...]float64{-4.5, -3, -1.5, 1.5, 3, 4.5} {
			kinks = append(kinks, v+float64(c*s))
		}
	}
	slices.Sort(kinks)
	sum := func(x float64) float64 {
		var total float64
		for _, v := range values {
			total += hampelPsi((v - x) / s)
		}
		return total
	}
	best := math.Inf(1)
	f0 := sum(kinks[0])
	for i := 1; i < len(kinks); i++ {
		f1 := sum(kinks[i])
		// Where all of ψ is beyond its reach the sum is 0 too: no estimate.
		inside := f0 != 0 || f1 != 0
		if inside && (f0 >= 0) != (f1 > 0) || inside && f0 == 0 {
			x := kinks[i-1]
			if f0 != f1 {
				x += float64((kinks[i] - kinks[i-1]) * (f0 / (f0 - f1)))
			}
			if math.Abs(x-middle) < math.Abs(best-middle) {
				best = x
			}
		}
		f0 = f1
	}
	if math.IsInf(best, 0) {
		return middle
	}
	return best
}
