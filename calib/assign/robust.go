package assign

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"
)

// A Robust is a location and scale that few wild values cannot move. It is
// shown beside a mean and never takes its place.
type Robust struct {
	Value             float64
	StandardDeviation float64
	// StandardUncertainty of the value is 1.25·StandardDeviation/√n (ISO
	// 13528:2022, 7.7.3).
	StandardUncertainty float64
	Iterations          int
}

// Median of the values; of an even number, the mean of the middle two.
func Median(values []float64) (float64, error) {
	if err := checkValues(values, 1); err != nil {
		return 0, err
	}
	return median(values), nil
}

func median(values []float64) float64 {
	v := slices.Clone(values)
	slices.Sort(v)
	n := len(v)
	if n%2 == 1 {
		return v[n/2]
	}
	return v[n/2-1] + float64(0.5*(v[n/2]-v[n/2-1]))
}

// MedianDeviation is the median with MADe = 1.483·median|x − median| (ISO
// 13528:2022, C.2.2).
func MedianDeviation(values []float64) (Robust, error) {
	if err := checkValues(values, 2); err != nil {
		return Robust{}, err
	}
	m := median(values)
	return robust(m, 1.483*median(deviations(values, m)), len(values)), nil
}

func deviations(values []float64, from float64) []float64 {
	d := make([]float64, len(values))
	for i, v := range values {
		d[i] = math.Abs(v - from)
	}
	return d
}

func robust(value, deviation float64, n int) Robust {
	return Robust{Value: value, StandardDeviation: deviation, StandardUncertainty: 1.25 * deviation / math.Sqrt(float64(n))}
}

// InterquartileDeviation is the median with nIQR = 0.7413·(Q3 − Q1) (ISO
// 13528:2022, C.2.3), quartiles by linear interpolation between the values at
// (n − 1)/4 and 3(n − 1)/4.
func InterquartileDeviation(values []float64) (Robust, error) {
	if err := checkValues(values, 2); err != nil {
		return Robust{}, err
	}
	v := slices.Clone(values)
	slices.Sort(v)
	at := func(p float64) float64 {
		h := float64(len(v)-1) * p
		k := min(int(h), len(v)-2)
		return v[k] + float64((h-float64(k))*(v[k+1]-v[k]))
	}
	return robust(median(values), 0.7413*(at(0.75)-at(0.25)), len(values)), nil
}

// A HuberOptions says how the iteration is scaled and stopped. The zero value
// is algorithm A of ISO 13528, run until nothing changes.
type HuberOptions struct {
	// ExactFactor takes Huber's proposal 2 with its exact factor for 1.5, as H15
	// of the Analytical Methods Committee (1989, doi:10.1039/an9891401693),
	// in place of the rounded 1.134.
	ExactFactor bool
	// ThirdFigure stops where the third figures of value and standard deviation
	// no longer change, as ISO 13528 allows; printed examples stop there.
	ThirdFigure bool
}

// Huber estimates location and scale with values pulled in to 1.5 s* from the
// location (ISO 13528:2022, C.3.1, algorithm A; Huber's proposal 2):
//
//	x* = median, s* = 1.483·median|x − x*|; then repeat
//	δ = 1.5 s*,  xᵢ* = min(max(xᵢ, x* − δ), x* + δ)
//	x* = Σxᵢ*/n,  s* = 1.134·√(Σ(xᵢ* − x*)²/(n − 1))
//
// Where more than half of the values are equal, s* starts at 0 and the median
// stands. Fewer than two values are an *InputError.
func Huber(values []float64, options HuberOptions) (Robust, error) {
	if err := checkValues(values, 2); err != nil {
		return Robust{}, err
	}
	factor := 1.134
	if options.ExactFactor {
		factor = huberFactor
	}
	x := median(values)
	s := 1.483 * median(deviations(values, x))
	out := robust(x, s, len(values))
	v := make([]float64, len(values))
	for k := 1; k <= 1000 && s > 0; k++ {
		d := float64(1.5 * s)
		for i, w := range values {
			v[i] = math.Min(math.Max(w, x-d), x+d)
		}
		mean, sd := meanAndDeviation(v)
		sd *= factor
		done := math.Abs(mean-x) <= 1e-15*(math.Abs(mean)+sd) && math.Abs(sd-s) <= 1e-15*sd
		if options.ThirdFigure {
			done = thirdFigure(mean) == thirdFigure(x) && thirdFigure(sd) == thirdFigure(s)
		}
		x, s = mean, sd
		out = robust(x, s, len(values))
		out.Iterations = k
		if done {
			break
		}
	}
	return out, nil
}

// huberFactor is 1/√E[min(z², 1.5²)] for a standard normal z.
const huberFactor = 1.1333926554624871

// thirdFigure rounds to three significant figures.
func thirdFigure(v float64) string { return fmt.Sprintf("%.2e", v) }

// AlgorithmS pools standard deviations of equal size robustly (ISO 13528:2022,
// C.4): w* starts at the median; then repeat
//
//	ψ = η·w*,  wᵢ* = min(wᵢ, ψ),  w* = ξ·√(Σwᵢ*²/n)
//
// with η = √(χ²_0.9(ν)/ν) and ξ = 1/√(F_{ν+2}(νη²) + 0.1η²), F_{ν+2} the χ²
// distribution of ν + 2. Negative standard deviations, fewer than two of them
// and ν < 1 are an *InputError.
func AlgorithmS(standardDeviations []float64, degreesOfFreedom int) (pooled float64, err error) {
	if err := checkValues(standardDeviations, 2); err != nil {
		return 0, err
	}
	if degreesOfFreedom < 1 {
		return 0, &InputError{Place: "degrees of freedom", Found: fmt.Sprint(degreesOfFreedom), Expected: "one or more"}
	}
	for i, s := range standardDeviations {
		if s < 0 {
			return 0, &InputError{Place: fmt.Sprintf("standard deviations[%d]", i), Found: fmt.Sprint(s), Expected: "none below 0"}
		}
	}
	eta, xi := scaleFactors(degreesOfFreedom)
	return algorithmS(standardDeviations, eta, xi), nil
}

func algorithmS(standardDeviations []float64, eta, xi float64) float64 {
	w := median(standardDeviations)
	for range 1000 {
		limit := float64(eta * w)
		var ss float64
		for _, s := range standardDeviations {
			m := math.Min(s, limit)
			ss += float64(m * m)
		}
		next := xi * math.Sqrt(ss/float64(len(standardDeviations)))
		if math.Abs(next-w) <= 1e-15*next {
			return next
		}
		w = next
	}
	return w
}

func scaleFactors(degreesOfFreedom int) (eta, xi float64) {
	nu := float64(degreesOfFreedom)
	quantile := distuv.ChiSquared{K: nu}.Quantile(0.9)
	eta2 := quantile / nu
	below := 1 - distuv.ChiSquared{K: nu + 2}.Survival(quantile)
	return math.Sqrt(eta2), 1 / math.Sqrt(below+float64(0.1*eta2))
}
