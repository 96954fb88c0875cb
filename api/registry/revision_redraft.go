package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"

	"deltamoor/calib"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// A replacement says what is used in place of one input.
type replacement struct {
	ref     store.Ref
	dropped bool   // nothing: the anchor falls away
	untold  string // its own new version cannot be told, and why
	same    bool
}

// replaced gives the replacement of a value for a session that started then.
type replaced func(ctx context.Context, value store.Ref, started *store.Instant) (replacement, error)

// unchanged replaces nothing: only what a revision changes directly counts.
func unchanged(context.Context, store.Ref, *store.Instant) (replacement, error) {
	return replacement{same: true}, nil
}

// again states what a calibration would be made of after the revision: its own
// inputs with their replacements, the right method, and the readings that count.
// Touched is false where nothing of it changes; untold says why it cannot be made.
func (c *changes) again(ctx context.Context, src source, of store.Version[store.Calibration], replace replaced) (next store.Version[store.Calibration], touched bool, untold string, err error) {
	next = of
	next.Inputs = nil
	b := &next.Value
	b.Excluded = slices.Clone(b.Excluded)
	gone := map[string]bool{}
	for _, in := range of.Inputs {
		switch in.Part {
		case "revision":
			continue
		case "anchor", "control":
			r, err := replace(ctx, in.Ref, b.StartedAt)
			if err != nil {
				return next, false, "", err
			}
			switch {
			case r.untold != "" && in.Part == "anchor":
				return next, true, fmt.Sprintf("it rests on %s, whose new value cannot be told: %s", versionName(in.Ref), r.untold), nil
			case r.same, r.untold != "":
			case r.dropped:
				touched = touched || in.Part == "anchor"
				if in.Part == "anchor" {
					value, err := decodeVersion[store.Value](ctx, src, in.Ref)
					if err != nil {
						return next, false, "", err
					}
					gone[value.Value.Material] = true
				}
				continue
			default:
				touched = touched || in.Part == "anchor"
				in.Ref = r.ref
			}
		case "method":
			if to, ok := c.methods[in.Ref.Bare()]; ok {
				method, err := decodeVersion[store.Method](ctx, src, to)
				if err != nil {
					return next, false, "", err
				}
				spec, err := specOf(method.Value, b.Quantity, b.Measurand)
				if err != nil || spec.Scale != b.Scale {
					return next, true, fmt.Sprintf("%s has no %s on %s", versionName(to), b.Quantity, b.Scale), nil
				}
				b.Model, b.Limits, b.BetweenSession = spec.Model, spec.Limits, spec.BetweenSession
				in.Ref, touched = to, true
			}
		}
		next.Inputs = append(next.Inputs, in)
	}
	wrong := c.readings[b.Session]
	if len(gone) > 0 || len(c.units) > 0 || len(wrong) > 0 {
		err := src.Readings(ctx, of.Laboratory, b.Session, func(rd store.Reading) error {
			if rd.Quantity != b.Quantity || slices.Contains(b.Excluded, rd.Number) {
				return nil
			}
			from, suspect := c.units[rd.Unit]
			suspect = suspect && rd.Unit != "" && since(from, b.StartedAt)
			if suspect || slices.Contains(wrong, rd.Number) || rd.Role == calib.Anchor && gone[rd.Material] {
				b.Excluded, touched = append(b.Excluded, rd.Number), true
			}
			return nil
		})
		if err != nil {
			return next, false, "", err
		}
		slices.Sort(b.Excluded)
		if touched {
			if next.Inputs, err = withoutUnread(ctx, src, next); err != nil {
				return next, false, "", err
			}
		}
	}
	return next, touched, "", nil
}

// withoutUnread drops the anchors of which no reading is left: they pin nothing.
func withoutUnread(ctx context.Context, src source, c store.Version[store.Calibration]) ([]store.Input, error) {
	read := map[string]bool{}
	err := src.Readings(ctx, c.Laboratory, c.Value.Session, func(rd store.Reading) error {
		if rd.Quantity == c.Value.Quantity && rd.Role == calib.Anchor && !slices.Contains(c.Value.Excluded, rd.Number) {
			read[rd.Material] = true
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	var inputs []store.Input
	for _, in := range c.Inputs {
		if in.Part == "anchor" {
			value, err := decodeVersion[store.Value](ctx, src, in.Ref)
			if err != nil {
				return nil, err
			}
			if !read[value.Value.Material] {
				continue
			}
		}
		inputs = append(inputs, in)
	}
	return inputs, nil
}

// refit computes a calibration from the inputs it names now. A refusal of the
// engine is not an error but a reason why the new value cannot be told.
func refit(ctx context.Context, src source, c store.Version[store.Calibration]) (store.Calibration, string, error) {
	a, err := assembleStored(ctx, src, c)
	if err != nil {
		return store.Calibration{}, "", err
	}
	body, err := a.fit()
	if refused := (*Error)(nil); errors.As(err, &refused) && refused.Meaning == Invalid {
		return body, refused.Message, nil
	}
	return body, "", err
}

// fixedFit gives the results' values (‰) of a calibration with its anchors moved
// to other values, at the variances and weights it was estimated with:
// the readings' variances are declared as
//
//	V_ij = (Σ_j φ_j·p_j(s_i))·δ_ij + φ_a where i and j share a preparation
//
// and the anchors keep their covariance. What is gone has NaN.
func (c *changes) fixedFit(ctx context.Context, src source, of, next store.Version[store.Calibration], moved map[string]float64) ([]float64, string, error) {
	frozen := of
	frozen.Value.Excluded, frozen.Value.Model = next.Value.Excluded, next.Value.Model
	frozen.Inputs = nil
	kept := map[string]bool{} // materials that still pin the line
	for _, in := range next.Inputs {
		if in.Part == "anchor" {
			value, err := decodeVersion[store.Value](ctx, src, in.Ref)
			if err != nil {
				return nil, "", err
			}
			kept[value.Value.Material] = true
		}
	}
	for _, in := range of.Inputs {
		if in.Part == "anchor" {
			value, err := decodeVersion[store.Value](ctx, src, in.Ref)
			if err != nil {
				return nil, "", err
			}
			if !kept[value.Value.Material] {
				continue
			}
		}
		frozen.Inputs = append(frozen.Inputs, in)
	}
	a, err := assembleStored(ctx, src, frozen)
	if err != nil {
		return nil, "", err
	}
	s, p, err := a.input()
	if err != nil {
		return nil, "", err
	}
	for i := range s.Anchors {
		if x, ok := moved[s.Anchors[i].Material]; ok {
			s.Anchors[i].Value.Value = x
		}
	}
	model := a.model
	if model.Weights != "" && model.Weights != calib.WeightsDeclared {
		declareVariances(&s, of.Value.Variances)
		model.Weights, model.DeclaredDF = calib.WeightsDeclared, nil
	}
	r, err := calib.Fit(s, model, p)
	if err != nil {
		return nil, a.inWords(err), nil
	}
	values := make([]float64, len(of.Value.Results))
	for i, old := range of.Value.Results {
		values[i] = math.NaN()
		for _, now := range r.Subjects {
			if now.Subject == old.Subject && now.Role == old.Role {
				values[i] = now.Value
			}
		}
	}
	return values, "", nil
}

// declareVariances states the readings' variances as a fit estimated them.
func declareVariances(s *calib.Session, variances []store.Variance) {
	var own, size, preparation float64
	for _, v := range variances {
		switch v.Name {
		case "sigma2":
			own = v.Value
		case "sigma2.size":
			size = v.Value
		case "preparation":
			preparation = v.Value
		}
	}
	variance := make([]float64, len(s.Readings))
	for i := range s.Readings {
		rd := &s.Readings[i]
		variance[i] = own
		if rd.Size != nil && size != 0 {
			variance[i] += size / (*rd.Size * *rd.Size)
		}
		u := math.Sqrt(variance[i])
		rd.StandardUncertainty = &u
	}
	if preparation == 0 {
		return
	}
	s.ReadingCovariance = make([][]float64, len(s.Readings))
	for i, a := range s.Readings {
		s.ReadingCovariance[i] = make([]float64, len(s.Readings))
		for j, b := range s.Readings {
			if i == j {
				s.ReadingCovariance[i][j] = variance[i] + preparation
			} else if a.Preparation != "" && a.Preparation == b.Preparation {
				s.ReadingCovariance[i][j] = preparation
			}
		}
	}
}

// An overlay is a source with drafts in memory beside what is stored.
type overlay struct {
	source
	drafts map[store.Ref]store.Raw
}

func (o *overlay) Version(ctx context.Context, key store.Key, version int) (store.Raw, error) {
	if raw, ok := o.drafts[store.Ref{Key: key, Version: version}]; ok {
		return raw, nil
	}
	return o.source.Version(ctx, key, version)
}

// put keeps a draft as if it were stored, with the hash that it would have.
func (o *overlay) put(laboratory string, d store.Draft, version int, previous store.Hash) (store.Ref, error) {
	_, hash, err := store.CanonicalBody(laboratory, d, version, previous)
	if err != nil {
		return store.Ref{}, err
	}
	value, err := ledger.Canonical(d.Value)
	if err != nil {
		return store.Ref{}, err
	}
	ref := store.Ref{Key: store.Key{Laboratory: laboratory, Kind: d.Kind, Code: d.Code}, Version: version, Hash: hash}
	o.drafts[ref.Bare()] = store.Raw{Ref: ref, Form: d.Value.Form(), RecordedBy: d.By, ValidFrom: d.ValidFrom, Reason: d.Reason, Inputs: d.Inputs, Value: value}
	return ref, nil
}

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
	if of.Value.Basis != "assignment" || of.Value.BackLoaded {
		return out, nil
	}
	last, err := rv.lastOfItsPeriod(ctx, raw)
	if err != nil || !last {
		return out, err
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

// decimalOf is a computed value as an assigned value is stored.
func decimalOf(x float64) store.Decimal {
	return store.Decimal(strconv.FormatFloat(x, 'f', -1, 64))
}
