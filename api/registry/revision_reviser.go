package registry

import (
	"context"
	"errors"
	"fmt"
	"slices"

	"deltamoor/store"
)

// A reviser draws versions up again, in the order of the ledger, so that what a
// version rests on is drawn up before it.
type reviser struct {
	*changes
	v   *store.View
	src source // what fits read: v, or drafts in memory beside it
	// revision is what every draft names; by and reason stand on them.
	revision   store.Ref
	by, reason string
	// put keeps a draft as the next version of its record.
	put func(ctx context.Context, d store.Draft) (store.Ref, error)
	// drafted finds the draft of a record that this revision made; ErrNotFound: none.
	drafted func(ctx context.Context, key store.Key, validFrom *store.Instant) (store.Ref, error)
	// untold are versions that could not be drawn up again, without hashes.
	untold map[store.Ref]string
	from   map[store.Ref]*store.Instant // valid_from of values met
}

// A revised is what became of one version.
type revised struct {
	draft   store.Ref // zero: none
	touched bool
	untold  string
}

// replace gives the replacement of a value.
func (rv *reviser) replace(ctx context.Context, value store.Ref, started *store.Instant) (replacement, error) {
	if change := rv.values[value.Bare()]; change != nil && change.applies(started) {
		switch {
		case change.Withdrawn:
			return replacement{dropped: true}, nil
		case change.New != nil:
			return replacement{ref: *change.New}, nil
		}
		ref, err := rv.drafted(ctx, store.Key{Laboratory: rv.laboratory, Kind: store.KindValue, Code: value.Code}, change.validFrom())
		return replacement{ref: ref}, err
	}
	if why := rv.untold[value.Bare()]; why != "" {
		return replacement{untold: why}, nil
	}
	if value.Laboratory != rv.laboratory {
		return replacement{same: true}, nil
	}
	from, known := rv.from[value.Bare()]
	if !known {
		raw, err := rv.src.Version(ctx, value.Key, value.Version)
		if err != nil {
			return replacement{}, err
		}
		from = raw.ValidFrom
		rv.from[value.Bare()] = from
	}
	ref, err := rv.drafted(ctx, value.Key, from)
	if errors.Is(err, store.ErrNotFound) || err == nil && ref.Version <= value.Version {
		return replacement{same: true}, nil
	}
	return replacement{ref: ref}, err
}

// revise draws up one version again: a calibration or final value in force, or
// an assigned value. Others are left as they are.
func (rv *reviser) revise(ctx context.Context, a store.AffectedVersion) (revised, error) {
	var out revised
	var err error
	switch a.Kind {
	case store.KindCalibration:
		out, err = rv.calibration(ctx, a.Ref)
	case store.KindValue:
		if rv.values[a.Ref.Bare()] != nil {
			return out, nil
		}
		out, err = rv.value(ctx, a.Ref)
	case store.KindFinal:
		out, err = rv.final(ctx, a.Ref)
	}
	if out.untold != "" {
		rv.untold[a.Ref.Bare()] = out.untold
	}
	if err != nil {
		err = fmt.Errorf("draw up %s again: %w", versionName(a.Ref), err)
	}
	return out, err
}

// frozen is the moment the affected set is frozen at.
func (rv *reviser) frozen() store.Moment { return store.Moment{AsOf: &rv.body.FrozenAt} }

func (rv *reviser) inForce(ctx context.Context, ref store.Ref) (bool, error) {
	raw, state, err := rv.v.InForce(ctx, ref.Key, rv.frozen())
	if errors.Is(err, store.ErrNotFound) {
		return false, nil
	}
	return state == store.Approved && raw.Ref == ref, err
}

func (rv *reviser) state(ctx context.Context, of store.Raw, inputs []store.Input, body store.Body) (store.Ref, error) {
	return rv.put(ctx, store.Draft{Kind: of.Kind, Code: of.Code, By: rv.by, Reason: rv.reason, ValidFrom: of.ValidFrom,
		Inputs: append(inputs, store.Input{Part: "revision", Ref: rv.revision}), Value: body})
}

// nextOf is the reference that the next version of a record will have, without hash.
func (rv *reviser) nextOf(ctx context.Context, key store.Key) (store.Ref, error) {
	raw, err := rv.v.Newest(ctx, key)
	return store.Ref{Key: key, Version: raw.Ref.Version + 1}, err
}

func (rv *reviser) calibration(ctx context.Context, ref store.Ref) (revised, error) {
	var out revised
	if is, err := rv.inForce(ctx, ref); err != nil || !is {
		return out, err
	}
	raw, err := rv.v.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return out, err
	}
	of, err := store.Decode[store.Calibration](raw)
	if err != nil {
		return out, err
	}
	next, touched, untold, err := rv.again(ctx, rv.src, of, rv.replace)
	out.touched, out.untold = touched, untold
	if err != nil || !touched || untold != "" {
		return out, err
	}
	if next.Ref, err = rv.nextOf(ctx, ref.Key); err != nil {
		return out, err
	}
	body, untold, err := refit(ctx, rv.src, next)
	if out.untold = untold; err != nil || untold != "" {
		return out, err
	}
	out.draft, err = rv.state(ctx, raw, next.Inputs, body)
	return out, err
}

// members replaces the calibrations among inputs by their drafts, or, where one
// was superseded since, by the version in force.
func (rv *reviser) members(ctx context.Context, inputs []store.Input) (next []store.Input, touched bool, untold string, err error) {
	for _, in := range inputs {
		if in.Part == "revision" {
			continue
		}
		if in.Part == "member" && in.Kind == store.KindCalibration {
			draft, err := rv.drafted(ctx, in.Key, nil)
			switch {
			case err == nil:
				in.Ref, touched = draft, true
			case !errors.Is(err, store.ErrNotFound):
				return nil, false, "", err
			default:
				now, state, err := rv.v.InForce(ctx, in.Key, rv.frozen())
				if ignoreNotFound(err) != nil {
					return nil, false, "", err
				}
				if why := rv.untold[now.Ref.Bare()]; err == nil && why != "" {
					return nil, true, fmt.Sprintf("it rests on %s: %s", versionName(now.Ref), why), nil
				}
				if err == nil && state == store.Approved && now.Ref != in.Ref {
					in.Ref, touched = now.Ref, true
				}
			}
		}
		// Of the original of a converted value only the draft is named; whether
		// anything moves is said by the members, which both have.
		if in.Part == "converted" && in.Kind == store.KindFinal {
			draft, err := rv.drafted(ctx, in.Key, nil)
			if err == nil {
				in.Ref = draft
			} else if !errors.Is(err, store.ErrNotFound) {
				return nil, false, "", err
			}
		}
		next = append(next, in)
	}
	return next, touched, "", nil
}

// resultOf finds the line of a subject in a calibration; -1: it has none any more.
func resultOf(c store.Calibration, subject string) int {
	return slices.IndexFunc(c.Results, func(r store.Result) bool { return r.Subject == subject })
}

func (rv *reviser) final(ctx context.Context, ref store.Ref) (revised, error) {
	var out revised
	if is, err := rv.inForce(ctx, ref); err != nil || !is {
		return out, err
	}
	raw, err := rv.v.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return out, err
	}
	of, err := store.Decode[store.Final](raw)
	if err != nil {
		return out, err
	}
	var inputs []store.Input
	if inputs, out.touched, out.untold, err = rv.members(ctx, of.Inputs); err != nil || !out.touched || out.untold != "" {
		return out, err
	}
	if out.untold, err = rv.lost(ctx, inputs, of.Value.Sample); err != nil || out.untold != "" {
		return out, err
	}
	members, err := membersOf(ctx, rv.src, inputs, func(_ int, c store.Version[store.Calibration]) int { return resultOf(c.Value, of.Value.Sample) })
	if err != nil {
		return out, err
	}
	body := store.Final{Sample: of.Value.Sample, Quantity: of.Value.Quantity, Scale: of.Value.Scale, Measurand: of.Value.Measurand, Rule: of.Value.Rule}
	if err := combineMembers(ctx, rv.src, members, &body); err != nil {
		return out, err
	}
	from, rel, ok, err := converted(ctx, rv.src, inputs)
	if err != nil {
		return out, err
	}
	if ok {
		next := of
		next.Inputs, next.Value.Members = inputs, body.Members
		if body, _, err = againConverted(ctx, rv.src, next, from, rel); err != nil {
			return out, err
		}
	}
	out.draft, err = rv.state(ctx, raw, inputs, body)
	return out, err
}

// lost says which member has no result of a subject any more; "" none.
func (rv *reviser) lost(ctx context.Context, inputs []store.Input, subject string) (string, error) {
	for _, in := range inputs {
		if in.Part != "member" {
			continue
		}
		c, err := decodeVersion[store.Calibration](ctx, rv.src, in.Ref)
		if err != nil {
			return "", err
		}
		if resultOf(c.Value, subject) < 0 {
			return fmt.Sprintf("session %s has no reading of it left", store.FormatCode(c.Value.Session)), nil
		}
	}
	return "", nil
}

// value draws up an assigned value again. Of versions that hold from the same
// moment only the last approved one is.
func (rv *reviser) value(ctx context.Context, ref store.Ref) (revised, error) {
	var out revised
	raw, err := rv.v.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return out, err
	}
	of, err := store.Decode[store.Value](raw)
	if err != nil {
		return out, err
	}
	from, rel, isConverted, err := converted(ctx, rv.src, of.Inputs)
	if err != nil || of.Value.Basis != "assignment" && !isConverted || of.Value.BackLoaded {
		return out, err
	}
	last, err := rv.lastOfItsPeriod(ctx, raw)
	if err != nil || !last {
		return out, err
	}
	if isConverted {
		return rv.convertedValue(ctx, raw, of, from, rel)
	}
	var inputs []store.Input
	if inputs, out.touched, out.untold, err = rv.members(ctx, of.Inputs); err != nil || !out.touched || out.untold != "" {
		return out, err
	}
	if out.untold, err = rv.lost(ctx, inputs, of.Value.Material); err != nil || out.untold != "" {
		return out, err
	}
	next, remake := of, againAssigned
	next.Inputs = inputs
	if of.Value.Campaign != nil {
		remake = againCampaign
	}
	body, _, err := remake(ctx, rv.src, next)
	if refused := (*Error)(nil); errors.As(err, &refused) && refused.Meaning != Internal {
		out.untold = refused.Message
		return out, nil
	}
	if err != nil {
		return out, err
	}
	out.draft, err = rv.state(ctx, raw, inputs, body)
	return out, err
}

// convertedValue converts a value again from what its origin became.
func (rv *reviser) convertedValue(ctx context.Context, raw store.Raw, of store.Version[store.Value], from store.Ref, rel store.Version[store.Relation]) (revised, error) {
	var out revised
	r, err := rv.replace(ctx, from, of.ValidFrom)
	if err != nil || r.same {
		return out, err
	}
	out.touched = true
	switch {
	case r.untold != "":
		out.untold = fmt.Sprintf("it was converted from %s, whose new value cannot be told: %s", versionName(from), r.untold)
		return out, nil
	case r.dropped:
		out.untold = fmt.Sprintf("it was converted from %s, which is withdrawn", versionName(from))
		return out, nil
	}
	body, err := againConvertedValue(ctx, rv.src, r.ref, rel)
	if refused := (*Error)(nil); errors.As(err, &refused) && refused.Meaning == Invalid {
		out.untold = refused.Message
		return out, nil
	}
	if err != nil {
		return out, err
	}
	var inputs []store.Input
	for _, in := range of.Inputs {
		if in.Part == "converted" {
			in.Ref = r.ref
		}
		if in.Part != "revision" {
			inputs = append(inputs, in)
		}
	}
	out.draft, err = rv.state(ctx, raw, inputs, body)
	return out, err
}

// lastOfItsPeriod tells whether a value is approved and no later approved
// version holds from the same moment.
func (rv *reviser) lastOfItsPeriod(ctx context.Context, raw store.Raw) (bool, error) {
	state, _, err := rv.v.State(ctx, raw.Ref, rv.frozen())
	if err != nil || state != store.Approved && state != store.Superseded {
		return false, err
	}
	later, err := rv.v.Versions(ctx, raw.Key, raw.Ref.Version, MaxPage)
	if err != nil {
		return false, err
	}
	for _, other := range later {
		if other.RecordedAt > rv.body.FrozenAt || instantText(other.ValidFrom) != instantText(raw.ValidFrom) {
			continue
		}
		state, _, err := rv.v.State(ctx, other.Ref, rv.frozen())
		if err != nil {
			return false, err
		}
		if state == store.Approved || state == store.Superseded {
			return false, nil
		}
	}
	return true, nil
}
