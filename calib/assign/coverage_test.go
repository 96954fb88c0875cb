package assign

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"deltamoor/calib/uncertain"
)

// A laboratory's campaigns with a known truth of 0.
type simulated struct {
	sessions int
	tau      float64 // between-session effect, ‰
	anchorU  float64 // u of each of two anchors that all sessions share
	noiseDF  int     // degrees of freedom of each session's own noise; 0: known
}

// campaign draws one campaign. Own noise is 0.05 and 0.04 ‰ in turn, and the
// sessions' sensitivities to the anchors differ.
func (s simulated) campaign(t testing.TB, random *rand.Rand) Campaign {
	c := Campaign{Assignment: "A"}
	e1, e2 := s.anchorU*random.NormFloat64(), s.anchorU*random.NormFloat64()
	for i := range s.sessions {
		session := fmt.Sprintf("S%02d", i)
		own := 0.05 - 0.01*float64(i%2)
		c1 := 0.5 + 0.1*float64(i%3)
		x := own*random.NormFloat64() + s.tau*random.NormFloat64() + c1*e1 + (1-c1)*e2
		reading := uncertain.Source{ID: "reading:" + session + "/1", Kind: uncertain.KindReading, U: own}
		if s.noiseDF > 0 {
			var chi float64
			for range s.noiseDF {
				z := random.NormFloat64()
				chi += z * z
			}
			reading.U = own * math.Sqrt(chi/float64(s.noiseDF))
			reading.Group = "noise:" + session
			c.Groups = append(c.Groups, uncertain.NewGroup(reading.Group, reading.U*reading.U, float64(s.noiseDF)))
		}
		c.Members = append(c.Members, Member{Session: session, Result: number(t, x, uncertain.Term{Source: reading, Sensitivity: 1},
			source("anchor:M1.1", uncertain.KindAnchor, s.anchorU, c1), source("anchor:M2.1", uncertain.KindAnchor, s.anchorU, 1-c1))})
	}
	return c
}

// A covered counts in how many campaigns each way of stating U held the truth.
type covered struct {
	trials      int
	held        int // U of the recommended estimator
	fixed       int // weighted mean without a between-session component
	normal      int // k = 1.96 whatever the degrees of freedom
	independent int // anchors averaged by √m with everything else
	truncated   int // campaigns with τ̂ = 0
}

func percent(k, of int) float64 { return 100 * float64(k) / float64(of) }

// run simulates campaigns.
func (s simulated) run(t testing.TB, trials int) covered {
	random := rand.New(rand.NewPCG(20240601, uint64(s.sessions)))
	c := covered{trials: trials}
	for range trials {
		campaign := s.campaign(t, random)
		a, err := combineOnly(campaign)
		if err != nil {
			t.Fatal(err)
		}
		count := func(n *int, yes bool) {
			if yes {
				*n++
			}
		}
		off := math.Abs(a.Value.Value)
		count(&c.held, off <= a.Expanded.U)
		count(&c.normal, off <= 1.959963984540054*a.Value.StandardUncertainty())
		count(&c.truncated, a.BetweenSession == 0)
		f, err := Combine(results(campaign.Members))
		if err != nil {
			t.Fatal(err)
		}
		x, err := uncertain.Expand(f.Value, campaign.Groups, uncertain.Coverage{})
		if err != nil {
			t.Fatal(err)
		}
		count(&c.fixed, math.Abs(f.Value.Value) <= x.U)
		var v float64
		for i, w := range weightsOf(a) {
			v += w * w * (campaign.Members[i].Result.Variance() + a.BetweenSession*a.BetweenSession)
		}
		count(&c.independent, off <= a.Expanded.CoverageFactor*math.Sqrt(v))
	}
	return c
}

// 10,000 campaigns each; the noise of a session is 0.05 or 0.04 ‰, known from 8
// degrees of freedom. Five sessions or more that share anchors of a usual u
// are covered in 94 to 96 of 100 campaigns, with and without an effect
// between sessions. Fewer sessions, or none shared, are covered too often where
// there is no effect: a U that held 95 % for every τ could only be Student's t
// times the scatter, which says less than the readings themselves where
// sessions agree by chance. The whole grid: BenchmarkCoverage.
func TestCoverageOfCombinedValuesIs95Percent(t *testing.T) {
	if testing.Short() {
		t.Skip("110,000 campaigns take seconds; run without -short")
	}
	for _, s := range []struct {
		simulated
		low, high float64
	}{
		{simulated{sessions: 8, tau: 0, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 8, tau: 0.02, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 8, tau: 0.06, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 8, tau: 0.15, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 5, tau: 0, anchorU: 0.03, noiseDF: 8}, 94, 96.5},
		{simulated{sessions: 5, tau: 0.06, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 4, tau: 0, anchorU: 0.03, noiseDF: 8}, 94, 97},
		{simulated{sessions: 4, tau: 0.06, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 3, tau: 0, anchorU: 0.03, noiseDF: 8}, 94, 97.5},
		{simulated{sessions: 3, tau: 0.06, anchorU: 0.03, noiseDF: 8}, 94, 96},
		{simulated{sessions: 3, tau: 0, anchorU: 0, noiseDF: 8}, 94, 98.5},
	} {
		c := s.run(t, 10000)
		held, fixed, independent := percent(c.held, c.trials), percent(c.fixed, c.trials), percent(c.independent, c.trials)
		t.Logf("m %d, τ %.2f, anchors %.2f: U holds %.1f %%; without between-session component %.1f %%; k = 1.96 %.1f %%; anchors averaged %.1f %%",
			s.sessions, s.tau, s.anchorU, held, fixed, percent(c.normal, c.trials), independent)
		if held < s.low || held > s.high {
			t.Errorf("m %d, τ %.2f, anchors %.2f: U holds the truth in %.1f %%, expected %v to %v", s.sessions, s.tau, s.anchorU, held, s.low, s.high)
		}
		if s.tau >= 0.06 && fixed > 90 {
			t.Errorf("m %d, τ %.2f: without a between-session component %.1f %%: the simulation does not show what it is for", s.sessions, s.tau, fixed)
		}
		// With a large τ the anchors' part is small, and averaging it away hurts less.
		if s.anchorU > 0 && s.sessions == 8 && s.tau < 0.1 && independent > 90 {
			t.Errorf("m %d, τ %.2f: with anchors averaged %.1f %%: the simulation does not show what it is for", s.sessions, s.tau, independent)
		}
	}
}

// The grid of the table in doc.go, in % of campaigns:
//
//	go test -run '^$' -bench Coverage -benchtime 10000x ./calib/assign
func BenchmarkCoverage(b *testing.B) {
	for _, m := range []int{3, 4, 5, 6, 8, 12} {
		for _, anchor := range []float64{0, 0.03} {
			for _, tau := range []float64{0, 0.02, 0.045, 0.06, 0.15} {
				s := simulated{sessions: m, tau: tau, anchorU: anchor, noiseDF: 8}
				b.Run(fmt.Sprintf("m=%d/anchors=%v/tau=%v", m, anchor, tau), func(b *testing.B) {
					c := s.run(b, b.N)
					b.ReportMetric(percent(c.held, b.N), "%U")
					b.ReportMetric(percent(c.fixed, b.N), "%without-tau")
					b.ReportMetric(percent(c.normal, b.N), "%k=1.96")
					b.ReportMetric(percent(c.independent, b.N), "%anchors-averaged")
					b.ReportMetric(percent(c.truncated, b.N), "%tau=0")
				})
			}
		}
	}
}

// weightsOf reads the sessions' weights from their effects.
func weightsOf(a *Analysis) []float64 {
	var w []float64
	for _, x := range a.Value.Terms {
		if x.Kind == uncertain.KindCampaign {
			w = append(w, x.Sensitivity)
		}
	}
	return w
}

func BenchmarkAnalyseEightSessions(b *testing.B) {
	c := simulated{sessions: 8, tau: 0.05, anchorU: 0.03, noiseDF: 8}.campaign(b, rand.New(rand.NewPCG(1, 2)))
	b.ReportAllocs()
	for b.Loop() {
		if _, err := Analyse(c); err != nil {
			b.Fatal(err)
		}
	}
}
