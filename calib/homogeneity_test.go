package calib

import (
	"fmt"
	"math"
	"slices"
	"testing"

	"deltamoor/calib/uncertain"
)

// A sample's own heterogeneity is one source for all its sessions: its variance
// adds to u², controls are spared, and the mean of two sessions keeps it whole.
func TestSampleHomogeneityIsOneSourceForEverySessionOfASample(t *testing.T) {
	u := 0.1
	session := func(id string, shift float64) Session {
		s := Session{Anchors: []AssignedValue{{Material: "A", Value: uncertain.Exact(-30)}, {Material: "B", Value: uncertain.Exact(10)}}, NoiseGroup: id}
		for i, r := range []struct {
			subject string
			role    Role
			raw     float64
		}{{"A", Anchor, -30 + shift}, {"B", Anchor, 10 + shift}, {"S", Sample, -5 + shift}, {"K", Control, -20 + shift}, {"A", Anchor, -30 + shift}} {
			s.Readings = append(s.Readings, Reading{ID: fmt.Sprintf("%s/%d", id, i), Subject: r.subject, Role: r.role, Raw: r.raw, StandardUncertainty: &u})
		}
		return s
	}
	fit := func(s Session, h float64, materials ...string) *Result {
		s.Materials = materials
		r, err := Fit(s, Model{Weights: WeightsDeclared}, Policy{SampleHomogeneity: SampleHomogeneity{StandardUncertainty: h, DegreesOfFreedom: 12, Scale: "d13C-VPDB"}})
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	subject := func(r *Result, name string) int {
		return slices.IndexFunc(r.Subjects, func(s SubjectResult) bool { return s.Subject == name })
	}
	plain, with, other := fit(session("S1", 0.3), 0), fit(session("S1", 0.3), 0.2), fit(session("S2", -0.1), 0.2)
	i, k := subject(with, "S"), subject(with, "K")
	p := plain.Subjects[i].StandardUncertainty
	near(t, "u of the sample", with.Subjects[i].StandardUncertainty, math.Sqrt(p*p+0.04), 1e-12) // JCGM 100:2008 5.1.2
	near(t, "u of the control", with.Subjects[k].StandardUncertainty, plain.Subjects[k].StandardUncertainty, 0)
	near(t, "covariance of two sessions", uncertain.Covariance(with.Number(i), other.Number(i)), 0.04, 1e-12)
	mean, err := uncertain.Linear(0, []float64{0.5, 0.5}, []uncertain.Number{with.Number(i), other.Number(i)})
	if err != nil {
		t.Fatal(err)
	}
	if got := mean.StandardUncertainty(); got < 0.2 {
		t.Errorf("u of the mean of two sessions is %v, below the sample's own 0.2", got)
	}
	var share float64
	for _, s := range with.Subjects[i].Sources {
		share += s.VarianceShare
	}
	near(t, "sum of the budget", share, 1, 1e-12)
	nu, err := uncertain.EffectiveDF(with.Number(i), with.Groups())
	if err != nil {
		t.Fatal(err)
	}
	near(t, "ν of the number and of the result", nu, with.Subjects[i].Expanded.DegreesOfFreedom, 1e-6*nu)
	spared := fit(session("S1", 0.3), 0.2, "S")
	near(t, "u of a material measured as an unknown", spared.Subjects[i].StandardUncertainty, p, 0)
}
