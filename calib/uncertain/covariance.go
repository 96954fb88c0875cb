package uncertain

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/adjust"
)

// FromCovariance makes numbers with the given values and covariance: the
// columns of the covariance's Cholesky factor, taken in the order of the
// codes, are the sources, named prefix + code. Values that are correlated
// share sources. A covariance of zero, of some or all values, gives exact
// values; a singular one gives fewer sources than values.
//
// The error is a *ValueError for codes that repeat, shapes that do not fit,
// entries that are not finite and a matrix that is not symmetric or not
// positive semidefinite.
func FromCovariance(prefix string, kind Kind, codes []string, values []float64, covariance [][]float64) ([]Number, error) {
	n := len(codes)
	if len(values) != n {
		return nil, &ValueError{Place: "values", Found: fmt.Sprint(len(values)), Expected: fmt.Sprintf("one for each of %d codes", n)}
	}
	if err := CheckCovariance(covariance, n); err != nil {
		return nil, err
	}
	order := make([]int, n)
	for i := range order {
		order[i] = i
	}
	slices.SortFunc(order, func(a, b int) int { return strings.Compare(codes[a], codes[b]) })
	l := adjust.NewMatrix(n, n)
	for i, a := range order {
		if i > 0 && codes[a] == codes[order[i-1]] {
			return nil, &ValueError{Place: fmt.Sprintf("codes[%d]", a), Found: fmt.Sprintf("%q twice", codes[a]), Expected: "each code once"}
		}
		for j, b := range order {
			l.Set(i, j, covariance[a][b])
		}
	}
	if err := adjust.SemiCholesky(l); err != nil {
		return nil, &ValueError{Place: "covariance", Found: "a negative variance of some combination", Expected: "a covariance (positive semidefinite)"}
	}
	out := make([]Number, n)
	for i, a := range order {
		if !finite(values[a]) {
			return nil, &ValueError{Place: fmt.Sprintf("values[%d]", a), Found: fmt.Sprint(values[a]), Expected: "a finite number"}
		}
		out[a].Value = values[a]
		for j := 0; j <= i; j++ {
			c, u := l.At(i, j), l.At(j, j)
			if c == 0 || u == 0 {
				continue
			}
			source := Source{ID: prefix + codes[order[j]], Kind: kind, U: u}
			out[a].Terms = append(out[a].Terms, Term{Source: source, Sensitivity: c / u})
		}
	}
	return out, nil
}

// CheckCovariance refuses a matrix that is not n × n, not finite, not
// symmetric (to 1e-9 of its diagonal), or has a negative variance. The error
// is a *ValueError whose Place is within "covariance".
func CheckCovariance(covariance [][]float64, n int) error {
	if len(covariance) != n {
		return &ValueError{Place: "covariance", Found: fmt.Sprintf("%d rows", len(covariance)), Expected: fmt.Sprint(n)}
	}
	for i, row := range covariance {
		if len(row) != n {
			return &ValueError{Place: fmt.Sprintf("covariance[%d]", i), Found: fmt.Sprintf("%d entries", len(row)), Expected: fmt.Sprint(n)}
		}
	}
	for i, row := range covariance {
		for j, v := range row {
			place := fmt.Sprintf("covariance[%d][%d]", i, j)
			switch {
			case !finite(v):
				return &ValueError{Place: place, Found: fmt.Sprint(v), Expected: "a finite number"}
			case i == j && v < 0:
				return &ValueError{Place: place, Found: fmt.Sprint(v), Expected: "a variance, not negative"}
			case math.Abs(v-covariance[j][i]) > 1e-9*math.Sqrt(math.Abs(row[i]*covariance[j][j])):
				return &ValueError{Place: place, Found: fmt.Sprintf("%v, but %v across the diagonal", v, covariance[j][i]), Expected: "a symmetric matrix"}
			}
		}
	}
	return nil
}
