package montecarlo

import (
	"math"

	"deltamoor/calib/adjust"
)

// eigen diagonalises a symmetric matrix, V Λ Vᵀ, by cyclic Jacobi rotations:
// slow and exact to rounding, for the few points of a line, and with no
// operation whose bits differ between architectures. It overwrites a, whose
// diagonal becomes Λ; columns of v are the vectors.
func eigen(a *adjust.Matrix) (v *adjust.Matrix) {
	n := a.Rows
	v = adjust.NewMatrix(n, n)
	for i := 0; i < n; i++ {
		v.Set(i, i, 1)
	}
	for range 60 {
		var off, all float64
		for i := 0; i < n; i++ {
			for j := 0; j < n; j++ {
				x := a.At(i, j)
				all += float64(x * x)
				if i != j {
					off += float64(x * x)
				}
			}
		}
		if off <= float64(1e-34*all) {
			break
		}
		for p := 0; p < n; p++ {
			for q := p + 1; q < n; q++ {
				rotate(a, v, p, q)
			}
		}
	}
	return v
}

// rotate makes a[p][q] zero (Golub and Van Loan, Matrix Computations, 8.5).
func rotate(a, v *adjust.Matrix, p, q int) {
	apq := a.At(p, q)
	if apq == 0 {
		return
	}
	tau := (a.At(q, q) - a.At(p, p)) / (2 * apq)
	t := 1 / (math.Abs(tau) + math.Sqrt(1+float64(tau*tau)))
	if tau < 0 {
		t = -t
	}
	c := 1 / math.Sqrt(1+float64(t*t))
	s := float64(t * c)
	for k := 0; k < a.Rows; k++ {
		x, y := a.At(k, p), a.At(k, q)
		a.Set(k, p, float64(c*x)-float64(s*y))
		a.Set(k, q, float64(s*x)+float64(c*y))
	}
	for k := 0; k < a.Rows; k++ {
		x, y := a.At(p, k), a.At(q, k)
		a.Set(p, k, float64(c*x)-float64(s*y))
		a.Set(q, k, float64(s*x)+float64(c*y))
	}
	for k := 0; k < v.Rows; k++ {
		x, y := v.At(k, p), v.At(k, q)
		v.Set(k, p, float64(c*x)-float64(s*y))
		v.Set(k, q, float64(s*x)+float64(c*y))
	}
}
