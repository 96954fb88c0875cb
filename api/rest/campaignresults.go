package rest

import (
	"fmt"
	"time"

	"deltamoor/store"
)

func versionText(kind store.Kind, code string, version int) string {
	return fmt.Sprintf("%s.%d", showCode(kind, code), version)
}

// A ValueComponent is one part of the uncertainty of a value that a campaign assigned.
type ValueComponent struct {
	U  float64  `json:"u" doc:"‰."`
	Nu *float64 `json:"nu" doc:"Null where u is known."`
}

func showPart(c *store.ValueComponent) *ValueComponent {
	if c == nil {
		return nil
	}
	return &ValueComponent{c.StandardUncertainty, c.DegreesOfFreedom}
}

// A CampaignResult is what a campaign found for one value. Deltas and u in ‰.
type CampaignResult struct {
	UCharacterisation float64            `json:"u_char"`
	UMeasurement      float64            `json:"u_measurement" doc:"The part that more sessions reduce."`
	UCommon           float64            `json:"u_common" doc:"The part that they do not."`
	K                 float64            `json:"k"`
	Expanded          float64            `json:"U"`
	P                 float64            `json:"p"`
	NuEff             *float64           `json:"nu_eff"`
	Estimator         string             `json:"estimator"`
	Weights           string             `json:"weights"`
	BetweenSession    float64            `json:"between_session"`
	LongTermUsed      bool               `json:"long_term_used" doc:"The method's component was the larger."`
	Agreement         CampaignAgreement  `json:"agreement"`
	Estimates         []CampaignEstimate `json:"estimates"`
	Sessions          []CampaignSession  `json:"sessions"`
	HartungKnapp      *float64           `json:"hartung_knapp" doc:"A diagnostic u."`
	InstrumentP       *float64           `json:"instrument_p" doc:"Of the test whether instruments differ."`
	InstrumentsDiffer bool               `json:"instruments_differ"`
	Homogeneity       *CampaignUnits     `json:"homogeneity,omitempty"`
	HomogeneityNot    string             `json:"homogeneity_not_needed,omitempty"`
	Stability         *CampaignTrend     `json:"stability,omitempty"`
	StabilityNot      string             `json:"stability_not_needed,omitempty"`
	Prior             *CampaignPrior     `json:"stability_prior,omitempty" doc:"Holds while the study over time runs."`
	MinimumPortion    float64            `json:"minimum_portion_mg,omitempty" doc:"The largest test portion measured: smaller ones were not shown to be enough."`
	Trend             *TrendAnswer       `json:"trend,omitempty"`
	Step              *CampaignStep      `json:"step,omitempty" doc:"Between predecessor and candidate."`
	Budget            []CampaignBudget   `json:"budget"`
	Checks            []CampaignCheck    `json:"checks"`
	Deviation         string             `json:"deviation,omitempty"`
	Circular          []string           `json:"circular" doc:"Paths to an older value of the candidate."`
	ShelfLifeDays     float64            `json:"shelf_life_days,omitempty"`
	DriftPerDay       *float64           `json:"drift_per_day,omitempty"`
	Remarks           []CampaignRemark   `json:"remarks"`
}

// CampaignAgreement is what the sessions say about their own agreement.
type CampaignAgreement struct {
	Q                *float64 `json:"q"`
	DegreesOfFreedom int      `json:"nu"`
	P                *float64 `json:"p"`
	ISquared         *float64 `json:"i_squared"`
	BetweenLow       *float64 `json:"between_low"`
	BetweenHigh      *float64 `json:"between_high"`
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
	Session      string            `json:"session"`
	Instrument   string            `json:"instrument"`
	StartedAt    *time.Time        `json:"started_at"`
	Value        float64           `json:"value"`
	U            float64           `json:"u"`
	UPrivate     float64           `json:"u_private"`
	Portions     int               `json:"portions"`
	Weight       float64           `json:"weight"`
	Effect       float64           `json:"effect"`
	UEffect      float64           `json:"u_effect"`
	Standardised *float64          `json:"standardised"`
	LeftOut      *CampaignEstimate `json:"left_out" doc:"The value without this session."`
}

// CampaignUnits is the study of the units.
type CampaignUnits struct {
	Units             int      `json:"units"`
	Measurements      int      `json:"measurements"`
	Sessions          int      `json:"sessions"`
	BetweenDF         int      `json:"nu_between"`
	WithinDF          int      `json:"nu_within"`
	MeanSquareBetween float64  `json:"ms_between"`
	MeanSquareWithin  float64  `json:"ms_within"`
	F                 *float64 `json:"f"`
	P                 *float64 `json:"p_value"`
	BetweenUnits      float64  `json:"s_bb"`
	Floor             float64  `json:"floor" doc:"What the repeatability could hide."`
	FloorUsed         bool     `json:"floor_used"`
	FillingP          *float64 `json:"filling_p" doc:"Of a trend in the order of filling."`
}

// CampaignTrend is the study over time.
type CampaignTrend struct {
	Points              int     `json:"points"`
	Slope               float64 `json:"slope_per_day"`
	USlope              float64 `json:"u_slope_per_day"`
	DegreesOfFreedom    int     `json:"nu"`
	P                   float64 `json:"p_value"`
	Significant         bool    `json:"significant"`
	SpanDays            float64 `json:"span_days"`
	ResidualSD          float64 `json:"residual_sd"`
	ShelfLifeDays       float64 `json:"shelf_life_days"`
	StandardUncertainty float64 `json:"u"`
	Isochronous         bool    `json:"isochronous,omitempty" doc:"Units stored for different times, measured together."`
	Blocks              int     `json:"blocks,omitempty" doc:"Sessions removed as blocks."`
}

// CampaignPrior is the uncertainty of stability that a value took over while its study runs.
type CampaignPrior struct {
	StandardUncertainty float64  `json:"u"`
	DegreesOfFreedom    *float64 `json:"nu" doc:"Null where u is known."`
	Evidence            string   `json:"evidence"`
	SpanDays            float64  `json:"span_days" doc:"Of the study so far."`
	PlannedDays         float64  `json:"planned_days"`
}

// CampaignStep is the step between the predecessor and the candidate.
type CampaignStep struct {
	Material            string   `json:"material"`
	Sessions            int      `json:"sessions"`
	Difference          float64  `json:"difference" doc:"Measured − assigned (‰)."`
	StandardUncertainty float64  `json:"u"`
	Expanded            float64  `json:"U"`
	Zeta                *float64 `json:"zeta"`
	Detected            bool     `json:"detected"`
	Decision            string   `json:"decision,omitempty"`
}

// CampaignBudget is one line of the budget.
type CampaignBudget struct {
	Line                string  `json:"line"`
	StandardUncertainty float64 `json:"u"`
	Share               float64 `json:"share"`
	MoreSessions        bool    `json:"more_sessions" doc:"More sessions reduce it."`
}

// CampaignCheck holds the data against one rule of the plan.
type CampaignCheck struct {
	Rule     string `json:"rule"`
	Found    string `json:"found"`
	Expected string `json:"expected"`
	Passed   bool   `json:"passed"`
}

// CampaignRemark is a judgement that comes with a result.
type CampaignRemark struct {
	Code     string   `json:"code"`
	Severity string   `json:"severity"`
	Subjects []string `json:"subjects"`
	Sentence string   `json:"sentence"`
}

func showCampaign(r *store.CampaignResult) *CampaignResult {
	if r == nil {
		return nil
	}
	out := &CampaignResult{UCharacterisation: r.UCharacterisation, UMeasurement: r.UMeasurement, UCommon: r.UCommon, K: r.K, Expanded: r.Expanded, P: r.Probability, NuEff: r.EffectiveDF,
		Estimator: r.Estimator, Weights: r.Weights, BetweenSession: r.BetweenSession, LongTermUsed: r.LongTermUsed, Agreement: CampaignAgreement(r.Agreement),
		Estimates:    convert(r.Estimates, func(e store.CampaignEstimate) CampaignEstimate { return CampaignEstimate(e) }),
		HartungKnapp: r.HartungKnapp, InstrumentP: r.InstrumentP, InstrumentsDiffer: r.InstrumentsDiffer, HomogeneityNot: r.HomogeneityNot, StabilityNot: r.StabilityNot,
		Budget:    convert(r.Budget, func(b store.CampaignBudget) CampaignBudget { return CampaignBudget(b) }),
		Checks:    convert(r.Checks, func(c store.CampaignCheck) CampaignCheck { return CampaignCheck(c) }),
		Deviation: r.Deviation, MinimumPortion: r.MinimumPortion, Circular: convert(r.Circular, same), ShelfLifeDays: r.ShelfLifeDays, DriftPerDay: r.DriftPerDay,
		Remarks: convert(r.Remarks, func(m store.CampaignRemark) CampaignRemark {
			return CampaignRemark{m.Code, m.Severity, convert(m.Subjects, showSubjectCode), m.Sentence}
		})}
	out.Sessions = convert(r.Sessions, func(s store.CampaignSession) CampaignSession {
		line := CampaignSession{Session: store.FormatCode(s.Session), Instrument: s.Instrument, StartedAt: timePointer(s.StartedAt), Value: s.Value, U: s.StandardUncertainty, UPrivate: s.UPrivate,
			Portions: s.Portions, Weight: s.Weight, Effect: s.Effect, UEffect: s.UEffect, Standardised: s.Standardised}
		if s.LeftOut != nil {
			left := CampaignEstimate(*s.LeftOut)
			line.LeftOut = &left
		}
		return line
	})
	if h := r.Homogeneity; h != nil {
		units := CampaignUnits(*h)
		out.Homogeneity = &units
	}
	if s := r.Stability; s != nil {
		trend := CampaignTrend(*s)
		out.Stability = &trend
	}
	if p := r.Prior; p != nil {
		prior := CampaignPrior(*p)
		out.Prior = &prior
	}
	if t := r.Trend; t != nil {
		answer := TrendAnswer(*t)
		out.Trend = &answer
	}
	if s := r.Step; s != nil {
		step := CampaignStep(*s)
		out.Step = &step
	}
	return out
}

// showSubjectCode writes a code that the registry made for people; names stay.
func showSubjectCode(subject string) string {
	if code, err := store.ParseCode(subject); err == nil && code == subject {
		return store.FormatCode(code)
	}
	return subject
}
