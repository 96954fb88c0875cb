package demo

import (
	"deltamoor/calib"
	"deltamoor/store"
)

// The invented instruments' files. The combustion analyser writes the island's
// old spelling: semicolons, decimal commas, Latin-1. The conversion furnace
// writes UTF-8 with commas, and its second program a workbook.
func combustionMapping() *store.Mapping {
	return &store.Mapping{Format: "csv", Encoding: "iso-8859-1", Delimiter: ";", Decimal: ",", Zone: zone, TimeLayout: "DD.MM.YYYY hh:mm:ss",
		Columns: store.Columns{Position: "Siège", Name: "Étiquette", Role: "Tâche", Unit: "Bocal", Preparation: "Creuset", Time: "Départ", Amount: "Pesée (µg)", AmountUnit: "ug", Warning: "Remarque"},
		Quantities: []store.QuantityColumns{
			{Quantity: "d15N", Raw: "N2 brut", Size: "N2 aire (nAs)", Optional: true},
			{Quantity: "d13C", Raw: "CO2 brut", Size: "CO2 aire (nAs)", Optional: true},
		},
		RoleWords: map[string]calib.Role{"rodage": calib.Conditioning, "vide": calib.Blank}}
}

func furnaceMapping() *store.Mapping {
	return &store.Mapping{Format: "csv", Encoding: "utf-8", Delimiter: ",", Decimal: ".", Zone: "UTC",
		Columns:    store.Columns{Position: "slot", Name: "crimp holds", Role: "warm-up", Unit: "from bottle", Preparation: "tube", Time: "dropped (UTC)", Amount: "filled/µg", AmountUnit: "ug", Warning: "seen"},
		Quantities: []store.QuantityColumns{{Quantity: "d2H", Raw: "H2 against gas/‰", Size: "H2 charge/nC", Intensity: "H2 top/nA", GasIntensity: "gas plateau/nA", GasRatio: "gas 3:2/ppm"}},
		RoleWords:  map[string]calib.Role{"yes": calib.Conditioning}}
}

func workbookMapping() *store.Mapping {
	m := furnaceMapping()
	m.Format, m.Encoding, m.Delimiter, m.Sheet = "xlsx", "", "", "drops"
	return m
}

func roles(role calib.Role, materials ...string) []store.MaterialRole {
	var list []store.MaterialRole
	for _, m := range materials {
		list = append(list, store.MaterialRole{Material: m, Role: role})
	}
	return list
}

// between is the session's own effect, as the laboratory knows it from its
// control charts. The figures are invented and are those of the simulation.
func between(u float64) *store.Component {
	nu := 60.0
	return &store.Component{StandardUncertainty: u, DegreesOfFreedom: &nu, Evidence: "controls of the laboratory's sessions before this registry, 61 sessions"}
}

const (
	betweenC = 0.03 // ‰
	betweenN = 0.05
	betweenH = 0.5
	betweenO = 0.03
)

// capsules are what a tin capsule brings: little nitrogen, in the unit of peak
// sizes, and its raw delta.
var capsules = blank{size: 0.3, raw: 4}

// laserMapping reads the laser's file: one row for each injection, of so many
// nL: each weighs 1 µg.
func laserMapping() *store.Mapping {
	return &store.Mapping{Format: "csv", Encoding: "utf-8", Delimiter: ",", Decimal: ".", Zone: "UTC",
		Columns:    store.Columns{Position: "injection", Name: "bottle label", Role: "rinse", Unit: "from bottle", Preparation: "vial", Time: "sipped (UTC)", Amount: "sip/nL", AmountUnit: "ug", Warning: "seen"},
		Quantities: []store.QuantityColumns{{Quantity: "d18O", Raw: "d18O, maker's line", Size: "vapour/1000 ppm"}},
		RoleWords:  map[string]calib.Role{"yes": calib.Conditioning}}
}

// methods are the laboratory's five procedures. Limits follow common practice
// for the techniques; they are the laboratory's to change.
func methods() map[string]store.Method {
	carbon := store.MethodQuantity{Quantity: "d13C", Scale: scaleC, Model: calib.Model{Drift: calib.DriftLinear, Weights: calib.WeightsReplicate},
		Limits:         store.Limits{Probability: 0.95, SlopeFrom: 0.97, SlopeTo: 1.03, ControlDeviation: 0.2, ReplicateSD: 0.1, MinimumAnchors: 3, ControlRequired: true},
		BetweenSession: between(betweenC)}
	nitrogen := store.MethodQuantity{Quantity: "d15N", Scale: scaleN, Model: calib.Model{Drift: calib.DriftLinear, Size: calib.SizeLinear, Weights: calib.WeightsReplicate},
		Limits:         store.Limits{Probability: 0.95, SlopeFrom: 0.97, SlopeTo: 1.03, ControlDeviation: 0.3, ReplicateSD: 0.2, MinimumAnchors: 2, ControlRequired: true},
		Blank:          &store.BlankRule{From: "stated", Size: capsules.size, USize: 0.03, Raw: capsules.raw, URaw: 0.8, Evidence: "41 empty capsules of 2024, none since"},
		BetweenSession: between(betweenN)}
	hydrogen := store.MethodQuantity{Quantity: "d2H", Scale: scaleH, Model: calib.Model{Drift: calib.DriftLinear, Memory: calib.MemoryCarryover, Weights: calib.WeightsReplicate},
		Limits: store.Limits{Probability: 0.95, SlopeFrom: 0.85, SlopeTo: 1.15, ControlDeviation: 3, ReplicateSD: 3, MinimumAnchors: 2, ControlRequired: true},
		// The furnace's file gives the height of a peak; flat pulses give the factor each morning.
		H3:             &store.H3Rule{RatioUnit: "ppm", IntensityUnit: "nA", Shape: "gaussian", MaximumAgeHours: 24, MaximumChange: 0.3},
		BetweenSession: between(betweenH)}
	combustion := []store.Correction{
		{Name: "o17", Quantity: "d13C", State: "earlier", By: "burner bench program 3.2", Relations: []string{"lambda17", "R17-R13-VPDB"}},
		{Name: "background", State: "earlier", By: "burner bench program 3.2"},
		{Name: "blank", Quantity: "d15N", State: "here"},
		{Name: "blank", Quantity: "d13C", State: "not applicable"},
		{Name: "dilution", State: "not applicable"},
		{Name: "drift", State: "here"},
		{Name: "size", Quantity: "d15N", State: "here"},
		{Name: "size", Quantity: "d13C", State: "not applicable"},
	}
	// Six injections of a vial are one portion: two rinse the cavity, four count as their mean.
	oxygen := store.MethodQuantity{Quantity: "d18O", Scale: scaleO, Model: calib.Model{Drift: calib.DriftLinear, Weights: calib.WeightsReplicate},
		Limits:         store.Limits{Probability: 0.95, SlopeFrom: 0.95, SlopeTo: 1.05, ControlDeviation: 0.2, ReplicateSD: 0.1, MinimumAnchors: 2, ControlRequired: true},
		Repeats:        &store.Repeats{Within: "preparation", IgnoreFirst: 2, Average: true},
		BetweenSession: between(betweenO)}
	conversion := []store.Correction{
		{Name: "h3", State: "here"},
		{Name: "background", State: "earlier", By: "furnace bench program 5.0"},
		{Name: "blank", State: "not applicable"},
		{Name: "drift", State: "here"},
		{Name: "memory", State: "here"},
	}
	approval := store.Approval{SecondPerson: true}
	rule := store.FinalRule{SessionsRequired: 1, Rule: "all accepted sessions"}
	with := func(q store.MethodQuantity, lists ...[]store.MaterialRole) store.MethodQuantity {
		for _, l := range lists {
			q.Roles = append(q.Roles, l...)
		}
		return q
	}
	// The published values of USGS41 and IAEA-600 are wide for nitrogen, so they
	// check the line of a value session less closely than the own control does.
	wide := nitrogen
	wide.Limits.ControlDeviation = 0.6
	return map[string]store.Method{
		valueCN: {Title: "Carbon and nitrogen of working standards against international materials", Procedure: "OV-P-11, issue 2",
			Quantities: []store.MethodQuantity{
				with(carbon, roles(calib.Anchor, "IAEA-CH-7", "IAEA-CH-6", "USGS41"), roles(calib.Control, "IAEA-600")),
				with(wide, roles(calib.Anchor, "IAEA-N-1", "USGS32"), roles(calib.Control, "USGS41", "IAEA-600")),
			},
			Corrections: combustion, Mapping: combustionMapping(), Approval: approval, Final: rule},
		bulkCN: {Title: "Carbon and nitrogen of organic solids by combustion", Procedure: "OV-P-12, issue 4",
			Quantities: []store.MethodQuantity{
				with(carbon, roles(calib.Anchor, solidAnchors()...), roles(calib.Control, controlSolid)),
				with(nitrogen, roles(calib.Anchor, solidAnchors()...), roles(calib.Control, controlSolid)),
			},
			Corrections: combustion, Mapping: combustionMapping(), Approval: approval, Final: rule},
		valueWater: {Title: "Hydrogen of working waters against international waters", Procedure: "OV-P-21, issue 1",
			Quantities:  []store.MethodQuantity{with(hydrogen, roles(calib.Anchor, "VSMOW2", "SLAP2"), roles(calib.Control, "USGS46"))},
			Corrections: conversion, Mapping: furnaceMapping(), Approval: approval, Final: rule},
		laser: {Title: "Oxygen of waters by laser absorption", Procedure: "OV-P-31, issue 1",
			Quantities: []store.MethodQuantity{with(oxygen, roles(calib.Anchor, "VSMOW2", "SLAP2"), roles(calib.Control, "USGS46"))},
			Corrections: []store.Correction{{Name: "drift", State: "here"}, {Name: "memory", State: "here", By: "the first two injections of each vial are set aside"},
				{Name: "size", State: "not applicable"}},
			Mapping: laserMapping(), Approval: approval, Final: rule},
		water: {Title: "Hydrogen of waters by high-temperature conversion", Procedure: "OV-P-22, issue 3",
			Quantities:  []store.MethodQuantity{with(hydrogen, roles(calib.Anchor, waterAnchors()...), roles(calib.Control, controlWater))},
			Corrections: conversion, Mapping: workbookMapping(), Approval: approval, Final: rule},
	}
}

// anchorsOf lists the anchors of a method by quantity.
func anchorsOf(m store.Method) map[string]map[string]bool {
	out := map[string]map[string]bool{}
	for _, q := range m.Quantities {
		out[q.Quantity] = map[string]bool{}
		for _, r := range q.Roles {
			if r.Role == calib.Anchor {
				out[q.Quantity][r.Material] = true
			}
		}
	}
	return out
}
