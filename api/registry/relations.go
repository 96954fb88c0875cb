package registry

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"deltamoor/calib/scale"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// The sorts of relations.
const (
	// Conversion: an affine relation between two scales of one quantity.
	Conversion = "conversion"
	// Constant: a number with its uncertainty, such as the ratio of a scale's zero.
	Constant = "constant"
	// InWords: a definition, formula or rule that no number is computed with.
	InWords = "words"
)

// StateRelation states a relation: a draft, to be approved by a decision. It
// holds from a date; what was computed with an earlier version keeps it.
func (r *Registry) StateRelation(ctx context.Context, actor Actor, code string, b store.Relation, e Edit) (Item[store.Relation], error) {
	var out Item[store.Relation]
	var c complaints
	c.code("body.code", code)
	c.text("body.title", b.Title, 200)
	c.oneOf("body.sort", b.Sort, Conversion, Constant, InWords)
	if e.ValidFrom == nil {
		c.add("body.valid_from", "nothing", "since when it holds (RFC 3339)")
	}
	checkRelation(&c, b)
	const message = "this relation cannot be stated"
	if err := Complain(message, c); err != nil {
		return out, err
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindRelation, Code: code}
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		var inputs []store.Input
		if b.Sort == Conversion {
			var err error
			if inputs, err = relatedScales(ctx, &tx.View, actor.Laboratory, b, message); err != nil {
				return err
			}
		}
		_, err := appendVersion(ctx, tx, actor, key, e, inputs, b)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Relation](ctx, r, actor, store.KindRelation, code)
}

func checkRelation(c *complaints, b store.Relation) {
	conversion := b.From != "" || b.To != "" || b.Factor != "" || b.Offset != "" || b.Covariance != nil
	switch b.Sort {
	case Conversion:
		if k, ok := c.number("body.factor", b.Factor); ok && k == 0 {
			c.add("body.factor", string(b.Factor), "a factor that is not 0")
		}
		c.number("body.offset", b.Offset)
		if v := b.Covariance; v != nil && (!(v[0][0] >= 0) || !(v[1][1] >= 0) || v[0][1] != v[1][0] || !(v[0][1]*v[0][1] <= v[0][0]*v[1][1])) {
			c.add("body.covariance", fmt.Sprint(*v), "a symmetric covariance of (factor, offset) with no correlation above 1")
		}
		if b.Lowest != nil && b.Highest != nil && *b.Lowest >= *b.Highest {
			c.add("body.lowest", fmt.Sprint(*b.Lowest), "less than highest, %v", *b.Highest)
		}
	case Constant:
		c.number("body.constant", b.Constant)
		if u := b.StandardUncertainty; u != nil && !(*u >= 0 && !math.IsInf(*u, 0)) {
			c.add("body.u", fmt.Sprint(*u), "a standard uncertainty of 0 or more, or nothing where none is stated")
		}
	case InWords:
		c.text("body.expression", b.Expression, 4000)
	}
	if b.Sort != Conversion && conversion {
		c.add("body.from", "parts of a conversion", "none of from, to, factor, offset, covariance: this is %q", b.Sort)
	}
	if b.Sort != Constant && b.Constant != "" {
		c.add("body.constant", string(b.Constant), "nothing: this is %q", b.Sort)
	}
}

func relatedScales(ctx context.Context, v *store.View, laboratory string, b store.Relation, message string) ([]store.Input, error) {
	var inputs []store.Input
	var c complaints
	quantities := map[string]bool{}
	for _, side := range []struct{ place, name string }{{"from", b.From}, {"to", b.To}} {
		raw, err := lookup(ctx, v, laboratory, store.KindScale, side.name, 0, store.Moment{})
		if ignoreNotFound(err) != nil {
			return nil, err
		}
		if err != nil {
			c.add("body."+side.place, quote(side.name), "the name of a scale, such as d18O-VPDB")
			continue
		}
		s, err := store.Decode[store.Scale](raw)
		if err != nil {
			return nil, err
		}
		quantities[s.Value.Quantity] = true
		inputs = append(inputs, store.Input{Part: side.place, Ref: raw.Ref})
	}
	if len(c) == 0 && (len(quantities) != 1 || b.From == b.To) {
		c.add("body.to", quote(b.To), "another scale of the same quantity as %s", b.From)
	}
	return inputs, Complain(message, c)
}

// relationAt finds a relation: the version that is named, or the approved one
// that held at a moment; the laboratory's own, else the one of common.
func relationAt(ctx context.Context, v *store.View, laboratory, code string, version int, m store.Moment) (store.Version[store.Relation], error) {
	var none store.Version[store.Relation]
	for _, lab := range []string{laboratory, store.Common} {
		key := store.Key{Laboratory: lab, Kind: store.KindRelation, Code: code}
		var raw store.Raw
		var state store.State
		var err error
		if version > 0 {
			if raw, err = v.Version(ctx, key, version); err == nil {
				state, _, err = v.State(ctx, raw.Ref, m)
			}
		} else {
			raw, state, err = v.InForce(ctx, key, m)
		}
		if ignoreNotFound(err) != nil {
			return none, err
		}
		if err != nil {
			continue
		}
		if state != store.Approved && state != store.Superseded {
			return none, Refuse(Conflict, "relation %s.%d is %s", code, raw.Ref.Version, state)
		}
		return store.Decode[store.Relation](raw)
	}
	return none, Refuse(NotFound, "no approved relation %q in laboratory %s or in common", code, laboratory)
}

// relationOf are the constants of a conversion in the engine's form. Its sources
// have the version's own identity, so that two values converted with it share them.
func relationOf(rel store.Version[store.Relation]) (scale.Relation, error) {
	var c complaints
	factor, _ := c.number("factor", rel.Value.Factor)
	offset, _ := c.number("offset", rel.Value.Offset)
	out := scale.Relation{ID: fmt.Sprintf("relation/%s/%s.%d", rel.Laboratory, rel.Code, rel.Ref.Version), Factor: factor, Offset: offset}
	if v := rel.Value.Covariance; v != nil {
		out.Covariance = *v
	}
	if rel.Value.Sort != Conversion {
		return out, Refuse(Invalid, "relation %s is no conversion between scales but %s", rel.Code, map[string]string{Constant: "a constant", InWords: "in words"}[rel.Value.Sort])
	}
	return out, Complain("stored relation "+rel.Ref.String(), c)
}

// relationText is what a relation says, in a line.
func relationText(b store.Relation) string {
	switch b.Sort {
	case Conversion:
		return fmt.Sprintf("δ on %s = %s × δ on %s + %s ‰", b.To, b.Factor, b.From, b.Offset)
	case Constant:
		return b.Expression + " = " + string(b.Constant)
	}
	return b.Expression
}

// convert brings a number from one scale to the other side of a relation.
func convert(rel store.Version[store.Relation], from string, n uncertain.Number) (out uncertain.Number, to string, err error) {
	k, err := relationOf(rel)
	if err != nil {
		return out, "", err
	}
	switch from {
	case rel.Value.From:
		to = rel.Value.To
		out, err = k.Apply(n)
	case rel.Value.To:
		to = rel.Value.From
		out, err = k.Invert(n)
	default:
		return out, "", Complain("this value cannot be converted", []Complaint{{Place: "body.relation", Found: fmt.Sprintf("%s, between %s and %s", rel.Code, rel.Value.From, rel.Value.To),
			Expected: "a conversion from or to " + from}})
	}
	if err != nil {
		return out, "", err
	}
	on := n.Value
	if from == rel.Value.To {
		on = out.Value
	}
	if low, high := rel.Value.Lowest, rel.Value.Highest; low != nil && on < *low || high != nil && on > *high {
		return out, "", Complain("this value cannot be converted", []Complaint{{Place: "value", Found: fmt.Sprintf("%.4g ‰ on %s", on, rel.Value.From),
			Expected: fmt.Sprintf("a delta within the relation's range, %s to %s ‰", bound(low), bound(high))}})
	}
	return out, to, nil
}

func bound(x *float64) string {
	if x == nil {
		return "any"
	}
	return strconv.FormatFloat(*x, 'g', -1, 64)
}

// A ConversionRequest asks what a delta is on another scale.
type ConversionRequest struct {
	Relation string
	Version  int // 0: the one that holds now
	Scale    string
	Value, U float64
}

// A ConversionAnswer is a converted delta with what it rests on.
type ConversionAnswer struct {
	Relation            Item[store.Relation]
	Scale               string
	Value               float64
	StandardUncertainty float64
	// FromRelation is the part of u that the relation's constants bring.
	FromRelation float64
}

// Convert converts one delta without storing anything.
func (r *Registry) Convert(ctx context.Context, actor Actor, q ConversionRequest) (ConversionAnswer, error) {
	var out ConversionAnswer
	if !finiteNumber(q.Value) || !(q.U >= 0) || math.IsInf(q.U, 0) {
		return out, Complain("this value cannot be converted", []Complaint{{Place: "body.value", Found: fmt.Sprintf("%v ± %v", q.Value, q.U), Expected: "a finite delta with a standard uncertainty of 0 or more"}})
	}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		rel, err := relationAt(ctx, v, actor.Laboratory, q.Relation, q.Version, store.Moment{})
		if err != nil {
			return err
		}
		n, _, err := correctionNumber("input", q.Value, q.U, nil)
		if err != nil {
			return err
		}
		y, to, err := convert(rel, q.Scale, n)
		if err != nil {
			return err
		}
		raw, err := v.Version(ctx, rel.Key, rel.Ref.Version)
		if err != nil {
			return err
		}
		out = ConversionAnswer{Scale: to, Value: y.Value, StandardUncertainty: y.StandardUncertainty()}
		out.Relation, err = item[store.Relation](ctx, v, raw, store.Moment{})
		own := uncertain.Number{}
		for _, t := range y.Terms {
			if t.ID != "input" {
				own.Terms = append(own.Terms, t)
			}
		}
		out.FromRelation = own.StandardUncertainty()
		return err
	})
	return out, err
}

// A ConvertRequest asks for a value on another scale, by a relation.
type ConvertRequest struct {
	Relation string
	Version  int // 0: the one that holds now
	Reason   string
	After    int
}

// ConvertFinal draws up a final value on another scale from an approved one: a
// draft whose trace goes through the relation's version to the original. The
// constants' uncertainty is among its sources.
func (r *Registry) ConvertFinal(ctx context.Context, actor Actor, final string, q ConvertRequest) (Item[store.Final], error) {
	var code string
	err := r.write(ctx, actor, MayFit, func(ctx context.Context, tx *store.Tx) error {
		v := &tx.View
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindFinal, Code: final}
		raw, state, err := v.InForce(ctx, key, store.Moment{})
		if err != nil {
			return missing(err, key)
		}
		if state != store.Approved {
			return Refuse(Conflict, "final value %s is %s: only an approved one is converted", store.FormatCode(final), state)
		}
		from, err := store.Decode[store.Final](raw)
		if err != nil {
			return err
		}
		if _, _, ok, err := converted(ctx, v, from.Inputs); ok || err != nil {
			if err == nil {
				err = Refuse(Conflict, "final value %s was converted itself: convert the one it was made from", store.FormatCode(final))
			}
			return err
		}
		rel, err := relationAt(ctx, v, actor.Laboratory, q.Relation, q.Version, store.Moment{})
		if err != nil {
			return err
		}
		next := from
		next.Inputs = append(slices.Clone(from.Inputs), store.Input{Part: "converted", Ref: from.Ref}, store.Input{Part: "relation", Ref: rel.Ref})
		body, _, err := convertedFinal(ctx, v, next, from.Value.Scale, rel)
		if err != nil {
			return err
		}
		inputs := next.Inputs
		name := store.FinalName(body.Sample, body.Scale, body.Measurand)
		keys, err := v.Resolve(ctx, actor.Laboratory, store.KindFinal, name)
		if err != nil {
			return err
		}
		switch {
		case len(keys) > 0 && q.After == 0:
			return Refuse(Conflict, "sample %s has the final value %s on %s already; a change is a further version of it", store.FormatCode(body.Sample), store.FormatCode(keys[0].Code), body.Scale)
		case len(keys) > 0:
			code = keys[0].Code
		default:
			if code, err = r.draw(ctx, v, actor.Laboratory, 'V'); err != nil {
				return err
			}
			onlyOne(tx, store.KindFinal, name)
		}
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindFinal, Code: code}, Edit{After: q.After, Reason: q.Reason}, inputs, body)
		return err
	})
	if err != nil {
		return Item[store.Final]{}, err
	}
	return reread[store.Final](ctx, r, actor, store.KindFinal, code)
}

// convertedFinal is a final value on the other side of a relation from the
// scale of its members, which it names itself: they carry weights in its own
// per mil, so that it moves with them as any other does.
func convertedFinal(ctx context.Context, v source, f store.Version[store.Final], from string, rel store.Version[store.Relation]) (store.Final, []member, error) {
	body, members, err := againFinal(ctx, v, f)
	if err != nil {
		return body, nil, err
	}
	numbers, groups, err := memberNumbers(ctx, v, members)
	if err != nil {
		return body, nil, err
	}
	weights := make([]float64, len(members))
	for i, m := range body.Members {
		weights[i] = m.Weight
	}
	n, err := uncertain.Linear(0, weights, numbers)
	if err != nil {
		return body, nil, err
	}
	probability := body.Probability
	y, to, err := convert(rel, from, n)
	if err != nil {
		return body, nil, err
	}
	slope, err := slopeFrom(rel, from)
	if err != nil {
		return body, nil, err
	}
	for i := range body.Members {
		body.Members[i].Weight *= slope
	}
	body.Scale, body.Rule = to, fmt.Sprintf("converted from %s by %s", from, versionName(rel.Ref))
	body.Value, body.StandardUncertainty = y.Value, y.StandardUncertainty()
	expanded, err := uncertain.Expand(y, groups, uncertain.Coverage{Probability: probability})
	if err != nil {
		return body, nil, err
	}
	body.K, body.Expanded, body.Probability, body.EffectiveDF = expanded.CoverageFactor, expanded.U, expanded.Probability, finite(expanded.DegreesOfFreedom)
	return body, members, nil
}

// slopeFrom is the derivative of a converted delta by the original on a scale.
func slopeFrom(rel store.Version[store.Relation], from string) (float64, error) {
	k, err := relationOf(rel)
	if from == rel.Value.To {
		return 1 / k.Factor, err
	}
	return k.Factor, err
}

// converted gives what something converted was made from, and by which
// relation; ok is false for what was not.
func converted(ctx context.Context, v source, inputs []store.Input) (from store.Ref, rel store.Version[store.Relation], ok bool, err error) {
	for _, in := range inputs {
		switch in.Part {
		case "converted":
			from, ok = in.Ref, true
		case "relation":
			if rel, err = decodeVersion[store.Relation](ctx, v, in.Ref); err != nil {
				return from, rel, ok, err
			}
		}
	}
	return from, rel, ok, nil
}

// againConverted computes a converted final value again.
func againConverted(ctx context.Context, v source, f store.Version[store.Final], from store.Ref, rel store.Version[store.Relation]) (store.Final, []member, error) {
	original, err := decodeVersion[store.Final](ctx, v, from)
	if err != nil {
		return store.Final{}, nil, err
	}
	return convertedFinal(ctx, v, f, original.Value.Scale, rel)
}

// ConvertValue states the value of a material on another scale from its value
// in force on this one: a draft with the basis "conversion". It keeps the
// sources of the original, so the two stay correlated, and adds the constants'.
func (r *Registry) ConvertValue(ctx context.Context, actor Actor, material, from, measurand string, q ConvertRequest, validFrom *store.Instant) (Item[store.Value], error) {
	var out Item[store.Value]
	if validFrom == nil {
		return out, Complain("this value cannot be converted", []Complaint{{Place: "body.valid_from", Found: "nothing", Expected: "since when the value holds (RFC 3339)"}})
	}
	var code string
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		v := &tx.View
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		old, err := valueInForce(ctx, v, actor.Laboratory, key.Code, from, nameOr(measurand, Total), store.Moment{ValidAt: validFrom})
		if err != nil {
			return err
		}
		if old.State == store.Withdrawn {
			return Refuse(Conflict, "the value of %s on %s is withdrawn", key.Code, from)
		}
		rel, err := relationAt(ctx, v, actor.Laboratory, q.Relation, q.Version, store.Moment{ValidAt: validFrom})
		if err != nil {
			return err
		}
		body, err := convertedValue(old.Version, rel)
		if err != nil {
			return err
		}
		inputs, _, err := valueOf(ctx, v, actor.Laboratory, key.Code, body.Scale, body.Measurand)
		if err != nil {
			return err
		}
		inputs = append(inputs, store.Input{Part: "converted", Ref: old.Ref}, store.Input{Part: "relation", Ref: rel.Ref})
		code = ValueCode(body.Material, body.Scale, body.Measurand)
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: code}, Edit{After: q.After, Reason: q.Reason, ValidFrom: validFrom}, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Value](ctx, r, actor, store.KindValue, code)
}

// convertedValue is a value on the other side of a relation.
func convertedValue(old store.Version[store.Value], rel store.Version[store.Relation]) (store.Value, error) {
	n, groups, err := numberOf(old)
	if err != nil {
		return store.Value{}, err
	}
	y, to, err := convert(rel, old.Value.Scale, n)
	if err != nil {
		return store.Value{}, err
	}
	body := store.Value{Material: old.Value.Material, MaterialLaboratory: old.Value.MaterialLaboratory, Scale: to, Measurand: old.Value.Measurand,
		Value: store.Decimal(strconv.FormatFloat(y.Value, 'f', -1, 64)), StandardUncertainty: y.StandardUncertainty(), Basis: "conversion",
		Rule:        "converted by " + versionName(rel.Ref) + "; all sources kept",
		Evidence:    strings.Trim(versionName(old.Ref)+"; "+rel.Value.Evidence, "; "),
		Provisional: old.Value.Provisional || rel.Value.Provisional}
	stateNumber(&body, y, groups)
	body.Exact = len(y.Terms) == 0
	if b := old.Value.UBetweenUnits; b != nil {
		k := rel.Value.Factor
		factor, _ := new(complaints).number("factor", k)
		if old.Value.Scale == rel.Value.To {
			factor = 1 / factor
		}
		body.UBetweenUnits = scaledUnits(b, factor, to, groups, &body)
	}
	return body, nil
}

// scaledUnits is the homogeneity of a lot on a scale whose per mil is 1/factor
// of the old one's; its variance group becomes that of the new scale.
func scaledUnits(b *store.ValueComponent, factor float64, to string, groups []uncertain.Group, body *store.Value) *store.ValueComponent {
	out := *b
	out.StandardUncertainty *= math.Abs(factor)
	i := slices.IndexFunc(groups, func(g uncertain.Group) bool { return g.ID == b.Group })
	if i < 0 {
		return &out
	}
	square := factor * factor
	g := store.Group{ID: b.Group + "/" + to}
	for j, v := range groups[i].Variances {
		g.Variances = append(g.Variances, v*square)
		var row []float64
		for _, c := range groups[i].Covariance[j] {
			row = append(row, c*square*square)
		}
		g.Covariance = append(g.Covariance, row)
	}
	out.Group = g.ID
	body.Groups = append(body.Groups, g)
	return &out
}

// againConvertedValue computes a converted value again from the one it was made from.
func againConvertedValue(ctx context.Context, v source, from store.Ref, rel store.Version[store.Relation]) (store.Value, error) {
	old, err := decodeVersion[store.Value](ctx, v, from)
	if err != nil {
		return store.Value{}, err
	}
	return convertedValue(old, rel)
}
