package calib

// Carry-over: the expected raw delta of a reading is
//
//	(1 − μ)·f_i + μ·r_{i−1}
//
// with r_{i−1} the observed raw delta of the reading physically before: one
// well-mixed volume, conditional on the past, so that unknown samples need no
// value. Weights ignore the lag; propagation does not: the estimate acts on
// r_i − μ·r_{i−1}, which makes reading i − 1 a source of the parameters too.

// lag turns the derivatives by the fitted values r_i − μ·r_{i−1}, one row for
// each parameter over all readings, into derivatives by the readings. Each
// row is changed in place. Readings are in order of time, so a predecessor
// comes before.
func (in *input) lag(row []float64, fitted []int, mu float64) {
	if in.model.Memory != MemoryCarryover {
		return
	}
	direct := make([]float64, len(fitted))
	for j, i := range fitted {
		direct[j] = row[i]
	}
	for j, i := range fitted {
		if p := in.readings[i].previous; p >= 0 {
			row[p] -= float64(mu * direct[j])
		}
	}
}
