package registry_test

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/calib/assign"
	"deltamoor/store"
)

const carbonScale = "d13C-VPDB-LSVEC"

// A place is one reading of a session that a test lays out.
type place struct {
	name, role, unit string
	true             float64
}

// layOut makes the readings of a session on a day of March 2026, ten minutes
// apart: raw = 0.3 + 1.01·true + ripple, a repeatable stand-in for noise whose
// phase changes with the day.
func layOut(day int, places ...place) registry.ReadingTable {
	t := registry.ReadingTable{Rows: len(places), Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
	start := time.Date(2026, 3, day, 9, 0, 0, 0, time.UTC)
	for i, p := range places {
		at, position := store.InstantOf(start.Add(time.Duration(i)*10*time.Minute)), i+1
		ripple := 0.04 * float64((i*7+day*3)%5-2) / 2
		t.Readings = append(t.Readings, registry.RawReading{Name: p.name, Role: p.role, Unit: p.unit, Quantity: "d13C", Raw: 0.3 + 1.01*p.true + ripple, Time: &at, Position: &position})
	}
	return t
}

// measured imports a session of that day and takes it to an approved, accepted calibration.
func (b *bench) measured(day int, places ...place) registry.Item[store.Calibration] {
	b.t.Helper()
	answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid", Label: fmt.Sprint("day ", day)},
		Name: "run.csv", MediaType: "text/csv", Bytes: []byte(fmt.Sprint(day, places)), Table: layOut(day, places...)})
	b.must(err)
	return b.approvedResult(answer.Session.Code)
}

// candidateDay is a session of a campaign: two anchors at both ends, a control,
// and the candidate's units in turn. True values are those of materials.csv.
func candidateDay(day int, candidate string, true_ float64, bottles []string) []place {
	ends := []place{{"USGS40", "", "", -26.39}, {"USGS41", "", "", 37.63}}
	places := slices.Concat(ends, ends, []place{{"IAEA-CH-6", "", "", -10.45}})
	for i := range 2 * len(bottles) {
		places = append(places, place{candidate, "sample", bottles[i%len(bottles)], true_ + 0.01*float64(day%3-1)})
	}
	return slices.Concat(places, []place{{"IAEA-CH-6", "", "", -10.45}}, ends)
}

// working registers a working standard with units, whose codes come back.
func (b *bench) working(code string, units int) []string {
	b.t.Helper()
	_, err := b.StateMaterial(b.ctx, b.manager, code, store.Material{Name: "standard " + code, Kind: "working", Substance: "peat", Hazards: []string{"H319"}, Storage: "dry and dark"}, registry.Edit{})
	b.must(err)
	items, err := b.AddUnits(b.ctx, b.manager, store.Unit{Material: code, Label: code + " jar", State: "open", Content: &store.Amount{Value: "10.0", Unit: "g"}}, units)
	b.must(err)
	var codes []string
	for _, it := range items {
		codes = append(codes, it.Code)
	}
	return codes
}

func carbonPlan(candidate string) store.Assignment {
	return store.Assignment{Title: "value of " + candidate, Material: candidate, Methods: []string{"C-solid"}, Sessions: 3, Days: 3, Replicates: 4,
		Quantities: []store.AssignmentQuantity{{Scale: carbonScale, Anchors: []string{"USGS40", "USGS41"}, Offered: []string{"IAEA-CH-6"},
			Planning:    store.PlanningValues{Value: -28, Repeatability: 0.05, BetweenSession: 0.03, BetweenUnits: 0.02},
			Homogeneity: store.StudyPlan{Units: 2, Measurements: 2}, Stability: store.StudyPlan{ShelfLifeDays: 30, Days: []float64{0, 1, 2}},
			Acceptance: store.AssignmentLimits{Expanded: 10, Agreement: 0.01}}}}
}

// planned states a plan and lets a second person approve it.
func (b *bench) planned(plan store.Assignment) string {
	b.t.Helper()
	p, err := b.PlanAssignment(b.ctx, b.manager, "", plan, registry.Edit{})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindAssignment, p.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
	return p.Code
}

// campaign takes a candidate from its plan to a value in force on 20 March.
func (b *bench) campaign(candidate string, true_ float64, bottles []string, days ...int) registry.Item[store.Value] {
	b.t.Helper()
	code := b.planned(carbonPlan(candidate))
	for _, day := range days {
		b.measured(day, candidateDay(day, candidate, true_, bottles)...)
	}
	v, err := b.ConcludeAssignment(b.ctx, b.manager, code, registry.ConcludeRequest{Scale: carbonScale}, registry.Edit{ValidFrom: on(20)})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: v.Ref.Version})
	b.must(err)
	return v
}

func on(day int) *store.Instant {
	at := store.InstantOf(time.Date(2026, 3, day, 0, 0, 0, 0, time.UTC))
	return &at
}

func (b *bench) verified() {
	b.t.Helper()
	v, err := b.Verify(b.ctx, registry.VerifyRequest{})
	b.must(err)
	if !v.Clean() || v.Equal != v.Recomputed {
		b.t.Errorf("verification: %d of %d equal, findings %v", v.Equal, v.Recomputed, v.Findings)
	}
}

func TestCampaignGivesAValueWithItsThreeParts(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	v := b.campaign("PEAT-LO", -28, b.working("PEAT-LO", 4), 4, 5, 6, 7)
	value, r := v.Value, v.Value.Campaign
	if r == nil || value.UBetweenUnits == nil || value.ULongTerm == nil {
		t.Fatalf("the value lacks its parts: %+v", value)
	}
	// u² = u_char² + u_bb² + u_lts² (ISO 33405:2024), from parts that stand beside it.
	bb, lts := value.UBetweenUnits.StandardUncertainty, value.ULongTerm.StandardUncertainty
	if want := math.Sqrt(r.UCharacterisation*r.UCharacterisation + bb*bb + lts*lts); math.Abs(value.StandardUncertainty-want) > 1e-12 {
		t.Errorf("u = %v, its parts give %v", value.StandardUncertainty, want)
	}
	if len(r.Sessions) != 4 || len(r.Estimates) != 3 || r.Homogeneity.Units != 4 || r.Homogeneity.Measurements != 32 || r.Stability.Points != 4 {
		t.Errorf("sessions %d, estimators %d, homogeneity %+v, stability %+v", len(r.Sessions), len(r.Estimates), r.Homogeneity, r.Stability)
	}
	// The truth of the simulated candidate is −28 and its sessions stray by 0.01; the ripple has an amplitude of 0.04.
	if x := number(t, value.Value); math.Abs(x+28) > 0.05 {
		t.Errorf("value %v, want about -28", x)
	}
	kinds := map[string]int{}
	u2 := 0.0
	for _, s := range value.Sources {
		kinds[s.Kind]++
		u2 += s.Sensitivity * s.Sensitivity * s.U * s.U
	}
	if want := map[string]int{"anchor": 2, "campaign": 4, "stability": 1}; kinds["anchor"] != 2 || kinds["campaign"] != 4 || kinds["stability"] != 1 || kinds["unit"] != 0 || kinds["reading"] < 4*8 {
		t.Errorf("sources %v, want %v, every reading, and no unit: that joins where a unit is used", kinds, want)
	}
	if want := r.UCharacterisation*r.UCharacterisation + lts*lts; math.Abs(u2-want) > 1e-12 {
		t.Errorf("sources sum to %v, want u_char² + u_lts² = %v", u2, want)
	}
	if value.ExpiresAt == nil || *value.ExpiresAt != *on(20)+store.Instant(30*86400e6) {
		t.Errorf("expires at %v, want 30 days after it begins to hold", value.ExpiresAt)
	}
	budget := 0.0
	for _, l := range r.Budget {
		budget += l.Share
	}
	if len(r.Budget) != 4 || math.Abs(budget-1) > 1e-12 {
		t.Errorf("budget %+v: want four lines that make up u²", r.Budget)
	}
	b.verified()
}

func number(t testing.TB, d store.Decimal) float64 {
	t.Helper()
	var x float64
	if _, err := fmt.Sscan(string(d), &x); err != nil {
		t.Fatal(err)
	}
	return x
}

func TestPlanIsFrozenByTheApprovalOfAnotherPerson(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 2)
	p, err := b.PlanAssignment(b.ctx, b.manager, "", carbonPlan("PEAT-LO"), registry.Edit{})
	b.must(err)
	again := carbonPlan("PEAT-LO")
	again.Sessions = 2
	again.Days = 2
	_, err = b.PlanAssignment(b.ctx, b.manager, p.Code, again, registry.Edit{After: 1, Reason: "two sessions will do"})
	b.must(err)
	approve := registry.DecisionRequest{Act: "approved", Version: 2}
	if _, err := b.Decide(b.ctx, b.manager, store.KindAssignment, p.Code, approve); registry.MeaningOf(err) != registry.Refused {
		t.Errorf("own plan approved: %v", err)
	}
	conclude := registry.ConcludeRequest{Scale: carbonScale}
	if _, err := b.ConcludeAssignment(b.ctx, b.manager, p.Code, conclude, registry.Edit{ValidFrom: on(20)}); registry.MeaningOf(err) != registry.Conflict {
		t.Errorf("a value from a plan nobody approved: %v", err)
	}
	b.measured(1, candidateDay(1, "PEAT-LO", -28, bottles)...) // began before the approval on 2 March
	_, err = b.Decide(b.ctx, b.signatory, store.KindAssignment, p.Code, approve)
	b.must(err)
	if _, err := b.PlanAssignment(b.ctx, b.manager, p.Code, again, registry.Edit{After: 2, Reason: "better limits"}); registry.MeaningOf(err) != registry.Conflict {
		t.Errorf("a change of an approved plan: %v, want a conflict", err)
	}
	b.measured(4, candidateDay(4, "PEAT-LO", -28, bottles)...)
	a, err := b.AnalyseAssignment(b.ctx, b.auditor, p.Code)
	b.must(err)
	if n := len(a.Values[0].Members); n != 1 || !strings.Contains(strings.Join(a.Values[0].Unready, ";"), "began before the plan was approved") {
		t.Errorf("%d members, unready %v: want the session after the approval only", n, a.Values[0].Unready)
	}
	// One session of two: refused with the rule named, unless a reason is given.
	if _, err := b.ConcludeAssignment(b.ctx, b.manager, p.Code, conclude, registry.Edit{ValidFrom: on(20)}); err == nil || !strings.Contains(err.Error(), "points") {
		t.Errorf("a stability study of one point: %v", err)
	}
}

func TestChecksOfThePlanNeedAReasonWhereTheyFail(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 2)
	plan := carbonPlan("PEAT-LO")
	plan.Quantities[0].Acceptance.Expanded = 0.001
	plan.Quantities[0].Stability = store.StudyPlan{NotNeeded: "kept dry since ten years without change"}
	code := b.planned(plan)
	for _, day := range []int{4, 5, 6} {
		b.measured(day, candidateDay(day, "PEAT-LO", -28, bottles)...)
	}
	q := registry.ConcludeRequest{Scale: carbonScale}
	_, err := b.ConcludeAssignment(b.ctx, b.manager, code, q, registry.Edit{ValidFrom: on(20)})
	if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "0.001 ‰ or less") {
		t.Errorf("U beyond the plan's limit: %v, want a refusal that names it", err)
	}
	q.Deviation = "the limit was a slip of the pen"
	v, err := b.ConcludeAssignment(b.ctx, b.manager, code, q, registry.Edit{ValidFrom: on(20)})
	b.must(err)
	if v.Value.Campaign.Deviation == "" || v.Value.ULongTerm != nil || v.Value.Campaign.StabilityNot == "" {
		t.Errorf("deviation %q, stability %+v", v.Value.Campaign.Deviation, v.Value.ULongTerm)
	}
	if _, err := b.Decide(b.ctx, b.manager, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: 1}); registry.MeaningOf(err) != registry.Refused {
		t.Errorf("own value approved: %v", err)
	}
	b.verified()
}

// useAsAnchor makes PEAT-LO the low anchor of a session with one sample.
func useAsAnchor(sample, bottle string) []place {
	ends := []place{{"PEAT-LO", "anchor", bottle, -28}, {"USGS41", "", "", 37.63}}
	return slices.Concat(ends, ends, []place{{"IAEA-CH-6", "", "", -10.45}, {sample, "", "", -18.2}, {sample, "", "", -18.2}}, ends)
}

func TestSessionsShareTheBottleTheyUsedAndNoOther(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 4)
	v := b.campaign("PEAT-LO", -28, bottles, 4, 5, 6, 7)
	var finals []string
	var coefficient []float64
	for i, bottle := range []string{bottles[0], bottles[0], bottles[1], ""} {
		sample := b.sample("Marsh survey", fmt.Sprint("A", i))
		c := b.measured(21+5*i, useAsAnchor(sample, bottle)...) // five days apart: the same ripple
		want := "unit:" + bottle
		if bottle == "" {
			want = "unit:PEAT-LO/" + c.Value.Session
		}
		found := false
		for _, r := range c.Value.Results {
			for _, s := range r.Sources {
				if r.Subject == sample && s.Kind == "unit" {
					found = s.ID == want
					coefficient = append(coefficient, s.Sensitivity)
				}
			}
		}
		if !found {
			t.Errorf("session %d has no source %s", i, want)
		}
		finals = append(finals, b.final(sample))
	}
	rep := b.report("Marsh survey", finals...)
	var codes []string
	for _, l := range rep.Lines {
		codes = append(codes, l.Code)
	}
	c, err := b.Compare(b.ctx, b.auditor, codes, 0)
	b.must(err)
	// cov = Σ c1·c2·u² over shared sources (metrology 1): one bottle adds c1·c2·u_bb² to what PEAT-LO's
	// value and USGS41 share anyway; the four sessions are alike but for the bottle.
	u := v.Value.UBetweenUnits.StandardUncertainty
	extra := coefficient[0] * coefficient[1] * u * u
	if got := c.Covariance[0][1] - c.Covariance[0][2]; math.Abs(got-extra) > 1e-9*extra || extra <= 0 {
		t.Errorf("one bottle adds %v to the covariance, want %v", got, extra)
	}
	if got := c.Covariance[1][2] - c.Covariance[0][3]; math.Abs(got) > 1e-9*extra {
		t.Errorf("different bottles, recorded or not, differ in covariance by %v", got)
	}
	b.verified()
	// The campaign's value recomputes from a pack alone, without the store.
	pack, err := b.Pack(b.ctx, b.auditor, codes[0])
	b.must(err)
	checked := registry.VerifyPack(b.ctx, pack, registry.PackCheckRequest{})
	for _, f := range checked.Findings {
		t.Errorf("pack: %s", f)
	}
	if checked.Recomputed < 8 || checked.Equal != checked.Recomputed {
		t.Errorf("pack: %d of %d equal, want the four campaign sessions, the value, the session, the final value and the line", checked.Equal, checked.Recomputed)
	}
}

func TestCandidateThatAnchorsItsOwnCampaignIsRefusedWithThePath(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 2)
	b.campaign("PEAT-LO", -28, bottles, 4, 5, 6)
	code := b.planned(carbonPlan("PEAT-LO"))
	for _, day := range []int{21, 22, 23} {
		places := candidateDay(day, "PEAT-LO", -28, bottles)
		places[0] = place{"PEAT-LO", "anchor", bottles[0], -28}
		b.measured(day, places...)
	}
	_, err := b.ConcludeAssignment(b.ctx, b.manager, code, registry.ConcludeRequest{Scale: carbonScale}, registry.Edit{After: 1, Reason: "revalued", ValidFrom: on(28)})
	if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "→ value PEAT-LO/"+carbonScale+"/total.1") {
		t.Errorf("a candidate as its own anchor: %v, want a refusal with the path", err)
	}
}

func TestCandidateDeeperInTheChainIsSaidWithThePath(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	low := b.working("PEAT-LO", 2)
	b.campaign("PEAT-LO", -28, low, 4, 5, 6)
	// WOOD gets its value with PEAT-LO as an anchor, from 24 March on.
	wood := b.working("WOOD", 2)
	withLow := func(day int, candidate string, bottles []string) []place {
		places := candidateDay(day, candidate, -24, bottles)
		for i := range places {
			if places[i].name == "USGS40" {
				places[i] = place{"PEAT-LO", "anchor", low[0], -28}
			}
		}
		return places
	}
	code := b.planned(carbonPlan("WOOD"))
	for _, day := range []int{21, 22, 23} {
		b.measured(day, withLow(day, "WOOD", wood)...)
	}
	v, err := b.ConcludeAssignment(b.ctx, b.manager, code, registry.ConcludeRequest{Scale: carbonScale}, registry.Edit{ValidFrom: on(24)})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
	// PEAT-LO is valued again with WOOD as the low anchor: a cycle through an older version.
	again := b.planned(carbonPlan("PEAT-LO"))
	for _, day := range []int{25, 26, 27} {
		places := candidateDay(day, "PEAT-LO", -28, low)
		for i := range places {
			if places[i].name == "USGS40" {
				places[i] = place{"WOOD", "anchor", wood[0], -24}
			}
		}
		b.measured(day, places...)
	}
	v, err = b.ConcludeAssignment(b.ctx, b.manager, again, registry.ConcludeRequest{Scale: carbonScale}, registry.Edit{After: 1, Reason: "valued again", ValidFrom: on(28)})
	b.must(err)
	if len(v.Value.Campaign.Circular) == 0 || !strings.Contains(v.Value.Campaign.Circular[0], "value WOOD/"+carbonScale+"/total.1") ||
		!strings.HasSuffix(v.Value.Campaign.Circular[0], "value PEAT-LO/"+carbonScale+"/total.1") {
		t.Errorf("paths %v: want one through WOOD to the older value of PEAT-LO", v.Value.Campaign.Circular)
	}
	a, err := b.AnalyseAssignment(b.ctx, b.auditor, again)
	b.must(err)
	// PEAT-LO rests on WOOD, that on PEAT-LO.1, that on certificates: three values on the longest way down.
	if d := a.Values[0].Depth; d != 3 {
		t.Errorf("depth %d, want 3", d)
	}
	b.verified()
}

func TestStepFromThePredecessorIsDetected(t *testing.T) {
	for _, c := range []struct {
		name string
		step float64
		want bool
	}{{"no step", 0, false}, {"a step of 0.4 ‰", 0.4, true}} {
		t.Run(c.name, func(t *testing.T) {
			b := openBench(t)
			b.method("C-solid", carbonMethod())
			old, bottles := b.working("PEAT-OLD", 1), b.working("PEAT-LO", 2)
			from := on(1)
			v, err := b.StateValue(b.ctx, b.manager, "PEAT-OLD", registry.ValueRequest{Scale: carbonScale, Value: "-27.00", Stated: store.Stated{Text: "0.02", Kind: "standard"}, Basis: "certificate"}, registry.Edit{ValidFrom: from})
			b.must(err)
			_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: 1})
			b.must(err)
			plan := carbonPlan("PEAT-LO")
			plan.Predecessor = "PEAT-OLD"
			code := b.planned(plan)
			for _, day := range []int{4, 5, 6} {
				places := candidateDay(day, "PEAT-LO", -28, bottles)
				for i := range 3 {
					places = slices.Insert(places, 6+3*i, place{"PEAT-OLD", "sample", old[0], -27 + c.step})
				}
				b.measured(day, places...)
			}
			q := registry.ConcludeRequest{Scale: carbonScale}
			if c.want {
				if _, err := b.ConcludeAssignment(b.ctx, b.manager, code, q, registry.Edit{ValidFrom: on(20)}); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "overlap with the predecessor") {
					t.Errorf("a step nobody decided about: %v", err)
				}
				q.StepDecision = "the old jar took up water; its value ends with it"
			}
			value, err := b.ConcludeAssignment(b.ctx, b.manager, code, q, registry.Edit{ValidFrom: on(20)})
			b.must(err)
			s := value.Value.Campaign.Step
			// The predecessor reads its assigned value plus the step; the ripple is 0.04 at most.
			if s == nil || s.Detected != c.want || math.Abs(s.Difference-c.step) > 0.05 || s.Sessions != 3 {
				t.Errorf("step %+v, want %v detected %v", s, c.step, c.want)
			}
			b.verified()
		})
	}
}

func TestProspectsShowWhatBuysTheMost(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.working("PEAT-LO", 2)
	code := b.planned(carbonPlan("PEAT-LO"))
	got, err := b.Prospects(b.ctx, b.auditor, code)
	b.must(err)
	p := got[0].Prospect
	if !(p.StandardUncertainty > p.Unreduced && p.Unreduced > 0) || len(got[0].Options) < 4 {
		t.Fatalf("prospect %+v with %d options", p, len(got[0].Options))
	}
	for i, o := range got[0].Options {
		if i > 0 && o.GainU > got[0].Options[i-1].GainU {
			t.Errorf("option %d buys more than the one before", i)
		}
	}
	parts := []float64{p.SessionUncertainty, p.AnchorUncertainty, p.HomogeneityUncertainty, p.StabilityUncertainty}
	u2 := 0.0
	for _, u := range parts {
		u2 += u * u
	}
	if math.Abs(math.Sqrt(u2)-p.StandardUncertainty) > 1e-12 {
		t.Errorf("parts %v give %v, u is %v", parts, math.Sqrt(u2), p.StandardUncertainty)
	}
}

func TestPlansThatCannotBeAreRefusedByPlace(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.working("PEAT-LO", 2)
	before := b.roots()
	for place, change := range map[string]func(*store.Assignment){
		"body.material":                                func(p *store.Assignment) { p.Material = "NOBODY" },
		"body.sessions":                                func(p *store.Assignment) { p.Sessions = 0 },
		"body.methods[0]":                              func(p *store.Assignment) { p.Methods = []string{"none"} },
		"body.quantities[0].scale":                     func(p *store.Assignment) { p.Quantities[0].Scale = "d15N-AIR" },
		"body.quantities[0].estimator":                 func(p *store.Assignment) { p.Quantities[0].Estimator = "mean" },
		"body.quantities[0].anchors[0]":                func(p *store.Assignment) { p.Quantities[0].Anchors = []string{"PEAT-LO"} },
		"body.quantities[0].homogeneity":               func(p *store.Assignment) { p.Quantities[0].Homogeneity = store.StudyPlan{} },
		"body.quantities[0].stability.shelf_life_days": func(p *store.Assignment) { p.Quantities[0].Stability = store.StudyPlan{} },
		"body.quantities[0].planning.repeatability":    func(p *store.Assignment) { p.Quantities[0].Planning.Repeatability = -1 },
		"body.quantities[0].acceptance.agreement_p":    func(p *store.Assignment) { p.Quantities[0].Acceptance.Agreement = math.NaN() },
		"body.predecessor":                             func(p *store.Assignment) { p.Predecessor = "PEAT-LO" },
		"body.units[0]":                                func(p *store.Assignment) { p.Units = []string{"BNOTTHERE0"} },
	} {
		plan := carbonPlan("PEAT-LO")
		change(&plan)
		_, err := b.PlanAssignment(b.ctx, b.manager, "", plan, registry.Edit{})
		if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), place) {
			t.Errorf("%s: %v, want a complaint there", place, err)
		}
	}
	if _, err := b.PlanAssignment(b.ctx, b.analyst, "", carbonPlan("PEAT-LO"), registry.Edit{}); registry.MeaningOf(err) != registry.Refused {
		t.Errorf("an analyst plans: %v", err)
	}
	if after := b.roots(); after != before {
		t.Error("refused plans changed the ledger")
	}
}

// A campaign with the method's long-term component takes the larger of it and its own estimate.
func TestLongTermComponentOfTheMethodCountsOnce(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	nu := 20.0
	m.Quantities[0].BetweenSession = &store.Component{StandardUncertainty: 0.2, DegreesOfFreedom: &nu, Evidence: "control chart"}
	b.method("C-solid", m)
	v := b.campaign("PEAT-LO", -28, b.working("PEAT-LO", 2), 4, 5, 6)
	r := v.Value.Campaign
	if !r.LongTermUsed || r.BetweenSession != 0.2 {
		t.Errorf("between-session component %v (long-term used: %v), want the method's 0.2", r.BetweenSession, r.LongTermUsed)
	}
	for _, s := range v.Value.Sources {
		if s.Kind == "between_session" {
			t.Errorf("source %s beside the campaign's own: the component would count twice", s.ID)
		}
		// u² of the mean of m sessions has τ²/m: each session's effect has the coefficient 1/m where weights are equal.
		if s.Kind == "campaign" && (s.U != 0.2 || math.Abs(s.Sensitivity-1./3) > 0.05) {
			t.Errorf("session effect %+v, want u = 0.2 and a weight near 1/3", s)
		}
	}
	b.verified()
}

func TestOtherRealisationsAreEvaluatedFromTheSameData(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	for _, m := range []struct{ code, value string }{{"USGS40", "-26.30"}, {"USGS41", "37.72"}} {
		v, err := b.StateValue(b.ctx, b.manager, m.code, registry.ValueRequest{Scale: "d13C-VPDB", Value: store.Decimal(m.value), Stated: store.Stated{Text: "0.04", Kind: "standard"}, Basis: "provisional"}, registry.Edit{ValidFrom: on(1)})
		b.must(err)
		_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		b.must(err)
	}
	bottles := b.working("PEAT-LO", 2)
	code := b.planned(carbonPlan("PEAT-LO"))
	for _, day := range []int{4, 5, 6} {
		b.measured(day, candidateDay(day, "PEAT-LO", -28, bottles)...)
	}
	before := b.roots()
	a, err := b.AnalyseAssignment(b.ctx, b.auditor, code)
	b.must(err)
	if a.Values[0].Value == nil {
		t.Fatalf("no value: %s", a.Values[0].Refusal)
	}
	own := number(t, a.Values[0].Value.Value)
	i := slices.IndexFunc(a.Values[0].Realisations, func(r registry.RealisedValue) bool { return r.Scale == "d13C-VPDB" })
	if i < 0 {
		t.Fatalf("realisations %+v", a.Values[0].Realisations)
	}
	// Both invented values are 0.09 ‰ above those on the own scale, and so is everything on the line through them.
	if r := a.Values[0].Realisations[i]; math.Abs(r.Value-own-0.09) > 1e-6 || r.Sessions != 3 || r.Refusal != "" {
		t.Errorf("on d13C-VPDB: %+v, on the own scale %v, want 0.09 apart", r, own)
	}
	if b.roots() != before {
		t.Error("an analysis changed the ledger")
	}
}

// The estimators of a campaign are those of the engine on the sessions' own numbers.
func TestCampaignAgreesWithTheEngine(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	v := b.campaign("PEAT-LO", -28, b.working("PEAT-LO", 2), 4, 5, 6)
	r := v.Value.Campaign
	var x, private []float64
	for _, s := range r.Sessions {
		x, private = append(x, s.Value), append(private, s.UPrivate*s.UPrivate)
	}
	// Where what is shared has the same effect in every session, τ² of the full covariance is that of the private variances alone.
	e, err := assign.EstimateBetween(x, private, assign.PauleMandel)
	b.must(err)
	if math.Abs(math.Sqrt(e.Variance)-r.BetweenSession) > 1e-3 {
		t.Errorf("between sessions %v, from private variances alone %v", r.BetweenSession, math.Sqrt(e.Variance))
	}
	var names []string
	for _, e := range r.Estimates {
		names = append(names, e.Estimator)
	}
	slices.Sort(names)
	if diff := cmp.Diff([]string{"dersimonian_laird", "paule_mandel", "reml"}, names); diff != "" {
		t.Errorf("estimators shown (-want +got):\n%s", diff)
	}
	if r.Estimator != "paule_mandel" {
		t.Errorf("estimator %q, want the plan's default", r.Estimator)
	}
}
