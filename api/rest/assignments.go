package rest

import (
	"context"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// An AssignmentPlan is what a value-assignment campaign fixes before its data.
type AssignmentPlan struct {
	Title       string         `json:"title" maxLength:"200"`
	Material    string         `json:"material" maxLength:"40" doc:"The candidate."`
	Predecessor string         `json:"predecessor,omitempty" maxLength:"40" doc:"The material it follows, measured in the same sessions; the step between the two is tested."`
	Quantities  []PlannedValue `json:"quantities" minItems:"1" maxItems:"50"`
	Methods     []string       `json:"methods" minItems:"1" maxItems:"20" doc:"Sessions of these methods count."`
	Instruments []string       `json:"instruments,omitempty" maxItems:"50" doc:"Each must have a session."`
	Sessions    int            `json:"sessions" minimum:"1" maximum:"500" doc:"At least."`
	Days        int            `json:"days,omitempty" minimum:"0" maximum:"500" doc:"At least so many different days."`
	Replicates  int            `json:"replicates" minimum:"1" maximum:"500" doc:"Portions of the candidate in each session, at least."`
	Units       []string       `json:"units,omitempty" maxItems:"500" doc:"Codes of the units drawn, at random over the filling order."`
	Note        string         `json:"note,omitempty" maxLength:"2000"`
}

// A PlannedValue is what a campaign plans for one value.
type PlannedValue struct {
	Scale       string          `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand   string          `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Anchors     []string        `json:"anchors" minItems:"1" maxItems:"50" doc:"Materials expected on the line."`
	Offered     []string        `json:"offered,omitempty" maxItems:"50" doc:"Anchors that could be added; the prospects say what each buys."`
	Estimator   string          `json:"estimator,omitempty" enum:"paule_mandel,dersimonian_laird,reml,none" doc:"Of the variance between sessions; left out: paule_mandel. All are shown, this one counts."`
	Weights     string          `json:"weights,omitempty" enum:"private,full" doc:"Left out: private."`
	Level       float64         `json:"level,omitempty" minimum:"0" maximum:"0.5" doc:"Of the tests; left out: 0.05."`
	Probability float64         `json:"probability,omitempty" minimum:"0" maximum:"1" doc:"Of U; left out: 0.95."`
	K           float64         `json:"k,omitempty" minimum:"0" doc:"A fixed coverage factor; left out: from the effective degrees of freedom."`
	LongTerm    *LongTerm       `json:"long_term,omitempty" readOnly:"true" doc:"The method's between-session component, taken over when the plan was stated; the larger of it and the campaign's own estimate is used."`
	Planning    PlanningValues  `json:"planning"`
	Homogeneity HomogeneityPlan `json:"homogeneity"`
	Stability   StabilityPlan   `json:"stability"`
	Acceptance  Acceptance      `json:"acceptance,omitempty"`
}

// LongTerm is a component of a method.
type LongTerm struct {
	U       float64  `json:"u" doc:"‰."`
	Nu      *float64 `json:"nu" doc:"Null where u is known."`
	Method  string   `json:"method"`
	Version int      `json:"version"`
}

// PlanningValues are what a plan assumes, in ‰; results do not depend on them.
type PlanningValues struct {
	Value            float64 `json:"value" doc:"Expected of the candidate."`
	Repeatability    float64 `json:"repeatability" minimum:"0" doc:"Standard deviation of one portion."`
	BetweenSession   float64 `json:"between_session" minimum:"0"`
	BetweenUnits     float64 `json:"between_units,omitempty" minimum:"0"`
	AnchorReplicates int     `json:"anchor_replicates,omitempty" minimum:"0" doc:"Left out: 3."`
}

// A HomogeneityPlan plans the study of units, or says why none is needed.
type HomogeneityPlan struct {
	NotNeeded    string `json:"not_needed,omitempty" maxLength:"1000"`
	Units        int    `json:"units,omitempty" minimum:"0" maximum:"500"`
	Measurements int    `json:"measurements,omitempty" minimum:"0" maximum:"500" doc:"Of each unit."`
}

// A StabilityPlan plans the study over time, or says why none is needed.
type StabilityPlan struct {
	NotNeeded     string          `json:"not_needed,omitempty" maxLength:"1000"`
	ShelfLifeDays float64         `json:"shelf_life_days,omitempty" minimum:"0"`
	Days          []float64       `json:"days,omitempty" maxItems:"500" doc:"Days of the measurements, for the prospects; a prior uncertainty holds until the study spans the last of them."`
	Isochronous   bool            `json:"isochronous,omitempty" doc:"Units stored for different times are measured together."`
	Stored        []StoredUnit    `json:"stored,omitempty" maxItems:"500" doc:"Units whose portions are the study, with their time of storage; left out: the results of the sessions over time."`
	Prior         *PriorStability `json:"prior,omitempty" doc:"Holds while the study runs."`
}

// A StoredUnit is a unit of a stability study with its time of storage.
type StoredUnit struct {
	Unit string  `json:"unit"`
	Days float64 `json:"days" minimum:"0"`
}

// A PriorStability is an uncertainty of stability taken over from elsewhere.
type PriorStability struct {
	U        float64  `json:"u" minimum:"0" doc:"For the shelf life (‰)."`
	Nu       *float64 `json:"nu,omitempty" doc:"Left out: u is known."`
	Evidence string   `json:"evidence" minLength:"1" maxLength:"1000" doc:"Where it comes from."`
}

func (s StabilityPlan) body() (store.StudyPlan, error) {
	out := store.StudyPlan{NotNeeded: s.NotNeeded, ShelfLifeDays: s.ShelfLifeDays, Days: s.Days, Isochronous: s.Isochronous}
	for _, u := range s.Stored {
		code, err := parseCode("body.quantities.stability.stored", u.Unit, store.KindUnit)
		if err != nil {
			return out, err
		}
		out.Stored = append(out.Stored, store.StoredUnit{Unit: code, Days: u.Days})
	}
	if p := s.Prior; p != nil {
		out.Prior = &store.Component{StandardUncertainty: p.U, DegreesOfFreedom: p.Nu, Evidence: p.Evidence}
	}
	return out, nil
}

func showStability(s store.StudyPlan) StabilityPlan {
	out := StabilityPlan{NotNeeded: s.NotNeeded, ShelfLifeDays: s.ShelfLifeDays, Days: s.Days, Isochronous: s.Isochronous,
		Stored: convertOrNil(s.Stored, func(u store.StoredUnit) StoredUnit { return StoredUnit{store.FormatCode(u.Unit), u.Days} })}
	if p := s.Prior; p != nil {
		out.Prior = &PriorStability{p.StandardUncertainty, p.DegreesOfFreedom, p.Evidence}
	}
	return out
}

// Acceptance is what the data must satisfy; what is left out is not asked for.
type Acceptance struct {
	Expanded      float64 `json:"U,omitempty" minimum:"0" doc:"Of the value at most (‰)."`
	Agreement     float64 `json:"agreement_p,omitempty" minimum:"0" maximum:"1" doc:"Probability of the sessions' agreement at least."`
	SessionEffect float64 `json:"session_effect,omitempty" minimum:"0" doc:"Of any session over its u at most."`
}

// An Assignment is a version of a campaign's plan.
type Assignment struct {
	Recorded
	AssignmentPlan
	MaterialLaboratory string `json:"material_laboratory"`
}

func (p AssignmentPlan) body() (store.Assignment, error) {
	out := store.Assignment{Title: p.Title, Material: p.Material, Predecessor: p.Predecessor, Methods: p.Methods, Instruments: p.Instruments,
		Sessions: p.Sessions, Days: p.Days, Replicates: p.Replicates, Note: p.Note}
	for _, u := range p.Units {
		code, err := parseCode("body.units", u, store.KindUnit)
		if err != nil {
			return out, err
		}
		out.Units = append(out.Units, code)
	}
	for _, q := range p.Quantities {
		stability, err := q.Stability.body()
		if err != nil {
			return out, err
		}
		out.Quantities = append(out.Quantities, store.AssignmentQuantity{Scale: q.Scale, Measurand: q.Measurand, Anchors: q.Anchors, Offered: q.Offered, Estimator: q.Estimator,
			Weights: q.Weights, Level: q.Level, Probability: q.Probability, CoverageFactor: q.K, Planning: store.PlanningValues(q.Planning),
			Homogeneity: store.StudyPlan{NotNeeded: q.Homogeneity.NotNeeded, Units: q.Homogeneity.Units, Measurements: q.Homogeneity.Measurements},
			Stability:   stability,
			Acceptance:  store.AssignmentLimits(q.Acceptance)})
	}
	return out, nil
}

func showAssignment(it registry.Item[store.Assignment]) Assignment {
	p := it.Value
	out := Assignment{Recorded: recorded(it), MaterialLaboratory: p.MaterialLaboratory, AssignmentPlan: AssignmentPlan{Title: p.Title, Material: p.Material, Predecessor: p.Predecessor,
		Methods: convert(p.Methods, same), Instruments: p.Instruments, Sessions: p.Sessions, Days: p.Days, Replicates: p.Replicates, Units: convertOrNil(p.Units, store.FormatCode), Note: p.Note}}
	out.Quantities = convert(p.Quantities, func(q store.AssignmentQuantity) PlannedValue {
		v := PlannedValue{Scale: q.Scale, Measurand: q.Measurand, Anchors: convert(q.Anchors, same), Offered: q.Offered, Estimator: q.Estimator, Weights: q.Weights, Level: q.Level,
			Probability: q.Probability, K: q.CoverageFactor, Planning: PlanningValues(q.Planning),
			Homogeneity: HomogeneityPlan{NotNeeded: q.Homogeneity.NotNeeded, Units: q.Homogeneity.Units, Measurements: q.Homogeneity.Measurements},
			Stability:   showStability(q.Stability),
			Acceptance:  Acceptance(q.Acceptance)}
		if l := q.LongTerm; l != nil {
			v.LongTerm = &LongTerm{l.StandardUncertainty, l.DegreesOfFreedom, l.Method, l.Version}
		}
		return v
	})
	return out
}

var assignmentKind = kindOfRecord[store.Assignment, Assignment]{kind: store.KindAssignment, show: showAssignment, made: true,
	csv: table[Assignment]{columns("title", "material", "predecessor", "scales", "methods", "sessions", "days", "replicates"), func(v Assignment) []string {
		scales := convert(v.Quantities, func(q PlannedValue) string { return q.Scale })
		return v.row(v.Title, v.Material, v.Predecessor, spaced(scales), spaced(v.Methods), whole(&v.Sessions), whole(&v.Days), whole(&v.Replicates))
	}}}

// A NewAssignment plans a campaign.
type NewAssignment struct {
	Reason string `json:"reason,omitempty" maxLength:"4000"`
	AssignmentPlan
}

// An AssignmentChange plans a campaign anew, before its approval.
type AssignmentChange struct {
	Reason string `json:"reason" minLength:"1" maxLength:"4000" doc:"Why this plan replaces the one before."`
	AssignmentPlan
}

func (f *face) planAssignment(ctx context.Context, actor registry.Actor, in *struct{ Body NewAssignment }) (*one[Assignment], error) {
	return f.plan(ctx, actor, "", in.Body.AssignmentPlan, registry.Edit{Reason: in.Body.Reason})
}

func (f *face) plan(ctx context.Context, actor registry.Actor, code string, p AssignmentPlan, e registry.Edit) (*one[Assignment], error) {
	body, err := p.body()
	if err != nil {
		return nil, err
	}
	it, err := f.registry.PlanAssignment(ctx, actor, code, body, e)
	if err != nil {
		return nil, err
	}
	v := showAssignment(it)
	return &one[Assignment]{ETag: quoteTag(it.Tag()), Location: "/v1/assignments/" + v.Code, Body: v}, nil
}

func (f *face) changeAssignment(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body AssignmentChange
}) (*one[Assignment], error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	before, err := seen[store.Assignment](ctx, f, actor, store.KindAssignment, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	return f.plan(ctx, actor, code, in.Body.AssignmentPlan, registry.Edit{After: before.Ref.Version, Reason: in.Body.Reason})
}

// An AssignmentAnalysis is where a campaign stands.
type AssignmentAnalysis struct {
	Plan   Assignment      `json:"plan"`
	Values []ValueStanding `json:"values"`
}

// A ValueStanding is where a campaign stands for one value.
type ValueStanding struct {
	Scale        string          `json:"scale"`
	Measurand    string          `json:"measurand"`
	Calibrations []string        `json:"calibrations" doc:"Versions of the calibrations that count."`
	Unready      []string        `json:"unready" doc:"Why further results do not count."`
	Value        *Decimal        `json:"value" doc:"What the campaign gives as it stands (‰); null with refusal."`
	U            *float64        `json:"u"`
	Result       *CampaignResult `json:"result"`
	Refusal      string          `json:"refusal,omitempty"`
	Circular     []string        `json:"circular" doc:"Paths by which the candidate anchors its own calibrations; such a value is refused."`
	Depth        int             `json:"depth" doc:"Values on the longest way down: 1 where every anchor's value comes from outside."`
	Realisations []Realised      `json:"realisations" doc:"The same data on other realisations of the scale."`
	Drawn        string          `json:"drawn,omitempty" doc:"The newest version of the value that rests on this campaign."`
}

// A Realised value is the same data on another realisation; nothing is stored.
type Realised struct {
	Scale    string   `json:"scale"`
	Value    *float64 `json:"value" doc:"‰; null with refusal."`
	U        *float64 `json:"u" doc:"Of the characterisation."`
	Sessions int      `json:"sessions"`
	LeftOut  []string `json:"left_out" doc:"Anchors without a value on the scale."`
	Refusal  string   `json:"refusal,omitempty"`
}

func (f *face) analyseAssignment(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[AssignmentAnalysis], error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	a, err := f.registry.AnalyseAssignment(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &plain[AssignmentAnalysis]{AssignmentAnalysis{showAssignment(a.Plan), convert(a.Values, showStanding)}}, nil
}

func showStanding(v registry.CampaignValue) ValueStanding {
	out := ValueStanding{Scale: v.Scale, Measurand: v.Measurand, Unready: convert(v.Unready, same), Refusal: v.Refusal, Circular: convert(v.Circular, same), Depth: v.Depth,
		Calibrations: convert(v.Members, func(r store.Ref) string { return versionText(r.Kind, r.Code, r.Version) }),
		Realisations: convert(v.Realisations, func(r registry.RealisedValue) Realised {
			out := Realised{Scale: r.Scale, Sessions: r.Sessions, LeftOut: convert(r.LeftOut, same), Refusal: r.Refusal}
			if r.Refusal == "" {
				out.Value, out.U = &r.Value, &r.StandardUncertainty
			}
			return out
		})}
	if v.Value != nil {
		value := Decimal(v.Value.Value)
		out.Value, out.U, out.Result = &value, &v.Value.StandardUncertainty, showCampaign(v.Value.Campaign)
	}
	if v.Drawn != nil {
		out.Drawn = versionText(store.KindValue, v.Drawn.Code, v.Drawn.Ref.Version)
	}
	return out
}

// A Conclusion draws up one value of a campaign.
type Conclusion struct {
	Scale        string       `json:"scale" maxLength:"40"`
	Measurand    string       `json:"measurand,omitempty" maxLength:"60"`
	ValidFrom    *time.Time   `json:"valid_from,omitempty" doc:"Since when the value holds."`
	Reason       string       `json:"reason,omitempty" maxLength:"4000" doc:"Asked for where the material has a value on the scale already."`
	Trend        *TrendAnswer `json:"trend,omitempty" doc:"Answers a significant slope of the stability study."`
	Deviation    string       `json:"deviation,omitempty" maxLength:"2000" doc:"Why the value is drawn up although a check of the plan fails."`
	StepDecision string       `json:"step_decision,omitempty" maxLength:"2000" doc:"What is done about a detected step from the predecessor."`
	Note         string       `json:"note,omitempty" maxLength:"2000"`
}

// A TrendAnswer says what was changed because the value drifts, and why.
type TrendAnswer struct {
	Change        string  `json:"change" enum:"shelf_life,storage,value_model"`
	ShelfLifeDays float64 `json:"shelf_life_days,omitempty" minimum:"0"`
	Reason        string  `json:"reason" minLength:"1" maxLength:"2000"`
}

// concludeAssignment draws up a value: the first of the material on the scale,
// or, with If-Match, a further version of it.
func (f *face) concludeAssignment(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body Conclusion
}) (*one[Value], error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	b := in.Body
	e := registry.Edit{Reason: b.Reason, ValidFrom: instantPointer(b.ValidFrom)}
	if in.IfMatch != "" && actor.May(registry.MayManage) { // the registry refuses everybody else in its own words
		plan, err := newestItem[store.Assignment](ctx, f, actor, store.KindAssignment, code)
		if err != nil {
			return nil, err
		}
		before, err := seen[store.Value](ctx, f, actor, store.KindValue, registry.ValueCode(plan.Value.Material, b.Scale, b.Measurand), in.MatchParam)
		if err != nil {
			return nil, err
		}
		e.After = before.Ref.Version
	}
	q := registry.ConcludeRequest{Scale: b.Scale, Measurand: b.Measurand, Deviation: b.Deviation, StepDecision: b.StepDecision, Note: b.Note}
	if b.Trend != nil {
		t := store.TrendAnswer(*b.Trend)
		q.Trend = &t
	}
	it, err := f.registry.ConcludeAssignment(ctx, actor, code, q, e)
	if err != nil {
		return nil, err
	}
	return valueAnswer(it), nil
}
