package uncertain

import "math"

// A Comparison is the difference of two numbers on one scale.
type Comparison struct {
	// Difference is a − b with its sources: what both share has cancelled.
	Difference          Number
	StandardUncertainty float64
	// RootSumOfSquares is √(u²(a) + u²(b)), what the uncertainty would be if
	// nothing were shared; for showing beside the other.
	RootSumOfSquares float64
	// Correlation of a and b; 0 where one of them is exact.
	Correlation      float64
	DegreesOfFreedom float64
	CoverageFactor   float64
	// Zeta is d/u(d), En d/(2u(d)); nil for u(d) = 0.
	Zeta, En *float64
	// Different says |d| > k·u(d); for u(d) = 0, d ≠ 0.
	Different bool
}

// Compare forms a − b and judges it at the given coverage:
//
//	ζ = d/u(d),  E_n = d/(2u(d)) (|E_n| ≤ 1; without shared sources d/√(U1² + U2²) at k = 2),
//	different if |d| > t_p(ν_eff)·u(d)
//
// (ISO 13528:2022 9.6 and 9.7 for the scores). Groups must hold every group
// that sources of either number name.
func Compare(a, b Number, groups []Group, c Coverage) (Comparison, error) {
	d, err := Linear(0, []float64{1, -1}, []Number{a, b})
	if err != nil {
		return Comparison{}, err
	}
	x, err := Expand(d, groups, c)
	if err != nil {
		return Comparison{}, err
	}
	u := d.StandardUncertainty()
	va, vb := a.Variance(), b.Variance()
	out := Comparison{
		Difference: d, StandardUncertainty: u, RootSumOfSquares: math.Sqrt(va + vb),
		DegreesOfFreedom: x.DegreesOfFreedom, CoverageFactor: x.CoverageFactor,
	}
	if va > 0 && vb > 0 {
		out.Correlation = Covariance(a, b) / math.Sqrt(va*vb)
	}
	if u == 0 {
		out.Different = d.Value != 0
		return out, nil
	}
	zeta, en := d.Value/u, d.Value/(2*u)
	out.Zeta, out.En = &zeta, &en
	out.Different = math.Abs(d.Value) > x.CoverageFactor*u
	return out, nil
}
