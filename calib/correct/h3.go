package correct

import (
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/adjust"
)

// H3+ adds to the m/z 3 signal in proportion to the square of the hydrogen
// pressure, so that the measured ratio grows with the peak:
//
//	R = R0 + K·I2        (Sessions, Burgoyne and Hayes 2001, doi:10.1021/ac000489e)
//
// K is the H3 factor, in the unit of R over that of the intensity I2.

// A Pulse is one pulse of hydrogen of one isotopic composition.
type Pulse struct {
	// Intensity is I2 of the m/z 2 signal, averaged over the pulse as
	// [MeanIntensity] does.
	Intensity float64
	// Ratio is (m/z 3)/(m/z 2).
	Ratio float64
	// U is the ratio's standard uncertainty; nil for all pulses estimates one
	// from their scatter.
	U *float64
}

// A Factor is an H3 factor with what it was found from.
type Factor struct {
	// K and its standard uncertainty, Zero the ratio at no intensity.
	K, U        float64
	Zero, UZero float64
	Covariance  float64
	// DegreesOfFreedom of U: +Inf where the pulses' uncertainties were stated.
	DegreesOfFreedom float64
	// ResidualSD is the residual standard deviation of the ratios; NaN for two pulses.
	ResidualSD float64
	// Residuals of the ratios, in the order of the pulses: a pattern shows that
	// the ratio is not straight in the intensity.
	Residuals []float64
	// ChiSquare is set where uncertainties were stated; NaN otherwise.
	ChiSquare float64
	// Curvature is that of a second-degree fit over its standard uncertainty, on
	// CurvatureDF degrees of freedom: Student's t of a ratio that is straight in
	// the intensity. +Inf degrees of freedom where uncertainties were stated; NaN
	// where the pulses cannot tell (fewer than four, or three heights without
	// stated uncertainties).
	Curvature, CurvatureDF float64
}

// A PulseError says why pulses give no factor.
type PulseError struct {
	Place, Found, Expected string
}

func (e *PulseError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

// DetermineH3 finds the factor by weighted least squares of ratio on
// intensity. With U of every pulse the uncertainty is theirs; with none it
// comes from the residuals, ν = n − 2, and needs three pulses. Pulses of one
// height, mixed statements of U, and values that are not finite are a
// *PulseError.
func DetermineH3(pulses []Pulse) (Factor, error) {
	n := len(pulses)
	if n < 2 {
		return Factor{}, &PulseError{"pulses", fmt.Sprint(n), "at least 2 of different height"}
	}
	stated := pulses[0].U != nil
	low, high := math.Inf(1), math.Inf(-1)
	var sum, weight float64
	w := make([]float64, n)
	for i, p := range pulses {
		place := fmt.Sprintf("pulses[%d]", i)
		switch {
		case !finite(p.Intensity) || p.Intensity < 0:
			return Factor{}, &PulseError{place + ".intensity", fmt.Sprint(p.Intensity), "a finite intensity, not negative"}
		case !finite(p.Ratio):
			return Factor{}, &PulseError{place + ".ratio", fmt.Sprint(p.Ratio), "a finite ratio"}
		case (p.U != nil) != stated:
			return Factor{}, &PulseError{place + ".u", "some stated and some not", "u of every pulse, or of none"}
		case stated && (!finite(*p.U) || *p.U <= 0):
			return Factor{}, &PulseError{place + ".u", fmt.Sprint(*p.U), "a positive standard uncertainty"}
		}
		w[i] = 1
		if stated {
			w[i] = 1 / *p.U
		}
		low, high = math.Min(low, p.Intensity), math.Max(high, p.Intensity)
		sum += float64(float64(w[i]*w[i]) * p.Intensity)
		weight += float64(w[i] * w[i])
	}
	if high <= low {
		return Factor{}, &PulseError{"pulses", fmt.Sprintf("one height, %v", low), "at least 2 different heights"}
	}
	if !stated && n < 3 {
		return Factor{}, &PulseError{"pulses", "2 without stated uncertainty", "at least 3, whose scatter gives the uncertainty"}
	}
	return fitPulses(pulses, w, sum/weight, stated)
}

// fitPulses does the regression about the mean intensity.
func fitPulses(pulses []Pulse, w []float64, mean float64, stated bool) (Factor, error) {
	n := len(pulses)
	columns, b := adjust.NewMatrix(2, n), make([]float64, n)
	var one, square float64
	for i, p := range pulses {
		d := p.Intensity - mean
		columns.Set(0, i, w[i])
		columns.Set(1, i, float64(w[i]*d))
		b[i] = float64(w[i] * p.Ratio)
		one += float64(w[i] * w[i])
		square += float64(float64(w[i]*w[i]) * float64(d*d))
	}
	x, err := adjust.LeastSquares(columns, b)
	if err != nil {
		return Factor{}, fmt.Errorf("determine the H3 factor: %w", err)
	}
	f := Factor{K: x[1], Zero: x[0] - float64(x[1]*mean), DegreesOfFreedom: math.Inf(1), ResidualSD: math.NaN(), ChiSquare: math.NaN(), Curvature: math.NaN(), CurvatureDF: math.NaN(), Residuals: make([]float64, n)}
	var chi2, rss float64
	for i, p := range pulses {
		r := p.Ratio - x[0] - float64(x[1]*(p.Intensity-mean))
		f.Residuals[i] = r
		rss += float64(r * r)
		chi2 += float64(float64(w[i]*r) * float64(w[i]*r))
	}
	variance := 1.0
	if n > 2 {
		f.ResidualSD = math.Sqrt(rss / float64(n-2))
	}
	if stated {
		f.ChiSquare = chi2
	} else {
		f.DegreesOfFreedom = float64(n - 2)
		variance = rss / float64(n-2)
	}
	vk := variance / square
	f.U = math.Sqrt(vk)
	f.UZero = math.Sqrt(variance/one + float64(float64(mean*mean)*vk))
	f.Covariance = -float64(mean * vk)
	f.Curvature, f.CurvatureDF = curvature(pulses, w, mean, stated)
	return f, nil
}

// curvature is t of the second-degree coefficient, with ν = n − 3. The variance
// comes from the same regression that the residuals of the straight line are
// refitted by: with q the part of the weighted square that the line does not
// explain, c = q·y/q·q and u²(c) = s²/q·q.
func curvature(pulses []Pulse, w []float64, mean float64, stated bool) (t, nu float64) {
	n := len(pulses)
	if n < 4 {
		return math.NaN(), math.NaN()
	}
	line, square, ratio := adjust.NewMatrix(2, n), make([]float64, n), make([]float64, n)
	for i, p := range pulses {
		d := p.Intensity - mean
		line.Set(0, i, w[i])
		line.Set(1, i, float64(w[i]*d))
		square[i], ratio[i] = float64(w[i]*float64(d*d)), float64(w[i]*p.Ratio)
	}
	against := func(b []float64) ([]float64, bool) { // what the line leaves of b
		x, err := adjust.LeastSquares(line.Copy(), slices.Clone(b))
		if err != nil {
			return nil, false
		}
		out := make([]float64, n)
		for i := range b {
			out[i] = b[i] - float64(x[0]*line.At(0, i)) - float64(x[1]*line.At(1, i))
		}
		return out, true
	}
	q, ok := against(square)
	r, ok2 := against(ratio)
	if !ok || !ok2 {
		return math.NaN(), math.NaN()
	}
	qq := adjust.Dot(q, q)
	if qq <= 1e-20*adjust.Dot(square, square) { // two heights: no second degree
		return math.NaN(), math.NaN()
	}
	c := adjust.Dot(q, r) / qq
	variance, nu := 1.0, math.Inf(1)
	if !stated {
		rss := 0.0
		for i := range r {
			e := r[i] - float64(c*q[i])
			rss += float64(e * e)
		}
		nu = float64(n - 3)
		variance = rss / nu
	}
	if variance == 0 {
		return math.NaN(), math.NaN()
	}
	return c / math.Sqrt(variance/qq), nu
}

// The intensity of a peak, for the squared pressure it stands for, is
// ∫I2²dt/∫I2dt: I2 itself for a flat top, H/√2 for a Gaussian of height H.

// FlatIntensity is that of a flat pulse.
func FlatIntensity(height float64) float64 { return height }

// GaussianIntensity is that of a Gaussian peak of the given height.
func GaussianIntensity(height float64) float64 { return height / math.Sqrt2 }

// MeanIntensity is ∫I²dt/∫I dt of a trace by the trapezoidal rule; times may be
// unevenly spaced. A trace of fewer than two points, of falling times or
// without area is a *PulseError.
func MeanIntensity(times, intensities []float64) (float64, error) {
	if len(times) != len(intensities) || len(times) < 2 {
		return 0, &PulseError{"trace", fmt.Sprintf("%d times and %d intensities", len(times), len(intensities)), "as many of each, at least 2"}
	}
	var first, second float64
	for i := 1; i < len(times); i++ {
		dt := times[i] - times[i-1]
		if !(dt > 0) {
			return 0, &PulseError{fmt.Sprintf("trace[%d].time", i), fmt.Sprint(times[i]), "rising times"}
		}
		a, b := intensities[i-1], intensities[i]
		first += float64(dt*(a+b)) / 2
		// Exact for intensities that run straight between points.
		second += float64(dt*(float64(a*a)+float64(a*b)+float64(b*b))) / 3
	}
	if !(first > 0) || !finite(second) {
		return 0, &PulseError{"trace", fmt.Sprintf("an area of %v", first), "a positive area"}
	}
	return second / first, nil
}

// A Peak is a sample's peak beside the working gas' pulse, as measured: ratios
// and mean intensities.
type Peak struct {
	SampleRatio, SampleIntensity float64
	GasRatio, GasIntensity       float64
}

// PeakOf rebuilds the sample's ratio from a raw delta (‰) that was formed
// without any H3 correction.
func PeakOf(rawDelta, sampleIntensity, gasRatio, gasIntensity float64) Peak {
	return Peak{SampleRatio: float64(gasRatio * (1 + rawDelta/1000)), SampleIntensity: sampleIntensity, GasRatio: gasRatio, GasIntensity: gasIntensity}
}

// Undo rebuilds a peak from a delta (‰) that was formed with a factor k, as
// recorded by the instrument: changing a factor means undoing it first.
func Undo(delta, k, sampleIntensity, gasRatio, gasIntensity float64) Peak {
	p := Peak{SampleIntensity: sampleIntensity, GasRatio: gasRatio, GasIntensity: gasIntensity}
	gas := gasRatio - float64(k*gasIntensity)
	p.SampleRatio = float64((1+delta/1000)*gas) + float64(k*sampleIntensity)
	return p
}

// H3Corrected is a raw delta corrected with a factor, and its derivatives.
type H3Corrected struct {
	// Delta is δ = [(R_s − K·I_s)/(R_g − K·I_g) − 1]·1000.
	Delta float64
	// PerFactor is ∂δ/∂K = [(1000 + δ)·I_g − 1000·I_s]/(R_g − K·I_g).
	PerFactor float64
	// PerRaw is the derivative by the uncorrected delta.
	PerRaw float64
}

// ApplyH3 corrects a peak with the factor k. It acts on ratios, never on
// deltas. A working gas whose ratio the factor would take to zero or below,
// and values that are not finite, are a *PulseError.
func (p Peak) ApplyH3(k float64) (H3Corrected, error) {
	gas := p.GasRatio - float64(k*p.GasIntensity)
	if !(gas > 0) || !finite(gas) {
		return H3Corrected{}, &PulseError{"gas ratio", fmt.Sprintf("%v less %v × %v", p.GasRatio, k, p.GasIntensity), "a positive ratio left"}
	}
	sample := p.SampleRatio - float64(k*p.SampleIntensity)
	if !finite(sample) {
		return H3Corrected{}, &PulseError{"sample ratio", fmt.Sprint(p.SampleRatio), "a finite ratio and intensity"}
	}
	out := H3Corrected{Delta: float64(1000 * (sample - gas) / gas)}
	out.PerFactor = (float64((1000+out.Delta)*p.GasIntensity) - float64(1000*p.SampleIntensity)) / gas
	out.PerRaw = p.GasRatio / gas
	return out, nil
}

// H3Limits say when a factor is stale; zero asks for nothing.
type H3Limits struct {
	// Age in hours between factor and session.
	Age float64
	// Change from the factor before, in K's unit.
	Change float64
}

// Stale says which limits a factor exceeds: its age in hours at the session,
// and its change from the one before (nil for none known).
func (l H3Limits) Stale(f Factor, age float64, before *Factor) (tooOld, changed bool) {
	tooOld = l.Age > 0 && age > l.Age
	changed = l.Change > 0 && before != nil && math.Abs(f.K-before.K) > l.Change
	return tooOld, changed
}
