package calib

import (
	"errors"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"deltamoor/calib/uncertain"
)

func correction(id string, u float64, perReading []float64) Correction {
	return Correction{Name: id, PerReading: perReading, Input: uncertain.Number{Terms: []uncertain.Term{
		{Source: uncertain.Source{ID: "correction:" + id, Kind: uncertain.KindCorrection, U: u}, Sensitivity: 1},
	}}}
}

// An input that shifts all raw deltas alike, or multiplies them, is taken out
// by the line; one that acts on samples only is not.
// A blank known independently and the model's blank would take it out twice.
func TestIndependentBlankBesideSizeBlankIsRefused(t *testing.T) {
	s, _ := usualTruth.session(rand.New(rand.NewPCG(3, 3)))
	s.Corrections = []Correction{{Name: "size of the blank", Input: uncertain.Number{Value: 0.1}, PerReading: make([]float64, len(s.Readings)), Blank: true}}
	if _, err := Fit(s, Model{}, Policy{}); err != nil {
		t.Errorf("without the model's blank: %v", err)
	}
	_, err := Fit(s, Model{Size: SizeBlank}, Policy{})
	var refused *UnsupportedTermError
	if !errors.As(err, &refused) || refused.Place != "model.size" {
		t.Errorf("with it: %v, want *UnsupportedTermError at model.size", err)
	}
	s.Corrections[0].Blank = false // an H3 factor, say
	if _, err := Fit(s, Model{Size: SizeBlank}, Policy{}); errors.As(err, &refused) {
		t.Errorf("another correction: %v", err)
	}
}

func TestCommonInputsCancelThroughTheLine(t *testing.T) {
	s := randomSession(201, false)
	want := mustFit(t, s, Model{}, Policy{})
	n := len(s.Readings)
	shift, factor, samples := make([]float64, n), make([]float64, n), make([]float64, n)
	for i, rd := range s.Readings {
		shift[i], factor[i] = 1, rd.Raw
		if rd.Role == Sample || rd.Role == Control {
			samples[i] = 1
		}
	}
	s.Corrections = []Correction{correction("shift", 5, shift)}
	got := mustFit(t, s, Model{}, Policy{})
	for i, x := range want.Subjects {
		near(t, "u with a common shift", got.Subjects[i].StandardUncertainty, x.StandardUncertainty, 1e-7)
		near(t, "value", got.Subjects[i].Value, x.Value, 0) // never in the weights
	}
	if got.parameter(t, "intercept").StandardUncertainty < 4.9 {
		t.Errorf("u(intercept) %v, want the shift's 5 in it", got.parameter(t, "intercept").StandardUncertainty)
	}
	s.Corrections = []Correction{correction("samples", 0.2, samples)}
	got = mustFit(t, s, Model{}, Policy{})
	slope := got.parameter(t, "slope").Value
	for i, x := range want.Subjects {
		near(t, "u with a shift of samples", got.Subjects[i].StandardUncertainty, math.Hypot(x.StandardUncertainty, 0.2/slope), 1e-9)
	}
	s.Corrections = []Correction{correction("shift", 5, shift), correction("factor", 0.01, factor), correction("samples", 0.2, samples)}
	got = mustFit(t, s, Model{}, Policy{})
	for i, x := range got.Subjects {
		near(t, "u of the number", got.Number(i).StandardUncertainty(), x.StandardUncertainty, 1e-10)
		var sum float64
		for _, c := range x.Sources {
			sum += c.VarianceShare
		}
		near(t, "shares", sum, 1, 1e-12)
	}
}

// The exact derivative by a correction's input agrees with refits of the moved
// readings to second order, with memory too.
func TestCorrectionDerivativesAgreeWithRefits(t *testing.T) {
	for _, m := range []Model{{}, {Drift: DriftLinear, Size: SizeLinear}, {Memory: MemoryCarryover}, {Size: SizeBlank}, {Drift: DriftBracketed}} {
		s := randomSession(211, false)
		r := rand.New(rand.NewPCG(5, 5))
		per := make([]float64, len(s.Readings))
		for i := range per {
			per[i] = r.NormFloat64()
		}
		s.Corrections = []Correction{correction("K", 0.1, per)}
		base := mustFit(t, s, m, Policy{})
		left := func(h float64) float64 {
			moved := s
			moved.Readings = slices.Clone(s.Readings)
			for i := range moved.Readings {
				moved.Readings[i].Raw += h * per[i]
			}
			f := mustFit(t, moved, m, Policy{})
			worst := 0.0
			for i, p := range f.Parameters {
				worst = math.Max(worst, math.Abs(p.Value-base.Parameters[i].Value-h*base.CorrectionDerivatives[i][0])/p.StandardUncertainty)
			}
			return worst
		}
		if a, b := left(0.02), left(0.01); a > 1e-8 && !(b < 0.3*a) {
			t.Errorf("%s: halving the shift leaves %.3g of %.3g, want a quarter", m.label(), b, a)
		}
	}
}

// A left-out anchor whose value rests on the same factor as the readings: what
// both share cancels from the difference.
func TestLeftOutAnchorSharesSourcesWithCorrections(t *testing.T) {
	s := randomSession(221, false)
	n := len(s.Readings)
	per := make([]float64, n)
	for i, rd := range s.Readings {
		if rd.Subject == "A1" {
			per[i] = 1
		}
	}
	s.Corrections = []Correction{correction("K", 1, per)}
	apart := mustFit(t, s, Model{}, Policy{})
	slope := apart.parameter(t, "slope").Value
	term := s.Corrections[0].Input.Terms[0]
	term.Sensitivity = 1 / slope
	a := &s.Anchors[slices.IndexFunc(s.Anchors, func(a AssignedValue) bool { return a.Material == "A1" })]
	a.Value.Terms = append(slices.Clone(a.Value.Terms), term)
	shared := mustFit(t, s, Model{}, Policy{})
	at := slices.IndexFunc(shared.Anchors, func(x AnchorResult) bool { return x.Material == "A1" })
	if u := apart.Anchors[at].LeftOut.StandardUncertainty; u < 0.9 {
		t.Errorf("u of the difference %v, want the factor's 1 ‰ in it", u)
	}
	if u := shared.Anchors[at].LeftOut.StandardUncertainty; u > 0.2 {
		t.Errorf("u of the difference %v although the factor is shared", u)
	}
}

func TestCorrectionsAreChecked(t *testing.T) {
	s := plain()
	s.Corrections = []Correction{correction("K", 0.1, make([]float64, 2))}
	var refused *CorrectionError
	if _, err := Fit(s, Model{}, Policy{}); !errors.As(err, &refused) || refused.Place != "corrections[0].per_reading" {
		t.Errorf("error %v, want a CorrectionError", err)
	}
	s.Corrections[0].PerReading = make([]float64, len(s.Readings))
	s.Corrections[0].PerReading[1] = math.NaN()
	var nan *NotFiniteError
	if _, err := Fit(s, Model{}, Policy{}); !errors.As(err, &nan) {
		t.Errorf("error %v, want a NotFiniteError", err)
	}
}
