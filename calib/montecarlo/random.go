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

// normal is the standard normal quantile of a uniform number, by Wichura's
// AS 241 (1988, doi:10.2307/2347330), good to 1e-16, with the engine's own
// logarithm: the same bits on every architecture.
func (s *stream) normal() float64 { return normalQuantile(s.uniform()) }

func normalQuantile(p float64) float64 {
	q := p - 0.5
	if math.Abs(q) <= 0.425 {
		r := 0.180625 - float64(q*q)
		return float64(q * (horner(r, &centralUpper) / horner(r, &centralLower)))
	}
	r := p
	if q > 0 {
		r = 1 - p
	}
	r = math.Sqrt(-adjust.NaturalLog(r))
	var x float64
	if r <= 5 {
		r -= 1.6
		x = horner(r, &nearUpper) / horner(r, &nearLower)
	} else {
		r -= 5
		x = horner(r, &farUpper) / horner(r, &farLower)
	}
	if q < 0 {
		return -x
	}
	return x
}

func horner(x float64, c *[8]float64) float64 {
	v := c[7]
	for k := 6; k >= 0; k-- {
		v = float64(v*x) + c[k]
	}
	return v
}

// Coefficients of AS 241, PPND16, from the constant up.
var (
	centralUpper = [8]float64{3.3871328727963666080e0, 1.3314166789178437745e2, 1.9715909503065514427e3, 1.3731693765509461125e4, 4.5921953931549871457e4, 6.7265770927008700853e4, 3.3430575583588128105e4, 2.5090809287301226727e3}
	centralLower = [8]float64{1, 4.2313330701600911252e1, 6.8718700749205790830e2, 5.3941960214247511077e3, 2.1213794301586595867e4, 3.9307895800092710610e4, 2.8729085735721942674e4, 5.2264952788528545610e3}
	nearUpper    = [8]float64{1.42343711074968357734e0, 4.63033784615654529590e0, 5.76949722146069140550e0, 3.64784832476320460504e0, 1.27045825245236838258e0, 2.41780725177450611770e-1, 2.27238449892691845833e-2, 7.74545014278341407640e-4}
	nearLower    = [8]float64{1, 2.05319162663775882187e0, 1.67638483018380384940e0, 6.89767334985100004550e-1, 1.48103976427480074590e-1, 1.51986665636164571966e-2, 5.47593808499534494600e-4, 1.05075007164441684324e-9}
	farUpper     = [8]float64{6.65790464350110377720e0, 5.46378491116411436990e0, 1.78482653991729133580e0, 2.96560571828504891230e-1, 2.65321895265761230930e-2, 1.24266094738807843860e-3, 2.71155556874348757815e-5, 2.01033439929228813265e-7}
	farLower     = [8]float64{1, 5.99832206555887937690e-1, 1.36929880922735805310e-1, 1.48753612908506148525e-2, 7.86869131145613259100e-4, 1.84631831751005468180e-5, 1.42151175831644588870e-7, 2.04426310338993978564e-15}
)

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
		if adjust.NaturalLog(s.uniform()) < float64(0.5*float64(x*x))+float64(d*(1-v+adjust.NaturalLog(v))) {
			return float64(2 * float64(float64(d*v)*boost))
		}
	}
}

// exp is eˣ for x ≤ 0, by argument halving and the series: slow, exact to
// 1e-15, and the same bits everywhere.
func exp(x float64) float64 {
	if x < -740 {
		return 0
	}
	halvings := 0
	for x < -0.125 {
		x /= 2
		halvings++
	}
	sum, term := 1.0, 1.0
	for k := 1; k < 20; k++ {
		term = float64(term*x) / float64(k)
		sum += term
	}
	for range halvings {
		sum = float64(sum * sum)
	}
	return sum
}
