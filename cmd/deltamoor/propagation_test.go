package main

import (
	"encoding/json"
	"math"
	"strings"
	"testing"

	"deltamoor/api/exchange"
	"deltamoor/calib/uncertain"
)

// For the two-point line the first order holds to a digit, the interval is
// value ± 1.96·u of the closed form (tested above), and the same seed is the same answer.
func TestFitWithDrawsHoldsTheFirstOrderAgainstDistributions(t *testing.T) {
	text, err := json.Marshal(twoPoint())
	if err != nil {
		t.Fatal(err)
	}
	run := func(args ...string) string {
		status, stdout, stderr := call(t.Context(), nil, string(text), append([]string{"fit", "-", "--draws", "200000", "--seed", "7", "--digits", "1"}, args...)...)
		if status != statusDone || stderr != "" {
			t.Fatalf("status %d, stderr %q", status, stderr)
		}
		return stdout
	}
	var answer exchange.PropagationAnswer
	if err := json.Unmarshal([]byte(run("--json")), &answer); err != nil {
		t.Fatal(err)
	}
	fit := fitJSON(t, twoPoint())
	if answer.Seed != 7 || !answer.Settled || len(answer.Quantities) != len(fit.Samples) {
		t.Fatalf("seed %d, settled %v, %d quantities", answer.Seed, answer.Settled, len(answer.Quantities))
	}
	k := uncertain.CoverageFactor(0.95, math.Inf(1))
	for i, q := range answer.Quantities {
		s := fit.Samples[i]
		if !q.Check.Valid {
			t.Errorf("%s: %+v", q.Name, q)
		}
		// Settled means known to a fifth of the tolerance, at two standard deviations.
		wantNear(t, q.Name+" low", q.Distribution.Symmetric.Low, *s.Value-k**s.StandardUncertainty, 0.4**q.Check.Tolerance)
		wantNear(t, q.Name+" high", q.Distribution.Symmetric.High, *s.Value+k**s.StandardUncertainty, 0.4**q.Check.Tolerance)
		wantNear(t, q.Name+" u", q.Distribution.StandardUncertainty, *s.StandardUncertainty, 0.4**q.Check.Tolerance)
	}
	table := run()
	for _, want := range []string{"sugar", "distribution of", "first order holds", "seed 7", "1 fit, solved again in every draw"} {
		if !strings.Contains(table, want) {
			t.Errorf("the table has no %q:\n%s", want, table)
		}
	}
	if again := run(); again != table {
		t.Errorf("one seed, two answers:\n%s\n%s", table, again)
	}
}

func TestVerifyWithDrawsPropagatesTheChainOfOneCode(t *testing.T) {
	x := buildTampered(t)
	folder := x.edit(t)
	status, answer := verifyJSON(t, "--data", folder, x.shown, "--draws", "20000")
	if status != statusDone || !answer.Clean || answer.Propagation == nil {
		t.Fatalf("status %d, %+v", status, answer)
	}
	p := *answer.Propagation
	fits := 0
	for _, n := range answer.Versions {
		if n.Kind == "calibration" {
			fits++
		}
	}
	if p.Fits != fits || len(p.Quantities) != 1 || p.Quantities[0].Name != x.shown {
		t.Errorf("%d fits of the chain's %d calibrations, quantities %+v", p.Fits, fits, p.Quantities)
	}
	if _, plain := verifyJSON(t, "--data", folder, x.shown); plain.Propagation != nil {
		t.Error("propagated without being asked")
	}
	for _, wrong := range [][]string{{"verify", "--draws", "10"}, {"verify", x.shown, "--draws", "-1"}, {"verify", x.shown, "--draws", "10", "--digits", "3"}, {"fit", "-", "--draws", "999999999"}} {
		if status, _, stderr := call(t.Context(), nil, "", append(wrong, "--config", "")...); status != statusUsage {
			t.Errorf("%v: status %d, %s", wrong, status, stderr)
		}
	}
}
