package registry

import (
	"context"
	"encoding/binary"
	"errors"
	"fmt"
	"time"

	"deltamoor/calib"
	"deltamoor/calib/montecarlo"
	"deltamoor/store"
)

// Bounds of one propagation in a request.
const (
	MaxPropagationTrials     = 20_000_000
	DefaultPropagationTrials = 2_000_000
	// MaxPropagated bounds the results of one calibration that are propagated at once.
	MaxPropagated = 200
	// PropagationTime bounds how long the trials of one request may take.
	PropagationTime = 20 * time.Second
	// MaxSeed is the largest seed: JSON numbers are whole up to here everywhere.
	MaxSeed = 1<<53 - 1
)

// A PropagationRequest says how distributions are propagated.
type PropagationRequest struct {
	// Probability of the intervals; 0 means that of what is propagated.
	Probability float64
	// Seed of the random numbers, up to MaxSeed; nil takes the one that belongs to
	// the version, so that everybody who asks gets the same answer.
	Seed *uint64
	// MaxTrials; 0 means DefaultPropagationTrials.
	MaxTrials int
	// Digits of u that the trials are to settle for, 1 or 2; 0 means 2.
	Digits int
	// Unbounded lifts the bounds of time and trials, for the command line.
	Unbounded bool
}

// A Propagation is what the distributions of a chain give (JCGM 101).
type Propagation struct {
	Seed        uint64
	Probability float64
	Digits      int
	Trials      int
	// Settled says that every quantity is known to a fifth of its tolerance.
	Settled bool
	// Fits, Sources and Generations of the chain; a generation is a value assigned
	// here that the next fit rests on.
	Fits, Sources, Generations int
	Quantities                 []Propagated
}

// A Propagated is one quantity's distribution beside its first order.
type Propagated struct {
	// Name of the sample or material, or what else it is.
	Name string
	Role string
	// Line of the calibration's results; -1 elsewhere.
	Line int
	montecarlo.Outcome
}

// PropagateReported propagates distributions through the whole chain of a
// reported delta. It writes nothing.
func (r *Registry) PropagateReported(ctx context.Context, actor Actor, code string, q PropagationRequest) (Propagation, error) {
	return r.propagateDeltas(ctx, actor, []string{code}, q)
}

// PropagateComparison propagates the chains of several reported deltas in the
// same trials, so that what they share is drawn once; of two, their difference too.
func (r *Registry) PropagateComparison(ctx context.Context, actor Actor, codes []string, q PropagationRequest) (Propagation, error) {
	if len(codes) < 2 || len(codes) > MaxCompared {
		return Propagation{}, Complain("nothing to compare", []Complaint{{Place: "body.codes", Found: fmt.Sprintf("%d codes", len(codes)), Expected: fmt.Sprintf("2 to %d codes of reported deltas", MaxCompared)}})
	}
	return r.propagateDeltas(ctx, actor, codes, q)
}

func (r *Registry) propagateDeltas(ctx context.Context, actor Actor, codes []string, q PropagationRequest) (Propagation, error) {
	return r.propagate(ctx, actor, q, func(ctx context.Context, v *store.View, b *chainBuilder) (p prepared, err error) {
		var scale string
		for i, code := range codes {
			d, err := reported(ctx, v, actor.Laboratory, code)
			if err != nil {
				return p, err
			}
			if i == 0 {
				scale, p.seed, p.probability = d.Scale+" "+d.Measurand, seedOf(d.Hash), d.Probability
			} else if on := d.Scale + " " + d.Measurand; on != scale {
				return p, Complain("these deltas cannot be compared", []Complaint{{Place: fmt.Sprintf("body.codes[%d]", i), Found: on, Expected: scale}})
			}
			final, err := decodeVersion[store.Final](ctx, v, d.Final)
			if err != nil {
				return p, err
			}
			h, err := b.final(ctx, final)
			if err != nil {
				return p, err
			}
			p.add(h, Propagated{Name: store.FormatCode(code), Role: "reported", Line: -1})
		}
		if len(codes) == 2 {
			h, err := b.chain.Linear(0, []float64{1, -1}, p.of)
			if err != nil {
				return p, b.refused(err)
			}
			p.add(h, Propagated{Name: "difference", Role: "difference", Line: -1})
		}
		return p, nil
	})
}

// PropagateVersion propagates distributions through the whole chain of a
// calibration, for each of its results, or of an assigned value or a final
// value. Version 0 is the one in force. It writes nothing.
func (r *Registry) PropagateVersion(ctx context.Context, actor Actor, kind store.Kind, code string, version int, q PropagationRequest) (Propagation, error) {
	return r.propagate(ctx, actor, q, func(ctx context.Context, v *store.View, b *chainBuilder) (p prepared, err error) {
		raw, err := lookup(ctx, v, actor.Laboratory, kind, code, version, store.Moment{})
		if err != nil {
			return p, err
		}
		p.seed = seedOf(raw.Hash)
		var h montecarlo.Handle
		switch kind {
		case store.KindCalibration:
			c, err := store.Decode[store.Calibration](raw)
			if err != nil {
				return p, err
			}
			return p, p.calibration(ctx, b, c)
		case store.KindFinal:
			f, err := store.Decode[store.Final](raw)
			if err != nil {
				return p, err
			}
			p.probability = f.Value.Probability
			h, err = b.final(ctx, f)
			p.add(h, Propagated{Name: store.FormatCode(f.Value.Sample), Role: "final", Line: -1})
			return p, err
		case store.KindValue:
			x, err := store.Decode[store.Value](raw)
			if err != nil {
				return p, err
			}
			h, err = b.value(ctx, x)
			p.add(h, Propagated{Name: x.Value.Material, Role: "value", Line: -1})
			return p, err
		}
		return p, Refuse(Invalid, "a %s states no number that rests on distributions", kind)
	})
}

// prepared is what is to be propagated.
type prepared struct {
	seed        uint64
	probability float64
	of          []montecarlo.Handle
	what        []Propagated
}

func (p *prepared) add(h montecarlo.Handle, what Propagated) {
	p.of, p.what = append(p.of, h), append(p.what, what)
}

func (p *prepared) calibration(ctx context.Context, b *chainBuilder, c store.Version[store.Calibration]) error {
	if n := len(c.Value.Results); n == 0 || n > MaxPropagated {
		return Refuse(TooLarge, "%s has %d results; one propagation takes 1 to %d", versionName(c.Ref), n, MaxPropagated)
	}
	of, err := b.calibration(ctx, c)
	if err != nil {
		return err
	}
	p.probability = c.Value.Results[0].Probability
	for i, res := range c.Value.Results {
		p.add(of[i], Propagated{Name: res.Subject, Role: string(res.Role), Line: i})
	}
	return nil
}

// seedOf is the seed that belongs to a version.
func seedOf(h store.Hash) uint64 { return binary.BigEndian.Uint64(h[:8]) & MaxSeed }

// propagate builds a chain within one view of the store, and runs it after.
func (r *Registry) propagate(ctx context.Context, actor Actor, q PropagationRequest, build func(ctx context.Context, v *store.View, b *chainBuilder) (prepared, error)) (Propagation, error) {
	if err := q.check(); err != nil {
		return Propagation{}, err
	}
	var p prepared
	var b *chainBuilder
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		b = newChainBuilder(v)
		var err error
		p, err = build(ctx, v, b)
		return err
	})
	if err != nil {
		return Propagation{}, err
	}
	out, err := q.run(ctx, b.chain, p)
	out.Generations = b.deepest
	return out, err
}

func (q PropagationRequest) check() error {
	var c complaints
	if q.Seed != nil && *q.Seed > MaxSeed {
		c.add("body.seed", fmt.Sprint(*q.Seed), "0 to %d", uint64(MaxSeed))
	}
	if p := q.Probability; p != 0 && !(p > 0 && p <= montecarlo.MaxProbability) {
		c.add("body.probability", fmt.Sprint(p), "above 0, at most %v", montecarlo.MaxProbability)
	}
	most := MaxPropagationTrials
	if q.Unbounded {
		most = montecarlo.MaxTrials
	}
	if q.MaxTrials < 0 || q.MaxTrials > most {
		c.add("body.max_trials", fmt.Sprint(q.MaxTrials), "1 to %d", most)
	}
	if q.Digits < 0 || q.Digits > 2 {
		c.add("body.digits", fmt.Sprint(q.Digits), "1 or 2")
	}
	return Complain("these distributions cannot be propagated", c)
}

// run propagates what was prepared, within the bound of time.
func (q PropagationRequest) run(ctx context.Context, chain *montecarlo.Chain, p prepared) (Propagation, error) {
	o := montecarlo.Options{Seed: p.seed, Probability: p.probability, MaxTrials: q.MaxTrials, Digits: q.Digits}
	if q.Seed != nil {
		o.Seed = *q.Seed
	}
	if q.Probability != 0 {
		o.Probability = q.Probability
	}
	if o.MaxTrials == 0 {
		o.MaxTrials = DefaultPropagationTrials
	}
	if o.Digits == 0 {
		o.Digits = 2
	}
	bounded := ctx
	if !q.Unbounded {
		var cancel context.CancelFunc
		bounded, cancel = context.WithTimeout(ctx, PropagationTime)
		defer cancel()
	}
	o.Stop = bounded.Err
	outcomes, err := chain.Run(p.of, o)
	var refused *montecarlo.ChainError
	switch {
	case err == nil:
	case ctx.Err() == nil && errors.Is(err, context.DeadlineExceeded):
		return Propagation{}, Refuse(TooLarge, "the trials did not end within the %v that one request may take: ask for fewer (max_trials, %d here) or for one digit", PropagationTime, o.MaxTrials)
	case errors.As(err, &refused):
		return Propagation{}, Complain("these distributions cannot be propagated", []Complaint{{Place: refused.Place, Found: refused.Found, Expected: refused.Expected}})
	case ctx.Err() != nil:
		return Propagation{}, err
	default:
		return Propagation{}, &Error{Meaning: Invalid, Message: "a trial cannot be fitted: " + err.Error(), Err: err}
	}
	out := Propagation{Seed: o.Seed, Probability: outcomes[0].Check.FirstOrder.Probability, Digits: o.Digits, Settled: true, Trials: outcomes[0].Trials}
	out.Fits, out.Sources = chain.Size()
	for i, x := range outcomes {
		what := p.what[i]
		what.Outcome = x
		out.Quantities = append(out.Quantities, what)
		out.Settled = out.Settled && x.Settled
	}
	return out, nil
}

// CalculatePropagation propagates distributions through one fit without storing
// anything; seed 0 where none is named.
func CalculatePropagation(ctx context.Context, s calib.Session, m calib.Model, policy calib.Policy, q PropagationRequest) (Propagation, error) {
	if err := q.check(); err != nil {
		return Propagation{}, err
	}
	result, err := calib.Fit(s, m, policy)
	if err != nil {
		return Propagation{}, err
	}
	if n := len(result.Subjects); n == 0 || n > MaxPropagated {
		return Propagation{}, Refuse(TooLarge, "the fit has %d samples and controls; one propagation takes 1 to %d", n, MaxPropagated)
	}
	chain := montecarlo.NewChain(s.Groups, nil)
	b := chainBuilder{}
	of, err := chain.Fit(result, nil)
	if err != nil {
		return Propagation{}, b.refused(err)
	}
	p := prepared{probability: policy.Probability}
	for i, x := range result.Subjects {
		p.add(of[i], Propagated{Name: x.Subject, Role: string(x.Role), Line: i})
	}
	return q.run(ctx, chain, p)
}
