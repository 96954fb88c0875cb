package store

import "deltamoor/calib"

// Calibration is the body of one fitted version: everything a result rests on
// beside the readings and the inputs it names.
type Calibration struct {
	Engine            string      `json:"engine"`
	Session           string      `json:"session"`
	Instrument        string      `json:"instrument"`
	StartedAt         *Instant    `json:"started_at,omitempty"`
	Quantity          string      `json:"quantity"`
	Scale             string      `json:"scale"`
	Measurand         string      `json:"measurand"`
	Model             calib.Model `json:"model"`
	Limits            Limits      `json:"limits"`
	BetweenSession    *Component  `json:"between_session,omitempty"`
	SampleHomogeneity *Component  `json:"sample_homogeneity,omitempty"`
	// Excluded lists the numbers of readings left out, by the exclusions of that moment.
	Excluded []int `json:"excluded,omitempty"`

	Anchors []CalibrationAnchor `json:"anchors"`
	// What was done to the readings before the fit.
	Corrections []CalibrationCorrection `json:"corrections,omitempty"`
	SetAside    []int                   `json:"set_aside,omitempty"` // by the method's rule on repeats
	Means       []MeanReading           `json:"means,omitempty"`

	Parameters          []Parameter `json:"parameters"`
	Covariance          [][]float64 `json:"covariance"`
	NoiseCovariance     [][]float64 `json:"noise_covariance"`
	AnchorSensitivities [][]float64 `json:"anchor_sensitivities"`
	AnchorDerivatives   [][]float64 `json:"anchor_derivatives"`
	Variances           []Variance  `json:"variances,omitempty"`
	VarianceCovariance  [][]float64 `json:"variance_covariance,omitempty"`
	ReferenceTime       *float64    `json:"reference_time,omitempty"`
	ReferenceSize       *float64    `json:"reference_size,omitempty"`
	ChiSquare           *float64    `json:"chi_square,omitempty"`
	DegreesOfFreedom    int         `json:"degrees_of_freedom"`
	PValue              *float64    `json:"p_value,omitempty"`
	BirgeRatio          *float64    `json:"birge_ratio,omitempty"`
	ResidualSD          *float64    `json:"residual_sd,omitempty"`
	LackOfFit           *LackOfFit  `json:"lack_of_fit,omitempty"`
	AICc                *float64    `json:"aicc,omitempty"`
	Line                *Line       `json:"line,omitempty"`
	ConditionNumber     float64     `json:"condition_number"`

	Readings []ReadingDiagnosis `json:"readings"`
	Results  []Result           `json:"results"`
	// Needs test each term of the model, and each that the readings would allow;
	// absent in versions recorded before they were kept.
	Needs []Need       `json:"needs,omitempty"`
	Flags []calib.Flag `json:"flags,omitempty"`
	// History is what the instrument's lines were when the fit was made; nil for too few.
	History *LineHistory `json:"history,omitempty"`
	// Observed are those of Flags that rest on what was known around the fit and
	// not on the inputs it names; a recomputation takes them over.
	Observed []calib.Flag `json:"observed,omitempty"`
}

// A LineHistory is what an instrument's approved lines were before a session,
// by the same method on the same scale.
type LineHistory struct {
	From         *Instant             `json:"from,omitempty"`
	To           *Instant             `json:"to,omitempty"`
	Coefficients []HistoryCoefficient `json:"coefficients"`
}

// A HistoryCoefficient is the mean and the standard deviation of one
// coefficient over N lines.
type HistoryCoefficient struct {
	Parameter string  `json:"parameter"` // slope intercept drift.linear
	N         int     `json:"n"`
	Centre    float64 `json:"centre"`
	Spread    float64 `json:"spread"`
}

// A Need is a test of whether the readings ask for a term of the model.
type Need struct {
	Term            string   `json:"term"` // drift drift.quadratic drift.slope size memory
	Model           bool     `json:"in_model,omitempty"`
	DeltaChiSquare  float64  `json:"delta_chi_square"`
	DeltaParameters int      `json:"delta_parameters"`
	F               *float64 `json:"f,omitempty"` // nil where the variance is known
	PValue          float64  `json:"p_value"`
	AICcWith        *float64 `json:"aicc_with,omitempty"`
	AICcWithout     *float64 `json:"aicc_without,omitempty"`
}

// Form of the body.
func (Calibration) Form() string { return "calibration/1" }

// CalibrationAnchor is an anchor as the fit used it; anchors stand in the order
// of the inputs of part "anchor", which name their values' versions.
type CalibrationAnchor struct {
	Material            string   `json:"material"`
	Value               float64  `json:"value"`
	StandardUncertainty float64  `json:"u"`
	Adjusted            float64  `json:"adjusted"`
	LeftOut             *LeftOut `json:"left_out,omitempty"`
}

// LeftOut is the prediction of an anchor by a fit without it.
type LeftOut struct {
	Predicted           float64 `json:"predicted"`
	StandardUncertainty float64 `json:"u"`
	Z                   float64 `json:"z"`
}

// Parameter is one coefficient of a fit.
type Parameter struct {
	Name                string  `json:"name"`
	Value               float64 `json:"value"`
	StandardUncertainty float64 `json:"u"`
}

// Variance is one variance of a fit; DegreesOfFreedom is nil when known.
type Variance struct {
	Name             string   `json:"name"`
	Value            float64  `json:"value"`
	DegreesOfFreedom *float64 `json:"nu,omitempty"`
}

// LackOfFit is an F test.
type LackOfFit struct {
	F             float64 `json:"f"`
	NumeratorDF   float64 `json:"nu1"`
	DenominatorDF float64 `json:"nu2"`
	PValue        float64 `json:"p_value"`
}

// Line is the fit as usually quoted: true = slope·raw + intercept.
type Line struct {
	Slope      float64 `json:"slope"`
	Intercept  float64 `json:"intercept"`
	USlope     float64 `json:"u_slope"`
	UIntercept float64 `json:"u_intercept"`
	Covariance float64 `json:"covariance"`
}

// ReadingDiagnosis is what a fit says of one reading, by its number in the session.
type ReadingDiagnosis struct {
	Number int `json:"number"`
	// Corrected is the raw delta (‰) as it entered the fit, where it is not the reading's own.
	Corrected    *float64 `json:"corrected,omitempty"`
	Predicted    *float64 `json:"predicted,omitempty"`
	Residual     *float64 `json:"residual,omitempty"`
	Standardized *float64 `json:"standardized,omitempty"`
	Studentized  *float64 `json:"studentized,omitempty"`
	Leverage     *float64 `json:"leverage,omitempty"`
	CooksD       *float64 `json:"cooks_distance,omitempty"`
}

// Result is one line of a calibration: the delta of a sample or control in one session.
type Result struct {
	Subject             string         `json:"subject"`
	Role                calib.Role     `json:"role"` // sample or control
	N                   int            `json:"n"`
	Value               float64        `json:"value"`
	StandardUncertainty float64        `json:"u"`
	K                   float64        `json:"k"`
	Expanded            float64        `json:"U"`
	Probability         float64        `json:"p"`
	EffectiveDF         *float64       `json:"nu_eff,omitempty"`
	Gradient            []float64      `json:"gradient"`
	Readings            []int          `json:"readings"`
	Coefficients        []float64      `json:"coefficients"`
	BetweenSession      float64        `json:"between_session,omitempty"`
	Sources             []Contribution `json:"sources"`
	Flags               []string       `json:"flags,omitempty"`
}

// Contribution is one line of an uncertainty budget.
type Contribution struct {
	ID            string  `json:"id"`
	Kind          string  `json:"kind"`
	Group         string  `json:"group,omitempty"`
	Sensitivity   float64 `json:"sensitivity"`
	U             float64 `json:"u"`
	VarianceShare float64 `json:"variance_share"`
}

// Final is the body of the final value of one sample and quantity.
type Final struct {
	Sample    string `json:"sample"`
	Quantity  string `json:"quantity"`
	Scale     string `json:"scale"`
	Measurand string `json:"measurand"`
	Rule      string `json:"rule"`
	// Members are the results it is made of; Input indexes the calibration version in the inputs.
	Members             []FinalMember `json:"members"`
	Value               float64       `json:"value"`
	StandardUncertainty float64       `json:"u"`
	K                   float64       `json:"k"`
	Expanded            float64       `json:"U"`
	Probability         float64       `json:"p"`
	EffectiveDF         *float64      `json:"nu_eff,omitempty"`
	Flags               []string      `json:"flags,omitempty"`
}

// FinalMember is one session's result inside a final value.
type FinalMember struct {
	Input  int     `json:"input"`
	Line   int     `json:"line"` // index in the calibration's results
	Weight float64 `json:"weight"`
}

// Form of the body.
func (Final) Form() string { return "final/1" }

// Report is the body of an issued report. Each line is bound by its code and
// the SHA-256 of its canonical bytes (ReportLine), so that one value can be
// proved without showing its neighbours; the line's final value is the input of
// the same index.
type Report struct {
	Client string       `json:"client"`
	Title  string       `json:"title"`
	Amends string       `json:"amends,omitempty"`
	Lines  []ReportHash `json:"lines"`
	Note   string       `json:"note,omitempty"`
	// Conformity holds the decision rules that a statement of conformity was asked
	// for with; empty where none was.
	Conformity []ConformityRule `json:"conformity,omitempty"`
}

// A ConformityRule says, before the statement, how conformity is decided
// (ISO/IEC 17025:2017, 7.8.6; JCGM 106:2012, 8).
type ConformityRule struct {
	Scale     string `json:"scale"`
	Measurand string `json:"measurand"`
	// Lower and Upper are the tolerance limits (‰); nil is open.
	Lower *float64 `json:"lower,omitempty"`
	Upper *float64 `json:"upper,omitempty"`
	// Guard is the guard band in expanded uncertainties U of each line; 0 is simple acceptance.
	Guard float64 `json:"guard"`
	// Source says where the limits come from and who agreed on the rule.
	Source string `json:"source"`
}

// ReportHash binds one line of a report.
type ReportHash struct {
	Code string `json:"code"`
	Hash Hash   `json:"hash"`
}

// Form of the body.
func (Report) Form() string { return "report/1" }

// ReportLine is the canonical content of one reported delta: what its hash in
// the report covers. Everything in it follows from the final value's version.
type ReportLine struct {
	Code                string  `json:"code"`
	Report              string  `json:"report"`
	Line                int     `json:"line"`
	Final               Ref     `json:"final"`
	Sample              string  `json:"sample"`
	Quantity            string  `json:"quantity"`
	Scale               string  `json:"scale"`
	Measurand           string  `json:"measurand"`
	Value               float64 `json:"value"`
	StandardUncertainty float64 `json:"u"`
	K                   float64 `json:"k"`
	Expanded            float64 `json:"U"`
	Probability         float64 `json:"p"`
}
