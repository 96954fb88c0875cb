package assign

import (
	"math"
	"slices"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// parts are values with their covariance taken apart by the identities of the
// sources: V = diag(private) + common·commonᵀ.
type parts struct {
	x       []float64
	private []float64      // variance of sources that occur in one value only
	common  *adjust.Matrix // value × shared source: c·u
}

// takeApart splits the covariance of the numbers.
func takeApart(numbers []uncertain.Number) *parts {
	occurs := map[string]int{}
	for _, x := range numbers {
		for _, t := range x.Terms {
			occurs[t.ID]++
		}
	}
	// Columns in order of first occurrence: not that of a map.
	column := map[string]int{}
	for _, x := range numbers {
		for _, t := range x.Terms {
			if _, seen := column[t.ID]; occurs[t.ID] > 1 && !seen {
				column[t.ID] = len(column)
			}
		}
	}
	p := &parts{
		x: make([]float64, len(numbers)), private: make([]float64, len(numbers)),
		common: adjust.NewMatrix(len(numbers), len(column)),
	}
	for i, x := range numbers {
		p.x[i] = x.Value
		for _, t := range x.Terms {
			c := float64(t.Sensitivity * t.U)
			if k, shared := column[t.ID]; shared {
				p.common.Set(i, k, c)
			} else {
				p.private[i] += float64(c * c)
			}
		}
	}
	return p
}

// commonVariance is wᵀ V_common w.
func (p *parts) commonVariance(w []float64) float64 {
	sums := make([]float64, p.common.Cols)
	for i, wi := range w {
		adjust.AddScaled(sums, wi, p.common.Row(i))
	}
	return adjust.Dot(sums, sums)
}

// spread is what values say about their scatter once the mean (or the mean of
// each block) is removed. With A an orthonormal basis of the contrasts and
// AᵀVA = U Λ Uᵀ, the restricted projection of Ω = V + τ²I is, for every τ²,
//
//	P(τ²) = A U (Λ + τ²I)⁻¹ Uᵀ Aᵀ
//
// so that xᵀPx, tr P, tr PP and xᵀPPx are sums over the contrasts, Ω need not
// be invertible, and a source that all values share alike cancels before
// anything is rounded.
type spread struct {
	variance []float64      // Λ
	z        []float64      // Uᵀ Aᵀ x
	basis    *adjust.Matrix // (A U)ᵀ, contrast × value
}

// newSpread forms the contrasts within each block; blocks nil means one block.
func newSpread(p *parts, blocks []int) *spread {
	m := len(p.x)
	var rows [][]float64
	members := map[int][]int{}
	var order []int
	for i := range p.x {
		b := 0
		if blocks != nil {
			b = blocks[i]
		}
		if members[b] == nil {
			order = append(order, b)
		}
		members[b] = append(members[b], i)
	}
	for _, b := range order {
		in := members[b]
		for j := 1; j < len(in); j++ { // Helmert
			row := make([]float64, m)
			norm := math.Sqrt(float64(j) * float64(j+1))
			for _, i := range in[:j] {
				row[i] = 1 / norm
			}
			row[in[j]] = -float64(j) / norm
			rows = append(rows, row)
		}
	}
	r := len(rows)
	a := adjust.FromRows(rows)
	w, shared := adjust.NewMatrix(r, r), adjust.NewMatrix(r, p.common.Cols)
	centred := make([]float64, m)
	for i := range centred {
		centred[i] = p.x[i] - p.x[0]
	}
	z := make([]float64, r)
	for k := 0; k < r; k++ {
		z[k] = adjust.Dot(a.Row(k), centred)
		for i, c := range a.Row(k) {
			adjust.AddScaled(shared.Row(k), c, p.common.Row(i))
		}
		for l := 0; l <= k; l++ {
			v := adjust.Dot(shared.Row(k), shared.Row(l))
			for i, c := range a.Row(k) {
				v += float64(float64(c*a.At(l, i)) * p.private[i])
			}
			w.Set(k, l, v)
			w.Set(l, k, v)
		}
	}
	rotate(w, a, z)
	// A contrast that is only the rounding of the values is none.
	rounding := 0.0
	for _, x := range p.x {
		rounding = math.Max(rounding, 2e-16*math.Abs(x))
	}
	for k := range z {
		if math.Abs(z[k]) <= rounding {
			z[k] = 0
		}
	}
	s := &spread{variance: make([]float64, r), z: z, basis: a}
	largest := 0.0
	for k := range s.variance {
		s.variance[k] = math.Max(0, w.At(k, k))
		largest = math.Max(largest, s.variance[k])
	}
	for k, v := range s.variance {
		if v <= 1e-14*largest { // zero to rounding
			s.variance[k] = 0
		}
	}
	return s
}

// rotate diagonalises the symmetric w by Jacobi rotations and turns the rows
// of basis and the entries of z alike. Only square roots are taken.
func rotate(w, basis *adjust.Matrix, z []float64) {
	n := w.Rows
	for sweep := 0; sweep < 60; sweep++ {
		rotated := false
		for p := 0; p < n; p++ {
			for q := p + 1; q < n; q++ {
				off := w.At(p, q)
				if math.Abs(off) <= 1e-16*math.Sqrt(math.Abs(float64(w.At(p, p)*w.At(q, q)))) || off == 0 {
					continue
				}
				rotated = true
				theta := (w.At(q, q) - w.At(p, p)) / (2 * off)
				t := 1 / (math.Abs(theta) + math.Sqrt(1+float64(theta*theta)))
				if theta < 0 {
					t = -t
				}
				c := 1 / math.Sqrt(1+float64(t*t))
				s := float64(c * t)
				for k := 0; k < n; k++ { // columns, then rows
					u, v := w.At(k, p), w.At(k, q)
					w.Set(k, p, float64(c*u)-float64(s*v))
					w.Set(k, q, float64(s*u)+float64(c*v))
				}
				turn(w.Row(p), w.Row(q), c, s)
				w.Set(p, q, 0)
				w.Set(q, p, 0)
				turn(basis.Row(p), basis.Row(q), c, s)
				z[p], z[q] = float64(c*z[p])-float64(s*z[q]), float64(s*z[p])+float64(c*z[q])
			}
		}
		if !rotated {
			return
		}
	}
}

func turn(a, b []float64, c, s float64) {
	for k := range a {
		u, v := a[k], b[k]
		a[k] = float64(c*u) - float64(s*v)
		b[k] = float64(s*u) + float64(c*v)
	}
}

// df is the number of contrasts, m − 1 for one block.
func (s *spread) df() float64 { return float64(len(s.z)) }

// determined says that every contrast has a variance of its own, so that Q and
// the DerSimonian–Laird estimate exist.
func (s *spread) determined() bool {
	for _, v := range s.variance {
		if v == 0 {
			return false
		}
	}
	return len(s.variance) > 0
}

// q is xᵀP(t)x; +Inf where values without variance differ at t = 0.
func (s *spread) q(t float64) float64 {
	var sum float64
	for k, z := range s.z {
		if z != 0 {
			sum += float64(z*z) / (s.variance[k] + t)
		}
	}
	return sum
}

// qq is xᵀP(t)P(t)x, minus the slope of q.
func (s *spread) qq(t float64) float64 {
	var sum float64
	for k, z := range s.z {
		if z != 0 {
			r := z / (s.variance[k] + t)
			sum += float64(r * r)
		}
	}
	return sum
}

// untruncated is the root of q(t) = degrees of freedom at or below 0, where the
// values scatter by less than their own variances: q rises without bound
// towards minus the least variance. 0 where the scatter is not smaller.
func (s *spread) untruncated() float64 {
	low, high, target := -slices.Min(s.variance), 0.0, s.df()
	if !(s.q(0) < target) || low == 0 {
		return 0
	}
	for {
		middle := low + float64(0.5*(high-low))
		if middle <= low || middle >= high {
			return high
		}
		if s.q(middle) > target {
			low = middle
		} else {
			high = middle
		}
	}
}

// square is Σ(x − x̄)², of each block about its own mean.
func (s *spread) square() float64 { return adjust.Dot(s.z, s.z) }

// traces are tr P(t) and tr P(t)P(t).
func (s *spread) traces(t float64) (p, pp float64) {
	for _, v := range s.variance {
		r := 1 / (v + t)
		p += r
		pp += float64(r * r)
	}
	return p, pp
}

// best are the weights ∝ Ω⁻¹1 of the mean with the least variance,
// w = 1/m − A (AᵀΩA)⁻¹ Aᵀ Ω 1/m, at t = τ².
func (s *spread) best(p *parts, t float64) []float64 {
	m := len(p.x)
	w := make([]float64, m)
	for i := range w {
		w[i] = 1 / float64(m)
	}
	column := make([]float64, p.common.Cols)
	for i := range w {
		adjust.AddScaled(column, w[i], p.common.Row(i))
	}
	v := make([]float64, m) // V 1/m; τ²·1 is no contrast
	for i := range v {
		v[i] = float64(p.private[i]*w[i]) + adjust.Dot(p.common.Row(i), column)
	}
	for k := range s.z {
		if d := s.variance[k] + t; d > 0 {
			adjust.AddScaled(w, -adjust.Dot(s.basis.Row(k), v)/d, s.basis.Row(k))
		}
	}
	return w
}
