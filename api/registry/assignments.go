package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/assign"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// partCampaign is the part that a campaign's plan plays in the value it gave.
const partCampaign = "campaign"

// MaxPlanned bounds what a plan lists and counts.
const MaxPlanned = 500

// PlanAssignment states the plan of a value-assignment campaign: a draft
// (Edit.After 0 with code ""), or a further draft of it. Approval by another
// person freezes the plan; what is measured before does not count.
func (r *Registry) PlanAssignment(ctx context.Context, actor Actor, code string, plan store.Assignment, e Edit) (Item[store.Assignment], error) {
	var out Item[store.Assignment]
	var err error
	if code == "" {
		if code, err = store.NewCode(store.LetterAssignment, r.rand); err != nil {
			return out, err
		}
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindAssignment, Code: code}
	err = r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		body, inputs, err := completePlan(ctx, &tx.View, actor.Laboratory, plan)
		if err != nil {
			return err
		}
		if e.After > 0 {
			if err := notFrozen(ctx, &tx.View, key); err != nil {
				return err
			}
			tx.Guard(func(ctx context.Context, v *store.View) error { return notFrozen(ctx, v, key) })
		}
		_, err = appendVersion(ctx, tx, actor, key, e, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Assignment](ctx, r, actor, store.KindAssignment, code)
}

func notFrozen(ctx context.Context, v *store.View, key store.Key) error {
	raw, state, err := v.InForce(ctx, key, store.Moment{})
	if ignoreNotFound(err) != nil {
		return err
	}
	if err == nil && (state == store.Approved || state == store.Withdrawn) {
		return Refuse(Conflict, "the plan %s is %s and stays as it is; another plan is another campaign", versionName(raw.Ref), state)
	}
	return nil
}

// completePlan checks a plan, fills in what is left out, and names what it rests on.
func completePlan(ctx context.Context, v *store.View, laboratory string, plan store.Assignment) (store.Assignment, []store.Input, error) {
	var c complaints
	c.text("body.title", plan.Title, 200)
	c.text("body.material", plan.Material, 40)
	count := func(place string, n, least int) {
		if n < least || n > MaxPlanned {
			c.add(place, fmt.Sprint(n), "%d to %d", least, MaxPlanned)
		}
	}
	count("body.sessions", plan.Sessions, 1)
	count("body.days", plan.Days, 0)
	count("body.replicates", plan.Replicates, 1)
	count("body.quantities", len(plan.Quantities), 1)
	count("body.methods", len(plan.Methods), 1)
	count("body.units", len(plan.Units), 0)
	plan.Quantities = slices.Clone(plan.Quantities)
	for i := range plan.Quantities {
		checkQuantityPlan(&c, fmt.Sprintf("body.quantities[%d]", i), &plan.Quantities[i])
	}
	if err := Complain("this campaign cannot be planned", c); err != nil {
		return plan, nil, err
	}
	inputs, key, err := candidateInputs(ctx, v, laboratory, &plan)
	if err != nil {
		return plan, nil, err
	}
	plan.Material, plan.MaterialLaboratory = key.Code, key.Laboratory
	methods := map[string]store.Version[store.Method]{}
	for i, code := range plan.Methods {
		m, err := methodInForce(ctx, v, laboratory, code, store.Moment{})
		if err != nil {
			return plan, nil, placed(err, fmt.Sprintf("body.methods[%d]", i), code)
		}
		methods[m.Code] = m
		inputs = append(inputs, store.Input{Part: "method", Ref: m.Ref})
	}
	seen := map[store.Ref]bool{}
	for i := range plan.Quantities {
		q := &plan.Quantities[i]
		place := fmt.Sprintf("body.quantities[%d]", i)
		scale, err := lookup(ctx, v, laboratory, store.KindScale, q.Scale, 0, store.Moment{})
		if err != nil {
			return plan, nil, placed(err, place+".scale", q.Scale)
		}
		inputs = append(inputs, store.Input{Part: "scale", Ref: scale.Ref})
		measured := false
		for _, code := range plan.Methods {
			m := methods[code]
			for _, spec := range m.Value.Quantities {
				if spec.Scale != q.Scale || measurandOf(spec) != q.Measurand {
					continue
				}
				measured = true
				if b := spec.BetweenSession; b != nil && q.LongTerm == nil && q.Estimator != string(assign.NoBetween) {
					q.LongTerm = &store.LongTerm{Component: *b, Method: m.Code, Version: m.Ref.Version}
				}
			}
		}
		if !measured {
			c.add(place+".scale", quote(q.Scale), "a scale and measurand that one of the plan's methods measures")
		}
		for j, material := range slices.Concat(q.Anchors, q.Offered) {
			where := fmt.Sprintf("%s.anchors[%d]", place, j)
			if material == plan.Material {
				c.add(where, quote(material), "another material: the candidate cannot be an anchor of its own value")
				continue
			}
			value, err := valueInForce(ctx, v, laboratory, material, q.Scale, q.Measurand, store.Moment{})
			if ignoreNotFound(err) != nil {
				return plan, nil, err
			}
			if err != nil || value.State == store.Withdrawn {
				c.add(where, quote(material), "a material with a value in force on %s (%s)", q.Scale, q.Measurand)
				continue
			}
			if !seen[value.Ref] {
				seen[value.Ref] = true
				inputs = append(inputs, store.Input{Part: "expected anchor", Ref: value.Ref})
			}
		}
	}
	return plan, inputs, Complain("this campaign cannot be planned", c)
}

// candidateInputs finds the candidate, its predecessor and the units drawn. A
// material that follows another has that for its predecessor.
func candidateInputs(ctx context.Context, v *store.View, laboratory string, plan *store.Assignment) ([]store.Input, store.Key, error) {
	key, err := findMaterial(ctx, v, laboratory, plan.Material)
	if err != nil {
		return nil, key, placed(err, "body.material", plan.Material)
	}
	m, _, err := v.InForce(ctx, key, store.Moment{})
	if err != nil {
		return nil, key, missing(err, key)
	}
	inputs := []store.Input{{Part: "material", Ref: m.Ref}}
	candidate, err := store.Decode[store.Material](m)
	if err != nil {
		return nil, key, err
	}
	if plan.Predecessor == "" && candidate.Value.OverlapWaiver == "" {
		plan.Predecessor = candidate.Value.Succeeds
	}
	if plan.Predecessor != "" {
		before, err := findMaterial(ctx, v, laboratory, plan.Predecessor)
		if err != nil {
			return nil, key, placed(err, "body.predecessor", plan.Predecessor)
		}
		if before == key {
			return nil, key, Complain("this campaign cannot be planned", []Complaint{{Place: "body.predecessor", Found: quote(plan.Predecessor), Expected: "another material than the candidate"}})
		}
		p, _, err := v.InForce(ctx, before, store.Moment{})
		if err != nil {
			return nil, key, missing(err, before)
		}
		inputs = append(inputs, store.Input{Part: "predecessor", Ref: p.Ref})
	}
	type named struct{ place, code string }
	var units []named
	for i, code := range plan.Units {
		units = append(units, named{fmt.Sprintf("body.units[%d]", i), code})
	}
	for i, q := range plan.Quantities {
		for j, s := range q.Stability.Stored {
			if !slices.ContainsFunc(units, func(n named) bool { return n.code == s.Unit }) {
				units = append(units, named{fmt.Sprintf("body.quantities[%d].stability.stored[%d].unit", i, j), s.Unit})
			}
		}
	}
	for _, n := range units {
		place, code := n.place, n.code
		unit, err := newest[store.Unit](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: code})
		if err != nil {
			return nil, key, placed(err, place, code)
		}
		if unit.Value.Material != key.Code {
			return nil, key, Complain("this campaign cannot be planned", []Complaint{{Place: place, Found: "a unit of " + unit.Value.Material, Expected: "a unit of " + key.Code}})
		}
		inputs = append(inputs, store.Input{Part: "unit", Ref: unit.Ref})
	}
	return inputs, key, nil
}

// placed says where in a request something that is not there was named.
func placed(err error, place, found string) error {
	if !errors.Is(err, store.ErrNotFound) {
		return err
	}
	return Complain("this campaign cannot be planned", []Complaint{{Place: place, Found: quote(found), Expected: "something registered: " + err.Error()}})
}

var (
	estimators = []string{string(assign.PauleMandel), string(assign.DerSimonianLaird), string(assign.RestrictedLikelihood), string(assign.NoBetween)}
	weightings = []string{string(assign.PrivateWeights), string(assign.FullWeights)}
)

func checkQuantityPlan(c *complaints, place string, q *store.AssignmentQuantity) {
	q.Measurand = nameOr(q.Measurand, Total)
	q.Estimator = nameOr(q.Estimator, string(assign.PauleMandel))
	q.Weights = nameOr(q.Weights, string(assign.PrivateWeights))
	if q.Level == 0 {
		q.Level = 0.05
	}
	c.text(place+".scale", q.Scale, 40)
	c.oneOf(place+".estimator", q.Estimator, estimators...)
	c.oneOf(place+".weights", q.Weights, weightings...)
	if !(q.Level > 0 && q.Level < 0.5) {
		c.add(place+".level", fmt.Sprint(q.Level), "a level of significance above 0 and below 0.5")
	}
	if len(q.Anchors) == 0 || len(q.Anchors)+len(q.Offered) > 50 {
		c.add(place+".anchors", fmt.Sprint(len(q.Anchors)), "1 to 50 materials that pin the line")
	}
	for name, x := range map[string]float64{".planning.repeatability": q.Planning.Repeatability, ".planning.between_session": q.Planning.BetweenSession,
		".planning.between_units": q.Planning.BetweenUnits, ".acceptance.U": q.Acceptance.Expanded, ".acceptance.agreement_p": q.Acceptance.Agreement,
		".acceptance.session_effect": q.Acceptance.SessionEffect, ".stability.shelf_life_days": q.Stability.ShelfLifeDays} {
		if x < 0 || math.IsInf(x, 0) || math.IsNaN(x) {
			c.add(place+name, fmt.Sprint(x), "a number of 0 or more")
		}
	}
	if q.Planning.AnchorReplicates == 0 {
		q.Planning.AnchorReplicates = 3
	}
	if q.Homogeneity.NotNeeded == "" && (q.Homogeneity.Units < 2 || q.Homogeneity.Measurements < 2) {
		c.add(place+".homogeneity", fmt.Sprintf("%d units measured %d times", q.Homogeneity.Units, q.Homogeneity.Measurements),
			"two or more units measured twice or more, or why no study is needed (not_needed)")
	}
	if q.Stability.NotNeeded == "" && !(q.Stability.ShelfLifeDays > 0) {
		c.add(place+".stability.shelf_life_days", fmt.Sprint(q.Stability.ShelfLifeDays), "the shelf life to be stated, or why no study is needed (not_needed)")
	}
	if s := q.Stability; len(s.Stored) > MaxPlanned {
		c.add(place+".stability.stored", fmt.Sprint(len(s.Stored)), "at most %d units", MaxPlanned)
	}
	for i, s := range q.Stability.Stored {
		if !(s.Days >= 0) || math.IsInf(s.Days, 0) {
			c.add(fmt.Sprintf("%s.stability.stored[%d].days", place, i), fmt.Sprint(s.Days), "days of storage, 0 or more")
		}
	}
	if p := q.Stability.Prior; p != nil {
		if !(p.StandardUncertainty > 0) || math.IsInf(p.StandardUncertainty, 0) {
			c.add(place+".stability.prior.u", fmt.Sprint(p.StandardUncertainty), "u_lts for the shelf life, above 0")
		}
		if p.DegreesOfFreedom != nil && !(*p.DegreesOfFreedom >= 1) {
			c.add(place+".stability.prior.nu", fmt.Sprint(*p.DegreesOfFreedom), "degrees of freedom of 1 or more, or nothing when u is known")
		}
		c.text(place+".stability.prior.evidence", p.Evidence, 1000)
		if len(q.Stability.Days) == 0 && len(q.Stability.Stored) == 0 {
			c.add(place+".stability.days", "nothing", "the days of the study, so that it can be said when the prior uncertainty ends")
		}
	}
	if len(q.Stability.Days) > MaxPlanned || q.Homogeneity.Units > MaxPlanned || q.Homogeneity.Measurements > MaxPlanned {
		c.add(place, "a plan beyond bounds", "at most %d units, measurements and days", MaxPlanned)
	}
}

// policyOf is the policy that a plan fixed for one value.
func policyOf(q store.AssignmentQuantity) assign.Policy {
	p := assign.Policy{Estimator: assign.Estimator(q.Estimator), Weights: assign.Weights(q.Weights), Level: q.Level,
		Coverage: uncertain.Coverage{Probability: q.Probability, Factor: q.CoverageFactor}}
	if l := q.LongTerm; l != nil && l.StandardUncertainty > 0 {
		nu := math.Inf(1)
		if l.DegreesOfFreedom != nil {
			nu = *l.DegreesOfFreedom
		}
		g := uncertain.NewGroup(fmt.Sprintf("between_session:%s.%d/%s", l.Method, l.Version, q.Scale), l.StandardUncertainty*l.StandardUncertainty, nu)
		p.LongTerm = &g
	}
	return p
}

// quantityOf picks a value of a plan by scale and measurand.
func quantityOf(plan store.Assignment, scale, measurand string) (store.AssignmentQuantity, error) {
	measurand = nameOr(measurand, Total)
	var known []string
	for _, q := range plan.Quantities {
		if q.Scale == scale && q.Measurand == measurand {
			return q, nil
		}
		known = append(known, q.Scale+" ("+q.Measurand+")")
	}
	return store.AssignmentQuantity{}, Complain("this campaign has no such value", []Complaint{{Place: "body.scale", Found: quote(scale + " (" + measurand + ")"), Expected: "one of the plan: " + strings.Join(known, ", ")}})
}
