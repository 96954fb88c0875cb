package assign

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"deltamoor/calib/uncertain"
)

// A Simulation is what many runs of a plan gave.
type Simulation struct {
	Trials int
	// Median and the 5 % and 95 % points of U of the certificate.
	MedianU, LowU, HighU float64
	MedianU1             float64 // median standard uncertainty of the certificate
	// Coverage is the part of the campaigns whose value ± U held the true value of
	// the lot (CharacterisationCoverage, U of the characterisation alone) and of
	// any one unit (CertificateCoverage).
	CharacterisationCoverage, CertificateCoverage float64
	// The parts of the campaigns that ended with: sessions that disagree by Q; a
	// τ̂ of zero; a floor for homogeneity; a slope that is significant though
	// nothing drifts, and so a decision blocked.
	Disagreeing, NoBetween, Floors, Trends float64
}

// Simulate runs a plan many times with its planning values as the truth: anchor
// values off by their own sources, sessions with noise and between-session
// effects, the homogeneity and the stability study, each evaluated as the
// campaign will be. Variances of readings are estimated in each session from
// the anchors' repetitions, known where there are none. All draws come from
// random, in a fixed order.
func Simulate(p Plan, trials int, random *rand.Rand) (*Simulation, error) {
	if trials < 1 || random == nil {
		return nil, &InputError{Place: "trials", Found: fmt.Sprint(trials), Expected: "one or more, and a source of random numbers"}
	}
	if _, err := Evaluate(p); err != nil {
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
	anchors, err := uncertain.Linear(0, c, values)
	if err != nil {
		return nil, err
	}
	out := &Simulation{Trials: trials}
	us, u1s := make([]float64, trials), make([]float64, trials)
	counts := map[*float64]int{}
	for k := range trials {
		r, err := p.run(c, anchors, random)
		if err != nil {
			return nil, fmt.Errorf("simulate campaign %d: %w", k+1, err)
		}
		us[k], u1s[k] = r.decision.Expanded.U, r.decision.StandardUncertainty
		count := func(sum *float64, yes bool) {
			if yes {
				counts[sum]++
			}
		}
		off := math.Abs(r.decision.Value - p.Candidate)
		count(&out.CharacterisationCoverage, off <= r.characterisation.Expanded.U)
		count(&out.CertificateCoverage, math.Abs(r.decision.Value-p.Candidate-r.unit) <= r.decision.Expanded.U)
		h := r.characterisation.Heterogeneity
		count(&out.Disagreeing, h.P != nil && *h.P < orDefault(p.Policy.Level, 0.05))
		count(&out.NoBetween, r.characterisation.BetweenSession == 0)
		count(&out.Floors, r.homogeneity != nil && r.homogeneity.FloorUsed)
		count(&out.Trends, r.trend)
	}
	for sum, n := range counts {
		*sum = float64(n) / float64(trials)
	}
	slices.Sort(us)
	slices.Sort(u1s)
	at := func(v []float64, q float64) float64 { return v[int(q*float64(len(v)-1))] }
	out.MedianU, out.LowU, out.HighU, out.MedianU1 = at(us, 0.5), at(us, 0.05), at(us, 0.95), at(u1s, 0.5)
	return out, nil
}

// outcome is one simulated campaign.
type outcome struct {
	characterisation *Analysis
	homogeneity      *Homogeneity
	decision         *Decision
	unit             float64 // how far the unit somebody gets is from the lot
	trend            bool
}

func (p *Plan) run(c []float64, anchors uncertain.Number, random *rand.Rand) (*outcome, error) {
	campaign := Campaign{Assignment: "plan", Groups: slices.Clone(p.Groups), Policy: p.Policy}
	campaign.Policy.LongTerm = p.LongTerm
	// The anchors' own displacement is common to all sessions.
	var common float64
	for _, t := range anchors.Terms {
		common += float64(float64(t.Sensitivity*t.U) * random.NormFloat64())
	}
	noise, nu := math.Sqrt(p.noiseVariance(c)), int(p.noiseDF())
	for i := range p.Sessions {
		x := p.Candidate + common + float64(noise*random.NormFloat64()) + float64(p.BetweenSession*random.NormFloat64())
		session := fmt.Sprintf("plan-%04d", i+1)
		source := uncertain.Source{ID: "reading:" + session, Kind: uncertain.KindReading, U: noise}
		if nu > 0 {
			var chi float64
			for range nu {
				z := random.NormFloat64()
				chi += float64(z * z)
			}
			source.U = noise * math.Sqrt(chi/float64(nu))
			source.Group = "readings:" + session
			campaign.Groups = append(campaign.Groups, uncertain.NewGroup(source.Group, float64(source.U*source.U), float64(nu)))
		}
		terms := append(slices.Clone(anchors.Terms), uncertain.Term{Source: source, Sensitivity: 1})
		n, err := uncertain.New(x, terms...)
		if err != nil {
			return nil, err
		}
		campaign.Members = append(campaign.Members, Member{Session: session, Result: n})
	}
	out := &outcome{unit: p.BetweenUnit * random.NormFloat64()}
	var err error
	if out.characterisation, err = combineOnly(campaign); err != nil {
		return nil, err
	}
	in := DecisionInput{Lot: "plan", StudyVersion: "1", Characterisation: out.characterisation, HomogeneityNot: "not planned", StabilityNot: "not planned", Coverage: p.Policy.Coverage}
	if p.Units > 0 {
		s := HomogeneityStudy{Group: "plan:homogeneity"}
		for i := range p.Units {
			u := Unit{Code: fmt.Sprintf("%05d", i)}
			e := float64(p.BetweenUnit * random.NormFloat64())
			for range p.UnitMeasurements {
				u.Measurements = append(u.Measurements, Measurement{Value: p.Candidate + e + float64(p.Repeatability*random.NormFloat64()), Portion: 1})
			}
			s.Units = append(s.Units, u)
		}
		if out.homogeneity, err = AnalyseHomogeneity(s); err != nil {
			return nil, err
		}
		in.Homogeneity = out.homogeneity
	}
	if len(p.StabilityTimes) > 0 {
		s := StabilityStudy{Group: "plan:stability", Isochronous: true, ShelfLife: p.ShelfLife}
		for _, t := range p.StabilityTimes {
			for range p.StabilityMeasurements {
				s.Points = append(s.Points, StabilityPoint{Time: t, Value: p.Candidate + float64(p.BetweenUnit*random.NormFloat64()) + float64(p.Repeatability*random.NormFloat64())})
			}
		}
		if in.Stability, err = AnalyseStability(s); err != nil {
			return nil, err
		}
		out.trend = in.Stability.Significant
		if out.trend {
			in.Trend = &TrendAnswer{Change: OtherStorage, Reason: "simulated: nothing drifts"}
		}
	}
	out.decision, err = Decide(in)
	return out, err
}

// combineOnly is [Analyse] without what is only for showing.
func combineOnly(c Campaign) (*Analysis, error) {
	at, err := c.prepare()
	if err != nil {
		return nil, err
	}
	combined, err := at.combine(nil)
	if err != nil {
		return nil, err
	}
	out := &Analysis{
		Value: combined.value, BetweenSession: math.Sqrt(combined.session.variance), LongTermUsed: combined.session.longTerm,
		Groups:        joinGroups(c.Groups, combined.session.groups),
		Heterogeneity: agreement(combined.spread, combined.session.variance),
	}
	out.split(at.parts.commonVariance(combined.weights))
	out.Expanded, err = uncertain.Expand(out.Value, out.Groups, at.policy.Coverage)
	return out, err
}
