package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// Causes are the short list of why a reading is left out or a session fails.
var Causes = []string{"leak", "size", "overlap", "yield", "wrong position", "contamination", "instrument", "weighing", "other"}

// Exclude records that readings are left out of fits, or let in again: who,
// when, why. The readings themselves stay as they are.
func (r *Registry) Exclude(ctx context.Context, actor Actor, session string, x store.Exclusion, e Edit) (Item[store.Exclusion], error) {
	var out Item[store.Exclusion]
	var c complaints
	c.oneOf("body.act", x.Act, "exclude", "readmit")
	c.oneOf("body.cause", x.Cause, Causes...)
	if strings.TrimSpace(e.Reason) == "" {
		c.add("body.reason", "nothing", "why, in a sentence")
	}
	if len(x.Readings) == 0 || len(x.Readings) > 10_000 {
		c.add("body.readings", fmt.Sprintf("%d numbers", len(x.Readings)), "the numbers of 1 to 10000 readings")
	}
	if err := Complain("this exclusion cannot be recorded", c); err != nil {
		return out, err
	}
	x.Session = session
	x.Readings = slices.Compact(slices.Sorted(slices.Values(x.Readings)))
	err := r.write(ctx, actor, MayFit, func(ctx context.Context, tx *store.Tx) error {
		s, err := newest[store.Session](ctx, &tx.View, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: session})
		if err != nil {
			return err
		}
		var c complaints
		excluded, acts, err := exclusions(ctx, &tx.View, actor.Laboratory, session)
		if err != nil {
			return err
		}
		for i, n := range x.Readings {
			place := fmt.Sprintf("body.readings[%d]", i)
			switch {
			case n < 1 || n > s.Value.Readings:
				c.add(place, fmt.Sprint(n), "a reading number from 1 to %d", s.Value.Readings)
			case x.Act == "exclude" && excluded[n]:
				c.add(place, fmt.Sprint(n), "a reading that is not excluded already")
			case x.Act == "readmit" && !excluded[n]:
				c.add(place, fmt.Sprint(n), "a reading that is excluded")
			}
		}
		if err := Complain("this exclusion cannot be recorded", c); err != nil {
			return err
		}
		if seen := len(acts); e.After != seen {
			return Refuse(Stale, "session %s has %d acts of exclusion by now, not %d: read them again", store.FormatCode(session), seen, e.After)
		}
		_, err = tx.Append(ctx, store.Draft{Kind: store.KindExclusion, Code: session, By: actor.Person, Reason: strings.TrimSpace(e.Reason),
			Inputs: []store.Input{{Part: "session", Ref: s.Ref}}, Value: x, After: &e.After})
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Exclusion](ctx, r, actor, store.KindExclusion, session)
}

// exclusions replays a session's acts: which readings are out now, and every
// act's version in order.
func exclusions(ctx context.Context, v *store.View, laboratory, session string) (map[int]bool, []store.Ref, error) {
	out := map[int]bool{}
	key := store.Key{Laboratory: laboratory, Kind: store.KindExclusion, Code: session}
	var acts []store.Ref
	for after := 0; ; {
		raws, err := v.Versions(ctx, key, after, MaxPage)
		if err != nil {
			return nil, nil, err
		}
		for _, raw := range raws {
			x, err := store.Decode[store.Exclusion](raw)
			if err != nil {
				return nil, nil, err
			}
			for _, n := range x.Value.Readings {
				if x.Value.Act == "exclude" {
					out[n] = true
				} else {
					delete(out, n)
				}
			}
			acts, after = append(acts, x.Ref), x.Ref.Version
		}
		if len(raws) < MaxPage {
			return out, acts, nil
		}
	}
}

// StateOutcome says what became of a session for one quantity.
func (r *Registry) StateOutcome(ctx context.Context, actor Actor, session string, o store.Outcome, e Edit) (Item[store.Outcome], error) {
	var out Item[store.Outcome]
	var c complaints
	c.text("body.quantity", o.Quantity, 20)
	c.oneOf("body.outcome", o.Outcome, "accepted", "in part", "rejected")
	if o.Outcome != "accepted" {
		c.oneOf("body.cause", o.Cause, Causes...)
		if strings.TrimSpace(e.Reason) == "" {
			c.add("body.reason", "nothing", "why it is %s", o.Outcome)
		}
	}
	if o.Outcome == "in part" && !(o.From >= 1 && o.To >= o.From) {
		c.add("body.from", fmt.Sprintf("%d to %d", o.From, o.To), "the first and last reading number that are accepted")
	}
	if err := Complain("this outcome cannot be recorded", c); err != nil {
		return out, err
	}
	o.Session = session
	code := OutcomeCode(session, o.Quantity)
	err := r.write(ctx, actor, MayFit, func(ctx context.Context, tx *store.Tx) error {
		s, err := newest[store.Session](ctx, &tx.View, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: session})
		if err != nil {
			return err
		}
		method, err := sessionMethod(ctx, &tx.View, s.Version)
		if err != nil {
			return err
		}
		if !slices.ContainsFunc(method.Value.Quantities, func(q store.MethodQuantity) bool { return q.Quantity == o.Quantity }) {
			return Complain("this outcome cannot be recorded", []Complaint{{Place: "body.quantity", Found: quote(o.Quantity), Expected: "a quantity of method " + method.Code}})
		}
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindOutcome, Code: code}, e, []store.Input{{Part: "session", Ref: s.Ref}}, o)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Outcome](ctx, r, actor, store.KindOutcome, code)
}

// OutcomeCode is the code of the record of a session's outcome for a quantity.
func OutcomeCode(session, quantity string) string { return session + "/" + quantity }
