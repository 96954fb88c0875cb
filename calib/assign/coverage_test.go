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
	sessions   int
	tau        float64 // between-session effect, ‰
	anchorU    float64 // u of each of two anchors that all sessions share
	noiseDF    int     // degrees of freedom of each session's own noise; 0: known
	recommends string  // what coverage is asked for
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

// 10,000 campaigns each. With eight sessions and anchors of a usual u, U holds
// the truth in 94 to 96 of 100 campaigns, with and without between-session
// effects. With few sessions and no effect it holds it too often, because a
// truncated zero is not taken as evidence of none: Student's t of m − 1 then
// widens an u that the scatter never makes smaller.
func TestCoverageOfCombinedValuesIs95Percent(t *testing.T) {
	if testing.Short() {
		t.Skip("50,000 campaigns take seconds; run without -short")
	}
	const trials = 10000
	for _, s := range []simulated{
		{sessions: 8, tau: 0, anchorU: 0.03, noiseDF: 8, recommends: "94 to 96"},
		{sessions: 8, tau: 0.06, anchorU: 0.03, noiseDF: 8, recommends: "94 to 96"},
		{sessions: 8, tau: 0.15, anchorU: 0.03, noiseDF: 8, recommends: "94 to 96"},
		{sessions: 4, tau: 0.06, anchorU: 0.03, noiseDF: 8, recommends: "94 to 96"},
		{sessions: 3, tau: 0, anchorU: 0, noiseDF: 8, recommends: "above 94"},
	} {
		random := rand.New(rand.NewPCG(20240601, uint64(s.sessions)))
		var held, fixed, normal, independent int
		for range trials {
			c := s.campaign(t, random)
			a, err := combineOnly(c)
			if err != nil {
				t.Fatal(err)
			}
			off := math.Abs(a.Value.Value)
			if off <= a.Expanded.U {
				held++
			}
			if off <= 1.959963984540054*a.Value.StandardUncertainty() {
				normal++
			}
			// Weighted mean without a between-session component.
			f, err := Combine(results(c.Members))
			if err != nil {
				t.Fatal(err)
			}
			x, err := uncertain.Expand(f.Value, c.Groups, uncertain.Coverage{})
			if err != nil {
				t.Fatal(err)
			}
			if math.Abs(f.Value.Value) <= x.U {
				fixed++
			}
			// Everything averaged by √m, the anchors too, with the same k.
			var v float64
			for i, w := range weightsOf(a) {
				v += w * w * (c.Members[i].Result.Variance() + a.BetweenSession*a.BetweenSession)
			}
			if off <= a.Expanded.CoverageFactor*math.Sqrt(v) {
				independent++
			}
		}
		percent := func(k int) float64 { return 100 * float64(k) / trials }
		t.Logf("m %d, τ %.2f, anchors %.2f, ν %d: U holds %.1f %%; without between-session component %.1f %%; k = 1.96 %.1f %%; anchors averaged %.1f %%",
			s.sessions, s.tau, s.anchorU, s.noiseDF, percent(held), percent(fixed), percent(normal), percent(independent))
		if p := percent(held); p < 94 || s.recommends == "94 to 96" && p > 96 {
			t.Errorf("m %d, τ %.2f: U holds the truth in %.1f %%, expected %s", s.sessions, s.tau, p, s.recommends)
		}
		if s.tau >= 0.06 && percent(fixed) > 90 {
			t.Errorf("m %d, τ %.2f: without a between-session component %.1f %%: the simulation does not show what it is for", s.sessions, s.tau, percent(fixed))
		}
		// With a large τ the anchors' part is small, and averaging it away hurts less.
		if s.anchorU > 0 && s.sessions == 8 && s.tau < 0.1 && percent(independent) > 90 {
			t.Errorf("m %d, τ %.2f: with anchors averaged %.1f %%: the simulation does not show what it is for", s.sessions, s.tau, percent(independent))
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
