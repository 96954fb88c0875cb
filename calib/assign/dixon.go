package assign

import (
	"fmt"
	"math"
	"slices"
)

// Dixon tests the extreme value against its neighbour by the ratio
//
//	r10 = (x₂ − x₁)/(x_n − x₁), or (x_n − x_{n−1})/(x_n − x₁)
//
// (Dixon 1950, doi:10.1214/aoms/1177729747). EitherSide takes the larger of
// the two and doubles the probability. The probability is exact for a normal
// sample,
//
//	P(r10 > r) = n(n−1)∫∫_{a<b} φ(a)φ(b)[Φ(b) − Φ(a + r(b − a))]^{n−2} da db
//
// by quadrature, and the limit is its root: tables in use differ from it by up
// to 0.002 (Rorabacher 1991, doi:10.1021/ac00002a010). Fewer than three or more
// than thirty values are an *InputError: a second outlier hides the first, and
// in long samples Grubbs' test is the better one. Values that are all equal
// have r = 0.
func Dixon(values []float64, side Side, level float64) (Opinion, error) {
	if err := checkValues(values, 3); err != nil {
		return Opinion{}, err
	}
	if len(values) > 30 {
		return Opinion{}, &InputError{Place: "values", Found: fmt.Sprint(len(values)), Expected: "at most 30"}
	}
	if err := checkLevel("level", level); err != nil {
		return Opinion{}, err
	}
	n := len(values)
	order := make([]int, n)
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		switch {
		case values[a] < values[b]:
			return -1
		case values[a] > values[b]:
			return 1
		}
		return 0
	})
	at := func(k int) float64 { return values[order[k]] }
	o := Opinion{Test: "Dixon r10", Level: level, P: 1}
	tails := 1.0
	low, high := at(1)-at(0), at(n-1)-at(n-2)
	switch side {
	case EitherSide:
		tails = 2
		if low > high {
			side = LowSide
		}
	}
	gap := high
	o.Suspect = order[n-1]
	if side == LowSide {
		gap, o.Suspect = low, order[0]
	}
	o.Critical = dixonCritical(n, level/tails)
	span := at(n-1) - at(0)
	if span == 0 {
		return o, nil
	}
	o.Statistic = gap / span
	o.P = math.Min(1, tails*dixonTail(n, o.Statistic))
	o.Beyond = o.Statistic > o.Critical
	return o, nil
}

// dixonCritical solves dixonTail = p by bisection.
func dixonCritical(n int, p float64) float64 {
	low, high := 0.0, 1.0
	for range 42 {
		mid := float64(0.5 * (low + high))
		if dixonTail(n, mid) > p {
			low = mid
		} else {
			high = mid
		}
	}
	return high
}

// dixonTail is P(r10 > r). The sample lies in ±8.5 but for 1e-16. With a and
// the width w = b − a the integrand is smooth, so that the trapezoidal rule in
// a and Gauss–Legendre panels in w give ten digits and more.
func dixonTail(n int, r float64) float64 {
	const (
		limit  = 8.5
		step   = 0.25
		panels = 17
	)
	var total float64
	phi := func(x float64) float64 { return math.Exp(-float64(0.5*x*x)) / math.Sqrt(2*math.Pi) }
	for a := -limit; a <= limit; a += step {
		pa := phi(a)
		var inner float64
		for k := range panels {
			for g, x := range legendreNode {
				for _, sign := range [2]float64{-1, 1} {
					w := float64((float64(k) + float64(0.5*(1+float64(sign*x)))) * (2 * limit / panels))
					b := a + w
					if b > limit+1 {
						continue
					}
					// Φ(b) − Φ(a + rw) from the side where both are small.
					c := a + float64(r*w)
					var between float64
					if c > 0 {
						between = 0.5 * (math.Erfc(c/math.Sqrt2) - math.Erfc(b/math.Sqrt2))
					} else {
						between = 0.5 * (math.Erfc(-b/math.Sqrt2) - math.Erfc(-c/math.Sqrt2))
					}
					inner += float64(float64(legendreWeight[g]*phi(b)) * power(between, n-2))
				}
			}
		}
		total += float64(pa * inner)
	}
	return float64(float64(n*(n-1))*total) * step * (limit / panels)
}

func power(x float64, n int) float64 {
	p := 1.0
	for range n {
		p = float64(p * x)
	}
	return p
}

// Nodes and weights of the ten-point Gauss–Legendre rule, positive half
// (Abramowitz and Stegun, table 25.4).
var (
	legendreNode   = [5]float64{0.14887433898163122, 0.43339539412924720, 0.67940956829902440, 0.86506336668898451, 0.97390652851717172}
	legendreWeight = [5]float64{0.29552422471475287, 0.26926671930999636, 0.21908636251598204, 0.14945134915058059, 0.06667134430868814}
)
