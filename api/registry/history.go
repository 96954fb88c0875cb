package registry

import (
	"context"
	"fmt"
	"math"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// How far an instrument's history reaches where the method does not say, and
// from how many lines on it is a history.
const (
	defaultHistorySessions = 30
	defaultHistoryLimit    = 3.0
	leastHistory           = 6
)

// observeHistory holds slope, intercept and drift against the approved lines
// that this instrument had by the same method on the same scale in earlier
// sessions. With n of them, mean m and standard deviation s, a coefficient x is
// flagged when
//
//	|x − m| > t·max(s·√(1 + 1/n), u(x))
//
// where t is the quantile of Student's t with n − 1 degrees of freedom that
// corresponds to the method's limit in a normal distribution (3 unless it says).
// Fewer than six lines are no history.
func (a *assembly) observeHistory(ctx context.Context, v *store.View, laboratory string, body store.Calibration) error {
	a.history = nil
	if a.session.Value.StartedAt == nil {
		return nil
	}
	sessions := a.limits.HistorySessions
	if sessions == 0 {
		sessions = defaultHistorySessions
	}
	lines, err := v.LastLines(ctx, store.LineQuery{Laboratory: laboratory, Instrument: body.Instrument, Method: a.method.Code,
		Scale: body.Scale, Measurand: body.Measurand, Limit: sessions}, *a.session.Value.StartedAt)
	if err != nil || len(lines) < leastHistory {
		return err
	}
	h := &store.LineHistory{From: lines[len(lines)-1].At, To: lines[0].At}
	for _, c := range []struct {
		parameter, unit, advice string
		of                      func(store.LineRow) *float64
	}{
		{"slope", "", "Combustion or conversion, gas pressure, the detector, or a wrong value of an anchor can change it.", func(r store.LineRow) *float64 { return &r.Slope }},
		{"intercept", " ‰", "A new or nearly empty working-gas cylinder changes it alone; with the slope, look at the instrument and the anchors.", func(r store.LineRow) *float64 { return &r.Intercept }},
		{"drift.linear", " ‰ an hour", "Look for a leak, a reactor near its end, or a room that changed its temperature.", func(r store.LineRow) *float64 { return r.Drift }},
	} {
		var values []float64
		for _, r := range lines {
			if x := c.of(r); x != nil {
				values = append(values, *x)
			}
		}
		if len(values) < leastHistory {
			continue
		}
		centre, spread := meanAndSpread(values)
		h.Coefficients = append(h.Coefficients, store.HistoryCoefficient{Parameter: c.parameter, N: len(values), Centre: centre, Spread: spread})
		for _, p := range body.Parameters {
			if p.Name != c.parameter {
				continue
			}
			n := float64(len(values))
			limit := historyQuantile(a.limits.HistoryLimit, n-1)
			if off := math.Abs(p.Value - centre); off > limit*math.Max(spread*math.Sqrt(1+1/n), p.StandardUncertainty) {
				name, code := c.parameter, c.parameter
				if name == "drift.linear" {
					name, code = "drift", "drift"
				}
				a.observed = append(a.observed, calib.Flag{Code: code + "_off_history", Severity: calib.Warning,
					Message: fmt.Sprintf("The %s of %s is %.5g%s; in its last %d approved sessions by this method it was %.5g with a standard deviation of %.2g.", name, body.Instrument, p.Value, c.unit, len(values), centre, spread),
					Advice:  c.advice})
			}
		}
	}
	if len(h.Coefficients) > 0 {
		a.history = h
	}
	return nil
}

func meanAndSpread(values []float64) (mean, spread float64) {
	for _, x := range values {
		mean += x / float64(len(values))
	}
	for _, x := range values {
		spread += (x - mean) * (x - mean)
	}
	return mean, math.Sqrt(spread / float64(len(values)-1))
}

// historyQuantile widens a limit in normal standard deviations to few sessions.
func historyQuantile(limit, nu float64) float64 {
	if limit == 0 {
		limit = defaultHistoryLimit
	}
	inside := math.Erf(limit / math.Sqrt2)
	if !(inside < 1-1e-12) {
		return limit // beyond what a quantile can tell
	}
	return uncertain.CoverageFactor(inside, nu)
}

// Lines lists an instrument's lines, in the order of method, scale, measurand
// and time; unless all is asked for, those in force.
func (r *Registry) Lines(ctx context.Context, actor Actor, q store.LineQuery, page Query) (Page[store.LineRow], error) {
	var out Page[store.LineRow]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindInstrument, Code: q.Instrument}
		if _, err := newest[store.Instrument](ctx, v, key); err != nil {
			return err
		}
		q.Laboratory, q.After, q.Limit, q.AsOf = actor.Laboratory, page.After, page.limit(), page.Moment.AsOf
		moment, _, err := v.Moment(ctx, actor.Laboratory, page.Moment)
		if err != nil {
			return err
		}
		out.AsOf = *moment.AsOf
		out.Items, out.After, err = v.Lines(ctx, q)
		return err
	})
	return out, err
}

// checkJudgementLimits checks the limits of the judgements beside the fit.
func checkJudgementLimits(c *complaints, place string, l store.Limits) {
	if p := l.TestLevel; p != 0 && !(p > 0 && p <= 0.5) {
		c.add(place+".test_level", fmt.Sprint(p), "a probability above 0, at most 0.5")
	}
	if n := l.HistorySessions; n < 0 || n > MaxPage || n > 0 && n < leastHistory {
		c.add(place+".history_sessions", fmt.Sprint(n), "%d to %d sessions", leastHistory, MaxPage)
	}
}
