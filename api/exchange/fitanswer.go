package exchange

import (
	"math"

	"deltamoor/calib"
)

// A FitAnswer is the answer of the stateless fit. What cannot be computed is
// null, never 0; so are infinite degrees of freedom.
type FitAnswer struct {
	Parameters         []FitParameter  `json:"parameters" nullable:"false" doc:"raw = intercept + slope·true + terms, at the reference time and size."`
	Covariance         [][]*float64    `json:"covariance" nullable:"false" doc:"Covariance of the parameters, from all sources."`
	NoiseCovariance    [][]*float64    `json:"noise_covariance" nullable:"false" doc:"The part of the covariance that comes from the readings alone."`
	Variances          []FitVariance   `json:"variances" nullable:"false" doc:"Variances of the readings, estimated or declared."`
	VarianceCovariance [][]*float64    `json:"variance_covariance" nullable:"false" doc:"Covariance of the variances."`
	Reference          FitReference    `json:"reference" doc:"Where intercept and slope hold."`
	ChiSquare          *float64        `json:"chi_square" doc:"Null where the variance was estimated from the residuals."`
	DegreesOfFreedom   int             `json:"degrees_of_freedom" doc:"Fitted readings less parameters." example:"4"`
	PValue             *float64        `json:"p_value" doc:"Probability of a larger chi-square."`
	BirgeRatio         *float64        `json:"birge_ratio" doc:"Square root of chi-square per degree of freedom."`
	ResidualSD         *float64        `json:"residual_sd" doc:"Standard deviation of the residuals (‰)."`
	LackOfFit          *FitLackOfFit   `json:"lack_of_fit" doc:"F test of the line against free levels."`
	AICc               *float64        `json:"aicc" doc:"Corrected Akaike information criterion."`
	Line               *FitLine        `json:"line" doc:"The line as usually quoted: true = slope·raw + intercept."`
	Readings           []FitDiagnostic `json:"readings" nullable:"false" doc:"Diagnosis of the readings, by their index in the request."`
	Anchors            []FitAdjusted   `json:"anchors" nullable:"false" doc:"Assigned values before and after the adjustment."`
	Samples            []FitSample     `json:"samples" nullable:"false" doc:"Deltas of samples and controls on the scale."`
	Needs              []FitNeed       `json:"needs" nullable:"false" doc:"What the readings say of each term that the model has, or could have."`
	Flags              []FitFlag       `json:"flags" nullable:"false" doc:"Judgements that travel with the result."`
	Companion          *FitCompanion   `json:"companion,omitempty" doc:"A robust fit beside the official one, where it was asked for."`
	ConditionNumber    *float64        `json:"condition_number" doc:"Of the scaled, whitened problem."`
	Engine             string          `json:"engine" doc:"Number of the algorithm." example:"1"`
}

// A FitParameter is one coefficient.
type FitParameter struct {
	Name                string   `json:"name" example:"slope"`
	Value               *float64 `json:"value" example:"0.998"`
	StandardUncertainty *float64 `json:"u" doc:"Standard uncertainty." example:"0.001"`
}

// A FitVariance is one variance of the readings.
type FitVariance struct {
	Name             string   `json:"name" example:"sigma2"`
	Value            *float64 `json:"value" doc:"‰²" example:"0.0025"`
	DegreesOfFreedom *float64 `json:"nu" doc:"Null where the variance is known." example:"6"`
}

// A FitReference is the time (h) and size at which the parameters are stated.
type FitReference struct {
	Time *float64 `json:"time" doc:"h" example:"3.5"`
	Size *float64 `json:"size" example:"5"`
}

// A FitLackOfFit is an F test.
type FitLackOfFit struct {
	F             *float64 `json:"f"`
	NumeratorDF   *float64 `json:"nu1"`
	DenominatorDF *float64 `json:"nu2"`
	PValue        *float64 `json:"p_value"`
}

// A FitLine is the line as usually quoted.
type FitLine struct {
	Slope      *float64 `json:"slope" example:"1.002"`
	Intercept  *float64 `json:"intercept" doc:"‰" example:"-4.9"`
	USlope     *float64 `json:"u_slope" example:"0.001"`
	UIntercept *float64 `json:"u_intercept" doc:"‰" example:"0.03"`
	Covariance *float64 `json:"covariance" doc:"Of slope and intercept (‰)."`
}

// A FitDiagnostic is the diagnosis of one reading; null where it was not fitted.
type FitDiagnostic struct {
	Index                int      `json:"index" doc:"Index in the request's readings, from 0."`
	Predicted            *float64 `json:"predicted" doc:"Raw delta that the fit expects (‰)."`
	Residual             *float64 `json:"residual" doc:"Observed less predicted (‰)."`
	StandardizedResidual *float64 `json:"standardized_residual"`
	StudentizedResidual  *float64 `json:"studentized_residual"`
	Leverage             *float64 `json:"leverage"`
	CooksDistance        *float64 `json:"cooks_distance"`
}

// A FitAdjusted is an anchor after the fit.
type FitAdjusted struct {
	Material string      `json:"material" example:"A"`
	Value    *float64    `json:"value" doc:"Assigned value (‰)."`
	Adjusted *float64    `json:"adjusted" doc:"Value after the adjustment (‰)."`
	LeftOut  *FitLeftOut `json:"left_out" doc:"What the session says of the anchor without its help; null where that cannot be told."`
}

// A FitLeftOut is the prediction of an anchor by the others.
type FitLeftOut struct {
	Predicted           *float64 `json:"predicted" doc:"‰"`
	StandardUncertainty *float64 `json:"u" doc:"Standard uncertainty of predicted less assigned (‰)."`
	Z                   *float64 `json:"z" doc:"Difference by its standard uncertainty."`
}

// A FitSample is a sample's or a control's delta: exactly one of Sample and
// Material is set, and the role tells which.
type FitSample struct {
	Sample              string      `json:"sample,omitempty" example:"S1"`
	Material            string      `json:"material,omitempty" doc:"Of a control."`
	Role                string      `json:"role" enum:"sample,control" example:"sample"`
	N                   int         `json:"n" doc:"Number of preparations." example:"3"`
	Value               *float64    `json:"value" doc:"Delta on the scale (‰)." example:"-24.31"`
	StandardUncertainty *float64    `json:"u" doc:"Standard uncertainty, k = 1 (‰)." example:"0.06"`
	CoverageFactor      *float64    `json:"k" example:"2.26"`
	Probability         *float64    `json:"p" doc:"Coverage probability of U." example:"0.95"`
	ExpandedUncertainty *float64    `json:"U" doc:"Expanded uncertainty k·u (‰)." example:"0.14"`
	EffectiveDF         *float64    `json:"nu_eff" doc:"Effective degrees of freedom; null where infinite." example:"9"`
	Gradient            []*float64  `json:"gradient" nullable:"false" doc:"Derivative of the value by the parameters."`
	Sources             []FitSource `json:"sources" nullable:"false" doc:"Budget of u; shares sum to 1."`
}

// A FitSource is one line of an uncertainty budget.
type FitSource struct {
	ID            string   `json:"id" example:"anchor:A"`
	Kind          string   `json:"kind" enum:"anchor,reading,preparation,unit,stability,between_session,campaign,correction,fit" example:"anchor"`
	Group         string   `json:"group" doc:"Variance that the source is scaled by; empty where u is known."`
	Sensitivity   *float64 `json:"sensitivity" example:"0.4"`
	U             *float64 `json:"u" doc:"Standard uncertainty of the source." example:"0.04"`
	VarianceShare *float64 `json:"variance_share" example:"0.3"`
}

// A FitFlag is a judgement.
type FitFlag struct {
	Code     string `json:"code" example:"extrapolation"`
	Severity string `json:"severity" enum:"note,warning,serious" example:"warning"`
	Readings []int  `json:"readings" nullable:"false" doc:"Indices in the request's readings."`
	Subject  string `json:"subject,omitempty" doc:"Material or sample concerned."`
	Message  string `json:"message"`
	Advice   string `json:"advice,omitempty" doc:"What to do about it."`
}

// AnswerFit computes what a request asks for: the fit, and the companion where
// it is wanted. Refusals name their place in the body.
func AnswerFit(request FitRequest) (FitAnswer, error) {
	session, model, policy, err := request.Session()
	if err != nil {
		return FitAnswer{}, err
	}
	result, err := calib.Fit(session, model, policy)
	if err != nil {
		return FitAnswer{}, FitComplaints(err)
	}
	answer := NewFitAnswer(request, result)
	if request.Companion {
		companion, err := result.Companion()
		if err != nil {
			return FitAnswer{}, FitComplaints(err)
		}
		answer.Companion = NewFitCompanion(companion, nil)
	}
	return answer, nil
}

// NewFitAnswer writes a result in the words of the contract. request gives
// nothing to the numbers; it is the request that the result answers.
func NewFitAnswer(request FitRequest, r *calib.Result) FitAnswer {
	a := FitAnswer{
		Parameters:         []FitParameter{},
		Covariance:         finiteMatrix(r.Covariance),
		NoiseCovariance:    finiteMatrix(r.NoiseCovariance),
		Variances:          []FitVariance{},
		VarianceCovariance: finiteMatrix(r.VarianceCovariance),
		Reference:          FitReference{finitePointer(r.ReferenceTime), finitePointer(r.ReferenceSize)},
		ChiSquare:          finitePointer(r.ChiSquare),
		DegreesOfFreedom:   r.DegreesOfFreedom,
		PValue:             finitePointer(r.PValue),
		BirgeRatio:         finitePointer(r.BirgeRatio),
		ResidualSD:         finitePointer(r.ResidualSD),
		AICc:               finitePointer(r.AICc),
		Readings:           []FitDiagnostic{},
		Anchors:            []FitAdjusted{},
		Samples:            []FitSample{},
		Needs:              fitNeeds(r.Needs),
		Flags:              []FitFlag{},
		ConditionNumber:    finite(r.ConditionNumber),
		Engine:             r.Engine,
	}
	for _, p := range r.Parameters {
		a.Parameters = append(a.Parameters, FitParameter{p.Name, finite(p.Value), finite(p.StandardUncertainty)})
	}
	for _, v := range r.Variances {
		a.Variances = append(a.Variances, FitVariance{v.Name, finite(v.Value), finite(v.DegreesOfFreedom)})
	}
	if l := r.LackOfFit; l != nil {
		a.LackOfFit = &FitLackOfFit{finite(l.F), finite(l.NumeratorDF), finite(l.DenominatorDF), finite(l.PValue)}
	}
	if l := r.Line; l != nil {
		a.Line = &FitLine{finite(l.Slope), finite(l.Intercept), finite(l.USlope), finite(l.UIntercept), finite(l.Covariance)}
	}
	for _, d := range r.Readings {
		a.Readings = append(a.Readings, FitDiagnostic{d.Index, finitePointer(d.Predicted), finitePointer(d.Residual),
			finitePointer(d.StandardizedResidual), finitePointer(d.StudentizedResidual), finitePointer(d.Leverage), finitePointer(d.CooksDistance)})
	}
	for _, k := range r.Anchors {
		adjusted := FitAdjusted{Material: k.Material, Value: finite(k.Value), Adjusted: finite(k.Adjusted)}
		if l := k.LeftOut; l != nil {
			adjusted.LeftOut = &FitLeftOut{finite(l.Predicted), finite(l.StandardUncertainty), finite(l.Z)}
		}
		a.Anchors = append(a.Anchors, adjusted)
	}
	for _, s := range r.Subjects {
		a.Samples = append(a.Samples, fitSample(s))
	}
	for _, f := range r.Flags {
		a.Flags = append(a.Flags, FitFlag{f.Code, string(f.Severity), append([]int{}, f.Readings...), f.Subject, f.Message, f.Advice})
	}
	return a
}

func fitSample(s calib.SubjectResult) FitSample {
	out := FitSample{
		Role:                string(s.Role),
		N:                   s.N,
		Value:               finite(s.Value),
		StandardUncertainty: finite(s.StandardUncertainty),
		CoverageFactor:      finite(s.Expanded.CoverageFactor),
		Probability:         finite(s.Expanded.Probability),
		ExpandedUncertainty: finite(s.Expanded.U),
		EffectiveDF:         finite(s.Expanded.DegreesOfFreedom),
		Gradient:            finiteList(s.Gradient),
		Sources:             []FitSource{},
	}
	if s.Role == calib.Sample {
		out.Sample = s.Subject
	} else {
		out.Material = s.Subject
	}
	for _, c := range s.Sources {
		out.Sources = append(out.Sources, FitSource{c.ID, string(c.Kind), c.Group, finite(c.Sensitivity), finite(c.U), finite(c.VarianceShare)})
	}
	return out
}

// finite is nil for what JSON cannot say; −0 becomes 0.
func finite(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	if x == 0 {
		x = 0
	}
	return &x
}

func finitePointer(x *float64) *float64 {
	if x == nil {
		return nil
	}
	return finite(*x)
}

func finiteList(list []float64) []*float64 {
	out := make([]*float64, len(list))
	for i, x := range list {
		out[i] = finite(x)
	}
	return out
}

func finiteMatrix(m [][]float64) [][]*float64 {
	out := make([][]*float64, len(m))
	for i, row := range m {
		out[i] = finiteList(row)
	}
	return out
}
