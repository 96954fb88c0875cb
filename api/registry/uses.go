package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// Containers are what a unit can be.
var Containers = []string{"bottle", "vial", "ampoule", "cylinder"}

// A UnitUse is what happened to a unit outside sessions, which log their own use.
type UnitUse struct {
	State, Location string        // "" leaves what there was
	Left            *store.Amount // what is in it now
	Taken           *store.Amount // what was taken from it
	At              *store.Instant
	Excursion       string // how it was not stored as it should be
}

// apply changes a unit. place says where the request stated a field; what is
// wrong is complained of, what a unit in this state cannot become is refused.
func (q UnitUse) apply(u *store.Unit, code string, now store.Instant, c *complaints, place func(string) string) error {
	happened := now
	u.At, u.Taken = nil, nil
	if q.At != nil {
		happened, u.At = *q.At, q.At
		if happened > now {
			c.add(place("at"), happened.String(), "a time that is not in the future")
		}
	}
	before := u.State
	if q.State != "" && q.State != u.State {
		if _, ok := unitSteps[q.State]; !ok {
			c.add(place("state"), quote(q.State), "one of sealed, open, in-use, suspect, quarantined, empty, disposed")
			return nil
		}
		if !slices.Contains(unitSteps[u.State], q.State) {
			return Refuse(Conflict, "%sunit %s is %s and cannot become %s; from there it can become %s", prefixed(place("")), store.FormatCode(code), u.State, q.State, strings.Join(append(slices.Clone(unitSteps[u.State]), "nothing else"), ", "))
		}
		u.State = q.State
	}
	if opens(before, q.State) {
		u.Openings++
		if u.OpenedAt == nil || happened < *u.OpenedAt {
			u.OpenedAt = &happened
		}
	}
	u.Location = nameOr(q.Location, u.Location)
	_, own, _ := inBase(u.Content)
	for _, a := range []struct {
		field  string
		amount *store.Amount
	}{{"left", q.Left}, {"taken", q.Taken}} {
		if a.amount == nil {
			continue
		}
		x, base, known := inBase(a.amount)
		switch {
		case !known:
			c.add(place(a.field), fmt.Sprintf("%s %s", a.amount.Value, quote(a.amount.Unit)), "a mass or volume in kg, g, mg, ug, L, mL or uL")
		case x < 0 || a.field == "taken" && x == 0:
			c.add(place(a.field), string(a.amount.Value), "an amount above 0")
		case own != "" && base != own:
			c.add(place(a.field), a.amount.Unit, "a unit of measurement that goes with its content, which is in %s", u.Content.Unit)
		}
	}
	if q.Left != nil {
		u.Content = q.Left
	}
	u.Taken = q.Taken
	if q.Excursion != "" {
		u.Excursions = append(slices.Clone(u.Excursions), store.Excursion{At: happened, What: q.Excursion})
	}
	return nil
}

func prefixed(place string) string {
	if place == "" {
		return ""
	}
	return place + ": "
}

// UseUnit states a further version of a unit: what happened to it.
func (r *Registry) UseUnit(ctx context.Context, actor Actor, code string, q UnitUse, e Edit) (Item[store.Unit], error) {
	var out Item[store.Unit]
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindUnit, Code: code}
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		old, err := newest[store.Unit](ctx, &tx.View, key)
		if err != nil {
			return err
		}
		body := old.Value
		var c complaints
		place := func(field string) string {
			switch field {
			case "":
				return ""
			case "left":
				field = "content"
			}
			return "body." + field
		}
		if err := q.apply(&body, code, store.InstantOf(r.now()), &c, place); err != nil {
			return err
		}
		if err := Complain("this cannot be said of the unit", c); err != nil {
			return err
		}
		if e.After == 0 {
			e.After = old.Ref.Version
		}
		_, err = appendVersion(ctx, tx, actor, key, e, old.Inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Unit](ctx, r, actor, store.KindUnit, code)
}

// A UseRow is one line of a log of uses kept outside sessions.
type UseRow struct {
	Unit   string // code, or a label that means one unit
	Reason string
	UnitUse
	// Place tells where a field stands in the sender's own words; its names are
	// those of UseHeadings of package exchange.
	Place func(field string) string
}

// MaxUses bounds the lines of one log.
const MaxUses = 5000

// LogUses states what happened to units, all lines or none, in their order.
func (r *Registry) LogUses(ctx context.Context, actor Actor, rows []UseRow) ([]Item[store.Unit], error) {
	if len(rows) == 0 {
		return nil, Refuse(Invalid, "there are no uses to log")
	}
	if len(rows) > MaxUses {
		return nil, Refuse(TooLarge, "%d uses: one act takes at most %d", len(rows), MaxUses)
	}
	var changed []string
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		changed = changed[:0]
		var c complaints
		now := store.InstantOf(r.now())
		type held struct {
			body   store.Unit
			inputs []store.Input
			after  int
		}
		units := map[string]*held{}
		for _, row := range rows {
			code, err := unitNamed(ctx, &tx.View, actor.Laboratory, row, &c)
			if err != nil {
				return err
			}
			if strings.TrimSpace(row.Reason) == "" {
				c.add(row.Place("reason"), "nothing", "what happened and why")
			}
			if code == "" {
				continue
			}
			h := units[code]
			if h == nil {
				old, err := newest[store.Unit](ctx, &tx.View, store.Key{Laboratory: actor.Laboratory, Kind: store.KindUnit, Code: code})
				if err != nil {
					return err
				}
				h = &held{old.Value, old.Inputs, old.Ref.Version}
				units[code] = h
				changed = append(changed, code)
			}
			if err := row.apply(&h.body, code, now, &c, row.Place); err != nil {
				return err
			}
			if len(c) > 0 {
				continue // one refusal names every fault
			}
			ref, err := appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindUnit, Code: code}, Edit{After: h.after, Reason: row.Reason}, h.inputs, h.body)
			if err != nil {
				return err
			}
			h.after = ref.Version
		}
		return Complain("these uses cannot be logged; nothing was stored", c)
	})
	if err != nil {
		return nil, err
	}
	return r.unitsOf(ctx, actor, changed)
}

// unitNamed finds the unit of a row; "" with a complaint where there is not one.
func unitNamed(ctx context.Context, v *store.View, laboratory string, row UseRow, c *complaints) (string, error) {
	lookFor := row.Unit
	if code, err := store.ParseCode(row.Unit); err == nil && code[0] == store.LetterUnit {
		lookFor = code
	}
	keys, err := v.Resolve(ctx, laboratory, store.KindUnit, lookFor)
	if err != nil {
		return "", err
	}
	switch {
	case len(keys) == 0:
		c.add(row.Place("unit"), quote(row.Unit), "the code or label of a unit")
	case len(keys) > 1:
		c.add(row.Place("unit"), quote(row.Unit), "a label that means one unit; use its code")
	default:
		return keys[0].Code, nil
	}
	return "", nil
}

func (r *Registry) unitsOf(ctx context.Context, actor Actor, codes []string) ([]Item[store.Unit], error) {
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

// A UnitRow is one unit of a list of units.
type UnitRow struct {
	store.Unit
	// Place tells where a field stands in the sender's own words; its names are
	// those of UnitHeadings of package exchange.
	Place func(field string) string
}

// ImportUnits registers units of any materials, all or none.
func (r *Registry) ImportUnits(ctx context.Context, actor Actor, rows []UnitRow) ([]Item[store.Unit], error) {
	if len(rows) == 0 {
		return nil, Refuse(Invalid, "there are no units to register")
	}
	if len(rows) > MaxUnits {
		return nil, Refuse(TooLarge, "%d units: one act takes at most %d", len(rows), MaxUnits)
	}
	var codes []string
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		codes = codes[:0]
		var c complaints
		labels := map[[2]string]bool{}
		drawn := map[string]bool{}
		for _, row := range rows {
			material, err := checkUnitRow(ctx, &tx.View, actor.Laboratory, &row, labels, &c)
			if err != nil {
				return err
			}
			if len(c) > 0 {
				continue // one refusal names every fault
			}
			code, err := r.draw(ctx, &tx.View, actor.Laboratory, store.LetterUnit)
			for err == nil && drawn[code] {
				code, err = r.draw(ctx, &tx.View, actor.Laboratory, store.LetterUnit)
			}
			if err != nil {
				return err
			}
			drawn[code] = true
			if _, err := tx.Append(ctx, store.Draft{Kind: store.KindUnit, Code: code, By: actor.Person, After: first,
				Inputs: []store.Input{{Part: "material", Ref: material}}, Value: row.Unit}); err != nil {
				return err
			}
			codes = append(codes, code)
		}
		return Complain("these units cannot be registered; nothing was stored", c)
	})
	if err != nil {
		return nil, err
	}
	return r.unitsOf(ctx, actor, codes)
}

// checkUnitRow completes a row and finds its material.
func checkUnitRow(ctx context.Context, v *store.View, laboratory string, row *UnitRow, labels map[[2]string]bool, c *complaints) (store.Ref, error) {
	u := &row.Unit
	u.State = nameOr(u.State, "sealed")
	if _, ok := unitSteps[u.State]; !ok {
		c.add(row.Place("state"), quote(u.State), "one of sealed, open, in-use, suspect, quarantined, empty, disposed")
	}
	checkContainer(c, row.Place("container"), u.Container)
	c.text(row.Place("label"), u.Label, 100)
	if u.Content != nil {
		if x, ok := c.number(row.Place("content"), u.Content.Value); ok && x < 0 {
			c.add(row.Place("content"), string(u.Content.Value), "a content of 0 or more")
		}
		c.text(row.Place("content_unit"), u.Content.Unit, 20)
	}
	if u.FillingOrder < 0 {
		c.add(row.Place("filling_order"), fmt.Sprint(u.FillingOrder), "its place in the order of filling, from 1, or nothing")
	}
	key, err := findMaterial(ctx, v, laboratory, u.Material)
	if err != nil {
		c.add(row.Place("material"), quote(u.Material), "something registered: %v", err)
		return store.Ref{}, ignoreUnknown(err)
	}
	m, _, err := v.InForce(ctx, key, store.Moment{})
	if err != nil {
		return store.Ref{}, missing(err, key)
	}
	u.Material, u.MaterialLaboratory = key.Code, key.Laboratory
	name := [2]string{key.Code, store.Fold(u.Label)}
	keys, err := v.Resolve(ctx, laboratory, store.KindUnit, u.Label)
	if err != nil {
		return store.Ref{}, err
	}
	taken := labels[name]
	labels[name] = true
	for _, k := range keys {
		old, err := newest[store.Unit](ctx, v, k)
		if err != nil {
			return store.Ref{}, err
		}
		taken = taken || old.Value.Material == key.Code
	}
	if taken && u.Label != "" {
		c.add(row.Place("label"), quote(u.Label), "a label that no other unit of %s has", key.Code)
	}
	return m.Ref, nil
}

func checkContainer(c *complaints, place, container string) {
	if container != "" {
		c.oneOf(place, container, Containers...)
	}
}
