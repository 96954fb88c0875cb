package registry

import (
	"context"
	"errors"
	"fmt"
	"regexp"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// MaterialKinds are what a material can be.
var MaterialKinds = []string{"defining", "international", "working", "gas", "control"}

// hazardPattern holds the codes of hazard statements and of precautionary ones,
// which are combined by a plus sign.
var hazardPattern = regexp.MustCompile(`^(H[2-4][0-9]{2}[A-Za-z]{0,2}(\+H[2-4][0-9]{2}){0,2}|EUH[0-9]{3}[A-Z]?|P[1-5][0-9]{2}(\+P[1-5][0-9]{2}){0,3})$`)

var roleWords = []string{string(calib.Anchor), string(calib.Control), string(calib.Monitor), string(calib.Blank), string(calib.Gas), string(calib.Conditioning), string(calib.Sample)}

// StateMaterial registers a material (Edit.After 0) or states a further version of it.
func (r *Registry) StateMaterial(ctx context.Context, actor Actor, code string, m store.Material, e Edit) (Item[store.Material], error) {
	var out Item[store.Material]
	var c complaints
	c.code("body.code", code)
	c.text("body.name", m.Name, 200)
	c.oneOf("body.kind", m.Kind, MaterialKinds...)
	for i, h := range m.Hazards {
		if !hazardPattern.MatchString(h) {
			c.add(fmt.Sprintf("body.hazards[%d]", i), quote(h), "the code of a GHS hazard statement such as H220, or of a precautionary one such as P280")
		}
	}
	for i, roles := range m.Roles {
		for j, role := range roles.Roles {
			c.oneOf(fmt.Sprintf("body.roles[%d].roles[%d]", i, j), string(role), roleWords...)
		}
	}
	if m.Minimum != nil {
		c.number("body.minimum_portion.value", m.Minimum.Value)
	}
	if err := Complain("this material cannot be registered", c); err != nil {
		return out, err
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindMaterial, Code: code}
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		if e.After == 0 {
			if err := codeFree(ctx, &tx.View, key); err != nil {
				return err
			}
		}
		if err := checkSuccession(ctx, &tx.View, key, &m); err != nil {
			return err
		}
		_, err := appendVersion(ctx, tx, actor, key, e, nil, m)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Material](ctx, r, actor, store.KindMaterial, code)
}

// codeFree refuses a material's code that is taken in any case, here or in common:
// a producer's new batch under an old name is a new material.
func codeFree(ctx context.Context, v *store.View, key store.Key) error {
	for _, laboratory := range []string{key.Laboratory, store.Common} {
		keys, err := v.Resolve(ctx, laboratory, key.Kind, key.Code)
		if err != nil {
			return err
		}
		for _, k := range keys {
			if strings.EqualFold(k.Code, key.Code) {
				return Refuse(Conflict, "%s %q exists already in laboratory %s; another batch or lot is another code", key.Kind, k.Code, laboratory)
			}
		}
	}
	return nil
}

// Materials lists the materials of the laboratory, or of common.
func (r *Registry) Materials(ctx context.Context, actor Actor, common bool, q Query) (Page[Item[store.Material]], error) {
	laboratory := actor.Laboratory
	if common {
		laboratory = store.Common
	}
	var page Page[Item[store.Material]]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		page, err = list[store.Material](ctx, v, laboratory, store.KindMaterial, q)
		return err
	})
	return page, err
}

// FindMaterial answers a code, name, alias or outside identifier with the one
// material it names; more than one is refused with the candidates.
func (r *Registry) FindMaterial(ctx context.Context, actor Actor, name string, m store.Moment) (Item[store.Material], error) {
	var out Item[store.Material]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key, err := findMaterial(ctx, v, actor.Laboratory, name)
		if err != nil {
			return err
		}
		raw, _, err := v.InForce(ctx, key, m)
		if err != nil {
			return missing(err, key)
		}
		out, err = item[store.Material](ctx, v, raw, m)
		return err
	})
	return out, err
}

// findMaterial resolves a name in the laboratory, then in common.
func findMaterial(ctx context.Context, v *store.View, laboratory, name string) (store.Key, error) {
	for _, lab := range []string{laboratory, store.Common} {
		keys, err := v.Resolve(ctx, lab, store.KindMaterial, name)
		if err != nil {
			return store.Key{}, err
		}
		if len(keys) > 1 { // an exact code settles it
			exact := slices.IndexFunc(keys, func(k store.Key) bool { return k.Code == name })
			if exact < 0 {
				return store.Key{}, &AmbiguousError{Name: name, Candidates: keys}
			}
			return keys[exact], nil
		}
		if len(keys) == 1 {
			return keys[0], nil
		}
	}
	return store.Key{}, missing(store.ErrNotFound, store.Key{Laboratory: laboratory, Kind: store.KindMaterial, Code: name})
}

// An AmbiguousError names the records that one name could mean.
type AmbiguousError struct {
	Name       string
	Candidates []store.Key
}

func (e *AmbiguousError) Error() string {
	return fmt.Sprintf("%q could be %s", e.Name, e.candidates())
}

func (e *AmbiguousError) candidates() string {
	names := make([]string, len(e.Candidates))
	for i, k := range e.Candidates {
		names[i] = fmt.Sprintf("%s %s", k.Kind, k.Code)
	}
	return short(names, 5)
}

// Unwrap gives the error its meaning.
func (e *AmbiguousError) Unwrap() error {
	return Refuse(Invalid, "%s: say which by its code", e.Error())
}

// UnitStates are the states of a unit, and what may follow each.
var unitSteps = map[string][]string{
	"sealed":      {"open", "in-use", "suspect", "quarantined", "disposed"},
	"open":        {"in-use", "suspect", "quarantined", "empty", "disposed"},
	"in-use":      {"open", "suspect", "quarantined", "empty", "disposed"},
	"suspect":     {"open", "in-use", "quarantined", "empty", "disposed"},
	"quarantined": {"suspect", "disposed", "empty"},
	"empty":       {"disposed"},
	"disposed":    {},
}

// MaxUnits bounds how many units one act registers.
const MaxUnits = 1000

// AddUnits registers units of a material, all of one state and content. Labels
// are numbered behind the given one when there are several.
func (r *Registry) AddUnits(ctx context.Context, actor Actor, u store.Unit, count int) ([]Item[store.Unit], error) {
	var c complaints
	c.text("body.material", u.Material, 40)
	c.text("body.label", u.Label, 100)
	if u.State == "" {
		u.State = "sealed"
	}
	if _, ok := unitSteps[u.State]; !ok {
		c.add("body.state", quote(u.State), "one of sealed, open, in-use, suspect, quarantined, empty, disposed")
	}
	if u.Content != nil {
		if x, ok := c.number("body.content.value", u.Content.Value); ok && x < 0 {
			c.add("body.content.value", string(u.Content.Value), "a content of 0 or more")
		}
	}
	checkContainer(&c, "body.container", u.Container)
	if count < 1 || count > MaxUnits {
		c.add("body.count", fmt.Sprint(count), "1 to %d units in one act", MaxUnits)
	}
	if err := Complain("these units cannot be registered", c); err != nil {
		return nil, err
	}
	var codes []string
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		codes = codes[:0]
		key, err := findMaterial(ctx, &tx.View, actor.Laboratory, u.Material)
		if err != nil {
			return err
		}
		material, _, err := tx.InForce(ctx, key, store.Moment{})
		if err != nil {
			return missing(err, key)
		}
		u.Material, u.MaterialLaboratory = key.Code, key.Laboratory
		for i := range count {
			code, err := r.draw(ctx, &tx.View, actor.Laboratory, 'B')
			if err != nil {
				return err
			}
			body := u
			if count > 1 {
				body.Label, body.FillingOrder = fmt.Sprintf("%s %d", u.Label, i+1), i+1
			}
			if _, err := tx.Append(ctx, store.Draft{Kind: store.KindUnit, Code: code, By: actor.Person, After: first,
				Inputs: []store.Input{{Part: "material", Ref: material.Ref}}, Value: body}); err != nil {
				return err
			}
			codes = append(codes, code)
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	out := make([]Item[store.Unit], 0, len(codes))
	for _, code := range codes {
		it, err := reread[store.Unit](ctx, r, actor, store.KindUnit, code)
		if err != nil {
			return nil, err
		}
		out = append(out, it)
	}
	return out, nil
}

// ChangeUnit states a further version of a unit: opened, moved, quarantined, empty.
func (r *Registry) ChangeUnit(ctx context.Context, actor Actor, code string, state, location string, content *store.Amount, e Edit) (Item[store.Unit], error) {
	return r.UseUnit(ctx, actor, code, UnitUse{State: state, Location: location, Left: content}, e)
}

// Units lists the units of the laboratory; material narrows it to one material's.
func (r *Registry) Units(ctx context.Context, actor Actor, material string, q Query) (Page[Item[store.Unit]], error) {
	var page Page[Item[store.Unit]]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		if material == "" {
			var err error
			page, err = list[store.Unit](ctx, v, actor.Laboratory, store.KindUnit, q)
			return err
		}
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		page = Page[Item[store.Unit]]{}
		edges, after, err := v.EdgesTo(ctx, store.EdgeQuery{Laboratory: actor.Laboratory, To: key, FromKind: store.KindUnit, After: q.After, Limit: q.limit()})
		if err != nil {
			return err
		}
		page.After = after
		seen := map[string]bool{}
		for _, edge := range edges {
			if seen[edge.From.Code] {
				continue
			}
			seen[edge.From.Code] = true
			it, err := newest[store.Unit](ctx, v, edge.From.Key)
			if err != nil {
				return err
			}
			page.Items = append(page.Items, it)
		}
		return nil
	})
	return page, err
}

// StateInstrument registers an instrument or states a further version of it.
func (r *Registry) StateInstrument(ctx context.Context, actor Actor, code string, in store.Instrument, e Edit) (Item[store.Instrument], error) {
	var out Item[store.Instrument]
	var c complaints
	c.code("body.code", code)
	c.text("body.name", in.Name, 200)
	if err := Complain("this instrument cannot be registered", c); err != nil {
		return out, err
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindInstrument, Code: code}
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		_, err := appendVersion(ctx, tx, actor, key, e, nil, in)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Instrument](ctx, r, actor, store.KindInstrument, code)
}

// List pages through one kind of record of the laboratory, or of common.
func List[T store.Body](ctx context.Context, r *Registry, actor Actor, laboratory string, kind store.Kind, q Query) (Page[Item[T]], error) {
	var page Page[Item[T]]
	if laboratory != store.Common {
		laboratory = actor.Laboratory
	}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		page, err = list[T](ctx, v, laboratory, kind, q)
		return err
	})
	return page, err
}

// ignoreUnknown lets pass that a name means nothing, or several things.
func ignoreUnknown(err error) error {
	var ambiguous *AmbiguousError
	if errors.As(err, &ambiguous) {
		return nil
	}
	return ignoreNotFound(err)
}

func ignoreNotFound(err error) error {
	if errors.Is(err, store.ErrNotFound) {
		return nil
	}
	return err
}
