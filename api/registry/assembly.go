package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// An assembly is everything that one fit is made of, whether chosen now or
// pinned by a stored version: the same function makes the engine's input of
// both, so that a stored calibration recomputes.
type assembly struct {
	version  store.Ref // of the calibration: its estimated variances are a group of their own
	session  store.Version[store.Session]
	method   store.Version[store.Method]
	spec     store.MethodQuantity
	model    calib.Model
	limits   store.Limits
	between  *store.Component
	sampled  *store.Component // the sample's own heterogeneity
	readings []store.Reading  // of the quantity, by number
	origin   *store.Instant   // first reading of the session, any quantity
	excluded map[int]bool
	anchors  []store.Version[store.Value]
	controls map[string]store.Version[store.Value]
	// factor is the H3 factor applied here, earlier the one a program had applied
	// before the file was written; nil for none.
	factor, earlier *store.Version[store.Factor]
	flags           []calib.Flag
	// prepared is what the readings became before the last fit.
	prepared preparation
	// observed and history are what was known around the fit when it was made.
	observed []calib.Flag
	history  *store.LineHistory
}

// assemble chooses what a new fit is made of, and names it as inputs.
func assemble(ctx context.Context, v *store.View, laboratory string, q FitRequest) (assembly, []store.Input, error) {
	var a assembly
	s, err := newest[store.Session](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindSession, Code: q.Session})
	if err != nil {
		return a, nil, err
	}
	a.session = s.Version
	if a.method, err = sessionMethod(ctx, v, a.session); err != nil {
		return a, nil, err
	}
	if a.spec, err = specOf(a.method.Value, q.Quantity, q.Measurand); err != nil {
		return a, nil, err
	}
	a.model, a.limits, a.between, a.sampled = a.spec.Model, a.spec.Limits, a.spec.BetweenSession, a.spec.SampleHomogeneity
	if q.Model != nil {
		a.model = *q.Model
	}
	inputs := []store.Input{{Part: "session", Ref: s.Ref}, {Part: "method", Ref: a.method.Ref}}
	if ref, err := inputOf(s.Inputs, "instrument"); err == nil {
		inputs = append(inputs, store.Input{Part: "instrument", Ref: ref})
	}
	var acts []store.Ref
	if a.excluded, acts, err = exclusions(ctx, v, laboratory, a.session.Code); err != nil {
		return a, nil, err
	}
	for _, act := range acts { // each, so that every reason stands in the trace
		inputs = append(inputs, store.Input{Part: "exclusion", Ref: act})
	}
	if err := a.loadReadings(ctx, v, laboratory); err != nil {
		return a, nil, err
	}

	if a.session.Value.StartedAt == nil {
		return a, nil, Refuse(Conflict, "session %s has no start: which assigned values held cannot be said", store.FormatCode(a.session.Code))
	}
	held := store.Moment{ValidAt: a.session.Value.StartedAt}
	var waivers []store.Input
	var c complaints
	for _, material := range a.materials(calib.Anchor) {
		value, err := valueInForce(ctx, v, laboratory, material, a.spec.Scale, measurandOf(a.spec), held)
		if ignoreNotFound(err) != nil {
			return a, nil, err
		}
		place := "anchor " + material
		switch {
		case err != nil:
			c.add(place, "no approved value", "a value on %s (%s) that held on %s%s", a.spec.Scale, measurandOf(a.spec),
				a.session.Value.StartedAt.Time().Format("2006-01-02"), otherScales(ctx, v, laboratory, material, a.spec))
		case value.State == store.Withdrawn:
			c.add(place, "a withdrawn value", "a value in force: %s", lastReason(value))
		case value.Value.StandardUncertainty == 0 && !value.Value.Exact && value.Value.Sources == nil:
			c.add(place, "a value that states no uncertainty", "one with an uncertainty: it cannot pin a line without")
		default:
			missing, waiver, err := overlap(ctx, v, value.Version)
			if err != nil {
				return a, nil, err
			}
			if missing != "" {
				c.add(place, missing, "such a campaign, or the material's overlap_waiver that says why it may be an anchor without one")
				continue
			}
			a.anchors = append(a.anchors, value.Version)
			inputs = append(inputs, store.Input{Part: "anchor", Ref: value.Ref})
			a.flags = append(a.flags, valueFlags(a, value.Version)...)
			if waiver != nil {
				waivers = append(waivers, store.Input{Part: partWaiver, Ref: *waiver})
			}
		}
	}
	if err := Complain("this session cannot be fitted", c); err != nil {
		return a, nil, err
	}
	a.controls = map[string]store.Version[store.Value]{}
	for _, material := range a.materials(calib.Control) {
		value, err := valueInForce(ctx, v, laboratory, material, a.spec.Scale, measurandOf(a.spec), held)
		if ignoreNotFound(err) != nil {
			return a, nil, err
		}
		if err == nil && value.State != store.Withdrawn {
			a.controls[material] = value.Version
			inputs = append(inputs, store.Input{Part: "control", Ref: value.Ref})
		}
	}
	factors, err := a.chooseFactors(ctx, v, laboratory, q.Factor)
	if err != nil {
		return a, nil, err
	}
	inputs = append(inputs, factors...)
	for _, in := range waivers {
		if err := a.waive(ctx, v, in.Ref); err != nil {
			return a, nil, err
		}
	}
	inputs = append(inputs, waivers...)
	units, err := a.units(ctx, v, laboratory)
	if err != nil {
		return a, nil, err
	}
	for _, in := range units {
		if err := a.flagUnit(ctx, v, in.Ref); err != nil {
			return a, nil, err
		}
	}
	return a, append(inputs, units...), a.flagPortions(ctx, v)
}

func lastReason(value Item[store.Value]) string {
	if n := len(value.Decisions); n > 0 {
		return value.Decisions[n-1].Reason
	}
	return "it was withdrawn"
}

// otherScales adds, to the complaint about a missing value, where the material
// does have one: two realisations of one scale are never mixed in a fit.
func otherScales(ctx context.Context, v *store.View, laboratory, material string, spec store.MethodQuantity) string {
	var names []string
	for _, lab := range []string{laboratory, store.Common} {
		raws, _, err := v.List(ctx, store.ListQuery{Laboratory: lab, Kind: store.KindValue, Prefix: material + "/" + spec.Quantity + "-", Limit: 20})
		if err != nil {
			return ""
		}
		for _, raw := range raws {
			if value, err := store.Decode[store.Value](raw.Raw); err == nil && !slices.Contains(names, value.Value.Scale) {
				names = append(names, value.Value.Scale)
			}
		}
	}
	if len(names) == 0 {
		return ""
	}
	return "; it has one on " + strings.Join(names, ", ") + ", and one fit never holds two realisations"
}

// assembleStored loads what a stored calibration names as its inputs.
func assembleStored(ctx context.Context, v source, c store.Version[store.Calibration]) (assembly, error) {
	a := assembly{version: c.Ref, model: c.Value.Model, limits: c.Value.Limits, between: c.Value.BetweenSession, sampled: c.Value.SampleHomogeneity,
		observed: c.Value.Observed, history: c.Value.History, excluded: map[int]bool{}, controls: map[string]store.Version[store.Value]{}}
	for _, n := range c.Value.Excluded {
		a.excluded[n] = true
	}
	for _, in := range c.Inputs {
		var err error
		switch in.Part {
		case "session":
			a.session, err = decodeVersion[store.Session](ctx, v, in.Ref)
		case "method":
			a.method, err = decodeVersion[store.Method](ctx, v, in.Ref)
		case "anchor":
			var value store.Version[store.Value]
			value, err = decodeVersion[store.Value](ctx, v, in.Ref)
			a.anchors = append(a.anchors, value)
		case "control":
			var value store.Version[store.Value]
			value, err = decodeVersion[store.Value](ctx, v, in.Ref)
			a.controls[value.Value.Material] = value
		case "factor", "factor earlier":
			var f store.Version[store.Factor]
			f, err = decodeVersion[store.Factor](ctx, v, in.Ref)
			if in.Part == "factor" {
				a.factor = &f
			} else {
				a.earlier = &f
			}
		}
		if err != nil {
			return a, fmt.Errorf("load %s of %s: %w", in.Part, c.Ref, err)
		}
	}
	var err error
	if a.spec, err = specOf(a.method.Value, c.Value.Quantity, c.Value.Measurand); err != nil {
		return a, err
	}
	for _, value := range a.anchors {
		a.flags = append(a.flags, valueFlags(a, value)...)
	}
	for _, in := range c.Inputs {
		var err error
		switch in.Part {
		case partWaiver:
			err = a.waive(ctx, v, in.Ref)
		case "unit":
			err = a.flagUnit(ctx, v, in.Ref)
		}
		if err != nil {
			return a, err
		}
	}
	if err := a.loadReadings(ctx, v, c.Laboratory); err != nil {
		return a, err
	}
	return a, a.flagPortions(ctx, v)
}

func specOf(m store.Method, quantity, measurand string) (store.MethodQuantity, error) {
	var known []string
	for _, q := range m.Quantities {
		if q.Quantity == quantity && (measurand == "" || measurandOf(q) == measurand) {
			return q, nil
		}
		known = append(known, q.Quantity)
	}
	return store.MethodQuantity{}, Complain("this session cannot be fitted", []Complaint{{Place: "body.quantity", Found: quote(quantity),
		Expected: "a quantity of the session's method: " + strings.Join(known, ", ")}})
}

func (a *assembly) loadReadings(ctx context.Context, v source, laboratory string) error {
	a.readings, a.origin = nil, nil
	err := v.Readings(ctx, laboratory, a.session.Code, func(rd store.Reading) error {
		if rd.At != nil && (a.origin == nil || *rd.At < *a.origin) {
			at := *rd.At
			a.origin = &at
		}
		if rd.Quantity == a.spec.Quantity {
			a.readings = append(a.readings, rd)
		}
		return nil
	})
	if err == nil && len(a.readings) == 0 {
		err = Refuse(Invalid, "session %s has no readings of %s", store.FormatCode(a.session.Code), a.spec.Quantity)
	}
	return err
}

// materials lists the materials that have a role, in code order.
func (a *assembly) materials(role calib.Role) []string {
	set := map[string]bool{}
	for _, rd := range a.readings {
		if rd.Role == role && rd.Material != "" && !a.excluded[rd.Number] {
			set[rd.Material] = true
		}
	}
	out := make([]string, 0, len(set))
	for m := range set {
		out = append(out, m)
	}
	slices.Sort(out)
	return out
}

func (a *assembly) units(ctx context.Context, v *store.View, laboratory string) ([]store.Input, error) {
	set := map[string]bool{}
	for _, rd := range a.readings {
		if rd.Unit != "" && (rd.Role == calib.Anchor || rd.Role == calib.Control || rd.Role == calib.Monitor) {
			set[rd.Unit] = true
		}
	}
	var inputs []store.Input
	for _, code := range slices.Sorted(mapKeys(set)) {
		raw, err := v.Newest(ctx, store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: code})
		if err != nil {
			return nil, err
		}
		inputs = append(inputs, store.Input{Part: "unit", Ref: raw.Ref})
	}
	return inputs, nil
}

func mapKeys[K comparable, V any](m map[K]V) func(func(K) bool) {
	return func(yield func(K) bool) {
		for k := range m {
			if !yield(k) {
				return
			}
		}
	}
}

// input makes the engine's input.
func (a *assembly) input() (calib.Session, calib.Policy, error) {
	s := calib.Session{NoiseGroup: fmt.Sprintf("fit:%s.%d", a.version.Code, a.version.Version)}
	groups := map[string]bool{}
	for _, v := range a.anchors {
		n, gs, err := a.numberUsed(v, calib.Anchor)
		if err != nil {
			return s, calib.Policy{}, err
		}
		s.Anchors = append(s.Anchors, calib.AssignedValue{Material: v.Value.Material, Value: n})
		for _, g := range gs {
			if !groups[g.ID] {
				groups[g.ID] = true
				s.Groups = append(s.Groups, g)
			}
		}
	}
	var err error
	if a.prepared, err = a.prepare(); err != nil {
		return s, calib.Policy{}, err
	}
	for _, rd := range a.prepared.readings {
		s.Readings = append(s.Readings, rd.Reading)
	}
	for j, in := range a.prepared.shared {
		k := calib.Correction{Name: in.name, Input: in.value, Blank: in.blank}
		for _, rd := range a.prepared.readings {
			k.PerReading = append(k.PerReading, rd.per[j])
		}
		s.Corrections = append(s.Corrections, k)
	}
	s.Groups = append(s.Groups, a.prepared.groups...)
	l := a.limits
	p := calib.Policy{Probability: l.Probability, CoverageFactor: l.CoverageFactor, LeftOutLimit: l.LeftOut, StudentizedLimit: l.Studentized,
		MinimumSpan: l.MinimumSpan, AdvisedSpan: l.AdvisedSpan, MinimumAnchors: l.MinimumAnchors, TestLevel: l.TestLevel}
	if b := a.between; b != nil {
		p.BetweenSession = calib.BetweenSession{StandardUncertainty: b.StandardUncertainty, Session: a.session.Code, Scale: a.spec.Scale, Common: b.Common}
		if b.DegreesOfFreedom != nil {
			p.BetweenSession.DegreesOfFreedom = *b.DegreesOfFreedom
			p.BetweenSession.Group = fmt.Sprintf("between_session:%s.%d/%s", a.method.Code, a.method.Ref.Version, a.spec.Scale)
		}
	}
	s.Materials = a.materials(calib.Sample)
	if h := a.sampled; h != nil {
		p.SampleHomogeneity = calib.SampleHomogeneity{StandardUncertainty: h.StandardUncertainty, Scale: a.spec.Scale}
		if h.DegreesOfFreedom != nil {
			p.SampleHomogeneity.DegreesOfFreedom = *h.DegreesOfFreedom
			p.SampleHomogeneity.Group = fmt.Sprintf("sample_homogeneity:%s.%d/%s", a.method.Code, a.method.Ref.Version, a.spec.Scale)
		}
	}
	return s, p, nil
}

// chooseFactors finds the H3 factors that a fit rests on: the one to apply,
// where the session declares the correction as made here or another factor is
// asked for, and the one that a program applied before.
func (a *assembly) chooseFactors(ctx context.Context, v *store.View, laboratory string, wanted int) ([]store.Input, error) {
	k, ok := a.declared("h3")
	if a.spec.Quantity != "d2H" {
		k, ok = store.Correction{}, false // H3+ forms of hydrogen alone
	}
	if !ok || k.State != "here" && k.State != "earlier" {
		if wanted != 0 {
			return nil, Complain(cannotFit, []Complaint{{Place: "body.factor", Found: fmt.Sprint(wanted), Expected: "nothing: the session declares the H3 correction as " + quote(k.State)}})
		}
		return nil, nil
	}
	instrument, at := a.session.Value.Instrument, *a.session.Value.StartedAt
	var inputs []store.Input
	if k.State == "earlier" {
		f, err := factorAt(ctx, v, laboratory, instrument, 0, at)
		switch {
		case err == nil:
			a.earlier = &f
			inputs = append(inputs, store.Input{Part: "factor earlier", Ref: f.Ref})
		case ignoreNotFound(err) != nil:
			return nil, err
		case wanted != 0:
			return nil, Complain(cannotFit, []Complaint{{Place: "body.factor", Found: fmt.Sprint(wanted),
				Expected: "the factor that was applied earlier on record first: it is undone before another is applied"}})
		}
		if wanted == 0 {
			return inputs, nil
		}
	}
	f, err := factorAt(ctx, v, laboratory, instrument, wanted, at)
	if err != nil && ignoreNotFound(err) == nil {
		return nil, Complain(cannotFit, []Complaint{{Place: "H3 factor", Found: "none approved for " + instrument + " at " + at.String(),
			Expected: "one determined before the session, since the session declares the correction as made here; or name a later determination"}})
	}
	if err != nil {
		return nil, err
	}
	a.factor = &f
	return append(inputs, store.Input{Part: "factor", Ref: f.Ref}), nil
}
