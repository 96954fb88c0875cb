package uncertain

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// ConformanceProbability is the probability that the measurand lies within
// tolerance limits, given a measured value with its standard uncertainty (all in
// one unit):
//
//	p_c = Φ((T_U − y)/u) − Φ((T_L − y)/u)
//
// (JCGM 106:2012, 7.2 to 7.4, normal PDF). Infinite limits make it one-sided.
// With finite effective degrees of freedom Student's t takes the place of the
// normal distribution. For u = 0 it is 1 within the limits, both included, and 0
// outside. NaN where something is no number or the limits are exchanged.
func ConformanceProbability(value, u, degreesOfFreedom, lower, upper float64) float64 {
	if math.IsNaN(value) || math.IsNaN(u) || u < 0 || math.IsNaN(degreesOfFreedom) || !(lower < upper) {
		return math.NaN()
	}
	if u == 0 {
		if value >= lower && value <= upper {
			return 1
		}
		return 0
	}
	below := func(limit float64) float64 {
		switch z := (limit - value) / u; {
		case math.IsInf(z, 0):
			return (math.Copysign(1, z) + 1) / 2
		case math.IsInf(degreesOfFreedom, 1) || degreesOfFreedom <= 0:
			return distuv.UnitNormal.CDF(z)
		default:
			return distuv.StudentsT{Mu: 0, Sigma: 1, Nu: degreesOfFreedom}.CDF(z)
		}
	}
	return below(upper) - below(lower)
}

// A Tolerance is an interval that values shall lie in; its limits may be infinite.
type Tolerance struct{ Lower, Upper float64 }

// Accept narrows a tolerance by a guard band on each finite side: the acceptance
// interval of guarded acceptance (JCGM 106:2012, 8.3.2). A guard of 0 is simple
// acceptance. It refuses a guard that leaves nothing.
func (t Tolerance) Accept(guard float64) (Tolerance, error) {
	a := Tolerance{t.Lower + guard, t.Upper - guard}
	if !(a.Lower < a.Upper) {
		return a, &ValueError{Place: "guard", Found: fmt.Sprint(guard), Expected: fmt.Sprintf("less than half of the tolerance %v", t.Upper-t.Lower)}
	}
	return a, nil
}
