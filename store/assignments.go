package store

// Assignment is the body of a value-assignment campaign: its plan, fixed before
// the data by the approval of its version. What came of it are versions of
// values that name the plan as their input "campaign".
type Assignment struct {
	Title string `json:"title"`
	// Material is the candidate; MaterialLaboratory says whose.
	Material           string `json:"material"`
	MaterialLaboratory string `json:"material_laboratory"`
	// Predecessor is the material that the candidate follows; it is measured in
	// the same sessions, and the step between the two is tested. "" for none.
	Predecessor string               `json:"predecessor,omitempty"`
	Quantities  []AssignmentQuantity `json:"quantities"`
	// Methods are the codes of the methods whose sessions count, Instruments those
	// it is to run on; sessions on others count too.
	Methods     []string `json:"methods"`
	Instruments []string `json:"instruments,omitempty"`
	// Sessions, Days and Replicates (portions of the candidate in each session) are the least.
	Sessions   int `json:"sessions"`
	Days       int `json:"days,omitempty"`
	Replicates int `json:"replicates"`
	// Units are the codes of the units drawn, at random over the filling order.
	Units []string `json:"units,omitempty"`
	Note  string   `json:"note,omitempty"`
}

// Form of the body.
func (Assignment) Form() string { return "assignment/1" }

// AssignmentQuantity is what a campaign plans for one value.
type AssignmentQuantity struct {
	Scale     string   `json:"scale"`
	Measurand string   `json:"measurand"` // "total" unless said
	Anchors   []string `json:"anchors"`   // materials expected on the line
	Offered   []string `json:"offered,omitempty"`
	// Estimator of the variance between sessions: paule_mandel dersimonian_laird reml none.
	Estimator string `json:"estimator"`
	Weights   string `json:"weights"` // private full
	// Level of the tests; Probability and CoverageFactor as in [Limits].
	Level          float64 `json:"level"`
	Probability    float64 `json:"probability,omitempty"`
	CoverageFactor float64 `json:"k,omitempty"`
	// LongTerm is the method's between-session component, of which and the
	// campaign's own estimate the larger is used; nil leaves it to the campaign.
	LongTerm    *LongTerm        `json:"long_term,omitempty"`
	Planning    PlanningValues   `json:"planning"`
	Homogeneity StudyPlan        `json:"homogeneity"`
	Stability   StudyPlan        `json:"stability"`
	Acceptance  AssignmentLimits `json:"acceptance"`
}

// LongTerm is a component of a method as a plan took it over.
type LongTerm struct {
	Component
	Method  string `json:"method"`
	Version int    `json:"version"`
}

// PlanningValues are what the plan assumes, in ‰; results do not depend on them.
type PlanningValues struct {
	Value            float64 `json:"value"`
	Repeatability    float64 `json:"repeatability"` // of one portion
	BetweenSession   float64 `json:"between_session"`
	BetweenUnits     float64 `json:"between_units,omitempty"`
	AnchorReplicates int     `json:"anchor_replicates"`
}

// StudyPlan plans homogeneity or stability, or says why no study is needed.
type StudyPlan struct {
	NotNeeded string `json:"not_needed,omitempty"`
	// Units and Measurements of each, for homogeneity.
	Units        int `json:"units,omitempty"`
	Measurements int `json:"measurements,omitempty"`
	// ShelfLifeDays to be stated and the days of the measurements, for stability:
	// the results of the campaign's sessions over time.
	ShelfLifeDays float64   `json:"shelf_life_days,omitempty"`
	Days          []float64 `json:"days,omitempty"`
	// Isochronous says that units stored for different times are measured together.
	Isochronous bool `json:"isochronous,omitempty"`
	// Stored says how long units were stored where the value could change; then
	// their portions are the study, with sessions as blocks. None: the results of
	// the sessions over time.
	Stored []StoredUnit `json:"stored,omitempty"`
	// Prior is the u_lts for ShelfLifeDays that holds while the study runs: until
	// it spans the last of Days.
	Prior *Component `json:"prior,omitempty"`
}

// A StoredUnit is a unit of a stability study with its time of storage.
type StoredUnit struct {
	Unit string  `json:"unit"`
	Days float64 `json:"days"`
}

// Study is the body of a study of units or of stability whose measurements
// were not made in sessions of the registry, or not all of them: version 2 and on
// replace what was stated before. It names its campaign as an input.
type Study struct {
	Assignment string `json:"assignment"`
	Scale      string `json:"scale"`
	Measurand  string `json:"measurand"`
	// Of is what it studies: homogeneity or stability.
	Of          string `json:"of"`
	Isochronous bool   `json:"isochronous,omitempty"`
	// Measurements in the order they came.
	Measurements []StudyMeasurement `json:"measurements"`
	Upload       *Hash              `json:"upload,omitempty"`
}

// Form of the body.
func (Study) Form() string { return "study/1" }

// A StudyMeasurement is one measured test portion.
type StudyMeasurement struct {
	Unit    string  `json:"unit"` // as the file names it
	Value   float64 `json:"value"`
	Session string  `json:"session,omitempty"` // what was measured together; "" for all
	Portion float64 `json:"portion_mg,omitempty"`
	Days    float64 `json:"days,omitempty"`  // of storage
	Order   float64 `json:"order,omitempty"` // of filling; 0 where unknown
}

// AssignmentLimits are what the data must satisfy; 0 is not asked for.
type AssignmentLimits struct {
	Expanded      float64 `json:"U,omitempty"`              // U of the certificate at most, ‰
	Agreement     float64 `json:"agreement_p,omitempty"`    // p of Q at least: agreement as if nothing differed between sessions
	SessionEffect float64 `json:"session_effect,omitempty"` // |effect/u(effect)| of any session at most
}

// ValueComponent is one part of the uncertainty of a value that was assigned
// by a campaign.
type ValueComponent struct {
	StandardUncertainty float64  `json:"u"` // ‰
	DegreesOfFreedom    *float64 `json:"nu,omitempty"`
	// Group is that of the component's source, among the value's groups.
	Group string `json:"group,omitempty"`
}

// CampaignResult is what a campaign found for one value: everything that its
// certificate says beside the value itself.
type CampaignResult struct {
	UCharacterisation float64  `json:"u_char"`
	UMeasurement      float64  `json:"u_measurement"` // the part that more sessions reduce
	UCommon           float64  `json:"u_common"`      // the part that they do not
	K                 float64  `json:"k"`
	Expanded          float64  `json:"U"`
	Probability       float64  `json:"p"`
	EffectiveDF       *float64 `json:"nu_eff,omitempty"`

	Estimator      string             `json:"estimator"`
	Weights        string             `json:"weights"`
	BetweenSession float64            `json:"between_session"`
	LongTermUsed   bool               `json:"long_term_used,omitempty"`
	Agreement      CampaignAgreement  `json:"agreement"`
	Estimates      []CampaignEstimate `json:"estimates"`
	Sessions       []CampaignSession  `json:"sessions"`
	HartungKnapp   *float64           `json:"hartung_knapp,omitempty"`
	// InstrumentP tests whether instruments differ; InstrumentsDiffer: then their
	// means were combined.
	InstrumentP       *float64 `json:"instrument_p,omitempty"`
	InstrumentsDiffer bool     `json:"instruments_differ,omitempty"`

	Homogeneity    *HomogeneityResult `json:"homogeneity,omitempty"`
	HomogeneityNot string             `json:"homogeneity_not_needed,omitempty"`
	Stability      *StabilityResult   `json:"stability,omitempty"`
	StabilityNot   string             `json:"stability_not_needed,omitempty"`
	Prior          *PriorStability    `json:"stability_prior,omitempty"`
	Trend          *TrendAnswer       `json:"trend,omitempty"`
	Step           *StepResult        `json:"step,omitempty"`

	Budget []CampaignBudget `json:"budget"`
	Checks []CampaignCheck  `json:"checks"`
	// Deviation says why the value is drawn up although a check failed.
	Deviation string `json:"deviation,omitempty"`
	// Circular are the paths on which an older value of the candidate stands below.
	Circular []string `json:"circular,omitempty"`

	MinimumPortion float64          `json:"minimum_portion_mg,omitempty"`
	ShelfLifeDays  float64          `json:"shelf_life_days,omitempty"`
	DriftPerDay    *float64         `json:"drift_per_day,omitempty"`
	Remarks        []CampaignRemark `json:"remarks,omitempty"`
}

// CampaignAgreement is what the sessions say about their own agreement.
type CampaignAgreement struct {
	Q                *float64 `json:"q,omitempty"`
	DegreesOfFreedom int      `json:"nu"`
	P                *float64 `json:"p,omitempty"`
	ISquared         *float64 `json:"i_squared,omitempty"`
	BetweenLow       *float64 `json:"between_low,omitempty"`
	BetweenHigh      *float64 `json:"between_high,omitempty"`
}

// CampaignEstimate is the answer of one estimator.
type CampaignEstimate struct {
	Estimator           string  `json:"estimator"`
	BetweenSession      float64 `json:"between_session"`
	Value               float64 `json:"value"`
	StandardUncertainty float64 `json:"u"`
}

// CampaignSession is how one session stands against the value.
type CampaignSession struct {
	Session             string            `json:"session"`
	Instrument          string            `json:"instrument,omitempty"`
	StartedAt           *Instant          `json:"started_at,omitempty"`
	Value               float64           `json:"value"`
	StandardUncertainty float64           `json:"u"`
	UPrivate            float64           `json:"u_private"`
	Portions            int               `json:"portions"`
	Weight              float64           `json:"weight"`
	Effect              float64           `json:"effect"`
	UEffect             float64           `json:"u_effect"`
	Standardised        *float64          `json:"standardised,omitempty"`
	LeftOut             *CampaignEstimate `json:"left_out,omitempty"`
}

// HomogeneityResult is the evaluated study of units.
type HomogeneityResult struct {
	Units             int      `json:"units"`
	Measurements      int      `json:"measurements"`
	Sessions          int      `json:"sessions"`
	BetweenDF         int      `json:"nu_between"`
	WithinDF          int      `json:"nu_within"`
	MeanSquareBetween float64  `json:"ms_between"`
	MeanSquareWithin  float64  `json:"ms_within"`
	F                 *float64 `json:"f,omitempty"`
	P                 *float64 `json:"p_value,omitempty"`
	BetweenUnits      float64  `json:"s_bb"`
	Floor             float64  `json:"floor"`
	FloorUsed         bool     `json:"floor_used,omitempty"`
	FillingP          *float64 `json:"filling_p,omitempty"`
}

// StabilityResult is the evaluated study of results over time.
type StabilityResult struct {
	Points              int     `json:"points"`
	Slope               float64 `json:"slope_per_day"`
	USlope              float64 `json:"u_slope_per_day"`
	DegreesOfFreedom    int     `json:"nu"`
	P                   float64 `json:"p_value"`
	Significant         bool    `json:"significant,omitempty"`
	SpanDays            float64 `json:"span_days"`
	ResidualSD          float64 `json:"residual_sd"`
	ShelfLifeDays       float64 `json:"shelf_life_days"`
	StandardUncertainty float64 `json:"u"`
	Isochronous         bool    `json:"isochronous,omitempty"`
	Blocks              int     `json:"blocks,omitempty"` // sessions removed as blocks
}

// PriorStability is the u_lts that a value took over while its study ran.
type PriorStability struct {
	StandardUncertainty float64  `json:"u"`
	DegreesOfFreedom    *float64 `json:"nu,omitempty"`
	Evidence            string   `json:"evidence"`
	SpanDays            float64  `json:"span_days"` // of the study so far
	PlannedDays         float64  `json:"planned_days"`
}

// TrendAnswer says what was changed because the value drifts, and why.
type TrendAnswer struct {
	Change        string  `json:"change"` // shelf_life storage value_model
	ShelfLifeDays float64 `json:"shelf_life_days,omitempty"`
	Reason        string  `json:"reason"`
}

// StepResult is the step between predecessor and candidate: measured − assigned
// value of the predecessor in the campaign's sessions.
type StepResult struct {
	Material            string   `json:"material"`
	Sessions            int      `json:"sessions"`
	Difference          float64  `json:"difference"`
	StandardUncertainty float64  `json:"u"`
	Expanded            float64  `json:"U"`
	Zeta                *float64 `json:"zeta,omitempty"`
	Detected            bool     `json:"detected,omitempty"`
	// Decision is what was decided about it.
	Decision string `json:"decision,omitempty"`
}

// CampaignBudget is one line of the budget of a value.
type CampaignBudget struct {
	Line                string  `json:"line"`
	StandardUncertainty float64 `json:"u"`
	Share               float64 `json:"share"`
	MoreSessions        bool    `json:"more_sessions,omitempty"`
}

// CampaignCheck holds the data against one rule of the plan.
type CampaignCheck struct {
	Rule     string `json:"rule"`
	Found    string `json:"found"`
	Expected string `json:"expected"`
	Passed   bool   `json:"passed"`
}

// CampaignRemark is a judgement that comes with a result and does not change it.
type CampaignRemark struct {
	Code     string   `json:"code"`
	Severity string   `json:"severity"`
	Subjects []string `json:"subjects,omitempty"`
	Sentence string   `json:"sentence"`
}
