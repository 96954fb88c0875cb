package registry

import (
	"context"
	"errors"
	"fmt"
	"slices"

	"deltamoor/store"
)

// BackLoadReason is why a value of before the registry is stated.
const BackLoadReason = "assigned before deltamoor"

// A BackLoadRow is a value assigned before the registry was in use: what a
// certificate, a notebook or an old system says of it.
type BackLoadRow struct {
	Material, Scale, Measurand string
	Value                      store.Decimal
	Stated                     store.Stated
	DegreesOfFreedom           *float64
	Basis, Evidence            string
	ValidFrom                  *store.Instant
	// Place tells where a field stands in the sender's own words; its names are
	// those of ValueHeadings of package exchange.
	Place func(field string) string
}

// MaxBackLoad bounds the values of one act.
const MaxBackLoad = 5000

// BackLoadValues states values that were assigned before the registry was in
// use, all or none, as drafts: labelled so on every trace, never recomputed,
// since what they rest on is not here. Rows of one material and scale become
// versions of one record, in the order given.
func (r *Registry) BackLoadValues(ctx context.Context, actor Actor, rows []BackLoadRow) ([]Item[store.Value], error) {
	if len(rows) == 0 {
		return nil, Refuse(Invalid, "there are no values to load")
	}
	if len(rows) > MaxBackLoad {
		return nil, Refuse(TooLarge, "%d values: one act takes at most %d", len(rows), MaxBackLoad)
	}
	var stated []store.Ref
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		stated = stated[:0]
		var c complaints
		for _, row := range rows {
			inputs, body, err := backLoaded(ctx, &tx.View, actor.Laboratory, row, &c)
			if err != nil {
				return err
			}
			if len(c) > 0 {
				continue // one refusal names every fault
			}
			key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: ValueCode(body.Material, body.Scale, body.Measurand)}
			e := Edit{Reason: BackLoadReason, ValidFrom: row.ValidFrom}
			old, err := tx.Newest(ctx, key)
			if ignoreNotFound(err) != nil {
				return err
			}
			if err == nil {
				e.After = old.Ref.Version
			}
			ref, err := appendVersion(ctx, tx, actor, key, e, inputs, body)
			if err != nil {
				return err
			}
			stated = append(stated, ref)
		}
		return Complain("these values cannot be loaded; nothing was stored", c)
	})
	if err != nil {
		return nil, err
	}
	out := make([]Item[store.Value], 0, len(stated))
	for _, ref := range stated {
		it, err := One[store.Value](ctx, r, actor, store.KindValue, ref.Code, ref.Version, store.Moment{})
		if err != nil {
			return nil, err
		}
		out = append(out, it)
	}
	return out, nil
}

func backLoaded(ctx context.Context, v *store.View, laboratory string, row BackLoadRow, c *complaints) ([]store.Input, store.Value, error) {
	before := len(*c)
	c.number(row.Place("value"), row.Value)
	if !slices.Contains(Bases, row.Basis) {
		c.oneOf(row.Place("basis"), row.Basis, Bases...)
	}
	if row.ValidFrom == nil {
		c.add(row.Place("valid_from"), "nothing", "since when the value held, such as 2018-01-01")
	}
	if row.Evidence == "" && row.Basis != "provisional" {
		c.add(row.Place("evidence"), "nothing", `where the value stands (certificate, notebook, report); without any, the basis is "provisional"`)
	}
	if row.DegreesOfFreedom != nil && !(*row.DegreesOfFreedom >= 1) {
		c.add(row.Place("nu"), fmt.Sprint(*row.DegreesOfFreedom), "degrees of freedom of 1 or more, or nothing when u is known")
	}
	u, rule, err := StandardFrom(row.Stated)
	var invalid *Error
	if errors.As(err, &invalid) {
		field := map[string]string{"body.stated.text": "uncertainty", "body.stated.k": "k", "body.stated.kind": "kind"}
		for _, k := range invalid.Complaints {
			k.Place = row.Place(field[k.Place])
			*c = append(*c, k)
		}
	} else if row.Stated.Kind == "exact" && row.Basis != "definition" {
		c.add(row.Place("kind"), `"exact"`, `an uncertainty: only a value that defines a scale (basis "definition") is exact`)
	}
	inputs, body, err := valueOf(ctx, v, laboratory, row.Material, row.Scale, row.Measurand)
	if err != nil {
		var ambiguous *AmbiguousError
		if !errors.Is(err, store.ErrNotFound) && !errors.As(err, &ambiguous) {
			return nil, body, err
		}
		place, found := row.Place("material"), row.Material
		if _, lost := findMaterial(ctx, v, laboratory, row.Material); lost == nil {
			place, found = row.Place("scale"), row.Scale
		}
		c.add(place, quote(found), "something registered: %v", err)
	}
	if len(*c) > before {
		return nil, body, nil
	}
	body.Value, body.StandardUncertainty, body.Rule, body.Stated = row.Value, u, rule, &row.Stated
	body.Exact, body.DegreesOfFreedom = row.Stated.Kind == "exact", row.DegreesOfFreedom
	body.Basis, body.Evidence, body.Provisional, body.BackLoaded = row.Basis, row.Evidence, row.Basis == "provisional", true
	return inputs, body, nil
}
