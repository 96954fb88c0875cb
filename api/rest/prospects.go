package rest

import (
	"bytes"
	"context"
	"errors"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/calib/assign"
	"deltamoor/store"
)

// A Prospect is what a plan can be expected to give. All u and U in ‰.
type Prospect struct {
	U          float64 `json:"u"`
	Expanded   float64 `json:"U"`
	K          float64 `json:"k"`
	P          float64 `json:"p"`
	USessions  float64 `json:"u_sessions" doc:"The part that more sessions reduce."`
	UAnchors   float64 `json:"u_anchors"`
	UBetween   float64 `json:"u_bb" doc:"Homogeneity."`
	ULongTerm  float64 `json:"u_lts" doc:"Stability."`
	UUnreduced float64 `json:"u_unreduced" doc:"What no number of sessions goes below."`
}

func showProspect(p assign.Prospect) Prospect {
	return Prospect{U: p.StandardUncertainty, Expanded: p.Expanded.U, K: p.Expanded.CoverageFactor, P: p.Expanded.Probability, USessions: p.SessionUncertainty,
		UAnchors: p.AnchorUncertainty, UBetween: p.HomogeneityUncertainty, ULongTerm: p.StabilityUncertainty, UUnreduced: p.Unreduced}
}

// A PlanOption is one change of a plan and what it buys.
type PlanOption struct {
	Change   string   `json:"change"`
	Gain     float64  `json:"gain_U" doc:"How much U falls (‰)."`
	Prospect Prospect `json:"prospect"`
}

// A PlanProspect is the prospect of one value with its options.
type PlanProspect struct {
	Scale     string       `json:"scale"`
	Measurand string       `json:"measurand"`
	Prospect  Prospect     `json:"prospect"`
	Options   []PlanOption `json:"options" doc:"What lowers U most first."`
}

// PlanProspects are the prospects of a plan's values.
type PlanProspects struct {
	Values []PlanProspect `json:"values"`
}

func showProspects(list []registry.PlanProspect) PlanProspects {
	return PlanProspects{convert(list, func(p registry.PlanProspect) PlanProspect {
		return PlanProspect{p.Scale, p.Measurand, showProspect(p.Prospect), convert(p.Options, func(o assign.Option) PlanOption {
			return PlanOption{o.Change, o.GainU, showProspect(o.Prospect)}
		})}
	})}
}

// PlanSheetForm chooses between JSON and the plan as a page.
type PlanSheetForm struct {
	Format string `query:"format" enum:"json,html" doc:"html is the plan with its prospects as a page for printing; the header Accept does the same."`
	LanguageParam
}

// Resolve settles the form.
func (p *PlanSheetForm) Resolve(ctx huma.Context) []error {
	if p.Format == "" && accepted(ctx.Header("Accept"), "application/json", "text/html") == "text/html" {
		p.Format = "html"
	}
	return nil
}

func (f *face) prospects(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	PlanSheetForm
}) (*answer, error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	list, err := f.registry.Prospects(ctx, actor, code)
	if in.Format != "html" {
		if err != nil {
			return nil, err
		}
		return jsonAnswer(showProspects(list), 200, nil)
	}
	sheet := exchange.PlanSheet{Laboratory: actor.Laboratory, Prospects: list}
	var refusal *registry.Error
	if errors.As(err, &refusal) && refusal.Meaning == registry.Invalid {
		sheet.Without, err = refusal.Message, nil
	}
	if err != nil {
		return nil, err
	}
	if sheet.Plan, err = registry.One[store.Assignment](ctx, f.registry, actor, store.KindAssignment, code, 0, store.Moment{}); err != nil {
		return nil, err
	}
	if sheet.Handling, err = f.registry.Handling(ctx, actor, sheet.Plan.Value.Material, in.Language); err != nil {
		return nil, err
	}
	var b bytes.Buffer
	if err := exchange.WritePlanPage(&b, sheet); err != nil {
		return nil, err
	}
	return pageAnswer(b.Bytes()), nil
}

func (f *face) evaluatePlan(ctx context.Context, actor registry.Actor, in *struct{ Body AssignmentPlan }) (*plain[PlanProspects], error) {
	body, err := in.Body.body()
	if err != nil {
		return nil, err
	}
	list, err := f.registry.ProspectsOf(ctx, actor, body)
	if err != nil {
		return nil, err
	}
	return &plain[PlanProspects]{showProspects(list)}, nil
}

// SimulationParams choose a simulation.
type SimulationParams struct {
	Trials int    `query:"trials" minimum:"100" maximum:"20000" doc:"Campaigns to simulate; left out: 2000."`
	Seed   uint64 `query:"seed" doc:"One seed gives one answer; left out: 1."`
}

func (p SimulationParams) complete() (trials int, seed uint64) {
	trials, seed = p.Trials, p.Seed
	if trials == 0 {
		trials = 2000
	}
	if seed == 0 {
		seed = 1
	}
	return trials, seed
}

// A PlanSimulation is what many runs of a plan gave for one value, with its
// planning values as the truth. Parts are of 1.
type PlanSimulation struct {
	Scale                    string  `json:"scale"`
	Measurand                string  `json:"measurand"`
	Trials                   int     `json:"trials"`
	Seed                     uint64  `json:"seed"`
	MedianExpanded           float64 `json:"U_median" doc:"Of U of the certificate (‰)."`
	LowExpanded              float64 `json:"U_5" doc:"5 % point."`
	HighExpanded             float64 `json:"U_95" doc:"95 % point."`
	MedianU                  float64 `json:"u_median"`
	CharacterisationCoverage float64 `json:"coverage_characterisation" doc:"Part of the campaigns whose U of the characterisation held the lot's true value."`
	CertificateCoverage      float64 `json:"coverage_certificate" doc:"Part of the campaigns whose U held that of one unit."`
	Disagreeing              float64 `json:"disagreeing" doc:"Part with sessions that disagree by Q."`
	NoBetween                float64 `json:"no_between" doc:"Part with an estimated between-session effect of 0."`
	Floors                   float64 `json:"floors" doc:"Part whose homogeneity is the floor."`
	Trends                   float64 `json:"trends" doc:"Part with a significant slope though nothing drifts: a decision blocked."`
}

// PlanSimulations are those of a plan's values.
type PlanSimulations struct {
	Values []PlanSimulation `json:"values"`
}

func showSimulations(list []registry.PlanSimulation) *plain[PlanSimulations] {
	return &plain[PlanSimulations]{PlanSimulations{convert(list, func(s registry.PlanSimulation) PlanSimulation {
		return PlanSimulation{s.Scale, s.Measurand, s.Trials, s.Seed, s.MedianU, s.LowU, s.HighU, s.MedianU1, s.CharacterisationCoverage, s.CertificateCoverage, s.Disagreeing, s.NoBetween, s.Floors, s.Trends}
	})}}
}

func (f *face) simulation(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	SimulationParams
}) (*plain[PlanSimulations], error) {
	code, err := assignmentKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	trials, seed := in.complete()
	list, err := f.registry.SimulateAssignment(ctx, actor, code, trials, seed)
	if err != nil {
		return nil, err
	}
	return showSimulations(list), nil
}

func (f *face) simulatePlan(ctx context.Context, actor registry.Actor, in *struct {
	SimulationParams
	Body AssignmentPlan
}) (*plain[PlanSimulations], error) {
	body, err := in.Body.body()
	if err != nil {
		return nil, err
	}
	trials, seed := in.complete()
	list, err := f.registry.SimulatePlan(ctx, actor, body, trials, seed)
	if err != nil {
		return nil, err
	}
	return showSimulations(list), nil
}
