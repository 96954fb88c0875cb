package rest

import "deltamoor/store"

// An H3Rule says what the intensities in a method's files are, and when a factor is too old.
type H3Rule struct {
	RatioUnit       string  `json:"ratio_unit" enum:"ppm,one"`
	IntensityUnit   string  `json:"intensity_unit" enum:"nA,pA,V,mV"`
	Shape           string  `json:"shape" enum:"flat,gaussian,mean" doc:"gaussian: the file gives a peak's height H, and H/√2 is used; flat and mean are used as they are. Reference pulses are used as they are."`
	MaximumAgeHours float64 `json:"maximum_age_hours,omitempty" doc:"Between determination and session."`
	MaximumChange   float64 `json:"maximum_change,omitempty" doc:"From the determination before, in the factor's unit."`
	StepZ           float64 `json:"step_z,omitempty" doc:"Change over its standard uncertainty that is called a step; left out: 3."`
}

// A BlankRule says how a blank is known that is taken out before the fit.
type BlankRule struct {
	From     string   `json:"from" enum:"readings,stated" doc:"readings: means of the session's readings of the role blank."`
	Size     float64  `json:"size,omitempty" doc:"In the unit of the readings' sizes."`
	USize    float64  `json:"u_size,omitempty"`
	Raw      float64  `json:"raw,omitempty" doc:"Raw delta of the blank (‰)."`
	URaw     float64  `json:"u_raw,omitempty" doc:"‰"`
	Nu       *float64 `json:"nu,omitempty" doc:"Degrees of freedom; left out: known."`
	Evidence string   `json:"evidence,omitempty" maxLength:"2000"`
}

func (r BlankRule) body() store.BlankRule {
	return store.BlankRule{From: r.From, Size: r.Size, USize: r.USize, Raw: r.Raw, URaw: r.URaw, DegreesOfFreedom: r.Nu, Evidence: r.Evidence}
}

func showBlankRule(r store.BlankRule) BlankRule {
	return BlankRule{r.From, r.Size, r.USize, r.Raw, r.URaw, r.DegreesOfFreedom, r.Evidence}
}

// Repeats says how consecutive readings that belong together are taken.
type Repeats struct {
	Within      string `json:"within" enum:"analysis,preparation,position" doc:"What readings of one run have in common."`
	IgnoreFirst int    `json:"ignore_first,omitempty" minimum:"0" maximum:"1000" doc:"How many of each run are set aside."`
	Average     bool   `json:"average,omitempty" doc:"The rest enter the fit as their mean; else one by one."`
}

// A SharedInput is one number that many readings of a fit were corrected with.
type SharedInput struct {
	Name          string    `json:"name" example:"H3 factor"`
	Value         float64   `json:"value"`
	U             float64   `json:"u" doc:"Standard uncertainty."`
	Sensitivities []float64 `json:"sensitivities" doc:"∂parameters/∂value, for uncertainty."`
	Derivatives   []float64 `json:"derivatives" doc:"∂parameters/∂value, for shifts."`
}

func showSharedInput(k store.CalibrationCorrection) SharedInput {
	return SharedInput{k.Name, k.Value, k.StandardUncertainty, append([]float64{}, k.Sensitivities...), append([]float64{}, k.Derivatives...)}
}

// A MeanReading is several readings that entered a fit as their mean.
type MeanReading struct {
	Number   int      `json:"number" doc:"What the fit calls it: the first of its readings."`
	Readings []int    `json:"readings"`
	SD       *float64 `json:"sd" doc:"Standard deviation of the readings (‰), a diagnostic; null for one."`
}
