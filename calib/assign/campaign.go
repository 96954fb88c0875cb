package assign

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/uncertain"
)

// A Member is one session's result for the candidate.
type Member struct {
	Session string
	// Instrument, or laboratory: the level above sessions; may be empty.
	Instrument string
	Result     uncertain.Number
}

// A Campaign is what is combined into one value.
type Campaign struct {
	// Assignment is the campaign's code; it names the campaign's sources.
	Assignment string
	Members    []Member
	// Groups holds every group that the results' sources name.
	Groups []uncertain.Group
	Policy Policy
}

// An Estimate is one estimator's answer, with private weights.
type Estimate struct {
	Estimator           Estimator
	BetweenSession      float64 // τ̂
	Value               float64
	StandardUncertainty float64
}

// A SessionEffect is how one session stands against the combined value.
type SessionEffect struct {
	Session             string
	Instrument          string
	Value               float64 // the session's own result
	StandardUncertainty float64 // without the between-session effect
	PrivateUncertainty  float64 // the part that this session does not share
	Weight              float64
	Effect              float64 // value − combined value
	EffectUncertainty   float64 // u of that difference, shared sources cancelled, τ̂ included
	// Standardised is Effect/EffectUncertainty; nil where that is zero.
	Standardised *float64
	// LeftOut is nil for a single session.
	LeftOut *LeftOut
}

// LeftOut is the combination without one session, τ² estimated anew.
type LeftOut struct {
	Value               float64
	StandardUncertainty float64
	BetweenSession      float64
	Shift               float64 // Value − the combined value
	// Prediction is (left-out result − Value)/u of that difference; nil for u = 0.
	Prediction *float64
}

// An Analysis is the combination of a campaign's sessions. Sessions are in the
// order of their codes, whatever the order of the input.
type Analysis struct {
	// Value holds the sources of all results and one source for each session's
	// effect, campaign:<assignment>/<session>.
	Value uncertain.Number
	// Groups are those of the campaign and of its results.
	Groups   []uncertain.Group
	Expanded uncertain.Expanded
	// MeasurementUncertainty (the part that more sessions reduce) and
	// CommonUncertainty (the part they do not) add in quadrature to u.
	MeasurementUncertainty, CommonUncertainty float64
	// BetweenSession is the τ̂ in use; LongTermUsed says it is the method's.
	BetweenSession float64
	LongTermUsed   bool
	Heterogeneity  Heterogeneity
	Estimates      []Estimate
	Sessions       []SessionEffect
	// HartungKnapp is √(q·Σwᵢ²(private + τ̂²) + common), q = xᵀP(τ̂²)x/(m−1), a
	// diagnostic (Hartung and Knapp 2001, doi:10.1002/sim.791): far from u, it
	// says that the variances do not describe the scatter. Nil for one session.
	HartungKnapp *float64
	// Instruments is nil where fewer than two instruments are named.
	Instruments *InstrumentTest
	Remarks     []Remark
}

// Analyse combines the sessions of a campaign by its policy:
//
//	value = Σ wᵢxᵢ,  u² = wᵀΩw,  Ω = V_private + V_common + τ²I
//
// Results of one session are first made one (readings that both use count
// once). Where the campaign names several instruments, their effect is tested;
// if it is real, the means of the instruments are combined instead. A single
// session has no τ² of its own. Errors: [ErrNothing], *InputError,
// *NegativeWeightError, *uncertain.ValueError, *uncertain.GroupError.
func Analyse(c Campaign) (*Analysis, error) {
	at, err := c.prepare()
	if err != nil {
		return nil, err
	}
	test, err := at.testInstruments()
	if err != nil {
		return nil, err
	}
	var instruments []string
	if test != nil && test.Real {
		instruments = test.Instruments
	}
	combined, err := at.combine(instruments)
	if err != nil {
		return nil, err
	}
	out, err := at.report(combined, test)
	if err != nil {
		return nil, err
	}
	out.Instruments = test
	out.Expanded, err = uncertain.Expand(out.Value, out.Groups, at.policy.Coverage)
	if err != nil {
		return nil, fmt.Errorf("expand the combined value: %w", err)
	}
	at.remark(out)
	return out, nil
}

// prepare checks the campaign and takes its covariance apart.
func (c Campaign) prepare() (*combiner, error) {
	policy, err := c.Policy.complete()
	if err != nil {
		return nil, err
	}
	members, err := distinct(c.Members)
	if err != nil {
		return nil, err
	}
	if c.Assignment == "" {
		return nil, &InputError{Place: "assignment", Found: "nothing", Expected: "the code that names the campaign's sources"}
	}
	return &combiner{campaign: c, policy: policy, members: members, parts: takeApart(results(members))}, nil
}

// distinct checks members and makes those of one session one.
func distinct(members []Member) ([]Member, error) {
	if len(members) == 0 {
		return nil, ErrNothing
	}
	sorted := slices.Clone(members)
	slices.SortStableFunc(sorted, func(a, b Member) int {
		if c := strings.Compare(a.Session, b.Session); c != 0 {
			return c
		}
		switch { // an order that does not depend on the input's
		case a.Result.Value < b.Result.Value:
			return -1
		case a.Result.Value > b.Result.Value:
			return 1
		}
		return len(a.Result.Terms) - len(b.Result.Terms)
	})
	var out []Member
	for i := 0; i < len(sorted); {
		j := i
		for j < len(sorted) && sorted[j].Session == sorted[i].Session {
			if sorted[j].Session == "" {
				return nil, &InputError{Place: "members", Found: "a member without session", Expected: "the session's code"}
			}
			if err := sorted[j].Result.Validate(); err != nil {
				return nil, fmt.Errorf("read the result of session %s: %w", sorted[j].Session, err)
			}
			if sorted[j].Instrument != sorted[i].Instrument {
				return nil, &InputError{Place: "members, session " + sorted[i].Session, Found: fmt.Sprintf("instruments %q and %q", sorted[i].Instrument, sorted[j].Instrument), Expected: "one instrument for a session"}
			}
			j++
		}
		one := sorted[i]
		if j > i+1 {
			merged, err := Combine(results(sorted[i:j]))
			if err != nil {
				return nil, fmt.Errorf("merge the results of session %s: %w", one.Session, err)
			}
			one.Result = merged.Value
		}
		out = append(out, one)
		i = j
	}
	return out, nil
}

func results(members []Member) []uncertain.Number {
	out := make([]uncertain.Number, len(members))
	for i, m := range members {
		out[i] = m.Result
	}
	return out
}

// combiner holds the checked input.
type combiner struct {
	campaign Campaign
	policy   Policy
	members  []Member
	parts    *parts
}

// component is a between-session variance in use, with what scales it.
type component struct {
	variance float64
	group    string
	longTerm bool
	groups   []uncertain.Group
}

// choose estimates τ² on the spread, sets it against the long-term component,
// and names its group. Var(τ̂²) = 2/tr(PP) is stored also where τ̂² is 0, since a
// truncated zero is not evidence of none: there P is taken at the negative root
// that the truncation cut off, as what varies is the scatter that was found.
// For equal sessions that is 2(s²)²/(m − 1) on either side of 0.
func (at *combiner) choose(s *spread, group string) (component, error) {
	tau2, ok := estimate(s, at.policy.Estimator)
	if !ok {
		return component{}, &InputError{Place: "members", Found: "results without variance of their own", Expected: "some, for the estimator " + string(DerSimonianLaird)}
	}
	c := component{variance: tau2}
	if at.policy.Estimator != NoBetween && len(s.z) > 0 {
		at := tau2
		if at == 0 {
			at = s.untruncated()
		}
		_, pp := s.traces(at)
		c.group = group
		c.groups = []uncertain.Group{{ID: group, Variances: []float64{tau2}, Covariance: [][]float64{{2 / pp}}}}
	}
	if l := at.policy.LongTerm; l != nil && (l.Variances[0] > tau2 || c.group == "") {
		c = component{variance: l.Variances[0], group: l.ID, longTerm: true, groups: []uncertain.Group{*l}}
	}
	return c, nil
}

// effects are the sources of the session effects, sensitivity 1.
func (c component) effects(prefix string, codes []string) []uncertain.Number {
	out := make([]uncertain.Number, len(codes))
	if c.group == "" && c.variance == 0 {
		return out
	}
	for i, code := range codes {
		source := uncertain.Source{ID: prefix + code, Kind: uncertain.KindCampaign, U: math.Sqrt(c.variance), Group: c.group}
		if c.group != "" {
			source.Per = []float64{1}
		}
		out[i].Terms = []uncertain.Term{{Source: source, Sensitivity: 1}}
	}
	return out
}

// weigh gives the policy's weights for Ω at τ².
func weigh(scheme Weights, p *parts, s *spread, tau2 float64, codes []string) ([]float64, error) {
	if scheme == PrivateWeights {
		return privateWeights(p.private, tau2), nil
	}
	w := s.best(p, tau2)
	for i, v := range w {
		if v < -1e-12 {
			return nil, &NegativeWeightError{Session: codes[i], Weight: v}
		}
	}
	return w, nil
}

// combined is a weighted mean with what was estimated on the way.
type combined struct {
	value   uncertain.Number
	weights []float64 // of the sessions
	// session and instrument are the components in use; instruments is nil where
	// sessions were combined directly.
	session, instrument component
	instruments         []string
	means               []uncertain.Number // of the instruments, without their effects
	meanWeights         []float64
	parts               *parts // of what was combined last, sessions or means
	spread              *spread
}

// combine combines the sessions directly, or over the instruments.
func (at *combiner) combine(instruments []string) (*combined, error) {
	if instruments != nil {
		return at.overInstruments(instruments)
	}
	c := &combined{parts: at.parts, spread: newSpread(at.parts, nil)}
	var err error
	if c.session, err = at.choose(c.spread, at.prefix()); err != nil {
		return nil, err
	}
	if c.weights, err = weigh(at.policy.Weights, at.parts, c.spread, c.session.variance, at.sessions()); err != nil {
		return nil, err
	}
	totals, err := at.totals(at.members, c)
	if err != nil {
		return nil, err
	}
	c.value, err = uncertain.Linear(0, c.weights, totals)
	return c, err
}

func (at *combiner) prefix() string { return "campaign:" + at.campaign.Assignment }

func (at *combiner) sessions() []string {
	codes := make([]string, len(at.members))
	for i, m := range at.members {
		codes[i] = m.Session
	}
	return codes
}

// totals are the results with their effects: of the session and, where
// instruments were combined, of the instrument.
func (at *combiner) totals(members []Member, c *combined) ([]uncertain.Number, error) {
	out := make([]uncertain.Number, len(members))
	for i, m := range members {
		numbers := append([]uncertain.Number{m.Result}, c.session.effects(at.prefix()+"/", []string{m.Session})...)
		if c.instruments != nil {
			numbers = append(numbers, c.instrument.effects(at.prefix()+"/instrument/", []string{m.Instrument})...)
		}
		ones := []float64{1, 1, 1}
		var err error
		if out[i], err = uncertain.Linear(0, ones[:len(numbers)], numbers); err != nil {
			return nil, err
		}
	}
	return out, nil
}

// sums adds numbers pairwise.
func sums(a, b []uncertain.Number) ([]uncertain.Number, error) {
	out := make([]uncertain.Number, len(a))
	for i := range a {
		var err error
		if out[i], err = uncertain.Linear(0, []float64{1, 1}, []uncertain.Number{a[i], b[i]}); err != nil {
			return nil, err
		}
	}
	return out, nil
}

// joinGroups adds groups that are not there yet.
func joinGroups(groups, more []uncertain.Group) []uncertain.Group {
	out := slices.Clone(groups)
	for _, g := range more {
		if !slices.ContainsFunc(out, func(o uncertain.Group) bool { return o.ID == g.ID }) {
			out = append(out, g)
		}
	}
	return out
}
