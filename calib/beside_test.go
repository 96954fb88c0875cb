//go:build unix

package calib

import (
	"encoding/json"
	"fmt"
	"os"
	"syscall"
	"testing"

	"deltamoor/calib/uncertain"
)

// besideSession is the problem of testdata/beside/odr.py, with as many samples
// as asked (the file's, repeated).
func besideSession(t testing.TB, samples int) Session {
	t.Helper()
	data, err := os.ReadFile("testdata/beside/problem.json")
	if err != nil {
		t.Fatal(err)
	}
	var q struct {
		Anchors []struct {
			Material string
			Value, U float64
		}
		Readings []struct {
			Material, Sample, Role string
			Raw, U, Time, Size     float64
		}
	}
	if err := json.Unmarshal(data, &q); err != nil {
		t.Fatal(err)
	}
	var s Session
	for _, a := range q.Anchors {
		s.Anchors = append(s.Anchors, AssignedValue{Material: a.Material, Value: uncertain.Number{Value: a.Value, Terms: []uncertain.Term{
			{Source: uncertain.Source{ID: "anchor:" + a.Material, Kind: uncertain.KindAnchor, U: a.U}, Sensitivity: 1}}}})
	}
	n := 0
	for pass := 0; pass == 0 || n < samples; pass++ {
		for _, rd := range q.Readings {
			rd := rd
			if rd.Role == "anchor" && pass > 0 {
				continue
			}
			if rd.Role == "sample" {
				if n == samples {
					continue
				}
				n++
				rd.Sample += fmt.Sprint("-", pass)
			}
			s.Readings = append(s.Readings, Reading{ID: fmt.Sprintf("S-1/%d", len(s.Readings)+1), Subject: rd.Material + rd.Sample, Role: Role(rd.Role),
				Raw: rd.Raw, StandardUncertainty: &rd.U, Time: &rd.Time, Size: &rd.Size})
		}
	}
	return s
}

// What SciPy 1.10.1's ODR answers to the same problem (testdata/beside/odr.py,
// "parameters, derivatives given"); it iterates to about 1e-8.
func TestBesideTheOtherLibraryTheAnswerIsTheSame(t *testing.T) {
	r, err := Fit(besideSession(t, 20), Model{Drift: DriftLinear, Size: SizeLinear}, Policy{})
	if err != nil {
		t.Fatal(err)
	}
	line := map[string]float64{"slope": 0.9797653500094877, "drift.linear": 0.010407687067587119, "size": 0.025612776000266572}
	for name, want := range line {
		near(t, name, r.parameter(t, name).Value, want, 1e-7)
	}
	near(t, "intercept", r.parameter(t, "intercept").Value, 0.5990421889590547, 1e-6)
	near(t, "first sample", r.Subjects[0].Value, 6.207328058435482, 2e-6)
}

// The other side of testdata/beside/odr.py: the fit with its samples' values,
// and with every diagnostic, left-out anchors included. cpu-us/op is this
// process' processor time, which others on a shared machine do not lengthen.
func BenchmarkBeside(b *testing.B) {
	processor := func() float64 {
		var u syscall.Rusage
		if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
			b.Fatal(err)
		}
		return float64(u.Utime.Nano()+u.Stime.Nano()) / 1000
	}
	model := Model{Drift: DriftLinear, Size: SizeLinear}
	for _, samples := range []int{20, 200} {
		s := besideSession(b, samples)
		b.Run(fmt.Sprintf("values/samples=%d", samples), func(b *testing.B) {
			b.ReportAllocs()
			start := processor()
			for b.Loop() {
				valuesOnly(b, s, model)
			}
			b.ReportMetric((processor()-start)/float64(b.N), "cpu-us/op")
		})
		b.Run(fmt.Sprintf("diagnostics/samples=%d", samples), func(b *testing.B) {
			b.ReportAllocs()
			start := processor()
			for b.Loop() {
				if _, err := Fit(s, model, Policy{}); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric((processor()-start)/float64(b.N), "cpu-us/op")
		})
	}
}
