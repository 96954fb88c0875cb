package correct

import (
	"errors"
	"fmt"
	"math"
	"testing"

	"pgregory.net/rapid"
)

func near(t interface {
	Helper()
	Errorf(string, ...any)
}, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.17g, want %.17g (allowed %.2g)", what, got, want, tolerance)
	}
}

// Constructed pulses after the definition of Sessions, Burgoyne and Hayes
// 2001; answers by scipy linregress.
func TestH3FactorMatchesRegression(t *testing.T) {
	i2 := []float64{1.05, 2.11, 3.02, 4.06, 5.1, 6.01, 7.07, 8.02}
	r := []float64{0.00016432, 0.00016521, 0.00016609, 0.00016702, 0.00016797, 0.00016884, 0.00016981, 0.00017069}
	var pulses []Pulse
	for i := range i2 {
		pulses = append(pulses, Pulse{Intensity: i2[i], Ratio: r[i]})
	}
	f, err := DetermineH3(pulses)
	if err != nil {
		t.Fatal(err)
	}
	relative := func(what string, got, want float64) { near(t, what, got, want, 1e-9*math.Abs(want)) }
	relative("K", f.K, 9.18431475277459e-07)
	relative("R0", f.Zero, 0.00016331029463011117)
	relative("u(K)", f.U, 4.402936800963914e-09)
	relative("u(R0)", f.UZero, 2.2428738981323087e-08)
	relative("covariance", f.Covariance, -8.830255801580107e-17)
	relative("s", f.ResidualSD, 2.840143384132197e-08)
	near(t, "ν", f.DegreesOfFreedom, 6, 0)
	// Second-degree fit in exact rational arithmetic: t = 1.7988175243706854 on 5.
	near(t, "curvature", f.Curvature, 1.7988175243706854, 1e-6)
	near(t, "ν of the curvature", f.CurvatureDF, 5, 0)
	for _, c := range []struct{ rs, is, rg, ig, uncorrected, corrected, perK, u float64 }{
		{0.00014312, 4.8, 0.00016771, 5, -146.62214536998397, -149.62381375568467, -3360264.333823885, 0.014795031496359672},
		{0.00017105, 2.2, 0.00016771, 5, 19.915330033987377, 36.24133347826142, 18276398.335345265, 0.08046982681976728},
	} {
		p := Peak{SampleRatio: c.rs, SampleIntensity: c.is, GasRatio: c.rg, GasIntensity: c.ig}
		none, err := p.ApplyH3(0)
		if err != nil {
			t.Fatal(err)
		}
		relative("uncorrected", none.Delta, c.uncorrected)
		x, err := p.ApplyH3(f.K)
		if err != nil {
			t.Fatal(err)
		}
		relative("corrected", x.Delta, c.corrected)
		relative("∂δ/∂K", x.PerFactor, c.perK)
		relative("u from K", math.Abs(x.PerFactor)*f.U, c.u)
	}
}

// The second constructed set: K 6.47381 ppm/nA, intercept 311.637857, residual
// sd 0.212599, u(K) 0.032805, printed to these digits.
func TestH3FactorMatchesSecondSet(t *testing.T) {
	var pulses []Pulse
	for i, r := range []float64{318.32, 324.32, 331.12, 337.42, 344.22, 350.22, 357.12, 363.42} {
		pulses = append(pulses, Pulse{Intensity: float64(i + 1), Ratio: r})
	}
	f, err := DetermineH3(pulses)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "K", f.K, 6.47381, 5e-6)
	near(t, "R0", f.Zero, 311.637857, 5e-7)
	near(t, "s", f.ResidualSD, 0.212599, 5e-7)
	near(t, "u(K)", f.U, 0.032805, 5e-7)
	// An error of K of 0.2 ppm/nA, 1 nA off, on a ratio of 311.52: 0.642 ‰.
	p := Peak{SampleRatio: 311.52 + 6*f.K, SampleIntensity: 6, GasRatio: 311.52 + 5*f.K, GasIntensity: 5}
	x, err := p.ApplyH3(f.K)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "error of K", math.Abs(x.PerFactor)*0.2, 0.642, 5e-4)
}

func TestH3WithStatedUncertaintiesIsWeighted(t *testing.T) {
	u := []float64{0.1, 0.2, 0.1}
	pulses := []Pulse{{1, 10, &u[0]}, {2, 12.3, &u[1]}, {4, 16, &u[2]}}
	f, err := DetermineH3(pulses)
	if err != nil {
		t.Fatal(err)
	}
	// Weighted least squares by its sums.
	var sw, sx, sy, sxx, sxy float64
	for i, p := range pulses {
		w := 1 / (u[i] * u[i])
		sw, sx, sy = sw+w, sx+w*p.Intensity, sy+w*p.Ratio
		sxx, sxy = sxx+w*p.Intensity*p.Intensity, sxy+w*p.Intensity*p.Ratio
	}
	d := sw*sxx - sx*sx
	near(t, "K", f.K, (sw*sxy-sx*sy)/d, 1e-12)
	near(t, "u(K)", f.U, math.Sqrt(sw/d), 1e-12)
	near(t, "u(R0)", f.UZero, math.Sqrt(sxx/d), 1e-12)
	near(t, "covariance", f.Covariance, -sx/d, 1e-12)
	if !math.IsInf(f.DegreesOfFreedom, 1) || math.IsNaN(f.ChiSquare) {
		t.Errorf("stated uncertainties: ν %v, chi-square %v", f.DegreesOfFreedom, f.ChiSquare)
	}
}

func TestH3DerivativesAreThoseOfTheCorrection(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p := Peak{
			SampleRatio: rapid.Float64Range(100, 500).Draw(t, "R_s"), SampleIntensity: rapid.Float64Range(1, 10).Draw(t, "I_s"),
			GasRatio: rapid.Float64Range(100, 500).Draw(t, "R_g"), GasIntensity: rapid.Float64Range(1, 10).Draw(t, "I_g"),
		}
		k := rapid.Float64Range(0, 8).Draw(t, "K")
		at := func(k float64) float64 {
			x, err := p.ApplyH3(k)
			if err != nil {
				t.Fatal(err)
			}
			return x.Delta
		}
		x, err := p.ApplyH3(k)
		if err != nil {
			t.Fatal(err)
		}
		const h = 1e-4
		near(t, "∂δ/∂K", x.PerFactor, (at(k+h)-at(k-h))/(2*h), 1e-4*(1+math.Abs(x.PerFactor)))
		// A factor undone and applied again gives the delta back.
		back, err := Undo(x.Delta, k, p.SampleIntensity, p.GasRatio, p.GasIntensity).ApplyH3(k)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "undone and done", back.Delta, x.Delta, 1e-9*(1000+math.Abs(x.Delta)))
		raw, err := p.ApplyH3(0)
		if err != nil {
			t.Fatal(err)
		}
		y, err := PeakOf(raw.Delta+h, p.SampleIntensity, p.GasRatio, p.GasIntensity).ApplyH3(k)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "∂δ/∂raw", (y.Delta-x.Delta)/h, x.PerRaw, 1e-5*x.PerRaw)
	})
}

func TestIntensityOfPeakShapes(t *testing.T) {
	var times, gauss, flat []float64
	for i := range 2001 {
		x := float64(i-1000) / 100
		times, gauss, flat = append(times, x), append(gauss, 3*math.Exp(-x*x/2)), append(flat, 3)
	}
	g, err := MeanIntensity(times, gauss)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "Gaussian of height 3", g, GaussianIntensity(3), 2e-5) // steps of 0.01 σ: h²/12 of it
	f, err := MeanIntensity(times, flat)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "flat pulse of height 3", f, FlatIntensity(3), 1e-12)
	// A triangle of height h: ∫I²/∫I = 2h/3.
	tri, err := MeanIntensity([]float64{0, 1, 3}, []float64{0, 3, 0})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "triangle", tri, 2, 1e-14)
}

// Constructed example: 40 units at −22.1 with 0.8 of blank at −27 mean −22.0.
func TestBlankIsTakenOut(t *testing.T) {
	b := Blank{Size: 0.8, RawDelta: -27}
	x, err := b.Remove(-22.1, 40)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "δ", x.Delta, -22.0, 1e-12)
	rapid.Check(t, func(t *rapid.T) {
		b := Blank{Size: rapid.Float64Range(0, 0.5).Draw(t, "s_b"), RawDelta: rapid.Float64Range(-40, 40).Draw(t, "δ_b")}
		raw, size := rapid.Float64Range(-60, 60).Draw(t, "δ"), rapid.Float64Range(1, 20).Draw(t, "s")
		at := func(raw, size, bs, bd float64) float64 {
			x, err := Blank{Size: bs, RawDelta: bd}.Remove(raw, size)
			if err != nil {
				t.Fatal(err)
			}
			return x.Delta
		}
		x, err := b.Remove(raw, size)
		if err != nil {
			t.Fatal(err)
		}
		const h = 1e-5
		near(t, "mixed again", (x.Delta*(size-b.Size)+b.RawDelta*b.Size)/size, raw, 1e-10)
		near(t, "∂/∂raw", x.PerRaw, (at(raw+h, size, b.Size, b.RawDelta)-at(raw-h, size, b.Size, b.RawDelta))/(2*h), 1e-4)
		near(t, "∂/∂size", x.PerSize, (at(raw, size+h, b.Size, b.RawDelta)-at(raw, size-h, b.Size, b.RawDelta))/(2*h), 1e-3)
		near(t, "∂/∂δ_b", x.PerBlankDelta, (at(raw, size, b.Size, b.RawDelta+h)-at(raw, size, b.Size, b.RawDelta-h))/(2*h), 1e-4)
		if b.Size > h {
			near(t, "∂/∂s_b", x.PerBlankSize, (at(raw, size, b.Size+h, b.RawDelta)-at(raw, size, b.Size-h, b.RawDelta))/(2*h), 1e-2)
		}
	})
}

// Two peaks, by base and by half-height widths (constructed after the IUPAC
// definitions): 1.578947 and 1.580357.
func TestResolutionMatchesDefinitions(t *testing.T) {
	base, err := Resolution(ChromatographicPeak{1200, 18}, ChromatographicPeak{1230, 20}, BaseWidth)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "by base widths", base, 1.578947, 5e-7)
	half, err := Resolution(ChromatographicPeak{1230, 11.8}, ChromatographicPeak{1200, 10.6}, HalfHeightWidth)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "by half-height widths", half, 1.580357, 5e-7)
}

func TestRefusals(t *testing.T) {
	u, zero := 0.1, 0.0
	var pulse *PulseError
	for name, p := range map[string][]Pulse{
		"one":             {{Intensity: 1, Ratio: 1}},
		"two without u":   {{Intensity: 1, Ratio: 1}, {Intensity: 2, Ratio: 1}},
		"one height":      {{Intensity: 1, Ratio: 1}, {Intensity: 1, Ratio: 1}, {Intensity: 1, Ratio: 2}},
		"NaN":             {{Intensity: 1, Ratio: math.NaN()}, {Intensity: 2, Ratio: 1}, {Intensity: 3, Ratio: 2}},
		"negative height": {{Intensity: -1, Ratio: 1}, {Intensity: 2, Ratio: 1}, {Intensity: 3, Ratio: 2}},
		"mixed u":         {{1, 1, &u}, {Intensity: 2, Ratio: 1}, {Intensity: 3, Ratio: 2}},
		"zero u":          {{1, 1, &u}, {2, 1, &zero}, {3, 2, &u}},
	} {
		if _, err := DetermineH3(p); !errors.As(err, &pulse) || pulse.Expected == "" {
			t.Errorf("%s: error %v, want a PulseError", name, err)
		}
	}
	if _, err := (Peak{SampleRatio: 1, GasRatio: 1, GasIntensity: 3}).ApplyH3(0.5); !errors.As(err, &pulse) {
		t.Errorf("a factor that eats the gas: error %v", err)
	}
	for _, c := range [][2][]float64{{{0}, {1}}, {{0, 0}, {1, 1}}, {{0, 1}, {0, 0}}, {{0, 1}, {1}}} {
		if _, err := MeanIntensity(c[0], c[1]); !errors.As(err, &pulse) {
			t.Errorf("trace %v: error %v", c, err)
		}
	}
	var size *SizeError
	if _, err := (Blank{Size: 2}).Remove(1, 2); !errors.As(err, &size) {
		t.Errorf("a peak of the blank's size: error %v", err)
	}
	var width *WidthError
	for _, by := range []Width{"", BaseWidth} {
		if _, err := Resolution(ChromatographicPeak{1, 0}, ChromatographicPeak{2, 1}, by); !errors.As(err, &width) {
			t.Errorf("width %q: error %v", by, err)
		}
	}
}

func TestStaleness(t *testing.T) {
	limits := H3Limits{Age: 24, Change: 0.2}
	f, before := Factor{K: 6.5}, Factor{K: 6.2}
	if old, changed := limits.Stale(f, 30, &before); !old || !changed {
		t.Errorf("30 h and 0.3 beyond %+v: %v %v", limits, old, changed)
	}
	if old, changed := limits.Stale(f, 20, nil); old || changed {
		t.Errorf("20 h and nothing before: %v %v", old, changed)
	}
	if old, changed := (H3Limits{}).Stale(f, 1e6, &before); old || changed {
		t.Errorf("no limits: %v %v", old, changed)
	}
}

func ExampleDetermineH3() {
	f, err := DetermineH3([]Pulse{
		{Intensity: 1, Ratio: 318.32}, {Intensity: 3, Ratio: 331.12}, {Intensity: 5, Ratio: 344.22}, {Intensity: 8, Ratio: 363.42},
	})
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("K = %.3f, u = %.3f, ν = %.0f\n", f.K, f.U, f.DegreesOfFreedom)
	// Output: K = 6.450, u = 0.020, ν = 2
}
