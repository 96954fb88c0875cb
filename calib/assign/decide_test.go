package assign

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"deltamoor/calib/uncertain"
)

func decision(t testing.TB) (DecisionInput, *Decision) {
	t.Helper()
	a := analyse(t, Campaign{Assignment: "A", Members: shared(t, []float64{-26.1, -26.2, -26.12, -26.17}, []float64{0.04, 0.04, 0.04, 0.04},
		[][]float64{{0.6, 0.4}, {0.6, 0.4}, {0.6, 0.4}, {0.6, 0.4}}, []float64{0.03, 0.05})})
	h := study([][]float64{{-26.1, -26.15}, {-26.2, -26.12}, {-26.17, -26.14}, {-26.1, -26.05}, {-26.2, -26.22}})
	for i := range h.Units {
		h.Units[i].Measurements[0].Portion = 0.5 + 0.1*float64(i)
	}
	s, err := AnalyseStability(StabilityStudy{Group: "stability:L1/1", Isochronous: true, ShelfLife: 60, Points: []StabilityPoint{
		{0, -26.1, ""}, {0, -26.14, ""}, {12, -26.15, ""}, {12, -26.11, ""}, {24, -26.12, ""}, {24, -26.15, ""}}})
	if err != nil {
		t.Fatal(err)
	}
	in := DecisionInput{Lot: "L1", StudyVersion: "1", Characterisation: a, Homogeneity: homogeneity(t, h), Stability: s}
	d, err := Decide(in)
	if err != nil {
		t.Fatal(err)
	}
	return in, d
}

func TestAssignedValueAddsItsThreePartsInQuadrature(t *testing.T) {
	in, d := decision(t)
	u2 := in.Characterisation.Value.Variance() + math.Pow(in.Homogeneity.StandardUncertainty, 2) + math.Pow(in.Stability.StandardUncertainty, 2)
	near(t, "u²", d.StandardUncertainty*d.StandardUncertainty, u2, 1e-12)
	near(t, "U", d.Expanded.U, d.Expanded.CoverageFactor*d.StandardUncertainty, 1e-14)
	// ν_eff by hand: campaign 3, homogeneity and stability by their groups.
	var campaign float64
	for _, g := range in.Characterisation.Groups {
		if g.ID == "campaign:A" {
			campaign = g.Covariance[0][0] / 16
		}
	}
	below := campaign + in.Homogeneity.Group.Covariance[0][0] + in.Stability.Group.Covariance[0][0]
	near(t, "ν_eff", d.Expanded.DegreesOfFreedom, 2*u2*u2/below, 1e-10)
	var shares float64
	for _, b := range d.Budget {
		shares += b.Share
	}
	near(t, "shares", shares, 1, 1e-12)
	near(t, "anchors in the budget", d.Budget[1].StandardUncertainty, math.Hypot(0.6*0.03, 0.4*0.05), 1e-12)
	near(t, "minimum portion", d.MinimumPortion, 0.9, 1e-12)
	if want := len(in.Characterisation.Remarks) + len(in.Homogeneity.Remarks) + len(in.Stability.Remarks); len(d.Remarks) != want || want == 0 {
		t.Errorf("%d remarks, the parts have %d", len(d.Remarks), want)
	}
}

func TestAssignedValueStaysCorrelatedWithItsAnchorsAndUnits(t *testing.T) {
	in, d := decision(t)
	one, err := d.At("B-1", "S-9")
	if err != nil {
		t.Fatal(err)
	}
	same, _ := d.At("B-1", "S-10")
	other, _ := d.At("B-2", "S-10")
	unknown, _ := d.At("", "S-10")
	near(t, "one unit twice", uncertain.Covariance(one, same), one.Variance(), 1e-13)
	near(t, "two units", uncertain.Covariance(one, other), d.Common.Variance(), 1e-13)
	near(t, "unit not recorded", uncertain.Covariance(one, unknown), d.Common.Variance(), 1e-13)
	anchor := number(t, 10, source("anchor:M1.1", uncertain.KindAnchor, 0.05, 1))
	near(t, "covariance with an anchor", uncertain.Covariance(one, anchor), 0.4*0.05*0.05, 1e-12)
	for _, id := range []string{"anchor:M0.1", "anchor:M1.1", "campaign:A/S-000", "reading:S-000/1", "stability:L1/1", "unit:B-1"} {
		if !slices.ContainsFunc(one.Terms, func(x uncertain.Term) bool { return x.ID == id }) {
			t.Errorf("source %s is lost", id)
		}
	}
	near(t, "unit effect", one.Variance()-d.Common.Variance(), math.Pow(in.Homogeneity.StandardUncertainty, 2), 1e-9)
}

func TestSignificantSlopeBlocksTheDecisionUntilAnsweredWithReason(t *testing.T) {
	in, _ := decision(t)
	drifting := *in.Stability
	drifting.Significant = true
	in.Stability = &drifting
	refuse := func(what string) {
		t.Helper()
		var e *InputError
		if _, err := Decide(in); !errors.As(err, &e) {
			t.Errorf("%s: got %v", what, err)
		}
	}
	refuse("no answer")
	in.Trend = &TrendAnswer{Change: OtherStorage}
	refuse("no reason")
	in.Trend = &TrendAnswer{Change: ShorterShelfLife, ShelfLife: 90, Reason: "r"}
	refuse("longer shelf life")
	in.Trend = &TrendAnswer{Change: "nothing", Reason: "r"}
	refuse("no change")
	in.Trend = &TrendAnswer{Change: ShorterShelfLife, ShelfLife: 12, Reason: "drift below 0.01 ‰ in a year"}
	d, err := Decide(in)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "u_lts", d.StabilityUncertainty, 12*in.Stability.SlopeUncertainty, 1e-14)
	in.Trend = &TrendAnswer{Change: ValueWithTime, Reason: "exchange with air follows a line"}
	if d, err = Decide(in); err != nil || d.Drift == nil || *d.Drift != in.Stability.Slope {
		t.Errorf("value model: %v, %v", d, err)
	}
}

func TestDecisionNeedsStudiesOrReasons(t *testing.T) {
	in, _ := decision(t)
	for name, change := range map[string]func(*DecisionInput){
		"characterisation": func(i *DecisionInput) { i.Characterisation = nil },
		"lot":              func(i *DecisionInput) { i.Lot = "" },
		"homogeneity":      func(i *DecisionInput) { i.Homogeneity = nil },
		"stability":        func(i *DecisionInput) { i.Stability = nil },
	} {
		other := in
		change(&other)
		var e *InputError
		if _, err := Decide(other); !errors.As(err, &e) || e.Place != name {
			t.Errorf("%s: got %v", name, err)
		}
	}
	in.Homogeneity, in.HomogeneityNot = nil, "a water, stirred and bottled at once"
	in.Stability, in.StabilityNot = nil, "sealed glass ampoules"
	d, err := Decide(in)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "u", d.StandardUncertainty, in.Characterisation.Value.StandardUncertainty(), 0)
	if n, err := d.At("B-1", "S"); err != nil || len(n.Terms) != len(d.Common.Terms) {
		t.Errorf("a unit effect without a study: %v", err)
	}
}

// A step of 0.1 ‰ between a predecessor's value and a campaign is seen in
// nearly every campaign, no step in about one of twenty.
func TestStepOfATenthPerMilIsDetected(t *testing.T) {
	random := rand.New(rand.NewPCG(1, 2))
	detected := func(step float64) int {
		k := 0
		for range 400 {
			anchor := 0.02 * random.NormFloat64()
			var members []Member
			for i := range 8 {
				s := fmt.Sprintf("S%d", i)
				members = append(members, Member{Session: s, Result: number(t, -20+step+anchor+0.03*random.NormFloat64(),
					source("reading:"+s+"/1", uncertain.KindReading, 0.02, 1), source("anchor:M.1", uncertain.KindAnchor, 0.02, 1))})
			}
			// The predecessor came from the same anchor: it cancels.
			old := number(t, -20+anchor, source("anchor:M.1", uncertain.KindAnchor, 0.02, 1))
			r, err := AnalyseStep(Campaign{Assignment: "A", Members: members}, old)
			if err != nil {
				t.Fatal(err)
			}
			if r.Detected {
				k++
			}
		}
		return k
	}
	if k := detected(0.1); k < 396 {
		t.Errorf("a step of 0.1 ‰ is seen in %d of 400 campaigns", k)
	}
	if k := detected(0); k > 34 { // 20 + 3.3·√(400·0.05·0.95)
		t.Errorf("no step is called one in %d of 400 campaigns", k)
	}
}

func TestPriorStabilityHoldsWhileTheStudyRuns(t *testing.T) {
	in, _ := decision(t)
	in.Stability, in.StabilityNot = nil, ""
	in.Prior = &PriorStability{StandardUncertainty: 0.03, ShelfLife: 730, DegreesOfFreedom: 12, Group: "stability:L/1/prior"}
	d, err := Decide(in)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "u_lts", d.StabilityUncertainty, 0.03, 0)
	near(t, "shelf life", d.ShelfLife, 730, 0)
	// u² = u_char² + u_bb² + u_lts² (ISO 33405:2024).
	c, h := d.CharacterisationUncertainty, d.HomogeneityUncertainty
	near(t, "u²", d.StandardUncertainty*d.StandardUncertainty, c*c+h*h+0.03*0.03, 1e-12)
	if !slices.ContainsFunc(d.Groups, func(g uncertain.Group) bool {
		return g.ID == "stability:L/1/prior" && math.Abs(g.Covariance[0][0]-2*math.Pow(0.03, 4)/12) < 1e-18
	}) {
		t.Errorf("groups %+v: want the prior variance on 12 degrees of freedom", d.Groups)
	}
	// A slope that is significant already counts, whatever the prior says.
	in.Stability = &Stability{Slope: 0.001, SlopeUncertainty: 1e-4, Significant: true, ShelfLife: 730, DegreesOfFreedom: 4}
	if _, err := Decide(in); err == nil {
		t.Error("a significant slope passed because there is a prior uncertainty")
	}
	in.Trend = &TrendAnswer{Change: ShorterShelfLife, ShelfLife: 365, Reason: "half the time until the study ends"}
	if d, err = Decide(in); err != nil {
		t.Fatal(err)
	}
	near(t, "u_lts of half the shelf life", d.StabilityUncertainty, 0.015, 1e-15)
	in.Prior.Group = ""
	if _, err := Decide(in); err == nil {
		t.Error("a prior without a group was taken")
	}
}
