package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// changes are a compiled revision: what replaces what.
type changes struct {
	laboratory string
	body       store.Revision
	values     map[store.Ref]*changedValue // by the old version, without hash
	methods    map[store.Ref]store.Ref     // without and with hash
	factors    map[store.Ref]store.Ref     // the same
	units      map[string]*store.Instant
	readings   map[string][]int
	// direct are calibrations that change by themselves, with the component that
	// changes them; parts counts the components.
	direct map[store.Ref]int
	parts  int
}

// A changedValue is a value that a revision replaces or withdraws.
type changedValue struct {
	store.RevisedValue
	part  int
	old   store.Version[store.Value]
	delta float64 // new − old (‰); 0 where withdrawn
}

// draft is the version that the revision states of a value it changes itself.
func (c *changedValue) draft(laboratory, by, reason string) store.Draft {
	body := c.old.Value
	_, rule, _ := StandardFrom(*c.Stated) // resolved when it was proposed
	body.Value, body.StandardUncertainty, body.Stated, body.Rule = c.Value, c.StandardUncertainty, c.Stated, rule
	body.Basis, body.Evidence, body.Provisional = c.Basis, c.Evidence, c.Basis == "provisional"
	body.Exact, body.DegreesOfFreedom, body.Document, body.Sources, body.Groups, body.Campaign = false, nil, nil, nil, nil, nil
	body.UBetweenUnits, body.ULongTerm, body.Status, body.Note = nil, nil, "", ""
	var inputs []store.Input
	for _, in := range c.old.Inputs {
		if in.Part == "material" || in.Part == "scale" {
			inputs = append(inputs, in)
		}
	}
	return store.Draft{Kind: store.KindValue, Code: c.old.Code, By: by, Reason: reason, ValidFrom: c.validFrom(), Inputs: inputs, Value: body}
}

// validFrom is since when the changed value holds.
func (c *changedValue) validFrom() *store.Instant {
	if c.From != nil {
		return c.From
	}
	return c.old.ValidFrom
}

// applies tells whether the change concerns a session that started then.
func (c *changedValue) applies(started *store.Instant) bool { return since(c.From, started) }

func since(from, started *store.Instant) bool {
	return from == nil || started != nil && *started >= *from
}

// compile loads what a revision names and finds the calibrations it changes
// directly: by a bottle, a method version or a reading.
func compile(ctx context.Context, v *store.View, laboratory string, body store.Revision) (*changes, error) {
	c := &changes{laboratory: laboratory, body: body, values: map[store.Ref]*changedValue{}, methods: map[store.Ref]store.Ref{}, factors: map[store.Ref]store.Ref{},
		units: map[string]*store.Instant{}, readings: map[string][]int{}, direct: map[store.Ref]int{}}
	records := map[string]bool{}
	for _, r := range body.Values {
		old, err := decodeVersion[store.Value](ctx, v, r.Old)
		if err != nil {
			return nil, err
		}
		change := &changedValue{RevisedValue: r, part: c.next(), old: old}
		number, _, err := numberOf(old)
		if err != nil {
			return nil, err
		}
		now := r.Value
		if r.New != nil {
			version, err := decodeVersion[store.Value](ctx, v, *r.New)
			if err != nil {
				return nil, err
			}
			now = version.Value.Value
		}
		if !r.Withdrawn {
			x, ok := new(complaints).number("value", now)
			if !ok {
				return nil, fmt.Errorf("%s: changed value %q is not a number", r.Old, now)
			}
			change.delta = x - number.Value
		}
		if r.New == nil && !r.Withdrawn {
			id := fmt.Sprintf("%s %v", old.Code, instantText(change.validFrom()))
			if records[id] {
				return nil, Refuse(Invalid, "two new values of %s would hold from the same moment: state since when each holds", old.Code)
			}
			records[id] = true
		}
		c.values[r.Old.Bare()] = change
	}
	for _, u := range body.Units {
		c.units[u.Unit] = u.Since
		part := c.next()
		for after := ""; ; {
			uses, err := v.Uses(ctx, laboratory, u.Unit, after, MaxPage)
			if err != nil {
				return nil, err
			}
			for _, use := range uses {
				started, err := startOf(ctx, v, laboratory, use.Session)
				if err != nil {
					return nil, err
				}
				if !since(u.Since, started) {
					continue
				}
				if err := c.start(ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindSession, Code: use.Session}, 0, "session", part); err != nil {
					return nil, err
				}
			}
			if len(uses) < MaxPage {
				break
			}
			after = uses[len(uses)-1].Session
		}
	}
	for _, m := range body.Methods {
		c.methods[m.Old.Bare()] = m.New
		if err := c.start(ctx, v, m.Old.Key, m.Old.Version, "method", c.next()); err != nil {
			return nil, err
		}
	}
	for _, f := range body.Factors {
		c.factors[f.Old.Bare()] = f.New
		component := c.next()
		for _, part := range []string{"factor", "factor earlier"} {
			if err := c.start(ctx, v, f.Old.Key, f.Old.Version, part, component); err != nil {
				return nil, err
			}
		}
	}
	for _, x := range body.Exclusions {
		c.readings[x.Session] = append(c.readings[x.Session], x.Readings...)
		if err := c.start(ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindSession, Code: x.Session}, 0, "session", c.next()); err != nil {
			return nil, err
		}
	}
	return c, nil
}

func instantText(at *store.Instant) string {
	if at == nil {
		return ""
	}
	return at.String()
}

func startOf(ctx context.Context, v *store.View, laboratory, session string) (*store.Instant, error) {
	raw, err := v.Newest(ctx, store.Key{Laboratory: laboratory, Kind: store.KindSession, Code: session})
	if err != nil {
		return nil, err
	}
	s, err := store.Decode[store.Session](raw)
	return s.Value.StartedAt, err
}

func (c *changes) next() int {
	c.parts++
	return c.parts - 1
}

// start adds the calibrations that name a record in some part.
func (c *changes) start(ctx context.Context, v *store.View, to store.Key, version int, part string, component int) error {
	for after := ""; ; {
		edges, next, err := v.EdgesTo(ctx, store.EdgeQuery{Laboratory: c.laboratory, To: to, Version: version, FromKind: store.KindCalibration, After: after, Limit: MaxPage, AsOf: &c.body.FrozenAt})
		if err != nil {
			return err
		}
		for _, e := range edges {
			if _, known := c.direct[e.From]; e.Part == part && !known {
				c.direct[e.From] = component
			}
		}
		if after = next; after == "" {
			return nil
		}
	}
}

// roots are what everything affected rests on.
func (c *changes) roots() []store.Ref {
	var roots []store.Ref
	for ref := range c.values {
		roots = append(roots, ref)
	}
	for ref := range c.direct {
		roots = append(roots, ref)
	}
	slices.SortFunc(roots, func(a, b store.Ref) int { return strings.Compare(a.String(), b.String()) })
	return roots
}
