package uncertain

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Expanded is an expanded uncertainty, which never travels without its k and p.
type Expanded struct {
	U                float64
	CoverageFactor   float64
	Probability      float64
	DegreesOfFreedom float64 // ν_eff, +Inf when every group is known
}

// Coverage says how an expanded uncertainty is formed. The zero Coverage is
// p = 0.95 with k from the effective degrees of freedom.
type Coverage struct {
	// Probability; 0 means 0.95.
	Probability float64
	// Factor fixes k; 0 takes Student's t of the effective degrees of freedom.
	Factor float64
}

// DefaultProbability is the coverage probability where none is stated.
const DefaultProbability = 0.95

// CoverageFactor is k = t_p(ν), two-sided, for fractional ν held at 1 or
// above; the normal quantile for ν = +Inf (JCGM 100, G.3 and G.6.4).
func CoverageFactor(probability, degreesOfFreedom float64) float64 {
	q := (1 + probability) / 2
	if math.IsInf(degreesOfFreedom, 1) {
		return distuv.UnitNormal.Quantile(q)
	}
	return studentQuantile(q, math.Max(1, degreesOfFreedom))
}

// studentQuantile refines a Cornish–Fisher start (Abramowitz and Stegun
// 26.7.5) by Newton steps on the library's distribution function, several
// times faster than the library's own search, which remains for small ν and
// for what does not settle.
func studentQuantile(q, nu float64) float64 {
	dist := distuv.StudentsT{Mu: 0, Sigma: 1, Nu: nu}
	if nu < 3 {
		return dist.Quantile(q)
	}
	z := distuv.UnitNormal.Quantile(q)
	z2 := float64(z * z)
	x := float64(z * (1 + (z2+1)/(4*nu) + (float64((float64(5*z2)+16)*z2)+3)/(96*nu*nu)))
	if nu > 1e5 {
		return x // the next term, of order 1/ν³, is lost in rounding
	}
	for range 12 {
		step := (dist.CDF(x) - q) / dist.Prob(x)
		x -= step
		if math.Abs(step) <= 1e-9*math.Abs(x) {
			// Quadratic convergence: what is left is rounding.
			return x
		}
	}
	return dist.Quantile(q)
}

// A GroupError says that a number names a group that was not given, or of
// another shape.
type GroupError struct {
	Group, Source   string
	Found, Expected string
}

func (e *GroupError) Error() string {
	return fmt.Sprintf("source %s, group %s: found %s, expected %s", e.Source, e.Group, e.Found, e.Expected)
}

// EffectiveDF is ν_eff of the package comment, never below 1, +Inf for a
// number without uncertainty or with known variances only. A group that
// sources name must be among groups, else a *GroupError.
func EffectiveDF(n Number, groups []Group) (float64, error) {
	type sum struct {
		group *Group
		d     []float64
	}
	var sums []sum
	var u2 float64
	for i := range n.Terms {
		t := &n.Terms[i]
		c := float64(t.Sensitivity * t.Sensitivity)
		u2 += float64(c * float64(t.U*t.U))
		for _, h := range t.Source.shares() {
			k := 0
			for k < len(sums) && sums[k].group.ID != h.Group {
				k++
			}
			if k == len(sums) {
				g := find(groups, h.Group)
				if g == nil {
					return 0, &GroupError{Group: h.Group, Source: t.ID, Found: "no such group", Expected: "its variances and their covariance"}
				}
				sums = append(sums, sum{group: g, d: make([]float64, len(g.Variances))})
			}
			if err := accumulate(sums[k].d, sums[k].group, t.ID, h, c); err != nil {
				return 0, err
			}
		}
	}
	var below float64
	for _, s := range sums {
		for i, di := range s.d {
			for j, dj := range s.d {
				below += float64(float64(di*dj) * s.group.Covariance[i][j])
			}
		}
	}
	return SatterthwaiteDF(u2, below), nil
}

// accumulate adds c·∂U²/∂φ of one share to d.
func accumulate(d []float64, g *Group, source string, h Share, c float64) error {
	if h.Per == nil {
		if len(g.Variances) != 1 {
			return &GroupError{Group: g.ID, Source: source, Found: fmt.Sprintf("%d variances and no derivatives", len(g.Variances)), Expected: "∂u²/∂φ for each"}
		}
		if g.Variances[0] > 0 {
			d[0] += float64(c*h.Variance) / g.Variances[0]
		}
		return nil
	}
	if len(h.Per) != len(d) {
		return &GroupError{Group: g.ID, Source: source, Found: fmt.Sprintf("%d derivatives", len(h.Per)), Expected: fmt.Sprint(len(d))}
	}
	for i, v := range h.Per {
		d[i] += float64(c * v)
	}
	return nil
}

func find(groups []Group, id string) *Group {
	for i := range groups {
		if groups[i].ID == id {
			return &groups[i]
		}
	}
	return nil
}

// SatterthwaiteDF is 2u⁴/below, where below is the variance of the estimate of
// u²; +Inf when that is zero, never below 1.
func SatterthwaiteDF(variance, below float64) float64 {
	if !(below > 0) || variance == 0 {
		return math.Inf(1)
	}
	return math.Max(1, 2*variance*variance/below)
}

// Validate refuses a group whose shape or entries cannot be used. The error is
// a *ValueError.
func (g Group) Validate() error {
	if g.ID == "" {
		return &ValueError{Place: "id", Found: "nothing", Expected: "the identity of the group"}
	}
	for i, v := range g.Variances {
		if !finite(v) || v < 0 {
			return &ValueError{Place: fmt.Sprintf("variances[%d]", i), Found: fmt.Sprint(v), Expected: "a variance, not negative"}
		}
	}
	return CheckCovariance(g.Covariance, len(g.Variances))
}

// Expand forms U = k·u of a number.
func Expand(n Number, groups []Group, c Coverage) (Expanded, error) {
	nu, err := EffectiveDF(n, groups)
	if err != nil {
		return Expanded{}, err
	}
	return ExpandedFrom(n.StandardUncertainty(), nu, c)
}

// ExpandedFrom forms U = k·u from u and its degrees of freedom. A probability
// outside (0, 1) or a negative factor is a *ValueError.
func ExpandedFrom(u, degreesOfFreedom float64, c Coverage) (Expanded, error) {
	p := c.Probability
	if p == 0 {
		p = DefaultProbability
	}
	if !(p > 0 && p < 1) {
		return Expanded{}, &ValueError{Place: "probability", Found: fmt.Sprint(p), Expected: "between 0 and 1"}
	}
	if !finite(c.Factor) || c.Factor < 0 {
		return Expanded{}, &ValueError{Place: "coverage factor", Found: fmt.Sprint(c.Factor), Expected: "a positive number, or 0 for Student's t"}
	}
	k := c.Factor
	if k == 0 {
		k = CoverageFactor(p, degreesOfFreedom)
	}
	return Expanded{U: float64(k * u), CoverageFactor: k, Probability: p, DegreesOfFreedom: degreesOfFreedom}, nil
}
