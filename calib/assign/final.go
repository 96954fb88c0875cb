package assign

import (
	"fmt"
	"math"

	"deltamoor/calib/uncertain"
)

// A Verdict says what the agreement of a sample's sessions allows.
type Verdict string

// The verdicts.
const (
	// Agreed: as many sessions as required, and nothing against them.
	Agreed Verdict = "agreed"
	// SessionsMissing: fewer sessions than the method requires.
	SessionsMissing Verdict = "sessions_missing"
	// AnotherSession: two sessions disagree; one more is needed.
	AnotherSession Verdict = "another_session"
	// Scattered: three or more disagree; all stay, with the larger between-session
	// variance. That there is no single value is a decision a person may take.
	Scattered Verdict = "scattered"
)

// A FinalPolicy is a method's rule for final values. The zero FinalPolicy asks
// for one session, tests at 5 %, and forms U at p = 0.95.
type FinalPolicy struct {
	// Required sessions; 0 is 1.
	Required int
	// Level of the test of agreement; 0 is 0.05.
	Level    float64
	Coverage uncertain.Coverage
}

// A Final is a sample's value from all its sessions.
type Final struct {
	Verdict  Verdict
	Value    uncertain.Number
	Groups   []uncertain.Group
	Expanded uncertain.Expanded
	Sessions []SessionEffect
	// Heterogeneity has the method's between-session component in its V.
	Heterogeneity Heterogeneity
	// Pair is the comparison of exactly two sessions.
	Pair *uncertain.Comparison
	// AddedBetween is the between-session component (‰) beyond the method's own
	// that scattered sessions show, 0 otherwise.
	AddedBetween float64
	// MeasurementUncertainty and CommonUncertainty add in quadrature to u.
	MeasurementUncertainty, CommonUncertainty float64
}

// FinalValue combines every result of a sample by a fixed rule; none is picked
// or dropped for its value.
//
// Results of one session are one member. The weights are those of [Combine]:
// ∝ 1/(between² + own²), without what the sessions share; u is that of all
// sources. The method's between-session component is among the sources of each
// result, so τ² = 0, and one session keeps it in full. Two sessions agree when
// |difference| ≤ k·u(difference), shared sources cancelled; three or more when
// Q has p ≥ the level. Where three or more do not, the Paule–Mandel estimate of
// what the scatter shows beyond the method's component is added to every
// session, so that the larger of the two variances is in use, from sources
// named between_session:<session>/<subject>/observed; subject is the scale and
// the sample's code as in the other between-session sources.
//
// Errors: [ErrNothing], *InputError, *uncertain.ValueError, *uncertain.GroupError.
func FinalValue(subject string, members []Member, groups []uncertain.Group, policy FinalPolicy) (*Final, error) {
	policy.Level = orDefault(policy.Level, 0.05)
	if err := checkLevel("policy.level", policy.Level); err != nil {
		return nil, err
	}
	if policy.Required < 0 {
		return nil, &InputError{Place: "policy.required", Found: fmt.Sprint(policy.Required), Expected: "a number of sessions"}
	}
	for i := range members { // instruments do not matter here
		if members[i].Instrument != "" {
			members = withoutInstruments(members)
			break
		}
	}
	members, err := distinct(members)
	if err != nil {
		return nil, err
	}
	numbers := results(members)
	p := takeApart(numbers)
	s := newSpread(p, nil)
	out := &Final{Verdict: Agreed, Groups: groups, Heterogeneity: heterogeneity(s, 0)}
	if len(members) < policy.Required {
		out.Verdict = SessionsMissing
	}
	added := component{}
	switch {
	case len(members) == 2:
		pair, err := uncertain.Compare(numbers[0], numbers[1], groups, policy.Coverage)
		if err != nil {
			return nil, fmt.Errorf("compare sessions %s and %s: %w", members[0].Session, members[1].Session, err)
		}
		out.Pair = &pair
		if pair.Different {
			out.Verdict = AnotherSession
		}
	case len(members) > 2 && (out.Heterogeneity.P == nil && s.q(0) > 0 || out.Heterogeneity.P != nil && *out.Heterogeneity.P < policy.Level):
		out.Verdict = Scattered
		tau2, _ := estimate(s, PauleMandel)
		_, pp := s.traces(tau2)
		id := "between_session:" + subject + "/observed"
		added = component{variance: tau2, group: id, groups: []uncertain.Group{{ID: id, Variances: []float64{tau2}, Covariance: [][]float64{{2 / pp}}}}}
		out.AddedBetween = math.Sqrt(tau2)
		out.Groups = joinGroups(groups, added.groups)
	}
	effects := make([]uncertain.Number, len(members))
	for i, m := range members {
		if added.group != "" {
			effects[i].Terms = []uncertain.Term{{Sensitivity: 1, Source: uncertain.Source{
				ID: "between_session:" + m.Session + "/" + subject + "/observed", Kind: uncertain.KindBetweenSession,
				U: math.Sqrt(added.variance), Group: added.group, Per: []float64{1},
			}}}
		}
	}
	totals, err := sums(numbers, effects)
	if err != nil {
		return nil, err
	}
	w := privateWeights(p.private, added.variance)
	if out.Value, err = uncertain.Linear(0, w, totals); err != nil {
		return nil, err
	}
	if out.Expanded, err = uncertain.Expand(out.Value, out.Groups, policy.Coverage); err != nil {
		return nil, fmt.Errorf("expand the final value: %w", err)
	}
	common := p.commonVariance(w)
	out.CommonUncertainty = math.Sqrt(common)
	out.MeasurementUncertainty = math.Sqrt(math.Max(0, out.Value.Variance()-common))
	shown := &Analysis{Value: out.Value}
	(&combiner{members: members, parts: p}).sessionEffects(shown, totals, w)
	out.Sessions = shown.Sessions
	return out, nil
}

func withoutInstruments(members []Member) []Member {
	out := make([]Member, len(members))
	for i, m := range members {
		out[i] = Member{Session: m.Session, Result: m.Result}
	}
	return out
}
