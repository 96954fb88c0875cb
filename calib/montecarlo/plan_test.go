package montecarlo

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"fmt"
	"math"
	"slices"
	"testing"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

// trials runs n trials of a plan and returns each quantity's values.
func trials(t testing.TB, c *Chain, how planKind, seed uint64, n int, of ...Handle) [][]float64 {
	t.Helper()
	p, err := c.compile(of, how)
	if err != nil {
		t.Fatal(err)
	}
	m, err := p.machine()
	if err != nil {
		t.Fatal(err)
	}
	m.stream = newStream(seed, 0)
	out := make([][]float64, len(of))
	for done := 0; done < n; done += lanes {
		k := min(lanes, n-done)
		if err := p.run(m, k); err != nil {
			t.Fatal(err)
		}
		for i, slot := range p.out {
			out[i] = append(out[i], m.slots[slot][:k]...)
		}
	}
	return out
}

// planChains are chains with every kind of fit that has a line form.
func planChains(t testing.TB) map[string]func() (*Chain, []Handle) {
	of := func(anchors []calib.AssignedValue, m calib.Model) func() (*Chain, []Handle) {
		return func() (*Chain, []Handle) {
			t.Helper()
			c := NewChain(nil, nil)
			h, err := c.Fit(fit(t, session("S-1", anchors, 3), m), nil)
			if err != nil {
				t.Fatal(err)
			}
			return c, h
		}
	}
	shared := outside()
	for i := range shared { // a source that all three have, and one of two of them
		shared[i].Value.Terms = append(shared[i].Value.Terms, uncertain.Term{Source: uncertain.Source{ID: "scale", U: 0.03}, Sensitivity: 1 + float64(0.1*float64(i))})
		if i > 0 {
			shared[i].Value.Terms = append(shared[i].Value.Terms, uncertain.Term{Source: uncertain.Source{ID: "zone", U: 0.02}, Sensitivity: 1})
		}
	}
	exact := outside()
	for i := range exact {
		exact[i].Value = uncertain.Exact(exact[i].Value.Value)
	}
	rough := outside()
	for i := range rough {
		rough[i].Value.Terms[0].U = 1.5
	}
	out := map[string]func() (*Chain, []Handle){
		"three generations": func() (*Chain, []Handle) {
			c, last, difference := threeGenerations(t)
			return c, []Handle{last, difference}
		},
		"depth three": func() (*Chain, []Handle) {
			c, last := depthThree(t)
			return c, []Handle{last}
		},
		"shared sources": of(shared, calib.Model{Drift: calib.DriftLinear}),
		"exact anchors":  of(exact, calib.Model{Size: calib.SizeLog}),
		"rough anchors":  of(rough, calib.Model{Drift: calib.DriftQuadratic, Weights: calib.WeightsReplicate}),
		"two anchors":    of(outside()[1:], calib.Model{Drift: calib.DriftLinear, Size: calib.SizeInverse}),
		"size weights": func() (*Chain, []Handle) {
			c := NewChain(nil, nil)
			s := session("S-1", outside(), 3)
			for i := range 20 { // enough to know both variances
				more := session("S-1", outside(), uint64(50+i))
				for k, rd := range more.Readings {
					rd.ID = fmt.Sprintf("S-1/%d", 15*(i+1)+k+1)
					s.Readings = append(s.Readings, rd)
				}
			}
			h, err := c.Fit(fit(t, s, calib.Model{Weights: calib.WeightsSize}), nil)
			if err != nil {
				t.Fatal(err)
			}
			return c, h
		},
		"single anchor": func() (*Chain, []Handle) {
			return of(outside()[:1], calib.Model{AllowSingleAnchor: true, Drift: calib.DriftLinear})()
		},
	}
	for _, m := range models {
		if m.Memory == "" {
			out[fmt.Sprintf("%+v", m)] = of(outside(), m)
		}
	}
	return out
}

// The compiled line is the engine's fit: for the same draws, both give the same
// values, to what the engine's own iteration leaves (1e-8 of a standard
// uncertainty, and rounding).
func TestPlanAgreesWithTheEngine(t *testing.T) {
	for name, chain := range planChains(t) {
		c, of := chain()
		lines := trials(t, c, planKind{apart: true}, 5, 600, of...)
		engine := trials(t, c, planKind{apart: true, engine: true}, 5, 600, of...)
		for i, h := range of {
			u := c.numbers[h].StandardUncertainty()
			for k := range lines[i] {
				if d := math.Abs(lines[i][k] - engine[i][k]); !(d <= 1e-7*u+1e-11*math.Abs(engine[i][k])) {
					t.Errorf("%s, quantity %d, trial %d: %.15g by the line, %.15g by the engine (%.1g u)", name, i, k, lines[i][k], engine[i][k], d/u)
					break
				}
			}
		}
	}
}

// What is compiled has no fit left for the engine, or the test above compares
// the engine with itself.
func TestPlansUseTheLineForm(t *testing.T) {
	for name, chain := range planChains(t) {
		c, of := chain()
		p, err := c.compile(of, planKind{})
		if err != nil {
			t.Fatal(err)
		}
		if len(p.refits) > 0 {
			t.Errorf("%s: %d fits are solved by the engine", name, len(p.refits))
		}
	}
	c := NewChain(nil, nil)
	of, err := c.Fit(fit(t, session("S-1", outside(), 3), calib.Model{Memory: calib.MemoryCarryover}), nil)
	if err != nil {
		t.Fatal(err)
	}
	p, err := c.compile(of, planKind{})
	if err != nil {
		t.Fatal(err)
	}
	if len(p.refits) != 1 {
		t.Errorf("memory: %d fits are solved by the engine, want 1", len(p.refits))
	}
}

// Drawn together or apart, quantities have the same means, covariance and
// quartiles: within four standard deviations of what that many trials leave.
func TestDrawingTogetherKeepsTheDistribution(t *testing.T) {
	n := 60_000
	if testing.Short() { // the race detector's share
		n = 6_000
	}
	for name, chain := range planChains(t) {
		c, of := chain()
		together, apart := trials(t, c, planKind{}, 11, n, of...), trials(t, c, planKind{apart: true}, 12, n, of...)
		for i := range of {
			for j := i; j < len(of); j++ {
				a, va := productMean(together[i], together[j])
				b, vb := productMean(apart[i], apart[j])
				near(t, fmt.Sprintf("%s: covariance of %d and %d", name, i, j), a, b, 4*math.Sqrt((va+vb)/float64(n)))
			}
			u := math.Sqrt(c.numbers[of[i]].Variance())
			for _, p := range []float64{0.025, 0.25, 0.75, 0.975} {
				x := c.numbers[of[i]].Value + u*2*(p-0.5)*2
				fa, fb := below(together[i], x), below(apart[i], x)
				near(t, fmt.Sprintf("%s: distribution of %d at %g u", name, i, 4*(p-0.5)), fa, fb, 4*math.Sqrt(2*0.25/float64(n)))
			}
		}
	}
}

func below(v []float64, x float64) float64 {
	n := 0
	for _, y := range v {
		if y < x {
			n++
		}
	}
	return float64(n) / float64(len(v))
}

// productMean is the covariance of two samples, and the variance of one product.
func productMean(a, b []float64) (mean, variance float64) {
	var ma, mb float64
	for i := range a {
		ma += a[i] / float64(len(a))
		mb += b[i] / float64(len(b))
	}
	var square float64
	for i := range a {
		p := (a[i] - ma) * (b[i] - mb)
		mean += p / float64(len(a))
		square += p * p / float64(len(a))
	}
	return mean, square - mean*mean
}

// Where Newton's method does not settle, the search finds the same minimum as
// it does elsewhere.
func TestSearchFindsTheMinimum(t *testing.T) {
	for name, chain := range planChains(t) {
		c, of := chain()
		p, err := c.compile(of, planKind{})
		if err != nil {
			t.Fatal(err)
		}
		m, err := p.machine()
		if err != nil {
			t.Fatal(err)
		}
		m.stream = newStream(8, 0)
		for _, step := range p.ops {
			m.n = 20
			if err := step.run(m); err != nil {
				t.Fatal(err)
			}
			o, ok := step.(*lineOp)
			if !ok {
				continue
			}
			for j := range m.n {
				var x, y []float64
				for k := range o.x {
					x, y = append(x, m.slots[o.x[k]][j]), append(y, m.slots[o.y[k]][j])
				}
				rest := make([]float64, len(x))
				alpha, beta, ok := o.solve(x, y, rest)
				if !ok {
					t.Fatalf("%s, trial %d: not settled", name, j)
				}
				found, slope := o.search(x, y, rest)
				near(t, name+" slope", slope, beta, 1e-7*math.Abs(beta))
				near(t, name+" intercept", found, alpha, 1e-6*(1+math.Abs(alpha)))
			}
		}
	}
}

// Two calibrations of one session, one with another model, share the readings
// and not their variance: a difference of their results is that of the same
// draws.
func TestFitsOfOneSessionShareTheirReadings(t *testing.T) {
	c := NewChain(nil, nil)
	var anchors, of []Handle
	for _, a := range outside() {
		anchors = append(anchors, add(t, c, a.Value))
	}
	for _, m := range []calib.Model{{}, {Drift: calib.DriftLinear}} {
		h, err := c.Fit(fit(t, session("S-1", outside(), 3), m), anchors)
		if err != nil {
			t.Fatal(err)
		}
		of = append(of, h[0])
	}
	d, err := c.Linear(0, []float64{1, -1}, of)
	if err != nil {
		t.Fatal(err)
	}
	x := run(t, c, Options{Seed: 3, MaxTrials: 400_000, All: true}, d)[0]
	u := c.numbers[d].StandardUncertainty()
	near(t, "u of the difference", *x.StandardUncertainty, u, 0.01*u)
	if single := c.numbers[of[0]].StandardUncertainty(); u > single/2 {
		t.Errorf("u of the difference %.3g, of one result %.3g: the readings are not shared", u, single)
	}
}

// Counts give the end points that the sorted trials have, to less than a class;
// the shortest interval too.
func TestCountedQuantilesAreThoseOfTheSortedTrials(t *testing.T) {
	for _, d := range []Distribution{Normal, Rectangular, Triangular} {
		for _, p := range []float64{0.5, 0.95, 0.99} {
			c := NewChain(nil, map[string]Distribution{"a": d})
			h := add(t, c, number(7, "a", 0.3))
			out := run(t, c, Options{Seed: 4, Probability: p, MaxTrials: 100_000, All: true}, h)[0]
			var sorted []float64
			for k := range 100_000 / blockSize(p) {
				sorted = append(sorted, blockOf(t, c, h, 4, k, blockSize(p))...)
			}
			slices.Sort(sorted)
			low, high := interval(sorted, p)
			near(t, fmt.Sprintf("%s %v low", d, p), out.Low, low, out.Resolution)
			near(t, fmt.Sprintf("%s %v high", d, p), out.High, high, out.Resolution)
			if out.Trials != len(sorted) {
				t.Errorf("%d trials, want %d", out.Trials, len(sorted))
			}
			_, q := ranks(len(sorted), p)
			best := math.Inf(1)
			for r := 0; r+q < len(sorted); r++ {
				best = min(best, sorted[r+q]-sorted[r])
			}
			near(t, fmt.Sprintf("%s %v shortest", d, p), out.ShortestHigh-out.ShortestLow, best, 2*out.Resolution)
			if out.Resolution > out.Check.Tolerance/classesByDelta*1.000001 {
				t.Errorf("%s %v: classes of %v, δ %v", d, p, out.Resolution, out.Check.Tolerance)
			}
		}
	}
}

func blockOf(t testing.TB, c *Chain, h Handle, seed uint64, block, n int) []float64 {
	t.Helper()
	p, err := c.compile([]Handle{h}, planKind{})
	if err != nil {
		t.Fatal(err)
	}
	m, err := p.machine()
	if err != nil {
		t.Fatal(err)
	}
	m.stream = newStream(seed, uint64(block))
	var out []float64
	for done := 0; done < n; done += lanes {
		k := min(lanes, n-done)
		if err := p.run(m, k); err != nil {
			t.Fatal(err)
		}
		out = append(out, m.slots[p.out[0]][:k]...)
	}
	return out
}

// The bits of trials are these on every architecture and at every level of
// instructions: run this with GOAMD64=v3, GOARCH=386 or on arm64.
func TestTrialsHaveTheSameBitsEverywhere(t *testing.T) {
	want := map[string]string{
		"depth three": "d013886504c25911", "shared sources": "338372850485ffbd", "rough anchors": "10f0a8e4e7d76fef",
		"size weights": "2c4eadf14065abc5", "single anchor": "63d40e18812527b4",
	}
	chains := planChains(t)
	for name, hash := range want {
		c, of := chains[name]()
		h := sha256.New()
		for _, v := range trials(t, c, planKind{}, 99, 2000, of...) {
			binary.Write(h, binary.BigEndian, v) //nolint:errcheck // a hash never fails
		}
		if got := hex.EncodeToString(h.Sum(nil)[:8]); got != hash {
			t.Errorf("%s: %q", name, got)
		}
	}
}
