package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// A Proposal says what may have been wrong: any number of changed or withdrawn
// assigned values, bottles that were bad since a date, method versions and
// readings. Together they are one revision.
type Proposal struct {
	Values     []ProposedValue
	Units      []store.SuspectUnit
	Methods    []ProposedMethod
	Factors    []ProposedFactor
	Exclusions []store.RevisionExclusion
	Reason     string

	// Threshold leaves out of the stream what moves by less than this part of its
	// own standard uncertainty; counts are of all.
	Threshold float64
	// Top is how many of the largest |shift|/u are ranked; 0 means 50, at most MaxTop.
	Top int
	// Drafts takes drafts too, beside what is in force.
	Drafts bool
	// Full also draws everything up again, generation by generation; for at most
	// MaxEvaluated versions, since nothing of it is stored.
	Full bool
}

// Bounds of a preview.
const (
	MaxTop       = 1000
	MaxEvaluated = 2000
	// MaxChanges bounds the rows of one proposal.
	MaxChanges = 500
)

// A ProposedValue is one assigned value that changes.
type ProposedValue struct {
	// Laboratory of the value's record; "" is the own one where it has such a value, else common.
	Laboratory                 string
	Material, Scale, Measurand string
	// Version that is no longer to be used; 0 is the one in force.
	Version int
	// Use is the number of a recorded version to use in its place; 0 with Value or Withdrawn.
	Use int
	// Value (‰) and its uncertainty as stated, of a version that the revision drafts.
	Value    store.Decimal
	Stated   store.Stated
	Basis    string // "" means literature
	Evidence string
	// Withdrawn: anchors are used without it.
	Withdrawn bool
	// From restricts the change to sessions that started then or later.
	From *store.Instant
}

// A ProposedMethod says that calibrations by one version of a method should
// have been made by another, which is recorded.
type ProposedMethod struct {
	Method       string
	Version, Use int
}

// A ProposedFactor says that sessions of an instrument that rest on one
// determination of its H3 factor should rest on another, which is recorded.
type ProposedFactor struct {
	Instrument   string
	Version, Use int
}

// revisionOf turns a proposal into the stored form, frozen at the view's head.
func revisionOf(ctx context.Context, v *store.View, laboratory string, p Proposal) (store.Revision, error) {
	body := store.Revision{Phase: store.RevisionProposed, Units: slices.Clone(p.Units), Exclusions: slices.Clone(p.Exclusions)}
	var c complaints
	total := len(p.Values) + len(p.Units) + len(p.Methods) + len(p.Factors) + len(p.Exclusions)
	if total == 0 || total > MaxChanges {
		c.add("body", fmt.Sprintf("%d changes", total), "1 to %d values, units, methods, factors and exclusions that change", MaxChanges)
	}
	seen := map[store.Ref]bool{}
	for i, q := range p.Values {
		place := fmt.Sprintf("body.values[%d]", i)
		r, err := q.resolve(ctx, v, laboratory, place, &c)
		if err != nil {
			return body, err
		}
		if r == nil {
			continue
		}
		if seen[r.Old.Bare()] {
			c.add(place, versionName(r.Old), "each version once")
		}
		seen[r.Old.Bare()] = true
		body.Values = append(body.Values, *r)
	}
	for i, u := range p.Units {
		raw, err := v.Newest(ctx, store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: u.Unit})
		if ignoreNotFound(err) != nil {
			return body, err
		}
		if err != nil {
			c.add(fmt.Sprintf("body.units[%d].unit", i), quote(u.Unit), "the code of a unit of this laboratory")
			continue
		}
		unit, err := store.Decode[store.Unit](raw)
		if err != nil {
			return body, err
		}
		if u.Since == nil {
			body.Units[i].Since = unit.Value.SuspectSince
		}
	}
	for i, m := range p.Methods {
		old, use, err := replacedVersion(ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindMethod, Code: m.Method}, m.Version, m.Use, fmt.Sprintf("body.methods[%d]", i), "a method", &c)
		if err != nil {
			return body, err
		}
		body.Methods = append(body.Methods, store.ReplacedMethod{Old: old, New: use})
	}
	for i, f := range p.Factors {
		old, use, err := replacedVersion(ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindFactor, Code: f.Instrument}, f.Version, f.Use, fmt.Sprintf("body.factors[%d]", i), "an H3 factor", &c)
		if err != nil {
			return body, err
		}
		body.Factors = append(body.Factors, store.ReplacedFactor{Old: old, New: use})
	}
	for i, x := range p.Exclusions {
		place := fmt.Sprintf("body.exclusions[%d]", i)
		raw, err := v.Newest(ctx, store.Key{Laboratory: laboratory, Kind: store.KindSession, Code: x.Session})
		if ignoreNotFound(err) != nil {
			return body, err
		}
		if err != nil {
			c.add(place+".session", quote(x.Session), "the code of a session of this laboratory")
			continue
		}
		s, err := store.Decode[store.Session](raw)
		if err != nil {
			return body, err
		}
		if len(x.Readings) == 0 {
			c.add(place+".readings", "nothing", "the numbers of readings that should have been left out")
		}
		for _, n := range x.Readings {
			if n < 1 || n > s.Value.Readings {
				c.add(place+".readings", fmt.Sprint(n), "a reading number from 1 to %d", s.Value.Readings)
			}
		}
		body.Exclusions[i].Readings = slices.Compact(slices.Sorted(slices.Values(x.Readings)))
	}
	if !(p.Threshold >= 0) {
		c.add("query.threshold", fmt.Sprint(p.Threshold), "0 or more standard uncertainties")
	}
	if p.Top < 0 || p.Top > MaxTop {
		c.add("query.top", fmt.Sprint(p.Top), "0 to %d", MaxTop)
	}
	if err := Complain("this revision cannot be evaluated", c); err != nil {
		return body, err
	}
	head, err := v.Head(ctx, laboratory)
	body.Position, body.FrozenAt = head.Size, head.At
	return body, err
}

// replacedVersion finds the wrong and the right version of a record.
func replacedVersion(ctx context.Context, v *store.View, key store.Key, version, use int, place, what string, c *complaints) (old, next store.Ref, err error) {
	var refs [2]store.Ref
	for i, number := range []int{version, use} {
		raw, err := v.Version(ctx, key, number)
		if ignoreNotFound(err) != nil {
			return old, next, err
		}
		if err != nil {
			c.add(place, fmt.Sprintf("%s.%d", key.Code, number), "a recorded version of %s of this laboratory", what)
		}
		refs[i] = raw.Ref
	}
	if version == use {
		c.add(place+".use", fmt.Sprint(use), "another version than the wrong one")
	}
	return refs[0], refs[1], nil
}

// resolve finds the version that changes; nil after a complaint.
func (q ProposedValue) resolve(ctx context.Context, v *store.View, laboratory, place string, c *complaints) (*store.RevisedValue, error) {
	r := &store.RevisedValue{Withdrawn: q.Withdrawn, From: q.From}
	code := ValueCode(q.Material, q.Scale, q.Measurand)
	laboratories := []string{laboratory, store.Common}
	if q.Laboratory != "" {
		if q.Laboratory != laboratory && q.Laboratory != store.Common {
			c.add(place+".laboratory", quote(q.Laboratory), "%s or %s", laboratory, store.Common)
			return nil, nil
		}
		laboratories = []string{q.Laboratory}
	}
	var old store.Raw
	err := store.ErrNotFound
	for _, lab := range laboratories {
		key := store.Key{Laboratory: lab, Kind: store.KindValue, Code: code}
		if q.Version > 0 {
			old, err = v.Version(ctx, key, q.Version)
		} else {
			old, _, err = v.InForce(ctx, key, store.Moment{})
		}
		if ignoreNotFound(err) != nil {
			return nil, err
		}
		if err == nil {
			break
		}
	}
	if err != nil {
		c.add(place, quote(code), "a value of this laboratory or of common that is in force, or the number of a version")
		return nil, nil
	}
	r.Old = old.Ref
	before := len(*c)
	given := 0
	for _, is := range []bool{q.Use > 0, q.Value != "", q.Withdrawn} {
		if is {
			given++
		}
	}
	switch {
	case given != 1:
		c.add(place, fmt.Sprintf("%d of value, use, withdrawn", given), "exactly one: a new value, the number of a recorded version, or withdrawn")
	case q.Use > 0:
		raw, err := v.Version(ctx, old.Key, q.Use)
		if ignoreNotFound(err) != nil {
			return nil, err
		}
		if err != nil || q.Use == old.Ref.Version {
			c.add(place+".use", fmt.Sprint(q.Use), "the number of another recorded version of %s", code)
			break
		}
		r.New = &raw.Ref
	case q.Value != "":
		c.number(place+".value", q.Value)
		u, _, err := StandardFrom(q.Stated)
		if err != nil {
			c.add(place+".stated", quote(q.Stated.Text), "an uncertainty: %s", strings.ReplaceAll(err.Error(), "\n", ";"))
		} else if u == 0 {
			c.add(place+".stated", quote(q.Stated.Kind), "an uncertainty above 0")
		}
		basis := nameOr(q.Basis, "literature")
		c.oneOf(place+".basis", basis, "certificate", "literature", "partner", "provisional")
		stated := q.Stated
		r.Value, r.StandardUncertainty, r.Stated, r.Basis, r.Evidence = q.Value, u, &stated, basis, q.Evidence
	}
	if len(*c) > before {
		return nil, nil
	}
	return r, nil
}
