package montecarlo

import (
	"math"

	"deltamoor/calib/adjust"
)

// A stream is SplitMix64 (Steele, Lea and Flood 2014,
// doi:10.1145/2660193.2660195): a counter and a mixing function, so that a
// stream is fixed by where its counter starts.
type stream struct{ counter uint64 }

const golden = 0x9e3779b97f4a7c15

func mix(x uint64) uint64 {
	x = (x ^ x>>30) * 0xbf58476d1ce4e5b9
	x = (x ^ x>>27) * 0x94d049bb133111eb
	return x ^ x>>31
}

// newStream is that of one block. Counters of different blocks start where a
// mixed pair of seed and block says, far apart among 2⁶⁴.
func newStream(seed, block uint64) stream {
	return stream{mix(mix(seed+golden) ^ mix(block*golden+0x632be59bd9b4e019))}
}

func (s *stream) next() uint64 {
	s.counter += golden
	return mix(s.counter)
}

// uniform is in (0, 1), never 0 or 1.
func (s *stream) uniform() float64 {
	return (float64(s.next()>>11) + 0.5) / (1 << 53)
}

// normal is a standard normal number by the ziggurat, the same bits on every
// architecture. One 64-bit number decides the layer (8 bits) and the place in
// it (53 bits), and is enough 99 times of 100.
func (s *stream) normal() float64 {
	bits := s.next()
	i := uint8(bits)
	x := float64(float64(int64(bits)>>11) * zigguratSteps[i])
	if math.Abs(x) < zigguratEdges[int(i)+1] {
		return x
	}
	return s.edge(i, x)
}

// edge decides numbers near the edge of their layer, and draws the tail.
func (s *stream) edge(i uint8, x float64) float64 {
	for {
		switch {
		case i == 0:
			return s.tail(x < 0)
		default:
			low, high := zigguratHeights[i], zigguratHeights[int(i)+1]
			if low+float64(s.uniform()*(high-low)) < exp(-float64(0.5*float64(x*x))) {
				return x
			}
		}
		bits := s.next()
		i = uint8(bits)
		x = float64(float64(int64(bits)>>11) * zigguratSteps[i])
		if math.Abs(x) < zigguratEdges[int(i)+1] {
			return x
		}
	}
}

// tail is beyond the ziggurat's base (Marsaglia 1964, doi:10.1080/00401706.1964.10490150).
func (s *stream) tail(negative bool) float64 {
	for {
		x := adjust.NaturalLog(s.uniform()) / zigguratEdges[1]
		y := adjust.NaturalLog(s.uniform())
		if -2*y >= float64(x*x) {
			if negative {
				return x - zigguratEdges[1]
			}
			return zigguratEdges[1] - x
		}
	}
}

// chiSquare draws χ² with fractional ν > 0, as twice a gamma variate of shape
// ν/2, by Marsaglia and Tsang (2000, doi:10.1145/358407.358414).
func (s *stream) chiSquare(nu float64) float64 {
	shape := nu / 2
	boost := 1.0
	if shape < 1 {
		// Gamma(a) = Gamma(a + 1)·U^(1/a), in logarithms to have no power.
		boost = exp(adjust.NaturalLog(s.uniform()) / shape)
		shape++
	}
	d := shape - 1.0/3
	c := 1 / math.Sqrt(9*d)
	for {
		x := s.normal()
		v := 1 + float64(c*x)
		if v <= 0 {
			continue
		}
		v = float64(v * float64(v*v))
		u := s.uniform()
		square := float64(x * x)
		if u < 1-float64(0.0331*float64(square*square)) { // surely below the density: no logarithm
			return float64(2 * float64(float64(d*v)*boost))
		}
		if adjust.NaturalLog(u) < float64(0.5*square)+float64(d*(1-v+adjust.NaturalLog(v))) {
			return float64(2 * float64(float64(d*v)*boost))
		}
	}
}

// Constants of exp: log₂e, ln 2 in two parts, and 1/k!.
const (
	log2e   = 1.44269504088896338700e+00
	ln2High = 6.93147180369123816490e-01
	ln2Low  = 1.90821492927058770002e-10
)

var inverseFactorials = [14]float64{1, 1, 1.0 / 2, 1.0 / 6, 1.0 / 24, 1.0 / 120, 1.0 / 720, 1.0 / 5040, 1.0 / 40320, 1.0 / 362880,
	1.0 / 3628800, 1.0 / 39916800, 1.0 / 479001600, 1.0 / 6227020800}

// exp is eˣ for x ≤ 0 to 1e-15, the same bits everywhere: x = k·ln 2 + y with
// |y| ≤ ½ ln 2, the series for e^y, and an exact power of two.
func exp(x float64) float64 {
	if x < -740 {
		return 0
	}
	k := math.Floor(float64(x*log2e) + 0.5)
	y := (x - float64(k*ln2High)) - float64(k*ln2Low)
	v := inverseFactorials[13]
	for n := 12; n >= 0; n-- {
		v = float64(v*y) + inverseFactorials[n]
	}
	return math.Ldexp(v, int(k))
}
