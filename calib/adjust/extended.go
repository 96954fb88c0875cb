package adjust

import "math"

// A full covariance may hold a common part ten thousand times its independent
// one. Forming Σ and its pivots in double precision would then lose eight of
// sixteen digits to cancellation, so small dense problems are factored in pairs
// of doubles (Dekker 1971, doi:10.1007/BF01397083), about 32 digits, and the
// factor rounded. math.FMA is exactly rounded on every architecture.

// extendedRows is the most rows that are factored so; the cost is some twenty
// times that of doubles.
const extendedRows = 64

// A pair is the unevaluated sum of two doubles, hi the nearer.
type pair struct{ hi, lo float64 }

func twoSum(a, b float64) pair {
	s := a + b
	t := s - a
	return pair{s, (a - (s - t)) + (b - t)}
}

func twoProduct(a, b float64) pair {
	p := float64(a * b)
	return pair{p, math.FMA(a, b, -p)}
}

func (x pair) add(y pair) pair {
	s := twoSum(x.hi, y.hi)
	return quick(s.hi, s.lo+(x.lo+y.lo))
}

func (x pair) negative() pair { return pair{-x.hi, -x.lo} }

func (x pair) times(y pair) pair {
	p := twoProduct(x.hi, y.hi)
	return quick(p.hi, p.lo+(float64(x.hi*y.lo)+float64(x.lo*y.hi)))
}

func (x pair) over(y pair) pair {
	q := x.hi / y.hi
	r := x.add(y.times(pair{q, 0}).negative())
	return quick(q, (r.hi+r.lo)/y.hi)
}

func (x pair) root() pair {
	s := math.Sqrt(x.hi)
	r := x.add(twoProduct(s, s).negative())
	return quick(s, (r.hi+r.lo)/(2*s))
}

// quick renormalises hi + lo for |hi| ≥ |lo|.
func quick(hi, lo float64) pair {
	s := hi + lo
	return pair{s, lo - (s - hi)}
}

// extendedCholesky factors a symmetric matrix, given by its lower triangle in
// pairs (overwritten), and writes the rounded factor into l.
func extendedCholesky(a []pair, n int, l *Matrix) error {
	for i := 0; i < n; i++ {
		row := a[i*n : i*n+i+1]
		d := row[i].hi
		for j := 0; j <= i; j++ {
			rj := a[j*n : j*n+j+1]
			v := row[j]
			for k := 0; k < j; k++ {
				v = v.add(row[k].times(rj[k]).negative())
			}
			if j < i {
				row[j] = v.over(rj[j])
				l.Set(i, j, row[j].hi)
				continue
			}
			// The input itself is rounded to 1e-16 of its diagonal.
			if !(v.hi > singularPivot*d) {
				return &SingularError{Row: i, Pivot: v.hi}
			}
			row[i] = v.root()
			l.Set(i, i, row[i].hi)
		}
	}
	return nil
}

// extendedSigma is element (i, j) of Σ in pairs.
func (w *work) extendedSigma(i, j int) pair {
	pr := w.pr
	v := pair{pr.Noise.At(i, j), 0}
	ki, kj := pr.Latent[i], pr.Latent[j]
	if pr.ValueCovariance != nil && ki >= 0 && kj >= 0 {
		c := pair{pr.ValueCovariance.At(ki, kj), 0}
		if pr.ValueCovarianceLow != nil {
			c.lo = pr.ValueCovarianceLow.At(ki, kj)
		}
		v = v.add(twoProduct(w.slope[i], w.slope[j]).times(c))
	}
	if pr.Cross != nil {
		if ki >= 0 {
			v = v.add(twoProduct(w.slope[i], pr.Cross.At(j, ki)).negative())
		}
		if kj >= 0 {
			v = v.add(twoProduct(w.slope[j], pr.Cross.At(i, kj)).negative())
		}
	}
	return v
}

// factorSigma fills and factors Σ for the coupled rows.
func (w *work) factorSigma() error {
	n := w.white.n
	if w.pr.Noise == nil || n > extendedRows {
		w.fillSigma()
		return Cholesky(w.white.l, n)
	}
	if w.pairs == nil {
		w.pairs = make([]pair, n*n)
	}
	for i := 0; i < n; i++ {
		for j := 0; j <= i; j++ {
			w.pairs[i*n+j] = w.extendedSigma(i, j)
		}
	}
	return extendedCholesky(w.pairs, n, w.white.l)
}

// ExtendedDot returns Σ a_i·b_i to about twice the precision of doubles, as
// the sum of hi and lo.
func ExtendedDot(a, b []float64) (hi, lo float64) {
	var v pair
	for i, x := range a {
		v = v.add(twoProduct(x, b[i]))
	}
	return v.hi, v.lo
}
