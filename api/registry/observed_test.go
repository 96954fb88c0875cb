package registry_test

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A scene is a session that a flag is about: two anchors of the laboratory's own,
// a published control, a sample. Its zero value is a clean one.
type scene struct {
	low, high   store.Material
	matrix      string  // of the sample
	amount      float64 // mg of each portion
	content     string  // g in the bottle of LAB-LO
	sampleGroup string
	limits      store.Limits
	expires     *store.Instant
	shift       float64 // of the second session's slope beside six earlier ones
	history     int     // earlier approved sessions
}

func cleanScene() scene {
	m := store.Material{Kind: "working", Matrix: "peat", Minimum: &store.Amount{Value: "1.0", Unit: "mg"},
		Stock: &store.StockRule{Portion: &store.Amount{Value: "2", Unit: "mg"}}}
	return scene{low: m, high: m, matrix: "Peat", amount: 1.0, content: "10", sampleGroup: "tray 1"}
}

// flags stages the scene and answers with the flags of its calibration.
func (c scene) flags(t *testing.T) (*bench, registry.Item[store.Calibration]) {
	t.Helper()
	b := openBench(t)
	values := map[string]float64{"LAB-LO": -28, "LAB-HI": 36, "IAEA-CH-6": -10.45}
	var unit string
	for code, m := range map[string]store.Material{"LAB-LO": c.low, "LAB-HI": c.high} {
		m.Name = "standard " + code
		_, err := b.StateMaterial(b.ctx, b.manager, code, m, registry.Edit{})
		b.must(err)
		from := store.InstantOf(time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC))
		v, err := b.StateValue(b.ctx, b.manager, code, registry.ValueRequest{Scale: carbonScale, Value: store.Decimal(fmt.Sprint(values[code])),
			Stated: store.Stated{Text: "0.05", Kind: "standard"}, Basis: "certificate", Evidence: "in-house certificate", ExpiresAt: c.expires}, registry.Edit{ValidFrom: &from})
		b.must(err)
		_, err = b.Decide(b.ctx, b.signatory, store.KindValue, v.Code, registry.DecisionRequest{Act: "approved", Version: 1})
		b.must(err)
	}
	added, err := b.AddUnits(b.ctx, b.manager, store.Unit{Material: "LAB-LO", Label: "jar", State: "open", Content: &store.Amount{Value: store.Decimal(c.content), Unit: "g"}}, 1)
	b.must(err)
	unit = added[0].Code
	m := carbonMethod()
	m.Quantities[0].Limits = c.limits
	m.Quantities[0].Roles = []store.MaterialRole{{Material: "LAB-LO", Role: calib.Anchor}, {Material: "LAB-HI", Role: calib.Anchor}, {Material: "IAEA-CH-6", Role: calib.Control}}
	b.method("C-solid", m)
	samples, err := b.AddSamples(b.ctx, b.analyst, []store.Sample{{Client: "Marsh survey", Label: "A1", Matrix: c.matrix, Wanted: []store.Wanted{{Scale: carbonScale}}}})
	b.must(err)
	sample := samples[0].Code
	values[sample] = -18.2
	session := func(day int, slope float64) registry.Item[store.Calibration] {
		names := []string{"LAB-LO", "LAB-HI", "LAB-LO", "LAB-HI", "IAEA-CH-6", sample, "IAEA-CH-6", sample, "LAB-LO", "LAB-HI"}
		table := registry.ReadingTable{Rows: len(names), Place: func(i int, field string) string { return fmt.Sprintf("row %d, column %q", i+2, field) }}
		start := time.Date(2026, 3, day, 9, 0, 0, 0, time.UTC)
		for i, name := range names {
			at, position := store.InstantOf(start.Add(time.Duration(i)*10*time.Minute)), i+1
			rd := registry.RawReading{Name: name, Quantity: "d13C", Raw: 0.3 + slope*values[name] + 0.04*float64((i*7+day*3)%5-2)/2, Time: &at, Position: &position, Group: "tray 1"}
			switch {
			case name == sample:
				rd.Group = c.sampleGroup
			case name == "LAB-LO":
				rd.Unit = unit
				rd.Amount = &c.amount
			}
			table.Readings = append(table.Readings, rd)
		}
		answer, err := b.ImportReadings(b.ctx, b.analyst, registry.ImportRequest{New: &registry.SessionRequest{Instrument: "EA1", Method: "C-solid", Label: fmt.Sprint("day ", day)},
			Name: "run.csv", MediaType: "text/csv", Bytes: []byte(fmt.Sprint(day)), Table: table})
		b.must(err)
		return b.approvedResult(answer.Session.Code)
	}
	for i := range c.history {
		session(3+i, 1.01)
	}
	return b, session(3+c.history, 1.01+c.shift)
}

// Every judgement that rests on what is known around a fit is raised by a scene
// and not by its clean twin, says something and what to do, and is the same
// when the calibration is computed again.
func TestWhatIsKnownAroundAFitIsFlagged(t *testing.T) {
	b, clean := cleanScene().flags(t)
	for _, code := range []string{"portion_too_small", "unit_overdrawn", "matrix_mismatch", "group_without_anchor", "expired_value", "slope_off_history", "circular_assignment", "definitions_differ"} {
		if i := slices.IndexFunc(clean.Value.Flags, func(f calib.Flag) bool { return f.Code == code }); i >= 0 {
			t.Errorf("the clean session raises %+v", clean.Value.Flags[i])
		}
	}
	b.verified()
	for _, c := range []struct {
		code    string
		change  func(*scene)
		subject bool // its code stands at the sample's result
	}{
		{"portion_too_small", func(s *scene) { s.amount = 0.4 }, false},
		{"unit_overdrawn", func(s *scene) { s.content = "0.005" }, false},
		{"matrix_mismatch", func(s *scene) { s.matrix = "bone collagen" }, true},
		{"group_without_anchor", func(s *scene) { s.sampleGroup = "tray 2" }, true},
		{"expired_value", func(s *scene) { s.expires = on(1) }, false},
		{"slope_off_history", func(s *scene) { s.history, s.shift = 7, 0.03 }, false},
	} {
		t.Run(c.code, func(t *testing.T) {
			s := cleanScene()
			c.change(&s)
			b, it := s.flags(t)
			i := slices.IndexFunc(it.Value.Flags, func(f calib.Flag) bool { return f.Code == c.code })
			if i < 0 {
				t.Fatalf("not raised among %+v", it.Value.Flags)
			}
			if f := it.Value.Flags[i]; !strings.HasSuffix(f.Message, ".") || f.Severity == "" {
				t.Errorf("flag %+v", f)
			}
			if at := slices.IndexFunc(it.Value.Results, func(r store.Result) bool { return r.Role == calib.Sample }); c.subject != slices.Contains(it.Value.Results[at].Flags, c.code) {
				t.Errorf("the sample's result has %v", it.Value.Results[at].Flags)
			}
			b.verified()
		})
	}
}

// With seven earlier sessions of one slope, an eighth of the same slope is not
// flagged, its history says what the seven were, and all eight are listed.
func TestHistoryOfAnInstrumentIsThatOfItsApprovedSessions(t *testing.T) {
	s := cleanScene()
	s.history = 7
	b, it := s.flags(t)
	h := it.Value.History
	if h == nil || len(h.Coefficients) != 3 || h.Coefficients[0].N != 7 || h.Coefficients[0].Centre < 1.009 || h.Coefficients[0].Centre > 1.011 {
		t.Fatalf("history %+v", h)
	}
	for _, f := range it.Value.Flags {
		if strings.HasSuffix(f.Code, "_off_history") {
			t.Errorf("flag %+v", f)
		}
	}
	var all []store.LineRow
	q := registry.Query{Limit: 3}
	for {
		page, err := b.Lines(b.ctx, b.auditor, store.LineQuery{Instrument: "EA1", Approved: true}, q)
		b.must(err)
		all = append(all, page.Items...)
		if q.After = page.After; q.After == "" {
			break
		}
	}
	if len(all) != 8 || !slices.IsSortedFunc(all, func(a, b store.LineRow) int { return int(*a.At - *b.At) }) {
		t.Errorf("%d lines, want 8 in the order of time", len(all))
	}
	if last := all[7]; last.Calibration != it.Code || last.Slope != it.Value.Parameters[1].Value || !last.Approved {
		t.Errorf("last line %+v", last)
	}
	if _, err := b.Lines(b.ctx, b.auditor, store.LineQuery{Instrument: "NONE"}, registry.Query{Limit: 3}); err == nil {
		t.Error("an instrument that is none has lines")
	}
}

// A stored calibration's companion is that of its pinned inputs.
func TestCompanionOfAStoredCalibration(t *testing.T) {
	b, it := cleanScene().flags(t)
	c, err := b.CompanionOf(b.ctx, b.auditor, it.Code, 0, store.Moment{})
	b.must(err)
	if len(c.Parameters) != len(it.Value.Parameters) || len(c.Subjects) != len(it.Value.Results) || c.Numbers(c.Readings[0].Index) != 1 {
		t.Errorf("companion %+v", c.Companion)
	}
	for i, p := range c.Parameters {
		if p.Name != it.Value.Parameters[i].Name || p.Difference != p.Value-it.Value.Parameters[i].Value {
			t.Errorf("parameter %+v beside %+v", p, it.Value.Parameters[i])
		}
	}
	if len(it.Value.Needs) == 0 || it.Value.Needs[0].Term != "drift" || !it.Value.Needs[0].Model {
		t.Errorf("needs %+v", it.Value.Needs)
	}
	b.verified()
}
