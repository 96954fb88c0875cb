package assign

import (
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/uncertain"
)

// report gathers the analysis around the combined value.
func (at *combiner) report(c *combined, test *InstrumentTest) (*Analysis, error) {
	direct := newSpread(at.parts, nil)
	tau2 := c.session.variance
	last := tau2
	if c.instruments != nil {
		tau2, _ = estimate(direct, at.policy.Estimator)
		last = c.instrument.variance
		test.fill(c)
	}
	out := &Analysis{
		Value:          c.value,
		BetweenSession: math.Sqrt(c.session.variance), LongTermUsed: c.session.longTerm,
		Groups:        joinGroups(joinGroups(at.campaign.Groups, c.session.groups), c.instrument.groups),
		Heterogeneity: heterogeneity(direct, tau2),
		Estimates:     c.parts.estimates(c.spread),
	}
	w := c.weights
	if c.instruments != nil {
		w = c.meanWeights
	}
	out.HartungKnapp = hartungKnapp(c.parts, c.spread, w, last)
	out.split(at.parts.commonVariance(c.weights))
	totals, err := at.totals(at.members, c)
	if err != nil {
		return nil, err
	}
	at.sessionEffects(out, totals, c.weights)
	return out, at.leaveOut(out, c.instruments)
}

// split divides u² into the common part and the rest.
func (out *Analysis) split(common float64) {
	out.CommonUncertainty = math.Sqrt(common)
	out.MeasurementUncertainty = math.Sqrt(math.Max(0, out.Value.Variance()-common))
}

// estimates shows every estimator, with private weights.
func (p *parts) estimates(s *spread) []Estimate {
	var out []Estimate
	if len(s.z) == 0 {
		return nil
	}
	for _, e := range estimators {
		tau2, ok := estimate(s, e)
		if !ok {
			continue
		}
		w := privateWeights(p.private, tau2)
		value, variance := 0.0, p.commonVariance(w)
		for i, wi := range w {
			value += float64(wi * p.x[i])
			variance += float64(float64(wi*wi) * (p.private[i] + tau2))
		}
		out = append(out, Estimate{Estimator: e, BetweenSession: math.Sqrt(tau2), Value: value, StandardUncertainty: math.Sqrt(variance)})
	}
	return out
}

// hartungKnapp scales what the sessions do not share by the scatter found.
func hartungKnapp(p *parts, s *spread, w []float64, tau2 float64) *float64 {
	if len(s.z) == 0 {
		return nil
	}
	q := s.q(tau2)
	if math.IsInf(q, 0) {
		return nil
	}
	var own float64
	for i, wi := range w {
		own += float64(float64(wi*wi) * (p.private[i] + tau2))
	}
	u := math.Sqrt(float64(q/s.df()*own) + p.commonVariance(w))
	return &u
}

func (at *combiner) sessionEffects(out *Analysis, totals []uncertain.Number, w []float64) {
	for i, m := range at.members {
		e := SessionEffect{
			Session: m.Session, Instrument: m.Instrument, Value: m.Result.Value,
			StandardUncertainty: m.Result.StandardUncertainty(), PrivateUncertainty: math.Sqrt(at.parts.private[i]),
			Weight: w[i],
		}
		e.Effect, e.EffectUncertainty, e.Standardised = difference(totals[i], out.Value)
		out.Sessions = append(out.Sessions, e)
	}
}

// difference is a − b, its u from the sources, and their ratio. A u that is
// rounding beside those of a and b is zero.
func difference(a, b uncertain.Number) (d, u float64, ratio *float64) {
	d = a.Value - b.Value
	n, err := uncertain.Linear(0, []float64{1, -1}, []uncertain.Number{a, b})
	if err != nil {
		return d, math.NaN(), nil
	}
	u = n.StandardUncertainty()
	if u <= 1e-12*(a.StandardUncertainty()+b.StandardUncertainty()) {
		return d, 0, nil
	}
	r := d / u
	return d, u, &r
}

// leaveOut combines without each session in turn, by the same policy, over
// what is left of the instruments.
func (at *combiner) leaveOut(out *Analysis, instruments []string) error {
	if len(at.members) < 2 {
		return nil
	}
	for i, m := range at.members {
		rest := slices.Delete(slices.Clone(at.members), i, i+1)
		left := slices.DeleteFunc(slices.Clone(instruments), func(name string) bool {
			return !slices.ContainsFunc(rest, func(o Member) bool { return o.Instrument == name })
		})
		if len(left) < 2 {
			left = nil
		}
		sub := &combiner{campaign: at.campaign, policy: at.policy, members: rest, parts: takeApart(results(rest))}
		c, err := sub.combine(left)
		if err != nil {
			return fmt.Errorf("combine without session %s: %w", m.Session, err)
		}
		whole, err := at.totals([]Member{m}, c)
		if err != nil {
			return err
		}
		l := &LeftOut{
			Value: c.value.Value, StandardUncertainty: c.value.StandardUncertainty(),
			BetweenSession: math.Sqrt(c.session.variance), Shift: c.value.Value - out.Value.Value,
		}
		_, _, l.Prediction = difference(whole[0], c.value)
		out.Sessions[i].LeftOut = l
	}
	return nil
}

// remark says what a reader should know beside the numbers.
func (at *combiner) remark(out *Analysis) {
	add := func(code, severity string, subjects []string, sentence string, args ...any) {
		out.Remarks = append(out.Remarks, Remark{Code: code, Severity: severity, Subjects: subjects, Sentence: fmt.Sprintf(sentence, args...)})
	}
	m := len(at.members)
	h := out.Heterogeneity
	switch {
	case m == 1:
		add("one_session", Warning, []string{at.members[0].Session}, "One session tells nothing about the scatter between sessions.")
	case m < 4:
		add("few_sessions", Information, nil, "%d sessions estimate the scatter between sessions badly: the coverage factor is %.2f.", m, out.Expanded.CoverageFactor)
	}
	if h.P != nil && *h.P < at.policy.Level {
		add("sessions_disagree", Warning, nil, "The sessions differ by more than their own uncertainty explains (Q = %.3g on %d, p = %.2g).", *h.Q, h.DegreesOfFreedom, *h.P)
	}
	if t := out.Instruments; t != nil && t.Real {
		add("instruments_differ", Warning, t.Instruments, "Instruments differ by more than sessions on one of them do (p = %.2g): their means are combined.", *t.P)
	} else if t != nil && t.F == nil {
		add("instruments_not_tested", Information, t.Instruments, "No instrument has two sessions: instruments and sessions cannot be told apart.")
	}
	if out.LongTermUsed {
		add("long_term_component", Information, nil, "The method's long-term component (%.3g ‰) is larger than the campaign's own estimate and is used.", out.BetweenSession)
	}
	if m > 2 {
		// Each session against the others, at the level shared out over all.
		limit := uncertain.CoverageFactor(1-at.policy.Level/float64(m), float64(m-2))
		for _, e := range out.Sessions {
			if l := e.LeftOut; l != nil && l.Prediction != nil && math.Abs(*l.Prediction) > limit {
				add("session_apart", Warning, []string{e.Session}, "Session %s stands apart from the others; without it the value would move by %.3g ‰.", e.Session, l.Shift)
			}
		}
	}
	for _, member := range at.members {
		for _, t := range member.Result.Terms {
			if t.Kind == uncertain.KindBetweenSession && t.U > 0 && t.Sensitivity != 0 && at.policy.Estimator != NoBetween {
				add("between_session_in_results", Information, nil, "The results already hold a between-session component; the campaign's own is what the scatter shows beyond it.")
				return
			}
		}
	}
}
