package assign

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/uncertain"
)

// A PlannedAnchor is an anchor with its assigned value as it stands.
type PlannedAnchor struct {
	Name  string
	Value uncertain.Number
}

// A Plan is a campaign before it is run, with planning values for what is not
// known yet, in ‰ at the scale of the values.
type Plan struct {
	// Candidate is the value expected.
	Candidate float64
	// Sessions, and Replicates: preparations of the candidate in each.
	Sessions, Replicates int
	// Anchors on the line of every session, AnchorReplicates readings of each.
	Anchors          []PlannedAnchor
	AnchorReplicates int
	// Offered are anchors that could be added.
	Offered []PlannedAnchor
	// Groups that the anchors' sources name.
	Groups []uncertain.Group

	Repeatability  float64 // σ of one preparation
	BetweenSession float64 // τ
	// LongTerm is the method's between-session variance where the plan names it;
	// its degrees of freedom then stand for the campaign's.
	LongTerm *uncertain.Group

	// Units and measurements of each in the homogeneity study; 0 units: none.
	Units, UnitMeasurements int
	BetweenUnit             float64 // σ_bb
	// StabilityTimes, each measured StabilityMeasurements times; none: no study.
	StabilityTimes        []float64
	StabilityMeasurements int
	ShelfLife             float64

	Policy Policy
}

// A Prospect is what a plan can be expected to give.
type Prospect struct {
	StandardUncertainty float64
	Expanded            uncertain.Expanded
	// The parts of u².
	SessionUncertainty, AnchorUncertainty, HomogeneityUncertainty, StabilityUncertainty float64
	// Unreduced is the u that no number of sessions goes below.
	Unreduced float64
	// AnchorSensitivities are ∂value/∂anchor, in the plan's order.
	AnchorSensitivities []float64
}

// An Option is one change of a plan and what it buys.
type Option struct {
	Change   string
	Prospect Prospect
	// GainU and Gain are how much U and u fall.
	GainU, Gain float64
}

// validate refuses what cannot be evaluated.
func (p *Plan) validate() error {
	least := func(place string, found, expected int) error {
		if found < expected {
			return &InputError{Place: place, Found: fmt.Sprint(found), Expected: fmt.Sprintf("%d or more", expected)}
		}
		return nil
	}
	for _, err := range []error{
		least("sessions", p.Sessions, 1), least("replicates", p.Replicates, 1),
		least("anchors", len(p.Anchors), 1), least("anchor replicates", p.AnchorReplicates, 1),
	} {
		if err != nil {
			return err
		}
	}
	for _, v := range []struct {
		place string
		sd    float64
	}{{"repeatability", p.Repeatability}, {"between session", p.BetweenSession}, {"between unit", p.BetweenUnit}} {
		if !finite(v.sd) || v.sd < 0 {
			return &InputError{Place: v.place, Found: fmt.Sprint(v.sd), Expected: "a standard deviation"}
		}
	}
	if !finite(p.Candidate) {
		return &InputError{Place: "candidate", Found: fmt.Sprint(p.Candidate), Expected: "a finite number"}
	}
	if p.Units > 0 {
		if err := least("units", p.Units, 2); err != nil {
			return err
		}
		if err := least("measurements of a unit", p.UnitMeasurements, 2); err != nil {
			return err
		}
	}
	if len(p.StabilityTimes) > 0 {
		if err := least("measurements at each time", p.StabilityMeasurements, 1); err != nil {
			return err
		}
		if err := least("measurements for stability", p.StabilityMeasurements*len(p.StabilityTimes), 3); err != nil {
			return err
		}
		if !(p.ShelfLife > 0) {
			return &InputError{Place: "shelf life", Found: fmt.Sprint(p.ShelfLife), Expected: "a positive time"}
		}
		if slices.Max(p.StabilityTimes) == slices.Min(p.StabilityTimes) {
			return &InputError{Place: "stability times", Found: "one time", Expected: "two or more"}
		}
	}
	return nil
}

// sensitivities are those of a value on the straight line through the anchors,
// each read equally often: c_j = 1/A + (x − ā)(a_j − ā)/Σ(a − ā)². One anchor
// gives a shift, c = 1.
func (p *Plan) sensitivities() ([]float64, error) {
	n := float64(len(p.Anchors))
	c := make([]float64, len(p.Anchors))
	var mean, squares float64
	for _, a := range p.Anchors {
		if err := a.Value.Validate(); err != nil {
			return nil, fmt.Errorf("read anchor %s: %w", a.Name, err)
		}
		mean += a.Value.Value / n
	}
	for _, a := range p.Anchors {
		d := a.Value.Value - mean
		squares += float64(d * d)
	}
	if len(p.Anchors) > 1 && squares == 0 {
		return nil, &InputError{Place: "anchors", Found: "one value for all", Expected: "two distinct values, or one anchor"}
	}
	for j, a := range p.Anchors {
		c[j] = 1 / n
		if squares > 0 {
			c[j] += float64((p.Candidate-mean)*(a.Value.Value-mean)) / squares
		}
	}
	return c, nil
}

// noiseDF is what the anchors' repetitions in one session leave for σ.
func (p *Plan) noiseDF() float64 { return float64(len(p.Anchors) * (p.AnchorReplicates - 1)) }

// noiseVariance of one session's result: (1/n + Σc²/k)·σ².
func (p *Plan) noiseVariance(c []float64) float64 {
	sum := 1 / float64(p.Replicates)
	for _, v := range c {
		sum += float64(v*v) / float64(p.AnchorReplicates)
	}
	return sum * float64(p.Repeatability*p.Repeatability)
}

// Evaluate gives the prospect of a plan by formula,
//
//	u² = (σ²/n + σ²Σc²/k + τ²)/m + Var(Σ c_j·anchor_j) + u_bb² + u_lts²
//
// m sessions, n preparations, k readings of each anchor, c the sensitivities of
// a straight line. u_bb is the larger of the planned σ_bb and the floor that
// this repeatability gives; u_lts = t_shelf·√(σ² + σ_bb²)/√Σ(t − t̄)². U comes
// from the degrees of freedom that the campaign, the readings and both studies
// will have.
func Evaluate(p Plan) (*Prospect, error) {
	if err := p.validate(); err != nil {
		return nil, err
	}
	c, err := p.sensitivities()
	if err != nil {
		return nil, err
	}
	values := make([]uncertain.Number, len(p.Anchors))
	for j, a := range p.Anchors {
		values[j] = a.Value
	}
	number, err := uncertain.Linear(0, c, values)
	if err != nil {
		return nil, err
	}
	out := &Prospect{AnchorUncertainty: number.StandardUncertainty(), AnchorSensitivities: c}
	groups := slices.Clone(p.Groups)
	m := float64(p.Sessions)
	add := func(id string, u float64, group uncertain.Group) {
		term := uncertain.Term{Sensitivity: 1, Source: uncertain.Source{ID: id, U: u}}
		if group.ID != "" {
			term.Group, term.Per = group.ID, []float64{1}
			groups = joinGroups(groups, []uncertain.Group{group})
		}
		number.Terms = append(number.Terms, term)
	}
	noise, between := p.noiseVariance(c), float64(p.BetweenSession*p.BetweenSession)
	var campaign uncertain.Group
	switch {
	case p.LongTerm != nil:
		if err := p.LongTerm.Validate(); err != nil {
			return nil, fmt.Errorf("read the long-term component: %w", err)
		}
		campaign = *p.LongTerm
		between = math.Max(between, campaign.Variances[0])
	case p.Sessions > 1:
		total := noise + between
		campaign = uncertain.Group{ID: "plan:campaign", Variances: []float64{between}, Covariance: [][]float64{{2 * float64(total*total) / (m - 1)}}}
	}
	// m sources of coefficient 1/m are one of u/√m whose ∂u²/∂φ is 1/m.
	add("plan:sessions", math.Sqrt(between/m), campaign)
	if k := len(number.Terms) - 1; campaign.ID != "" {
		number.Terms[k].Per = []float64{1 / m}
	}
	var readings uncertain.Group
	if nu := p.noiseDF(); nu > 0 {
		readings = uncertain.NewGroup("plan:readings", noise/m, float64(m*nu))
	}
	add("plan:readings", math.Sqrt(noise/m), readings)
	out.SessionUncertainty = math.Sqrt((noise + between) / m)
	if p.Units > 0 {
		u, variance := p.homogeneity()
		out.HomogeneityUncertainty = u
		add("plan:homogeneity", u, uncertain.Group{ID: "plan:homogeneity", Variances: []float64{float64(u * u)}, Covariance: [][]float64{{variance}}})
	}
	if len(p.StabilityTimes) > 0 {
		u, nu := p.stability()
		out.StabilityUncertainty = u
		add("plan:stability", u, uncertain.NewGroup("plan:stability", float64(u*u), nu))
	}
	if number, err = uncertain.New(number.Value, number.Terms...); err != nil {
		return nil, err
	}
	out.StandardUncertainty = number.StandardUncertainty()
	v := number.Variance() - float64(out.SessionUncertainty*out.SessionUncertainty)
	out.Unreduced = math.Sqrt(math.Max(0, v))
	if out.Expanded, err = uncertain.Expand(number, groups, p.Policy.Coverage); err != nil {
		return nil, fmt.Errorf("expand the planned value: %w", err)
	}
	return out, nil
}

// homogeneity is the planned u_bb with the variance of u_bb².
func (p *Plan) homogeneity() (u, variance float64) {
	a, r := float64(p.Units), float64(p.UnitMeasurements)
	within := float64(p.Repeatability * p.Repeatability)
	nu := float64(a * (r - 1))
	floor := math.Sqrt(within/r) * math.Sqrt(math.Sqrt(2/nu))
	if floor > p.BetweenUnit {
		return floor, 2 * math.Pow(floor, 4) / nu
	}
	u = p.BetweenUnit
	msb := within + float64(r*float64(u*u))
	return u, 2 * (float64(msb*msb)/(a-1) + float64(within*within)/nu) / float64(r*r)
}

// stability is the planned u_lts with its degrees of freedom.
func (p *Plan) stability() (u, nu float64) {
	n := float64(len(p.StabilityTimes))
	var mean, squares float64
	for _, t := range p.StabilityTimes {
		mean += t / n
	}
	for _, t := range p.StabilityTimes {
		squares += float64((t - mean) * (t - mean))
	}
	k := float64(p.StabilityMeasurements)
	sd := math.Sqrt(float64(p.Repeatability*p.Repeatability) + float64(p.BetweenUnit*p.BetweenUnit))
	return p.ShelfLife * sd / math.Sqrt(squares*k), float64(n*k) - 2
}

// Options evaluates changes of the plan, what lowers U most first: more
// sessions, preparations, anchor readings, units, measurements for stability,
// and each anchor on offer.
func Options(p Plan) ([]Option, error) {
	base, err := Evaluate(p)
	if err != nil {
		return nil, err
	}
	type change struct {
		name  string
		apply func(*Plan)
	}
	changes := []change{
		{"one more session", func(q *Plan) { q.Sessions++ }},
		{"twice the sessions", func(q *Plan) { q.Sessions *= 2 }},
		{"one more preparation in each session", func(q *Plan) { q.Replicates++ }},
		{"one more reading of each anchor in each session", func(q *Plan) { q.AnchorReplicates++ }},
	}
	for _, a := range p.Offered {
		changes = append(changes, change{"anchor " + a.Name + " added", func(q *Plan) { q.Anchors = append(slices.Clone(q.Anchors), a) }})
	}
	if p.Units > 0 {
		changes = append(changes,
			change{"one more unit for homogeneity", func(q *Plan) { q.Units++ }},
			change{"twice the units for homogeneity", func(q *Plan) { q.Units *= 2 }},
			change{"one more measurement of each unit", func(q *Plan) { q.UnitMeasurements++ }})
	}
	if len(p.StabilityTimes) > 0 {
		changes = append(changes,
			change{"one more measurement at each time of the stability study", func(q *Plan) { q.StabilityMeasurements++ }},
			change{"twice the time of the stability study", func(q *Plan) {
				q.StabilityTimes = slices.Clone(q.StabilityTimes)
				for i := range q.StabilityTimes {
					q.StabilityTimes[i] *= 2
				}
			}})
	}
	var out []Option
	for _, c := range changes {
		q := p
		c.apply(&q)
		prospect, err := Evaluate(q)
		if err != nil {
			return nil, fmt.Errorf("evaluate %s: %w", c.name, err)
		}
		out = append(out, Option{
			Change: c.name, Prospect: *prospect,
			GainU: base.Expanded.U - prospect.Expanded.U, Gain: base.StandardUncertainty - prospect.StandardUncertainty,
		})
	}
	slices.SortStableFunc(out, func(a, b Option) int {
		switch {
		case a.GainU > b.GainU:
			return -1
		case a.GainU < b.GainU:
			return 1
		}
		return strings.Compare(a.Change, b.Change)
	})
	return out, nil
}
