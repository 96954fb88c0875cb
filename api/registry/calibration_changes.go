package registry

import (
	"context"
	"fmt"
	"math"
	"slices"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// CalibrationChanges sets two versions of one calibration against each other:
// what differs in what they were made of, in words, and what that moved.
type CalibrationChanges struct {
	From, To store.Version[store.Calibration]
	Changes  []CalibrationChange
	Shifts   []ResultShift // by subject, those of samples and controls
	// Parameters before and after, by name; NaN where one version has none of it.
	Parameters []ParameterShift
}

// A CalibrationChange is one thing that differs.
type CalibrationChange struct {
	// What: anchor control exclusion reading session method instrument unit model
	// limits between_session engine.
	What string
	Name string // of the material, unit, method …
	// Before and After name versions, or say what stood there; "" where there was nothing.
	Before, After string
	Text          string // the same as a sentence
	Reason        string // why, where somebody said so
}

// A ResultShift is a result before and after (‰).
type ResultShift struct {
	Subject     string
	Role        string
	Before      *float64
	After       *float64
	BeforeU     *float64
	AfterU      *float64
	Shift       *float64 // after less before; nil where one version has none
	OverU       *float64 // |shift| / u before
	BeforeFlags []string
	AfterFlags  []string
}

// A ParameterShift is a parameter before and after.
type ParameterShift struct {
	Name          string
	Before, After float64
}

// CalibrationChanges compares two versions of a calibration; 0 for to is the
// newest, for from the one before to.
func (r *Registry) CalibrationChanges(ctx context.Context, actor Actor, code string, from, to int) (CalibrationChanges, error) {
	var out CalibrationChanges
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = CalibrationChanges{}
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindCalibration, Code: code}
		if to == 0 {
			newest, err := v.Newest(ctx, key)
			if err != nil {
				return missing(err, key)
			}
			to = newest.Ref.Version
		}
		if from == 0 {
			if from = to - 1; from == 0 {
				return Refuse(Conflict, "calibration %s has one version only: there is nothing to compare", store.FormatCode(code))
			}
		}
		for _, x := range []struct {
			number int
			into   *store.Version[store.Calibration]
		}{{from, &out.From}, {to, &out.To}} {
			raw, err := lookup(ctx, v, actor.Laboratory, store.KindCalibration, code, x.number, store.Moment{})
			if err != nil {
				return err
			}
			if *x.into, err = store.Decode[store.Calibration](raw); err != nil {
				return err
			}
		}
		return out.compare(ctx, v)
	})
	return out, err
}

func (c *CalibrationChanges) compare(ctx context.Context, v *store.View) error {
	if err := c.inputs(ctx, v); err != nil {
		return err
	}
	a, b := c.From.Value, c.To.Value
	add := func(what, name, before, after, sentence string, args ...any) {
		c.Changes = append(c.Changes, CalibrationChange{What: what, Name: name, Before: before, After: after, Text: fmt.Sprintf(sentence, args...)})
	}
	for _, n := range b.Excluded {
		if !slices.Contains(a.Excluded, n) {
			add("reading", fmt.Sprint(n), "used", "left out", "reading %d is left out", n)
		}
	}
	for _, n := range a.Excluded {
		if !slices.Contains(b.Excluded, n) {
			add("reading", fmt.Sprint(n), "left out", "used", "reading %d is used again", n)
		}
	}
	if before, after := canonicalText(a.Model), canonicalText(b.Model); before != after {
		add("model", "", calibrationDetail(a), calibrationDetail(b), "the model was %q and is %q", calibrationDetail(a), calibrationDetail(b))
	}
	if before, after := canonicalText(a.Limits), canonicalText(b.Limits); before != after {
		add("limits", "", before, after, "the acceptance limits of the method differ")
	}
	if before, after := between(a.BetweenSession), between(b.BetweenSession); before != after {
		add("between_session", "", before, after, "the difference between sessions was %s and is %s", nameOr(before, "not told"), nameOr(after, "not told"))
	}
	if a.Engine != b.Engine {
		add("engine", "", a.Engine, b.Engine, "the engine was %s and is %s", a.Engine, b.Engine)
	}
	c.results()
	return nil
}

func between(b *store.Component) string {
	if b == nil {
		return ""
	}
	return fmt.Sprintf("u %v ‰", b.StandardUncertainty)
}

// inputs compares the versions that the two were made of, part by part and
// record by record.
func (c *CalibrationChanges) inputs(ctx context.Context, v *store.View) error {
	type place struct {
		part string
		key  store.Key
		n    int // of several versions of one record, such as acts of exclusion
	}
	list := func(inputs []store.Input) (map[place]store.Ref, []place) {
		refs, order, count := map[place]store.Ref{}, []place(nil), map[place]int{}
		for _, in := range inputs {
			if in.Part == "revision" { // it is why, not what
				continue
			}
			p := place{part: in.Part, key: in.Key}
			if in.Part == "exclusion" {
				p.n = in.Version
			} else {
				count[p]++
				p.n = count[p]
			}
			refs[p] = in.Ref
			order = append(order, p)
		}
		return refs, order
	}
	before, was := list(c.From.Inputs)
	after, is := list(c.To.Inputs)
	for _, p := range is {
		old, had := before[p]
		if had && old == after[p] {
			continue
		}
		if err := c.input(ctx, v, p.part, old, had, after[p], true); err != nil {
			return err
		}
	}
	for _, p := range was {
		if _, has := after[p]; !has {
			if err := c.input(ctx, v, p.part, before[p], true, store.Ref{}, false); err != nil {
				return err
			}
		}
	}
	return nil
}

func (c *CalibrationChanges) input(ctx context.Context, v *store.View, part string, old store.Ref, had bool, now store.Ref, has bool) error {
	x := CalibrationChange{What: part}
	describe := func(ref store.Ref) (name, text string, err error) {
		raw, err := v.Version(ctx, ref.Key, ref.Version)
		if err != nil {
			return "", "", err
		}
		x.Reason = raw.Reason
		switch raw.Kind {
		case store.KindValue:
			val, err := store.Decode[store.Value](raw)
			if err != nil {
				return "", "", err
			}
			return val.Value.Material, fmt.Sprintf("%s ‰, u %v ‰ (%s.%d)", val.Value.Value, val.Value.StandardUncertainty, ref.Code, ref.Version), nil
		case store.KindExclusion:
			act, err := store.Decode[store.Exclusion](raw)
			if err != nil {
				return "", "", err
			}
			return store.FormatCode(ref.Code), fmt.Sprintf("%s readings %s: %s", act.Value.Act, intsText(act.Value.Readings), act.Value.Cause), nil
		}
		return CodeText(ref.Kind, ref.Code), versionName(ref), nil
	}
	var err error
	if had {
		if x.Name, x.Before, err = describe(old); err != nil {
			return err
		}
	}
	if has {
		if x.Name, x.After, err = describe(now); err != nil {
			return err
		}
	}
	switch {
	case part == "exclusion" && has:
		x.Text = "an act on readings counts now: " + x.After
	case had && has:
		x.Text = fmt.Sprintf("%s %s: was %s, is %s", part, x.Name, x.Before, x.After)
	case has:
		x.Text = fmt.Sprintf("%s %s is new: %s", part, x.Name, x.After)
	default:
		x.Text = fmt.Sprintf("%s %s is not used any more: was %s", part, x.Name, x.Before)
	}
	c.Changes = append(c.Changes, x)
	return nil
}

// canonicalText is a form of a part of a body that is equal where the parts are.
func canonicalText(part any) string {
	text, err := ledger.Canonical(part)
	if err != nil {
		return err.Error()
	}
	return string(text)
}

func (c *CalibrationChanges) results() {
	at := map[string]int{}
	for i, list := range [][]store.Result{c.From.Value.Results, c.To.Value.Results} {
		for _, res := range list {
			key := string(res.Role) + " " + res.Subject
			k, ok := at[key]
			if !ok {
				k = len(c.Shifts)
				at[key] = k
				c.Shifts = append(c.Shifts, ResultShift{Subject: res.Subject, Role: string(res.Role)})
			}
			s := &c.Shifts[k]
			if i == 0 {
				s.Before, s.BeforeU, s.BeforeFlags = &res.Value, &res.StandardUncertainty, res.Flags
			} else {
				s.After, s.AfterU, s.AfterFlags = &res.Value, &res.StandardUncertainty, res.Flags
			}
		}
	}
	for i := range c.Shifts {
		s := &c.Shifts[i]
		if s.Before == nil || s.After == nil {
			continue
		}
		shift := *s.After - *s.Before
		s.Shift = &shift
		if *s.BeforeU > 0 {
			over := math.Abs(shift) / *s.BeforeU
			s.OverU = &over
		}
	}
	names := map[string]int{}
	for i, list := range [][]store.Parameter{c.From.Value.Parameters, c.To.Value.Parameters} {
		for _, p := range list {
			k, ok := names[p.Name]
			if !ok {
				k = len(c.Parameters)
				names[p.Name] = k
				c.Parameters = append(c.Parameters, ParameterShift{p.Name, math.NaN(), math.NaN()})
			}
			if i == 0 {
				c.Parameters[k].Before = p.Value
			} else {
				c.Parameters[k].After = p.Value
			}
		}
	}
}
