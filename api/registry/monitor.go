package registry

import (
	"context"
	"errors"
	"fmt"
	"slices"

	"deltamoor/calib/assign"
	"deltamoor/store"
)

// A Monitor follows an assigned value after its assignment: every accepted
// result of the material that was no anchor, against the value in force.
type Monitor struct {
	Value  Item[store.Value]
	Points []MonitorPoint // by time
	// Trend is the slope test of the deviations over time, in days since the first
	// point, each session one point; a drift that the value states is taken off
	// first. Nil with Without, which says why there is none.
	Trend   *assign.Stability
	Without string
	// Proposal says why the material should be held suspect; "" where nothing does.
	Proposal string
	// Next is when it is to be measured again; nil where its material asks for nothing.
	Next    *store.Instant
	Overdue bool
}

// A MonitorPoint is one session's result of the material.
type MonitorPoint struct {
	Session, Calibration string
	At                   store.Instant
	Value                float64 // ‰
	StandardUncertainty  float64 // of the result
	Deviation            float64 // from the assigned value
	Campaign             bool    // one of the sessions that the value rests on
}

// MaxMonitored bounds the points of one monitor; the newest are kept.
const MaxMonitored = 1000

// Monitor follows the value of a material on a scale that is in force now.
func (r *Registry) Monitor(ctx context.Context, actor Actor, material, scale, measurand string) (Monitor, error) {
	var out Monitor
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		value, err := valueInForce(ctx, v, actor.Laboratory, key.Code, scale, nameOr(measurand, Total), store.Moment{})
		if err != nil {
			return err
		}
		m, err := newest[store.Material](ctx, v, key)
		if err != nil {
			return err
		}
		out, err = monitor(ctx, v, actor.Laboratory, m, value, store.InstantOf(r.now()))
		return err
	})
	return out, err
}

func monitor(ctx context.Context, v *store.View, laboratory string, m Item[store.Material], value Item[store.Value], now store.Instant) (Monitor, error) {
	out := Monitor{Value: value}
	val := value.Value
	x, ok := new(complaints).number("", val.Value)
	if !ok {
		return out, fmt.Errorf("%s: stored value %q is not a number", value.Ref, val.Value)
	}
	since := value.ValidFrom
	own := map[string]bool{}
	if val.Campaign != nil {
		for _, s := range val.Campaign.Sessions {
			own[s.Session] = true
			if s.StartedAt != nil && (since == nil || *s.StartedAt < *since) {
				since = s.StartedAt
			}
		}
	}
	if err := out.collect(ctx, v, laboratory, val, since, x, own); err != nil {
		return out, err
	}
	last := m.RecordedAt
	if value.ValidFrom != nil {
		last = max(last, *value.ValidFrom)
	}
	for _, p := range out.Points {
		last = max(last, p.At)
	}
	if rule := m.Value.Stock; rule != nil && rule.RecheckDays > 0 {
		next := last + store.Instant(rule.RecheckDays*microsPerDay)
		out.Next, out.Overdue = &next, next < now
	}
	return out, out.trend(val)
}

// collect reads the accepted results of the material on the scale.
func (m *Monitor) collect(ctx context.Context, v *store.View, laboratory string, val store.Value, since *store.Instant, assigned float64, own map[string]bool) error {
	seen := map[string]bool{}
	for after := ""; ; {
		rows, next, err := v.Results(ctx, store.ResultQuery{Laboratory: laboratory, Subject: val.Material, Scale: val.Scale, Measurand: val.Measurand, From: since, After: after, Limit: MaxPage})
		if err != nil {
			return err
		}
		for _, row := range rows {
			if seen[row.Calibration] || row.At == nil {
				continue
			}
			seen[row.Calibration] = true
			member, why, err := acceptedIn(ctx, v, laboratory, row.Calibration, val.Material)
			if err != nil {
				return err
			}
			if why != "" || len(member) == 0 {
				continue
			}
			c := member[0].calibration
			res := c.Value.Results[member[0].line]
			m.Points = append(m.Points, MonitorPoint{Session: c.Value.Session, Calibration: c.Code, At: *row.At, Value: res.Value, StandardUncertainty: res.StandardUncertainty,
				Deviation: res.Value - assigned, Campaign: own[c.Value.Session]})
			if len(m.Points) > MaxMonitored {
				m.Points = m.Points[1:]
			}
		}
		if after = next; after == "" {
			return nil
		}
	}
}

// leastMonitored is how many points a trend needs: with three, one degree of
// freedom would be left to judge it by.
const leastMonitored = 4

func (m *Monitor) trend(val store.Value) error {
	slices.SortStableFunc(m.Points, func(a, b MonitorPoint) int { return int(min(max(a.At-b.At, -1), 1)) })
	if n := len(m.Points); n < leastMonitored {
		m.Without = fmt.Sprintf("%d results; a trend needs %d", n, leastMonitored)
		return nil
	}
	first, last := m.Points[0].At, m.Points[len(m.Points)-1].At
	study := assign.StabilityStudy{Group: "monitor", ShelfLife: 1}
	if span := daysBetween(first, last); span > 0 {
		study.ShelfLife = span
	}
	drift := 0.0
	if r := val.Campaign; r != nil && r.DriftPerDay != nil {
		drift = *r.DriftPerDay
	}
	for _, p := range m.Points {
		t := daysBetween(first, p.At)
		study.Points = append(study.Points, assign.StabilityPoint{Time: t, Value: p.Deviation - float64(drift*t)})
	}
	s, err := assign.AnalyseStability(study)
	var input *assign.InputError
	if errors.As(err, &input) {
		m.Without = input.Error()
		return nil
	}
	if err != nil {
		return err
	}
	m.Trend = s
	if s.Significant {
		m.Proposal = fmt.Sprintf("%s drifts from its value on %s by %+.2g ‰ a year (p = %.2g, %d sessions over %.0f days): hold it suspect until that is decided", val.Material, val.Scale, s.Slope*365.25, s.P, len(m.Points), study.ShelfLife)
	}
	return nil
}
