package registry

import (
	"context"
	"errors"
	"fmt"
	"math"
	"strconv"

	"deltamoor/calib/assign"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// campaignData is everything that a campaign's value is computed from. It comes
// from inputs that the value names, and from what a person decided.
type campaignData struct {
	plan        store.Version[store.Assignment]
	quantity    store.AssignmentQuantity
	members     []member
	overlap     []member // the predecessor in the same sessions
	predecessor *store.Version[store.Value]
	units       map[string]store.Unit
	studies     map[string]store.Version[store.Study] // by what they study
	validFrom   *store.Instant

	trend        *store.TrendAnswer
	deviation    string
	stepDecision string
	circular     []string
	note         string
}

// campaignRule is how a campaign's value follows from its sessions.
const campaignRule = "campaign: sessions combined by the plan's estimator; all sources kept; homogeneity joins per unit"

// value computes the value of the candidate with everything its certificate
// says. Errors of the engine come back as refusals.
func (d campaignData) value(ctx context.Context, v source) (store.Value, error) {
	body := store.Value{Material: d.plan.Value.Material, MaterialLaboratory: d.plan.Value.MaterialLaboratory, Scale: d.quantity.Scale, Measurand: d.quantity.Measurand,
		Basis: "assignment", Rule: campaignRule, Note: d.note}
	ws, err := witnesses(ctx, v, d.members)
	if err != nil {
		return body, err
	}
	out := &store.CampaignResult{Deviation: d.deviation, Circular: d.circular, HomogeneityNot: d.quantity.Homogeneity.NotNeeded, StabilityNot: d.quantity.Stability.NotNeeded}
	analysis, err := assign.Analyse(campaignOf(d.plan.Code, d.quantity, ws))
	if err != nil {
		return body, d.refuse("the sessions cannot be combined", err)
	}
	in := assign.DecisionInput{Lot: body.Material, StudyVersion: d.plan.Code, Characterisation: analysis,
		HomogeneityNot: out.HomogeneityNot, StabilityNot: out.StabilityNot, Coverage: policyOf(d.quantity).Coverage}
	if out.HomogeneityNot == "" {
		if in.Homogeneity, err = d.homogeneity(ws); err != nil {
			return body, d.refuse("the study of the units cannot be evaluated", err)
		}
	}
	span := 0.0
	if out.StabilityNot == "" {
		if in.Stability, span, err = d.stability(ws); err != nil {
			return body, d.refuse("the study over time cannot be evaluated", err)
		}
		in.Prior, out.Prior = d.prior(span)
		if t := d.trend; t != nil && in.Stability != nil && in.Stability.Significant {
			in.Trend = &assign.TrendAnswer{Change: assign.Change(t.Change), ShelfLife: t.ShelfLifeDays, Reason: t.Reason}
			out.Trend = t
		}
	}
	decision, err := assign.Decide(in)
	if err != nil {
		return body, d.refuse("the value cannot be decided", err)
	}
	d.fill(&body, out, analysis, decision, in, span, ws)
	if err := d.step(ctx, v, out); err != nil {
		return body, err
	}
	out.Checks = d.checks(out, ws)
	body.Campaign = out
	return body, nil
}

func (d campaignData) refuse(what string, err error) error {
	var input *assign.InputError
	if errors.As(err, &input) {
		return &Error{Meaning: Conflict, Message: fmt.Sprintf("campaign %s, %s: %s", store.FormatCode(d.plan.Code), d.quantity.Scale, what),
			Complaints: []Complaint{{Place: input.Place, Found: input.Found, Expected: input.Expected}}, Err: err}
	}
	return &Error{Meaning: Conflict, Message: fmt.Sprintf("campaign %s, %s: %s: %v", store.FormatCode(d.plan.Code), d.quantity.Scale, what, err), Err: err}
}

// fill states the numbers of a decision.
func (d campaignData) fill(body *store.Value, out *store.CampaignResult, a *assign.Analysis, dec *assign.Decision, in assign.DecisionInput, span float64, ws []witness) {
	body.Value = store.Decimal(strconv.FormatFloat(dec.Value, 'f', -1, 64))
	body.StandardUncertainty, body.DegreesOfFreedom = dec.StandardUncertainty, finite(dec.Expanded.DegreesOfFreedom)
	used := map[string]bool{}
	for _, t := range dec.Common.Terms {
		body.Sources = append(body.Sources, store.Source{ID: t.ID, Kind: string(t.Kind), U: t.U, Sensitivity: t.Sensitivity, Group: t.Group,
			Per: t.Per, Shares: each(t.Shares, func(h uncertain.Share) store.Share { return store.Share(h) })})
		used[t.Group] = true
		for _, h := range t.Shares {
			used[h.Group] = true
		}
	}
	if h := in.Homogeneity; h != nil {
		used[h.Group.ID] = true
		body.UBetweenUnits = &store.ValueComponent{StandardUncertainty: h.StandardUncertainty, DegreesOfFreedom: finite(h.DegreesOfFreedom), Group: h.Group.ID}
		out.Homogeneity = showHomogeneity(h)
	}
	if s := in.Stability; s != nil {
		nu := float64(s.DegreesOfFreedom)
		body.ULongTerm = &store.ValueComponent{StandardUncertainty: dec.StabilityUncertainty, DegreesOfFreedom: &nu, Group: s.Group.ID}
		out.Stability = &store.StabilityResult{Points: s.DegreesOfFreedom + 1 + s.Sessions, Slope: s.Slope, USlope: s.SlopeUncertainty, DegreesOfFreedom: s.DegreesOfFreedom, P: s.P,
			Significant: s.Significant, SpanDays: span, ResidualSD: s.ResidualStandardDeviation, ShelfLifeDays: s.ShelfLife, StandardUncertainty: s.StandardUncertainty,
			Isochronous: d.isochronous()}
		if s.Sessions > 1 {
			out.Stability.Blocks = s.Sessions
		}
	}
	if p := in.Prior; p != nil {
		body.ULongTerm = &store.ValueComponent{StandardUncertainty: dec.StabilityUncertainty, DegreesOfFreedom: out.Prior.DegreesOfFreedom, Group: p.Group}
		used[p.Group] = true
	}
	for _, g := range dec.Groups {
		if used[g.ID] {
			body.Groups = append(body.Groups, store.Group(g))
		}
	}
	if dec.ShelfLife > 0 && d.validFrom != nil {
		at := *d.validFrom + store.Instant(dec.ShelfLife*86400e6)
		body.ExpiresAt = &at
	}
	body.Evidence = fmt.Sprintf("campaign %s: %d sessions", store.FormatCode(d.plan.Code), len(ws))

	out.UCharacterisation, out.UMeasurement, out.UCommon = dec.CharacterisationUncertainty, a.MeasurementUncertainty, a.CommonUncertainty
	out.K, out.Expanded, out.Probability, out.EffectiveDF = dec.Expanded.CoverageFactor, dec.Expanded.U, dec.Expanded.Probability, finite(dec.Expanded.DegreesOfFreedom)
	out.Estimator, out.Weights, out.BetweenSession, out.LongTermUsed = d.quantity.Estimator, d.quantity.Weights, a.BetweenSession, a.LongTermUsed
	h := a.Heterogeneity
	out.Agreement = store.CampaignAgreement{Q: h.Q, DegreesOfFreedom: h.DegreesOfFreedom, P: h.P, ISquared: h.ISquared, BetweenLow: h.BetweenLow, BetweenHigh: h.BetweenHigh}
	for _, e := range a.Estimates {
		out.Estimates = append(out.Estimates, store.CampaignEstimate{Estimator: string(e.Estimator), BetweenSession: e.BetweenSession, Value: e.Value, StandardUncertainty: e.StandardUncertainty})
	}
	portions, started := map[string]int{}, map[string]*store.Instant{}
	for _, w := range ws {
		portions[w.session()] += len(w.portions)
		started[w.session()] = w.calibration.Value.StartedAt
	}
	for _, s := range a.Sessions {
		line := store.CampaignSession{Session: s.Session, Instrument: s.Instrument, StartedAt: started[s.Session], Value: s.Value, StandardUncertainty: s.StandardUncertainty,
			UPrivate: s.PrivateUncertainty, Portions: portions[s.Session], Weight: s.Weight, Effect: s.Effect, UEffect: s.EffectUncertainty, Standardised: s.Standardised}
		if l := s.LeftOut; l != nil {
			line.LeftOut = &store.CampaignEstimate{Estimator: d.quantity.Estimator, BetweenSession: l.BetweenSession, Value: l.Value, StandardUncertainty: l.StandardUncertainty}
		}
		out.Sessions = append(out.Sessions, line)
	}
	out.HartungKnapp = a.HartungKnapp
	if t := a.Instruments; t != nil {
		out.InstrumentP, out.InstrumentsDiffer = t.P, t.Real
	}
	for _, b := range dec.Budget {
		out.Budget = append(out.Budget, store.CampaignBudget{Line: b.Line, StandardUncertainty: b.StandardUncertainty, Share: b.Share, MoreSessions: b.MoreSessions})
	}
	for _, m := range dec.Remarks {
		out.Remarks = append(out.Remarks, store.CampaignRemark{Code: m.Code, Severity: m.Severity, Subjects: m.Subjects, Sentence: m.Sentence})
	}
	out.MinimumPortion, out.ShelfLifeDays, out.DriftPerDay = dec.MinimumPortion, dec.ShelfLife, dec.Drift
}

func showHomogeneity(h *assign.Homogeneity) *store.HomogeneityResult {
	out := &store.HomogeneityResult{Units: h.Groups, Measurements: h.Count, Sessions: h.Sessions, BetweenDF: h.BetweenDF, WithinDF: h.WithinDF,
		MeanSquareBetween: h.MeanSquareBetween, MeanSquareWithin: h.MeanSquareWithin, F: h.F, P: h.P, BetweenUnits: h.BetweenUnits, Floor: h.Floor, FloorUsed: h.FloorUsed}
	if t := h.FillingTrend; t != nil {
		out.FillingP = &t.P
	}
	return out
}

// step sets the predecessor's results of the campaign against its assigned value.
func (d campaignData) step(ctx context.Context, v source, out *store.CampaignResult) error {
	if d.predecessor == nil || len(d.overlap) == 0 {
		return nil
	}
	ws, err := witnesses(ctx, v, d.overlap)
	if err != nil {
		return err
	}
	assigned, groups, err := numberOf(*d.predecessor)
	if err != nil {
		return err
	}
	c := campaignOf(d.plan.Code, d.quantity, ws)
	have := map[string]bool{}
	for _, g := range c.Groups {
		have[g.ID] = true
	}
	for _, g := range groups {
		if !have[g.ID] {
			c.Groups = append(c.Groups, g)
		}
	}
	s, err := assign.AnalyseStep(c, assigned)
	if err != nil {
		return d.refuse("the step from the predecessor cannot be tested", err)
	}
	out.Step = &store.StepResult{Material: d.plan.Value.Predecessor, Sessions: len(ws), Difference: s.Difference.Value, StandardUncertainty: s.Difference.StandardUncertainty(),
		Expanded: s.Expanded.U, Zeta: s.Zeta, Detected: s.Detected}
	if s.Detected {
		out.Step.Decision = d.stepDecision
	}
	return nil
}

// checks holds the data against what the plan asked for.
func (d campaignData) checks(out *store.CampaignResult, ws []witness) []store.CampaignCheck {
	var list []store.CampaignCheck
	add := func(rule string, passed bool, found, expected string) {
		list = append(list, store.CampaignCheck{Rule: rule, Found: found, Expected: expected, Passed: passed})
	}
	plan, q := d.plan.Value, d.quantity
	days, least := map[string]bool{}, math.MaxInt
	for _, s := range out.Sessions {
		if s.StartedAt != nil {
			days[s.StartedAt.Time().Format("2006-01-02")] = true
		}
		least = min(least, s.Portions)
	}
	add("sessions", len(out.Sessions) >= plan.Sessions, fmt.Sprint(len(out.Sessions)), fmt.Sprintf("%d or more", plan.Sessions))
	if plan.Days > 0 {
		add("days", len(days) >= plan.Days, fmt.Sprint(len(days)), fmt.Sprintf("%d or more", plan.Days))
	}
	add("replicates", least >= plan.Replicates, fmt.Sprintf("%d in the session with the fewest", least), fmt.Sprintf("%d or more in each session", plan.Replicates))
	instruments := map[string]bool{}
	for _, w := range ws {
		instruments[w.calibration.Value.Instrument] = true
	}
	for _, name := range plan.Instruments {
		found := "no session"
		if instruments[name] {
			found = "measured"
		}
		add("instrument "+name, instruments[name], found, "at least one session on it")
	}
	if h := out.Homogeneity; h != nil {
		add("units", h.Units >= q.Homogeneity.Units, fmt.Sprint(h.Units), fmt.Sprintf("%d or more", q.Homogeneity.Units))
	}
	if x := q.Acceptance.Expanded; x > 0 {
		add("expanded uncertainty", out.Expanded <= x, fmt.Sprintf("%.3g ‰", out.Expanded), fmt.Sprintf("%g ‰ or less", x))
	}
	if x := q.Acceptance.Agreement; x > 0 && out.Agreement.P != nil {
		add("agreement of the sessions", *out.Agreement.P >= x, fmt.Sprintf("p = %.3g", *out.Agreement.P), fmt.Sprintf("p of %g or more", x))
	}
	if x := q.Acceptance.SessionEffect; x > 0 {
		worst, name := 0.0, "none"
		for _, s := range out.Sessions {
			if s.Standardised != nil && math.Abs(*s.Standardised) > worst {
				worst, name = math.Abs(*s.Standardised), store.FormatCode(s.Session)
			}
		}
		add("largest session effect", worst <= x, fmt.Sprintf("%.2f times its u (%s)", worst, name), fmt.Sprintf("%g or less", x))
	}
	if plan.Predecessor != "" {
		if s := out.Step; s == nil {
			add("overlap with the predecessor", false, plan.Predecessor+" was not measured beside the candidate, or has no value on this scale", "its value met again in the campaign's sessions")
		} else {
			add("overlap with the predecessor", !s.Detected || s.Decision != "", fmt.Sprintf("a step of %+.3g ‰ ± %.2g ‰ (U)", s.Difference, s.Expanded), "no step, or what is decided about it")
		}
	}
	return list
}

// againCampaign computes a campaign's value again from the inputs it names.
func againCampaign(ctx context.Context, v source, val store.Version[store.Value]) (store.Value, []member, error) {
	d := campaignData{units: map[string]store.Unit{}, studies: map[string]store.Version[store.Study]{}, validFrom: val.ValidFrom, note: val.Value.Note,
		trend: val.Value.Campaign.Trend, deviation: val.Value.Campaign.Deviation, circular: val.Value.Campaign.Circular}
	if s := val.Value.Campaign.Step; s != nil {
		d.stepDecision = s.Decision
	}
	var err error
	for _, in := range val.Inputs {
		switch in.Part {
		case partCampaign:
			d.plan, err = decodeVersion[store.Assignment](ctx, v, in.Ref)
		case "predecessor":
			var p store.Version[store.Value]
			p, err = decodeVersion[store.Value](ctx, v, in.Ref)
			d.predecessor = &p
		case "unit":
			var u store.Version[store.Unit]
			u, err = decodeVersion[store.Unit](ctx, v, in.Ref)
			d.units[u.Code] = u.Value
		case partStudy:
			var s store.Version[store.Study]
			s, err = decodeVersion[store.Study](ctx, v, in.Ref)
			d.studies[s.Value.Of] = s
		}
		if err != nil {
			return store.Value{}, nil, err
		}
	}
	if d.quantity, err = quantityOf(d.plan.Value, val.Value.Scale, val.Value.Measurand); err != nil {
		return store.Value{}, nil, err
	}
	if d.members, err = membersOf(ctx, v, val.Inputs, lineOf(val.Value.Material)); err != nil {
		return store.Value{}, nil, err
	}
	d.overlap = overlapOf(d.members, d.plan.Value.Predecessor)
	body, err := d.value(ctx, v)
	return body, d.members, err
}

// lineOf finds the result of a subject in a calibration; -1 where there is none.
func lineOf(subject string) func(int, store.Version[store.Calibration]) int {
	return func(_ int, c store.Version[store.Calibration]) int {
		for i, r := range c.Value.Results {
			if r.Subject == subject {
				return i
			}
		}
		return -1
	}
}

// overlapOf are the results of the predecessor in the members' sessions.
func overlapOf(members []member, predecessor string) []member {
	var out []member
	for _, m := range members {
		if line := lineOf(predecessor)(0, m.calibration); predecessor != "" && line >= 0 {
			out = append(out, member{calibration: m.calibration, line: line, outcome: m.outcome})
		}
	}
	return out
}
