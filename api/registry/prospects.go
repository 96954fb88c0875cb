package registry

import (
	"context"
	"fmt"
	"math/rand/v2"
	"slices"

	"deltamoor/calib/assign"
	"deltamoor/store"
)

// A PlanProspect is what a plan can be expected to give for one value, and what
// each change of it buys.
type PlanProspect struct {
	Scale, Measurand string
	Prospect         assign.Prospect
	// Options are changes of the plan, what lowers U most first.
	Options []assign.Option
}

// Prospects evaluates a plan that is stored, by its planning values and the
// anchors' values in force now.
func (r *Registry) Prospects(ctx context.Context, actor Actor, code string) ([]PlanProspect, error) {
	item, err := One[store.Assignment](ctx, r, actor, store.KindAssignment, code, 0, store.Moment{})
	if err != nil {
		return nil, err
	}
	return r.ProspectsOf(ctx, actor, item.Value)
}

// ProspectsOf evaluates a plan without storing anything.
func (r *Registry) ProspectsOf(ctx context.Context, actor Actor, plan store.Assignment) ([]PlanProspect, error) {
	plans, err := r.engineerPlans(ctx, actor, plan)
	if err != nil {
		return nil, err
	}
	var out []PlanProspect
	for _, p := range plans {
		prospect, err := assign.Evaluate(p.plan)
		if err != nil {
			return nil, Refuse(Invalid, "the plan for %s cannot be evaluated: %v", p.scale, err)
		}
		options, err := assign.Options(p.plan)
		if err != nil {
			return nil, Refuse(Invalid, "changes of the plan for %s cannot be evaluated: %v", p.scale, err)
		}
		out = append(out, PlanProspect{Scale: p.scale, Measurand: p.measurand, Prospect: *prospect, Options: options})
	}
	return out, nil
}

// MaxTrials bounds one simulation.
const MaxTrials = 20_000

// A PlanSimulation is what many runs of a plan gave for one value.
type PlanSimulation struct {
	Scale, Measurand string
	Seed             uint64
	assign.Simulation
}

// SimulateAssignment runs a plan that is stored many times, with its planning
// values as the truth. One seed gives one answer.
func (r *Registry) SimulateAssignment(ctx context.Context, actor Actor, code string, trials int, seed uint64) ([]PlanSimulation, error) {
	item, err := One[store.Assignment](ctx, r, actor, store.KindAssignment, code, 0, store.Moment{})
	if err != nil {
		return nil, err
	}
	return r.SimulatePlan(ctx, actor, item.Value, trials, seed)
}

// SimulatePlan runs a plan many times without storing anything.
func (r *Registry) SimulatePlan(ctx context.Context, actor Actor, plan store.Assignment, trials int, seed uint64) ([]PlanSimulation, error) {
	if trials < 100 || trials > MaxTrials {
		return nil, Complain("this plan cannot be simulated", []Complaint{{Place: "query.trials", Found: fmt.Sprint(trials), Expected: fmt.Sprintf("100 to %d campaigns", MaxTrials)}})
	}
	plans, err := r.engineerPlans(ctx, actor, plan)
	if err != nil {
		return nil, err
	}
	var out []PlanSimulation
	for i, p := range plans {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		s, err := assign.Simulate(p.plan, trials, rand.New(rand.NewPCG(seed, uint64(i))))
		if err != nil {
			return nil, Refuse(Invalid, "the plan for %s cannot be simulated: %v", p.scale, err)
		}
		out = append(out, PlanSimulation{Scale: p.scale, Measurand: p.measurand, Seed: seed, Simulation: *s})
	}
	return out, nil
}

// A plannedValue is the engine's input of one value of a plan.
type plannedValue struct {
	scale, measurand string
	plan             assign.Plan
}

// engineerPlans completes a plan and states it to the engine, value by value.
func (r *Registry) engineerPlans(ctx context.Context, actor Actor, plan store.Assignment) ([]plannedValue, error) {
	var out []plannedValue
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		body, _, err := completePlan(ctx, v, actor.Laboratory, plan)
		if err != nil {
			return err
		}
		for _, q := range body.Quantities {
			p, err := engineerPlan(ctx, v, actor.Laboratory, body, q)
			if err != nil {
				return err
			}
			out = append(out, plannedValue{q.Scale, q.Measurand, p})
		}
		return nil
	})
	return out, err
}

func engineerPlan(ctx context.Context, v *store.View, laboratory string, plan store.Assignment, q store.AssignmentQuantity) (assign.Plan, error) {
	policy := policyOf(q)
	p := assign.Plan{Candidate: q.Planning.Value, Sessions: plan.Sessions, Replicates: plan.Replicates, AnchorReplicates: q.Planning.AnchorReplicates,
		Repeatability: q.Planning.Repeatability, BetweenSession: q.Planning.BetweenSession, LongTerm: policy.LongTerm, BetweenUnit: q.Planning.BetweenUnits, Policy: policy}
	if q.Homogeneity.NotNeeded == "" {
		p.Units, p.UnitMeasurements = q.Homogeneity.Units, q.Homogeneity.Measurements
	}
	if q.Stability.NotNeeded == "" {
		p.StabilityTimes, p.StabilityMeasurements, p.ShelfLife = q.Stability.Days, 1, q.Stability.ShelfLifeDays
		if len(p.StabilityTimes) == 0 { // units in storage, each measured in every session
			for _, s := range q.Stability.Stored {
				p.StabilityTimes = append(p.StabilityTimes, s.Days)
			}
			p.StabilityMeasurements = plan.Sessions
		}
	}
	groups := map[string]bool{}
	for i, material := range slices.Concat(q.Anchors, q.Offered) {
		value, err := valueInForce(ctx, v, laboratory, material, q.Scale, q.Measurand, store.Moment{})
		if err != nil {
			return p, err
		}
		n, gs, err := numberOf(value.Version)
		if err != nil {
			return p, err
		}
		for _, g := range gs {
			if !groups[g.ID] {
				groups[g.ID] = true
				p.Groups = append(p.Groups, g)
			}
		}
		if i < len(q.Anchors) {
			p.Anchors = append(p.Anchors, assign.PlannedAnchor{Name: material, Value: n})
		} else {
			p.Offered = append(p.Offered, assign.PlannedAnchor{Name: material, Value: n})
		}
	}
	return p, nil
}
