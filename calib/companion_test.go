package calib

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"testing"

	"pgregory.net/rapid"
)

// A robustCase is one file of testdata/robust: a published regression and what
// independent programs make of it.
type robustCase struct {
	Source, Data string
	// Value is the abscissa, read as an exact assigned value; Time and Size, where
	// there are any, the second and third predictor.
	Value, Raw, Time, Size []float64
	Fits                   []struct {
		By, Call                           string
		K, Intercept, Slope, Drift, SizeBy float64
		Scale                              float64
		Weights                            []float64
		Tolerance                          float64
	}
}

// The estimator with exact abscissae and equal weights is Huber's regression
// with proposal 2, as other programs have it.
func TestCompanionMatchesRobustRegressionElsewhere(t *testing.T) {
	files, err := filepath.Glob("testdata/robust/*.json")
	if err != nil || len(files) < 2 {
		t.Fatalf("%d cases: %v", len(files), err)
	}
	for _, name := range files {
		data, err := os.ReadFile(name)
		if err != nil {
			t.Fatal(err)
		}
		var c robustCase
		if err := json.Unmarshal(data, &c); err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		var s Session
		m := Model{Weights: WeightsEqual}
		seen := map[float64]bool{}
		for i, x := range c.Value {
			code := fmt.Sprint("V", x)
			if !seen[x] {
				seen[x] = true
				s.Anchors = append(s.Anchors, assigned(code, x, 0))
			}
			rd := s.read(code, Anchor, c.Raw[i], 0)
			if c.Time != nil {
				m.Drift = DriftLinear
				rd.at(c.Time[i])
			}
			if c.Size != nil {
				m.Size = SizeLinear
				rd.sized(c.Size[i])
			}
		}
		r := mustFit(t, s, m, Policy{})
		for _, want := range c.Fits {
			t.Run(filepath.Base(name)+" "+want.By, func(t *testing.T) {
				got, err := r.companion(want.K)
				if err != nil {
					t.Fatal(err)
				}
				value := func(name string) float64 {
					for _, p := range got.Parameters {
						if p.Name == name {
							return p.Value
						}
					}
					return 0
				}
				// Theirs are at time and size zero, ours at the means.
				intercept := value("intercept")
				if c.Time != nil {
					intercept -= value("drift.linear") * *r.ReferenceTime
				}
				if c.Size != nil {
					intercept -= value("size") * *r.ReferenceSize
				}
				within := func(what string, got, want, tolerance float64) {
					near(t, what, got, want, tolerance*math.Max(1, math.Abs(want)))
				}
				within("intercept", intercept, want.Intercept, want.Tolerance)
				within("slope", value("slope"), want.Slope, want.Tolerance)
				within("drift", value("drift.linear"), want.Drift, want.Tolerance)
				within("size", value("size"), want.SizeBy, want.Tolerance)
				sigma := *got.Scale * math.Sqrt(r.Variances[0].Value)
				within("scale", sigma, want.Scale, want.Tolerance)
				for i, w := range want.Weights {
					within(fmt.Sprintf("weight %d", i), got.Readings[i].Weight, w, want.Tolerance)
				}
			})
		}
	}
}

// A monitor's level beside two exact anchors is a location, and the companion's
// is H15 of the Analytical Methods Committee (1989, doi:10.1039/AN9891401693).
// Data and converged result of "Huber H15 on seven results with one outlier",
// the example of AMC Technical Brief 6 (2001) as recalled; the digits are those
// of the iteration written out with the exact factor.
func TestCompanionOfALocationIsH15(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -10, 0), assigned("B", 10, 0)}
	s.read("A", Anchor, -10, 0)
	s.read("B", Anchor, 10, 0)
	for _, x := range []float64{4.5, 4.9, 5.6, 4.2, 6.2, 5.2, 9.9} {
		s.read("M", Monitor, x, 0)
	}
	for _, weights := range []Weights{WeightsEqual, WeightsReplicate} {
		r := mustFit(t, s, Model{Weights: weights}, Policy{})
		c, err := r.Companion()
		if err != nil {
			t.Fatal(err)
		}
		near(t, string(weights)+" level", c.Parameters[2].Value, 5.386138793950735, 1e-9)
		near(t, string(weights)+" scale", *c.Scale*math.Sqrt(r.Variances[0].Value), 1.1445551758029546, 1e-9)
		if !slices.Equal(c.Suggested, []int{8}) {
			t.Errorf("%s suggests %v, want the reading 9.9", weights, c.Suggested)
		}
	}
}

// huberObjective is what the companion says it minimises, written from its
// definition, in parameters intercept, slope, drift and the anchors' true values.
func huberObjective(s Session, k float64, x []float64) float64 {
	var sum, mean, n float64
	for _, rd := range s.Readings {
		if rd.Role == Anchor {
			mean += *rd.Time
			n++
		}
	}
	mean /= n
	at := map[string]int{}
	for i, a := range s.Anchors {
		at[a.Material] = i
		d := (x[3+i] - a.Value.Value) / a.Value.Terms[0].U
		sum += d * d
	}
	for _, rd := range s.Readings {
		if rd.Role != Anchor {
			continue
		}
		e := math.Abs(rd.Raw-x[0]-x[1]*x[3+at[rd.Subject]]-x[2]*(*rd.Time-mean)) / *rd.StandardUncertainty
		if e <= k {
			sum += e * e
		} else {
			sum += 2*k*e - k*k
		}
	}
	return sum
}

// With uncertain anchors and drift the companion is where Huber's function,
// written out independently, has no slope in any direction.
func TestCompanionMinimisesHubersFunctionWithUncertainAnchors(t *testing.T) {
	w := usualTruth
	w.monitor, w.size = false, 0
	for seed := range uint64(20) {
		s, _ := w.session(rand.New(rand.NewPCG(seed, 3)))
		s.Readings[3].Raw += 0.7
		s.Readings[9].Raw -= 0.4
		r := mustFit(t, s, Model{Drift: DriftLinear}, Policy{})
		b := r.calibrated.private().newReweighting(huberConstant)
		solved, err := b.run()
		if err != nil {
			t.Fatal(err)
		}
		c, err := r.Companion()
		if err != nil {
			t.Fatal(err)
		}
		x := []float64{c.Parameters[0].Value, c.Parameters[1].Value, c.Parameters[2].Value}
		for i := range s.Anchors {
			x = append(x, solved.s.Adjusted[i]+solved.y0)
		}
		least := huberObjective(s, huberConstant, x)
		for i := range x {
			// Far smaller than the uncertainty of anything, far larger than rounding.
			const step = 1e-4
			for _, d := range []float64{-step, step} {
				moved := slices.Clone(x)
				moved[i] += d
				if f := huberObjective(s, huberConstant, moved); f < least-1e-9 {
					t.Errorf("seed %d: moving x%d by %g lowers it by %g", seed, i, d, least-f)
				}
			}
		}
		if c.Scale != nil {
			t.Error("declared uncertainties have no scale to estimate")
		}
		if !slices.Contains(c.Suggested, 3) {
			t.Errorf("seed %d: the reading that is off by 14 u is not suggested: %v", seed, c.Suggested)
		}
	}
}

// Where no reading is far from the line, the companion of declared
// uncertainties is the official fit, whatever the terms.
func TestCompanionIsTheOfficialFitWhereNothingIsOff(t *testing.T) {
	for _, m := range models {
		w := usualTruth
		w.kind = m.Size
		if m.Drift == DriftNone || m.Drift == "" {
			w.drift = 0
		}
		if m.Size == SizeNone || m.Size == "" {
			w.size = 0
		}
		if m.Memory == MemoryCarryover {
			w.memory = 0.04
		}
		// Noise within 1 u: nothing reaches k.
		w.noise = 0
		s, _ := w.session(rand.New(rand.NewPCG(1, 2)))
		r := rand.New(rand.NewPCG(5, 8))
		for i := range s.Readings {
			u := 0.05
			s.Readings[i].StandardUncertainty = &u
			s.Readings[i].Raw += 0.05 * (2*r.Float64() - 1)
		}
		result, err := Fit(s, m, Policy{})
		if err != nil {
			t.Fatalf("%s: %v", m.label(), err)
		}
		c, err := result.Companion()
		if err != nil {
			t.Fatalf("%s: %v", m.label(), err)
		}
		for i, p := range c.Parameters {
			if m.estimated() {
				// The scale differs, and with it how far anchors' values give way; nothing is off all the same.
				if p.InUnits == nil || math.Abs(*p.InUnits) > 1 {
					t.Errorf("%s: %s differs by %v", m.label(), p.Name, p.Difference)
				}
				continue
			}
			near(t, m.label()+" "+p.Name, p.Value, result.Parameters[i].Value, 1e-9)
		}
		if len(c.Suggested) != 0 && !m.estimated() {
			t.Errorf("%s suggests %v", m.label(), c.Suggested)
		}
	}
}

// One reading that is far off hardly moves the companion, in any weight mode,
// with preparations and with a full covariance of the readings.
func TestCompanionResistsOneBadReading(t *testing.T) {
	for _, weights := range []Weights{WeightsDeclared, WeightsEqual, WeightsReplicate, WeightsSize} {
		for _, kind := range []string{"plain", "preparations", "covariance"} {
			if kind == "covariance" && weights != WeightsDeclared {
				continue
			}
			s, _ := usualTruth.session(rand.New(rand.NewPCG(7, 7)))
			if kind == "preparations" {
				for i := range s.Readings {
					rd := &s.Readings[i]
					rd.of(fmt.Sprint(rd.Subject, "/", i/(2*(len(s.Anchors)+1)+3)))
				}
			}
			if kind == "covariance" {
				for i := range s.Readings {
					row := make([]float64, len(s.Readings))
					for j := range row {
						row[j] = 0.001
					}
					row[i] = 0.0025
					s.ReadingCovariance = append(s.ReadingCovariance, row)
				}
			}
			m := Model{Drift: DriftLinear, Size: SizeLinear, Weights: weights}
			clean, err := mustFit(t, s, m, Policy{}).Companion()
			if err != nil {
				t.Fatalf("%s %s: %v", weights, kind, err)
			}
			s.Readings[0].Raw += 3
			official := mustFit(t, s, m, Policy{})
			bad, err := official.Companion()
			if err != nil {
				t.Fatalf("%s %s: %v", weights, kind, err)
			}
			if !slices.Contains(bad.Suggested, 0) {
				t.Errorf("%s %s: suggests %v", weights, kind, bad.Suggested)
			}
			for i, x := range bad.Subjects {
				moved, officially := math.Abs(x.Value-clean.Subjects[i].Value), math.Abs(x.Difference)
				if moved > 0.06 {
					t.Errorf("%s %s: %s moved by %.3f ‰ (the official value is %.3f ‰ from the companion's)", weights, kind, x.Subject, moved, officially)
				}
			}
		}
	}
}

func TestCompanionChangesNothingOfTheResult(t *testing.T) {
	s, _ := usualTruth.session(rand.New(rand.NewPCG(2, 2)))
	s.Readings[0].Raw += 2
	r := mustFit(t, s, Model{Drift: DriftLinear, Weights: WeightsEqual}, Policy{})
	before := numbersOf(r)
	if _, err := r.Companion(); err != nil {
		t.Fatal(err)
	}
	for name, v := range numbersOf(r) {
		if math.Float64bits(v) != math.Float64bits(before[name]) {
			t.Errorf("%s became %v", name, v)
		}
	}
}

func TestCompanionDoesNotDependOnTheOrderOfReadings(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		seed := rapid.Uint64().Draw(t, "seed")
		r := rand.New(rand.NewPCG(seed, 1))
		s, _ := usualTruth.session(r)
		s.Readings[r.IntN(len(s.Readings))].Raw += 1
		m := Model{Drift: DriftLinear, Weights: rapid.SampledFrom([]Weights{WeightsDeclared, WeightsEqual, WeightsReplicate}).Draw(t, "weights")}
		fit := func(s Session) *Companion {
			x, err := Fit(s, m, Policy{})
			if err != nil {
				t.Fatal(err)
			}
			c, err := x.Companion()
			if err != nil {
				t.Fatal(err)
			}
			return c
		}
		a := fit(s)
		shuffled := s
		shuffled.Readings = slices.Clone(s.Readings)
		r.Shuffle(len(s.Readings), func(i, j int) {
			shuffled.Readings[i], shuffled.Readings[j] = shuffled.Readings[j], shuffled.Readings[i]
		})
		b := fit(shuffled)
		for i := range a.Parameters {
			if a.Parameters[i].Value != b.Parameters[i].Value {
				t.Fatalf("%s: %v and %v", a.Parameters[i].Name, a.Parameters[i].Value, b.Parameters[i].Value)
			}
		}
	})
}

func TestCompanionRefusesMoreReadingsThanItCanWeigh(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -10, 0.1), assigned("B", 10, 0.1)}
	for i := range MaxDenseReadings + 2 {
		s.read([]string{"A", "B"}[i%2], Anchor, float64(i%2*20-10)+float64(i%7)/100, 0.1)
	}
	_, err := mustFit(t, s, Model{}, Policy{}).Companion()
	var many *TooManyError
	if !errors.As(err, &many) {
		t.Fatalf("got %v, want *TooManyError", err)
	}
}
