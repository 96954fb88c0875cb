package assign

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"deltamoor/calib/uncertain"
)

// shared makes sessions with own uncertainties and sensitivities to anchors.
func shared(t testing.TB, y, own []float64, sensitivity [][]float64, anchorU []float64) []Member {
	t.Helper()
	out := independent(t, y, own)
	for i := range out {
		terms := slices.Clone(out[i].Result.Terms)
		for k, c := range sensitivity[i] {
			terms = append(terms, source(fmt.Sprintf("anchor:M%d.1", k), uncertain.KindAnchor, anchorU[k], c))
		}
		out[i].Result = number(t, y[i], terms...)
	}
	return out
}

func TestWhatSessionsShareDoesNotAverageAway(t *testing.T) {
	y, own := []float64{10, 10.05, 9.97, 10.02}, []float64{0.04, 0.04, 0.04, 0.04}
	c := [][]float64{{1}, {1}, {1}, {1}}
	a := analyse(t, Campaign{Assignment: "A", Members: shared(t, y, own, c, []float64{0.06})})
	near(t, "common part", a.CommonUncertainty, 0.06, 1e-14)
	near(t, "u²", a.Value.Variance(), a.CommonUncertainty*a.CommonUncertainty+a.MeasurementUncertainty*a.MeasurementUncertainty, 1e-13)
	// The same sessions without the anchor: what is shared alike is no evidence
	// of agreement or of its absence.
	alone := analyse(t, Campaign{Assignment: "A", Members: independent(t, y, own)})
	near(t, "Q", *a.Heterogeneity.Q, *alone.Heterogeneity.Q, 1e-13)
	near(t, "measurement part", a.MeasurementUncertainty, alone.Value.StandardUncertainty(), 1e-13)
	for i := range a.Sessions {
		near(t, "u of a session's effect", a.Sessions[i].EffectUncertainty, alone.Sessions[i].EffectUncertainty, 1e-12)
	}
}

func TestFullWeightsOutsideTheDataAreRefused(t *testing.T) {
	// Shared 0.10 and 0.14, own 0.03 and 0.04: (V22 − V12)/(V11 + V22 − 2V12) =
	// 0.0072/0.0041 = 1.756, worked by hand.
	members := shared(t, []float64{5, 5.04}, []float64{0.03, 0.04}, [][]float64{{0.10}, {0.14}}, []float64{1})
	_, err := Analyse(Campaign{Assignment: "A", Members: members, Policy: Policy{Weights: FullWeights, Estimator: NoBetween}})
	var refused *NegativeWeightError
	if !errors.As(err, &refused) {
		t.Fatalf("got %v, want a NegativeWeightError", err)
	}
	near(t, "weight", refused.Weight, 1-0.0072/0.0041, 1e-12)
	a := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{Estimator: NoBetween}})
	near(t, "private weight", a.Sessions[0].Weight, (1/0.0009)/(1/0.0009+1/0.0016), 1e-14)
}

func TestBothWeightSchemesCoincideWhereNothingIsShared(t *testing.T) {
	rapid.Check(t, func(r *rapid.T) {
		m := rapid.IntRange(2, 8).Draw(r, "sessions")
		y, u := make([]float64, m), make([]float64, m)
		for i := range y {
			y[i] = rapid.Float64Range(-1, 1).Draw(r, "y")
			u[i] = rapid.Float64Range(0.01, 0.5).Draw(r, "u")
		}
		members := independent(t, y, u)
		private := analyse(t, Campaign{Assignment: "A", Members: members})
		full := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{Weights: FullWeights}})
		for i := range private.Sessions {
			if d := private.Sessions[i].Weight - full.Sessions[i].Weight; math.Abs(d) > 1e-10 {
				r.Fatalf("weights differ by %g", d)
			}
		}
	})
}

func TestOrderOfSessionsChangesNoBit(t *testing.T) {
	y := []float64{10, 10.31, 9.97, 10.02, 10.4}
	members := shared(t, y, []float64{0.04, 0.1, 0.03, 0.05, 0.07},
		[][]float64{{1, 0.2}, {0.9, 0.3}, {1.1, 0.1}, {1, 0.25}, {0.95, 0.2}}, []float64{0.06, 0.09})
	want := analyse(t, Campaign{Assignment: "A", Members: members})
	rapid.Check(t, func(r *rapid.T) {
		got := analyse(t, Campaign{Assignment: "A", Members: rapid.Permutation(members).Draw(r, "order")})
		if d := cmp.Diff(want, got); d != "" {
			r.Fatal(d)
		}
	})
}

func TestSessionEffectsAreSourcesOfTheCampaign(t *testing.T) {
	y, u := []float64{1, 1.2, 1.1, 0.8}, []float64{0.05, 0.05, 0.05, 0.05}
	a := analyse(t, Campaign{Assignment: "A7K2P-44QXW", Members: independent(t, y, u)})
	var effects []string
	for _, x := range a.Value.Terms {
		if x.Kind == uncertain.KindCampaign {
			effects = append(effects, x.ID)
			near(t, "u of "+x.ID, x.U, a.BetweenSession, 0)
			near(t, "coefficient of "+x.ID, x.Sensitivity, 0.25, 1e-14)
			if x.Group != "campaign:A7K2P-44QXW" {
				t.Errorf("%s is in group %q", x.ID, x.Group)
			}
		}
	}
	if d := cmp.Diff([]string{"campaign:A7K2P-44QXW/S-000", "campaign:A7K2P-44QXW/S-001", "campaign:A7K2P-44QXW/S-002", "campaign:A7K2P-44QXW/S-003"}, effects); d != "" {
		t.Error(d)
	}
	// Equal sessions: u² is the variance of the mean of the values, on m − 1.
	mean := (1 + 1.2 + 1.1 + 0.8) / 4
	var ss float64
	for _, v := range y {
		ss += (v - mean) * (v - mean)
	}
	near(t, "u", a.Value.StandardUncertainty(), math.Sqrt(ss/3/4), 1e-12)
	near(t, "ν", a.Expanded.DegreesOfFreedom, 3, 1e-12)
	near(t, "k", a.Expanded.CoverageFactor, 3.18244630528371, 1e-9) // t 0.975, ν 3: R qt(0.975, 3)
}

func TestTruncatedZeroKeepsTheVarianceOfTheScatterThatWasFound(t *testing.T) {
	const u = 0.05
	of := func(d float64) (*Analysis, float64) {
		y := []float64{1 + d, 1 - d, 1 + d, 1 - d}
		return analyse(t, Campaign{Assignment: "A", Members: independent(t, y, []float64{u, u, u, u})}), 4 * d * d / 3
	}
	a, s2 := of(0.03)
	if a.BetweenSession != 0 {
		t.Fatalf("τ̂ = %g, want 0", a.BetweenSession)
	}
	// Equal sessions: the scatter s² on m − 1 = 3 has the variance 2(s²)²/3, and u⁴ = (u²/4)² gives ν = 3(u²/s²)².
	near(t, "Var(τ̂²)", a.Groups[0].Covariance[0][0], 2*s2*s2/3, 1e-12)
	near(t, "ν", a.Expanded.DegreesOfFreedom, 3*math.Pow(u*u/s2, 2), 1e-12)
	// Nothing jumps where the estimate becomes 0: there d² = 3u²/4.
	edge := u * math.Sqrt(0.75)
	below, _ := of(edge * (1 - 1e-9))
	above, _ := of(edge * (1 + 1e-9))
	if below.BetweenSession != 0 || above.BetweenSession == 0 {
		t.Fatalf("τ̂ %g and %g about the edge, want 0 and more", below.BetweenSession, above.BetweenSession)
	}
	near(t, "U at the edge", below.Expanded.U, above.Expanded.U, 1e-7)
	near(t, "ν at the edge", above.Expanded.DegreesOfFreedom, 3, 1e-7)
	// Values that agree exactly leave nothing to estimate: u is that of the sessions.
	if same, _ := of(0); same.BetweenSession != 0 || same.Expanded.DegreesOfFreedom < 1e6 {
		t.Errorf("equal values: τ̂ %g, ν %g, want 0 and no bound", same.BetweenSession, same.Expanded.DegreesOfFreedom)
	}
}

func TestLongTermComponentIsUsedWhenLarger(t *testing.T) {
	members := independent(t, []float64{1, 1.02, 0.99}, []float64{0.02, 0.02, 0.02})
	long := uncertain.NewGroup("long_term:EA-N.3", 0.0025, 40)
	a := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{LongTerm: &long}})
	near(t, "τ̂", a.BetweenSession, 0.05, 1e-15)
	if !a.LongTermUsed || !slices.ContainsFunc(a.Groups, func(g uncertain.Group) bool { return g.ID == long.ID }) {
		t.Errorf("the long-term component is not in use")
	}
	// ν: u² = (0.0004 + 0.0025)/3, of which 0.0025/3 on 40.
	near(t, "ν", a.Expanded.DegreesOfFreedom, 40*math.Pow(0.0029/0.0025, 2), 1e-12)
	small := uncertain.NewGroup("long_term:EA-N.3", 1e-10, 40)
	if b := analyse(t, Campaign{Assignment: "A", Members: independent(t, []float64{1, 1.2, 0.9}, []float64{0.02, 0.02, 0.02}), Policy: Policy{LongTerm: &small}}); b.LongTermUsed {
		t.Error("the smaller component is in use")
	}
}

func TestOneSessionIsSaidToTellNothingBetweenSessions(t *testing.T) {
	a := analyse(t, Campaign{Assignment: "A", Members: independent(t, []float64{3}, []float64{0.1})})
	near(t, "u", a.Value.StandardUncertainty(), 0.1, 1e-15)
	if a.HartungKnapp != nil || a.Heterogeneity.Q != nil || a.Sessions[0].LeftOut != nil || a.Sessions[0].Standardised != nil {
		t.Error("a single session has figures of agreement")
	}
	if len(a.Remarks) != 1 || a.Remarks[0].Code != "one_session" {
		t.Errorf("remarks %v", a.Remarks)
	}
}

func TestResultsWithoutUncertaintyAreCombinedByTheirScatter(t *testing.T) {
	members := []Member{{Session: "a", Result: uncertain.Exact(1)}, {Session: "b", Result: uncertain.Exact(2)}, {Session: "c", Result: uncertain.Exact(4)}}
	for _, e := range []Estimator{PauleMandel, RestrictedLikelihood} {
		a := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{Estimator: e}})
		near(t, "u", a.Value.StandardUncertainty(), math.Sqrt(7.0/3/3), 1e-12) // s² = 7/3
		if a.Heterogeneity.Q != nil {
			t.Error("Q exists without variances")
		}
	}
	_, err := Analyse(Campaign{Assignment: "A", Members: members, Policy: Policy{Estimator: DerSimonianLaird}})
	var refused *InputError
	if !errors.As(err, &refused) {
		t.Errorf("got %v, want an InputError", err)
	}
}

func TestResultsOfOneSessionCountOnce(t *testing.T) {
	members := independent(t, []float64{1, 1.1, 0.95}, []float64{0.05, 0.05, 0.05})
	want := analyse(t, Campaign{Assignment: "A", Members: members})
	twice := append(slices.Clone(members), members[1])
	got := analyse(t, Campaign{Assignment: "A", Members: twice})
	near(t, "value", got.Value.Value, want.Value.Value, 1e-14)
	near(t, "u", got.Value.StandardUncertainty(), want.Value.StandardUncertainty(), 1e-12)
	if len(got.Sessions) != 3 {
		t.Errorf("%d sessions, want 3", len(got.Sessions))
	}
}

func TestCampaignRefusesWhatItCannotUse(t *testing.T) {
	good := independent(t, []float64{1, 2}, []float64{0.1, 0.1})
	half := slices.Clone(good)
	half[0].Instrument = "EA1"
	bad := slices.Clone(good)
	bad[1].Result.Value = math.NaN()
	missing := slices.Clone(good)
	missing[1].Result = number(t, 1, uncertain.Term{Source: uncertain.Source{ID: "reading:S/1", U: 1, Group: "none"}, Sensitivity: 1})
	for name, c := range map[string]Campaign{
		"no assignment":    {Members: good},
		"no session":       {Assignment: "A", Members: []Member{{}}},
		"estimator":        {Assignment: "A", Members: good, Policy: Policy{Estimator: "best"}},
		"weights":          {Assignment: "A", Members: good, Policy: Policy{Weights: "equal"}},
		"level":            {Assignment: "A", Members: good, Policy: Policy{Level: 2}},
		"half instruments": {Assignment: "A", Members: half},
		"not finite":       {Assignment: "A", Members: bad},
		"unknown group":    {Assignment: "A", Members: missing},
		"probability":      {Assignment: "A", Members: good, Policy: Policy{Coverage: uncertain.Coverage{Probability: 7}}},
	} {
		if _, err := Analyse(c); err == nil {
			t.Errorf("%s: accepted", name)
		}
	}
	if _, err := Analyse(Campaign{Assignment: "A"}); !errors.Is(err, ErrNothing) {
		t.Errorf("nothing: %v", err)
	}
}

func TestInstrumentEffectIsTheOneWayFOfEqualSessions(t *testing.T) {
	// Three instruments, three sessions each; sessions scatter well beyond their u.
	values := [][]float64{{10.0, 10.2, 10.1}, {11.0, 11.3, 11.1}, {10.5, 10.4, 10.7}}
	var members []Member
	var units []Unit
	for k, v := range values {
		u := Unit{Code: fmt.Sprintf("EA%d", k)}
		for j, x := range v {
			session := fmt.Sprintf("S%d%d", k, j)
			members = append(members, Member{Session: session, Instrument: u.Code, Result: number(t, x, source("reading:"+session, uncertain.KindReading, 0.01, 1))})
			u.Measurements = append(u.Measurements, Measurement{Value: x})
		}
		units = append(units, u)
	}
	a := analyse(t, Campaign{Assignment: "A", Members: members})
	h, err := AnalyseHomogeneity(HomogeneityStudy{Group: "h", Units: units})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "F", *a.Instruments.F, *h.F, 1e-9)
	if !a.Instruments.Real || len(a.Instruments.InstrumentMeans) != 3 {
		t.Fatalf("effect of p = %g is not taken as real", *a.Instruments.P)
	}
	// Equal sessions: the mean of the instruments' means, on g − 1.
	near(t, "u²", a.Value.Variance(), h.MeanSquareBetween/9, 1e-9)
	for _, e := range a.Sessions {
		near(t, "weight", e.Weight, 1.0/9, 1e-12)
		if e.LeftOut == nil {
			t.Error("no left-out value")
		}
	}
}

func TestRemarksSayWhatAReaderShouldKnow(t *testing.T) {
	codes := func(c Campaign) []string {
		t.Helper()
		var out []string
		for _, r := range analyse(t, c).Remarks {
			out = append(out, r.Code)
			if r.Sentence == "" || r.Severity != Information && r.Severity != Warning {
				t.Errorf("remark %+v", r)
			}
		}
		return out
	}
	on := func(members []Member, instruments ...string) []Member {
		for i := range members {
			members[i].Instrument = instruments[i]
		}
		return members
	}
	u := []float64{0.02, 0.02, 0.02, 0.02}
	for name, c := range map[string]struct {
		campaign Campaign
		want     []string
	}{
		"in agreement": {Campaign{Assignment: "A", Members: independent(t, []float64{1, 1.01, 0.99, 1.02}, u)}, nil},
		"one far off":  {Campaign{Assignment: "A", Members: independent(t, []float64{1, 1.01, 0.99, 3}, u)}, []string{"sessions_disagree", "session_apart"}},
		"two":          {Campaign{Assignment: "A", Members: independent(t, []float64{1, 1.01}, u)}, []string{"few_sessions"}},
		"instruments": {Campaign{Assignment: "A", Members: on(independent(t, []float64{1, 1.01, 1.6, 1.61}, u), "X", "X", "Y", "Y")},
			[]string{"sessions_disagree", "instruments_differ"}},
		"untested": {Campaign{Assignment: "A", Members: on(independent(t, []float64{1, 1.01, 1.01, 1.02}, u), "X", "Y", "Z", "W")}, []string{"instruments_not_tested"}},
		"method's component": {Campaign{Assignment: "A", Members: sampleResults(t, []float64{1, 1.01, 1.02, 1}, 0.02, 0.03, 0.01)},
			[]string{"between_session_in_results"}},
	} {
		if name == "method's component" {
			for i := range c.campaign.Members {
				c.campaign.Members[i].Instrument = ""
			}
		}
		if d := cmp.Diff(c.want, codes(c.campaign)); d != "" {
			t.Errorf("%s: %s", name, d)
		}
	}
}

// However large the shared part, what it does not explain is unchanged.
func TestALargeSharedSourceCostsNoDigitsOfTheAgreement(t *testing.T) {
	y, own := []float64{10, 10.003, 9.998, 10.001}, []float64{0.001, 0.002, 0.001, 0.0015}
	alone := analyse(t, Campaign{Assignment: "A", Members: independent(t, y, own)})
	big := analyse(t, Campaign{Assignment: "A", Members: shared(t, y, own, [][]float64{{1}, {1}, {1}, {1}}, []float64{100})})
	near(t, "Q", *big.Heterogeneity.Q, *alone.Heterogeneity.Q, 1e-11)
	near(t, "τ̂", big.BetweenSession, alone.BetweenSession, 1e-11)
	near(t, "common", big.CommonUncertainty, 100, 1e-13)
}
