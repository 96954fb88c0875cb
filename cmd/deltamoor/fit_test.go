package main

import (
	"encoding/json"
	"math"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"

	"deltamoor/api/exchange"
)

// fitJSON runs `deltamoor fit --json -` on the request.
func fitJSON(t *testing.T, request exchange.FitRequest) exchange.FitAnswer {
	t.Helper()
	text, err := json.Marshal(request)
	if err != nil {
		t.Fatal(err)
	}
	status, stdout, stderr := call(t.Context(), nil, string(text), "fit", "--json", "-")
	if status != statusDone || stderr != "" {
		t.Fatalf("status %d, stderr %q", status, stderr)
	}
	var answer exchange.FitAnswer
	if err := json.Unmarshal([]byte(stdout), &answer); err != nil {
		t.Fatalf("%v in %s", err, stdout)
	}
	return answer
}

func wantNear(t *testing.T, what string, got *float64, want, tolerance float64) {
	t.Helper()
	if got == nil || math.Abs(*got-want) > tolerance {
		if got == nil {
			t.Errorf("%s: found null, want %v", what, want)
		} else {
			t.Errorf("%s: found %.12g, want %.12g within %g", what, *got, want, tolerance)
		}
	}
}

func pointer(x float64) *float64 { return &x }

// twoPoint is a two-point normalization with assigned values of USGS40 and
// USGS41a on d13C-VPDB and invented raw deltas, each with a declared u.
func twoPoint() exchange.FitRequest {
	reading := func(role, name string, raw, u float64) exchange.FitReading {
		r := exchange.FitReading{Role: role, Raw: raw, U: pointer(u)}
		if role == "sample" {
			r.Sample = name
		} else {
			r.Material = name
		}
		return r
	}
	return exchange.FitRequest{
		Scale: "d13C-VPDB-LSVEC",
		Anchors: []exchange.FitAnchor{
			{Material: "USGS40", Value: -26.39, U: pointer(0.04)},
			{Material: "USGS41a", Value: 36.55, U: pointer(0.08)},
		},
		Readings: []exchange.FitReading{
			reading("anchor", "USGS40", -26.912, 0.035),
			reading("anchor", "USGS41a", 35.874, 0.04),
			reading("sample", "sugar", -11.203, 0.045),
			reading("sample", "collagen", -19.64, 0.05),
			reading("sample", "beyond", -48.1, 0.06),
		},
	}
}

// The expected values come from the closed form of the two-point line with
// f = (x − mA)/(mB − mA) and slope b:
//
//	y    = TA + f·(TB − TA)
//	u²(y) = (1−f)²(u²(TA) + b²u²(mA)) + f²(u²(TB) + b²u²(mB)) + b²u²(x)
//
// (law of propagation, JCGM 100:2008 5.1.2), evaluated below, not from the engine.
func TestFitAnswersTheTwoPointLine(t *testing.T) {
	request := twoPoint()
	answer := fitJSON(t, request)
	a, b := request.Anchors[0], request.Anchors[1]
	ra, rb := request.Readings[0], request.Readings[1]
	slope := (b.Value - a.Value) / (rb.Raw - ra.Raw)
	if answer.Line == nil {
		t.Fatal("no line")
	}
	wantNear(t, "slope", answer.Line.Slope, slope, 1e-12)
	wantNear(t, "intercept", answer.Line.Intercept, a.Value-slope*ra.Raw, 1e-10)
	if len(answer.Samples) != 3 {
		t.Fatalf("%d samples, want 3", len(answer.Samples))
	}
	square := func(x float64) float64 { return x * x }
	for i, s := range answer.Samples {
		r := request.Readings[2+i]
		f := (r.Raw - ra.Raw) / (rb.Raw - ra.Raw)
		u := math.Sqrt(square(1-f)*(square(*a.U)+square(slope**ra.U)) + square(f)*(square(*b.U)+square(slope**rb.U)) + square(slope**r.U))
		if s.Sample != r.Sample {
			t.Errorf("sample %d is %q, want %q", i, s.Sample, r.Sample)
		}
		wantNear(t, s.Sample, s.Value, a.Value+f*(b.Value-a.Value), 1e-10)
		wantNear(t, "u of "+s.Sample, s.StandardUncertainty, u, 1e-10)
	}
	if answer.ChiSquare != nil || answer.DegreesOfFreedom != 0 {
		t.Errorf("chi-square %v on %d degrees of freedom, want none on 0", answer.ChiSquare, answer.DegreesOfFreedom)
	}
}

// Pearson's data with York's weights (D. York, Canadian Journal of Physics 44
// (1966) 1079); intercept, slope, chi-square by degrees of freedom and standard
// uncertainties as printed after York et al., American Journal of Physics 72
// (2004) 367, Table II. Tolerance: half the last digit printed. x is the
// assigned value, y the raw delta.
func TestFitAnswersPearsonsDataWithYorksWeights(t *testing.T) {
	x := []float64{0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4}
	y := []float64{5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5}
	wx := []float64{1000, 1000, 500, 800, 200, 80, 60, 20, 1.8, 1}
	wy := []float64{1, 1.8, 4, 8, 20, 20, 70, 70, 100, 500}
	var request exchange.FitRequest
	for i := range x {
		name := string(rune('A' + i))
		request.Anchors = append(request.Anchors, exchange.FitAnchor{Material: name, Value: x[i], U: pointer(1 / math.Sqrt(wx[i]))})
		request.Readings = append(request.Readings, exchange.FitReading{Material: name, Role: "anchor", Raw: y[i], U: pointer(1 / math.Sqrt(wy[i]))})
	}
	answer := fitJSON(t, request)
	for _, p := range answer.Parameters {
		switch p.Name {
		case "intercept":
			wantNear(t, p.Name, p.Value, 5.47991022403, 5e-12)
			wantNear(t, "u of "+p.Name, p.StandardUncertainty, 0.294970735, 5e-10)
		case "slope":
			wantNear(t, p.Name, p.Value, -0.48053340745, 5e-12)
			wantNear(t, "u of "+p.Name, p.StandardUncertainty, 0.0579850090, 5e-11)
		default:
			t.Errorf("parameter %q, want only intercept and slope", p.Name)
		}
	}
	wantNear(t, "chi-square", answer.ChiSquare, 8*1.483294149, 8*5e-10)
	if len(answer.Parameters) != 2 || answer.DegreesOfFreedom != 8 {
		t.Errorf("%d parameters, %d degrees of freedom, want 2 and 8", len(answer.Parameters), answer.DegreesOfFreedom)
	}
}

// BenchmarkFitProcess measures a whole `deltamoor fit FILE`: start, read, fit, print, exit.
func BenchmarkFitProcess(b *testing.B) {
	program := filepath.Join(b.TempDir(), "deltamoor")
	if out, err := exec.Command("go", "build", "-o", program, ".").CombinedOutput(); err != nil {
		b.Fatalf("%v: %s", err, out)
	}
	text, err := json.Marshal(twoPoint())
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		cmd := exec.Command(program, "fit", "--json", "-")
		cmd.Stdin = strings.NewReader(string(text))
		if out, err := cmd.CombinedOutput(); err != nil {
			b.Fatalf("%v: %s", err, out)
		}
	}
}

// BenchmarkFitCommand measures the same without the start of a process.
func BenchmarkFitCommand(b *testing.B) {
	text, err := json.Marshal(twoPoint())
	if err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		if status, _, stderr := call(b.Context(), nil, string(text), "fit", "--json", "-"); status != statusDone {
			b.Fatal(stderr)
		}
	}
}
