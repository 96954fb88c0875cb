package adjust

import "math"

// A QR is the Householder factorisation of a matrix given by its columns, each
// scaled to unit length first.
type QR struct {
	// columns holds R above the reflections: row k of it is column k of the
	// matrix, R_jk at position j ≤ k, the reflection of step k below.
	columns *Matrix
	tau     []float64
	scale   []float64
}

// newQR prepares a factorisation of p columns of n rows.
func newQR(p, n int) *QR {
	return &QR{columns: NewMatrix(p, n), tau: make([]float64, p), scale: make([]float64, p)}
}

// factor factors the columns in place. A column of zeros, or one that the
// columns before it explain to rounding, is a *RankError.
func (q *QR) factor() error {
	p, n := q.columns.Rows, q.columns.Cols
	if n < p {
		return &RankError{Rows: n, Parameters: p}
	}
	for k := 0; k < p; k++ {
		col := q.columns.Row(k)
		s := Norm(col)
		if s == 0 || math.IsInf(s, 0) || math.IsNaN(s) {
			return &RankError{Column: k, Rows: n, Parameters: p}
		}
		q.scale[k] = s
		for i := range col {
			col[i] /= s
		}
	}
	for k := 0; k < p; k++ {
		v := q.columns.Row(k)[k:]
		norm := Norm(v)
		if norm < 1e-14 {
			return &RankError{Column: k, Rows: n, Parameters: p}
		}
		alpha := v[0]
		beta := -norm
		if alpha < 0 {
			beta = norm
		}
		q.tau[k] = (beta - alpha) / beta
		d := alpha - beta
		for i := 1; i < len(v); i++ {
			v[i] /= d
		}
		v[0] = beta
		for j := k + 1; j < p; j++ {
			q.reflect(k, q.columns.Row(j))
		}
	}
	return nil
}

// reflect applies reflection k to a vector of n rows.
func (q *QR) reflect(k int, b []float64) {
	v := q.columns.Row(k)[k+1:]
	s := float64(q.tau[k] * (b[k] + Dot(v, b[k+1:])))
	b[k] -= s
	AddScaled(b[k+1:], -s, v)
}

// transposed overwrites b with Qᵀb.
func (q *QR) transposed(b []float64) {
	for k := range q.tau {
		q.reflect(k, b)
	}
}

// solve returns in x the solution of R·D·x = b, with D the column lengths.
func (q *QR) solve(b, x []float64) {
	p := q.columns.Rows
	copy(x[:p], b[:p])
	for k := p - 1; k >= 0; k-- {
		col := q.columns.Row(k)
		x[k] /= col[k]
		AddScaled(x[:k], -x[k], col[:k])
	}
	for k := range x[:p] {
		x[k] /= q.scale[k]
	}
}

// solveTransposed overwrites b with (R·D)⁻ᵀb.
func (q *QR) solveTransposed(b []float64) {
	p := q.columns.Rows
	for k := 0; k < p; k++ {
		col := q.columns.Row(k)
		b[k] = (b[k]/q.scale[k] - Dot(col[:k], b[:k])) / col[k]
	}
}

// conditionBound is ‖R‖·‖R⁻¹‖ in the Frobenius norm, at least the condition
// number and at most p times it.
func (q *QR) conditionBound() float64 {
	p := q.columns.Rows
	var small [64]float64
	x := small[:0]
	if p > len(small) {
		x = make([]float64, 0, p)
	}
	x = x[:p]
	var r, inverse float64
	for k := 0; k < p; k++ {
		col := q.columns.Row(k)[:k+1]
		r += Dot(col, col)
		// Column k of R⁻¹, by back substitution.
		for i := range x {
			x[i] = 0
		}
		x[k] = 1
		for j := k; j >= 0; j-- {
			c := q.columns.Row(j)
			x[j] /= c[j]
			AddScaled(x[:j], -x[j], c[:j])
		}
		inverse += Dot(x[:k+1], x[:k+1])
	}
	return math.Sqrt(float64(r * inverse))
}

// checkCondition refuses a condition number above the limit; only where its
// bound allows one is it computed.
func (q *QR) checkCondition(limit float64) error {
	if q.conditionBound() <= limit {
		return nil
	}
	if c := q.condition(); !(c <= limit) {
		return &ConditionError{Condition: c, Limit: limit}
	}
	return nil
}

// condition is the 2-norm condition number of R, by one-sided Jacobi
// rotations (Hestenes 1958), which find small singular values to full
// relative accuracy.
func (q *QR) condition() float64 {
	p := q.columns.Rows
	if p == 0 {
		return 1
	}
	a := NewMatrix(p, p)
	for k := 0; k < p; k++ {
		copy(a.Row(k)[:k+1], q.columns.Row(k)[:k+1])
	}
	for sweep := 0; sweep < 30; sweep++ {
		rotated := false
		for i := 0; i < p; i++ {
			for j := i + 1; j < p; j++ {
				x, y := a.Row(i), a.Row(j)
				xx, yy, xy := Dot(x, x), Dot(y, y), Dot(x, y)
				if math.Abs(xy) <= 1e-15*math.Sqrt(xx*yy) {
					continue
				}
				rotated = true
				z := (yy - xx) / (2 * xy)
				t := 1 / (math.Abs(z) + math.Sqrt(1+float64(z*z)))
				if z < 0 {
					t = -t
				}
				c := 1 / math.Sqrt(1+float64(t*t))
				s := float64(c * t)
				for k := range x {
					u, v := x[k], y[k]
					x[k] = float64(c*u) - float64(s*v)
					y[k] = float64(s*u) + float64(c*v)
				}
			}
		}
		if !rotated {
			break
		}
	}
	low, high := math.Inf(1), 0.0
	for i := 0; i < p; i++ {
		s := Norm(a.Row(i))
		low, high = math.Min(low, s), math.Max(high, s)
	}
	if low == 0 {
		return math.Inf(1)
	}
	return high / low
}

// LeastSquares returns the x that minimises |A·x − b| for A given by its
// columns, by Householder QR. Neither argument is written to. Errors are
// *RankError.
func LeastSquares(columns *Matrix, b []float64) ([]float64, error) {
	q := newQR(columns.Rows, columns.Cols)
	copy(q.columns.Data, columns.Data)
	if err := q.factor(); err != nil {
		return nil, err
	}
	c := append([]float64(nil), b...)
	q.transposed(c)
	x := make([]float64, columns.Rows)
	q.solve(c, x)
	return x, nil
}
