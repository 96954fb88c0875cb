package calib

import (
	"fmt"
	"math/rand/v2"
	"testing"

	"deltamoor/calib/uncertain"
)

// benchSession is 100 fitted readings of 5 anchors with drift and a size
// effect, and as many samples as asked, each read once.
func benchSession(samples int) Session {
	random := rand.New(rand.NewPCG(1, 2))
	values := []float64{-40, -25, -10, 10, 37}
	var s Session
	for i, v := range values {
		code := fmt.Sprintf("A%d", i)
		s.Anchors = append(s.Anchors, AssignedValue{Material: code, Value: uncertain.Number{Value: v, Terms: []uncertain.Term{
			{Source: uncertain.Source{ID: "anchor:" + code, Kind: uncertain.KindAnchor, U: 0.04}, Sensitivity: 1},
			{Source: uncertain.Source{ID: "scale", Kind: uncertain.KindAnchor, U: 0.02}, Sensitivity: 1},
		}}})
	}
	add := func(subject string, role Role, value float64) {
		n := len(s.Readings)
		time, size, u := float64(n)/6, 3+4*random.Float64(), 0.05
		s.Readings = append(s.Readings, Reading{
			ID: fmt.Sprintf("S-1/%d", n+1), Subject: subject, Role: role, Time: &time, Size: &size, StandardUncertainty: &u,
			Raw: 0.5 + 0.98*value + 0.01*time + 0.03*(size-5) + 0.05*random.NormFloat64(),
		})
	}
	for i := range 100 {
		add(fmt.Sprintf("A%d", i%5), Anchor, values[i%5])
		for k := i * samples / 100; k < (i+1)*samples/100; k++ {
			add(fmt.Sprintf("P%d", k), Sample, -30+60*random.Float64())
		}
	}
	return s
}

func benchmarkFit(b *testing.B, samples int, model Model) {
	s := benchSession(samples)
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Fit(s, model, Policy{}); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkFit(b *testing.B) {
	for _, weights := range []Weights{WeightsDeclared, WeightsReplicate, WeightsEqual} {
		for _, samples := range []int{20, 200} {
			b.Run(fmt.Sprintf("%s/samples=%d", weights, samples), func(b *testing.B) {
				benchmarkFit(b, samples, Model{Drift: DriftLinear, Size: SizeLinear, Weights: weights})
			})
		}
	}
}

// The joint fit with sample values alone, without diagnostics.
func BenchmarkValuesOnly(b *testing.B) {
	for _, weights := range []Weights{WeightsDeclared, WeightsReplicate, WeightsEqual} {
		b.Run(string(weights), func(b *testing.B) {
			s := benchSession(20)
			b.ReportAllocs()
			for b.Loop() {
				valuesOnly(b, s, Model{Drift: DriftLinear, Size: SizeLinear, Weights: weights})
			}
		})
	}
}
