package rest

import (
	"context"
	"errors"
	"strconv"
	"strings"
	"time"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// A Calibration is one fitted version: raw = intercept + slope·true + terms,
// with everything that its results rest on.
type Calibration struct {
	Recorded
	Engine             string         `json:"engine" doc:"Number of the algorithm."`
	Session            string         `json:"session"`
	Instrument         string         `json:"instrument"`
	StartedAt          *time.Time     `json:"started_at"`
	Quantity           string         `json:"quantity"`
	Scale              string         `json:"scale"`
	Measurand          string         `json:"measurand"`
	Model              Model          `json:"model"`
	Limits             Limits         `json:"limits"`
	BetweenSession     *Component     `json:"between_session,omitempty"`
	SampleHomogeneity  *Component     `json:"sample_homogeneity,omitempty"`
	Excluded           []int          `json:"excluded" doc:"Numbers of readings left out."`
	Corrections        []SharedInput  `json:"corrections" doc:"Numbers with which readings were corrected before the fit."`
	SetAside           []int          `json:"set_aside" doc:"Numbers of readings that the method's rule on repeats sets aside."`
	Means              []MeanReading  `json:"means" doc:"Readings that entered the fit as means."`
	Anchors            []Anchor       `json:"anchors"`
	Parameters         []Parameter    `json:"parameters"`
	Covariance         [][]float64    `json:"covariance" doc:"Of the parameters, from all sources."`
	NoiseCovariance    [][]float64    `json:"noise_covariance" doc:"The part that comes from the readings alone."`
	Sensitivities      [][]float64    `json:"anchor_sensitivities" doc:"∂parameters/∂anchor values, for uncertainty."`
	Derivatives        [][]float64    `json:"anchor_derivatives" doc:"∂parameters/∂anchor values, for shifts."`
	Variances          []Variance     `json:"variances"`
	VarianceCovariance [][]float64    `json:"variance_covariance"`
	Reference          Reference      `json:"reference" doc:"Where intercept and slope hold."`
	ChiSquare          *float64       `json:"chi_square" doc:"null where it cannot be computed."`
	DegreesOfFreedom   int            `json:"degrees_of_freedom"`
	PValue             *float64       `json:"p_value"`
	BirgeRatio         *float64       `json:"birge_ratio"`
	ResidualSD         *float64       `json:"residual_sd" doc:"‰"`
	LackOfFit          *LackOfFit     `json:"lack_of_fit"`
	AICc               *float64       `json:"aicc"`
	Line               *Line          `json:"line" doc:"true = slope·raw + intercept."`
	ConditionNumber    float64        `json:"condition_number"`
	Readings           []ReadingCheck `json:"readings" doc:"What the fit says of each reading, by its number in the session."`
	Results            []Result       `json:"results"`
	Needs              []Need         `json:"needs" doc:"What the readings say of each term that the model has, or could have; empty in versions recorded before it was kept."`
	History            *LineHistory   `json:"history" doc:"What the instrument's approved lines were when the fit was made; null where there were too few."`
	Flags              []Flag         `json:"flags"`
}

// A LineHistory is what an instrument's approved lines were before a session,
// by the same method on the same scale.
type LineHistory struct {
	From         *time.Time           `json:"from"`
	To           *time.Time           `json:"to"`
	Coefficients []HistoryCoefficient `json:"coefficients"`
}

// A HistoryCoefficient is the mean and the standard deviation over n lines.
type HistoryCoefficient struct {
	Parameter string  `json:"parameter" enum:"slope,intercept,drift.linear"`
	N         int     `json:"n"`
	Centre    float64 `json:"centre" doc:"Mean."`
	Spread    float64 `json:"spread" doc:"Standard deviation."`
}

// A Need is a test of whether the readings ask for a term.
type Need struct {
	Term            string   `json:"term" example:"drift" doc:"drift.slope is a slope that changes with time."`
	InModel         bool     `json:"in_model"`
	DeltaChiSquare  float64  `json:"delta_chi_square" doc:"How much the term explains."`
	DeltaParameters int      `json:"delta_parameters"`
	F               *float64 `json:"f" doc:"null where the readings' variance is known: then delta_chi_square is the test."`
	PValue          float64  `json:"p_value"`
	AICcWith        *float64 `json:"aicc_with"`
	AICcWithout     *float64 `json:"aicc_without"`
	Sentence        string   `json:"sentence" doc:"The same in plain words."`
}

func showNeed(n store.Need) Need {
	return Need{n.Term, n.Model, n.DeltaChiSquare, n.DeltaParameters, n.F, n.PValue, n.AICcWith, n.AICcWithout, calib.TermNeed(n).Sentence()}
}

// An Anchor is an anchor as the fit used it.
type Anchor struct {
	Material string   `json:"material"`
	Value    float64  `json:"value" doc:"Assigned value (‰)."`
	U        float64  `json:"u" doc:"Its standard uncertainty (‰)."`
	Adjusted float64  `json:"adjusted" doc:"After the adjustment (‰)."`
	LeftOut  *LeftOut `json:"left_out" doc:"What the session says of the anchor without its help; null where that cannot be told."`
}

// LeftOut is the prediction of an anchor by a fit without it.
type LeftOut struct {
	Predicted float64 `json:"predicted" doc:"‰"`
	U         float64 `json:"u" doc:"Standard uncertainty of predicted less assigned (‰)."`
	Z         float64 `json:"z"`
}

// A Parameter is one coefficient.
type Parameter struct {
	Name  string  `json:"name" example:"slope"`
	Value float64 `json:"value"`
	U     float64 `json:"u" doc:"Standard uncertainty."`
}

// A Variance is one variance of the readings.
type Variance struct {
	Name  string   `json:"name"`
	Value float64  `json:"value" doc:"‰²"`
	Nu    *float64 `json:"nu" doc:"null where it is known."`
}

// A Reference is the time (h) and size at which the parameters are stated.
type Reference struct {
	Time *float64 `json:"time" doc:"h"`
	Size *float64 `json:"size"`
}

// LackOfFit is an F test.
type LackOfFit struct {
	F      float64 `json:"f"`
	Nu1    float64 `json:"nu1"`
	Nu2    float64 `json:"nu2"`
	PValue float64 `json:"p_value"`
}

// A Line is the fit as usually quoted.
type Line struct {
	Slope      float64 `json:"slope"`
	Intercept  float64 `json:"intercept" doc:"‰"`
	USlope     float64 `json:"u_slope"`
	UIntercept float64 `json:"u_intercept" doc:"‰"`
	Covariance float64 `json:"covariance"`
}

// A ReadingCheck is what a fit says of one reading.
type ReadingCheck struct {
	Number       int      `json:"number"`
	Corrected    *float64 `json:"corrected,omitempty" doc:"Raw delta as it entered the fit (‰), where it is not the reading's own."`
	Predicted    *float64 `json:"predicted" doc:"‰"`
	Residual     *float64 `json:"residual" doc:"‰"`
	Standardized *float64 `json:"standardized_residual"`
	Studentized  *float64 `json:"studentized_residual"`
	Leverage     *float64 `json:"leverage"`
	CooksD       *float64 `json:"cooks_distance"`
}

// A Result is one line of a calibration: the delta of a sample or control.
type Result struct {
	Subject        string         `json:"subject" doc:"Sample's or material's code."`
	Role           string         `json:"role" enum:"sample,control"`
	N              int            `json:"n" doc:"Number of preparations."`
	Value          float64        `json:"value" doc:"Delta on the scale (‰)."`
	U              float64        `json:"u" doc:"Standard uncertainty, k = 1 (‰)."`
	K              float64        `json:"k"`
	Expanded       float64        `json:"U" doc:"Expanded uncertainty k·u (‰)."`
	P              float64        `json:"p" doc:"Coverage probability of U."`
	NuEff          *float64       `json:"nu_eff" doc:"Effective degrees of freedom; null where infinite."`
	Gradient       []float64      `json:"gradient" doc:"Derivative of the value by the parameters."`
	Readings       []int          `json:"readings"`
	Coefficients   []float64      `json:"coefficients" doc:"Derivative of the value by its own readings."`
	BetweenSession float64        `json:"between_session,omitempty" doc:"‰"`
	Sources        []Contribution `json:"sources" doc:"Budget of u."`
	Flags          []string       `json:"flags"`
}

// A Contribution is one line of an uncertainty budget.
type Contribution struct {
	ID            string  `json:"id"`
	Kind          string  `json:"kind"`
	Group         string  `json:"group"`
	Sensitivity   float64 `json:"sensitivity"`
	U             float64 `json:"u"`
	VarianceShare float64 `json:"variance_share"`
}

func showCalibration(it registry.Item[store.Calibration]) Calibration {
	c := it.Value
	out := Calibration{Recorded: recorded(it), Engine: c.Engine, Session: store.FormatCode(c.Session), Instrument: c.Instrument, StartedAt: timePointer(c.StartedAt),
		Quantity: c.Quantity, Scale: c.Scale, Measurand: c.Measurand, Model: showModel(c.Model), Limits: Limits(c.Limits), BetweenSession: showComponent(c.BetweenSession), SampleHomogeneity: showComponent(c.SampleHomogeneity),
		Excluded: append([]int{}, c.Excluded...), Covariance: matrix(c.Covariance), NoiseCovariance: matrix(c.NoiseCovariance), Sensitivities: matrix(c.AnchorSensitivities),
		Derivatives: matrix(c.AnchorDerivatives), VarianceCovariance: matrix(c.VarianceCovariance), Reference: Reference{c.ReferenceTime, c.ReferenceSize},
		ChiSquare: c.ChiSquare, DegreesOfFreedom: c.DegreesOfFreedom, PValue: c.PValue, BirgeRatio: c.BirgeRatio, ResidualSD: c.ResidualSD, AICc: c.AICc,
		ConditionNumber: c.ConditionNumber, Flags: showFlags(c.Flags), SetAside: append([]int{}, c.SetAside...),
		Corrections: convert(c.Corrections, showSharedInput), Means: convert(c.Means, func(m store.MeanReading) MeanReading { return MeanReading(m) })}
	out.Anchors = convert(c.Anchors, func(a store.CalibrationAnchor) Anchor {
		s := Anchor{a.Material, a.Value, a.StandardUncertainty, a.Adjusted, nil}
		if a.LeftOut != nil {
			left := LeftOut{a.LeftOut.Predicted, a.LeftOut.StandardUncertainty, a.LeftOut.Z}
			s.LeftOut = &left
		}
		return s
	})
	out.Parameters = convert(c.Parameters, func(p store.Parameter) Parameter { return Parameter{p.Name, p.Value, p.StandardUncertainty} })
	out.Variances = convert(c.Variances, func(v store.Variance) Variance { return Variance{v.Name, v.Value, v.DegreesOfFreedom} })
	if c.LackOfFit != nil {
		out.LackOfFit = &LackOfFit{c.LackOfFit.F, c.LackOfFit.NumeratorDF, c.LackOfFit.DenominatorDF, c.LackOfFit.PValue}
	}
	if c.Line != nil {
		line := Line(*c.Line)
		out.Line = &line
	}
	out.Readings = convert(c.Readings, func(r store.ReadingDiagnosis) ReadingCheck {
		return ReadingCheck{r.Number, r.Corrected, r.Predicted, r.Residual, r.Standardized, r.Studentized, r.Leverage, r.CooksD}
	})
	out.Results = convert(c.Results, showResult)
	out.Needs = convert(c.Needs, showNeed)
	if h := c.History; h != nil {
		out.History = &LineHistory{timePointer(h.From), timePointer(h.To),
			convert(h.Coefficients, func(x store.HistoryCoefficient) HistoryCoefficient { return HistoryCoefficient(x) })}
	}
	return out
}

func showResult(r store.Result) Result {
	return Result{Subject: showSubject(r.Subject), Role: string(r.Role), N: r.N, Value: r.Value, U: r.StandardUncertainty, K: r.K, Expanded: r.Expanded, P: r.Probability,
		NuEff: r.EffectiveDF, Gradient: append([]float64{}, r.Gradient...), Readings: append([]int{}, r.Readings...), Coefficients: append([]float64{}, r.Coefficients...),
		BetweenSession: r.BetweenSession, Sources: convert(r.Sources, func(c store.Contribution) Contribution { return Contribution(c) }), Flags: append([]string{}, r.Flags...)}
}

func matrix(m [][]float64) [][]float64 {
	return convert(m, func(row []float64) []float64 { return append([]float64{}, row...) })
}

var calibrationKind = kindOfRecord[store.Calibration, Calibration]{kind: store.KindCalibration, show: showCalibration, made: true,
	csv: table[Calibration]{columns("session", "instrument", "quantity", "scale", "measurand", "slope", "u_slope", "intercept", "u_intercept", "residual_sd", "degrees_of_freedom", "flags"),
		func(c Calibration) []string {
			fields := make([]string, 4)
			for _, p := range c.Parameters {
				switch p.Name {
				case "slope":
					fields[0], fields[1] = number(p.Value), number(p.U)
				case "intercept":
					fields[2], fields[3] = number(p.Value), number(p.U)
				}
			}
			more := append([]string{c.Session, c.Instrument, c.Quantity, c.Scale, c.Measurand}, fields...)
			return c.row(append(more, optional(c.ResidualSD), strconv.Itoa(c.DegreesOfFreedom), spaced(convert(c.Flags, func(f Flag) string { return f.Code })))...)
		}}}

func (f *face) calibrations(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	ListParams
}) (*answer, error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	items, err := f.registry.Calibrations(ctx, actor, session)
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, wholeList(items, nil), showCalibration, calibrationKind.csv)
}

// A NewCalibration asks for a fit of one quantity of a session.
type NewCalibration struct {
	Quantity  string `json:"quantity" maxLength:"20" example:"d13C"`
	Measurand string `json:"measurand,omitempty" maxLength:"60" doc:"Left out: the method's."`
	Model     *Model `json:"model,omitempty" doc:"Another model than the method's, to see what it would give; such a draft cannot be approved."`
	Factor    int    `json:"factor,omitempty" minimum:"1" doc:"Version of the instrument's H3 factor to use; left out: the one that held when the session started."`
	Reason    string `json:"reason,omitempty" maxLength:"4000" doc:"Asked for where there is a version already."`
}

// calibrationAnswer has the status 200 in a preview.
type calibrationAnswer struct {
	Status   int
	ETag     string `header:"ETag"`
	Location string `header:"Location"`
	Body     Calibration
}

func (f *face) fitSession(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	PreviewParam
	Body NewCalibration
}) (*calibrationAnswer, error) {
	session, err := sessionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	q := registry.FitRequest{Session: session, Quantity: in.Body.Quantity, Measurand: in.Body.Measurand, Factor: in.Body.Factor, Reason: in.Body.Reason, Preview: in.Preview}
	if in.Body.Model != nil {
		m := in.Body.Model.body()
		q.Model = &m
	}
	it, err := f.registry.Fit(ctx, actor, q)
	if err != nil {
		return nil, refusedFit(err)
	}
	c := showCalibration(it)
	if in.Preview {
		return &calibrationAnswer{Status: 200, Body: c}, nil
	}
	return &calibrationAnswer{Status: 201, ETag: quoteTag(it.Tag()), Location: "/v1/calibrations/" + c.Code, Body: c}, nil
}

// refusedFit adds, to a fit that the engine refused, where the fault stands.
func refusedFit(err error) error {
	var refusal *registry.Error
	var placed interface{ Refused() calib.Refusal }
	if !errors.As(err, &refusal) || len(refusal.Complaints) > 0 || !errors.As(err, &placed) {
		return err
	}
	r := placed.Refused()
	with := *refusal
	with.Complaints = []registry.Complaint{{Place: nameOr(r.Place, "fit"), Found: r.Found, Expected: r.Expected}}
	return &with
}

func nameOr(name, other string) string {
	if name == "" {
		return other
	}
	return name
}

var resultTable = table[Result]{[]string{"subject", "role", "n", "value", "u", "k", "U", "p", "nu_eff", "readings", "flags"}, func(r Result) []string {
	return []string{r.Subject, r.Role, whole(&r.N), number(r.Value), number(r.U), number(r.K), number(r.Expanded), number(r.P), optional(r.NuEff),
		spaced(convert(r.Readings, func(n int) string { return whole(&n) })), strings.Join(r.Flags, " ")}
}}

// results lists the results of a calibration's newest version, or of one version.
func (f *face) results(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Version int `query:"version" minimum:"1" doc:"Of this version; left out: the one in force, else the newest."`
	ListParams
}) (*answer, error) {
	code, err := calibrationKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	it, err := registry.One[store.Calibration](ctx, f.registry, actor, store.KindCalibration, code, in.Version, in.moment())
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, wholeList(it.Value.Results, nil), showResult, resultTable)
}
