package adjust

import "math"

// A Matrix is dense, stored by rows.
type Matrix struct {
	Rows, Cols int
	Data       []float64
}

// NewMatrix returns a zero matrix.
func NewMatrix(rows, cols int) *Matrix {
	return &Matrix{Rows: rows, Cols: cols, Data: make([]float64, rows*cols)}
}

// FromRows copies a slice of rows of equal length.
func FromRows(rows [][]float64) *Matrix {
	if len(rows) == 0 {
		return NewMatrix(0, 0)
	}
	m := NewMatrix(len(rows), len(rows[0]))
	for i, r := range rows {
		copy(m.Row(i), r)
	}
	return m
}

// Row is row i, not a copy.
func (m *Matrix) Row(i int) []float64 {
	return m.Data[i*m.Cols : (i+1)*m.Cols : (i+1)*m.Cols]
}

// At is element (i, j).
func (m *Matrix) At(i, j int) float64 { return m.Data[i*m.Cols+j] }

// Set writes element (i, j).
func (m *Matrix) Set(i, j int, v float64) { m.Data[i*m.Cols+j] = v }

// Copy returns a copy.
func (m *Matrix) Copy() *Matrix {
	c := NewMatrix(m.Rows, m.Cols)
	copy(c.Data, m.Data)
	return c
}

// Pick copies the rows and columns of the given indices.
func (m *Matrix) Pick(at []int) *Matrix {
	out := NewMatrix(len(at), len(at))
	for a, i := range at {
		for b, j := range at {
			out.Set(a, b, m.At(i, j))
		}
	}
	return out
}

// Slices copies the matrix into a slice of rows that share one array.
func (m *Matrix) Slices() [][]float64 {
	data := make([]float64, len(m.Data))
	copy(data, m.Data)
	rows := make([][]float64, m.Rows)
	for i := range rows {
		rows[i] = data[i*m.Cols : (i+1)*m.Cols : (i+1)*m.Cols]
	}
	return rows
}

// Dot returns Σ a_i·b_i over the length of a. The four partial sums are a
// fixed order of summation, the same on every machine.
func Dot(a, b []float64) float64 {
	b = b[:len(a)]
	var s0, s1, s2, s3 float64
	i := 0
	for ; i+4 <= len(a); i += 4 {
		s0 += float64(a[i] * b[i])
		s1 += float64(a[i+1] * b[i+1])
		s2 += float64(a[i+2] * b[i+2])
		s3 += float64(a[i+3] * b[i+3])
	}
	for ; i < len(a); i++ {
		s0 += float64(a[i] * b[i])
	}
	return (s0 + s1) + (s2 + s3)
}

// AddScaled adds c·x to y, over the length of x.
func AddScaled(y []float64, c float64, x []float64) {
	y = y[:len(x)]
	for i, v := range x {
		y[i] += float64(c * v)
	}
}

// Norm is the Euclidean length of v. It does not guard against overflow: the
// callers' vectors are whitened or scaled.
func Norm(v []float64) float64 { return math.Sqrt(Dot(v, v)) }

// Quadratic returns aᵀ M b for a square M.
func Quadratic(a []float64, m *Matrix, b []float64) float64 {
	var s float64
	for i, v := range a {
		if v != 0 {
			s += float64(v * Dot(m.Row(i), b))
		}
	}
	return s
}
