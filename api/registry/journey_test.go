package registry_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A bench is a registry on a temporary embedded database with a laboratory,
// people for each role, an instrument and an approved method.
type bench struct {
	*registry.Registry
	t     testing.TB
	ctx   context.Context
	store *store.Store
	clock time.Time

	admin, analyst, signatory, manager, auditor registry.Actor
}

func openBench(t testing.TB) *bench {
	t.Helper()
	b := &bench{t: t, ctx: context.Background(), clock: time.Date(2026, 3, 2, 8, 0, 0, 0, time.UTC)}
	var mu sync.Mutex // workers read the clock beside the test
	now := func() time.Time {
		mu.Lock()
		defer mu.Unlock()
		b.clock = b.clock.Add(time.Second)
		return b.clock
	}
	s, err := store.Open(b.ctx, store.Options{Database: filepath.Join(t.TempDir(), "registry.db"), Now: now, Migrate: true})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { s.Close() })
	b.store = s
	b.Registry = registry.New(s, registry.Options{Now: now, Rand: rand.NewChaCha8([32]byte{1})})
	secret, err := b.Init(b.ctx, registry.InitRequest{Laboratory: "TST", Name: "Test laboratory", Person: "ada", PersonName: "Ada", SecondPerson: true})
	if err != nil {
		t.Fatal(err)
	}
	if b.admin, err = b.Authenticate(b.ctx, secret); err != nil {
		t.Fatal(err)
	}
	for _, p := range []struct {
		actor *registry.Actor
		code  string
		roles []string
	}{
		{&b.analyst, "ana", []string{registry.Analyst}},
		{&b.signatory, "sig", []string{registry.Signatory}},
		{&b.manager, "man", []string{registry.Manager}},
		{&b.auditor, "aud", []string{registry.Auditor}},
	} {
		if _, err := b.AddPerson(b.ctx, b.admin, p.code, store.Person{Name: p.code, Roles: p.roles}); err != nil {
			t.Fatal(err)
		}
		_, secret, err := b.IssueToken(b.ctx, b.admin, registry.TokenRequest{Person: p.code, Label: "test"})
		if err != nil {
			t.Fatal(err)
		}
		if *p.actor, err = b.Authenticate(b.ctx, secret); err != nil {
			t.Fatal(err)
		}
	}
	return b
}

func (b *bench) must(err error) {
	b.t.Helper()
	if err != nil {
		b.t.Fatal(err)
	}
}

// carbonMethod is a plain line with replicate weights; the roles name published materials.
func carbonMethod() store.Method {
	return store.Method{Title: "δ13C of solids", Quantities: []store.MethodQuantity{{Quantity: "d13C", Scale: "d13C-VPDB-LSVEC",
		Model:  calib.Model{Drift: calib.DriftLinear, Weights: calib.WeightsReplicate},
		Limits: store.Limits{ControlDeviation: 0.3, ControlRequired: true},
		Roles: []store.MaterialRole{{Material: "USGS40", Role: calib.Anchor}, {Material: "USGS41", Role: calib.Anchor},
			{Material: "IAEA-CH-6", Role: calib.Control}}}},
		Corrections: []store.Correction{{Name: "o17", State: "earlier", By: "acquisition software"}},
		Approval:    store.Approval{SecondPerson: true}}
}

func (b *bench) method(code string, m store.Method) {
	b.t.Helper()
	_, err := b.StateInstrument(b.ctx, b.manager, "EA1", store.Instrument{Name: "first instrument"}, registry.Edit{})
	b.must(err)
	_, err = b.StateMethod(b.ctx, b.manager, code, m, registry.Edit{})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindMethod, code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
}

// table makes readings at two-minute steps: raw = 0.3 + 1.01·true + 0.01·hours, with a repeatable ripple for noise.
func table(rows ...row) registry.ReadingTable {
	t := registry.ReadingTable{Rows: len(rows), Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
	start := time.Date(2026, 3, 2, 9, 0, 0, 0, time.UTC)
	for i, r := range rows {
		at := store.InstantOf(start.Add(time.Duration(i) * 10 * time.Minute))
		position := i + 1
		ripple := 0.04 * float64((i*7)%5-2) / 2
		raw := 0.3 + 1.01*r.true + 0.01*float64(i)/6 + ripple
		t.Readings = append(t.Readings, registry.RawReading{Name: r.name, Role: r.role, Quantity: "d13C", Raw: raw, Time: &at, Position: &position})
	}
	return t
}

type row struct {
	name, role string
	true       float64
}

// carbonRows is a session with anchors at both ends, a control and a sample's
// two preparations. True values are those of materials.csv (CIAAW, IAEA).
func carbonRows(sample string) []row {
	return []row{{"USGS40", "", -26.39}, {"USGS41", "", 37.63}, {"USGS40", "", -26.39}, {"USGS41", "", 37.63}, {"IAEA-CH-6", "", -10.45},
		{sample, "", -18.2}, {"IAEA-CH-6", "", -10.45}, {sample, "", -18.2}, {"USGS40", "", -26.39}, {"USGS41", "", 37.63}}
}

func (b *bench) sample(client, label string) string {
	b.t.Helper()
	added, err := b.AddSamples(b.ctx, b.analyst, []store.Sample{{Client: client, Label: label, Wanted: []store.Wanted{{Scale: "d13C-VPDB-LSVEC"}}}})
	b.must(err)
	return added[0].Code
}

func (b *bench) session(rows []row) registry.ImportAnswer {
	b.t.Helper()
	answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid", Label: "first"},
		Name: "run.csv", MediaType: "text/csv", Bytes: []byte(fmt.Sprint(rows)), Table: table(rows...)})
	b.must(err)
	return answer
}

// approvedResult takes a session to an approved calibration with an accepted outcome.
func (b *bench) approvedResult(session string) registry.Item[store.Calibration] {
	b.t.Helper()
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d13C"})
	b.must(err)
	_, err = b.Decide(b.ctx, b.analyst, store.KindCalibration, c.Code, registry.DecisionRequest{Act: "submitted", Version: 1})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindCalibration, c.Code, registry.DecisionRequest{Act: "approved", Version: 1, Seen: 1})
	b.must(err)
	_, err = b.StateOutcome(b.ctx, b.analyst, session, store.Outcome{Quantity: "d13C", Outcome: "accepted"}, registry.Edit{})
	b.must(err)
	return c
}

func (b *bench) report(client string, finals ...string) registry.Report {
	b.t.Helper()
	rep, err := b.Issue(b.ctx, b.signatory, registry.ReportRequest{Client: client, Title: "Results", Finals: finals})
	b.must(err)
	return rep
}

func (b *bench) final(sample string) string {
	b.t.Helper()
	f, err := b.FinalValue(b.ctx, b.analyst, registry.FinalRequest{Sample: sample, Scale: "d13C-VPDB-LSVEC"})
	b.must(err)
	_, err = b.Decide(b.ctx, b.signatory, store.KindFinal, f.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
	return f.Code
}

func TestFromStandardsToATracedDelta(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	answer := b.session(carbonRows(sample))
	if len(answer.Flags) != 0 {
		t.Errorf("flags of a well-seated session: %v", answer.Flags)
	}
	c := b.approvedResult(answer.Session.Code)
	if n := len(c.Value.Results); n != 2 {
		t.Fatalf("results: %d, want the control and the sample", n)
	}
	rep := b.report("Marsh survey", b.final(sample))
	d := rep.Lines[0]
	// The truth of the simulated sample is -18.2; the ripple has an amplitude of 0.04.
	if d.Value < -18.3 || d.Value > -18.1 || !(d.StandardUncertainty > 0.01 && d.StandardUncertainty < 0.1) {
		t.Errorf("reported %v ± %v, want about -18.2 ± 0.04", d.Value, d.StandardUncertainty)
	}
	trace, err := b.Trace(b.ctx, b.auditor, "", d.Code, 0)
	b.must(err)
	parts := map[string]bool{}
	for _, e := range trace.Edges {
		parts[e.Part] = true
		if e.Part == "anchor" && e.Share == nil {
			t.Errorf("anchor edge without a share of the variance: %+v", e)
		}
	}
	for _, part := range []string{"line", "member", "outcome", "session", "method", "instrument", "anchor", "control", "material", "scale", "sample"} {
		if !parts[part] {
			t.Errorf("the trace has no edge of part %q", part)
		}
	}
	for _, n := range trace.Nodes {
		leaf := true
		for _, e := range trace.Edges {
			leaf = leaf && trace.Nodes[e.From].Ref != n.Ref
		}
		if leaf && n.Kind == store.KindValue {
			t.Errorf("the chain ends at the value %s, not at its scale", n.Ref)
		}
	}
	v, err := b.Verify(b.ctx, registry.VerifyRequest{})
	b.must(err)
	if !v.Clean() || v.Recomputed < 3 || v.Equal != v.Recomputed {
		t.Errorf("verification: %+v", v)
	}
}

func TestDifferenceOfTwoDeltasOfOneSessionCancelsWhatTheyShare(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	one, two := b.sample("Marsh survey", "A1"), b.sample("Marsh survey", "A2")
	rows := carbonRows(one)
	rows = append(rows[:8:8], row{two, "", -18.9}, row{two, "", -18.9}, row{"USGS40", "", -26.39}, row{"USGS41", "", 37.63})
	b.approvedResult(b.session(rows).Session.Code)
	rep := b.report("Marsh survey", b.final(one), b.final(two))
	c, err := b.Compare(b.ctx, b.auditor, []string{rep.Lines[0].Code, rep.Lines[1].Code}, 0)
	b.must(err)
	if c.Pair == nil || !(c.Pair.StandardUncertainty < 0.9*c.Pair.RootSumOfSquares) || !(c.Pair.Correlation > 0.1) {
		t.Errorf("pair %+v: want u of the difference below the root sum of squares, since the anchors are shared", c.Pair)
	}
	// var(a − b) = var(a) + var(b) − 2·cov(a, b), from the covariance that stands beside it (JCGM 100:2008 5.2.2).
	want := c.Covariance[0][0] + c.Covariance[1][1] - 2*c.Covariance[0][1]
	if got := c.Pair.StandardUncertainty * c.Pair.StandardUncertainty; got < want*(1-1e-9) || got > want*(1+1e-9) {
		t.Errorf("u²(difference) = %v, the covariance matrix gives %v", got, want)
	}
	if u := rep.Lines[0].StandardUncertainty; c.Covariance[0][0] < u*u*(1-1e-9) || c.Covariance[0][0] > u*u*(1+1e-9) {
		t.Errorf("variance %v of the first delta, its u² is %v", c.Covariance[0][0], u*u)
	}
	if mean := c.Mean.StandardUncertainty(); mean < c.MeanCommonPart || c.MeanCommonPart <= 0 {
		t.Errorf("u of the mean %v falls below the common part %v", mean, c.MeanCommonPart)
	}
}

func TestTraceUpFindsWhatRestsOnAnAnchor(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	c := b.approvedResult(b.session(carbonRows(sample)).Session.Code)
	rep := b.report("Marsh survey", b.final(sample))
	up, err := b.TraceAbove(b.ctx, b.auditor, registry.AboveRequest{Kind: store.KindValue, Code: registry.ValueCode("USGS40", "d13C-VPDB-LSVEC", "")})
	b.must(err)
	found := map[string]bool{}
	for _, n := range up.Trace.Nodes {
		found[string(n.Kind)+" "+n.Code] = true
	}
	for _, want := range []string{"calibration " + c.Code, "report " + rep.Code} {
		if !found[want] {
			t.Errorf("what rests on the value of USGS40 lacks %s: %v", want, found)
		}
	}
}

func TestApprovalNeedsAnotherPersonAndTheRole(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	session := b.session(carbonRows(sample)).Session.Code
	c, err := b.Fit(b.ctx, b.signatory, registry.FitRequest{Session: session, Quantity: "d13C"})
	b.must(err)
	approve := registry.DecisionRequest{Act: "approved", Version: 1}
	for name, actor := range map[string]registry.Actor{"author": b.signatory, "analyst": b.analyst, "auditor": b.auditor, "administrator": {Person: "x", Laboratory: "TST", Roles: []string{registry.Administrator}}} {
		if _, err := b.Decide(b.ctx, actor, store.KindCalibration, c.Code, approve); registry.MeaningOf(err) != registry.Refused {
			t.Errorf("%s approves: %v, want a refusal", name, err)
		}
	}
	if state, err := b.Decide(b.ctx, b.manager, store.KindCalibration, c.Code, approve); err != nil || state != store.Approved {
		t.Errorf("manager approves: %v %v", state, err)
	}
	if _, err := b.Decide(b.ctx, b.manager, store.KindCalibration, c.Code, approve); registry.MeaningOf(err) != registry.Stale {
		t.Errorf("a second approval: %v, want stale", err)
	}
}

func TestImportRefusesAndStoresNothing(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.sample("Marsh survey", "A1")
	b.sample("Harbour office", "A1")
	before := b.roots()
	for name, c := range map[string]struct {
		rows []row
		want string
	}{
		"unknown name":         {[]row{{"USGS40", "", 0}, {"nobody", "", 0}}, `row 3, column "name": found "nobody"`},
		"label of two clients": {[]row{{"A1", "", 0}}, "this could be sample"},
		"unknown role":         {[]row{{"USGS40", "calibrator", 0}}, `found "calibrator", expected one of anchor`},
		"sample as anchor":     {[]row{{"A1", "anchor", 0}}, "could be sample"},
	} {
		t.Run(name, func(t *testing.T) {
			_, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"},
				Name: "bad.csv", Bytes: []byte(name), Table: table(c.rows...)})
			if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want a complaint with %s", err, c.want)
			}
		})
	}
	preview, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"},
		Name: "run.csv", Bytes: []byte("x"), Table: table(carbonRows("USGS40")...), Preview: true})
	if err != nil || len(preview.Readings) != 10 {
		t.Errorf("preview: %d readings, %v", len(preview.Readings), err)
	}
	if after := b.roots(); after != before {
		t.Errorf("the ledgers changed from %s to %s", before, after)
	}
}

func (b *bench) roots() string {
	b.t.Helper()
	var text strings.Builder
	b.must(b.store.Read(b.ctx, func(ctx context.Context, v *store.View) error {
		for _, laboratory := range []string{store.Common, "TST"} {
			head, err := v.Head(ctx, laboratory)
			if err != nil {
				return err
			}
			root, _, err := v.Root(ctx, laboratory, head.Size)
			if err != nil {
				return err
			}
			fmt.Fprintf(&text, "%s %d %x;", laboratory, head.Size, root)
		}
		return nil
	}))
	return text.String()
}

func TestTheSameBytesAreOneSession(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	one := b.session(carbonRows(sample))
	two := b.session(carbonRows(sample))
	if !two.Existed || two.Session.Code != one.Session.Code {
		t.Errorf("second import: existed %v, session %s, want %s", two.Existed, two.Session.Code, one.Session.Code)
	}
	var back bytes.Buffer
	b.must(b.store.Read(b.ctx, func(ctx context.Context, v *store.View) error {
		_, err := v.Upload(ctx, "TST", *one.Session.Value.Upload, &back)
		return err
	}))
	if back.String() != fmt.Sprint(carbonRows(sample)) {
		t.Error("the bytes did not come back as they were sent")
	}
}

func TestOverlappingSessionsOfOneInstrumentAreFlagged(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	one := b.session(carbonRows(b.sample("Marsh survey", "A1")))
	two := b.session(carbonRows(b.sample("Marsh survey", "A2")))
	if len(two.Flags) != 1 || two.Flags[0].Code != "overlapping_session" || !strings.Contains(two.Flags[0].Message, store.FormatCode(one.Session.Code)) {
		t.Errorf("flags of a session at the same time: %+v", two.Flags)
	}
}

func TestScatterBeyondTheMethodsLimitIsFlagged(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	m.Quantities[0].Limits.ReplicateSD = 0.001
	b.method("C-solid", m)
	session := b.session(carbonRows(b.sample("Marsh survey", "A1"))).Session.Code
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d13C", Preview: true})
	b.must(err)
	for _, f := range c.Value.Flags {
		if f.Code == "repeatability_outside_limit" {
			return
		}
	}
	t.Errorf("flags %+v: want repeatability_outside_limit, since the ripple is 0.04 and the limit 0.001", c.Value.Flags)
}

func TestOneLabelOfTwoMaterialsIsTwoUnits(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	bottles := map[string]string{}
	for _, material := range []string{"USGS40", "USGS41"} {
		added, err := b.AddUnits(b.ctx, b.manager, store.Unit{Material: material, Label: "bottle 1", State: "open"}, 1)
		b.must(err)
		bottles[material] = added[0].Code
	}
	tab := table(carbonRows("USGS40")...)
	for i := range tab.Readings {
		if bottles[tab.Readings[i].Name] != "" {
			tab.Readings[i].Unit = "bottle 1"
		}
	}
	answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"}, Bytes: []byte("units"), Table: tab})
	b.must(err)
	for _, rd := range answer.Readings {
		if rd.Unit != bottles[rd.Material] {
			t.Errorf("reading %d of %s: unit %s, want %s", rd.Number, rd.Material, rd.Unit, bottles[rd.Material])
		}
	}
}

func TestFitRefusesWhatCannotBeALine(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	for name, c := range map[string]struct {
		rows []row
		want string
	}{
		"one anchor":       {[]row{{"USGS40", "", -26.39}, {"USGS40", "", -26.39}, {sample, "", -20}}, "anchor"},
		"two realisations": {[]row{{"USGS40", "", -26.39}, {"IAEA-603", "anchor", 2.46}, {"IAEA-603", "anchor", 2.46}, {sample, "", -20}}, "one fit never holds two realisations"},
		"no value at all":  {[]row{{"USGS40", "", -26.39}, {"NBS-30", "anchor", 2.46}, {sample, "", -20}}, "anchor NBS-30: found no approved value"},
		"no uncertainty":   {[]row{{"USGS40", "", -26.39}, {"USGS41", "", 37.63}, {sample, "", -20}}, ""},
	} {
		t.Run(name, func(t *testing.T) {
			session := b.session(c.rows).Session.Code
			before := b.roots()
			_, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d13C"})
			if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), c.want) {
				t.Errorf("got %v, want a complaint with %q", err, c.want)
			}
			if after := b.roots(); after != before {
				t.Error("a refused fit changed the ledger")
			}
		})
	}
}

func TestExclusionIsRecordedAndReadmissible(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	sample := b.sample("Marsh survey", "A1")
	session := b.session(carbonRows(sample)).Session.Code
	if _, err := b.Exclude(b.ctx, b.analyst, session, store.Exclusion{Act: "exclude", Readings: []int{3}, Cause: "leak"}, registry.Edit{}); registry.MeaningOf(err) != registry.Invalid {
		t.Errorf("an exclusion without reason: %v", err)
	}
	_, err := b.Exclude(b.ctx, b.analyst, session, store.Exclusion{Act: "exclude", Readings: []int{3}, Cause: "leak"}, registry.Edit{Reason: "pressure fell during the peak"})
	b.must(err)
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d13C"})
	b.must(err)
	if fmt.Sprint(c.Value.Excluded) != "[3]" {
		t.Errorf("excluded: %v, want [3]", c.Value.Excluded)
	}
	parts := 0
	for _, in := range c.Inputs {
		if in.Part == "exclusion" {
			parts++
		}
	}
	if parts != 1 {
		t.Errorf("the calibration names %d acts of exclusion, want 1", parts)
	}
	_, err = b.Exclude(b.ctx, b.analyst, session, store.Exclusion{Act: "readmit", Readings: []int{3}, Cause: "other"}, registry.Edit{After: 1, Reason: "the log showed another position"})
	b.must(err)
	again, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: session, Quantity: "d13C", Reason: "reading 3 readmitted"})
	b.must(err)
	if len(again.Value.Excluded) != 0 || again.Ref.Version != 2 || again.Code != c.Code {
		t.Errorf("second draft: excluded %v, %s", again.Value.Excluded, again.Ref)
	}
}

func TestAssignedValueStaysCorrelatedWithItsAnchors(t *testing.T) {
	b := openBench(t)
	m := carbonMethod()
	b.method("C-solid", m)
	_, err := b.StateMaterial(b.ctx, b.manager, "PEAT-LO", store.Material{Name: "Peat low", Kind: "working", Substance: "peat"}, registry.Edit{})
	b.must(err)
	session := b.session(carbonRows("PEAT-LO")).Session.Code
	b.approvedResult(session)
	from := store.InstantOf(time.Date(2026, 3, 3, 0, 0, 0, 0, time.UTC))
	value, err := b.AssignValue(b.ctx, b.manager, registry.AssignRequest{Material: "PEAT-LO", Scale: "d13C-VPDB-LSVEC"}, registry.Edit{ValidFrom: &from})
	b.must(err)
	anchors := 0
	for _, s := range value.Value.Sources {
		if s.Kind == "anchor" && strings.HasPrefix(s.ID, "anchor:common/USGS4") {
			anchors++
		}
	}
	if anchors != 2 {
		t.Errorf("the assigned value keeps %d anchor sources, want those of USGS40 and USGS41", anchors)
	}
	if _, err := b.Decide(b.ctx, b.manager, store.KindValue, value.Code, registry.DecisionRequest{Act: "approved", Version: 1}); registry.MeaningOf(err) != registry.Refused {
		t.Errorf("own value approved where the laboratory asks for a second person: %v", err)
	}
	_, err = b.Decide(b.ctx, b.signatory, store.KindValue, value.Code, registry.DecisionRequest{Act: "approved", Version: 1})
	b.must(err)
	v, err := b.Verify(b.ctx, registry.VerifyRequest{})
	b.must(err)
	if !v.Clean() {
		t.Errorf("findings: %v", v.Findings)
	}
}

func TestValueWithoutUncertaintyIsRefusedUnlessItDefines(t *testing.T) {
	b := openBench(t)
	_, err := b.StateMaterial(b.ctx, b.manager, "PEAT-LO", store.Material{Name: "Peat low", Kind: "working"}, registry.Edit{})
	b.must(err)
	from := store.InstantOf(time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC))
	for _, c := range []struct {
		stated store.Stated
		basis  string
		want   string
	}{
		{store.Stated{Text: "0", Kind: "standard"}, "certificate", "above 0"},
		{store.Stated{Text: "-0.1", Kind: "standard"}, "certificate", "above 0"},
		{store.Stated{Text: "0", Kind: "exact"}, "certificate", "only a value that defines a scale"},
		{store.Stated{Text: "0.1", Kind: "expanded"}, "certificate", "coverage factor"},
		{store.Stated{Text: "abc", Kind: "standard"}, "certificate", "decimal number"},
	} {
		_, err := b.StateValue(b.ctx, b.manager, "PEAT-LO", registry.ValueRequest{Scale: "d13C-VPDB-LSVEC", Value: "-28.10", Stated: c.stated, Basis: c.basis}, registry.Edit{ValidFrom: &from})
		if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%+v: got %v, want a complaint with %q", c.stated, err, c.want)
		}
	}
	value, err := b.StateValue(b.ctx, b.manager, "PEAT-LO", registry.ValueRequest{Scale: "d13C-VPDB-LSVEC", Value: "-28.10", Stated: store.Stated{Text: "0.10", Kind: "expanded", K: two()}, Basis: "certificate"}, registry.Edit{ValidFrom: &from})
	b.must(err)
	if value.Value.Value != "-28.10" || value.Value.StandardUncertainty != 0.05 {
		t.Errorf("value %s ± %v, want the digits -28.10 and U/k = 0.05", value.Value.Value, value.Value.StandardUncertainty)
	}
}

func two() *float64 { k := 2.0; return &k }

func TestDuplicateCodesInAnyCaseAreRefused(t *testing.T) {
	b := openBench(t)
	_, err := b.StateMaterial(b.ctx, b.manager, "PEAT-LO", store.Material{Name: "Peat low", Kind: "working"}, registry.Edit{})
	b.must(err)
	for _, code := range []string{"PEAT-LO", "peat-lo", "usgs40"} {
		_, err := b.StateMaterial(b.ctx, b.manager, code, store.Material{Name: "another", Kind: "working"}, registry.Edit{})
		if registry.MeaningOf(err) != registry.Conflict {
			t.Errorf("%s: %v, want a conflict", code, err)
		}
	}
}

func TestForeignLaboratoryIsNotFound(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	secret, err := b.AddLaboratory(b.ctx, registry.InitRequest{Laboratory: "OTH", Name: "Other", Person: "eve", PersonName: "Eve"})
	b.must(err)
	eve, err := b.Authenticate(b.ctx, secret)
	b.must(err)
	if _, err := registry.One[store.Method](b.ctx, b.Registry, eve, store.KindMethod, "C-solid", 0, store.Moment{}); registry.MeaningOf(err) != registry.NotFound {
		t.Errorf("another laboratory's method: %v, want not found", err)
	}
	sample := b.sample("Marsh survey", "A1")
	b.approvedResult(b.session(carbonRows(sample)).Session.Code)
	rep := b.report("Marsh survey", b.final(sample))
	if _, err := b.Reported(b.ctx, eve, rep.Lines[0].Code); registry.MeaningOf(err) != registry.NotFound {
		t.Errorf("another laboratory's reported delta: %v, want not found", err)
	}
}

func TestRevokedTokenLetsNobodyIn(t *testing.T) {
	b := openBench(t)
	item, secret, err := b.IssueToken(b.ctx, b.admin, registry.TokenRequest{Person: "ana", Label: "script", Scopes: []string{"import"}})
	b.must(err)
	actor, err := b.Authenticate(b.ctx, secret)
	b.must(err)
	if actor.May(registry.MayFit) || !actor.May(registry.MayImport) {
		t.Errorf("scopes of the token: %+v", actor)
	}
	_, err = b.RevokeToken(b.ctx, b.admin, item.Code, "script retired")
	b.must(err)
	if _, err := b.Authenticate(b.ctx, secret); registry.MeaningOf(err) != registry.Unauthenticated {
		t.Errorf("revoked token: %v", err)
	}
	for _, bad := range []string{"", "dm_", "dm_TST_", "dm_TST_nonsense", "dm_XXX_" + strings.Repeat("a", 43)} {
		if _, err := b.Authenticate(b.ctx, bad); registry.MeaningOf(err) != registry.Unauthenticated {
			t.Errorf("%q: %v", bad, err)
		}
	}
	var e *registry.Error
	if _, err := b.Authenticate(b.ctx, secret); !errors.As(err, &e) {
		t.Errorf("refusal %v is not a registry error", err)
	}
}
