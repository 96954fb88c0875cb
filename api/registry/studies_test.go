package registry_test

import (
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

func placesOfBody(i int, field string) string {
	return fmt.Sprintf("body.measurements[%d].%s", i, field)
}

// A lot whose units were stored for 0, 200 and 400 days and measured together
// in two sessions that differ by 1 ‰: the sessions are blocks.
func TestStatedStudiesTakeTheSessionsAsBlocks(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 2)
	plan := carbonPlan("PEAT-LO")
	plan.Quantities[0].Stability = store.StudyPlan{ShelfLifeDays: 800, Days: []float64{0, 200, 400}, Isochronous: true}
	p, err := b.PlanAssignment(b.ctx, b.manager, "", plan, registry.Edit{})
	b.must(err)
	q := registry.StudyRequest{Scale: carbonScale, Of: registry.OfStability, Isochronous: true, Place: placesOfBody}
	slope := -0.00002 // ‰ a day: too little to be seen
	noise := []float64{0.01, -0.01, 0.01, -0.01, 0.01, -0.01}
	for i, days := range []float64{0, 200, 400, 0, 200, 400} {
		session := "one"
		value := -28 + slope*days + noise[i]
		if i > 2 {
			session, value = "two", value+1
		}
		q.Measurements = append(q.Measurements, store.StudyMeasurement{Unit: fmt.Sprint("U", i), Value: value, Days: days, Session: session})
	}
	if _, err := b.StateStudy(b.ctx, b.analyst, p.Code, q, registry.Edit{}); registry.MeaningOf(err) != registry.Conflict {
		t.Errorf("a study before the plan is approved: %v", err)
	}
	_, err = b.Decide(b.ctx, b.signatory, store.KindAssignment, p.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
	before := b.roots()
	bad := q
	bad.Measurements = slices.Clone(q.Measurements)
	bad.Measurements[2].Days = -1
	if _, err := b.StateStudy(b.ctx, b.analyst, p.Code, bad, registry.Edit{}); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "body.measurements[2].days") {
		t.Errorf("days of −1: %v", err)
	}
	if b.roots() != before {
		t.Error("a refused study changed the ledger")
	}
	_, err = b.StateStudy(b.ctx, b.analyst, p.Code, q, registry.Edit{})
	b.must(err)
	h := registry.StudyRequest{Scale: carbonScale, Of: registry.OfHomogeneity, Place: placesOfBody}
	for i := range 12 {
		h.Measurements = append(h.Measurements, store.StudyMeasurement{Unit: fmt.Sprint("H", i%4), Value: -28 + 0.01*float64(i%3), Portion: 0.5 + 0.01*float64(i), Order: float64(i%4 + 1)})
	}
	_, err = b.StateStudy(b.ctx, b.analyst, p.Code, h, registry.Edit{})
	b.must(err)
	for _, day := range []int{4, 5, 6} {
		b.measured(day, candidateDay(day, "PEAT-LO", -28, bottles)...)
	}
	a, err := b.AnalyseAssignment(b.ctx, b.auditor, p.Code)
	b.must(err)
	if a.Values[0].Value == nil {
		t.Fatal(a.Values[0].Refusal)
	}
	r := a.Values[0].Value.Campaign
	s := r.Stability
	// By hand: deviations of each session from its mean, so Σ(t − t̄)² = 2·80000, b1 = Σt·y/Σt², ν = 6 − 1 − 2.
	var sxy, sxx float64
	for i, days := range []float64{0, 200, 400, 0, 200, 400} {
		sxy += (days - 200) * (slope*days + noise[i])
		sxx += (days - 200) * (days - 200)
	}
	if s == nil || !s.Isochronous || s.Blocks != 2 || s.DegreesOfFreedom != 3 || math.Abs(s.Slope-sxy/sxx) > 1e-12 || s.SpanDays != 400 {
		t.Fatalf("stability %+v, want a slope of %v from two blocks on 3 degrees of freedom", s, sxy/sxx)
	}
	if r.Homogeneity.Units != 4 || r.Homogeneity.Measurements != 12 || r.MinimumPortion != 0.61 {
		t.Errorf("homogeneity %+v with a minimum portion of %v mg, want the 12 stated measurements and 0.61 mg", r.Homogeneity, r.MinimumPortion)
	}
	if s.Significant {
		t.Errorf("a slope of %v with u %v is called significant", s.Slope, s.USlope)
	}
	v, err := b.ConcludeAssignment(b.ctx, b.manager, p.Code, registry.ConcludeRequest{Scale: carbonScale, Deviation: "more units in the study than in the sessions"}, registry.Edit{ValidFrom: on(20)})
	b.must(err)
	parts := 0
	for _, in := range v.Inputs {
		if in.Part == "study" {
			parts++
		}
	}
	if parts != 2 {
		t.Errorf("%d studies among the inputs of the value", parts)
	}
	// A correction is a further version with a reason.
	if _, err := b.StateStudy(b.ctx, b.analyst, p.Code, h, registry.Edit{}); registry.MeaningOf(err) != registry.Conflict {
		t.Errorf("a study stated twice: %v", err)
	}
	_, err = b.StateStudy(b.ctx, b.analyst, p.Code, h, registry.Edit{After: 1, Reason: "a slip in two rows"})
	b.must(err)
	b.verified()
}

func TestUnitsInStorageAreTheStudyAndTheirPortionsTheMinimum(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 4)
	plan := carbonPlan("PEAT-LO")
	plan.Units = bottles
	plan.Quantities[0].Stability = store.StudyPlan{ShelfLifeDays: 720, Isochronous: true, Stored: []store.StoredUnit{{Unit: bottles[0]}, {Unit: bottles[1], Days: 180}, {Unit: bottles[2], Days: 360}}}
	code := b.planned(plan)
	amount := 0.7
	for _, day := range []int{4, 5, 6} {
		table := layOut(day, candidateDay(day, "PEAT-LO", -28, bottles)...)
		for i := range table.Readings {
			if table.Readings[i].Name == "PEAT-LO" {
				x := amount - 0.01*float64(i)
				table.Readings[i].Amount = &x
			}
		}
		answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"}, Bytes: []byte(fmt.Sprint(day)), Table: table})
		b.must(err)
		b.approvedResult(answer.Session.Code)
	}
	a, err := b.AnalyseAssignment(b.ctx, b.auditor, code)
	b.must(err)
	if a.Values[0].Value == nil {
		t.Fatal(a.Values[0].Refusal)
	}
	r := a.Values[0].Value.Campaign
	// Three of four bottles are in storage; each was measured twice in each of three sessions: 18 points.
	if s := r.Stability; s.Points != 18 || s.Blocks != 3 || s.DegreesOfFreedom != 14 || !s.Isochronous {
		t.Errorf("stability %+v, want 18 portions of three units, sessions as blocks", s)
	}
	// The candidate's first portion stands at place 5 of the table: 0.65 mg is the largest.
	if math.Abs(r.MinimumPortion-0.65) > 1e-12 {
		t.Errorf("minimum portion %v mg, want 0.65", r.MinimumPortion)
	}
}

func TestPriorStabilityHoldsUntilTheStudySpansItsDays(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.working("PEAT-LO", 2)
	nu := 15.0
	plan := carbonPlan("PEAT-LO")
	plan.Sessions, plan.Days = 2, 2
	plan.Quantities[0].Stability = store.StudyPlan{ShelfLifeDays: 365, Days: []float64{0, 1, 20}, Prior: &store.Component{StandardUncertainty: 0.02, DegreesOfFreedom: &nu, Evidence: "the lot before it, five years"}}
	code := b.planned(plan)
	for _, day := range []int{4, 5} {
		b.measured(day, candidateDay(day, "PEAT-LO", -28, bottles)...)
	}
	v, err := b.ConcludeAssignment(b.ctx, b.manager, code, registry.ConcludeRequest{Scale: carbonScale}, registry.Edit{ValidFrom: on(7)})
	b.must(err)
	if p := v.Value.Campaign.Prior; p == nil || v.Value.ULongTerm.StandardUncertainty != 0.02 || *v.Value.ULongTerm.DegreesOfFreedom != nu || p.PlannedDays != 20 || v.Value.Campaign.Stability != nil {
		t.Errorf("prior %+v, u_lts %+v: want the plan's 0.02 ‰ while two sessions are no study", p, v.Value.ULongTerm)
	}
	if v.Value.ExpiresAt == nil || *v.Value.ExpiresAt != *on(7)+store.Instant(365*86400e6) {
		t.Errorf("expires at %v, want 365 days after it begins to hold", v.Value.ExpiresAt)
	}
	for _, day := range []int{9, 14, 19, 24} {
		b.measured(day, candidateDay(day, "PEAT-LO", -28, bottles)...)
	}
	a, err := b.AnalyseAssignment(b.ctx, b.auditor, code)
	b.must(err)
	if r := a.Values[0].Value.Campaign; r.Prior != nil || r.Stability == nil || r.Stability.SpanDays < 20 {
		t.Errorf("after 20 days: prior %+v, stability %+v", r.Prior, r.Stability)
	}
	b.verified()
}

func TestSuccessorIsNoAnchorBeforeItsCampaignOrANamedWaiver(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	old := b.working("PEAT-OLD", 1)
	bottles := b.working("PEAT-LO", 2)
	b.stated("PEAT-OLD", "-27.00")
	m, err := b.FindMaterial(b.ctx, b.manager, "PEAT-LO", store.Moment{})
	b.must(err)
	body := m.Value
	body.Succeeds = "NOBODY"
	if _, err := b.StateMaterial(b.ctx, b.manager, "PEAT-LO", body, registry.Edit{After: 1, Reason: "it follows"}); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "body.succeeds") {
		t.Errorf("a predecessor that is not there: %v", err)
	}
	body.Succeeds = "peat-old"
	m, err = b.StateMaterial(b.ctx, b.manager, "PEAT-LO", body, registry.Edit{After: 1, Reason: "it follows"})
	b.must(err)
	if m.Value.Succeeds != "PEAT-OLD" {
		t.Errorf("succeeds %q, want the code as registered", m.Value.Succeeds)
	}
	b.stated("PEAT-LO", "-28.00")
	session := func(day int) string {
		sample := b.sample("Marsh survey", fmt.Sprint("A", day))
		answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"}, Bytes: []byte(sample), Table: layOut(day, useAsAnchor(sample, bottles[0])...)})
		b.must(err)
		return answer.Session.Code
	}
	first := session(8)
	_, err = b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: first, Quantity: "d13C"})
	if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "anchor PEAT-LO") || !strings.Contains(err.Error(), "follows PEAT-OLD") {
		t.Errorf("a successor without a campaign: %v", err)
	}
	body.OverlapWaiver = "PEAT-OLD was used up before anybody could measure both"
	_, err = b.StateMaterial(b.ctx, b.manager, "PEAT-LO", body, registry.Edit{After: 2, Reason: "no overlap is possible"})
	b.must(err)
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: first, Quantity: "d13C"})
	b.must(err)
	i := slices.IndexFunc(c.Value.Flags, func(f calib.Flag) bool { return f.Code == "overlap_waived" })
	if i < 0 || !strings.Contains(c.Value.Flags[i].Message, "man waived that: PEAT-OLD was used up") {
		t.Errorf("flags %+v: want the waiver with its name and reason", c.Value.Flags)
	}
	body.OverlapWaiver = ""
	_, err = b.StateMaterial(b.ctx, b.manager, "PEAT-LO", body, registry.Edit{After: 3, Reason: "a jar was found"})
	b.must(err)
	if _, err = b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session(9), Quantity: "d13C"}); registry.MeaningOf(err) != registry.Invalid {
		t.Errorf("a successor whose waiver ended: %v", err)
	}
	b.verified() // the waived calibration names the version that waived it

	// A campaign takes the predecessor from the material, and opens the way.
	code := b.planned(carbonPlan("PEAT-LO"))
	plan, err := registry.One[store.Assignment](b.ctx, b.Registry, b.auditor, store.KindAssignment, code, 0, store.Moment{})
	b.must(err)
	if plan.Value.Predecessor != "PEAT-OLD" {
		t.Errorf("predecessor %q of the plan", plan.Value.Predecessor)
	}
	for _, day := range []int{10, 11, 12} {
		places := candidateDay(day, "PEAT-LO", -28, bottles)
		for i := range 3 {
			places = slices.Insert(places, 6+3*i, place{"PEAT-OLD", "sample", old[0], -27})
		}
		b.measured(day, places...)
	}
	v, err := b.ConcludeAssignment(b.ctx, b.manager, code, registry.ConcludeRequest{Scale: carbonScale, StepDecision: "as found"}, registry.Edit{After: 1, Reason: "by campaign", ValidFrom: on(14)})
	b.must(err)
	late := session(15)
	if _, err = b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: late, Quantity: "d13C"}); registry.MeaningOf(err) != registry.Invalid {
		t.Errorf("a successor whose campaign nobody approved: %v", err)
	}
	_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: v.Ref.Version})
	b.must(err)
	c, err = b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: late, Quantity: "d13C"})
	b.must(err)
	if slices.ContainsFunc(c.Value.Flags, func(f calib.Flag) bool { return f.Code == "overlap_waived" }) {
		t.Errorf("flags %+v after the campaign", c.Value.Flags)
	}
}

// stated gives a material an approved value from 1 March on.
func (b *bench) stated(material string, value store.Decimal) {
	b.t.Helper()
	v, err := b.StateValue(b.ctx, b.manager, material, registry.ValueRequest{Scale: carbonScale, Value: value, Stated: store.Stated{Text: "0.02", Kind: "standard"}, Basis: "certificate"}, registry.Edit{ValidFrom: on(1)})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: v.Ref.Version})
	b.must(err)
}

func TestMonitorSeesADriftAfterTheAssignmentAndProposesSuspicion(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := b.watched("PEAT-LO", 2)
	b.campaign("PEAT-LO", -28, bottles, 4, 5, 6)
	b.clock = time.Date(2026, 3, 20, 9, 0, 0, 0, time.UTC)
	m, err := b.Monitor(b.ctx, b.auditor, "PEAT-LO", carbonScale, "")
	b.must(err)
	if len(m.Points) != 3 || m.Trend != nil || !strings.Contains(m.Without, "needs 4") {
		t.Errorf("%d points, trend %+v, without %q", len(m.Points), m.Trend, m.Without)
	}
	for i := range 6 { // five days apart: the same ripple, and 0.1 ‰ more every time
		day := 21 + 30*i
		places := []place{{"USGS40", "", "", -26.39}, {"USGS41", "", "", 37.63}, {"IAEA-CH-6", "", "", -10.45}, {"PEAT-LO", "control", bottles[0], -28 + 0.1*float64(i)}, {"PEAT-LO", "control", bottles[0], -28 + 0.1*float64(i)}, {"USGS40", "", "", -26.39}, {"USGS41", "", "", 37.63}}
		b.measured(day, places...)
	}
	b.clock = time.Date(2026, 3, 21+5*30+201, 9, 0, 0, 0, time.UTC) // the rule asks for a check every 200 days
	m, err = b.Monitor(b.ctx, b.auditor, "PEAT-LO", carbonScale, "")
	b.must(err)
	// The slope is 0.1 ‰ in 30 days but for the three sessions of the campaign before it.
	if m.Trend == nil || !m.Trend.Significant || math.Abs(m.Trend.Slope-0.1/30) > 0.0005 || m.Proposal == "" || !m.Overdue || len(m.Points) != 9 || !m.Points[0].Campaign || m.Points[8].Campaign {
		t.Errorf("monitor: trend %+v, proposal %q, overdue %v, %d points", m.Trend, m.Proposal, m.Overdue, len(m.Points))
	}
	due, err := b.Due(b.ctx, b.auditor, 1)
	b.must(err)
	what := map[string]string{}
	for _, d := range due {
		what[d.What] = d.Sentence
	}
	if !strings.Contains(what["suspect"], "hold it suspect") || !strings.Contains(what["recheck"], "overdue") {
		t.Errorf("due %v: want the proposal and the overdue check", what)
	}
}

func TestValuesOfOneAncestryAreCorrelatedAndTheirHistoryIsASeries(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	low, wood := b.working("PEAT-LO", 2), b.working("WOOD", 2)
	codes := []string{b.planned(carbonPlan("PEAT-LO")), b.planned(carbonPlan("WOOD"))}
	for _, day := range []int{4, 5, 6} { // both are measured in the same sessions
		places := candidateDay(day, "PEAT-LO", -28, low)
		for i := range 4 {
			places = slices.Insert(places, 7+2*i, place{"WOOD", "sample", wood[i%2], -24})
		}
		b.measured(day, places...)
	}
	var values []registry.Item[store.Value]
	for i, material := range []string{"PEAT-LO", "WOOD"} {
		v, err := b.ConcludeAssignment(b.ctx, b.manager, codes[i], registry.ConcludeRequest{Scale: carbonScale}, registry.Edit{ValidFrom: on(8)})
		b.must(err)
		_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		b.must(err)
		values = append(values, v)
		if v.Value.Material != material {
			t.Fatalf("value of %s", v.Value.Material)
		}
	}
	b.clock = time.Date(2026, 3, 9, 0, 0, 0, 0, time.UTC)
	c, err := b.CovarianceOfValues(b.ctx, b.auditor, []registry.ValueName{{Material: "PEAT-LO", Scale: carbonScale}, {Material: "WOOD", Scale: carbonScale}})
	b.must(err)
	// cov = Σ c1·c2·u² over the sources that both store (metrology 1).
	want := 0.0
	for _, s := range values[0].Value.Sources {
		for _, o := range values[1].Value.Sources {
			if s.ID == o.ID {
				want += s.Sensitivity * o.Sensitivity * s.U * s.U
			}
		}
	}
	if got := c.Covariance[0][1]; want <= 0 || math.Abs(got-want) > 1e-12*want || c.Covariance[1][0] != got {
		t.Errorf("covariance %v, the sources say %v", got, want)
	}
	for i, v := range values {
		if u := math.Sqrt(c.Covariance[i][i]); math.Abs(u-v.Value.StandardUncertainty) > 1e-12 || math.Abs(c.Correlation[i][i]-1) > 1e-12 {
			t.Errorf("u %v in the diagonal, %v on the certificate", u, v.Value.StandardUncertainty)
		}
	}
	if p := c.Pair; p == nil || !(p.StandardUncertainty < p.RootSumOfSquares) {
		t.Errorf("pair %+v: want a difference better known than of independent values", p)
	}
	depth, err := b.Depth(b.ctx, b.auditor, "WOOD")
	b.must(err)
	// WOOD rests on certificates, which rest on definitions.
	if len(depth) != 1 || depth[0].Depth != 2 || len(depth[0].Path) != 3 {
		t.Errorf("depth %+v, want 2: over a calibration to a certificate", depth)
	}
	if d, err := b.Depth(b.ctx, b.auditor, "USGS40"); err != nil || len(d) == 0 || d[0].Depth != 1 {
		t.Errorf("depth of an international material: %+v, %v", d, err)
	}

	_, err = b.StateValue(b.ctx, b.manager, "PEAT-LO", registry.ValueRequest{Scale: carbonScale, Value: "-28.20", Stated: store.Stated{Text: "0.03", Kind: "standard"}, Basis: "certificate"}, registry.Edit{After: 1, Reason: "the producer's", ValidFrom: on(9)})
	b.must(err)
	series, err := b.ValueSeries(b.ctx, b.auditor, values[0].Code)
	b.must(err)
	if len(series) != 1 {
		t.Errorf("%d steps while the second version is a draft", len(series))
	}
	_, err = b.Decide(b.ctx, b.signatory, store.KindValue, values[0].Code, registry.DecisionRequest{Act: "approved", Version: 2})
	b.must(err)
	series, err = b.ValueSeries(b.ctx, b.auditor, values[0].Code)
	b.must(err)
	old := number(t, values[0].Value.Value)
	// Nothing is shared with a value from outside: u² adds (E_n = d/(2u), metrology 8).
	u := math.Hypot(values[0].Value.StandardUncertainty, 0.03)
	if len(series) != 2 || series[0].Shift != nil || math.Abs(*series[1].Shift-(-28.2-old)) > 1e-9 || math.Abs(*series[1].En-(-28.2-old)/(2*u)) > 1e-9 {
		t.Errorf("series %+v, want the shift %v with E_n %v", series, -28.2-old, (-28.2-old)/(2*u))
	}
}
