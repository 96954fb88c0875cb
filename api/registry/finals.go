package registry

import (
	"context"
	"fmt"
	"slices"
	"strconv"
	"strings"

	"deltamoor/calib/assign"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// The rules by which a final value comes from sessions; a method fixes one.
const (
	// RuleOne takes the result of one accepted session; more than one is refused.
	RuleOne = "one accepted session"
	// RuleAll takes every accepted session, weighted by private variance.
	RuleAll = "all accepted sessions"
)

// A FinalRequest asks for the final value of a sample on a scale.
type FinalRequest struct {
	Sample, Scale, Measurand string
	Reason                   string
	After                    int // the newest version the author saw; 0 for a first
}

// FinalValue draws up the final value of a sample by its method's rule, from
// every approved calibration of an accepted session that has a result for it:
// none is picked or dropped for its value.
func (r *Registry) FinalValue(ctx context.Context, actor Actor, q FinalRequest) (Item[store.Final], error) {
	var out Item[store.Final]
	if q.Measurand == "" {
		q.Measurand = Total
	}
	var code string
	err := r.write(ctx, actor, MayFit, func(ctx context.Context, tx *store.Tx) error {
		v := &tx.View
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindSample, Code: q.Sample}
		sample, err := newest[store.Sample](ctx, v, key)
		if err != nil {
			return err
		}
		members, unready, err := acceptedResults(ctx, v, actor.Laboratory, q.Sample, q.Scale, q.Measurand)
		if err != nil {
			return err
		}
		if len(members) == 0 {
			why := "it has not been measured"
			if len(unready) > 0 {
				why = short(unready, 5)
			}
			return Refuse(Conflict, "sample %s has no accepted, approved result on %s: %s", store.FormatCode(q.Sample), q.Scale, why)
		}
		body := store.Final{Sample: q.Sample, Quantity: members[0].calibration.Value.Quantity, Scale: q.Scale, Measurand: q.Measurand}
		inputs := []store.Input{{Part: "sample", Ref: sample.Ref}}
		rule, required, err := ruleOf(ctx, v, members)
		if err != nil {
			return err
		}
		body.Rule = rule
		if len(members) < required {
			return Refuse(Conflict, "sample %s has %d accepted sessions on %s; its method asks for %d", store.FormatCode(q.Sample), len(members), q.Scale, required)
		}
		if rule == RuleOne && len(members) > 1 {
			return Refuse(Conflict, "sample %s has %d accepted sessions on %s, and its method's rule is %q: state a version of the method with the rule %q, or the outcome of a session that should not count",
				store.FormatCode(q.Sample), len(members), q.Scale, RuleOne, RuleAll)
		}
		for _, m := range members {
			inputs = append(inputs, store.Input{Part: "member", Ref: m.calibration.Ref}, store.Input{Part: "outcome", Ref: m.outcome})
		}
		if err := combineMembers(ctx, v, members, &body); err != nil {
			return err
		}
		name := store.FinalName(q.Sample, q.Scale, q.Measurand)
		keys, err := v.Resolve(ctx, actor.Laboratory, store.KindFinal, name)
		if err != nil {
			return err
		}
		if len(keys) > 0 {
			code = keys[0].Code
			if q.After == 0 {
				return Refuse(Conflict, "sample %s has the final value %s on %s already; a change is a further version of it", store.FormatCode(q.Sample), store.FormatCode(code), q.Scale)
			}
		} else {
			if code, err = r.draw(ctx, v, actor.Laboratory, 'V'); err != nil {
				return err
			}
			onlyOne(tx, store.KindFinal, name)
		}
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindFinal, Code: code}, Edit{After: q.After, Reason: q.Reason}, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Final](ctx, r, actor, store.KindFinal, code)
}

// A member is one session's result on its way into a combined value.
type member struct {
	calibration store.Version[store.Calibration]
	line        int
	outcome     store.Ref
}

// acceptedResults finds every result of a subject that may enter a combined
// value, one for each session, and says why others may not.
func acceptedResults(ctx context.Context, v *store.View, laboratory, subject, scale, measurand string) (members []member, unready []string, err error) {
	seen := map[string]bool{}
	for after := ""; ; {
		rows, next, err := v.Results(ctx, store.ResultQuery{Laboratory: laboratory, Subject: subject, Scale: scale, Measurand: measurand, After: after, Limit: MaxPage})
		if err != nil {
			return nil, nil, err
		}
		for _, row := range rows {
			if seen[row.Calibration] {
				continue
			}
			seen[row.Calibration] = true
			more, why, err := acceptedIn(ctx, v, laboratory, row.Calibration, subject)
			if err != nil {
				return nil, nil, err
			}
			if why != "" {
				unready = append(unready, why)
			}
			members = append(members, more...)
		}
		if after = next; after == "" {
			return members, unready, nil
		}
	}
}

// readingsBehind are the stored readings that a result's readings stand for.
func readingsBehind(c store.Calibration, heads []int) []int {
	if len(c.Means) == 0 {
		return heads
	}
	var out []int
	for _, n := range heads {
		i := slices.IndexFunc(c.Means, func(m store.MeanReading) bool { return m.Number == n })
		if i < 0 {
			out = append(out, n)
		} else {
			out = append(out, c.Means[i].Readings...)
		}
	}
	return out
}

// acceptedIn finds the results of a subject in one calibration that may enter a
// combined value, and says why others may not; "" where all may.
func acceptedIn(ctx context.Context, v *store.View, laboratory, calibration, subject string) (members []member, unready string, err error) {
	raw, state, err := v.InForce(ctx, store.Key{Laboratory: laboratory, Kind: store.KindCalibration, Code: calibration}, store.Moment{})
	if ignoreNotFound(err) != nil {
		return nil, "", err
	}
	if err != nil || state != store.Approved {
		return nil, fmt.Sprintf("calibration %s is not approved", store.FormatCode(calibration)), nil
	}
	c, err := store.Decode[store.Calibration](raw)
	if err != nil {
		return nil, "", err
	}
	outcome, err := newest[store.Outcome](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindOutcome, Code: OutcomeCode(c.Value.Session, c.Value.Quantity)})
	if ignoreNotFound(err) != nil {
		return nil, "", err
	}
	if err != nil {
		return nil, fmt.Sprintf("the outcome of session %s for %s is not stated", store.FormatCode(c.Value.Session), c.Value.Quantity), nil
	}
	if outcome.Value.Outcome == "rejected" {
		return nil, fmt.Sprintf("session %s was rejected for %s", store.FormatCode(c.Value.Session), c.Value.Quantity), nil
	}
	for i, res := range c.Value.Results {
		if res.Subject != subject {
			continue
		}
		if outcome.Value.Outcome == "in part" && !within(readingsBehind(c.Value, res.Readings), outcome.Value.From, outcome.Value.To) {
			unready = fmt.Sprintf("session %s is accepted from reading %d to %d only", store.FormatCode(c.Value.Session), outcome.Value.From, outcome.Value.To)
			continue
		}
		members = append(members, member{calibration: c, line: i, outcome: outcome.Ref})
	}
	return members, unready, nil
}

func within(readings []int, from, to int) bool {
	for _, n := range readings {
		if n < from || n > to {
			return false
		}
	}
	return true
}

func ruleOf(ctx context.Context, v *store.View, members []member) (rule string, required int, err error) {
	for _, m := range members {
		raw := store.Raw{Ref: m.calibration.Ref, Inputs: m.calibration.Inputs}
		method, err := methodBehind(ctx, v, raw)
		if err != nil || method == nil {
			return "", 0, err
		}
		this := nameOr(method.Value.Final.Rule, RuleOne)
		if rule != "" && this != rule {
			return "", 0, Refuse(Conflict, "the sessions' methods have different rules for a final value: %q and %q", rule, this)
		}
		rule, required = this, max(required, method.Value.Final.SessionsRequired, 1)
	}
	return rule, required, nil
}

// combineMembers fills in a final value from its members. A single member
// keeps its own value and coverage; several are combined with every shared
// source counted once.
func combineMembers(ctx context.Context, v source, members []member, body *store.Final) error {
	if len(members) == 1 {
		res := members[0].calibration.Value.Results[members[0].line]
		body.Members = []store.FinalMember{{Input: 1, Line: members[0].line, Weight: 1}}
		body.Value, body.StandardUncertainty, body.K, body.Expanded, body.Probability, body.EffectiveDF =
			res.Value, res.StandardUncertainty, res.K, res.Expanded, res.Probability, res.EffectiveDF
		body.Flags = memberFlags(members[0])
		return nil
	}
	combined, groups, err := combineAssigned(ctx, v, members)
	if err != nil {
		return err
	}
	body.Members = nil
	for i, m := range members {
		body.Members = append(body.Members, store.FinalMember{Input: 1 + 2*i, Line: m.line, Weight: combined.Weights[i]})
		body.Flags = append(body.Flags, memberFlags(m)...)
	}
	limits := members[0].calibration.Value.Limits
	expanded, err := uncertain.Expand(combined.Value, groups, uncertain.Coverage{Probability: limits.Probability, Factor: limits.CoverageFactor})
	if err != nil {
		return err
	}
	body.Value, body.StandardUncertainty = combined.Value.Value, combined.Value.StandardUncertainty()
	body.K, body.Expanded, body.Probability, body.EffectiveDF = expanded.CoverageFactor, expanded.U, expanded.Probability, finite(expanded.DegreesOfFreedom)
	return nil
}

func memberFlags(m member) []string { return m.calibration.Value.Results[m.line].Flags }

func memberNumbers(ctx context.Context, v source, members []member) ([]uncertain.Number, []uncertain.Group, error) {
	var numbers []uncertain.Number
	var groups []uncertain.Group
	seen := map[string]bool{}
	for _, m := range members {
		n, gs, err := resultNumber(ctx, v, m.calibration, m.line)
		if err != nil {
			return nil, nil, err
		}
		numbers = append(numbers, n)
		for _, g := range gs {
			if !seen[g.ID] {
				seen[g.ID] = true
				groups = append(groups, g)
			}
		}
	}
	return numbers, groups, nil
}

// An AssignRequest gives a material a value from the results it had in
// accepted sessions, where it was measured as an unknown.
type AssignRequest struct {
	Material, Scale, Measurand string
	Note                       string
}

// AssignValue states the value of a material from every accepted session that
// measured it as an unknown on the scale. The value is not a new source: it
// keeps the sources of its sessions and so stays correlated with its anchors.
func (r *Registry) AssignValue(ctx context.Context, actor Actor, q AssignRequest, e Edit) (Item[store.Value], error) {
	var out Item[store.Value]
	if e.ValidFrom == nil {
		return out, Complain("this value cannot be assigned", []Complaint{{Place: "body.valid_from", Found: "nothing", Expected: "since when the value holds (RFC 3339)"}})
	}
	var code string
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		inputs, body, err := valueOf(ctx, &tx.View, actor.Laboratory, q.Material, q.Scale, q.Measurand)
		if err != nil {
			return err
		}
		members, unready, err := acceptedResults(ctx, &tx.View, actor.Laboratory, body.Material, body.Scale, body.Measurand)
		if err != nil {
			return err
		}
		if len(members) == 0 {
			return Refuse(Conflict, "material %s has no accepted, approved result on %s: %s", body.Material, body.Scale, nameOr(short(unready, 5), "it was not measured as an unknown"))
		}
		for _, m := range members {
			for _, in := range m.calibration.Inputs {
				if in.Part == "anchor" && in.Code == ValueCode(body.Material, body.Scale, body.Measurand) {
					return Refuse(Invalid, "circular: %s uses %s as an anchor, so it cannot help to assign its value", versionName(m.calibration.Ref), body.Material)
				}
			}
			inputs = append(inputs, store.Input{Part: "member", Ref: m.calibration.Ref}, store.Input{Part: "outcome", Ref: m.outcome})
		}
		combined, groups, err := combineAssigned(ctx, &tx.View, members)
		if err != nil {
			return err
		}
		fillAssigned(&body, combined, groups, members)
		body.Note = q.Note
		code = ValueCode(body.Material, body.Scale, body.Measurand)
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: code}, e, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Value](ctx, r, actor, store.KindValue, code)
}

func combineAssigned(ctx context.Context, v source, members []member) (assign.Combination, []uncertain.Group, error) {
	numbers, groups, err := memberNumbers(ctx, v, members)
	if err != nil {
		return assign.Combination{}, nil, err
	}
	combined, err := assign.Combine(numbers)
	return combined, groups, err
}

func fillAssigned(body *store.Value, combined assign.Combination, groups []uncertain.Group, members []member) {
	body.Value = store.Decimal(strconv.FormatFloat(combined.Value.Value, 'f', -1, 64))
	body.StandardUncertainty = combined.Value.StandardUncertainty()
	body.Basis, body.Rule = "assignment", "weighted mean of accepted sessions, weights by private variance; all sources kept"
	stateNumber(body, combined.Value, groups)
	var sessions []string
	for _, m := range members {
		sessions = append(sessions, store.FormatCode(m.calibration.Value.Session))
	}
	body.Evidence = fmt.Sprintf("%d sessions: %s", len(sessions), strings.Join(sessions, ", "))
}

// stateNumber stores the decomposition of a value that was made in the
// registry, with the variance groups that it names.
func stateNumber(body *store.Value, n uncertain.Number, groups []uncertain.Group) {
	used := map[string]bool{}
	for _, t := range n.Terms {
		body.Sources = append(body.Sources, store.Source{ID: t.ID, Kind: string(t.Kind), U: t.U, Sensitivity: t.Sensitivity, Group: t.Group,
			Per: t.Per, Shares: each(t.Shares, func(h uncertain.Share) store.Share { return store.Share(h) })})
		used[t.Group] = true
		for _, h := range t.Shares {
			used[h.Group] = true
		}
	}
	for _, g := range groups {
		if used[g.ID] {
			body.Groups = append(body.Groups, store.Group(g))
		}
	}
}
