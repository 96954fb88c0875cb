package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"

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
		case "factor":
			if to, ok := c.factors[in.Ref.Bare()]; ok {
				in.Ref, touched = to, true
			}
		case "factor earlier":
			// The file's deltas were formed with it: it stays, to be undone, and the
			// right one is applied, unless another was applied here already.
			to, ok := c.factors[in.Ref.Bare()]
			if ok && !slices.ContainsFunc(of.Inputs, func(in store.Input) bool { return in.Part == "factor" }) {
				next.Inputs = append(next.Inputs, in)
				in, touched = store.Input{Part: "factor", Ref: to}, true
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
				b.Model, b.Limits, b.BetweenSession, b.SampleHomogeneity = spec.Model, spec.Limits, spec.BetweenSession, spec.SampleHomogeneity
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
	for _, in := range of.Inputs { // the anchors as they were, since they move by moved
		if in.Part == "anchor" {
			value, err := decodeVersion[store.Value](ctx, src, in.Ref)
			if err != nil {
				return nil, "", err
			}
			if kept[value.Value.Material] {
				frozen.Inputs = append(frozen.Inputs, in)
			}
		}
	}
	for _, in := range next.Inputs {
		if in.Part != "anchor" {
			frozen.Inputs = append(frozen.Inputs, in)
		}
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
