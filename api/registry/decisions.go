package registry

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// Acts are what can be decided about a version.
var Acts = []string{"submitted", "approved", "declined", "withdrawn"}

// A DecisionRequest says something about one version of a record.
type DecisionRequest struct {
	Act    string
	Reason string
	// Version decided on, and the number of decisions its author saw on it.
	Version, Seen int
	EffectAt      *store.Instant
	Meaning       string
}

// Decide records a decision on a version of a kind that needs one. An approval
// asks for the role and, where the rule says so, for another person than the author.
func (r *Registry) Decide(ctx context.Context, actor Actor, kind store.Kind, code string, q DecisionRequest) (store.State, error) {
	var state store.State
	var c complaints
	c.oneOf("body.decision", q.Act, Acts...)
	if (q.Act == "declined" || q.Act == "withdrawn") && strings.TrimSpace(q.Reason) == "" {
		c.add("body.reason", "nothing", "why it is %s", q.Act)
	}
	if q.Version < 1 {
		c.add("body.version", fmt.Sprint(q.Version), "the number of the version decided on")
	}
	if !kind.Decided() {
		c.add("kind", string(kind), "a kind of record that is decided on")
	}
	if err := Complain("this decision cannot be recorded", c); err != nil {
		return state, err
	}
	p := MayApprove
	if q.Act == "submitted" {
		p = MayFit
	}
	err := r.write(ctx, actor, p, func(ctx context.Context, tx *store.Tx) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: kind, Code: code}
		raw, err := tx.Version(ctx, key, q.Version)
		if err != nil {
			return missing(err, key)
		}
		if q.Act == "approved" {
			if err := mayApprove(ctx, &tx.View, actor, raw); err != nil {
				return err
			}
			tx.Guard(func(ctx context.Context, v *store.View) error { return restsOnApproved(ctx, v, raw) })
		}
		_, err = decide(ctx, tx, actor, raw, q)
		return err
	})
	if err != nil {
		return state, err
	}
	err = r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		raw, err := v.Version(ctx, store.Key{Laboratory: actor.Laboratory, Kind: kind, Code: code}, q.Version)
		if err != nil {
			return err
		}
		state, _, err = v.State(ctx, raw.Ref, store.Moment{})
		return err
	})
	return state, err
}

// steps says which acts may follow which state.
var steps = map[store.State][]string{
	store.Drafted:    {"submitted", "approved", "declined", "withdrawn"},
	store.Submitted:  {"approved", "declined", "withdrawn"},
	store.Approved:   {"withdrawn"},
	store.Superseded: {"withdrawn"},
	store.Declined:   {},
	store.Withdrawn:  {},
}

// decide queues the decision itself. Two simultaneous ones meet on the key of
// the decision's record, and the second is told what the first said.
func decide(ctx context.Context, tx *store.Tx, actor Actor, raw store.Raw, q DecisionRequest) (store.Ref, error) {
	state, decisions, err := tx.State(ctx, raw.Ref, store.Moment{})
	if err != nil {
		return store.Ref{}, err
	}
	if q.Seen != len(decisions) {
		return store.Ref{}, Refuse(Stale, "%s has %d decisions by now, not %d: read it again; the last one is %s",
			versionName(raw.Ref), len(decisions), q.Seen, lastDecision(decisions))
	}
	if !slices.Contains(steps[state], q.Act) {
		return store.Ref{}, Refuse(Conflict, "%s is %s and cannot be %s", versionName(raw.Ref), state, q.Act)
	}
	body := store.Decision{Act: q.Act, EffectAt: q.EffectAt, Meaning: q.Meaning}
	ref, err := tx.Append(ctx, store.Draft{Kind: store.KindDecision, Code: store.DecisionCode(raw.Ref), By: actor.Person,
		Reason: strings.TrimSpace(q.Reason), Inputs: []store.Input{{Part: "subject", Ref: raw.Ref}}, Value: body, After: &q.Seen})
	if errors.Is(err, store.ErrStale) || errors.Is(err, store.ErrConflict) {
		return ref, &Error{Meaning: Conflict, Message: fmt.Sprintf("somebody else decided on %s at the same moment: read it again", versionName(raw.Ref)), Err: err}
	}
	return ref, err
}

func lastDecision(decisions []store.Version[store.Decision]) string {
	if len(decisions) == 0 {
		return "none"
	}
	d := decisions[len(decisions)-1]
	return fmt.Sprintf("%s by %s at %s", d.Value.Act, d.RecordedBy, d.RecordedAt)
}

// versionName is a version as people write it: code, dot, number.
func versionName(ref store.Ref) string {
	return fmt.Sprintf("%s %s.%d", ref.Kind, CodeText(ref.Kind, ref.Code), ref.Version)
}

// mayApprove holds what must be true before a version is approved.
func mayApprove(ctx context.Context, v *store.View, actor Actor, raw store.Raw) error {
	if raw.Kind == store.KindRevision {
		return Refuse(Conflict, "%s is approved with the hash of the set it drafted, which was not given", versionName(raw.Ref))
	}
	second, err := needsSecondPerson(ctx, v, actor.Laboratory, raw)
	if err != nil {
		return err
	}
	if second && raw.RecordedBy == actor.Person {
		return Refuse(Refused, "%s was made by %s; approval needs another person", versionName(raw.Ref), actor.Person)
	}
	if err := restsOnApproved(ctx, v, raw); err != nil {
		return err
	}
	if raw.Kind == store.KindCalibration {
		return mayApproveCalibration(ctx, v, raw)
	}
	return nil
}

// restsOnApproved refuses a version that rests on one that is not approved itself.
func restsOnApproved(ctx context.Context, v *store.View, raw store.Raw) error {
	for _, in := range raw.Inputs {
		if !in.Kind.Decided() || in.Part == "subject" || in.Part == "amends" {
			continue
		}
		if in.Part == "revision" {
			if err := revisionApproved(ctx, v, raw.Ref, in.Ref); err != nil {
				return err
			}
			continue
		}
		state, _, err := v.State(ctx, in.Ref, store.Moment{})
		if err != nil {
			return err
		}
		switch state {
		case store.Approved, store.Superseded:
		default:
			return Refuse(Conflict, "%s rests on %s, which is %s; approve that first", versionName(raw.Ref), versionName(in.Ref), state)
		}
	}
	return nil
}

func needsSecondPerson(ctx context.Context, v *store.View, laboratory string, raw store.Raw) (bool, error) {
	switch raw.Kind {
	case store.KindCalibration, store.KindFinal, store.KindReport:
		method, err := methodBehind(ctx, v, raw)
		if err != nil || method == nil {
			return false, err
		}
		return method.Value.Approval.SecondPerson, nil
	case store.KindAssignment:
		return true, nil
	case store.KindValue:
		if slices.ContainsFunc(raw.Inputs, func(in store.Input) bool { return in.Part == partCampaign }) {
			return true, nil
		}
	}
	lab, err := newest[store.Laboratory](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindLaboratory, Code: laboratory})
	if err != nil {
		return false, err
	}
	return slices.Contains(lab.Value.SecondPerson, raw.Kind), nil
}

// methodBehind finds the method version that a calibration, or the first
// calibration of a final value or report, was made by.
func methodBehind(ctx context.Context, v *store.View, raw store.Raw) (*store.Version[store.Method], error) {
	for depth := 0; depth < 4; depth++ {
		next := -1
		for i, in := range raw.Inputs {
			if in.Kind == store.KindMethod {
				m, err := v.Version(ctx, in.Key, in.Ref.Version)
				if err != nil {
					return nil, err
				}
				method, err := store.Decode[store.Method](m)
				return &method, err
			}
			if next < 0 && (in.Kind == store.KindCalibration || in.Kind == store.KindFinal) {
				next = i
			}
		}
		if next < 0 {
			return nil, nil
		}
		var err error
		if raw, err = v.Version(ctx, raw.Inputs[next].Key, raw.Inputs[next].Ref.Version); err != nil {
			return nil, err
		}
	}
	return nil, nil
}

// onlyOne guards a new record that is found by a name: no other writer made
// one of that name meanwhile.
func onlyOne(tx *store.Tx, kind store.Kind, name string) {
	laboratory := tx.Laboratory()
	tx.Guard(func(ctx context.Context, v *store.View) error {
		keys, err := v.Resolve(ctx, laboratory, kind, name)
		if err == nil && len(keys) > 0 {
			err = Refuse(Conflict, "somebody else made %s %s at the same moment: look at it first", kind, store.FormatCode(keys[0].Code))
		}
		return err
	})
}

// CodeText is a record's code as people write it: generated ones in two groups
// of five, chosen ones as they are.
func CodeText(kind store.Kind, code string) string {
	if len(code) == 10 && store.CodeKind(code[0]) == kind {
		return store.FormatCode(code)
	}
	return code
}
