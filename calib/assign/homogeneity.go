package assign

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/uncertain"
)

// A Measurement is one measurement of a unit, on one test portion.
type Measurement struct {
	Value float64 // ‰
	// Session in which it was made; "" for all of one session.
	Session string
	// Portion is the mass of the test portion in mg; 0 where it was not recorded.
	Portion float64
}

// A Unit is a bottle, ampoule or vial drawn from the lot.
type Unit struct {
	Code string
	// FillingOrder is its place in the order of filling; nil where unknown.
	FillingOrder *float64
	Measurements []Measurement
}

// A HomogeneityStudy is measurements of several units of one lot.
type HomogeneityStudy struct {
	// Group names the variance of the result, such as "homogeneity:<lot>/<version>".
	Group string
	Units []Unit
	// Level of the tests; 0 is 0.05.
	Level float64
}

// Homogeneity is the evaluated study.
type Homogeneity struct {
	Anova
	// StandardUncertainty is u_bb = max(s_bb, u*_bb), ‰, for one unit and test
	// portions not smaller than MinimumPortion.
	StandardUncertainty float64
	// BetweenUnits is s_bb, 0 where MSB is below MSW; Floor is u*_bb, what the
	// repeatability could hide; FloorUsed says which of them u_bb is.
	BetweenUnits, Floor float64
	FloorUsed           bool
	DegreesOfFreedom    float64
	// Group is the variance u_bb² with its variance.
	Group uncertain.Group
	// MinimumPortion in mg: the largest portion used, as smaller ones were not
	// shown alone to be enough; 0 where none was recorded.
	MinimumPortion float64
	Sessions       int // removed as blocks where more than one
	// FillingTrend is nil where fewer than three units have a filling order.
	FillingTrend *FillingTrend
	Remarks      []Remark
}

// A FillingTrend tests a straight line of the units in the order of filling,
// against what is left between units: F = SS_line/(SS_rest/ν_rest) on 1, ν_rest.
type FillingTrend struct {
	F           *float64 // nil where nothing is left between units
	P           float64
	DF          int
	Significant bool
}

// AnalyseHomogeneity evaluates a study by one-way analysis of variance,
// balanced or not (ISO 33405:2024, formerly ISO Guide 35:2017, 7.7 and B.2; the
// clause numbers are those of Guide 35):
//
//	s_bb² = (MSB − MSW)/n0,   n0 = (n − Σnᵢ²/n)/(a − 1)
//	u*_bb = √(MSW/n0)·(2/ν_W)^¼,   u_bb = max(s_bb, u*_bb)
//
// with s_bb = 0 where it comes out negative. The floor u*_bb is what a study of
// this repeatability could have missed (Linsinger et al. 2001,
// doi:10.1007/s007690000261, from memory). Units measured in several sessions:
// the session is removed as a block, and n0 is tr(ZᵀMZ)/ν_B.
//
// The group holds Var(s_bb²) = 2(MSB²/ν_B + MSW²/ν_W)/n0²; for the floor, ν_W
// degrees of freedom.
//
// Fewer than two units, no unit measured twice, units that no session connects,
// and values that are not finite are an *InputError.
func AnalyseHomogeneity(s HomogeneityStudy) (*Homogeneity, error) {
	level := orDefault(s.Level, 0.05)
	if err := checkLevel("level", level); err != nil {
		return nil, err
	}
	l, out, err := s.read()
	if err != nil {
		return nil, err
	}
	out.Anova, _, _ = l.analyse(nil)
	switch {
	case out.BetweenDF < l.groups-1:
		return nil, &InputError{Place: "units", Found: "units that were never measured in a common session", Expected: "sessions that connect all units"}
	case out.WithinDF < 1:
		return nil, &InputError{Place: "units", Found: "no unit measured twice", Expected: "replicates, to tell units from repeatability"}
	}
	out.BetweenUnits = out.BetweenStandardDeviation
	out.Floor = math.Sqrt(out.MeanSquareWithin/out.EffectiveReplicates) * math.Sqrt(math.Sqrt(2/float64(out.WithinDF)))
	out.FloorUsed = out.Floor > out.BetweenUnits
	out.StandardUncertainty = math.Max(out.BetweenUnits, out.Floor)
	u2 := float64(out.StandardUncertainty * out.StandardUncertainty)
	if out.FloorUsed {
		out.DegreesOfFreedom = float64(out.WithinDF)
		out.Group = uncertain.NewGroup(s.Group, u2, out.DegreesOfFreedom)
	} else {
		out.Group = uncertain.Group{ID: s.Group, Variances: []float64{u2}, Covariance: [][]float64{{out.BetweenVarianceVariance}}}
		out.DegreesOfFreedom = uncertain.SatterthwaiteDF(u2, out.BetweenVarianceVariance)
	}
	s.trend(l, out, level)
	s.remark(out, level)
	return out, nil
}

// read checks the study and lays it out, units and sessions by their codes.
func (s HomogeneityStudy) read() (*layout, *Homogeneity, error) {
	if s.Group == "" {
		return nil, nil, &InputError{Place: "group", Found: "nothing", Expected: "a name for the variance"}
	}
	if len(s.Units) < 2 {
		return nil, nil, &InputError{Place: "units", Found: fmt.Sprint(len(s.Units)), Expected: "two or more"}
	}
	units := slices.Clone(s.Units)
	slices.SortStableFunc(units, func(a, b Unit) int { return compareText(a.Code, b.Code) })
	var sessions []string
	for i, u := range units {
		if i > 0 && u.Code == units[i-1].Code {
			return nil, nil, &InputError{Place: "units", Found: fmt.Sprintf("unit %q twice", u.Code), Expected: "each unit once, with all its measurements"}
		}
		if len(u.Measurements) == 0 {
			return nil, nil, &InputError{Place: "unit " + u.Code, Found: "no measurement", Expected: "one or more"}
		}
		if u.FillingOrder != nil && !finite(*u.FillingOrder) {
			return nil, nil, &InputError{Place: "unit " + u.Code, Found: fmt.Sprintf("filling order %v", *u.FillingOrder), Expected: "a finite number"}
		}
		for _, m := range u.Measurements {
			if !slices.Contains(sessions, m.Session) {
				sessions = append(sessions, m.Session)
			}
		}
	}
	slices.Sort(sessions)
	l := &layout{groups: len(units), blocks: len(sessions)}
	out := &Homogeneity{Sessions: len(sessions)}
	for k, u := range units {
		for j, m := range u.Measurements {
			if !finite(m.Value) || !finite(m.Portion) || m.Portion < 0 {
				return nil, nil, &InputError{Place: fmt.Sprintf("unit %s, measurement %d", u.Code, j), Found: fmt.Sprintf("value %v, portion %v", m.Value, m.Portion), Expected: "finite numbers, the portion not negative"}
			}
			l.y = append(l.y, m.Value)
			l.group = append(l.group, k)
			l.block = append(l.block, slices.Index(sessions, m.Session))
			out.MinimumPortion = math.Max(out.MinimumPortion, m.Portion)
		}
	}
	return l, out, nil
}

func compareText(a, b string) int {
	switch {
	case a < b:
		return -1
	case a > b:
		return 1
	}
	return 0
}

// trend tests the order of filling, with every unit that has one.
func (s HomogeneityStudy) trend(l *layout, out *Homogeneity, level float64) {
	units := slices.Clone(s.Units)
	slices.SortStableFunc(units, func(a, b Unit) int { return compareText(a.Code, b.Code) })
	sub := &layout{blocks: l.blocks}
	var order []float64
	at := 0
	for _, u := range units {
		for range u.Measurements {
			if u.FillingOrder != nil {
				sub.y = append(sub.y, l.y[at])
				sub.block = append(sub.block, l.block[at])
				sub.group = append(sub.group, sub.groups)
				order = append(order, *u.FillingOrder)
			}
			at++
		}
		if u.FillingOrder != nil {
			sub.groups++
		}
	}
	if sub.groups < 3 {
		return
	}
	for i := len(order) - 1; i >= 0; i-- { // a large first number costs no digits
		order[i] -= order[0]
	}
	a, line, _ := sub.analyse(order)
	rest := a.BetweenDF - 1
	if rest < 1 || line == 0 {
		return
	}
	square := (a.SumBetween - line) / float64(rest)
	t := &FillingTrend{DF: rest}
	if square > 0 {
		f := line / square
		t.F, t.P = &f, distuv.F{D1: 1, D2: float64(rest)}.Survival(f)
	}
	t.Significant = t.P < level
	out.FillingTrend = t
}

func (s HomogeneityStudy) remark(out *Homogeneity, level float64) {
	add := func(code, severity, sentence string, args ...any) {
		out.Remarks = append(out.Remarks, Remark{Code: code, Severity: severity, Sentence: fmt.Sprintf(sentence, args...)})
	}
	if out.FloorUsed {
		add("insufficient_repeatability", Information, "The units differ by less (%.2g ‰) than this repeatability could show; the floor %.2g ‰ is used.", out.BetweenUnits, out.Floor)
	}
	if out.P != nil && *out.P < level {
		add("units_differ", Information, "The units differ (F = %.3g, p = %.2g); u_bb holds the difference.", *out.F, *out.P)
	}
	if t := out.FillingTrend; t != nil && t.Significant {
		add("filling_trend", Warning, "The values follow the order of filling (p = %.2g): the units are no random draw from one lot.", t.P)
	}
	if out.Groups < 10 {
		add("few_units", Information, "%d units; ten or more are usual.", out.Groups)
	}
	if out.MinimumPortion == 0 {
		add("no_portion", Warning, "No test portion is recorded, so no minimum portion can be stated.")
	}
}

// SufficientHomogeneity is the check of a lot for a proficiency round
// (ISO 13528:2022, B.2): s_s ≤ c = 0.3·σ_pt, and the expanded criterion
//
//	s_s² ≤ F1·c² + F2·s_w²,  F1 = χ²_0.95(g − 1)/(g − 1),  F2 = (F_0.95(g − 1, g(n − 1)) − 1)/n
type SufficientHomogeneity struct {
	Criterion              float64 // 0.3·σ_pt
	Sufficient             bool
	F1, F2                 float64
	ExpandedCriterion      float64 // as a standard deviation
	SufficientWhenExpanded bool
}

// SufficientFor judges the study for a standard deviation for proficiency, σ_pt.
func (h *Homogeneity) SufficientFor(deviation float64) (SufficientHomogeneity, error) {
	if !(deviation > 0) || !finite(deviation) {
		return SufficientHomogeneity{}, &InputError{Place: "standard deviation for proficiency", Found: fmt.Sprint(deviation), Expected: "a positive number"}
	}
	f1, f2 := expandedFactors(h.BetweenDF, h.WithinDF, h.EffectiveReplicates)
	c := 0.3 * deviation
	e := math.Sqrt(float64(f1*float64(c*c)) + float64(f2*h.MeanSquareWithin))
	return SufficientHomogeneity{
		Criterion: c, Sufficient: h.BetweenUnits <= c, F1: f1, F2: f2,
		ExpandedCriterion: e, SufficientWhenExpanded: h.BetweenUnits <= e,
	}, nil
}

func expandedFactors(betweenDF, withinDF int, replicates float64) (f1, f2 float64) {
	b, w := float64(betweenDF), float64(withinDF)
	return distuv.ChiSquared{K: b}.Quantile(0.95) / b, (distuv.F{D1: b, D2: w}.Quantile(0.95) - 1) / replicates
}
