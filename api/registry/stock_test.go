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

// watched registers a working standard whose units are limited and whose portion is 50 mg.
func (b *bench) watched(code string, units int) []string {
	b.t.Helper()
	codes := b.working(code, units)
	m, err := b.FindMaterial(b.ctx, b.manager, code, store.Moment{})
	b.must(err)
	body := m.Value
	body.Stock = &store.StockRule{MaximumOpenings: 4, MaximumAgeDays: 100, RecheckDays: 200, Portion: &store.Amount{Value: "50", Unit: "mg"}, LeadDays: 180}
	_, err = b.StateMaterial(b.ctx, b.manager, code, body, registry.Edit{After: 1, Reason: "limits of the stock"})
	b.must(err)
	return codes
}

// used imports a session of that day in which a control came from the unit.
func (b *bench) used(day int, unit string) registry.ImportAnswer {
	b.t.Helper()
	places := []place{{"USGS40", "", "", -26.39}, {"USGS41", "", "", 37.63}}
	for range 8 {
		places = append(places, place{"PEAT-LO", "control", unit, -28})
	}
	places = append(places, places[:2]...)
	answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"},
		Name: "run.csv", MediaType: "text/csv", Bytes: []byte(fmt.Sprint(day, places)), Table: layOut(day, places...)})
	b.must(err)
	return answer
}

func TestForecastOfAYearsUseIsThatOfArithmetic(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	unit := b.watched("PEAT-LO", 1)[0]
	const first = 4 // 4 March 2026, then every 30 days
	for i := range 12 {
		b.used(first+30*i, unit)
	}
	b.clock = time.Date(2026, 3, first+360, 9, 0, 0, 0, time.UTC)
	s, err := b.Stock(b.ctx, b.auditor, "PEAT-LO")
	b.must(err)
	f := s.Forecast
	if f == nil || f.Basis != "portions" || f.Events != 12 || s.LeftUnit != "g" {
		t.Fatalf("forecast %+v (%s)", f, s.WithoutForecast)
	}
	// Arithmetic: 12 sessions of 8 portions of 50 mg leave 10 − 4.8 = 5.2 g; 11 of them in 360 days are
	// 4.4/360 g a day, so 5.2 g last 425.45 days.
	if math.Abs(f.Left-5.2) > 1e-9 || math.Abs(f.Days-5.2*360/4.4) > 0.05 {
		t.Errorf("%v g last %v days, want 5.2 g and %v days", f.Left, f.Days, 5.2*360/4.4)
	}
	if !(f.Earliest < f.RunsOut && f.RunsOut < f.Latest && f.UDays > 0) {
		t.Errorf("forecast %+v: want an interval about the day", f)
	}
	if n := len(s.Units[0].Uses); n != 12 || s.Units[0].Uses[0].Analyses != 8 {
		t.Errorf("%d uses logged, the first %+v", n, s.Units[0].Uses[0])
	}
	due, err := b.Due(b.ctx, b.auditor, 365)
	b.must(err)
	what := map[string]bool{}
	for _, d := range due {
		what[d.What] = true
	}
	if !what["successor"] || !what["recheck"] {
		t.Errorf("due %+v: want a successor to be begun and a check, 200 days after 2 March", due)
	}
}

func TestFewUsesGiveNoForecast(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	unit := b.watched("PEAT-LO", 1)[0]
	b.used(4, unit)
	s, err := b.Stock(b.ctx, b.auditor, "PEAT-LO")
	b.must(err)
	if s.Forecast != nil || !strings.Contains(s.WithoutForecast, "four") {
		t.Errorf("forecast %+v, %q", s.Forecast, s.WithoutForecast)
	}
}

func TestFifthOpeningAndOldAgeFlagTheSessionThatUsesTheUnit(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.watched("PEAT-LO", 1)
	added, err := b.AddUnits(b.ctx, b.manager, store.Unit{Material: "PEAT-LO", Label: "vial"}, 1)
	b.must(err)
	vial := added[0].Code
	for i := range 4 {
		u, err := b.ChangeUnit(b.ctx, b.analyst, vial, "open", "", nil, registry.Edit{Reason: "opened"})
		b.must(err)
		if u.Value.Openings != i+1 || u.Value.OpenedAt == nil {
			t.Errorf("after opening %d: %+v", i+1, u.Value)
		}
	}
	has := func(flags []calib.Flag, code string) bool {
		return slices.ContainsFunc(flags, func(f calib.Flag) bool { return f.Code == code })
	}
	if a := b.used(4, vial); has(a.Flags, "opened_too_often") || has(a.Flags, "open_too_long") {
		t.Errorf("flags at the limit: %+v", a.Flags)
	}
	_, err = b.ChangeUnit(b.ctx, b.analyst, vial, "open", "", nil, registry.Edit{Reason: "opened"})
	b.must(err)
	a := b.used(5, vial)
	if !has(a.Flags, "opened_too_often") {
		t.Errorf("flags after the fifth opening: %+v", a.Flags)
	}
	if a := b.used(120, vial); !has(a.Flags, "open_too_long") { // opened on 2 March, limit 100 days
		t.Errorf("flags of a unit open for 118 days: %+v", a.Flags)
	}
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: a.Session.Code, Quantity: "d13C"})
	b.must(err)
	if !has(c.Value.Flags, "opened_too_often") {
		t.Errorf("flags of the calibration: %+v", c.Value.Flags)
	}
	b.verified() // the flags follow from the versions that the calibration names
}

func TestQuarantineReachesBackToTheLastGoodDate(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.campaign("PEAT-LO", -28, b.working("PEAT-LO", 3)[:2], 4, 5, 6)
	s, err := b.Stock(b.ctx, b.auditor, "PEAT-LO")
	b.must(err)
	bottle := s.Units[2].Unit.Code
	for _, u := range s.Units {
		if len(u.Uses) == 0 {
			bottle = u.Unit.Code
		}
	}
	var codes []string
	var report string
	for i, day := range []int{21, 23, 25} {
		sample := b.sample("Marsh survey", fmt.Sprint("A", i))
		c := b.measured(day, useAsAnchor(sample, bottle)...)
		codes = append(codes, c.Value.Session)
		if i == 1 {
			report = b.report("Marsh survey", b.final(sample)).Code
		}
	}
	u, err := b.Quarantine(b.ctx, b.analyst, bottle, *on(22), registry.Edit{Reason: "the lid was loose"})
	b.must(err)
	if u.Value.State != "quarantined" {
		t.Errorf("state %s", u.Value.State)
	}
	got, err := b.Affected(b.ctx, b.auditor, bottle, nil)
	b.must(err)
	var sessions []string
	for _, a := range got {
		sessions = append(sessions, a.Session.Code)
		if a.Roles[calib.Anchor] != 3 || len(a.Calibrations) != 1 {
			t.Errorf("session %s: roles %v, %d calibrations", a.Session.Code, a.Roles, len(a.Calibrations))
		}
		if a.Session.Code == codes[1] && (len(a.Finals) != 1 || len(a.Reports) != 1 || a.Reports[0] != report) {
			t.Errorf("what rests on session %s: finals %v, reports %v, want report %s", codes[1], a.Finals, a.Reports, report)
		}
	}
	// Brute force: the sessions of 23 and 25 March used the bottle since 22 March, that of the 21st did not.
	want := []string{codes[1], codes[2]}
	slices.Sort(want)
	slices.Sort(sessions)
	if !slices.Equal(sessions, want) {
		t.Errorf("affected sessions %v, want %v", sessions, want)
	}
	_, err = b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"}, Bytes: []byte("late"), Table: layOut(27, useAsAnchor("USGS40", bottle)...)})
	if registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), "quarantined") {
		t.Errorf("a session with a quarantined bottle: %v", err)
	}
	b.clock = time.Date(2026, 3, 30, 9, 0, 0, 0, time.UTC)
	due, err := b.Due(b.ctx, b.auditor, 60)
	b.must(err)
	var what []string
	for _, d := range due {
		what = append(what, d.What)
	}
	if !slices.Contains(what, "in_doubt") || !slices.Contains(what, "expiry") {
		t.Errorf("due %v: want the bottle in doubt and the value that expires 30 days after 20 March", what)
	}
}

func TestPortionsBelowTheMinimumFlagTheirReadings(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.working("PEAT-LO", 1)
	m, err := b.FindMaterial(b.ctx, b.manager, "PEAT-LO", store.Moment{})
	b.must(err)
	body := m.Value
	body.Minimum = &store.Amount{Value: "400", Unit: "ug"}
	_, err = b.StateMaterial(b.ctx, b.manager, "PEAT-LO", body, registry.Edit{After: 1, Reason: "from its homogeneity"})
	b.must(err)
	b.stated("PEAT-LO", "-28.00")
	ends := []place{{"USGS40", "", "", -26.39}, {"USGS41", "", "", 37.63}}
	table := layOut(4, slices.Concat(ends, []place{{"PEAT-LO", "control", "", -28}, {"PEAT-LO", "control", "", -28}, {"IAEA-CH-6", "", "", -10.45}}, ends)...)
	for i, mg := range []float64{0.39, 0.40} {
		table.Readings[2+i].Amount = &mg
	}
	answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid"}, Bytes: []byte("x"), Table: table})
	b.must(err)
	c, err := b.Fit(b.ctx, b.analyst, registry.FitRequest{Session: answer.Session.Code, Quantity: "d13C"})
	b.must(err)
	i := slices.IndexFunc(c.Value.Flags, func(f calib.Flag) bool { return f.Code == "portion_too_small" })
	if i < 0 || !slices.Equal(c.Value.Flags[i].Readings, []int{3}) {
		t.Errorf("flags %+v: want reading 3, of 0.39 mg where 0.40 mg is the least", c.Value.Flags)
	}
	b.verified()
}

func TestUsesOutsideSessionsCountAllOrNone(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	unit := b.watched("PEAT-LO", 1)[0] // 10.0 g
	b.clock = time.Date(2026, 5, 1, 9, 0, 0, 0, time.UTC)
	row := func(day int, taken, left string) registry.UseRow {
		u := registry.UseRow{Unit: unit, Reason: "given to a colleague", UnitUse: registry.UnitUse{At: on(day)}, Place: func(f string) string { return fmt.Sprintf("row %d, column %q", day, f) }}
		if taken != "" {
			u.Taken = &store.Amount{Value: store.Decimal(taken), Unit: "mg"}
		}
		if left != "" {
			u.Left = &store.Amount{Value: store.Decimal(left), Unit: "g"}
		}
		return u
	}
	before := b.roots()
	for want, bad := range map[string]registry.UseRow{
		`row 9, column "taken"`:  row(9, "-1", ""),
		`row 10, column "unit"`:  {Unit: "no such jar", Reason: "x", Place: func(f string) string { return fmt.Sprintf("row 10, column %q", f) }},
		`row 90, column "at"`:    row(90, "1", ""),
		`row 11, column "state"`: {Unit: unit, Reason: "x", UnitUse: registry.UnitUse{State: "lost"}, Place: func(f string) string { return fmt.Sprintf("row 11, column %q", f) }},
	} {
		if _, err := b.LogUses(b.ctx, b.analyst, []registry.UseRow{row(5, "500", ""), bad}); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), want) {
			t.Errorf("%v, want a complaint at %s", err, want)
		}
	}
	if b.roots() != before {
		t.Error("refused uses changed the ledger")
	}
	rows := []registry.UseRow{row(5, "500", ""), row(15, "500", ""), row(25, "500", ""), row(35, "1000", "")}
	rows[3].Excursion = "the door of the cabinet stood open"
	units, err := b.LogUses(b.ctx, b.analyst, rows)
	b.must(err)
	if len(units) != 1 || units[0].Ref.Version != 5 || len(units[0].Value.Excursions) != 1 {
		t.Errorf("%d units, %+v", len(units), units[0].Value)
	}
	s, err := b.Stock(b.ctx, b.auditor, "PEAT-LO")
	b.must(err)
	// The content of 10 g was stated on 2 March, before every use: 10 − 2.5 g are left.
	if x := *s.Units[0].Left; math.Abs(x-7.5) > 1e-9 || s.Forecast == nil || s.Forecast.Events != 4 {
		t.Errorf("%v g left, forecast %+v (%s); want 7.5 g from four uses", x, s.Forecast, s.WithoutForecast)
	}
	// A statement of what is left begins anew.
	_, err = b.LogUses(b.ctx, b.analyst, []registry.UseRow{row(40, "", "7.1"), row(45, "100", "")})
	b.must(err)
	s, err = b.Stock(b.ctx, b.auditor, "PEAT-LO")
	b.must(err)
	if x := *s.Units[0].Left; math.Abs(x-7.0) > 1e-9 {
		t.Errorf("%v g left, want 7.1 − 0.1 g", x)
	}
	if a := b.used(50, unit); !slices.ContainsFunc(a.Flags, func(f calib.Flag) bool { return f.Code == "storage_excursion" }) {
		t.Errorf("flags %+v of a session after the excursion", a.Flags)
	}
	if a := b.used(30, unit); slices.ContainsFunc(a.Flags, func(f calib.Flag) bool { return f.Code == "storage_excursion" }) {
		t.Errorf("flags %+v of a session before the excursion", a.Flags)
	}
}

func TestUnitsComeInAsAListAllOrNone(t *testing.T) {
	b := openBench(t)
	b.method("C-solid", carbonMethod())
	b.working("PEAT-LO", 1)
	row := func(i int, u store.Unit) registry.UnitRow {
		return registry.UnitRow{Unit: u, Place: func(f string) string { return fmt.Sprintf("row %d, column %q", i, f) }}
	}
	good := row(2, store.Unit{Material: "PEAT-LO", Label: "vial A", Container: "vial", Content: &store.Amount{Value: "2.50", Unit: "g"}, FillingOrder: 7})
	before := b.roots()
	for want, bad := range map[string]registry.UnitRow{
		`row 3, column "container"`: row(3, store.Unit{Material: "PEAT-LO", Label: "x", Container: "bag"}),
		`row 4, column "label"`:     row(4, store.Unit{Material: "PEAT-LO", Label: "Vial  A"}),
		`row 5, column "material"`:  row(5, store.Unit{Material: "NOBODY", Label: "x"}),
		`row 6, column "content"`:   row(6, store.Unit{Material: "PEAT-LO", Label: "x", Content: &store.Amount{Value: "-1", Unit: "g"}}),
	} {
		if _, err := b.ImportUnits(b.ctx, b.manager, []registry.UnitRow{good, bad}); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), want) {
			t.Errorf("%v, want a complaint at %s", err, want)
		}
	}
	if b.roots() != before {
		t.Error("refused units changed the ledger")
	}
	units, err := b.ImportUnits(b.ctx, b.manager, []registry.UnitRow{good, row(3, store.Unit{Material: "PEAT-LO", Label: "vial B"})})
	b.must(err)
	if len(units) != 2 || units[0].Value.Container != "vial" || units[0].Value.Content.Value != "2.50" || units[0].Value.FillingOrder != 7 || units[1].Value.State != "sealed" {
		t.Errorf("units %+v", units)
	}
}
