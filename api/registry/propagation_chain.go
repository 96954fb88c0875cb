package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strings"

	"deltamoor/calib"
	"deltamoor/calib/assign"
	"deltamoor/calib/montecarlo"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// Bounds of one propagation.
const (
	MaxPropagatedFits    = 500
	MaxPropagatedSources = 200_000
)

// A chainBuilder makes the chain of distributions of stored versions: every fit
// of every generation, down to values from outside. Weights, exclusions and
// estimated variances are those that are stored; what a version states of its
// number must follow from the chain, or the chain is not the version's.
type chainBuilder struct {
	v     source
	chain *montecarlo.Chain
	// values and fits are the quantities of versions met.
	values map[store.Ref]montecarlo.Handle
	fits   map[store.Ref][]montecarlo.Handle
	alone  map[montecarlo.Handle]montecarlo.Handle
	depth  int // of values at hand
	// deepest counts generations of values made in the registry.
	deepest int
}

func newChainBuilder(v source) *chainBuilder {
	return &chainBuilder{v: v, chain: montecarlo.NewChain(nil, nil), values: map[store.Ref]montecarlo.Handle{},
		fits: map[store.Ref][]montecarlo.Handle{}, alone: map[montecarlo.Handle]montecarlo.Handle{}}
}

// final adds a final value by its stored weights.
func (b *chainBuilder) final(ctx context.Context, f store.Version[store.Final]) (montecarlo.Handle, error) {
	var weights []float64
	var of []montecarlo.Handle
	for _, m := range f.Value.Members {
		if m.Input < 0 || m.Input >= len(f.Inputs) {
			return 0, fmt.Errorf("%s has no input %d", f.Ref, m.Input)
		}
		c, err := decodeVersion[store.Calibration](ctx, b.v, f.Inputs[m.Input].Ref)
		if err != nil {
			return 0, err
		}
		h, err := b.line(ctx, c, m.Line)
		if err != nil {
			return 0, err
		}
		weights, of = append(weights, m.Weight), append(of, h)
	}
	h, err := b.members(ctx, f, weights, of)
	if err != nil {
		return 0, err
	}
	return h, b.same(f.Ref, h, f.Value.Value, f.Value.StandardUncertainty)
}

// members combines a final value's members. Those of a converted one carry
// weights in its own per mil: they are combined on the scale they were measured
// on, and brought through the relation together.
func (b *chainBuilder) members(ctx context.Context, f store.Version[store.Final], weights []float64, of []montecarlo.Handle) (montecarlo.Handle, error) {
	from, rel, isConverted, err := converted(ctx, b.v, f.Inputs)
	if err != nil {
		return 0, err
	}
	if !isConverted {
		h, err := b.chain.Linear(0, weights, of)
		return h, b.refused(err)
	}
	original, err := decodeVersion[store.Final](ctx, b.v, from)
	if err != nil {
		return 0, err
	}
	slope, err := slopeFrom(rel, original.Value.Scale)
	if err != nil {
		return 0, err
	}
	for i := range weights {
		weights[i] /= slope
	}
	h, err := b.chain.Linear(0, weights, of)
	if err != nil {
		return 0, b.refused(err)
	}
	return b.convert(rel, original.Value.Scale, h)
}

// line is one result of a calibration.
func (b *chainBuilder) line(ctx context.Context, c store.Version[store.Calibration], line int) (montecarlo.Handle, error) {
	of, err := b.calibration(ctx, c)
	if err != nil {
		return 0, err
	}
	if line < 0 || line >= len(of) {
		return 0, fmt.Errorf("%s has no result %d", c.Ref, line)
	}
	return of[line], nil
}

// calibration adds a stored fit with everything below it.
func (b *chainBuilder) calibration(ctx context.Context, c store.Version[store.Calibration]) ([]montecarlo.Handle, error) {
	ref := c.Ref.Bare()
	if of, ok := b.fits[ref]; ok {
		return of, nil
	}
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	a, err := assembleStored(ctx, b.v, c)
	if err != nil {
		return nil, err
	}
	var anchors []montecarlo.Handle
	for _, value := range a.anchors {
		h, err := b.value(ctx, value)
		if err != nil {
			return nil, err
		}
		if terms := a.unitTerms(value, calib.Anchor); len(terms) > 0 {
			if h, err = b.chain.Linear(0, []float64{1}, []montecarlo.Handle{h}, terms...); err != nil {
				return nil, b.refused(err)
			}
		}
		anchors = append(anchors, h)
	}
	result, session, err := a.result()
	if err != nil {
		return nil, err
	}
	b.chain.Adopt(session.Groups)
	of, err := b.chain.Fit(result, anchors)
	if err != nil {
		return nil, b.refused(err)
	}
	if fits, sources := b.chain.Size(); fits > MaxPropagatedFits || sources > MaxPropagatedSources {
		return nil, Refuse(TooLarge, "the chain has more than the %d fits and %d sources that one propagation may have", MaxPropagatedFits, MaxPropagatedSources)
	}
	for i, r := range c.Value.Results {
		if err := b.same(c.Ref, of[i], r.Value, r.StandardUncertainty); err != nil {
			return nil, err
		}
	}
	b.fits[ref] = of
	return of, nil
}

// value adds an assigned value: one from outside by what it states, one made
// here by the sessions it was made from.
func (b *chainBuilder) value(ctx context.Context, v store.Version[store.Value]) (montecarlo.Handle, error) {
	ref := v.Ref.Bare()
	if h, ok := b.values[ref]; ok {
		return h, nil
	}
	stated, groups, err := numberOf(v)
	if err != nil {
		return 0, err
	}
	b.chain.Adopt(groups)
	from, rel, isConverted, err := converted(ctx, b.v, v.Inputs)
	if err != nil {
		return 0, err
	}
	var h montecarlo.Handle
	if isConverted {
		h, err = b.convertedValue(ctx, from, rel)
		if err == nil {
			err = b.same(v.Ref, h, stated.Value, stated.StandardUncertainty())
		}
	} else if v.Value.Basis == "assignment" && !v.Value.BackLoaded {
		b.depth++
		b.deepest = max(b.deepest, b.depth)
		h, err = b.assigned(ctx, v)
		b.depth--
		if err == nil {
			err = b.same(v.Ref, h, stated.Value, stated.StandardUncertainty())
		}
	} else if h, err = b.chain.Number(stated); err != nil {
		err = b.refused(err)
	}
	if err != nil {
		return 0, err
	}
	b.values[ref] = h
	return h, nil
}

// convertedValue is an assigned value on the other side of a relation.
func (b *chainBuilder) convertedValue(ctx context.Context, from store.Ref, rel store.Version[store.Relation]) (montecarlo.Handle, error) {
	old, err := decodeVersion[store.Value](ctx, b.v, from)
	if err != nil {
		return 0, err
	}
	h, err := b.value(ctx, old)
	if err != nil {
		return 0, err
	}
	return b.convert(rel, old.Value.Scale, h)
}

// convert is a quantity on the other side of a relation, which is linear in it;
// the relation's constants enter to first order about the value.
func (b *chainBuilder) convert(rel store.Version[store.Relation], from string, h montecarlo.Handle) (montecarlo.Handle, error) {
	x := b.chain.FirstOrder(h).Value
	own, _, err := convert(rel, from, uncertain.Exact(x))
	if err != nil {
		return 0, err
	}
	factor, err := slopeFrom(rel, from)
	if err != nil {
		return 0, err
	}
	out, err := b.chain.Linear(own.Value-factor*x, []float64{factor}, []montecarlo.Handle{h}, own.Terms...)
	return out, b.refused(err)
}

// assigned is Σ weights·sessions, and for a campaign its session effects and
// what it says of stability.
func (b *chainBuilder) assigned(ctx context.Context, v store.Version[store.Value]) (montecarlo.Handle, error) {
	members, err := membersOf(ctx, b.v, v.Inputs, lineOf(v.Value.Material))
	if err != nil {
		return 0, err
	}
	var of []montecarlo.Handle
	for _, m := range members {
		h, err := b.line(ctx, m.calibration, m.line)
		if err != nil {
			return 0, err
		}
		of = append(of, h)
	}
	if v.Value.Campaign == nil {
		weights, err := b.combined(of)
		if err != nil {
			return 0, err
		}
		h, err := b.chain.Linear(0, weights, of)
		return h, b.refused(err)
	}
	weights, err := b.campaignWeights(v, members, of)
	if err != nil {
		return 0, err
	}
	plan, err := inputOf(v.Inputs, partCampaign)
	if err != nil {
		return 0, err
	}
	effects, stability := "campaign:"+plan.Code+"/", "stability:"+v.Value.Material+"/"+plan.Code
	stated, _, err := numberOf(v)
	if err != nil {
		return 0, err
	}
	var own []uncertain.Term
	for _, t := range stated.Terms {
		if strings.HasPrefix(t.ID, effects) || t.ID == stability {
			own = append(own, t)
		}
	}
	h, err := b.chain.Linear(0, weights, of, own...)
	return h, b.refused(err)
}

// campaignWeights are the stored weights of the sessions, divided among the
// results of one session; of is left without between-session effects, which
// the campaign has estimated itself.
func (b *chainBuilder) campaignWeights(v store.Version[store.Value], members []member, of []montecarlo.Handle) ([]float64, error) {
	for i, h := range of {
		alone, ok := b.alone[h]
		if !ok {
			var err error
			if alone, err = b.chain.Alone(h); err != nil {
				return nil, b.refused(err)
			}
			b.alone[h] = alone
		}
		of[i] = alone
	}
	weights := make([]float64, len(of))
	for _, s := range v.Value.Campaign.Sessions {
		var at []int
		var results []montecarlo.Handle
		for i, m := range members {
			if m.calibration.Value.Session == s.Session {
				at, results = append(at, i), append(results, of[i])
			}
		}
		parts, err := b.combined(results)
		if err != nil {
			return nil, err
		}
		for k, i := range at {
			weights[i] = s.Weight * parts[k]
		}
	}
	return weights, nil
}

// combined are the weights of results by their private variances.
func (b *chainBuilder) combined(of []montecarlo.Handle) ([]float64, error) {
	var numbers []uncertain.Number
	for _, h := range of {
		numbers = append(numbers, b.chain.FirstOrder(h))
	}
	c, err := assign.Combine(numbers)
	return c.Weights, err
}

// same checks that what a version states follows from the chain, to the
// rounding of two ways of adding the same sources.
func (b *chainBuilder) same(ref store.Ref, h montecarlo.Handle, value, u float64) error {
	n := b.chain.FirstOrder(h)
	scale := math.Max(1, math.Abs(value))
	if math.Abs(n.Value-value) <= 1e-9*scale && math.Abs(n.StandardUncertainty()-u) <= 1e-6*u+1e-9*scale {
		return nil
	}
	return Refuse(Conflict, "%s states %g ‰ with u %g ‰, and its chain gives %g ‰ with u %g ‰: verify it first", versionName(ref), value, u, n.Value, n.StandardUncertainty())
}

// refused turns what a chain refuses into a refusal; nil stays nil.
func (b *chainBuilder) refused(err error) error {
	var refused *montecarlo.ChainError
	if errors.As(err, &refused) {
		return &Error{Meaning: Invalid, Message: "this chain cannot be propagated", Err: err,
			Complaints: []Complaint{{Place: refused.Place, Found: refused.Found, Expected: refused.Expected}}}
	}
	return err
}
