package store_test

import (
	"bytes"
	"encoding/json"
	"flag"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"deltamoor/calib"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

var update = flag.Bool("update", false, "rewrite the golden files")

// bodies has one body of each form, with every kind of field filled. The golden
// bytes are what such a version is hashed as, for ever: a difference here means
// that a new form is needed, not a new golden file.
func bodies(t *testing.T) map[string]store.Draft {
	t.Helper()
	at := store.InstantOf(time.Date(2026, 3, 2, 8, 15, 0, 123456000, time.UTC))
	hash := store.Hash{0xde, 0xad, 31: 0xbe}
	ref := func(laboratory string, kind store.Kind, code string) store.Ref {
		return store.Ref{Key: store.Key{Laboratory: laboratory, Kind: kind, Code: code}, Version: 1, Hash: hash}
	}
	final := store.Version[store.Final]{Ref: ref(lab, store.KindFinal, "V1"), Value: finalDraft("V1", store.Ref{}).Value.(store.Final)}
	drafts := []store.Draft{
		{Kind: store.KindLaboratory, Code: lab, Value: store.Laboratory{Name: "Fjord laboratory", Zone: "Europe/Oslo", SecondPerson: []store.Kind{store.KindValue}}},
		{Kind: store.KindPerson, Code: "mara", Value: store.Person{Name: "Mara Ø", Roles: []string{"analyst"}}},
		{Kind: store.KindToken, Code: "T1", Value: store.Token{Person: "mara", Label: "R", Roles: []string{"analyst"}, Scopes: []string{"read"}, ExpiresAt: &at}},
		{Kind: store.KindKey, Code: "key-1", Value: store.SigningKey{Verifier: "registry/FJO+00000000+AA=="}},
		{Kind: store.KindScale, Code: "d13C-VPDB", Value: store.Scale{Quantity: "d13C", Label: "VPDB", Status: "current",
			Anchors: []store.ScaleAnchor{{Role: "zero", Material: "NBS19", Value: "1.95"}}}},
		material("GLY", "glycin"),
		value("GLY/d13C-VPDB/total", "-33.100", at, store.Input{Part: "material", Ref: ref(lab, store.KindMaterial, "GLY")}),
		{Kind: store.KindUnit, Code: "B1", Value: store.Unit{Material: "GLY", MaterialLaboratory: lab, Label: "bottle 4", State: "open", Content: &store.Amount{Value: "250.0", Unit: "mg"}}},
		{Kind: store.KindInstrument, Code: "EA-1", Value: store.Instrument{Name: "Elemental analyser", Serial: "77"}},
		{Kind: store.KindMethod, Code: "EA-C", Value: store.Method{Title: "Carbon in organic matter",
			Quantities: []store.MethodQuantity{{Quantity: "d13C", Scale: "d13C-VPDB", Limits: store.Limits{LeftOut: 3, MinimumSpan: 20}}},
			Approval:   store.Approval{SecondPerson: true}}},
		{Kind: store.KindFactor, Code: "HTC-1", Value: store.Factor{Instrument: "HTC-1", Quantity: "d2H", Origin: "pulses", DeterminedAt: at, K: 4.1, U: 0.05, DegreesOfFreedom: pointer(1.0),
			RatioUnit: "ppm", IntensityUnit: "nA", Resistor: 1e9, Shape: "flat", Pulses: []store.FactorPulse{{Intensity: 1, Ratio: 286.1}, {Intensity: 2, Ratio: 290.2, U: pointer(0.1)}, {Intensity: 3, Ratio: 294.3}},
			Zero: pointer(282.0), ResidualSD: pointer(0.01), Residuals: []float64{0.01, -0.02, 0.01}, Curvature: pointer(0.4), CurvatureDF: pointer(1.0), CurvatureP: pointer(0.7), Lowest: pointer(1.0), Highest: pointer(3.0), Settings: "tuned", Gas: "cylinder 4", Evidence: "log",
			Before: &store.FactorBefore{Version: 1, K: 4, U: 0.05, Z: pointer(1.4)}}},
		{Kind: store.KindRelation, Code: "O-OWN", Value: store.Relation{Sort: "conversion", Title: "oxygen", Expression: "y = A·x + B", From: "d18O-VPDB", To: "d18O-VSMOW-SLAP", Factor: "1.03092", Offset: "30.920",
			Covariance: &[2][2]float64{{1e-10, 0}, {0, 1e-4}}, Constant: "0.528", StandardUncertainty: pointer(0.001), Lowest: pointer(-60.0), Highest: pointer(40.0), Stated: "as printed", StatedUncertainty: "none",
			Domain: "calcite", Evidence: "a paper", Provisional: true, Note: "n"}},
		{Kind: store.KindSample, Code: "P1", Value: store.Sample{Client: "Institute", Label: "leaf 7", Wanted: []store.Wanted{{Scale: "d13C-VPDB"}}}},
		sessionDraft("S1", readings("S1", 70), &hash),
		{Kind: store.KindExclusion, Code: "S1", Value: store.Exclusion{Session: "S1", Act: "exclude", Readings: []int{3, 7}, Cause: "leak"}},
		{Kind: store.KindOutcome, Code: "S1/d13C", Value: store.Outcome{Session: "S1", Quantity: "d13C", Outcome: "in part", From: 1, To: 40, Cause: "leak"}},
		calibrationDraft("C1", ref(lab, store.KindSession, "S1"), ref(store.Common, store.KindValue, "USGS40/d13C-VPDB/total")),
		finalDraft("V1", ref(lab, store.KindCalibration, "C1")),
		reportDraft(t, "R1", []string{"D1"}, final),
		decision(ref(lab, store.KindCalibration, "C1"), store.ActApproved),
		{Kind: store.KindAssignment, Code: "A1", Value: store.Assignment{Title: "Successor of GLY", Material: "GLY-2", MaterialLaboratory: lab, Predecessor: "GLY",
			Quantities: []store.AssignmentQuantity{{Scale: "d13C-VPDB", Measurand: "total", Anchors: []string{"USGS40", "USGS41a"}, Estimator: "paule_mandel", Weights: "private", Level: 0.05}},
			Methods:    []string{"EA-C"}, Sessions: 6, Days: 3, Replicates: 5, Units: []string{"B1"}}},
		{Kind: store.KindRevision, Code: "X1", Value: store.Revision{Phase: store.RevisionDrafted,
			Values: []store.RevisedValue{{Old: ref(store.Common, store.KindValue, "USGS40/d13C-VPDB/total"), From: &at, Value: "-26.350", StandardUncertainty: 0.02,
				Stated: &store.Stated{Text: "0.020", Kind: "standard"}, Basis: "literature", Evidence: "announcement"},
				{Old: ref(lab, store.KindValue, "GLY/d13C-VPDB/total"), Withdrawn: true}},
			Units: []store.SuspectUnit{{Unit: "B1", Since: &at}}, Methods: []store.ReplacedMethod{{Old: ref(lab, store.KindMethod, "EA-C"), New: ref(lab, store.KindMethod, "EA-C")}},
			Exclusions: []store.RevisionExclusion{{Session: "S1", Readings: []int{3}}}, Position: 41, FrozenAt: at,
			Drafted: &store.RevisionSet{Calibrations: 2, Values: 1, Finals: 3, Hash: hash, Untold: []store.UntoldVersion{{Ref: ref(lab, store.KindCalibration, "C1"), Why: "one anchor is left"}}}}},
		{Kind: store.KindClosing, Code: "X1/R1", Value: store.Closing{Action: "re-issue", Lines: 2, Reissued: "R2"}},
		assignmentDraft(ref(lab, store.KindMaterial, "GLY")),
		{Kind: store.KindStudy, Code: "A1/d13C-VPDB/total/stability", Value: store.Study{Assignment: "A1", Scale: "d13C-VPDB", Measurand: "total", Of: "stability", Isochronous: true,
			Measurements: []store.StudyMeasurement{{Unit: "vial 3", Value: -33.1, Session: "May", Portion: 0.5, Days: 180}}, Upload: &hash}},
		{Kind: store.KindDocument, Code: hash.String(), Value: store.Upload{Name: "run.csv", MediaType: "text/csv", Size: 12}},
	}
	byForm := make(map[string]store.Draft)
	for _, d := range drafts {
		if d.By == "" {
			d.By, d.Reason = "mara", "first"
		}
		byForm[d.Value.Form()] = d
	}
	return byForm
}

func TestCanonicalBytesOfEveryFormStayTheSame(t *testing.T) {
	for form, d := range bodies(t) {
		version := 1
		if form == "value/1" {
			version = 2 // with a previous version
		}
		body, hash, err := store.CanonicalBody(lab, d, version, store.Hash{1})
		if err != nil {
			t.Errorf("%s: %v", form, err)
			continue
		}
		got := string(body) + "\n" + hash.String() + "\n"
		path := filepath.Join("testdata", "golden", strings.ReplaceAll(form, "/", "-")+".json")
		if *update {
			if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(path, []byte(got), 0o644); err != nil {
				t.Fatal(err)
			}
		}
		want, err := os.ReadFile(path)
		if err != nil {
			t.Errorf("%s: %v", form, err)
			continue
		}
		if diff := cmp.Diff(string(want), got); diff != "" {
			t.Errorf("%s has other canonical bytes (-golden +got):\n%s", form, diff)
		}
		if again, err := ledger.CanonicalJSON(body); err != nil || !bytes.Equal(again, body) {
			t.Errorf("%s: the body is not canonical: %v", form, err)
		}
	}
}

func pointer[T any](x T) *T { return &x }

func TestGoldenFilesCoverEveryForm(t *testing.T) {
	files, err := filepath.Glob("*.go")
	if err != nil {
		t.Fatal(err)
	}
	var text []byte
	for _, file := range files {
		if strings.HasSuffix(file, "_test.go") {
			continue
		}
		b, err := os.ReadFile(file)
		if err != nil {
			t.Fatal(err)
		}
		text = append(text, b...)
	}
	byForm := bodies(t)
	for line := range strings.Lines(string(text)) {
		if _, rest, ok := strings.Cut(line, `) Form() string { return "`); ok {
			form, _, _ := strings.Cut(rest, `"`)
			if _, ok := byForm[form]; !ok {
				t.Errorf("no golden bytes for %s", form)
			}
		}
	}
}

func readingGenerator() *rapid.Generator[store.Reading] {
	finite := rapid.Float64().Filter(func(f float64) bool { return !math.IsNaN(f) && !math.IsInf(f, 0) })
	return rapid.Custom(func(t *rapid.T) store.Reading {
		r := store.Reading{Session: rapid.String().Draw(t, "session"), Number: rapid.IntRange(1, 1<<30).Draw(t, "number"),
			Analysis: rapid.String().Draw(t, "analysis"), Preparation: rapid.String().Draw(t, "preparation"),
			Quantity: rapid.String().Draw(t, "quantity"), Role: calib.Role(rapid.String().Draw(t, "role")),
			Material: rapid.String().Draw(t, "material"), Unit: rapid.String().Draw(t, "unit"), Sample: rapid.String().Draw(t, "sample"),
			Compound: rapid.String().Draw(t, "compound"), Group: rapid.String().Draw(t, "group"), Raw: finite.Draw(t, "raw"), Extra: rapid.SampledFrom([]string{"", `{"a":1}`}).Draw(t, "extra")}
		if rapid.Bool().Draw(t, "position?") {
			r.Position = ptr(rapid.IntRange(-5, 500).Draw(t, "position"))
			r.Peak = ptr(rapid.IntRange(0, 99).Draw(t, "peak"))
		}
		if rapid.Bool().Draw(t, "at?") {
			r.At = ptr(store.Instant(rapid.Int64Range(0, 4_000_000_000_000_000).Draw(t, "at")))
		}
		if rapid.Bool().Draw(t, "u?") {
			r.U, r.Size = ptr(finite.Draw(t, "u")), ptr(finite.Draw(t, "size"))
		}
		return r
	})
}

func TestReadingLineByHandIsTheCanonicalJSON(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		r := readingGenerator().Draw(t, "reading")
		want, err := ledger.Canonical(r)
		if err != nil {
			t.Fatal(err)
		}
		if got := store.ReadingLine(r); !bytes.Equal(got, want) {
			t.Fatalf("line by hand\n%s\ncanonical\n%s", got, want)
		}
		var back store.Reading
		if err := json.Unmarshal(want, &back); err != nil {
			t.Fatal(err)
		}
		if !bytes.Equal(store.ReadingLine(back), want) {
			t.Fatalf("read back and written again:\n%s\n%s", store.ReadingLine(back), want)
		}
	})
}

func TestReadingBlocksCover64EachAndEveryField(t *testing.T) {
	rs := readings("S1", 130)
	blocks := store.ReadingBlocks(rs)
	if len(blocks) != 3 {
		t.Fatalf("%d blocks of 130 readings, want 3", len(blocks))
	}
	for _, i := range []int{0, 63, 64, 129} {
		changed := append([]store.Reading{}, rs...)
		changed[i].Raw = math.Nextafter(changed[i].Raw, 0)
		other := store.ReadingBlocks(changed)
		for b := range blocks {
			if same := other[b] == blocks[b]; same != (b != i/64) {
				t.Errorf("after changing reading %d block %d is the same: %v", i+1, b, same)
			}
		}
	}
	if store.ReadingBlocks(nil) != nil {
		t.Error("no readings have blocks")
	}
}

func TestPartsOfContentRoundTripAndShowEveryFlippedBit(t *testing.T) {
	for _, data := range [][]byte{{}, []byte("a"), bytes.Repeat([]byte("abc"), 500), {0x8f, 0x33, 0xaa, 0x01, 0x7c}} {
		packed, err := store.PackPart(data)
		if err != nil {
			t.Fatal(err)
		}
		back, err := store.UnpackPart(packed)
		if err != nil || !bytes.Equal(back, data) {
			t.Errorf("%d bytes came back as %d, %v", len(data), len(back), err)
		}
		for bit := range 8 * len(packed) {
			b := bytes.Clone(packed)
			b[bit/8] ^= 1 << (bit % 8)
			if _, err := store.UnpackPart(b); err == nil {
				t.Errorf("%d bytes: flipped bit %d does not show", len(data), bit)
			}
		}
		if _, err := store.UnpackPart(append(bytes.Clone(packed), 0)); err == nil {
			t.Error("a byte added at the end does not show")
		}
	}
}

func TestDecisionCodeNamesItsSubject(t *testing.T) {
	for _, ref := range []store.Ref{
		{Key: store.Key{Laboratory: lab, Kind: store.KindCalibration, Code: "C4T8ZRN1HQ"}, Version: 3},
		{Key: store.Key{Laboratory: lab, Kind: store.KindValue, Code: "a.b/d13C-VPDB/total"}, Version: 12},
	} {
		key, version, err := store.DecisionSubject(lab, store.DecisionCode(ref))
		if err != nil || key != ref.Key || version != ref.Version {
			t.Errorf("%s names %s.%d, %v, want %s", store.DecisionCode(ref), key, version, err, ref)
		}
	}
	for _, code := range []string{"", "value", "value/", "value/x", "value/x.", "value/x.0", "value/x.-1", "value/x.01", "value/.1", "value/x.y"} {
		if key, version, err := store.DecisionSubject(lab, code); err == nil {
			t.Errorf("%q names %s.%d", code, key, version)
		}
	}
}
