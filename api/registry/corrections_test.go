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

// sourceOf simulates the ion source of a hydrogen instrument: H3+ adds K·I to
// every measured ratio (Sessions, Burgoyne and Hayes 2001,
// doi:10.1021/ac000489e), ratios in ppm, intensities in nA.
type sourceOf struct {
	k, gas, gasIntensity float64 // gas: true ratio of the working gas
}

// raw is the delta that a program without any correction forms.
func (s sourceOf) raw(trueDelta, intensity float64) float64 {
	sample := s.gas*(1+(trueDelta-gasDelta)/(1000+gasDelta)) + s.k*intensity
	return (sample/(s.gas+s.k*s.gasIntensity) - 1) * 1000
}

// gasDelta is the working gas on the scale (‰).
const gasDelta = -95.0

func (s sourceOf) gasRatio() float64 { return s.gas + s.k*s.gasIntensity }

// pulses of the working gas, exact, so that the factor comes back exactly.
func (s sourceOf) pulses(u float64) []store.FactorPulse {
	var out []store.FactorPulse
	for _, i := range []float64{1, 2, 3, 4, 5, 6, 7, 8, 9, 10} {
		out = append(out, store.FactorPulse{Intensity: i, Ratio: s.gas + s.k*i, U: &u})
	}
	return out
}

func hydrogenMethod() store.Method {
	return store.Method{Title: "δ2H of waters", Quantities: []store.MethodQuantity{{Quantity: "d2H", Scale: "d2H-VSMOW-SLAP",
		Model: calib.Model{Weights: calib.WeightsReplicate},
		H3:    &store.H3Rule{RatioUnit: "ppm", IntensityUnit: "nA", Shape: "mean", MaximumAgeHours: 24, MaximumChange: 0.2},
		Roles: []store.MaterialRole{{Material: "VSMOW2", Role: calib.Anchor}, {Material: "SLAP2", Role: calib.Anchor}, {Material: "USGS46", Role: calib.Control}}}},
		Corrections: []store.Correction{{Name: "h3", State: "here"}}, Approval: store.Approval{SecondPerson: true}}
}

var sessionStart = time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)

// hydrogenTable measures every material at its own intensity, so that a wrong
// factor bends the line.
func hydrogenTable(s sourceOf, sample string) registry.ReadingTable {
	t := registry.ReadingTable{Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
	for i, r := range []struct {
		name            string
		true, intensity float64
	}{{"VSMOW2", 0, 5.5}, {"SLAP2", -427.5, 4}, {sample, -120, 7}, {"VSMOW2", 0, 6}, {"USGS46", -235.8, 5}, {"SLAP2", -427.5, 4.5}, {sample, -120, 3}, {"VSMOW2", 0, 5}, {"SLAP2", -427.5, 5}} {
		at := store.InstantOf(sessionStart.Add(time.Duration(i) * 10 * time.Minute))
		ripple := 0.3 * float64((i*7)%5-2) / 2
		t.Readings = append(t.Readings, registry.RawReading{Name: r.name, Quantity: "d2H", Raw: s.raw(r.true, r.intensity) + ripple, Time: &at,
			Intensity: pointer(r.intensity), GasIntensity: pointer(s.gasIntensity), GasRatio: pointer(s.gasRatio())})
	}
	t.Rows = len(t.Readings)
	return t
}

func pointer[T any](x T) *T { return &x }

func (b *bench) importTable(method string, t registry.ReadingTable) registry.ImportAnswer {
	b.t.Helper()
	a, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: method},
		Name: "run.csv", Bytes: fmt.Append(nil, method, t.Readings), Table: t})
	b.must(err)
	return a
}

func (b *bench) factor(f store.Factor) registry.Item[store.Factor] {
	b.t.Helper()
	it, err := b.StateFactor(b.ctx, b.analyst, "EA1", f, registry.Edit{})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindFactor, "EA1", registry.DecisionRequest{Act: "approved", Version: it.Ref.Version})
	b.must(err)
	return it
}

func resultOf(t testing.TB, c store.Calibration, subject string) store.Result {
	t.Helper()
	i := slices.IndexFunc(c.Results, func(r store.Result) bool { return r.Subject == subject })
	if i < 0 {
		t.Fatalf("no result of %s", subject)
	}
	return c.Results[i]
}

func hasFlag(c store.Calibration, code string) bool {
	return slices.ContainsFunc(c.Flags, func(f calib.Flag) bool { return f.Code == code })
}

var furnace = sourceOf{k: 5, gas: 282, gasIntensity: 5}

func (b *bench) waterSample(label string) string {
	b.t.Helper()
	added, err := b.AddSamples(b.ctx, b.analyst, []store.Sample{{Client: "Marsh survey", Label: label, Wanted: []store.Wanted{{Scale: "d2H-VSMOW-SLAP"}}}})
	b.must(err)
	return added[0].Code
}

func TestH3FactorIsAppliedAndReachesEveryResult(t *testing.T) {
	b := openBench(t)
	b.method("H-water", hydrogenMethod())
	sample := b.waterSample("W1")
	session := b.importTable("H-water", hydrogenTable(furnace, sample)).Session.Code

	if _, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d2H"}); err == nil || !strings.Contains(err.Error(), "none approved for EA1") {
		t.Errorf("a fit without a factor: %v, want a refusal that names the instrument", err)
	}
	f := b.factor(store.Factor{Origin: registry.FromPulses, DeterminedAt: store.InstantOf(sessionStart.Add(-2 * time.Hour)), RatioUnit: "ppm", IntensityUnit: "nA", Shape: "flat", Pulses: furnace.pulses(0.05)})
	// The pulses lie on ratio = 282 + 5·I; u(K) = u/√Σ(I − 5.5)² = 0.05/√82.5.
	near(t, "K", f.Value.K, 5, 1e-9)
	near(t, "u(K)", f.Value.U, 0.05/math.Sqrt(82.5), 1e-12)

	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d2H"})
	b.must(err)
	// The truth of the simulation; the ripple of 0.3 ‰ leaves about that.
	res := resultOf(t, c.Value, sample)
	near(t, "sample", res.Value, -120, 0.6)
	if hasFlag(c.Value, "h3_stale") || hasFlag(c.Value, "h3_outside_range") {
		t.Errorf("flags of a fresh factor: %v", c.Value.Flags)
	}
	share := -1.0
	for _, s := range res.Sources {
		if s.Kind == "correction" {
			share = s.VarianceShare
		}
	}
	// What u(K) moves the sample by, from the fit with another factor, is its part of the budget.
	shifted := furnace
	shifted.k += f.Value.U
	b.factor(store.Factor{Origin: registry.AppliedElsewhere, DeterminedAt: store.InstantOf(sessionStart.Add(-time.Hour)), RatioUnit: "ppm", IntensityUnit: "nA", K: 5 + f.Value.U, Evidence: "a trial"})
	moved, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d2H", Factor: 2, Reason: "what another factor gives", Preview: true})
	b.must(err)
	shift := resultOf(t, moved.Value, sample).Value - res.Value
	near(t, "part of the factor in u", math.Sqrt(share)*res.StandardUncertainty, math.Abs(shift), 2e-3*math.Abs(shift))
	if math.Abs(shift) < 1e-3 {
		t.Errorf("the shift %v is too small to show anything", shift)
	}

	b.approve(store.KindCalibration, c.Code)
	trace, err := b.Trace(b.ctx, b.auditor, store.KindCalibration, c.Code, 1)
	b.must(err)
	if !slices.ContainsFunc(trace.Nodes, func(n registry.TraceNode) bool {
		return n.Kind == store.KindFactor && strings.Contains(n.Detail, "from 10 pulses")
	}) {
		t.Error("the trace does not reach the factor and its pulses")
	}
	b.verified()
}

func (b *bench) approve(kind store.Kind, code string) {
	b.t.Helper()
	_, err := b.Decide(b.ctx, b.signatory, kind, code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
}

func near(t testing.TB, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s = %.12g, want %.12g (allowed %.2g)", what, got, want, tolerance)
	}
}

// A program that applied a factor of its own: its deltas are those of the
// corrected ratios. Undoing it and applying the true one gives what applying
// the true one to uncorrected deltas gives.
func TestFactorAppliedElsewhereIsUndoneBeforeAnother(t *testing.T) {
	b := openBench(t)
	m := hydrogenMethod()
	m.Corrections[0].State = "earlier"
	b.method("H-water", m)
	b.must(second(b.StateMethod(b.ctx, b.manager, "H-raw", hydrogenMethod(), registry.Edit{})))
	b.approve(store.KindMethod, "H-raw")
	sample := b.waterSample("W1")
	applied := 4.2
	table := hydrogenTable(furnace, sample)
	uncorrected := b.importTable("H-raw", table).Session.Code
	for i := range table.Readings {
		r := &table.Readings[i]
		measured := *r.GasRatio * (1 + r.Raw/1000)
		r.Raw = ((measured-applied**r.Intensity)/(*r.GasRatio-applied**r.GasIntensity) - 1) * 1000
	}
	corrected := b.importTable("H-water", table).Session.Code
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: corrected, Quantity: "d2H"})
	b.must(err)
	if _, err := b.Decide(b.ctx, b.signatory, store.KindCalibration, c.Code, registry.DecisionRequest{Act: "approved", Version: 1}); err == nil || !strings.Contains(err.Error(), "by a factor that nobody recorded") {
		t.Errorf("approval without a recorded factor: %v", err)
	}
	b.factor(store.Factor{Origin: registry.AppliedElsewhere, DeterminedAt: store.InstantOf(sessionStart.Add(-30 * time.Hour)), RatioUnit: "ppm", IntensityUnit: "nA", K: applied, U: 0.05, Evidence: "printed by the bench program"})
	c, err = b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: corrected, Quantity: "d2H", Reason: "the factor is on record now"})
	b.must(err)
	if !hasFlag(c.Value, "h3_stale") {
		t.Errorf("a factor 30 hours old, with a limit of 24, is not flagged: %v", c.Value.Flags)
	}
	if len(c.Value.Corrections) != 1 || c.Value.Corrections[0].StandardUncertainty != 0.05 {
		t.Errorf("corrections %+v: want the recorded factor with its uncertainty", c.Value.Corrections)
	}
	b.factor(store.Factor{Origin: registry.FromPulses, DeterminedAt: store.InstantOf(sessionStart.Add(-time.Hour)), RatioUnit: "ppm", IntensityUnit: "nA", Shape: "flat", Pulses: furnace.pulses(0.05)})
	// The pulses' factor holds from an hour before the session: for uncorrected
	// deltas it is taken by itself; the corrected ones were formed with the first.
	plain, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: uncorrected, Quantity: "d2H", Preview: true})
	b.must(err)
	step := slices.ContainsFunc(plain.Value.Flags, func(f calib.Flag) bool { return f.Code == "h3_step" })
	if !step || !hasFlag(plain.Value, "h3_changed") {
		t.Errorf("a factor that went from 4.2 to 5 is no step: %v", plain.Value.Flags)
	}
	near(t, "sample", resultOf(t, plain.Value, sample).Value, -120, 0.6)
}

func second[T any](_ T, err error) error { return err }

// Undoing needs to know which factor the file's deltas were formed with: the
// one in force when the session started.
func TestAnotherFactorReplacesTheOneInForce(t *testing.T) {
	b := openBench(t)
	m := hydrogenMethod()
	m.Corrections[0].State = "earlier"
	b.method("H-water", m)
	sample := b.waterSample("W1")
	table := hydrogenTable(furnace, sample)
	want := hydrogenTable(furnace, sample).Readings
	for i := range table.Readings {
		r := &table.Readings[i]
		measured := *r.GasRatio * (1 + r.Raw/1000)
		r.Raw = ((measured-4.2**r.Intensity)/(*r.GasRatio-4.2**r.GasIntensity) - 1) * 1000
		w := &want[i]
		w.Raw = ((measured-5**r.Intensity)/(*r.GasRatio-5**r.GasIntensity) - 1) * 1000
	}
	b.factor(store.Factor{Origin: registry.AppliedElsewhere, DeterminedAt: store.InstantOf(sessionStart.Add(-time.Hour)), RatioUnit: "ppm", IntensityUnit: "nA", K: 4.2, Evidence: "printed by the bench program"})
	later := b.factor(store.Factor{Origin: registry.FromPulses, DeterminedAt: store.InstantOf(sessionStart.Add(9 * time.Hour)), RatioUnit: "ppm", IntensityUnit: "nA", Shape: "flat", Pulses: furnace.pulses(0.05)})
	session := b.importTable("H-water", table).Session.Code
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d2H", Factor: later.Ref.Version})
	b.must(err)
	if !hasFlag(c.Value, "h3_determined_later") {
		t.Errorf("a factor determined after the session is not flagged: %v", c.Value.Flags)
	}
	checked := 0
	for _, rd := range c.Value.Readings {
		if rd.Corrected == nil {
			t.Fatalf("reading %d entered uncorrected", rd.Number)
		}
		near(t, fmt.Sprintf("reading %d", rd.Number), *rd.Corrected, want[rd.Number-1].Raw, 1e-9)
		checked++
	}
	if checked < 6 {
		t.Errorf("%d readings checked", checked)
	}
	b.verified()
}

// blankMethod takes out a blank known from the session's own blank readings.
func blankMethod() store.Method {
	m := carbonMethod()
	m.Quantities[0].Blank = &store.BlankRule{From: "readings"}
	m.Quantities[0].Model = calib.Model{Weights: calib.WeightsEqual}
	m.Quantities[0].Limits = store.Limits{}
	m.Corrections = append(m.Corrections, store.Correction{Name: "blank", State: "here"})
	return m
}

// A known synthetic mix is recovered within 0.01 ‰ (E06): every peak holds 0.4
// units of blank at a raw delta of −27.
func TestBlankFromReadingsIsTakenOut(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", blankMethod())
	sample := b.sample("Marsh survey", "A1")
	tab := registry.ReadingTable{Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
	add := func(name, role string, raw, size float64) {
		at := store.InstantOf(sessionStart.Add(time.Duration(len(tab.Readings)) * 10 * time.Minute))
		tab.Readings = append(tab.Readings, registry.RawReading{Name: name, Role: role, Quantity: "d13C", Raw: raw, Size: pointer(size), Time: &at})
		tab.Rows++
	}
	mixed := func(name string, trueDelta, own float64) {
		raw := 0.3 + 1.01*trueDelta
		add(name, "", (raw*own-27*0.4)/(own+0.4), own+0.4)
	}
	for _, x := range []float64{0.38, 0.40, 0.42} {
		add("empty", "blank", -27, x)
	}
	mixed("USGS40", -26.39, 20)
	mixed("USGS41", 37.63, 12)
	mixed(sample, -5, 6)
	mixed("USGS41", 37.63, 25)
	mixed("IAEA-CH-6", -10.45, 9)
	mixed("USGS40", -26.39, 8)
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: b.importTable("C-solid", tab).Session.Code, Quantity: "d13C"})
	b.must(err)
	res := resultOf(t, c.Value, sample)
	near(t, "sample", res.Value, -5, 0.01)
	if len(c.Value.Corrections) != 2 || math.Abs(c.Value.Corrections[0].Value-0.4) > 1e-12 {
		t.Fatalf("corrections %+v: want the blank's size 0.4 and its raw delta", c.Value.Corrections)
	}
	// u(size) = s/√n of 0.38, 0.40, 0.42 = 0.02/√3, known to 2 degrees of freedom.
	near(t, "u of the blank's size", c.Value.Corrections[0].StandardUncertainty, 0.02/math.Sqrt(3), 1e-12)
	if !slices.ContainsFunc(res.Sources, func(s store.Contribution) bool { return s.Kind == "correction" && s.VarianceShare > 0 }) {
		t.Errorf("sources %+v: the blank is in no budget", res.Sources)
	}
	b.verified()

	m := blankMethod()
	m.Quantities[0].Model.Size = calib.SizeBlank
	if _, err := b.StateMethod(b.ctx, b.manager, "C-two", m, registry.Edit{}); err == nil || !strings.Contains(err.Error(), "take it out twice") {
		t.Errorf("a blank taken out before the fit and in it: %v, want a refusal", err)
	}
}

// Injections 1 and 2 of each vial are set aside by rule and the rest averaged,
// with the rule visible (D12): the same as doing it by hand.
func TestRepeatsAreSetAsideAndAveragedByRule(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	m.Quantities[0].Model = calib.Model{Drift: calib.DriftLinear, Weights: calib.WeightsEqual}
	b.method("C-solid", m)
	byRule := m
	byRule.Quantities = slices.Clone(m.Quantities)
	byRule.Quantities[0].Repeats = &store.Repeats{Within: "position", IgnoreFirst: 2, Average: true}
	b.must(second(b.StateMethod(b.ctx, b.manager, "C-rule", byRule, registry.Edit{})))
	b.approve(store.KindMethod, "C-rule")
	sample := b.sample("Marsh survey", "A1")
	rows := carbonRows(sample)
	var injections, means registry.ReadingTable
	injections.Place = func(i int, field string) string { return fmt.Sprintf("row %d", i+2) }
	means.Place = injections.Place
	for vial, r := range rows {
		position := vial + 1
		var sum, last float64
		for injection := range 5 {
			at := store.InstantOf(sessionStart.Add(time.Duration(10*vial+injection) * time.Minute))
			raw := 0.3 + 1.01*r.true + 0.02*float64((vial*5+injection*3)%7-3) + 5*math.Pow(0.1, float64(injection))
			injections.Readings = append(injections.Readings, registry.RawReading{Name: r.name, Quantity: "d13C", Raw: raw, Time: &at, Position: &position})
			if injection >= 2 {
				sum += raw
				last++
			}
		}
		at := store.InstantOf(sessionStart.Add(time.Duration(10*vial+3) * time.Minute)) // the mean of minutes 2, 3 and 4
		means.Readings = append(means.Readings, registry.RawReading{Name: r.name, Quantity: "d13C", Raw: sum / last, Time: &at, Position: &position})
	}
	ruled, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: b.importTable("C-rule", injections).Session.Code, Quantity: "d13C"})
	b.must(err)
	byHand, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: b.importTable("C-solid", means).Session.Code, Quantity: "d13C"})
	b.must(err)
	got, want := resultOf(t, ruled.Value, sample), resultOf(t, byHand.Value, sample)
	near(t, "value", got.Value, want.Value, 1e-9)
	near(t, "u", got.StandardUncertainty, want.StandardUncertainty, 1e-9)
	if len(ruled.Value.SetAside) != 20 || ruled.Value.SetAside[0] != 1 || ruled.Value.SetAside[1] != 2 {
		t.Errorf("set aside %v: want the first two of every five", ruled.Value.SetAside)
	}
	if len(ruled.Value.Means) != 10 || !slices.Equal(ruled.Value.Means[0].Readings, []int{3, 4, 5}) || ruled.Value.Means[0].SD == nil {
		t.Errorf("means %+v: want readings 3, 4 and 5 first, with their standard deviation", ruled.Value.Means)
	}
	b.verified()

	byRule.Quantities[0].Model.Memory = calib.MemoryCarryover
	if _, err := b.StateMethod(b.ctx, b.manager, "C-both", byRule, registry.Edit{}); err == nil || !strings.Contains(err.Error(), "carry-over") {
		t.Errorf("means with a term for carry-over: %v, want a refusal", err)
	}
}

// Rs = 2(t₂ − t₁)/(w₁ + w₂) (IUPAC 1993): 2·10/(8 + 8) = 1.25 is below 1.5,
// 2·14/16 = 1.75 is not.
func TestUnresolvedPeaksAreFlagged(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	m.Quantities[0].Limits.MinimumResolution = 1.5
	b.method("C-solid", m)
	tab := table(carbonRows("USGS40")...)
	for i := range tab.Readings {
		r := &tab.Readings[i]
		r.Analysis, r.WidthBy = fmt.Sprintf("a%d", i/2), "base"
		start := 300.0
		if i%2 == 1 {
			start += []float64{14, 10}[min(1, i/5%2)]
		}
		r.Retention, r.Width = pointer(start), pointer(8.0)
	}
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: b.importTable("C-solid", tab).Session.Code, Quantity: "d13C"})
	b.must(err)
	var pairs [][]int
	for _, f := range c.Value.Flags {
		if f.Code == "peaks_not_resolved" {
			pairs = append(pairs, f.Readings)
		}
	}
	if fmt.Sprint(pairs) != "[[5 6] [7 8] [9 10]]" {
		t.Errorf("pairs flagged: %v, want those of the analyses with 10 s between peaks", pairs)
	}
}

func TestConstantsOfASessionStayThoseItUsed(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	m.Corrections[0].Relations = []string{"lambda17", "R17-R13-VPDB"}
	b.method("C-solid", m)
	sample := b.sample("Marsh survey", "A1")
	session := b.session(carbonRows(sample)).Session
	from := store.InstantOf(time.Date(2011, 1, 1, 0, 0, 0, 0, time.UTC))
	own := store.Relation{Sort: registry.Constant, Title: "our own set", Constant: "0.516", Evidence: "an older convention"}
	b.must(second(b.StateRelation(b.ctx, b.manager, "lambda17", own, registry.Edit{ValidFrom: &from})))
	b.approve(store.KindRelation, "lambda17")
	again, err := registry.One[store.Session](b.ctx, b.Registry, b.auditor, store.KindSession, session.Code, 0, store.Moment{})
	b.must(err)
	var pinned []string
	for _, in := range again.Inputs {
		if in.Part == "constants" {
			pinned = append(pinned, fmt.Sprintf("%s/%s.%d", in.Laboratory, in.Code, in.Ref.Version))
		}
	}
	if !slices.Equal(pinned, []string{"common/lambda17.1", "common/R17-R13-VPDB.1"}) {
		t.Errorf("the session pins %v", pinned)
	}
	next := b.session(append(carbonRows(sample), row{"USGS40", "", -26.39})).Session
	if in := next.Inputs; !slices.ContainsFunc(in, func(in store.Input) bool { return in.Laboratory == "TST" && in.Code == "lambda17" }) {
		t.Errorf("a session after the laboratory stated its own constant names %v", in)
	}
}

// What a method says of the heterogeneity of its samples is in every result of
// a sample and stays whole in a final value of several sessions.
func TestSampleHomogeneityStaysWholeInAFinalValue(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	m.Quantities[0].SampleHomogeneity = &store.Component{StandardUncertainty: 0.1, Evidence: "ten portions of one leaf"}
	m.Final = store.FinalRule{Rule: registry.RuleAll}
	b.method("C-solid", m)
	sample := b.sample("Marsh survey", "A1")
	c := b.approvedResult(b.session(carbonRows(sample)).Session.Code)
	res := resultOf(t, c.Value, sample)
	if !slices.ContainsFunc(res.Sources, func(s store.Contribution) bool { return s.ID == "sample:"+sample+"/d13C-VPDB-LSVEC" && s.U == 0.1 }) {
		t.Errorf("sources %+v: want the sample's own", res.Sources)
	}
	b.approvedResult(b.session(append(carbonRows(sample), row{"USGS40", "", -26.39})).Session.Code)
	f, err := b.FinalValue(b.ctx, b.analyst, registry.FinalRequest{Sample: sample, Scale: "d13C-VPDB-LSVEC"})
	b.must(err)
	if len(f.Value.Members) != 2 || f.Value.StandardUncertainty < 0.1 {
		t.Errorf("final value of %d sessions has u %v, below the sample's own 0.1", len(f.Value.Members), f.Value.StandardUncertainty)
	}
	b.verified()
}
