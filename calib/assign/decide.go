package assign

import (
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/uncertain"
)

// A Change answers a significant slope of the stability study.
type Change string

// The changes that a decision can rest on.
const (
	ShorterShelfLife Change = "shelf_life"  // a shorter shelf life is stated
	OtherStorage     Change = "storage"     // stored so that the slope does not apply
	ValueWithTime    Change = "value_model" // the value is stated as a function of time
)

// A TrendAnswer says what was changed because the value drifts, and why.
type TrendAnswer struct {
	Change Change
	// ShelfLife is the new one, for [ShorterShelfLife].
	ShelfLife float64
	Reason    string
}

// A DecisionInput is what an assigned value rests on.
type DecisionInput struct {
	Lot string
	// StudyVersion tells the versions of a lot's stability study apart.
	StudyVersion     string
	Characterisation *Analysis
	// Homogeneity and Stability may be nil only with the reason why no study is
	// needed (a gas or a water is homogeneous).
	Homogeneity    *Homogeneity
	HomogeneityNot string
	Stability      *Stability
	StabilityNot   string
	// Prior is what holds while the stability study still runs; nil where the
	// study is complete, or none is needed.
	Prior *PriorStability
	// Trend is nil where the stability study has no significant slope.
	Trend    *TrendAnswer
	Coverage uncertain.Coverage
}

// A PriorStability is the uncertainty of stability taken over from elsewhere,
// such as an alike material, for as long as a lot's own study runs.
type PriorStability struct {
	// StandardUncertainty is u_lts (‰) for ShelfLife, in the unit of the study.
	StandardUncertainty, ShelfLife float64
	// DegreesOfFreedom of it; 0 where it is known.
	DegreesOfFreedom float64
	// Group names its variance.
	Group string
}

// A BudgetLine is one line of the budget of an assigned value.
type BudgetLine struct {
	Line                string
	StandardUncertainty float64
	// Share of u².
	Share float64
	// MoreSessions says that more sessions reduce the line.
	MoreSessions bool
}

// The lines of the budget.
const (
	LineSessions    = "characterisation: sessions"
	LineAnchors     = "characterisation: anchors and what else all sessions share"
	LineHomogeneity = "homogeneity"
	LineStability   = "stability"
)

// A Decision is the assigned value of a lot.
type Decision struct {
	Value float64
	// The parts of u² = u_char² + u_bb² + u_lts².
	CharacterisationUncertainty float64
	HomogeneityUncertainty      float64
	StabilityUncertainty        float64
	// StandardUncertainty and Expanded are those of the certificate: any one
	// unit, within the shelf life, portions of MinimumPortion (mg) or more.
	StandardUncertainty float64
	Expanded            uncertain.Expanded
	MinimumPortion      float64
	ShelfLife           float64
	// Drift is the slope to be stated with [ValueWithTime], in ‰ per unit of time.
	Drift  *float64
	Budget []BudgetLine
	// Remarks are those of the three parts.
	Remarks []Remark
	// Common is what all units share: the sources of the characterisation, which
	// keep their identity, and stability:<lot>/<version>.
	Common uncertain.Number
	Groups []uncertain.Group

	lot  string
	unit uncertain.Source
}

// Decide assembles the assigned value from its three parts. Inside they stay
// separate: the homogeneity joins per unit when a unit is used ([Decision.At]),
// so that two uses of one unit share it and the value stays correlated with
// the anchors it came from.
//
// A missing study without a reason, a significant slope without an answer, and
// an answer without a reason are an *InputError.
func Decide(in DecisionInput) (*Decision, error) {
	switch {
	case in.Characterisation == nil:
		return nil, &InputError{Place: "characterisation", Found: "nothing", Expected: "the combined sessions"}
	case in.Lot == "":
		return nil, &InputError{Place: "lot", Found: "nothing", Expected: "its code"}
	case in.Homogeneity == nil && in.HomogeneityNot == "":
		return nil, &InputError{Place: "homogeneity", Found: "no study", Expected: "a study, or the reason why none is needed"}
	case in.Stability == nil && in.Prior == nil && in.StabilityNot == "":
		return nil, &InputError{Place: "stability", Found: "no study", Expected: "a study, or the reason why none is needed"}
	}
	c := in.Characterisation
	d := &Decision{
		Value: c.Value.Value, CharacterisationUncertainty: c.Value.StandardUncertainty(),
		Common: c.Value, Groups: c.Groups, Remarks: slices.Clone(c.Remarks), lot: in.Lot,
	}
	if h := in.Homogeneity; h != nil {
		d.HomogeneityUncertainty, d.MinimumPortion = h.StandardUncertainty, h.MinimumPortion
		d.unit = uncertain.Source{Kind: uncertain.KindUnit, U: h.StandardUncertainty, Group: h.Group.ID, Per: []float64{1}}
		d.Groups = joinGroups(d.Groups, []uncertain.Group{h.Group})
		d.Remarks = append(d.Remarks, h.Remarks...)
	}
	if in.Stability != nil || in.Prior != nil {
		if err := d.stability(in); err != nil {
			return nil, err
		}
	}
	certificate, err := d.At("", "certificate")
	if err != nil {
		return nil, err
	}
	d.StandardUncertainty = certificate.StandardUncertainty()
	if d.Expanded, err = uncertain.Expand(certificate, d.Groups, in.Coverage); err != nil {
		return nil, fmt.Errorf("expand the assigned value: %w", err)
	}
	line := func(name string, u float64, more bool) {
		b := BudgetLine{Line: name, StandardUncertainty: u, MoreSessions: more}
		if v := d.StandardUncertainty; v > 0 {
			b.Share = float64(u*u) / float64(v*v)
		}
		d.Budget = append(d.Budget, b)
	}
	line(LineSessions, c.MeasurementUncertainty, true)
	line(LineAnchors, c.CommonUncertainty, false)
	line(LineHomogeneity, d.HomogeneityUncertainty, false)
	line(LineStability, d.StabilityUncertainty, false)
	return d, nil
}

// stability adds u_lts, for the shelf life that is stated in the end: that of
// the study, or the prior one while the study runs. A slope that is significant
// already counts either way.
func (d *Decision) stability(in DecisionInput) error {
	s := in.Stability
	if p := in.Prior; p != nil {
		if !(p.StandardUncertainty >= 0) || !finite(p.StandardUncertainty) || !(p.ShelfLife > 0) || !finite(p.ShelfLife) || !(p.DegreesOfFreedom >= 0) || p.Group == "" {
			return &InputError{Place: "prior", Found: fmt.Sprintf("u %v for %v, degrees of freedom %v, group %q", p.StandardUncertainty, p.ShelfLife, p.DegreesOfFreedom, p.Group), Expected: "a standard uncertainty for a positive shelf life, in a named group"}
		}
		if s == nil {
			s = &Stability{ShelfLife: p.ShelfLife}
		}
	}
	d.ShelfLife = s.ShelfLife
	d.Remarks = append(d.Remarks, s.Remarks...)
	switch t := in.Trend; {
	case !s.Significant:
	case t == nil:
		return &InputError{Place: "stability", Found: fmt.Sprintf("a significant slope (%.3g per unit of time, p = %.2g)", s.Slope, s.P), Expected: "a change of shelf life, storage or value model, with its reason"}
	case t.Reason == "":
		return &InputError{Place: "trend.reason", Found: "nothing", Expected: "why the change answers the slope"}
	case t.Change == ShorterShelfLife:
		if !(t.ShelfLife > 0 && t.ShelfLife < s.ShelfLife) {
			return &InputError{Place: "trend.shelf_life", Found: fmt.Sprint(t.ShelfLife), Expected: fmt.Sprintf("a positive time below %g", s.ShelfLife)}
		}
		d.ShelfLife = t.ShelfLife
	case t.Change == ValueWithTime:
		slope := s.Slope
		d.Drift = &slope
	case t.Change != OtherStorage:
		return &InputError{Place: "trend.change", Found: fmt.Sprintf("%q", t.Change), Expected: "shelf_life, storage or value_model"}
	}
	d.StabilityUncertainty = s.SlopeUncertainty * d.ShelfLife
	id, nu := s.Group.ID, float64(s.DegreesOfFreedom)
	if p := in.Prior; p != nil {
		d.StabilityUncertainty = p.StandardUncertainty * (d.ShelfLife / p.ShelfLife)
		id, nu = p.Group, orDefault(p.DegreesOfFreedom, math.Inf(1))
	}
	group := uncertain.NewGroup(id, float64(d.StabilityUncertainty*d.StabilityUncertainty), nu)
	source, err := uncertain.New(0, uncertain.Term{Sensitivity: 1, Source: uncertain.Source{
		ID: "stability:" + in.Lot + "/" + in.StudyVersion, Kind: uncertain.KindStability, U: d.StabilityUncertainty, Group: group.ID, Per: []float64{1},
	}})
	if err != nil {
		return err
	}
	d.Groups = joinGroups(d.Groups, []uncertain.Group{group})
	d.Common, err = uncertain.Linear(0, []float64{1, 1}, []uncertain.Number{d.Common, source})
	return err
}

// At is the value of one unit as it is used: with the source unit:<unit>, or,
// where the unit was not recorded, unit:<lot>/<session>.
func (d *Decision) At(unit, session string) (uncertain.Number, error) {
	if d.unit.U == 0 && d.unit.Group == "" {
		return d.Common, nil
	}
	s := d.unit
	s.ID = "unit:" + unit
	if unit == "" {
		s.ID = "unit:" + d.lot + "/" + session
	}
	return uncertain.Linear(0, []float64{1, 1}, []uncertain.Number{d.Common, {Terms: []uncertain.Term{{Source: s, Sensitivity: 1}}}})
}

// A Step is the difference that a predecessor, measured beside the candidate,
// shows between its assigned value and the campaign.
type Step struct {
	// Difference is measured − assigned, shared sources cancelled.
	Difference uncertain.Number
	Groups     []uncertain.Group
	Expanded   uncertain.Expanded
	// Zeta is the difference over its standard uncertainty; nil for u = 0.
	Zeta *float64
	// Detected says |difference| > U.
	Detected bool
	Analysis *Analysis
}

// AnalyseStep combines the predecessor's results of the campaign's sessions, each
// less its assigned value, by the campaign's policy, and asks whether the new
// values continue the old ones. The session effects are sources
// campaign:<assignment>/predecessor/<session>. The decision that follows is a
// person's. Errors are those of [Analyse].
func AnalyseStep(c Campaign, assigned uncertain.Number) (*Step, error) {
	members := make([]Member, len(c.Members))
	for i, m := range c.Members {
		d, err := uncertain.Linear(0, []float64{1, -1}, []uncertain.Number{m.Result, assigned})
		if err != nil {
			return nil, fmt.Errorf("compare session %s with the predecessor: %w", m.Session, err)
		}
		members[i] = Member{Session: m.Session, Instrument: m.Instrument, Result: d}
	}
	c.Members = members
	if c.Assignment != "" {
		c.Assignment += "/predecessor"
	}
	a, err := Analyse(c)
	if err != nil {
		return nil, err
	}
	s := &Step{Difference: a.Value, Groups: a.Groups, Expanded: a.Expanded, Analysis: a}
	if u := a.Value.StandardUncertainty(); u > 0 {
		z := a.Value.Value / u
		s.Zeta = &z
		s.Detected = math.Abs(a.Value.Value) > a.Expanded.U
	} else {
		s.Detected = a.Value.Value != 0
	}
	return s, nil
}
