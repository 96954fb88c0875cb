package store_test

import (
	"bytes"
	"encoding/json"
	"testing"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// assignmentDraft is a plan with every kind of field filled.
func assignmentDraft(material store.Ref) store.Draft {
	return store.Draft{Kind: store.KindAssignment, Code: "A1", Inputs: []store.Input{{Part: "material", Ref: material}}, Value: store.Assignment{
		Title: "value of glycin", Material: "GLY", MaterialLaboratory: lab, Predecessor: "GLY-0", Methods: []string{"EA-C"}, Instruments: []string{"EA-1"},
		Sessions: 6, Days: 3, Replicates: 4, Units: []string{"B1"}, Note: "drawn over the filling order",
		Quantities: []store.AssignmentQuantity{{Scale: "d13C-VPDB", Measurand: "total", Anchors: []string{"USGS40"}, Offered: []string{"USGS41"},
			Estimator: "paule_mandel", Weights: "private", Level: 0.05, Probability: 0.95,
			LongTerm:    &store.LongTerm{Component: store.Component{StandardUncertainty: 0.03, DegreesOfFreedom: ptr(20.0)}, Method: "EA-C", Version: 2},
			Planning:    store.PlanningValues{Value: -33.1, Repeatability: 0.05, BetweenSession: 0.03, BetweenUnits: 0.01, AnchorReplicates: 3},
			Homogeneity: store.StudyPlan{Units: 10, Measurements: 2}, Stability: store.StudyPlan{ShelfLifeDays: 1825, Days: []float64{0, 90, 180}},
			Acceptance: store.AssignmentLimits{Expanded: 0.1, Agreement: 0.05, SessionEffect: 3}}}}}
}

// A value without a campaign has the bytes it had before campaigns existed, and
// one with a campaign comes back as it was written.
func TestValueCarriesItsCampaignAndAddsNothingWithoutOne(t *testing.T) {
	plain, err := ledger.Canonical(store.Value{Material: "GLY", Scale: "d13C-VPDB", Measurand: "total", Value: "-33.100", Basis: "certificate"})
	if err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{"campaign", "u_bb", "u_lts", "back_loaded"} {
		if bytes.Contains(plain, []byte(`"`+name+`"`)) {
			t.Errorf("a value without a campaign has %s: %s", name, plain)
		}
	}
	full := store.Value{Material: "GLY", UBetweenUnits: &store.ValueComponent{StandardUncertainty: 0.01, DegreesOfFreedom: ptr(9.0), Group: "homogeneity:GLY/A1"},
		ULongTerm: &store.ValueComponent{StandardUncertainty: 0.02}, Campaign: &store.CampaignResult{UCharacterisation: 0.03, Sessions: []store.CampaignSession{{Session: "S1", Weight: 1}}}}
	written, err := ledger.Canonical(full)
	if err != nil {
		t.Fatal(err)
	}
	var back store.Value
	if err := json.Unmarshal(written, &back); err != nil {
		t.Fatal(err)
	}
	if again, err := ledger.Canonical(back); err != nil || !bytes.Equal(again, written) {
		t.Errorf("came back as %s, was %s (%v)", again, written, err)
	}
}
