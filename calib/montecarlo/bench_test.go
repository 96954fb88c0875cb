//go:build unix

package montecarlo

import (
	"fmt"
	"syscall"
	"testing"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

// depthThree is the chain of calib/testdata/beside/draws.py: in each generation a
// line through two anchors, five readings of each and of a sample, whose value
// is an anchor of the next. Readings are u = 0.05 ‰ about 0.3 + 0.98·true.
func depthThree(t testing.TB) (c *Chain, last Handle) {
	t.Helper()
	c = NewChain(nil, nil)
	known := func(code string, value, u float64) (uncertain.Number, Handle) {
		n := number(value, "anchor:"+code, u)
		return n, add(t, c, n)
	}
	a, ha := known("A", -35, 0.04)
	for g, x := range []struct {
		code             string
		value, u, sample float64
	}{{"B", 20, 0.04, -12}, {"C", 15, 0.03, 3}, {"D", -40, 0.05, -20}} {
		b, hb := known(x.code, x.value, x.u)
		s := calib.Session{NoiseGroup: fmt.Sprint("fit:", g), Anchors: []calib.AssignedValue{{Material: "M1", Value: a}, {Material: "M2", Value: b}}}
		for i := range 15 {
			u := 0.05
			rd := calib.Reading{ID: fmt.Sprintf("S-%d/%d", g, i+1), Subject: []string{"M1", "M2", "P"}[i%3], Role: calib.Anchor, StandardUncertainty: &u,
				Raw: 0.3 + float64(0.98*[]float64{a.Value, b.Value, x.sample}[i%3])}
			if i%3 == 2 {
				rd.Role = calib.Sample
			}
			s.Readings = append(s.Readings, rd)
		}
		r := fit(t, s, calib.Model{})
		of, err := c.Fit(r, []Handle{ha, hb})
		if err != nil {
			t.Fatal(err)
		}
		a, ha = r.Number(0), of[0]
	}
	return c, ha
}

// processor is this process' time on processors, which others on a shared
// machine do not lengthen as they do the time on the wall.
func processor(t testing.TB) float64 {
	var u syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &u); err != nil {
		t.Fatal(err)
	}
	return float64(u.Utime.Nano() + u.Stime.Nano())
}

// The depth-3 chain, a million draws at a time, counted and judged: the other
// side of calib/testdata/beside/draws.py. ns/draw is the figure to compare.
func BenchmarkDepthThree(b *testing.B) {
	for _, workers := range []int{1, 2} {
		b.Run(fmt.Sprint("workers=", workers), func(b *testing.B) {
			c, last := depthThree(b)
			b.ReportAllocs()
			trials, start := 0, processor(b)
			for b.Loop() {
				out, err := c.Run([]Handle{last}, Options{Seed: 1, MaxTrials: 1_000_000, All: true, Workers: workers})
				if err != nil {
					b.Fatal(err)
				}
				trials += out[0].Trials
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(trials), "ns/draw")
			b.ReportMetric((processor(b)-start)/float64(trials), "cpu-ns/draw")
		})
	}
}

// Sessions of three anchors, by model: the compiled line, and the engine where
// there is none (memory).
func BenchmarkSession(b *testing.B) {
	for _, m := range append(models, calib.Model{Weights: calib.WeightsSize}) {
		for _, how := range []planKind{{}, {engine: true}} {
			b.Run(fmt.Sprintf("%+v/engine=%v", m, how.engine), func(b *testing.B) {
				c := NewChain(nil, nil)
				of, err := c.Fit(fit(b, session("S-1", outside(), 3), m), nil)
				if err != nil {
					b.Fatal(err)
				}
				p, err := c.compile(of, how)
				if err != nil {
					b.Fatal(err)
				}
				machine, err := p.machine()
				if err != nil {
					b.Fatal(err)
				}
				machine.stream = newStream(1, 1)
				b.ReportAllocs()
				trials, start := 0, processor(b)
				for b.Loop() {
					if err := p.run(machine, lanes); err != nil {
						b.Fatal(err)
					}
					trials += lanes
				}
				b.ReportMetric((processor(b)-start)/float64(trials), "cpu-ns/draw")
			})
		}
	}
}
