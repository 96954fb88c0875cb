package registry

import (
	"context"
	"math"

	"deltamoor/store"
)

// An evaluation draws everything in force up again beside the prediction, in
// memory: once as the revision would draft it, and once with variances and
// weights fixed.
type evaluation struct {
	*reviser
	drafts *overlay
	count  int
	// fixed are the values at fixed variances: of results by line, of assigned
	// values and final values alone; old are those that stand.
	fixedLines  map[store.Ref][]float64
	fixedValues map[store.Ref]float64
	newest      map[store.Key]int
	made        map[store.Ref]store.Ref // drafts of originals
	finals      map[store.Ref]*Reevaluation
}

func newEvaluation(ctx context.Context, v *store.View, c *changes) (*evaluation, error) {
	e := &evaluation{drafts: &overlay{source: v, drafts: map[store.Ref]store.Raw{}}, fixedLines: map[store.Ref][]float64{}, fixedValues: map[store.Ref]float64{},
		newest: map[store.Key]int{}, made: map[store.Ref]store.Ref{}, finals: map[store.Ref]*Reevaluation{}}
	revision := store.Ref{Key: store.Key{Laboratory: c.laboratory, Kind: store.KindRevision, Code: "preview"}, Version: 1}
	e.reviser = &reviser{changes: c, v: v, src: e.drafts, revision: revision, by: "preview", reason: "preview",
		untold: map[store.Ref]string{}, from: map[store.Ref]*store.Instant{}}
	found := map[string]store.Ref{}
	name := func(key store.Key, from *store.Instant) string { return key.String() + " " + instantText(from) }
	e.put = func(ctx context.Context, d store.Draft) (store.Ref, error) {
		key := store.Key{Laboratory: c.laboratory, Kind: d.Kind, Code: d.Code}
		if e.newest[key] == 0 {
			raw, err := v.Newest(ctx, key)
			if ignoreNotFound(err) != nil {
				return store.Ref{}, err
			}
			e.newest[key] = raw.Ref.Version
		}
		e.newest[key]++
		ref, err := e.drafts.put(c.laboratory, d, e.newest[key], store.Hash{})
		found[name(key, d.ValidFrom)] = ref
		return ref, err
	}
	e.drafted = func(_ context.Context, key store.Key, from *store.Instant) (store.Ref, error) {
		if ref, ok := found[name(key, from)]; ok {
			return ref, nil
		}
		return store.Ref{}, store.ErrNotFound
	}
	for _, change := range c.body.Values {
		if changed := c.values[change.Old.Bare()]; change.New == nil && !change.Withdrawn {
			if _, err := e.put(ctx, changed.draft(c.laboratory, "preview", "preview")); err != nil {
				return nil, err
			}
		}
	}
	return e, nil
}

// next draws one version up again.
func (e *evaluation) next(ctx context.Context, a store.AffectedVersion) error {
	out, err := e.revise(ctx, a)
	if err != nil || out.draft.Version == 0 {
		return err
	}
	if e.count++; e.count > MaxEvaluated {
		return Refuse(TooLarge, "a full preview draws up at most %d versions again; this revision moves more: look at the prediction, or apply it, which drafts everything as a job", MaxEvaluated)
	}
	e.made[a.Ref.Bare()] = out.draft
	switch a.Kind {
	case store.KindCalibration:
		return e.fixCalibration(ctx, a.Ref)
	case store.KindValue:
		old, err := decodeVersion[store.Value](ctx, e.v, a.Ref)
		if err != nil {
			return err
		}
		if from, rel, ok, err := converted(ctx, e.v, old.Inputs); ok || err != nil {
			if err != nil {
				return err
			}
			return e.fixConverted(ctx, old, from, rel)
		}
		members, err := membersOf(ctx, e.v, old.Inputs, func(_ int, c store.Version[store.Calibration]) int { return resultOf(c.Value, old.Value.Material) })
		if err != nil {
			return err
		}
		weights, err := weightsOf(ctx, e.v, old.Value, members)
		if err != nil {
			return err
		}
		number, _, err := numberOf(old)
		if err != nil {
			return err
		}
		e.fixedValues[a.Ref.Bare()] = e.fixMembers(number.Value, members, weights)
	case store.KindFinal:
		return e.fixFinal(ctx, a.Ref, out.draft)
	}
	return nil
}

// fixConverted moves a converted value with the one it was made from.
func (e *evaluation) fixConverted(ctx context.Context, old store.Version[store.Value], from store.Ref, rel store.Version[store.Relation]) error {
	origin, err := decodeVersion[store.Value](ctx, e.v, from)
	if err != nil {
		return err
	}
	slope, err := slopeFrom(rel, origin.Value.Scale)
	if err != nil {
		return err
	}
	was, _, err := numberOf(origin)
	if err != nil {
		return err
	}
	number, _, err := numberOf(old)
	if err != nil {
		return err
	}
	now := was.Value
	if change := e.values[from.Bare()]; change != nil && change.applies(old.ValidFrom) {
		now += change.delta
	} else if x, ok := e.fixedValues[from.Bare()]; ok {
		now = x
	}
	e.fixedValues[old.Ref.Bare()] = number.Value + slope*(now-was.Value)
	return nil
}

// fixMembers is a combined value after its members moved, at fixed weights.
func (e *evaluation) fixMembers(value float64, members []member, weights []float64) float64 {
	for i, m := range members {
		if lines, ok := e.fixedLines[m.calibration.Ref.Bare()]; ok {
			value += weights[i] * (lines[m.line] - m.calibration.Value.Results[m.line].Value)
		}
	}
	return value
}

func (e *evaluation) fixCalibration(ctx context.Context, ref store.Ref) error {
	of, err := decodeVersion[store.Calibration](ctx, e.v, ref)
	if err != nil {
		return err
	}
	next, _, _, err := e.again(ctx, e.src, of, e.replace)
	if err != nil {
		return err
	}
	moved := map[string]float64{}
	for _, in := range of.Inputs {
		if in.Part != "anchor" {
			continue
		}
		value, err := decodeVersion[store.Value](ctx, e.src, in.Ref)
		if err != nil {
			return err
		}
		number, _, err := numberOf(value)
		if err != nil {
			return err
		}
		if change := e.values[in.Ref.Bare()]; change != nil && change.applies(of.Value.StartedAt) {
			moved[value.Value.Material] = number.Value + change.delta
		} else if x, ok := e.fixedValues[in.Ref.Bare()]; ok {
			moved[value.Value.Material] = x
		}
	}
	lines, why, err := e.fixedFit(ctx, e.src, of, next, moved)
	if err != nil {
		return err
	}
	if why != "" {
		lines = make([]float64, len(of.Value.Results))
		for i := range lines {
			lines[i] = math.NaN()
		}
	}
	e.fixedLines[ref.Bare()] = lines
	return nil
}

func (e *evaluation) fixFinal(ctx context.Context, ref, draft store.Ref) error {
	old, err := decodeVersion[store.Final](ctx, e.v, ref)
	if err != nil {
		return err
	}
	now, err := decodeVersion[store.Final](ctx, e.src, draft)
	if err != nil {
		return err
	}
	members, err := membersOf(ctx, e.v, old.Inputs, func(i int, c store.Version[store.Calibration]) int { return resultOf(c.Value, old.Value.Sample) })
	if err != nil {
		return err
	}
	weights := make([]float64, len(members))
	for i, m := range old.Value.Members {
		weights[i] = m.Weight
	}
	fixed := e.fixMembers(old.Value.Value, members, weights)
	e.finals[ref.Bare()] = &Reevaluation{Fixed: fixed - old.Value.Value, Shift: now.Value.Value - old.Value.Value, StandardUncertainty: now.Value.StandardUncertainty}
	return nil
}

// fill adds the re-evaluation to a thing that has one.
func (e *evaluation) fill(a *Affected) error {
	if why := e.untold[a.Ref.Bare()]; why != "" {
		a.Full = &Reevaluation{Why: why}
		return nil
	}
	draft, ok := e.made[a.Ref.Bare()]
	if !ok {
		return nil
	}
	raw := e.drafts.drafts[draft.Bare()]
	switch a.Kind {
	case store.KindFinal:
		a.Full = e.finals[a.Ref.Bare()]
	case store.KindValue:
		now, err := store.Decode[store.Value](raw)
		if err != nil {
			return err
		}
		number, _, err := numberOf(now)
		if err != nil {
			return err
		}
		a.Full = &Reevaluation{Fixed: e.fixedValues[a.Ref.Bare()] - a.Value, Shift: number.Value - a.Value, StandardUncertainty: now.Value.StandardUncertainty}
	case store.KindCalibration:
		now, err := store.Decode[store.Calibration](raw)
		if err != nil {
			return err
		}
		lines := e.fixedLines[a.Ref.Bare()]
		if a.Line < 0 || a.Line >= len(lines) || len(now.Value.Results) != len(lines) || math.IsNaN(lines[a.Line]) {
			a.Full = &Reevaluation{Why: "its results are others than before"}
			return nil
		}
		res := now.Value.Results[a.Line]
		a.Full = &Reevaluation{Fixed: lines[a.Line] - a.Value, Shift: res.Value - a.Value, StandardUncertainty: res.StandardUncertainty}
	}
	return nil
}
