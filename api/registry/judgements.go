package registry

import (
	"fmt"
	"math"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

func valueFlags(a assembly, v store.Version[store.Value]) []calib.Flag {
	var flags []calib.Flag
	if v.Value.Provisional {
		flags = append(flags, calib.Flag{Code: "provisional_value", Severity: calib.Warning, Subject: v.Value.Material,
			Message: fmt.Sprintf("The value of %s used as an anchor is provisional: nobody has checked it against its source.", v.Value.Material),
			Advice:  "State the value from its certificate in your own laboratory and approve it."})
	}
	if x := v.Value.ExpiresAt; x != nil && *x < *a.session.Value.StartedAt {
		flags = append(flags, calib.Flag{Code: "expired_value", Severity: calib.Warning, Subject: v.Value.Material,
			Message: fmt.Sprintf("The value of %s had expired on %s when the session ran.", v.Value.Material, x.Time().Format("2006-01-02"))})
	}
	if from, end := v.ValidFrom, a.session.Value.EndedAt; from != nil && end != nil && *from > *a.session.Value.StartedAt && *from <= *end {
		flags = append(flags, calib.Flag{Code: "value_changed_in_session", Severity: calib.Warning, Subject: v.Value.Material,
			Message: fmt.Sprintf("A new value of %s began to hold while the session ran; the one at its start was used.", v.Value.Material)})
	}
	return flags
}

// controlFlags judges a control by its assigned value (metrology: ζ with the
// shared sources cancelled) and by the method's limit.
func (a *assembly) controlFlags(r *calib.Result, i int) ([]calib.Flag, error) {
	s := r.Subjects[i]
	if s.Role != calib.Control {
		return nil, nil
	}
	value, ok := a.controls[s.Subject]
	if !ok {
		return []calib.Flag{{Code: "control_without_value", Severity: calib.Note, Subject: s.Subject,
			Message: fmt.Sprintf("The control %s has no assigned value on %s, so it shows repeatability but not trueness.", s.Subject, a.spec.Scale)}}, nil
	}
	assigned, _, err := a.numberUsed(value, calib.Control)
	if err != nil {
		return nil, err
	}
	deviation := s.Value - assigned.Value
	difference, err := uncertain.Linear(0, []float64{1, -1}, []uncertain.Number{r.Number(i), assigned})
	if err != nil {
		return nil, err
	}
	u := difference.StandardUncertainty()
	var flags []calib.Flag
	if limit := a.limits.ControlDeviation; limit > 0 && math.Abs(deviation) > limit {
		flags = append(flags, calib.Flag{Code: "control_outside_limit", Severity: calib.Serious, Subject: s.Subject, Readings: a.numbers(s.Readings),
			Message: fmt.Sprintf("The control %s is %+.2f ‰ from its assigned value; the method allows %.2f ‰.", s.Subject, deviation, limit),
			Advice:  "One control out and another in points to its bottle or preparation; all off the same way points to an anchor or its value."})
	} else if u > 0 && math.Abs(deviation) > 2*u {
		flags = append(flags, calib.Flag{Code: "control_deviates", Severity: calib.Warning, Subject: s.Subject, Readings: a.numbers(s.Readings),
			Message: fmt.Sprintf("The control %s is %+.2f ‰ from its assigned value, %.1f times the standard uncertainty of that difference.", s.Subject, deviation, math.Abs(deviation)/u)})
	}
	return flags, nil
}

func (a *assembly) slopeFlags(r *calib.Result) []calib.Flag {
	l := a.limits
	if l.SlopeFrom == 0 && l.SlopeTo == 0 {
		return nil
	}
	for _, p := range r.Parameters {
		if p.Name == "slope" && (p.Value < l.SlopeFrom || p.Value > l.SlopeTo) {
			return []calib.Flag{{Code: "slope_outside_limits", Severity: calib.Warning,
				Message: fmt.Sprintf("The slope (raw per true) is %.4f; the method expects %.3f to %.3f.", p.Value, l.SlopeFrom, l.SlopeTo),
				Advice:  "Compare with this instrument's history: combustion, gas pressure, detector or a wrong value can change it."}}
		}
	}
	return nil
}

// repeatabilityFlags holds the scatter of replicates against the method's limit.
// The residual standard deviation is that of raw deltas, so it is divided by the slope.
func (a *assembly) repeatabilityFlags(r *calib.Result) []calib.Flag {
	limit := a.limits.ReplicateSD
	if limit == 0 || r.ResidualSD == nil {
		return nil
	}
	for _, p := range r.Parameters {
		if p.Name != "slope" || p.Value == 0 {
			continue
		}
		if sd := *r.ResidualSD / math.Abs(p.Value); sd > limit {
			return []calib.Flag{{Code: "repeatability_outside_limit", Severity: calib.Warning,
				Message: fmt.Sprintf("Readings scatter about the fit by %.3f ‰ (standard deviation); the method expects %.3f ‰ or less.", sd, limit),
				Advice:  "Look at leaks, peak sizes and weighings before trusting any value of this session."}}
		}
	}
	return nil
}
