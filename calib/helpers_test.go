package calib

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"deltamoor/calib/uncertain"
)

// A complainer is a *testing.T or a *rapid.T.
type complainer interface {
	Helper()
	Errorf(format string, args ...any)
}

// near complains unless |got − want| ≤ tolerance.
func near(t complainer, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.17g, want %.17g (off by %.2g, allowed %.2g)", what, got, want, math.Abs(got-want), tolerance)
	}
}

// assigned is an anchor's value with one source of its own; u = 0 is exact.
func assigned(material string, value, u float64) AssignedValue {
	a := AssignedValue{Material: material, Value: uncertain.Exact(value)}
	if u > 0 {
		a.Value.Terms = []uncertain.Term{{Source: uncertain.Source{ID: "anchor:" + material, Kind: uncertain.KindAnchor, U: u}, Sensitivity: 1}}
	}
	return a
}

// read appends a reading with the next number.
func (s *Session) read(subject string, role Role, raw, u float64) *Reading {
	s.Readings = append(s.Readings, Reading{
		ID: fmt.Sprintf("S-1/%d", len(s.Readings)+1), Subject: subject, Role: role, Raw: raw, StandardUncertainty: &u,
	})
	return &s.Readings[len(s.Readings)-1]
}

func (r *Reading) at(time float64) *Reading    { r.Time = &time; return r }
func (r *Reading) sized(size float64) *Reading { r.Size = &size; return r }
func (r *Reading) of(preparation string) *Reading {
	r.Preparation = preparation
	return r
}

func mustFit(t testing.TB, s Session, m Model, p Policy) *Result {
	t.Helper()
	r, err := Fit(s, m, p)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// valuesOnly is quickFit for tests that expect no refusal.
func valuesOnly(t testing.TB, s Session, m Model) *Result {
	t.Helper()
	r, err := quickFit(s, m, Policy{})
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// quickFit fits and predicts without the diagnostics of the fit, for
// simulations of thousands of sessions.
func quickFit(s Session, m Model, policy Policy) (*Result, error) {
	if err := validate(&s, m, policy); err != nil {
		return nil, err
	}
	in, err := prepare(&s, m, policy)
	if err != nil {
		return nil, err
	}
	p, err := in.newProblem(-1)
	if err != nil {
		return nil, err
	}
	solved, err := p.solve()
	if err != nil {
		return nil, err
	}
	c, err := solved.calibrate()
	if err != nil {
		return nil, err
	}
	r := &Result{calibrated: c}
	covariance := c.reported.covariance(c.covariance())
	for i, name := range c.reported.names {
		r.Parameters = append(r.Parameters, Parameter{Name: name, Value: c.reported.values[i]})
	}
	r.Covariance = covariance.Slices()
	c.takeBlank(r)
	c.takeSubjects(r)
	return r, nil
}

// commonTerm is a source that all anchors share.
func commonTerm(u float64) uncertain.Term {
	return uncertain.Term{Source: uncertain.Source{ID: "scale", Kind: uncertain.KindAnchor, U: u}, Sensitivity: 1}
}

func (r *Result) parameter(t testing.TB, name string) Parameter {
	t.Helper()
	for _, p := range r.Parameters {
		if p.Name == name {
			return p
		}
	}
	t.Fatalf("no parameter %s among %v", name, r.Parameters)
	return Parameter{}
}

func (r *Result) subject(t testing.TB, name string) *SubjectResult {
	t.Helper()
	for i := range r.Subjects {
		if r.Subjects[i].Subject == name {
			return &r.Subjects[i]
		}
	}
	t.Fatalf("no subject %s", name)
	return nil
}

func (r *Result) flagged(code string) *Flag {
	for i := range r.Flags {
		if r.Flags[i].Code == code {
			return &r.Flags[i]
		}
	}
	return nil
}

// A truth makes sessions from known parameters.
type truth struct {
	intercept, slope, drift, curve, size, memory float64
	noise, anchorU                               float64
	anchors                                      []float64
	repeats, samples                             int
	monitor                                      bool
	kind                                         Size
}

// session draws one: anchors read in rounds, samples between them, sizes from
// 2 to 8, an hour a reading.
func (w truth) session(r *rand.Rand) (Session, map[string]float64) {
	var s Session
	values := map[string]float64{}
	for i, v := range w.anchors {
		code := fmt.Sprintf("A%d", i)
		s.Anchors = append(s.Anchors, assigned(code, v+w.anchorU*r.NormFloat64(), w.anchorU))
		values[code] = v
	}
	values["MON"] = 5
	before := 0.0
	reference := float64(w.repeats*(len(w.anchors)+1)+w.samples) / 2
	put := func(subject string, role Role) {
		time, size := float64(len(s.Readings)), 2+6*r.Float64()
		t, h := time-reference, size-5
		switch w.kind {
		case SizeInverse:
			h = 1/size - 0.2
		case SizeLog:
			h = math.Log(size / 5)
		}
		f := w.intercept + w.slope*values[subject] + w.drift*t + w.curve*t*t + w.size*h
		raw := (1-w.memory)*f + w.memory*before
		raw += w.noise * r.NormFloat64()
		s.read(subject, role, raw, math.Max(w.noise, 1e-6)).at(time).sized(size)
		before = raw
	}
	for round := range w.repeats {
		for i := range w.anchors {
			put(fmt.Sprintf("A%d", i), Anchor)
		}
		if w.monitor {
			put("MON", Monitor)
		}
		for k := round * w.samples / w.repeats; k < (round+1)*w.samples/w.repeats; k++ {
			code := fmt.Sprintf("P%d", k)
			values[code] = w.anchors[0] + (w.anchors[len(w.anchors)-1]-w.anchors[0])*r.Float64()
			put(code, Sample)
		}
	}
	return s, values
}

var usualTruth = truth{
	intercept: 0.4, slope: 0.97, drift: 0.004, size: 0.03, noise: 0.05, anchorU: 0.03,
	anchors: []float64{-38, -12, 4, 35}, repeats: 4, samples: 6, monitor: true, kind: SizeLinear,
}
