package assign

import (
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"pgregory.net/rapid"

	"deltamoor/calib/uncertain"
)

var toShow = map[Estimator]string{DerSimonianLaird: "DL", PauleMandel: "PM", RestrictedLikelihood: "REML"}

// The published sets, against R's metafor and the figures printed by others.
func TestEstimatorsMatchPublishedCombinations(t *testing.T) {
	for _, id := range []string{"combine-bcg", "combine-cadmium-vaporisation", "combine-ccqm-k25"} {
		c, y, u := loadResults(t, id)
		members := independent(t, y, u)
		for e, name := range toShow {
			a := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{Estimator: e}})
			c.check(t, "computed."+name+".tau2", a.BetweenSession*a.BetweenSession, 1e-11)
			c.check(t, "computed."+name+".mu", a.Value.Value, 1e-12)
			c.check(t, "computed."+name+".se", a.Value.StandardUncertainty(), 1e-11)
			for _, shown := range a.Estimates {
				c.check(t, "computed."+toShow[shown.Estimator]+".mu", shown.Value, 1e-12)
				c.check(t, "computed."+toShow[shown.Estimator]+".se", shown.StandardUncertainty, 1e-11)
			}
			c.check(t, "computed.Q", *a.Heterogeneity.Q, 1e-12)
			c.check(t, "computed.df", float64(a.Heterogeneity.DegreesOfFreedom), 0)
			c.check(t, "computed.p_Q", *a.Heterogeneity.P, 1e-9)
			c.check(t, "computed.I2_percent_DL_Q", 100**a.Heterogeneity.ISquared, 1e-12)
			if e == RestrictedLikelihood {
				c.check(t, "computed.REML_HKSJ_se", *a.HartungKnapp, 1e-11)
				if id == "combine-bcg" {
					c.check(t, "reml_tau2", a.BetweenSession*a.BetweenSession, 1e-11)
					c.check(t, "reml_tau", a.BetweenSession, 1e-11)
					c.check(t, "reml_I2_percent", 100**a.Heterogeneity.RandomISquared, 1e-11)
					c.check(t, "reml_mu", a.Value.Value, 1e-11)
					c.check(t, "reml_se", a.Value.StandardUncertainty(), 1e-11)
					c.check(t, "Q", *a.Heterogeneity.Q, 1e-12)
					g := a.Groups[len(a.Groups)-1]
					c.check(t, "reml_se_tau2", math.Sqrt(g.Covariance[0][0]), 1e-11)
					z := uncertain.CoverageFactor(0.95, math.Inf(1))
					c.check(t, "reml_ci_low", a.Value.Value-z*a.Value.StandardUncertainty(), 1e-11)
					c.check(t, "reml_ci_high", a.Value.Value+z*a.Value.StandardUncertainty(), 1e-11)
				}
			}
		}
		fixed, err := Combine(results(members))
		if err != nil {
			t.Fatal(err)
		}
		c.check(t, "computed.FE.mu", fixed.Value.Value, 1e-12)
		c.check(t, "computed.FE.se", fixed.Value.StandardUncertainty(), 1e-12)
		// Hedges' and the maximum likelihood estimator, Birge's scaling, the spread
		// for a new laboratory and the arithmetic mean are not ours.
		c.complete(t, "computed.HE", "computed.ML", "computed.FE.tau2", "computed.birge", "computed.se_FE_birge", "computed.DL_prediction", "computed.arithmetic", "computed.se_arithmetic")
	}
}

type randomCases struct {
	Cases []struct {
		Kind   string
		Y, U   []float64
		Common [][]float64
	}
}

// tauNear compares variances near zero too: absolute to 1e-10 of the data's own variance.
func tauNear(t *testing.T, c *published, name string, got, scale float64) {
	t.Helper()
	want := value(t, c, name)
	if math.Abs(got-want) > 1e-8*want+1e-10*scale {
		t.Errorf("%s: got τ² %.12g, want %.12g", name, got, want)
	}
}

func TestEstimatorsMatchMetaforOnRandomData(t *testing.T) {
	var in randomCases
	c := loadCase(t, "metafor-random", &in)
	for k, d := range in.Cases {
		at := func(s string) string { return fmt.Sprintf("%d.%s", k, s) }
		members := independent(t, d.Y, d.U)
		for i := range d.Common {
			for s, b := range d.Common[i] {
				x := members[i].Result
				members[i].Result = number(t, x.Value, append(x.Terms, source(fmt.Sprintf("anchor:M%d.1", s), uncertain.KindAnchor, 1, b))...)
			}
		}
		p := takeApart(results(members))
		s := newSpread(p, nil)
		c.check(t, at("Q"), s.q(0), 1e-10)
		var scale float64
		for _, z := range s.z {
			scale += z * z / s.df()
		}
		for e, name := range toShow {
			tau2, ok := estimate(s, e)
			if !ok {
				t.Fatalf("case %d: no %s", k, e)
			}
			tauNear(t, c, at(name+".tau2"), tau2, scale)
		}
		if d.Kind == "common" {
			tau2, _ := estimate(s, RestrictedLikelihood)
			w := s.best(p, tau2)
			for i, wi := range w {
				near(t, at("weight"), 1+wi, 1+value(t, c, at(fmt.Sprintf("REML.weights.%d", i))), 1e-9)
			}
			out, err := uncertain.Linear(0, w, results(members))
			if err != nil {
				t.Fatal(err)
			}
			c.check(t, at("REML.value"), out.Value, 1e-8)
			near(t, at("rma.mv value"), out.Value, value(t, c, at("rma_mv.value")), 1e-7)
			near(t, at("rma.mv u"), value(t, c, at("REML.u")), value(t, c, at("rma_mv.u")), 1e-5)
			u := out.Variance()
			for _, wi := range w {
				u += wi * wi * tau2
			}
			c.check(t, at("REML.u"), math.Sqrt(u), 1e-8)
			// The likelihood's own optimiser stops at about 1e-7.
			if got := value(t, c, at("rma_mv.tau2")); math.Abs(got-tau2) > 1e-6*(got+scale) {
				t.Errorf("case %d: τ² %.9g, rma.mv %.9g", k, tau2, got)
			}
			continue
		}
		for e, name := range toShow {
			x := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{Estimator: e}})
			c.check(t, at(name+".value"), x.Value.Value, 1e-9)
			c.check(t, at(name+".u"), x.Value.StandardUncertainty(), 1e-8)
			near(t, at(name+".i2"), 1+*x.Heterogeneity.RandomISquared, 1+value(t, c, at(name+".i2"))/100, 1e-8)
		}
		a := analyse(t, Campaign{Assignment: "A", Members: members})
		c.check(t, at("p"), *a.Heterogeneity.P, 1e-8)
		c.check(t, at("hartung_knapp_u"), *a.HartungKnapp, 1e-8)
		// 2/tr(PP) is what metafor gives for REML; for PM it has another formula.
		reml := analyse(t, Campaign{Assignment: "A", Members: members, Policy: Policy{Estimator: RestrictedLikelihood}})
		tau2 := reml.BetweenSession * reml.BetweenSession
		_, pp := s.traces(tau2)
		c.check(t, at("REML.se_tau2"), math.Sqrt(2/pp), 1e-7)
		if tau2 > 0 { // a truncated zero has the variance of the root that was cut off
			near(t, at("group"), reml.Groups[0].Covariance[0][0], 2/pp, 1e-12)
		}
		near(t, at("tau_low"), 1+*a.Heterogeneity.BetweenLow, 1+value(t, c, at("tau_low")), 1e-6)
		near(t, at("tau_high"), *a.Heterogeneity.BetweenHigh, value(t, c, at("tau_high")), 1e-6)
		for i, e := range a.Sessions {
			c.check(t, at(fmt.Sprintf("left_out_value.%d", i)), e.LeftOut.Value, 1e-7)
			near(t, at("left_out_tau2 + scale"), scale+e.LeftOut.BetweenSession*e.LeftOut.BetweenSession, scale+value(t, c, at(fmt.Sprintf("left_out_tau2.%d", i))), 1e-6)
		}
	}
	// Formulas of metafor for DL and PM that the group of τ̂² does not use.
	var unused []string
	for k := range in.Cases {
		unused = append(unused, fmt.Sprintf("%d.DL.se_tau2", k), fmt.Sprintf("%d.PM.se_tau2", k))
	}
	c.complete(t, unused...)
}

func value(t *testing.T, c *published, name string) float64 {
	t.Helper()
	c.used[name] = true
	var v float64
	if _, err := fmt.Sscan(c.byName[name].Computed, &v); err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	return v
}

// loadResults reads values and their u; the case may give variances instead.
func loadResults(t *testing.T, id string) (c *published, y, u []float64) {
	t.Helper()
	var in map[string]json.RawMessage
	c = loadCase(t, id, &in)
	read := func(names ...string) []float64 {
		for _, name := range names {
			var v []float64
			if in[name] != nil && json.Unmarshal(in[name], &v) == nil {
				return v
			}
		}
		return nil
	}
	y, u = read("y_binary64", "y"), read("u_binary64", "u")
	if u == nil {
		for _, v := range read("var") {
			u = append(u, math.Sqrt(v))
		}
	}
	return c, y, u
}

func TestEstimatesWithoutSharedSourcesTakeTheShortWay(t *testing.T) {
	var in randomCases
	c := loadCase(t, "metafor-random", &in)
	for k, d := range in.Cases {
		if d.Kind != "independent" {
			continue
		}
		v := make([]float64, len(d.U))
		for i, u := range d.U {
			v[i] = u * u
		}
		for e, name := range toShow {
			b, err := EstimateBetween(d.Y, v, e)
			if err != nil {
				t.Fatal(err)
			}
			tauNear(t, c, fmt.Sprintf("%d.%s.tau2", k, name), b.Variance, 1e-3)
			c.check(t, fmt.Sprintf("%d.Q", k), *b.Heterogeneity.Q, 1e-10)
			if e == RestrictedLikelihood {
				c.check(t, fmt.Sprintf("%d.REML.se_tau2", k), math.Sqrt(b.VarianceVariance), 1e-7)
			}
		}
	}
}

func TestEstimateBetweenRefusesWhatItCannotUse(t *testing.T) {
	for name, in := range map[string][2][]float64{
		"one value": {{1}, {1}}, "lengths": {{1, 2}, {1}}, "negative": {{1, 2}, {1, -1}}, "NaN": {{1, math.NaN()}, {1, 1}},
	} {
		var refused *InputError
		if _, err := EstimateBetween(in[0], in[1], PauleMandel); !errors.As(err, &refused) {
			t.Errorf("%s: got %v", name, err)
		}
	}
	var refused *InputError
	if _, err := EstimateBetween([]float64{1, 2}, []float64{0, 1}, DerSimonianLaird); !errors.As(err, &refused) {
		t.Errorf("a variance of 0: got %v", err)
	}
	if _, err := EstimateBetween([]float64{1, 2}, []float64{1, 1}, "best"); !errors.As(err, &refused) {
		t.Errorf("unknown estimator: got %v", err)
	}
	// Without variances: the sample variance, with 2s⁴/(n − 1).
	b, err := EstimateBetween([]float64{1, 2, 4}, []float64{0, 0, 0}, "")
	if err != nil {
		t.Fatal(err)
	}
	near(t, "τ̂²", b.Variance, 7.0/3, 1e-12)
	near(t, "Var(τ̂²)", b.VarianceVariance, (7.0/3)*(7.0/3), 1e-12)
	if b.Heterogeneity.Q != nil {
		t.Error("Q exists without variances")
	}
}

// A shift of all values moves the mean by itself and nothing else; a stretch by
// a power of two stretches all.
func TestShiftAndStretchOfValues(t *testing.T) {
	rapid.Check(t, func(r *rapid.T) {
		m := rapid.IntRange(2, 9).Draw(r, "m")
		y, u := make([]float64, m), make([]float64, m)
		for i := range y {
			y[i] = rapid.Float64Range(-1, 1).Draw(r, "y")
			u[i] = rapid.Float64Range(0.05, 0.5).Draw(r, "u")
		}
		shift := float64(rapid.IntRange(-500, 500).Draw(r, "shift"))
		moved, wide, wideU := make([]float64, m), make([]float64, m), make([]float64, m)
		for i := range y {
			moved[i], wide[i], wideU[i] = y[i]+shift, 4*y[i], 4*u[i]
		}
		for e := range toShow {
			policy := Policy{Estimator: e}
			a := analyse(t, Campaign{Assignment: "A", Members: independent(t, y, u), Policy: policy})
			b := analyse(t, Campaign{Assignment: "A", Members: independent(t, moved, u), Policy: policy})
			c := analyse(t, Campaign{Assignment: "A", Members: independent(t, wide, wideU), Policy: policy})
			if d := b.Value.Value - a.Value.Value - shift; math.Abs(d) > 1e-9 {
				r.Errorf("%s: the mean moves by %g too much", e, d)
			}
			if d := b.BetweenSession*b.BetweenSession - a.BetweenSession*a.BetweenSession; math.Abs(d) > 1e-9 {
				r.Errorf("%s: τ² changes by %g", e, d)
			}
			if d := c.Value.StandardUncertainty()/4 - a.Value.StandardUncertainty(); math.Abs(d) > 1e-12 {
				r.Errorf("%s: u stretches wrongly by %g", e, d)
			}
		}
	})
}

func BenchmarkEstimateBetweenOfThousandSessions(b *testing.B) {
	random := rand.New(rand.NewPCG(1, 1))
	y, v := make([]float64, 1000), make([]float64, 1000)
	for i := range y {
		y[i], v[i] = random.NormFloat64(), 0.1+random.Float64()
	}
	for b.Loop() {
		if _, err := EstimateBetween(y, v, PauleMandel); err != nil {
			b.Fatal(err)
		}
	}
}
