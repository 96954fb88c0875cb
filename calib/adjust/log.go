package adjust

import "math"

// Double-double constant ln 2 = ln2High + ln2Low, and √½.
const (
	ln2High  = 6.93147180369123816490e-01
	ln2Low   = 1.90821492927058770002e-10
	rootHalf = math.Sqrt2 / 2
)

// NaturalLog is ln x for positive finite x, the same bits on every
// architecture: only rounded multiplications, additions and divisions. With
// x = 2^k·m, √½ ≤ m < √2, and z = (m − 1)/(m + 1),
//
//	ln x = k·ln 2 + 2(z + z³/3 + z⁵/5 + …)
//
// The series is summed until its terms are lost; |z| < 0.172 makes that at
// most 11 terms.
func NaturalLog(x float64) float64 {
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
