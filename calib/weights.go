package calib

import (
	"math"

	"deltamoor/calib/adjust"
)

// The variance of the readings is a sum of parts, each an estimate φ_j times a
// known pattern V_j:
//
//	sigma2       I              every estimated mode; a² of σ² = a² + (b/s)²
//	sigma2.size  diag(1/s²)     weights size: b²
//	preparation  Z_a Z_aᵀ       where several readings share a preparation
//	declared     diag(u²)       declared weights with degrees of freedom: φ = 1
type variances struct {
	names    []string
	patterns []pattern
	phi      []float64
	cov      *adjust.Matrix // of φ̂
}

type pattern int

const (
	patternUnit pattern = iota
	patternSize
	patternPreparation
	patternDeclared
)

// diagonal is the pattern's entry for a reading.
func (p pattern) diagonal(rd *reading) float64 {
	switch p {
	case patternSize:
		return 1 / float64(rd.size*rd.size)
	case patternDeclared:
		return float64(rd.u * rd.u)
	}
	return 1
}

// own is the variance of one reading without its preparation's.
func (v *variances) own(rd *reading) float64 {
	if v == nil {
		return float64(rd.u * rd.u)
	}
	var s float64
	for j, k := range v.patterns {
		if k != patternPreparation {
			s += float64(v.phi[j] * k.diagonal(rd))
		}
	}
	return s
}

// preparation is φ_a, 0 where no preparation has several readings.
func (v *variances) preparation() float64 {
	if v != nil {
		for j, k := range v.patterns {
			if k == patternPreparation {
				return v.phi[j]
			}
		}
	}
	return 0
}

// degreesOfFreedom is 2φ²/Var(φ̂).
func (v *variances) degreesOfFreedom(j int) float64 {
	c := v.cov.At(j, j)
	if c == 0 {
		return math.Inf(1)
	}
	return 2 * v.phi[j] * v.phi[j] / c
}

func (m Model) weights() Weights {
	if m.Weights == "" {
		return WeightsDeclared
	}
	return m.Weights
}

// estimated says that the readings' variance comes from their own scatter.
func (m Model) estimated() bool { return m.weights() != WeightsDeclared }

// patternsFor lists the parts of an estimated variance.
func (p *problem) patternsFor() ([]pattern, []string) {
	patterns, names := []pattern{patternUnit}, []string{"sigma2"}
	if p.in.model.weights() == WeightsSize {
		patterns, names = append(patterns, patternSize), append(names, "sigma2.size")
	}
	for _, i := range p.fitted {
		if p.in.readings[i].shared {
			return append(patterns, patternPreparation), append(names, "preparation")
		}
	}
	return patterns, names
}

// leastSquare is the variance below which a reading counts as exact: 1/u would
// leave the range of doubles.
const leastSquare = 1e-200

// whiten makes the whitening for variances; φ of nil is declared u. It returns
// nil where a variance is zero.
func (p *problem) whiten(v *variances) *whitening {
	w := &whitening{single: make([]float64, len(p.fitted))}
	a := v.preparation()
	var members map[int][]int
	if v != nil && a >= 0 && hasPattern(v.patterns, patternPreparation) {
		members = map[int][]int{}
		for j, i := range p.fitted {
			members[p.in.readings[i].preparation] = append(members[p.in.readings[i].preparation], j)
		}
	}
	done := map[int]bool{}
	for j, i := range p.fitted {
		rd := &p.in.readings[i]
		s := v.own(rd)
		if g := members[rd.preparation]; len(g) > 1 {
			if !done[rd.preparation] {
				done[rd.preparation] = true
				w.groups = append(w.groups, p.prepareGroup(v, g, a))
			}
			continue
		}
		if !(s+a > leastSquare) {
			return nil
		}
		w.single[j] = 1 / math.Sqrt(s+a)
	}
	for _, g := range w.groups {
		if g.l == nil {
			return nil
		}
	}
	return w
}

func hasPattern(patterns []pattern, k pattern) bool {
	for _, x := range patterns {
		if x == k {
			return true
		}
	}
	return false
}

func (p *problem) prepareGroup(v *variances, members []int, a float64) preparationGroup {
	l := adjust.NewMatrix(len(members), len(members))
	for x, j := range members {
		for y := range x {
			l.Set(x, y, a)
		}
		l.Set(x, x, v.own(&p.in.readings[p.fitted[j]])+a)
	}
	if adjust.Cholesky(l, len(members)) != nil {
		l = nil
	}
	return preparationGroup{rows: members, l: l}
}

// unitWhitening is that of equal variances 1.
func (p *problem) unitWhitening() *whitening {
	w := &whitening{single: make([]float64, len(p.fitted))}
	for j := range w.single {
		w.single[j] = 1
	}
	return w
}

// leastVariance keeps an estimated variance off zero where readings agree to
// rounding: (1e-10 of the largest deviation from the mean raw delta)².
func (p *problem) leastVariance() float64 {
	largest := 0.0
	for _, i := range p.fitted {
		largest = math.Max(largest, math.Abs(p.in.readings[i].raw-p.r0))
	}
	if largest == 0 {
		largest = 1
	}
	return float64(float64(1e-10*largest) * float64(1e-10*largest))
}
