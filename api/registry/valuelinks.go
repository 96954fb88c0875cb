package registry

import (
	"context"
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A ValueStep is one version in the history of a value, against the one before.
type ValueStep struct {
	Item[store.Value]
	Number float64 // ‰
	// Shift is this value less the approved one before it; nil for the first, as
	// are the rest. What both rest on has cancelled in UShift.
	Shift, UShift *float64
	// Zeta is the shift over its u, En half of that; nil where that is 0.
	Zeta, En *float64
	// InU is the shift over the older value's own u; nil where that is 0.
	InU *float64
}

// ValueSeries gives the approved versions of a value in the order in which they
// hold, each against its neighbour (B08): a value stated again is a correction,
// so the two share what they share.
func (r *Registry) ValueSeries(ctx context.Context, actor Actor, code string) ([]ValueStep, error) {
	var out []ValueStep
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: code}
		if _, err := v.Newest(ctx, key); err != nil {
			if ignoreNotFound(err) != nil {
				return err
			}
			key.Laboratory = store.Common
		}
		for after := 0; ; {
			raws, err := v.Versions(ctx, key, after, MaxPage)
			if err != nil {
				return err
			}
			for _, raw := range raws {
				after = raw.Ref.Version
				it, err := item[store.Value](ctx, v, raw, store.Moment{})
				if err != nil {
					return err
				}
				if it.State == store.Approved || it.State == store.Superseded || it.State == store.Withdrawn {
					out = append(out, ValueStep{Item: it})
				}
			}
			if len(raws) < MaxPage {
				break
			}
		}
		if len(out) == 0 {
			return missing(store.ErrNotFound, key)
		}
		slices.SortStableFunc(out, func(a, b ValueStep) int { return int(min(max(from(a)-from(b), -1), 1)) })
		return against(out)
	})
	return out, err
}

func from(s ValueStep) store.Instant {
	if s.ValidFrom == nil {
		return math.MinInt64 / 2
	}
	return *s.ValidFrom
}

func against(steps []ValueStep) error {
	var before uncertain.Number
	var groupsBefore []uncertain.Group
	for i := range steps {
		n, groups, err := certificateNumber(steps[i].Version)
		if err != nil {
			return err
		}
		s := &steps[i]
		s.Number = n.Value
		if i > 0 {
			c, err := uncertain.Compare(n, before, joined(groups, groupsBefore), uncertain.Coverage{})
			if err != nil {
				return fmt.Errorf("compare %s with the version before: %w", s.Ref, err)
			}
			s.Shift, s.UShift, s.Zeta, s.En = &c.Difference.Value, &c.StandardUncertainty, c.Zeta, c.En
			if u := before.StandardUncertainty(); u > 0 {
				x := c.Difference.Value / u
				s.InU = &x
			}
		}
		before, groupsBefore = n, groups
	}
	return nil
}

// certificateNumber is the number of a value as its certificate states it: with
// the homogeneity of the lot, for any one unit.
func certificateNumber(v store.Version[store.Value]) (uncertain.Number, []uncertain.Group, error) {
	n, groups, err := numberOf(v)
	b := v.Value.UBetweenUnits
	if err != nil || b == nil || b.StandardUncertainty == 0 {
		return n, groups, err
	}
	unit := uncertain.Number{Terms: []uncertain.Term{{Sensitivity: 1, Source: uncertain.Source{ID: "unit:" + v.Value.Material + "/any/" + fmt.Sprint(v.Ref.Version), Kind: uncertain.KindUnit, U: b.StandardUncertainty, Group: b.Group, Per: unitPer(b)}}}}
	n, err = uncertain.Linear(0, []float64{1, 1}, []uncertain.Number{n, unit})
	return n, groups, err
}

func joined(a, b []uncertain.Group) []uncertain.Group {
	out := slices.Clone(a)
	for _, g := range b {
		if !slices.ContainsFunc(out, func(o uncertain.Group) bool { return o.ID == g.ID }) {
			out = append(out, g)
		}
	}
	return out
}

// A ValueName names an assigned value; Version 0 is the one in force.
type ValueName struct {
	Material, Scale, Measurand string
	Version                    int
}

// ValueCovariance is how assigned values hang together.
type ValueCovariance struct {
	Values []Item[store.Value]
	// Covariance (‰²) and Correlation in the order of the values; u² of the
	// certificates in the diagonal.
	Covariance, Correlation [][]float64
	// Pair is the difference of the first two where they are on one scale; nil else.
	Pair *PairComparison
}

// MaxCovaried bounds the values of one covariance.
const MaxCovaried = 50

// CovarianceOfValues tells how much values share: those of one campaign, or that
// rest on the same anchors or sessions (B07). Units are those of any bottle,
// independent of each other.
func (r *Registry) CovarianceOfValues(ctx context.Context, actor Actor, names []ValueName) (ValueCovariance, error) {
	var out ValueCovariance
	if len(names) < 2 || len(names) > MaxCovaried {
		return out, Complain("nothing to compare", []Complaint{{Place: "body.values", Found: fmt.Sprintf("%d values", len(names)), Expected: fmt.Sprintf("2 to %d values", MaxCovaried)}})
	}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = ValueCovariance{}
		var numbers []uncertain.Number
		var groups []uncertain.Group
		for i, name := range names {
			it, err := valueNamed(ctx, v, actor.Laboratory, name, fmt.Sprintf("body.values[%d]", i))
			if err != nil {
				return err
			}
			n, gs, err := certificateNumber(it.Version)
			if err != nil {
				return err
			}
			out.Values = append(out.Values, it)
			numbers = append(numbers, n)
			groups = joined(groups, gs)
		}
		for i, a := range numbers {
			var covariance, correlation []float64
			for j, b := range numbers {
				c := uncertain.Covariance(a, b)
				covariance = append(covariance, c)
				if i == j && c > 0 {
					c = 1 // whatever rounding says
				} else if uu := a.StandardUncertainty() * b.StandardUncertainty(); uu > 0 {
					c /= uu
				}
				correlation = append(correlation, c)
			}
			out.Covariance, out.Correlation = append(out.Covariance, covariance), append(out.Correlation, correlation)
		}
		if len(numbers) != 2 || out.Values[0].Value.Scale != out.Values[1].Value.Scale || out.Values[0].Value.Measurand != out.Values[1].Value.Measurand {
			return nil
		}
		c, err := uncertain.Compare(numbers[0], numbers[1], groups, uncertain.Coverage{})
		if err != nil {
			return err
		}
		out.Pair = &PairComparison{Difference: c.Difference.Value, StandardUncertainty: c.StandardUncertainty, RootSumOfSquares: c.RootSumOfSquares, Correlation: c.Correlation, Zeta: c.Zeta, En: c.En, Different: c.Different,
			Expanded: uncertain.Expanded{U: c.CoverageFactor * c.StandardUncertainty, CoverageFactor: c.CoverageFactor, Probability: 0.95, DegreesOfFreedom: c.DegreesOfFreedom}}
		return nil
	})
	return out, err
}

func valueNamed(ctx context.Context, v *store.View, laboratory string, name ValueName, place string) (Item[store.Value], error) {
	key, err := findMaterial(ctx, v, laboratory, name.Material)
	if err != nil {
		return Item[store.Value]{}, placed(err, place+".material", name.Material)
	}
	if name.Version == 0 {
		it, err := valueInForce(ctx, v, laboratory, key.Code, name.Scale, nameOr(name.Measurand, Total), store.Moment{})
		if err != nil {
			return it, placed(err, place+".scale", name.Scale)
		}
		return it, nil
	}
	raw, err := lookup(ctx, v, laboratory, store.KindValue, ValueCode(key.Code, name.Scale, name.Measurand), name.Version, store.Moment{})
	if err != nil {
		return Item[store.Value]{}, placed(err, place+".version", fmt.Sprint(name.Version))
	}
	return item[store.Value](ctx, v, raw, store.Moment{})
}

// A ValueDepth says how far a value in force is from the definition of its scale.
type ValueDepth struct {
	Value Item[store.Value]
	// Depth is 0 for a value that defines a scale, 1 for one from outside, and one
	// more than its deepest anchor for one that was assigned here.
	Depth int
	// Path is the longest way down, versions by name.
	Path []string
}

// Depth tells how deep the values of a material stand in the hierarchy (I06).
func (r *Registry) Depth(ctx context.Context, actor Actor, material string) ([]ValueDepth, error) {
	var out []ValueDepth
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		seen := map[string]bool{}
		for _, laboratory := range []string{actor.Laboratory, store.Common} {
			raws, _, err := v.List(ctx, store.ListQuery{Laboratory: laboratory, Kind: store.KindValue, Prefix: key.Code + "/", Limit: MaxPage})
			if err != nil {
				return err
			}
			for _, raw := range raws {
				if raw.State == store.Withdrawn || seen[raw.Code] {
					continue
				}
				seen[raw.Code] = true
				it, err := item[store.Value](ctx, v, raw.Raw, store.Moment{})
				if err != nil {
					return err
				}
				d, err := depthOf(ctx, v, it)
				if err != nil {
					return err
				}
				out = append(out, d)
			}
		}
		return nil
	})
	return out, err
}

func depthOf(ctx context.Context, v *store.View, it Item[store.Value]) (ValueDepth, error) {
	out := ValueDepth{Value: it}
	edges, err := v.Down(ctx, it.Ref, MaxTrace)
	if err != nil {
		return out, err
	}
	below := map[store.Ref][]store.Ref{}
	for _, e := range edges {
		if e.Part == "anchor" || e.Part == "member" {
			from, to := e.From, e.To
			from.Hash, to.Hash = store.Hash{}, store.Hash{}
			below[from] = append(below[from], to)
		}
	}
	type way struct {
		depth int
		path  []string
	}
	known := map[store.Ref]way{}
	var walk func(at store.Ref) (way, error)
	walk = func(at store.Ref) (way, error) {
		if w, ok := known[at]; ok {
			return w, nil
		}
		best := way{depth: -1}
		for _, to := range below[at] {
			w, err := walk(to)
			if err != nil {
				return w, err
			}
			if w.depth > best.depth {
				best = w
			}
		}
		w := way{best.depth, append([]string{versionName(at)}, best.path...)}
		switch {
		case at.Kind != store.KindValue:
		case best.depth >= 0:
			w.depth++
		default: // from outside
			val, err := decodeVersion[store.Value](ctx, v, at)
			if err != nil {
				return w, err
			}
			w.depth = 1
			if val.Value.Exact {
				w.depth = 0
			}
		}
		known[at] = w
		return w, nil
	}
	start := it.Ref
	start.Hash = store.Hash{}
	w, err := walk(start)
	out.Depth, out.Path = w.depth, w.path
	return out, err
}
