package adjust

import "math"

// singularPivot is the part of its own diagonal below which a pivot counts as
// zero: the rounding of a few thousand terms.
const singularPivot = 1e-14

// Cholesky overwrites the lower triangle of a symmetric positive matrix with L,
// a = L Lᵀ, and leaves the upper triangle alone. Only the leading n rows are
// used. A pivot that is not clearly positive is a *SingularError.
func Cholesky(a *Matrix, n int) error {
	for i := 0; i < n; i++ {
		row := a.Row(i)
		d := row[i]
		for j := 0; j < i; j++ {
			rj := a.Row(j)
			row[j] = (row[j] - Dot(row[:j], rj[:j])) / rj[j]
		}
		p := d - Dot(row[:i], row[:i])
		if !(p > singularPivot*d) {
			return &SingularError{Row: i, Pivot: p}
		}
		row[i] = math.Sqrt(p)
	}
	return nil
}

// SemiCholesky is Cholesky for a covariance that may be singular, all of a: a
// pivot that is zero to rounding gives a column of zeros. The upper triangle
// becomes zero. A matrix that is not positive semidefinite is a *SingularError.
func SemiCholesky(a *Matrix) error {
	n := a.Rows
	lows := NewMatrix(n, n) // of the factor, for extended precision
	for i := 0; i < n; i++ {
		row := a.Row(i)
		d := row[i]
		for j := 0; j < i; j++ {
			rj := a.Row(j)
			v := semiEntry(row, rj, lows, i, j)
			if rj[j] == 0 {
				// What is left must vanish with the pivot that vanished.
				if math.Abs(v.hi) > 1e-7*math.Sqrt(math.Abs(d))*Norm(rj[:j]) {
					return &SingularError{Row: i, Pivot: v.hi}
				}
				row[j] = 0
				continue
			}
			v = v.over(pair{rj[j], lows.At(j, j)})
			row[j] = v.hi
			lows.Set(i, j, v.lo)
		}
		p := semiEntry(row, row, lows, i, i)
		switch {
		case p.hi > 1e-13*d:
			root := p.root()
			row[i] = root.hi
			lows.Set(i, i, root.lo)
		case p.hi >= -1e-9*d:
			row[i] = 0
		default:
			return &SingularError{Row: i, Pivot: p.hi}
		}
	}
	for i := 0; i < n; i++ {
		row := a.Row(i)
		for j := i + 1; j < n; j++ {
			row[j] = 0
		}
	}
	return nil
}

// semiEntry is a_ij − Σ_{k<j} l_ik·l_jk, in pairs for small matrices.
func semiEntry(row, rj []float64, lows *Matrix, i, j int) pair {
	if lows.Rows > extendedRows {
		return pair{row[j] - Dot(row[:j], rj[:j]), 0}
	}
	v := pair{row[j], 0}
	for k := 0; k < j; k++ {
		x, y := pair{row[k], lows.At(i, k)}, pair{rj[k], lows.At(j, k)}
		v = v.add(x.times(y).negative())
	}
	return v
}

// SolveLower overwrites b with L⁻¹b, for the leading len(b) rows of L.
func SolveLower(l *Matrix, b []float64) {
	for i := range b {
		row := l.Row(i)
		b[i] = (b[i] - Dot(row[:i], b[:i])) / row[i]
	}
}

// SolveLowerTransposed overwrites b with L⁻ᵀb.
func SolveLowerTransposed(l *Matrix, b []float64) {
	for i := len(b) - 1; i >= 0; i-- {
		row := l.Row(i)
		b[i] /= row[i]
		AddScaled(b[:i], -b[i], row[:i])
	}
}
