package demo

import (
	"deltamoor/api/registry"
	"deltamoor/store"
)

// The scales that the laboratory reports on. All its carbon stands on one
// realisation: VPDB-LSVEC, as the published values of the organic materials do.
const (
	scaleC = "d13C-VPDB-LSVEC"
	scaleN = "d15N-AIR"
	scaleH = "d2H-VSMOW-SLAP"
	scaleO = "d18O-VSMOW-SLAP"
)

// Laboratory is the code of the invented laboratory, and zone its clock.
const (
	Laboratory = "OVANE"
	labName    = "Isotope Room of the Island of Ostervane"
	zone       = "Atlantic/Azores"
)

// Instruments and methods.
const (
	burner     = "burner-1"
	cracker    = "cracker-2"
	mirrors    = "mirrors-3"
	valueCN    = "value-cn"
	bulkCN     = "bulk-cn"
	valueWater = "value-water"
	water      = "water-h"
	laser      = "water-o"
)

// people of the laboratory, by what they do in it.
type person struct {
	code, name string
	roles      []string
}

var (
	administrator = person{"dagny", "Dagny Quill", []string{registry.Administrator, registry.Manager}}
	manager       = person{"sunniva", "Sunniva Hask", []string{registry.Manager}}
	analyst       = person{"ilka", "Ilka Morrough", []string{registry.Analyst}}
	signatory     = person{"tobren", "Tobren Aske", []string{registry.Signatory}}
	auditor       = person{"perrin", "Perrin Vael", []string{registry.Auditor}}
)

func (p person) actor(laboratory string) registry.Actor {
	return registry.Actor{Person: p.code, Laboratory: laboratory, Roles: p.roles}
}

// A standard is one material of the laboratory's own, with roughly what it is.
type standard struct {
	code, name, substance, matrix, lot string
	kind                               string
	near                               map[string]float64 // ‰, about which the truth is drawn
	element                            map[string]float64 // mass fraction that gives the peak of a quantity
	units                              int
	content                            string
	contentUnit                        string
	storage                            string
}

// standards are the working standards: five solids that span carbon and
// nitrogen, so that one of them can be told from the rest, and a control between
// them; two waters and their control.
func standards() []standard {
	solid := func(code, name, substance, lot string, c, n, fractionC, fractionN float64) standard {
		return standard{code: code, name: name, substance: substance, matrix: "organic solid", lot: lot, kind: "working",
			near: map[string]float64{scaleC: c, scaleN: n}, element: map[string]float64{"d13C": fractionC, "d15N": fractionN},
			units: 4, content: "25", contentUnit: "g", storage: "closed jar over drying agent, dark, 15 to 25 °C"}
	}
	liquid := func(code, name, lot string, h float64) standard {
		return standard{code: code, name: name, substance: "water", matrix: "water", lot: lot, kind: "working",
			near: map[string]float64{scaleH: h}, element: map[string]float64{"d2H": 0.112, "d18O": 0.888},
			units: 6, content: "50", contentUnit: "mL", storage: "sealed bottle without headspace, 4 °C"}
	}
	list := []standard{
		solid("OV-SEDGE", "sedge leaf, milled", "leaf powder", "2024-1", -28.6, 2.1, 0.44, 0.034),
		solid("OV-LAMB", "lamb muscle, milled", "muscle powder", "2024-1", -25.3, 10.6, 0.47, 0.139),
		solid("OV-CURD", "ewe's curd protein", "casein", "2024-1", -21.9, 6.6, 0.51, 0.148),
		solid("OV-CRAB", "shore crab muscle, milled", "muscle powder", "2024-2", -16.4, 14.2, 0.46, 0.141),
		solid("OV-MAIZE", "maize protein", "gluten", "2024-1", -11.8, 4.4, 0.52, 0.121),
		solid("OV-KELP", "kelp, milled", "thallus powder", "2024-1", -18.9, 8.2, 0.35, 0.031),
		liquid("OV-SNOW", "snow of the high saddle", "2024-1", -176),
		liquid("OV-SHORE", "rain of the south shore", "2024-1", -7),
		liquid("OV-WELL", "well at the mill", "2024-1", -98),
	}
	for i := range list {
		if c := list[i].code; c == controlSolid || c == controlWater {
			list[i].kind = "control"
		}
	}
	return list
}

const (
	controlSolid = "OV-KELP"
	controlWater = "OV-WELL"
	// badMaterial is the anchor one of whose jars goes bad, badJar that jar.
	badMaterial = "OV-CURD"
	badJar      = "OV-CURD jar 2"
)

// solidAnchors and waterAnchors pin the lines of the routine methods.
func solidAnchors() []string {
	return []string{"OV-SEDGE", "OV-LAMB", "OV-CURD", "OV-CRAB", "OV-MAIZE"}
}

func waterAnchors() []string { return []string{"OV-SNOW", "OV-SHORE"} }

func jar(material string, number string) string { return material + " jar " + number }

// gases feed the instruments; they carry their hazards.
func gases() map[string]store.Material {
	return map[string]store.Material{
		"OV-GAS-CO2": {Name: "carbon dioxide, working gas", Kind: "gas", Substance: "carbon dioxide", Formula: "CO2", Hazards: []string{"H280"}, Storage: "cylinder, secured, ventilated; safety data sheet and local rules apply"},
		"OV-GAS-N2":  {Name: "nitrogen, working gas", Kind: "gas", Substance: "nitrogen", Formula: "N2", Hazards: []string{"H280"}, Storage: "cylinder, secured, ventilated; safety data sheet and local rules apply"},
		"OV-GAS-H2":  {Name: "hydrogen, working gas", Kind: "gas", Substance: "hydrogen", Formula: "H2", Hazards: []string{"H220", "H280"}, Storage: "cylinder outside, leak alarm; flammable: safety data sheet, local rules and trained staff decide"},
	}
}

// An international material as this laboratory keeps it.
type international struct {
	code    string
	element map[string]float64
}

// internationals are measured in the sessions that assign values. Mass
// fractions follow from the formulas.
func internationals() []international {
	return []international{
		{"IAEA-CH-7", map[string]float64{"d13C": 0.856}},
		{"IAEA-CH-6", map[string]float64{"d13C": 0.421}},
		{"USGS41", map[string]float64{"d13C": 0.408, "d15N": 0.095}},
		{"IAEA-600", map[string]float64{"d13C": 0.495, "d15N": 0.289}},
		{"IAEA-N-1", map[string]float64{"d15N": 0.212}},
		{"USGS32", map[string]float64{"d15N": 0.139}},
		{"VSMOW2", map[string]float64{"d2H": 0.112, "d18O": 0.888}},
		{"SLAP2", map[string]float64{"d2H": 0.112, "d18O": 0.888}},
		{"USGS46", map[string]float64{"d2H": 0.112, "d18O": 0.888}},
	}
}

// The clients. Both call a sample A1.
const (
	growers  = "Ring of Growers, Low Terraces"
	museum   = "Museum of the Strait"
	sameName = "A1"
)

// A wantedSample is a sample before it has a code.
type wantedSample struct {
	client, label, matrix string
	near                  map[string]float64
	element               map[string]float64
	portions              int
}

// treatedAs is the matrix by which a sample is prepared and measured, in the
// words of the standards that share its treatment.
func (s wantedSample) treatedAs() string {
	if s.near[scaleH] != 0 {
		return "water"
	}
	return "organic solid"
}

// samplesToCome are what the two clients send. Solids come with about the
// protein of a seed or of bone; waters are springs.
func samplesToCome() []wantedSample {
	leaf := map[string]float64{"d13C": 0.42, "d15N": 0.036}
	bone := map[string]float64{"d13C": 0.44, "d15N": 0.13}
	plain := map[string]float64{"d2H": 0.112}
	solid := func(client, label, matrix string, c, n float64, element map[string]float64, portions int) wantedSample {
		return wantedSample{client, label, matrix, map[string]float64{scaleC: c, scaleN: n}, element, portions}
	}
	spring := func(label string, h float64) wantedSample {
		return wantedSample{museum, label, "water", map[string]float64{scaleH: h}, plain, 3}
	}
	return []wantedSample{
		solid(growers, sameName, "bean leaf", -26.9, 3.1, leaf, 2),
		solid(growers, "A2", "bean leaf", -27.3, 4.4, leaf, 1),
		solid(growers, "A3", "bean leaf", -26.1, 5.0, leaf, 1),
		solid(growers, "B1", "barley grain", -25.4, 6.2, leaf, 2),
		solid(growers, "B2", "barley grain", -24.8, 7.9, leaf, 3),
		solid(growers, "B3", "barley grain", -25.9, 5.5, leaf, 1),
		solid(growers, "C1", "maize grain", -13.1, 5.7, leaf, 1),
		solid(growers, "C2", "maize grain", -12.9, 6.8, leaf, 2),
		solid(museum, sameName, "bone collagen", -19.7, 9.6, bone, 2),
		solid(museum, "grave 4 rib", "bone collagen", -20.3, 11.2, bone, 2),
		solid(museum, "grave 7 rib", "bone collagen", -17.4, 12.6, bone, 2),
		solid(museum, "grave 9 tibia", "bone collagen", -21.0, 8.8, bone, 2),
		spring("spring north", -121),
		spring("spring east", -84),
		spring("spring quay", -33),
		spring("cistern", -58),
	}
}

// again are the samples that run a second time in another session, as the
// method's plan asks for a few of each series.
var again = map[string]bool{"B1": true, "grave 4 rib": true}
