package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// A ConcludeRequest draws up one value of a campaign.
type ConcludeRequest struct {
	Scale, Measurand string
	// Trend answers a significant slope of the stability study.
	Trend *store.TrendAnswer
	// Deviation says why the value is drawn up although a check of the plan fails.
	Deviation string
	// StepDecision says what is done about a detected step from the predecessor.
	StepDecision string
	Note         string
}

// ConcludeAssignment draws up the value that an approved campaign gives: from
// every accepted session since the plan was approved, none picked or dropped
// for its value. It is a draft, which a second person approves.
func (r *Registry) ConcludeAssignment(ctx context.Context, actor Actor, code string, q ConcludeRequest, e Edit) (Item[store.Value], error) {
	var out Item[store.Value]
	if e.ValidFrom == nil {
		return out, Complain("this value cannot be drawn up", []Complaint{{Place: "body.valid_from", Found: "nothing", Expected: "since when the value holds (RFC 3339)"}})
	}
	var name string
	err := r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		v := &tx.View
		g, err := gather(ctx, v, actor.Laboratory, code, q.Scale, q.Measurand)
		if err != nil {
			return err
		}
		if len(g.data.members) == 0 {
			return Refuse(Conflict, "campaign %s has no accepted session for %s yet: %s", store.FormatCode(code), q.Scale, nameOr(short(g.unready, 5), "the candidate was not measured since the plan was approved"))
		}
		if len(g.direct) > 0 {
			return Refuse(Invalid, "circular: the campaign's own calibrations use %s as an anchor: %s", g.data.plan.Value.Material, short(g.direct, 3))
		}
		d := g.data
		d.validFrom, d.trend, d.deviation, d.stepDecision, d.note = e.ValidFrom, q.Trend, strings.TrimSpace(q.Deviation), strings.TrimSpace(q.StepDecision), q.Note
		body, err := d.value(ctx, v)
		if err != nil {
			return err
		}
		var c complaints
		for _, k := range body.Campaign.Checks {
			if !k.Passed {
				c.add(k.Rule, k.Found, "%s", k.Expected)
			}
		}
		if d.deviation == "" {
			if err := Complain("the campaign does not satisfy its plan; go on measuring, or say why the value is drawn up all the same (deviation)", c); err != nil {
				return err
			}
		} else if len(c) == 0 {
			body.Campaign.Deviation = ""
		}
		inputs, _, err := valueOf(ctx, v, actor.Laboratory, body.Material, body.Scale, body.Measurand)
		if err != nil {
			return err
		}
		inputs = append(inputs, store.Input{Part: partCampaign, Ref: d.plan.Ref})
		if d.predecessor != nil && len(d.overlap) > 0 {
			inputs = append(inputs, store.Input{Part: "predecessor", Ref: d.predecessor.Ref})
		}
		inputs = append(inputs, g.unitRefs...)
		inputs = append(inputs, g.studyRefs...)
		for _, m := range d.members {
			inputs = append(inputs, store.Input{Part: "member", Ref: m.calibration.Ref}, store.Input{Part: "outcome", Ref: m.outcome})
		}
		name = ValueCode(body.Material, body.Scale, body.Measurand)
		_, err = appendVersion(ctx, tx, actor, store.Key{Laboratory: actor.Laboratory, Kind: store.KindValue, Code: name}, e, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Value](ctx, r, actor, store.KindValue, name)
}

// gathered is what a campaign has for one value so far.
type gathered struct {
	data     campaignData
	item     Item[store.Assignment]
	unitRefs []store.Input
	// studyRefs are the studies that were stated for the campaign.
	studyRefs []store.Input
	// unready says why further results do not count.
	unready []string
	// direct are the paths by which the candidate anchors its own calibrations.
	direct []string
	// depth counts the values on the longest way down from the candidate.
	depth int
}

// gather finds the members of a campaign: accepted, approved results of the
// candidate, by the plan's methods, in sessions that began after its approval.
func gather(ctx context.Context, v *store.View, laboratory, code, scale, measurand string) (gathered, error) {
	g := gathered{data: campaignData{units: map[string]store.Unit{}, studies: map[string]store.Version[store.Study]{}}}
	key := store.Key{Laboratory: laboratory, Kind: store.KindAssignment, Code: code}
	raw, state, err := v.InForce(ctx, key, store.Moment{})
	if ignoreNotFound(err) != nil {
		return g, err
	}
	if err != nil {
		if raw, err = v.Newest(ctx, key); err != nil {
			return g, missing(err, key)
		}
		return g, Refuse(Conflict, "the plan %s is not approved: a plan is fixed before the data", versionName(raw.Ref))
	}
	if g.item, err = item[store.Assignment](ctx, v, raw, store.Moment{}); err != nil {
		return g, err
	}
	if state == store.Withdrawn {
		return g, Refuse(Conflict, "the plan %s is withdrawn", versionName(raw.Ref))
	}
	var since store.Instant
	for _, d := range g.item.Decisions {
		if d.Value.Act == "approved" {
			since = d.RecordedAt
		}
	}
	g.data.plan = g.item.Version
	if g.data.quantity, err = quantityOf(g.data.plan.Value, scale, measurand); err != nil {
		return g, err
	}
	plan, q := g.data.plan.Value, g.data.quantity
	members, unready, err := acceptedResults(ctx, v, laboratory, plan.Material, q.Scale, q.Measurand)
	if err != nil {
		return g, err
	}
	g.unready = unready
	seen := map[string]bool{}
	var last *store.Instant
	for _, m := range members {
		c := m.calibration.Value
		method, err := inputOf(m.calibration.Inputs, "method")
		if err != nil {
			return g, err
		}
		switch {
		case seen[m.calibration.Code]:
		case c.StartedAt == nil || *c.StartedAt < since:
			g.unready = append(g.unready, fmt.Sprintf("session %s began before the plan was approved", store.FormatCode(c.Session)))
		case !slices.Contains(plan.Methods, method.Code):
			g.unready = append(g.unready, fmt.Sprintf("session %s ran by method %s, which is not of the plan", store.FormatCode(c.Session), method.Code))
		default:
			seen[m.calibration.Code] = true
			g.data.members = append(g.data.members, m)
			if last == nil || *c.StartedAt > *last {
				last = c.StartedAt
			}
		}
	}
	slices.SortFunc(g.data.members, func(a, b member) int { return strings.Compare(a.calibration.Code, b.calibration.Code) })
	g.data.overlap = overlapOf(g.data.members, plan.Predecessor)
	if len(g.data.overlap) > 0 {
		p, err := valueInForce(ctx, v, laboratory, plan.Predecessor, q.Scale, q.Measurand, store.Moment{ValidAt: last})
		if ignoreNotFound(err) != nil {
			return g, err
		}
		if err == nil && p.State != store.Withdrawn {
			g.data.predecessor = &p.Version
		}
	}
	if err := g.loadUnits(ctx, v, laboratory); err != nil {
		return g, err
	}
	if err := g.loadStudies(ctx, v, laboratory); err != nil {
		return g, err
	}
	return g, g.circularity(ctx, v)
}

// loadUnits finds the units that the candidate's readings name.
func (g *gathered) loadUnits(ctx context.Context, v *store.View, laboratory string) error {
	for _, m := range g.data.members {
		err := v.Readings(ctx, laboratory, m.calibration.Value.Session, func(rd store.Reading) error {
			if rd.Unit != "" && rd.Material == g.data.plan.Value.Material {
				g.data.units[rd.Unit] = store.Unit{}
			}
			return nil
		})
		if err != nil {
			return err
		}
	}
	for _, code := range slices.Sorted(mapKeys(g.data.units)) {
		u, err := newest[store.Unit](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: code})
		if err != nil {
			return err
		}
		g.data.units[code] = u.Value
		g.unitRefs = append(g.unitRefs, store.Input{Part: "unit", Ref: u.Ref})
	}
	return nil
}

// circularity looks below every member for the candidate: as an anchor of the
// member itself, which is refused, or deeper, through an older version, which is
// said. It also finds how deep the chain is.
func (g *gathered) circularity(ctx context.Context, v *store.View) error {
	candidate := ValueCode(g.data.plan.Value.Material, g.data.quantity.Scale, g.data.quantity.Measurand)
	for _, m := range g.data.members {
		edges, err := v.Down(ctx, m.calibration.Ref, MaxTrace)
		if err != nil {
			return err
		}
		below := map[store.Ref][]store.Ref{}
		for _, e := range edges {
			if e.Part == "anchor" || e.Part == "member" {
				from, to := e.From, e.To
				from.Hash, to.Hash = store.Hash{}, store.Hash{}
				below[from] = append(below[from], to)
			}
		}
		start := m.calibration.Ref
		start.Hash = store.Hash{}
		found := map[store.Ref]bool{}
		var walk func(at store.Ref, path []string)
		walk = func(at store.Ref, path []string) {
			path = append(slices.Clone(path), versionName(at))
			if at.Kind == store.KindValue && at.Code == candidate {
				text := strings.Join(path, " → ")
				if len(path) == 2 {
					g.direct = append(g.direct, text)
				} else if !slices.Contains(g.data.circular, text) && len(g.data.circular) < MaxComplaints {
					g.data.circular = append(g.data.circular, text)
				}
			}
			if found[at] { // what stands below it is known
				return
			}
			found[at] = true
			for _, to := range below[at] {
				walk(to, path)
			}
		}
		walk(start, nil)
		g.depth = max(g.depth, deepest(start, below, map[store.Ref]int{}))
	}
	return nil
}

// deepest counts the values on the longest way down.
func deepest(at store.Ref, below map[store.Ref][]store.Ref, known map[store.Ref]int) int {
	if n, ok := known[at]; ok {
		return n
	}
	n := 0
	for _, to := range below[at] {
		n = max(n, deepest(to, below, known))
	}
	if at.Kind == store.KindValue {
		n++
	}
	known[at] = n
	return n
}

// A CampaignAnalysis is where a campaign stands.
type CampaignAnalysis struct {
	Plan   Item[store.Assignment]
	Values []CampaignValue
}

// A CampaignValue is where a campaign stands for one value.
type CampaignValue struct {
	Scale, Measurand string
	// Members are the versions of the calibrations that count, by code.
	Members []store.Ref
	// Unready says why further results do not count.
	Unready []string
	// Value is what the campaign gives as it stands; nil with Refusal, which says why not.
	Value   *store.Value
	Refusal string
	// Circular are the paths by which the candidate anchors its own calibrations.
	Circular []string
	// Depth counts the values on the longest way down: 1 where every anchor's
	// value comes from outside.
	Depth        int
	Realisations []RealisedValue
	// Drawn is the newest version of the value that rests on this campaign; nil for none.
	Drawn *Item[store.Value]
}

// A RealisedValue is the same data evaluated on another realisation of the
// scale; nothing of it is stored.
type RealisedValue struct {
	Scale               string
	Value               float64
	StandardUncertainty float64 // of the characterisation
	Sessions            int
	// LeftOut are anchors that have no value on the scale.
	LeftOut []string
	// Refusal says why there is no value; "" where there is one.
	Refusal string
}

// AnalyseAssignment tells where an approved campaign stands.
func (r *Registry) AnalyseAssignment(ctx context.Context, actor Actor, code string) (CampaignAnalysis, error) {
	var out CampaignAnalysis
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = CampaignAnalysis{}
		plan, err := lookup(ctx, v, actor.Laboratory, store.KindAssignment, code, 0, store.Moment{})
		if err != nil {
			return err
		}
		body, err := store.Decode[store.Assignment](plan)
		if err != nil {
			return err
		}
		for _, q := range body.Value.Quantities {
			g, err := gather(ctx, v, actor.Laboratory, code, q.Scale, q.Measurand)
			if err != nil {
				return err
			}
			out.Plan = g.item
			value, err := standing(ctx, v, actor.Laboratory, g)
			if err != nil {
				return err
			}
			out.Values = append(out.Values, value)
		}
		return nil
	})
	return out, err
}

func standing(ctx context.Context, v *store.View, laboratory string, g gathered) (CampaignValue, error) {
	q := g.data.quantity
	out := CampaignValue{Scale: q.Scale, Measurand: q.Measurand, Unready: g.unready, Circular: g.direct, Depth: g.depth}
	for _, m := range g.data.members {
		out.Members = append(out.Members, m.calibration.Ref)
	}
	switch body, err := g.data.value(ctx, v); {
	case err == nil:
		out.Value = &body
	case MeaningOf(err) == Internal:
		return out, err
	default:
		out.Refusal = err.Error()
	}
	var err error
	if out.Realisations, err = realisations(ctx, v, laboratory, g.data); err != nil {
		return out, err
	}
	key := store.Key{Laboratory: laboratory, Kind: store.KindValue, Code: ValueCode(g.data.plan.Value.Material, q.Scale, q.Measurand)}
	edges, _, err := v.EdgesTo(ctx, store.EdgeQuery{Laboratory: laboratory, To: g.data.plan.Key, FromKind: store.KindValue, Limit: MaxPage})
	if err != nil {
		return out, err
	}
	for _, e := range edges {
		if e.Part != partCampaign || e.From.Code != key.Code || (out.Drawn != nil && e.From.Version < out.Drawn.Ref.Version) {
			continue
		}
		raw, err := v.Version(ctx, key, e.From.Version)
		if err != nil {
			return out, err
		}
		it, err := item[store.Value](ctx, v, raw, store.Moment{})
		if err != nil {
			return out, err
		}
		out.Drawn = &it
	}
	return out, nil
}
