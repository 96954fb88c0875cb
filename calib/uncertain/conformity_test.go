package uncertain_test

import (
	"math"
	"testing"

	"deltamoor/calib/uncertain"
)

// The case is that of a Zener diode in JCGM 106:2012, 7.3 (quoted from memory):
// −5.47 V with u = 0.05 V against an upper limit of −5.40 V, p_c = Φ(1.40) ≈ 0.92.
// The digits of Φ are those of Abramowitz and Stegun, Handbook of Mathematical
// Functions, table 26.1.
func TestConformanceProbabilityMatchesNormalTheory(t *testing.T) {
	inf := math.Inf(1)
	for _, c := range []struct {
		name                   string
		value, u, lower, upper float64
		want                   float64
	}{
		{"Zener diode, upper limit", -5.47, 0.05, -inf, -5.40, 0.9192433407662290},
		{"the same from above, lower limit", 5.47, 0.05, 5.40, inf, 0.9192433407662290},
		{"at the limit", 2, 0.3, -inf, 2, 0.5},
		{"in the middle of ±1.96 u", 0, 1, -1.959963984540054, 1.959963984540054, 0.95},
		{"two u above the upper limit", 12, 1, 0, 10, 0.0227501319481792},
	} {
		if got := uncertain.ConformanceProbability(c.value, c.u, inf, c.lower, c.upper); math.Abs(got-c.want) > 1e-12 {
			t.Errorf("%s: %v, want %v", c.name, got, c.want)
		}
	}
	// Student's t with one degree of freedom is Cauchy's: F(1) = 3/4.
	if got := uncertain.ConformanceProbability(0, 1, 1, -inf, 1); math.Abs(got-0.75) > 1e-12 {
		t.Errorf("one degree of freedom: %v, want 0.75", got)
	}
	if in, out := uncertain.ConformanceProbability(1, 0, inf, 0, 1), uncertain.ConformanceProbability(1.1, 0, inf, 0, 1); in != 1 || out != 0 {
		t.Errorf("exact values: %v within, %v outside", in, out)
	}
	if got := uncertain.ConformanceProbability(0, 1, inf, 2, 1); !math.IsNaN(got) {
		t.Errorf("exchanged limits: %v, want NaN", got)
	}
}

func TestGuardBandNarrowsEachFiniteSide(t *testing.T) {
	a, err := uncertain.Tolerance{Lower: -10, Upper: 10}.Accept(0.4)
	if err != nil || a != (uncertain.Tolerance{Lower: -9.6, Upper: 9.6}) {
		t.Errorf("%v %v", a, err)
	}
	if a, err := (uncertain.Tolerance{Lower: math.Inf(-1), Upper: 10}).Accept(0.4); err != nil || a.Upper != 9.6 || !math.IsInf(a.Lower, -1) {
		t.Errorf("%v %v", a, err)
	}
	if _, err := (uncertain.Tolerance{Lower: 0, Upper: 1}).Accept(0.5); err == nil {
		t.Error("a guard band that leaves nothing is accepted")
	}
}
