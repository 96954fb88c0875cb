package assign

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/uncertain"
)

// An InstrumentTest asks whether instruments (or laboratories) differ by more
// than sessions on one of them do. With τ_w² estimated from the contrasts
// within instruments and Q at that τ_w²,
//
//	F = ((Q_all − Q_within)/(g − 1)) / max(1, Q_within/(m − g))  against F(g − 1, m − g)
//
// which for equal sessions is the one-way F of the instruments, held down only
// where the sessions scatter less than their own uncertainty.
type InstrumentTest struct {
	Instruments []string
	// WithinInstrument is τ_w, the between-session component on one instrument.
	WithinInstrument float64
	// F, its degrees of freedom and p are nil where no instrument has two
	// sessions: then instrument and session cannot be told apart.
	F                       *float64
	NumeratorDF, WithinDF   int
	P                       *float64
	Real                    bool // p below the policy's level
	BetweenInstruments      float64
	InstrumentMeans         []InstrumentMean
	InstrumentHeterogeneity *Heterogeneity
}

// An InstrumentMean is one instrument's combined value, its sessions weighted
// by the campaign's rule; filled where the effect is real.
type InstrumentMean struct {
	Instrument          string
	Value               float64
	StandardUncertainty float64
	Weight              float64
}

// testInstruments is nil where fewer than two instruments are named.
func (at *combiner) testInstruments() (*InstrumentTest, error) {
	var names []string
	blocks := make([]int, len(at.members))
	for i, m := range at.members {
		k := slices.Index(names, m.Instrument)
		if k < 0 {
			k = len(names)
			names = append(names, m.Instrument)
		}
		blocks[i] = k
	}
	if len(names) < 2 {
		return nil, nil
	}
	if slices.Contains(names, "") {
		return nil, &InputError{Place: "members", Found: "instruments named for some sessions only", Expected: "an instrument for every session, or for none"}
	}
	t := &InstrumentTest{Instruments: names}
	within := newSpread(at.parts, blocks)
	if len(within.z) == 0 {
		return t, nil
	}
	chosen, err := at.choose(within, "")
	if err != nil {
		return nil, err
	}
	t.WithinInstrument = math.Sqrt(chosen.variance)
	t.NumeratorDF, t.WithinDF = len(names)-1, len(within.z)
	all := newSpread(at.parts, nil)
	qw, qa := within.q(chosen.variance), all.q(chosen.variance)
	if math.IsInf(qw, 0) || math.IsInf(qa, 0) {
		return t, nil
	}
	f := math.Max(0, qa-qw) / float64(t.NumeratorDF) / math.Max(1, qw/float64(t.WithinDF))
	p := distuv.F{D1: float64(t.NumeratorDF), D2: float64(t.WithinDF)}.Survival(f)
	t.F, t.P, t.Real = &f, &p, p < at.policy.Level
	return t, nil
}

// overInstruments combines the sessions of each instrument, with the component
// found within instruments, then the means of the instruments, with a
// component between instruments. Sources are campaign:<assignment>/<session>
// and campaign:<assignment>/instrument/<instrument>. The long-term component
// stands in for the one within instruments.
func (at *combiner) overInstruments(names []string) (*combined, error) {
	blocks := make([]int, len(at.members))
	for i, m := range at.members {
		blocks[i] = slices.Index(names, m.Instrument)
	}
	c := &combined{instruments: names, weights: make([]float64, len(at.members)), means: make([]uncertain.Number, len(names))}
	var err error
	if c.session, err = at.choose(newSpread(at.parts, blocks), at.prefix()); err != nil {
		return nil, err
	}
	inner := make([]float64, len(at.members)) // weight within the instrument
	for k, name := range names {
		var in []Member
		for i, b := range blocks {
			if b == k {
				in = append(in, at.members[i])
			}
		}
		sub := &combiner{campaign: at.campaign, policy: at.policy, members: in, parts: takeApart(results(in))}
		w, err := weigh(at.policy.Weights, sub.parts, newSpread(sub.parts, nil), c.session.variance, sub.sessions())
		if err != nil {
			return nil, fmt.Errorf("combine the sessions of instrument %s: %w", name, err)
		}
		totals, err := at.totals(in, &combined{session: c.session})
		if err != nil {
			return nil, err
		}
		if c.means[k], err = uncertain.Linear(0, w, totals); err != nil {
			return nil, err
		}
		for i, b := range blocks {
			if b == k {
				inner[i], w = w[0], w[1:]
			}
		}
	}
	c.parts = takeApart(c.means)
	c.spread = newSpread(c.parts, nil)
	policy := at.policy
	policy.LongTerm = nil
	if c.instrument, err = (&combiner{policy: policy}).choose(c.spread, at.prefix()+"/instruments"); err != nil {
		return nil, err
	}
	if c.meanWeights, err = weigh(at.policy.Weights, c.parts, c.spread, c.instrument.variance, names); err != nil {
		return nil, err
	}
	whole, err := sums(c.means, c.instrument.effects(at.prefix()+"/instrument/", names))
	if err != nil {
		return nil, err
	}
	for i, b := range blocks {
		c.weights[i] = float64(inner[i] * c.meanWeights[b])
	}
	c.value, err = uncertain.Linear(0, c.meanWeights, whole)
	return c, err
}

// fill completes the test with what combining over the instruments found.
func (t *InstrumentTest) fill(c *combined) {
	t.BetweenInstruments = math.Sqrt(c.instrument.variance)
	h := heterogeneity(c.spread, c.instrument.variance)
	t.InstrumentHeterogeneity = &h
	for k, name := range c.instruments {
		t.InstrumentMeans = append(t.InstrumentMeans, InstrumentMean{
			Instrument: name, Value: c.means[k].Value, StandardUncertainty: c.means[k].StandardUncertainty(), Weight: c.meanWeights[k],
		})
	}
}
