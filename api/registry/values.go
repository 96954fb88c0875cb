package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strings"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// Bases are the evidence an assigned value can rest on.
var Bases = []string{"definition", "certificate", "literature", "assignment", "conversion", "partner", "provisional"}

// Total is the measurand of a value that names none.
const Total = "total"

// ValueCode is the code of the record of a material's value on a scale.
func ValueCode(material, scale, measurand string) string {
	if measurand == "" {
		measurand = Total
	}
	return material + "/" + scale + "/" + measurand
}

// A ValueRequest states an assigned value.
type ValueRequest struct {
	Scale, Measurand string
	Value            store.Decimal
	// Stated is the uncertainty as its source printed it; the standard
	// uncertainty follows from it by a recorded rule.
	Stated           store.Stated
	DegreesOfFreedom *float64
	Basis            string
	Evidence         string
	Document         *store.Hash
	ExpiresAt        *store.Instant
	Note             string
}

// StandardFrom turns an uncertainty as printed into a standard uncertainty,
// and says by which rule. Kinds, after JCGM 100:2008 4.3:
//
//	standard    u as printed
//	expanded    U/k; k must be given
//	sd          s as printed (the spread of observations, kept as the standard uncertainty of one)
//	half-width  a/√3, rectangular
//	exact       0: the value is defined
//	none        no uncertainty is stated, and none is made up
func StandardFrom(s store.Stated) (u float64, rule string, err error) {
	var c complaints
	var x float64
	if s.Kind != "none" && s.Kind != "exact" {
		var ok bool
		if x, ok = c.number("body.stated.text", store.Decimal(s.Text)); ok && x <= 0 {
			c.add("body.stated.text", s.Text, `an uncertainty above 0 (a value that is exact by definition has the kind "exact")`)
		}
	}
	switch s.Kind {
	case "standard":
		u, rule = x, "u as printed"
	case "expanded":
		if s.K == nil || !(*s.K > 0) {
			c.add("body.stated.k", "nothing", "the coverage factor k of the expanded uncertainty, above 0")
			break
		}
		u, rule = x / *s.K, fmt.Sprintf("U/k with k = %v", *s.K)
	case "sd":
		u, rule = x, "standard deviation kept as u"
	case "half-width":
		u, rule = x/math.Sqrt(3), "half-width/√3, rectangular"
	case "exact":
		u, rule = 0, "exact by definition"
	case "none":
		u, rule = 0, "none stated"
	default:
		c.add("body.stated.kind", quote(s.Kind), "one of standard, expanded, sd, half-width, exact, none")
	}
	return u, rule, Complain("this uncertainty cannot be read", c)
}

// StateValue states an assigned value of a material: a draft, to be approved by a decision.
func (r *Registry) StateValue(ctx context.Context, actor Actor, material string, q ValueRequest, e Edit) (Item[store.Value], error) {
	var out Item[store.Value]
	var c complaints
	c.text("body.scale", q.Scale, 40)
	c.number("body.value", q.Value)
	c.oneOf("body.basis", q.Basis, Bases...)
	u, rule, err := StandardFrom(q.Stated)
	var invalid *Error
	if errors.As(err, &invalid) {
		c = append(c, invalid.Complaints...)
	} else if q.Stated.Kind == "exact" && q.Basis != "definition" {
		c.add("body.stated.kind", `"exact"`, `an uncertainty: only a value that defines a scale (basis "definition") is exact`)
	}
	if q.Basis == "assignment" {
		c.add("body.basis", `"assignment"`, "another basis: a value assigned from sessions is made from their results, not typed")
	}
	if q.DegreesOfFreedom != nil && !(*q.DegreesOfFreedom >= 1) {
		c.add("body.nu", fmt.Sprint(*q.DegreesOfFreedom), "degrees of freedom of 1 or more, or nothing when u is known")
	}
	if e.ValidFrom == nil {
		c.add("body.valid_from", "nothing", "since when the value holds (RFC 3339)")
	}
	if strings.TrimSpace(e.Reason) == "" && e.After > 0 {
		c.add("body.reason", "nothing", "why this version replaces the one before")
	}
	if err := Complain("this value cannot be stated", c); err != nil {
		return out, err
	}
	var code string
	err = r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		inputs, body, err := valueOf(ctx, &tx.View, actor.Laboratory, material, q.Scale, q.Measurand)
		if err != nil {
			return err
		}
		body.Value, body.StandardUncertainty, body.Rule, body.Stated = q.Value, u, rule, &q.Stated
		body.Exact = q.Stated.Kind == "exact"
		body.DegreesOfFreedom, body.Basis, body.Evidence, body.Document = q.DegreesOfFreedom, q.Basis, q.Evidence, q.Document
		body.ExpiresAt, body.Note, body.Provisional = q.ExpiresAt, q.Note, q.Basis == "provisional"
		code = ValueCode(body.Material, body.Scale, body.Measurand)
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: code}, e, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Value](ctx, r, actor, store.KindValue, code)
}

// valueOf begins a value's body: its material and scale, found and named as inputs.
func valueOf(ctx context.Context, v *store.View, laboratory, material, scale, measurand string) ([]store.Input, store.Value, error) {
	key, err := findMaterial(ctx, v, laboratory, material)
	if err != nil {
		return nil, store.Value{}, err
	}
	m, _, err := v.InForce(ctx, key, store.Moment{})
	if err != nil {
		return nil, store.Value{}, missing(err, key)
	}
	s, err := lookup(ctx, v, laboratory, store.KindScale, scale, 0, store.Moment{})
	if err != nil {
		return nil, store.Value{}, err
	}
	if measurand == "" {
		measurand = Total
	}
	return []store.Input{{Part: "material", Ref: m.Ref}, {Part: "scale", Ref: s.Ref}},
		store.Value{Material: key.Code, MaterialLaboratory: key.Laboratory, Scale: scale, Measurand: measurand}, nil
}

// Values lists the newest versions of a material's values, in the laboratory
// and in common.
func (r *Registry) Values(ctx context.Context, actor Actor, material string, m store.Moment) ([]Item[store.Value], error) {
	var out []Item[store.Value]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		for _, laboratory := range []string{actor.Laboratory, store.Common} {
			raws, _, err := v.List(ctx, store.ListQuery{Laboratory: laboratory, Kind: store.KindValue, Prefix: key.Code + "/", Limit: MaxPage, Moment: m, Newest: true})
			if err != nil {
				return err
			}
			for _, held := range raws {
				it, err := item[store.Value](ctx, v, held.Raw, m)
				if err != nil {
					return err
				}
				out = append(out, it)
			}
		}
		return nil
	})
	return out, err
}

// valueInForce finds the value of a material on a scale that held at a moment:
// the laboratory's own, else the one of common.
func valueInForce(ctx context.Context, v *store.View, laboratory, material, scale, measurand string, m store.Moment) (Item[store.Value], error) {
	code := ValueCode(material, scale, measurand)
	for _, lab := range []string{laboratory, store.Common} {
		raw, state, err := v.InForce(ctx, store.Key{Laboratory: lab, Kind: store.KindValue, Code: code}, m)
		if errors.Is(err, store.ErrNotFound) {
			continue
		}
		if err != nil {
			return Item[store.Value]{}, err
		}
		it, err := item[store.Value](ctx, v, raw, m)
		it.State = state
		return it, err
	}
	return Item[store.Value]{}, missing(store.ErrNotFound, store.Key{Laboratory: laboratory, Kind: store.KindValue, Code: code})
}

// numberOf is the uncertain number of an assigned value: its own decomposition
// where it was made in the registry, else one source that is the value itself.
func numberOf(v store.Version[store.Value]) (uncertain.Number, []uncertain.Group, error) {
	x, ok := new(complaints).number("value", v.Value.Value)
	if !ok {
		return uncertain.Number{}, nil, fmt.Errorf("%s: stored value %q is not a number", v.Ref, v.Value.Value)
	}
	if v.Value.Sources != nil {
		n := uncertain.Number{Value: x}
		for _, s := range v.Value.Sources {
			n.Terms = append(n.Terms, uncertain.Term{Sensitivity: s.Sensitivity, Source: uncertain.Source{ID: s.ID, Kind: uncertain.Kind(s.Kind),
				U: s.U, Group: s.Group, Per: s.Per, Shares: each(s.Shares, func(h store.Share) uncertain.Share { return uncertain.Share(h) })}})
		}
		return n, each(v.Value.Groups, func(g store.Group) uncertain.Group { return uncertain.Group(g) }), n.Validate()
	}
	if v.Value.StandardUncertainty == 0 {
		return uncertain.Exact(x), nil, nil
	}
	source := uncertain.Source{ID: sourceID(v.Ref), Kind: uncertain.KindAnchor, U: v.Value.StandardUncertainty}
	var groups []uncertain.Group
	if nu := v.Value.DegreesOfFreedom; nu != nil {
		source.Group = source.ID
		groups = []uncertain.Group{uncertain.NewGroup(source.ID, source.U*source.U, *nu)}
	}
	n, err := uncertain.New(x, uncertain.Term{Source: source, Sensitivity: 1})
	return n, groups, err
}

// sourceID is the lasting identity of an outside value's uncertainty. Values of
// common are the same for every laboratory of the registry.
func sourceID(ref store.Ref) string {
	return fmt.Sprintf("anchor:%s/%s.%d", ref.Laboratory, ref.Code, ref.Version)
}

// each applies a conversion to every element; nil stays nil.
func each[S, T any](in []S, f func(S) T) []T {
	if in == nil {
		return nil
	}
	out := make([]T, len(in))
	for i, x := range in {
		out[i] = f(x)
	}
	return out
}
