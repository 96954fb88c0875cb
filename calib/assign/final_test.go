package assign

import (
	"errors"
	"fmt"
	"math"
	"testing"

	"deltamoor/calib/uncertain"
)

// sampleResults have own noise, the method's between-session component, and an
// anchor that all share.
func sampleResults(t testing.TB, y []float64, own, between, anchor float64) []Member {
	t.Helper()
	var out []Member
	for i, v := range y {
		s := fmt.Sprintf("S-%d", i)
		out = append(out, Member{Session: s, Instrument: fmt.Sprintf("EA%d", i%2), Result: number(t, v,
			source("reading:"+s+"/1", uncertain.KindReading, own, 1),
			source("between_session:"+s+"/VPDB/P1", uncertain.KindBetweenSession, between, 1),
			source("anchor:M1.1", uncertain.KindAnchor, anchor, 1))})
	}
	return out
}

func final(t *testing.T, y []float64, p FinalPolicy) *Final {
	t.Helper()
	f, err := FinalValue("VPDB/P1", sampleResults(t, y, 0.03, 0.04, 0.05), nil, p)
	if err != nil {
		t.Fatal(err)
	}
	return f
}

func TestFinalValueOfOneSessionKeepsItsBetweenSessionComponentInFull(t *testing.T) {
	f := final(t, []float64{-20}, FinalPolicy{})
	near(t, "u²", f.Value.Variance(), 0.0009+0.0016+0.0025, 1e-13)
	if f.Verdict != Agreed {
		t.Errorf("verdict %s", f.Verdict)
	}
	if f := final(t, []float64{-20}, FinalPolicy{Required: 3}); f.Verdict != SessionsMissing {
		t.Errorf("verdict %s, want sessions_missing", f.Verdict)
	}
}

func TestFinalValueDividesTheBetweenSessionVarianceBySessionsOnly(t *testing.T) {
	f := final(t, []float64{-20, -20.03, -19.98, -20.01}, FinalPolicy{})
	near(t, "u²", f.Value.Variance(), (0.0009+0.0016)/4+0.0025, 1e-13)
	near(t, "common", f.CommonUncertainty, 0.05, 1e-13)
	if f.Verdict != Agreed || f.AddedBetween != 0 {
		t.Errorf("verdict %s, added %g", f.Verdict, f.AddedBetween)
	}
}

func TestTwoSessionsAgreeByTheirDifferenceWithoutWhatTheyShare(t *testing.T) {
	// u(d) = √2·0.05 = 0.0707, k = 1.96: the limit is 0.1386.
	if f := final(t, []float64{-20, -20.138}, FinalPolicy{}); f.Verdict != Agreed {
		t.Errorf("verdict %s for a difference inside the limit", f.Verdict)
	}
	f := final(t, []float64{-20, -20.139}, FinalPolicy{})
	if f.Verdict != AnotherSession {
		t.Errorf("verdict %s for a difference outside the limit", f.Verdict)
	}
	near(t, "u(d)", f.Pair.StandardUncertainty, math.Sqrt2*0.05, 1e-12)
}

func TestScatteredSessionsAllStayWithTheLargerVariance(t *testing.T) {
	y := []float64{-20, -20.4, -19.7}
	f := final(t, y, FinalPolicy{})
	if f.Verdict != Scattered {
		t.Fatalf("verdict %s", f.Verdict)
	}
	// Equal sessions: the observed variance of the values replaces the method's.
	mean := (y[0] + y[1] + y[2]) / 3
	s2 := ((y[0]-mean)*(y[0]-mean) + (y[1]-mean)*(y[1]-mean) + (y[2]-mean)*(y[2]-mean)) / 2
	near(t, "u²", f.Value.Variance(), s2/3+0.0025, 1e-11)
	near(t, "added", f.AddedBetween*f.AddedBetween, s2-0.0025, 1e-11)
	near(t, "value", f.Value.Value, mean, 1e-13)
	if len(f.Sessions) != 3 {
		t.Errorf("%d sessions stay", len(f.Sessions))
	}
}

func TestRepeatedCalibrationOfASessionIsNoNewMember(t *testing.T) {
	members := sampleResults(t, []float64{-20, -20.05}, 0.03, 0.04, 0.05)
	again := members[0]
	again.Result = number(t, -20.01, members[0].Result.Terms...)
	f, err := FinalValue("VPDB/P1", append(members, again), nil, FinalPolicy{})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "u²", f.Value.Variance(), 0.0025/2+0.0025, 1e-12)
	near(t, "value", f.Value.Value, (-20.005-20.05)/2, 1e-13)
}

func TestFinalValueRefusesNothingAndBadPolicies(t *testing.T) {
	if _, err := FinalValue("VPDB/P1", nil, nil, FinalPolicy{}); !errors.Is(err, ErrNothing) {
		t.Errorf("got %v", err)
	}
	for _, p := range []FinalPolicy{{Required: -1}, {Level: 1}, {Coverage: uncertain.Coverage{Factor: -2}}} {
		if _, err := FinalValue("VPDB/P1", sampleResults(t, []float64{1}, 1, 1, 1), nil, p); err == nil {
			t.Errorf("%+v accepted", p)
		}
	}
}
