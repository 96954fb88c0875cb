package store

// Factor is the body of one determination of an instrument's H3 factor: the
// record is the instrument's, each determination a version of it that holds
// from when it was made.
type Factor struct {
	Instrument string `json:"instrument"`
	Quantity   string `json:"quantity"` // d2H
	// Origin: "pulses" for a factor computed here from its pulses, "applied
	// elsewhere" for one that a program before this registry used and wrote down.
	Origin       string  `json:"origin"`
	DeterminedAt Instant `json:"determined_at"`
	// K is the factor, in RatioUnit per IntensityUnit, and U its standard
	// uncertainty; 0 for one recorded without.
	K float64 `json:"k"`
	U float64 `json:"u"`
	// DegreesOfFreedom of U; nil when known.
	DegreesOfFreedom *float64 `json:"nu,omitempty"`
	RatioUnit        string   `json:"ratio_unit"`     // ppm, or one
	IntensityUnit    string   `json:"intensity_unit"` // nA pA V mV
	// Resistor (Ω) of the m/z 2 channel: current and voltage convert only with it.
	Resistor float64 `json:"resistor_ohm,omitempty"`
	// Shape says how the pulses' intensities were found: flat, gaussian (from
	// heights), or mean (∫I²dt/∫I dt).
	Shape  string        `json:"shape,omitempty"`
	Pulses []FactorPulse `json:"pulses,omitempty"`
	// Zero is the ratio at no intensity, ResidualSD and Residuals those of the
	// ratios about the line, in the order of the pulses.
	Zero       *float64  `json:"zero,omitempty"`
	ResidualSD *float64  `json:"residual_sd,omitempty"`
	Residuals  []float64 `json:"residuals,omitempty"`
	// Curvature is Student's t of a second-degree term on CurvatureDF degrees of
	// freedom (nil when known), and CurvatureP its two-sided probability where the
	// ratio is straight in the intensity; nil where the pulses cannot tell.
	Curvature   *float64 `json:"curvature,omitempty"`
	CurvatureDF *float64 `json:"curvature_nu,omitempty"`
	CurvatureP  *float64 `json:"curvature_p,omitempty"`
	// Lowest and Highest are the intensities that the pulses cover.
	Lowest   *float64 `json:"lowest,omitempty"`
	Highest  *float64 `json:"highest,omitempty"`
	Settings string   `json:"settings,omitempty"` // how the source was tuned
	Gas      string   `json:"gas,omitempty"`
	Evidence string   `json:"evidence,omitempty"`
	// Before is the determination before this one; nil for a first.
	Before *FactorBefore `json:"before,omitempty"`
}

// Form of the body.
func (Factor) Form() string { return "factor/1" }

// A FactorPulse is one pulse of hydrogen: its m/z 2 intensity, m/z 3 to m/z 2
// ratio, and the ratio's standard uncertainty where it was stated.
type FactorPulse struct {
	Intensity float64  `json:"intensity"`
	Ratio     float64  `json:"ratio"`
	U         *float64 `json:"u,omitempty"`
}

// FactorBefore compares a factor with the determination before it, in this one's units.
type FactorBefore struct {
	Version int     `json:"version"`
	K       float64 `json:"k"`
	U       float64 `json:"u"`
	// Z is (K − K before)/√(u² + u²before); nil where neither has an uncertainty.
	Z *float64 `json:"z,omitempty"`
}

// Relation is the body of one version of a relation that laboratories share:
// an affine conversion between two scales, a constant, or a rule in words.
type Relation struct {
	// Sort: conversion, constant, or in words (a definition, formula or rule that
	// no number is computed with).
	Sort       string `json:"sort"`
	Title      string `json:"title"`
	Expression string `json:"expression,omitempty"`
	// A conversion: To = Factor·From + Offset (‰), Covariance of (Factor, Offset).
	From       string         `json:"from,omitempty"`
	To         string         `json:"to,omitempty"`
	Factor     Decimal        `json:"factor,omitempty"`
	Offset     Decimal        `json:"offset,omitempty"`
	Covariance *[2][2]float64 `json:"covariance,omitempty"`
	// A constant: its value and standard uncertainty; nil where none is stated.
	Constant            Decimal  `json:"constant,omitempty"`
	StandardUncertainty *float64 `json:"u,omitempty"`
	// Lowest and Highest bound the deltas (‰, on From) that a conversion is stated for.
	Lowest  *float64 `json:"lowest,omitempty"`
	Highest *float64 `json:"highest,omitempty"`
	// Stated and StatedUncertainty are the constants as their source prints them.
	Stated            string `json:"stated,omitempty"`
	StatedUncertainty string `json:"stated_uncertainty,omitempty"`
	Domain            string `json:"domain,omitempty"`
	Evidence          string `json:"evidence,omitempty"`
	Provisional       bool   `json:"provisional,omitempty"`
	Note              string `json:"note,omitempty"`
}

// Form of the body.
func (Relation) Form() string { return "relation/1" }

// Repeats says how consecutive readings of one subject that belong together
// (the injections of a vial, the pulses of a portion, the cycles of a filling)
// are taken: the first ones set aside, the rest one by one or as their mean.
type Repeats struct {
	// Within names what they have in common: analysis, preparation or position.
	Within      string `json:"within"`
	IgnoreFirst int    `json:"ignore_first,omitempty"`
	Average     bool   `json:"average,omitempty"`
}

// BlankRule says how the blank is known, where a session declares the
// correction "blank" as made here and the model has no size term "blank".
type BlankRule struct {
	// From: "readings" takes the session's own readings of the role blank,
	// "stated" the numbers here.
	From string `json:"from"`
	// Size is in the unit of the readings' sizes, Raw is its raw delta (‰); each
	// with its standard uncertainty.
	Size             float64  `json:"size,omitempty"`
	USize            float64  `json:"u_size,omitempty"`
	Raw              float64  `json:"raw,omitempty"`
	URaw             float64  `json:"u_raw,omitempty"`
	DegreesOfFreedom *float64 `json:"nu,omitempty"`
	Evidence         string   `json:"evidence,omitempty"`
}

// H3Rule says what the intensities of a file are, and when a factor is too old.
type H3Rule struct {
	RatioUnit     string `json:"ratio_unit"`
	IntensityUnit string `json:"intensity_unit"`
	// Shape: flat or mean where a file gives ∫I²dt/∫I dt or a flat top's height,
	// gaussian where it gives the height of a peak.
	Shape           string  `json:"shape"`
	MaximumAgeHours float64 `json:"maximum_age_hours,omitempty"`
	MaximumChange   float64 `json:"maximum_change,omitempty"` // from the determination before, in the factor's unit
	StepZ           float64 `json:"step_z,omitempty"`         // 0 means 3
}

// CalibrationCorrection is one input of the corrections made before a fit.
type CalibrationCorrection struct {
	Name                string  `json:"name"`
	Value               float64 `json:"value"`
	StandardUncertainty float64 `json:"u"`
	// Sensitivities are ∂θ/∂x for uncertainty, Derivatives the exact dθ/dx at
	// fixed variances, one for each parameter.
	Sensitivities []float64 `json:"sensitivities"`
	Derivatives   []float64 `json:"derivatives"`
}

// A MeanReading is several readings that entered a fit as their mean.
type MeanReading struct {
	// Number is what the fit calls it: that of the first reading that counts.
	Number   int   `json:"number"`
	Readings []int `json:"readings"`
	// SD is their standard deviation (‰), a diagnostic; nil for one.
	SD *float64 `json:"sd,omitempty"`
}
