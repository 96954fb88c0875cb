package calib

import "deltamoor/calib/uncertain"

// A Result is one fit with everything that follows from it. What cannot be
// computed is a nil pointer or slice, never zero.
type Result struct {
	Engine string

	// Parameters θ in fixed order: intercept, slope, drift.*, size*, memory, level.*.
	Parameters []Parameter
	// Covariance is the p × p covariance of the parameters from all sources.
	Covariance [][]float64
	// NoiseCovariance N = K V_r Kᵀ is the part from readings alone.
	NoiseCovariance [][]float64
	// AnchorSensitivities is ∂θ/∂y, p × anchors, for uncertainty (Gauss–Newton convention).
	AnchorSensitivities [][]float64
	// AnchorDerivatives is the exact dθ/dy of the estimate at fixed variances, p × anchors, for predicting shifts.
	AnchorDerivatives [][]float64

	// CorrectionSensitivities is ∂θ/∂x = K·∂r/∂x for uncertainty, p × corrections,
	// and CorrectionDerivatives the exact dθ/dx at fixed variances; nil without
	// corrections.
	CorrectionSensitivities, CorrectionDerivatives [][]float64

	// Variances are the estimated or declared variance groups of this fit, and
	// VarianceCovariance their covariance.
	Variances          []Variance
	VarianceCovariance [][]float64

	ReferenceTime, ReferenceSize *float64

	ChiSquare        *float64
	DegreesOfFreedom int
	PValue           *float64
	BirgeRatio       *float64
	ResidualSD       *float64
	LackOfFit        *LackOfFit
	AICc             *float64
	Line             *Line
	// Blank is set with size blank.
	Blank *BlankResult
	// Needs tests each term of the model, and each that the session's data would allow.
	Needs []TermNeed

	Readings []ReadingResult
	Anchors  []AnchorResult
	// Subjects holds one entry for each sample and each control, in the order of first reading.
	Subjects []SubjectResult
	Flags    []Flag

	ConditionNumber float64
	Iterations      int

	calibrated *calibrated
}

// A Parameter is one estimated coefficient with its standard uncertainty.
type Parameter struct {
	Name                string
	Value               float64
	StandardUncertainty float64
}

// A Variance is an estimated variance with its degrees of freedom (+Inf when known).
type Variance struct {
	Name             string
	Value            float64
	DegreesOfFreedom float64
}

// LackOfFit is the F test of the line against free levels.
type LackOfFit struct {
	F, NumeratorDF, DenominatorDF, PValue float64
}

// A Line is the fit as it is usually quoted: true = Slope·raw + Intercept at the reference time and size.
type Line struct {
	Slope, Intercept   float64
	USlope, UIntercept float64
	Covariance         float64
}

// A BlankResult is the constant blank that size blank found:
//
//	r = (1 − b/s)·f + (b/s)·r_b
//	b = −κ1/β∞,  r_b = α∞ + κ0/b,  β∞ = β − κ1/s_ref,  α∞ = α − κ0/s_ref
type BlankResult struct {
	// Size is b, in the unit of the readings' sizes, RawDelta r_b in ‰.
	Size, RawDelta   float64
	USize, URawDelta float64
	Covariance       float64
}

// A TermNeed tests whether the readings ask for a term: the fits with and
// without it, both with the larger one's variances.
type TermNeed struct {
	// Term is "drift", "drift.quadratic", "size", "memory", or "drift.slope",
	// a slope that changes with time.
	Term string
	// Model says that the term is in the model of this fit.
	Model bool
	// DeltaChiSquare on DeltaParameters is how much the term explains.
	DeltaChiSquare  float64
	DeltaParameters int
	// F is (Δχ²/Δp)/(χ²/ν of the larger fit), for estimated variances; nil for known ones.
	F *float64
	// PValue is that of F, or of Δχ² for known variances.
	PValue float64
	// AICc of the two; nil where it cannot be formed.
	AICcWith, AICcWithout *float64
}

// A ReadingResult is the diagnosis of one reading of the session, by its index.
// Only readings that were fitted have residual statistics.
type ReadingResult struct {
	Index                int
	Predicted            *float64
	Residual             *float64
	StandardizedResidual *float64
	StudentizedResidual  *float64
	Leverage             *float64
	CooksDistance        *float64
}

// An AnchorResult is an anchor's value before and after the adjustment, and
// what the session says of it without its help.
type AnchorResult struct {
	Material        string
	Value, Adjusted float64
	// LeftOut is nil where what is left cannot be fitted, and in fits with more than
	// MaxLeftOutAnchors anchors.
	LeftOut *LeftOut
}

// LeftOut is the prediction of an anchor from a fit without its readings and value.
type LeftOut struct {
	Predicted           float64
	StandardUncertainty float64 // of predicted − assigned
	Z                   float64
}

// A SubjectResult is a sample's or control's delta on the scale.
type SubjectResult struct {
	Subject string
	Role    Role
	// N counts preparations, Readings the readings' indices.
	N        int
	Readings []int

	Value               float64
	StandardUncertainty float64
	Expanded            uncertain.Expanded

	// Gradient is ∂value/∂θ (p); Coefficients are ∂value/∂raw of the subject's own readings.
	// With memory, OtherReadings are the readings before them that are not the
	// subject's own, with OtherCoefficients.
	Gradient          []float64
	Coefficients      []float64
	OtherReadings     []int
	OtherCoefficients []float64
	// BetweenSession is the standard uncertainty added for the session, 0 if none.
	BetweenSession float64
	// Homogeneity is the standard uncertainty added for the sample's own heterogeneity, 0 if none.
	Homogeneity float64
	// Sources is the budget for people: anchors' sources, the fit in one line, own readings, the rest. Shares sum to 1.
	Sources []Contribution
	// Flags are the codes of the flags that name this subject.
	Flags []string

	// scatter is the chi-square of its readings about the value; NaN for none.
	scatter float64
}

// A Contribution is one line of an uncertainty budget.
type Contribution struct {
	ID            string
	Kind          uncertain.Kind
	Group         string
	Sensitivity   float64
	U             float64
	VarianceShare float64
}

// A Severity ranks flags.
type Severity string

// The severities.
const (
	Note    Severity = "note"
	Warning Severity = "warning"
	Serious Severity = "serious"
)

// A Flag is a judgement that travels with the result: which rule, how bad,
// which readings, one plain sentence and what to do about it.
type Flag struct {
	Code     string   `json:"code"`
	Severity Severity `json:"severity"`
	Readings []int    `json:"readings,omitempty"`
	Subject  string   `json:"subject,omitempty"`
	Message  string   `json:"message"`
	Advice   string   `json:"advice,omitempty"`
}
