package registry

import (
	"slices"
	"testing"

	"deltamoor/calib"
	"deltamoor/store"
)

// A value that rests on readings of the session it is used in would judge
// itself; values on two versions of a scale's definition may not mean the same.
func TestValuesThatJudgeThemselvesAndMixedDefinitionsAreFlagged(t *testing.T) {
	at := store.Instant(0)
	scale := func(version int) []store.Input {
		return []store.Input{{Part: "scale", Ref: store.Ref{Key: store.Key{Laboratory: store.Common, Kind: store.KindScale, Code: "d13C-VPDB-LSVEC"}, Version: version}}}
	}
	value := func(material, session string, version int) store.Version[store.Value] {
		var v store.Version[store.Value]
		v.Inputs = scale(version)
		v.Value = store.Value{Material: material, Value: "-28", StandardUncertainty: 0.1, Basis: "assignment",
			Sources: []store.Source{{ID: "reading:" + session + "/4", Kind: "reading", U: 0.1, Sensitivity: 1}}}
		return v
	}
	flags := func(anchors []store.Version[store.Value], controls map[string]store.Version[store.Value]) []string {
		var a assembly
		a.session.Code, a.session.Value.StartedAt = "S123456789X", &at
		a.spec.Scale = "d13C-VPDB-LSVEC"
		a.anchors, a.controls = anchors, controls
		if err := a.observeValues(t.Context(), nil, "TST", store.Calibration{}); err != nil {
			t.Fatal(err)
		}
		var codes []string
		for _, f := range a.observed {
			if f.Severity != calib.Serious && f.Severity != calib.Warning || f.Message == "" || f.Advice == "" {
				t.Errorf("flag %+v", f)
			}
			codes = append(codes, f.Code+" "+f.Subject)
		}
		return codes
	}
	other, own := "S987654321X", "S123456789X"
	if got := flags([]store.Version[store.Value]{value("A", other, 1), value("B", other, 1)}, nil); len(got) != 0 {
		t.Errorf("values of another session: %v", got)
	}
	if got := flags([]store.Version[store.Value]{value("A", own, 1), value("B", other, 1)}, nil); !slices.Equal(got, []string{"circular_assignment A"}) {
		t.Errorf("an anchor of this session: %v", got)
	}
	if got := flags([]store.Version[store.Value]{value("A", other, 1)}, map[string]store.Version[store.Value]{"K": value("K", own, 1)}); !slices.Equal(got, []string{"circular_assignment K"}) {
		t.Errorf("a control of this session: %v", got)
	}
	if got := flags([]store.Version[store.Value]{value("A", other, 1), value("B", other, 2)}, nil); !slices.Equal(got, []string{"definitions_differ "}) {
		t.Errorf("two versions of the definition: %v", got)
	}
}
