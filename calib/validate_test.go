package calib

import (
	"errors"
	"math"
	"reflect"
	"slices"
	"strings"
	"testing"

	"deltamoor/calib/uncertain"
)

// plain is a small session that fits; each refusal breaks one thing in it.
func plain() Session {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", -30, 0.05), assigned("B", 0, 0.05), assigned("C", 20, 0.05)}
	for i, code := range []string{"A", "B", "C", "A", "B", "C"} {
		s.read(code, Anchor, []float64{-30, 0, 20}[i%3]+0.01*float64(i), 0.05).at(float64(i)).sized(4 + float64(i))
	}
	s.read("P1", Sample, -10, 0.05).at(2.5).sized(5)
	return s
}

func TestRefusalsNameThePlace(t *testing.T) {
	nan, inf, negative := math.NaN(), math.Inf(1), -0.1
	zero := 0.0
	for _, c := range []struct {
		name   string
		change func(*Session, *Model, *Policy)
		want   error // of this type
		place  string
	}{
		{"raw NaN", func(s *Session, _ *Model, _ *Policy) { s.Readings[3].Raw = nan }, &NotFiniteError{}, "readings[3].raw"},
		{"raw infinite", func(s *Session, _ *Model, _ *Policy) { s.Readings[6].Raw = inf }, &NotFiniteError{}, "readings[6].raw"},
		{"u negative", func(s *Session, _ *Model, _ *Policy) { s.Readings[2].StandardUncertainty = &negative }, &NegativeUncertaintyError{}, "readings[2].u"},
		{"u NaN", func(s *Session, _ *Model, _ *Policy) { s.Readings[2].StandardUncertainty = &nan }, &NotFiniteError{}, "readings[2].u"},
		{"u missing", func(s *Session, _ *Model, _ *Policy) { s.Readings[6].StandardUncertainty = nil }, &MissingUncertaintyError{}, "readings[6].u"},
		{"time infinite", func(s *Session, _ *Model, _ *Policy) { s.Readings[0].Time = &inf }, &NotFiniteError{}, "readings[0].time"},
		{"anchor NaN", func(s *Session, _ *Model, _ *Policy) { s.Anchors[0].Value.Value = nan }, &NotFiniteError{}, "anchors[0].value"},
		{"anchor u negative", func(s *Session, _ *Model, _ *Policy) { s.Anchors[1].Value.Terms[0].U = -1 }, &NegativeUncertaintyError{}, "anchors[1].u"},
		{"anchor twice", func(s *Session, _ *Model, _ *Policy) { s.Anchors[1].Material = "A" }, &DuplicateError{}, "anchors[1].material"},
		{"anchor not read", func(s *Session, _ *Model, _ *Policy) { s.Anchors = append(s.Anchors, assigned("D", 5, 0)) }, &UnreadAnchorError{}, "anchors[3]"},
		{"reading without value", func(s *Session, _ *Model, _ *Policy) { s.Readings[4].Subject = "Z" }, &UnassignedAnchorError{}, "readings[4].material"},
		{"no code", func(s *Session, _ *Model, _ *Policy) { s.Readings[6].Subject = "" }, &UnassignedAnchorError{}, "readings[6].sample"},
		{"no anchors", func(s *Session, _ *Model, _ *Policy) { s.Anchors, s.Readings = nil, s.Readings[6:] }, &NoAnchorsError{}, "readings"},
		{"one anchor", func(s *Session, _ *Model, _ *Policy) {
			s.Anchors, s.Readings = s.Anchors[:1], []Reading{s.Readings[0], s.Readings[3], s.Readings[6]}
		}, &SingleAnchorError{}, "anchors"},
		{"equal anchors", func(s *Session, _ *Model, _ *Policy) {
			for i := range s.Anchors {
				s.Anchors[i].Value.Value = 3
			}
		}, &EqualAnchorsError{}, "anchors"},
		{"span", func(_ *Session, _ *Model, p *Policy) { p.MinimumSpan = 60 }, &AnchorSpanError{}, "anchors"},
		{"role", func(s *Session, _ *Model, _ *Policy) { s.Readings[1].Role = "standard" }, &UnknownWordError{}, "readings[1].role"},
		{"drift word", func(_ *Session, m *Model, _ *Policy) { m.Drift = "cubic" }, &UnknownWordError{}, "model.drift"},
		{"size word", func(_ *Session, m *Model, _ *Policy) { m.Size = "big" }, &UnknownWordError{}, "model.size"},
		{"memory word", func(_ *Session, m *Model, _ *Policy) { m.Memory = "long" }, &UnknownWordError{}, "model.memory"},
		{"weights word", func(_ *Session, m *Model, _ *Policy) { m.Weights = "robust" }, &UnknownWordError{}, "model.weights"},
		{"drift without time", func(s *Session, m *Model, _ *Policy) { m.Drift, s.Readings[2].Time = DriftLinear, nil }, &TermInputError{}, "readings[2].time"},
		{"drift, sample without time", func(s *Session, m *Model, _ *Policy) { m.Drift, s.Readings[6].Time = DriftLinear, nil }, &TermInputError{}, "readings[6].time"},
		{"drift with one time", func(s *Session, m *Model, _ *Policy) {
			m.Drift = DriftLinear
			for i := range s.Readings {
				s.Readings[i].Time = &zero
			}
		}, &TermInputError{}, "model.drift"},
		{"size missing", func(s *Session, m *Model, _ *Policy) { m.Size, s.Readings[6].Size = SizeLinear, nil }, &TermInputError{}, "readings[6].size"},
		{"size zero", func(s *Session, m *Model, _ *Policy) { m.Size, s.Readings[1].Size = SizeInverse, &zero }, &TermInputError{}, "readings[1].size"},
		{"size one", func(s *Session, m *Model, _ *Policy) {
			m.Size = SizeLinear
			for i := range s.Readings {
				s.Readings[i].Size = &inf
				s.Readings[i].sized(3)
			}
		}, &TermInputError{}, "model.size"},
		{"declared ν with estimated weights", func(_ *Session, m *Model, _ *Policy) { m.Weights, m.DeclaredDF = WeightsEqual, &[]float64{4}[0] }, &UnsupportedTermError{}, "model.declared_nu"},
		{"declared ν negative", func(_ *Session, m *Model, _ *Policy) { m.DeclaredDF = &negative }, &PolicyError{}, "model.declared_nu"},
		{"probability", func(_ *Session, _ *Model, p *Policy) { p.Probability = 1.5 }, &PolicyError{}, "probability"},
		{"coverage factor", func(_ *Session, _ *Model, p *Policy) { p.CoverageFactor = -2 }, &PolicyError{}, "policy.coverage_factor"},
		{"between session", func(_ *Session, _ *Model, p *Policy) { p.BetweenSession.StandardUncertainty = nan }, &PolicyError{}, "policy.between_session.u"},
		{"reading twice", func(s *Session, _ *Model, _ *Policy) { s.Readings[5].ID = s.Readings[0].ID }, &DuplicateError{}, "readings[5].id"},
		{"preparation of two", func(s *Session, _ *Model, _ *Policy) {
			s.Readings[0].Preparation, s.Readings[1].Preparation = "p", "p"
		}, &PreparationError{}, "readings[1].preparation"},
		{"too many", func(s *Session, _ *Model, _ *Policy) { s.Readings = make([]Reading, MaxReadings+1) }, &TooManyError{}, "readings"},
		{"covariance shape", func(s *Session, _ *Model, _ *Policy) { s.ReadingCovariance = [][]float64{{1}} }, &CovarianceError{}, "reading_covariance"},
		{"covariance asymmetric", func(s *Session, _ *Model, _ *Policy) {
			s.ReadingCovariance = identity(7, 0.01)
			s.ReadingCovariance[2][3] = 0.005
		}, &CovarianceError{}, "reading_covariance[2][3]"},
		{"covariance not positive", func(s *Session, _ *Model, _ *Policy) {
			s.ReadingCovariance = identity(7, 0.01)
			s.ReadingCovariance[2][3], s.ReadingCovariance[3][2] = 0.02, 0.02
		}, &CovarianceError{}, "reading_covariance"},
		{"covariance with estimated weights", func(s *Session, m *Model, _ *Policy) {
			s.ReadingCovariance = identity(7, 0.01)
			m.Weights = WeightsEqual
		}, &UnsupportedTermError{}, "model.weights"},
		{"cross shape", func(s *Session, _ *Model, _ *Policy) { s.CrossCovariance = [][]float64{{1}} }, &CovarianceError{}, "cross_covariance"},
		{"cross with exact anchor", func(s *Session, _ *Model, _ *Policy) {
			s.CrossCovariance = make([][]float64, 7)
			for i := range s.CrossCovariance {
				s.CrossCovariance[i] = make([]float64, 3)
			}
			s.CrossCovariance[0][0] = 0.001
			s.Anchors[0].Value.Terms = nil
		}, &CovarianceError{}, "cross_covariance"},
		{"group covariance", func(s *Session, _ *Model, _ *Policy) {
			s.Groups = []uncertain.Group{{ID: "g", Variances: []float64{1}}}
		}, &AssignedValueError{}, "groups[0]"},
		{"memory without order", func(s *Session, m *Model, _ *Policy) {
			m.Memory = MemoryCarryover
			for i := range s.Readings {
				s.Readings[i].ID, s.Readings[i].Time = "", nil
			}
		}, &OrderError{}, "readings["},
		{"fewer readings than parameters", func(s *Session, m *Model, _ *Policy) {
			s.Readings = []Reading{s.Readings[0], s.Readings[4], s.Readings[5]}
			m.Drift, m.Size = DriftQuadratic, SizeLinear
		}, &TooFewReadingsError{}, "readings"},
		{"blank with one anchor", func(s *Session, m *Model, _ *Policy) {
			s.Anchors, s.Readings = s.Anchors[:1], []Reading{s.Readings[0], s.Readings[3]}
			m.AllowSingleAnchor, m.Size = true, SizeBlank
		}, &UnsupportedTermError{}, "model.size"},
	} {
		t.Run(c.name, func(t *testing.T) {
			s, m, p := plain(), Model{}, Policy{}
			c.change(&s, &m, &p)
			_, err := Fit(s, m, p)
			if err == nil {
				t.Fatal("not refused")
			}
			target := reflect.New(reflect.TypeOf(c.want))
			if !errors.As(err, target.Interface()) {
				t.Fatalf("error %T %v, want a %T", err, err, c.want)
			}
			var refused interface{ Refused() Refusal }
			if !errors.As(target.Elem().Interface().(error), &refused) {
				t.Fatalf("%T does not say where", c.want)
			}
			r := refused.Refused()
			if r.Place != c.place && !(strings.HasSuffix(c.place, "[") && strings.HasPrefix(r.Place, c.place)) {
				t.Errorf("place %q, want %q (%v)", r.Place, c.place, err)
			}
			if r.Found == "" || r.Expected == "" {
				t.Errorf("%v does not say what was found and expected", err)
			}
		})
	}
}

func identity(n int, v float64) [][]float64 {
	m := make([][]float64, n)
	for i := range m {
		m[i] = make([]float64, n)
		m[i][i] = v
	}
	return m
}

func TestSeveralRefusalsComeTogether(t *testing.T) {
	s := plain()
	s.Readings[1].Raw, s.Readings[4].Raw = math.NaN(), math.Inf(-1)
	s.Readings[2].Role = "x"
	_, err := Fit(s, Model{Drift: "y"}, Policy{})
	for _, place := range []string{"readings[1].raw", "readings[4].raw", "readings[2].role", "model.drift"} {
		if err == nil || !strings.Contains(err.Error(), place) {
			t.Errorf("error %v does not name %s", err, place)
		}
	}
}

func TestUnknownEngineIsRefused(t *testing.T) {
	var unknown *UnknownWordError
	if _, err := FitWith("0", plain(), Model{}, Policy{}); !errors.As(err, &unknown) {
		t.Errorf("engine 0: error %v", err)
	}
	a, err := FitWith("1", plain(), Model{}, Policy{})
	if err != nil || a.Engine != "1" {
		t.Errorf("engine 1: %v %v", a, err)
	}
}

// Drift that only the assigned values would identify is refused: each material
// is read once, so no difference within a material shows a drift.
func TestTermsMustShowWithinMaterials(t *testing.T) {
	s := plain()
	s.Readings = append(slices.Clone(s.Readings[:3]), s.Readings[6])
	s.Anchors = append(s.Anchors, assigned("D", 35, 0.05), assigned("E", -45, 0.05))
	s.read("D", Anchor, 35, 0.05).at(4).sized(5)
	s.read("E", Anchor, -45, 0.05).at(5).sized(6)
	for i := range s.Readings {
		s.Readings[i].ID = ""
	}
	for _, m := range []Model{{Drift: DriftLinear}, {Size: SizeLinear}, {Size: SizeLog}} {
		_, err := Fit(s, m, Policy{})
		var refused *NotEstimableError
		if !errors.As(err, &refused) {
			t.Errorf("%s: error %v, want a NotEstimableError", m.label(), err)
		}
	}
	// A monitor read twice is enough.
	s.read("M", Monitor, 3, 0.05).at(0).sized(2)
	s.read("M", Monitor, 3.1, 0.05).at(6).sized(9)
	if _, err := Fit(s, Model{Drift: DriftLinear}, Policy{}); err != nil {
		t.Errorf("with a monitor: %v", err)
	}
}

// Drift and size that run in step cannot be told apart.
func TestTermsThatRunInStepAreRefused(t *testing.T) {
	s := plain()
	for i := range s.Readings {
		s.Readings[i].sized(2 + *s.Readings[i].Time)
	}
	var refused *NotEstimableError
	if _, err := Fit(s, Model{Drift: DriftLinear, Size: SizeLinear}, Policy{}); !errors.As(err, &refused) {
		t.Errorf("error %v, want a NotEstimableError", err)
	}
}

func TestSingularReadingsAreRefusedUnlessDetermined(t *testing.T) {
	s := plain()
	zero := 0.0
	for i := range s.Readings {
		s.Readings[i].StandardUncertainty = &zero
	}
	for i := range s.Anchors {
		s.Anchors[i].Value.Terms = nil
	}
	var singular *SingularError
	if _, err := Fit(s, Model{}, Policy{}); !errors.As(err, &singular) {
		t.Errorf("six exact readings of three exact anchors: error %v, want a SingularError", err)
	}
	s.Anchors = s.Anchors[:2]
	s.Readings = []Reading{s.Readings[0], s.Readings[1], s.Readings[6]}
	r, err := Fit(s, Model{}, Policy{})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "value", r.Subjects[0].Value, -30+20*30/30.01, 1e-12)
	near(t, "u", r.Subjects[0].StandardUncertainty, 0, 0)
}

func TestWeakSlopeIsRefused(t *testing.T) {
	var s Session
	s.Anchors = []AssignedValue{assigned("A", 0, 0), assigned("B", 1, 0)}
	for range 3 {
		s.read("A", Anchor, 0, 3)
		s.read("B", Anchor, 1, 3)
	}
	var weak *WeakSlopeError
	if _, err := Fit(s, Model{}, Policy{}); !errors.As(err, &weak) {
		t.Errorf("slope 1 ± 2.4: error %v, want a WeakSlopeError", err)
	}
}
