package calib

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/calib/uncertain"
)

// named says that an error, or each of those joined in it, is a refusal of the
// engine with what was found and what was expected.
func named(err error) bool {
	if list, ok := err.(interface{ Unwrap() []error }); ok {
		for _, e := range list.Unwrap() {
			if !named(e) {
				return false
			}
		}
		return len(list.Unwrap()) > 0
	}
	var r interface{ Refused() Refusal }
	return errors.As(err, &r) && r.Refused().Found != "" && r.Refused().Expected != ""
}

// insane lists what no answer may have: numbers that are not finite where
// something was computed, negative uncertainties, shares that do not sum to 1.
func insane(r *Result) []string {
	var bad []string
	goldenNumbers(r, func(name string, v float64) {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			known := math.IsInf(v, 1) && (strings.HasPrefix(name, "ν ") || strings.HasSuffix(name, "sample 3") || strings.HasSuffix(name, "control 3")) // ν of what is known
			if !known {
				bad = append(bad, fmt.Sprintf("%s is %v", name, v))
			}
		}
	})
	for _, p := range r.Parameters {
		if p.StandardUncertainty < 0 {
			bad = append(bad, "u "+p.Name+" is negative")
		}
	}
	for _, s := range r.Subjects {
		if s.StandardUncertainty < 0 || s.Expanded.U < 0 {
			bad = append(bad, "u of "+s.Subject+" is negative")
		}
		sum := 0.0
		for _, c := range s.Sources {
			sum += c.VarianceShare
		}
		if s.StandardUncertainty > 0 && math.Abs(sum-1) > 1e-6 {
			bad = append(bad, fmt.Sprintf("shares of %s sum to %v", s.Subject, sum))
		}
	}
	return bad
}

// scaled is the session in another unit: every delta and u times k.
func scaled(s Session, k float64) Session {
	out := s
	out.Anchors, out.Readings = slices.Clone(s.Anchors), slices.Clone(s.Readings)
	for i := range out.Anchors {
		a := &out.Anchors[i]
		a.Value.Value *= k
		a.Value.Terms = slices.Clone(a.Value.Terms)
		for j := range a.Value.Terms {
			a.Value.Terms[j].U *= k
		}
	}
	for i := range out.Readings {
		rd := &out.Readings[i]
		rd.Raw *= k
		if rd.StandardUncertainty != nil {
			u := *rd.StandardUncertainty * k
			rd.StandardUncertainty = &u
		}
	}
	return out
}

// From a quark to a galaxy: the same session in units from 1e-300 to 1e300 has
// the same answer in those units, or is refused by name.
func TestExtremeUnitsAreAnsweredRightOrRefused(t *testing.T) {
	for _, m := range models {
		if m.Memory == MemoryCarryover {
			continue // its condition on the first raw delta is no unit
		}
		w := usualTruth
		w.kind = m.Size
		s, _ := w.session(rand.New(rand.NewPCG(4, 4)))
		base := mustFit(t, s, m, Policy{})
		answered := 0
		for _, e := range []int{-300, -200, -160, -140, -100, -40, -25, -9, 9, 25, 40, 100, 160, 300} {
			k := math.Pow(10, float64(e))
			r, err := Fit(scaled(s, k), m, Policy{})
			if err != nil {
				if !named(err) {
					t.Errorf("%s × 1e%d: unnamed error %v", m.label(), e, err)
				}
				continue
			}
			answered++
			if bad := insane(r); len(bad) > 0 {
				t.Errorf("%s × 1e%d: %v", m.label(), e, bad)
			}
			for i, x := range r.Subjects {
				want := base.Subjects[i]
				if !(math.Abs(x.Value-k*want.Value) <= 1e-7*k*math.Abs(want.Value)) || !(math.Abs(x.StandardUncertainty-k*want.StandardUncertainty) <= 1e-6*k*want.StandardUncertainty) {
					t.Errorf("%s × 1e%d: %s is %v ± %v, want %v ± %v", m.label(), e, x.Subject, x.Value, x.StandardUncertainty, k*want.Value, k*want.StandardUncertainty)
				}
			}
		}
		if answered < 4 {
			t.Errorf("%s: only %d of 14 units are answered", m.label(), answered)
		}
	}
}

// Every number of a session, one after the other, replaced by what no
// instrument writes: a right refusal or a sane answer, and never a panic.
func TestOneMadNumberIsRefusedOrHarmless(t *testing.T) {
	mad := []float64{math.NaN(), math.Inf(1), math.Inf(-1), 1e300, -1e300, 1e-300, math.MaxFloat64, math.SmallestNonzeroFloat64, 0, math.Copysign(0, -1)}
	for _, m := range models {
		s, _ := usualTruth.session(rand.New(rand.NewPCG(6, 6)))
		one := 5.0
		s.Readings[2].Previous = &one
		fields := map[string]func(*Session) *float64{
			"raw":      func(s *Session) *float64 { return &s.Readings[4].Raw },
			"sample":   func(s *Session) *float64 { return &s.Readings[len(s.Readings)-1].Raw },
			"u":        func(s *Session) *float64 { return s.Readings[4].StandardUncertainty },
			"time":     func(s *Session) *float64 { return s.Readings[4].Time },
			"size":     func(s *Session) *float64 { return s.Readings[4].Size },
			"previous": func(s *Session) *float64 { return s.Readings[2].Previous },
			"value":    func(s *Session) *float64 { return &s.Anchors[1].Value.Value },
			"anchor u": func(s *Session) *float64 { return &s.Anchors[1].Value.Terms[0].U },
		}
		for field, of := range fields {
			for _, v := range mad {
				c := deepCopy(s)
				*of(&c) = v
				r, err := Fit(c, m, Policy{})
				var not *NotFiniteError
				switch {
				case (math.IsNaN(v) || math.IsInf(v, 0)) && !errors.As(err, &not):
					t.Errorf("%s: %s = %v gives %v, want *NotFiniteError", m.label(), field, v, err)
				case err != nil && !named(err):
					t.Errorf("%s: %s = %v: unnamed error %v", m.label(), field, v, err)
				case err == nil:
					if bad := insane(r); len(bad) > 0 {
						t.Errorf("%s: %s = %v: %v", m.label(), field, v, bad[:min(3, len(bad))])
					}
				}
			}
		}
	}
}

func deepCopy(s Session) Session {
	out := s
	out.Anchors, out.Readings = slices.Clone(s.Anchors), slices.Clone(s.Readings)
	for i := range out.Anchors {
		out.Anchors[i].Value.Terms = slices.Clone(out.Anchors[i].Value.Terms)
	}
	for i := range out.Readings {
		rd := &out.Readings[i]
		for _, p := range []**float64{&rd.StandardUncertainty, &rd.Time, &rd.Size, &rd.Previous} {
			if *p != nil {
				v := **p
				*p = &v
			}
		}
	}
	return out
}

// What is determined only by a hair is refused by name, and what is determined
// well enough is answered.
func TestNearlyUndeterminedTermsAreRefused(t *testing.T) {
	for _, c := range []struct {
		name   string
		change func(*Session, *Model)
		want   error // nil: must be answered
	}{
		{"anchors 1e-12 apart, u 0.05", func(s *Session, _ *Model) {
			for i := range s.Anchors {
				s.Anchors[i].Value.Value = -20 + 1e-12*float64(i)
			}
		}, &WeakSlopeError{}},
		{"anchors equal to the last bit", func(s *Session, _ *Model) {
			for i := range s.Anchors {
				s.Anchors[i].Value.Value = -20
			}
		}, &EqualAnchorsError{}},
		{"times that differ in the last bit", func(s *Session, m *Model) {
			m.Drift = DriftLinear
			for i := range s.Readings {
				at := 3 + float64(i%2)*4e-16
				s.Readings[i].Time = &at
			}
		}, nil},
		{"sizes that differ in the last digits", func(s *Session, m *Model) {
			m.Size = SizeLinear
			for i := range s.Readings {
				size := 5 + float64(i%2)*1e-14
				s.Readings[i].Size = &size
			}
		}, nil},
		{"size follows the material: no contrast within one", func(s *Session, m *Model) {
			m.Size = SizeLinear
			for i := range s.Readings {
				size := 2 + float64(s.Readings[i].Subject[0]-'A')
				s.Readings[i].Size = &size
			}
		}, &NotEstimableError{}},
		{"size follows the time but for 1e-13", func(s *Session, m *Model) {
			m.Size, m.Drift = SizeLinear, DriftLinear
			for i := range s.Readings {
				size := 2 + *s.Readings[i].Time*(1+1e-13*float64(i%3))
				s.Readings[i].Size = &size
			}
		}, &NotEstimableError{}},
		{"size 0 under a logarithm", func(s *Session, m *Model) {
			m.Size = SizeLog
			zero := 0.0
			s.Readings[0].Size = &zero
		}, &TermInputError{}},
	} {
		s, m := plain(), Model{}
		c.change(&s, &m)
		r, err := Fit(s, m, Policy{})
		switch {
		case c.want == nil && err != nil && !named(err):
			t.Errorf("%s: %v", c.name, err)
		case c.want == nil && err == nil:
			if bad := insane(r); len(bad) > 0 {
				t.Errorf("%s: %v", c.name, bad)
			}
		case c.want != nil && (err == nil || fmt.Sprintf("%T", err) != fmt.Sprintf("%T", c.want)):
			t.Errorf("%s: got %T %v, want %T", c.name, err, err, c.want)
		}
	}
}

// Exact two-point normalization near the ends of what a delta can be, by the
// ratio relation R_s/R_std with R = (1 + δ/1000): raw = intercept + slope·true.
func TestDeltasNearTheirLimitsAreInvertedExactly(t *testing.T) {
	for _, gas := range []float64{-999, -500, 0, 3000, 50_000} {
		raw := func(true_ float64) float64 { // (1+δ_true) = (1+δ_raw)(1+δ_gas)
			return ((1+true_/1000)/(1+gas/1000) - 1) * 1000
		}
		for _, pair := range [][2]float64{{-999.9, -900}, {-427.5, 0}, {0, 12_000}, {10_000, 250_000}, {-999.999, 1e6}} {
			s := Session{Anchors: []AssignedValue{assigned("A", pair[0], 0), assigned("B", pair[1], 0)}}
			s.read("A", Anchor, raw(pair[0]), 0)
			s.read("B", Anchor, raw(pair[1]), 0)
			for i, x := range []float64{-999.99, -950, 0, 10_500, 100_000} {
				s.read(fmt.Sprint("S", i), Sample, raw(x), 0)
			}
			r, err := Fit(s, Model{}, Policy{})
			if err != nil {
				t.Errorf("gas %v, anchors %v: %v", gas, pair, err)
				continue
			}
			span := math.Max(math.Abs(pair[0]), math.Abs(pair[1])) + 1000
			for i, x := range []float64{-999.99, -950, 0, 10_500, 100_000} {
				// Extrapolation multiplies the rounding of the raw deltas.
				far := math.Max(1, math.Abs(x-pair[0])/math.Abs(pair[1]-pair[0]))
				near(t, fmt.Sprintf("gas %v, anchors %v, sample %v", gas, pair, x), r.Subjects[i].Value, x, 1e-12*far*(span+math.Abs(x))*math.Max(1, 1/(1+gas/1000)))
			}
		}
	}
}

// Exact anchors and readings beside uncertain ones: the exact ones are met.
func TestExactAndUncertainTogether(t *testing.T) {
	s := Session{Anchors: []AssignedValue{assigned("A", -30, 0), assigned("B", 0, 0.1), assigned("C", 20, 0)}}
	for range 3 {
		s.read("A", Anchor, -29.9, 0.05)
		s.read("B", Anchor, 0.3, 0.05)
		s.read("C", Anchor, 20.2, 0.05)
	}
	s.read("S", Sample, -10, 0.05)
	r := mustFit(t, s, Model{}, Policy{})
	for _, a := range r.Anchors {
		if a.Material != "B" && a.Adjusted != a.Value {
			t.Errorf("exact anchor %s was moved to %v", a.Material, a.Adjusted)
		}
		if a.Material == "B" && a.Adjusted == a.Value {
			t.Error("the uncertain anchor did not give way")
		}
	}
	// One exact reading of an uncertain anchor: the line goes through it at the
	// anchor's adjusted value.
	s.Readings[1].StandardUncertainty = new(float64)
	r = mustFit(t, s, Model{}, Policy{})
	if e := *r.Readings[1].Residual; math.Abs(e) > 1e-12 {
		t.Errorf("the line misses an exact reading by %v", e)
	}
	// An exact reading of an exact anchor would be a condition, not a reading: refused.
	s.Readings[0].StandardUncertainty = new(float64)
	_, err := Fit(s, Model{}, Policy{})
	var singular *SingularError
	if !errors.As(err, &singular) {
		t.Errorf("exact reading of an exact anchor: %v, want *SingularError", err)
	}
}

// A singular and a full covariance of the anchors are used as they are: values
// that are perfectly correlated move together.
func TestPerfectlyCorrelatedAnchors(t *testing.T) {
	values := []float64{-30, -10, 15}
	covariance := make([][]float64, 3)
	for i := range covariance {
		covariance[i] = []float64{0.04, 0.04, 0.04}
	}
	numbers, err := uncertain.FromCovariance("anchor:", uncertain.KindAnchor, []string{"A", "B", "C"}, values, covariance)
	if err != nil {
		t.Fatal(err)
	}
	var s Session
	for i, n := range numbers {
		s.Anchors = append(s.Anchors, AssignedValue{Material: string(rune('A' + i)), Value: n})
		s.read(string(rune('A'+i)), Anchor, 0.4+0.98*values[i]+0.01*float64(i%2), 0.02)
	}
	s.read("S", Sample, 0.4+0.98*2, 0.02)
	r := mustFit(t, s, Model{}, Policy{})
	// A common shift of all anchors shifts every sample: u can never be below 0.2.
	if u := r.Subjects[0].StandardUncertainty; !(u > 0.2 && u < 0.21) {
		t.Errorf("u = %v, want a little more than the common 0.2", u)
	}
	bad := [][]float64{{1, 2, 0}, {2, 1, 0}, {0, 0, 1}}
	if _, err := uncertain.FromCovariance("anchor:", uncertain.KindAnchor, []string{"A", "B", "C"}, values, bad); err == nil {
		t.Error("a covariance with a negative variance was taken")
	}
}

// The largest sessions that are taken are answered, and in time: 100,000
// readings, and 1,000 anchors.
func TestLargestSessions(t *testing.T) {
	if testing.Short() {
		t.Skip("takes seconds")
	}
	r := rand.New(rand.NewPCG(9, 9))
	build := func(anchors, readings int) Session {
		var s Session
		for i := range anchors {
			s.Anchors = append(s.Anchors, assigned(fmt.Sprintf("A%04d", i), -40+80*float64(i)/float64(anchors-1), 0.05))
		}
		for k := range readings {
			i := k % anchors
			s.Readings = append(s.Readings, Reading{ID: fmt.Sprintf("S/%d", k+1), Subject: s.Anchors[i].Material, Role: Anchor,
				Raw: 0.5 + 0.97*s.Anchors[i].Value.Value + 0.05*r.NormFloat64(), StandardUncertainty: pointer(0.05), Time: pointer(float64(k) / 100)})
		}
		s.Readings = append(s.Readings, Reading{ID: "S/0", Subject: "P", Role: Sample, Raw: 0.5 + 0.97*3, StandardUncertainty: pointer(0.05), Time: pointer(1)})
		return s
	}
	for _, c := range []struct{ anchors, readings int }{{5, MaxReadings - 1}, {1_000, 3_000}} {
		start := time.Now()
		result, err := Fit(build(c.anchors, c.readings), Model{Drift: DriftLinear}, Policy{})
		if err != nil {
			t.Errorf("%d anchors, %d readings: %v", c.anchors, c.readings, err)
			continue
		}
		t.Logf("%d anchors, %d readings: %v", c.anchors, c.readings, time.Since(start))
		near(t, "sample", result.Subjects[0].Value, 3, 0.3)
		if bad := insane(result); len(bad) > 0 {
			t.Errorf("%v", bad[:min(3, len(bad))])
		}
	}
	var many *TooManyError
	if _, err := Fit(build(2, MaxReadings), Model{}, Policy{}); !errors.As(err, &many) {
		t.Errorf("one reading too many: %v", err)
	}
}
