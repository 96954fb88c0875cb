package montecarlo

import (
	"fmt"
	"math"
	"runtime"
	"sync"

	"deltamoor/calib/uncertain"
)

// Options say how trials are run. The zero Options are documented defaults.
type Options struct {
	// Seed fixes the random numbers.
	Seed uint64
	// Probability of the coverage interval; 0 means 0.95.
	Probability float64
	// CoverageFactor fixes k of the interval that is checked; 0 takes it from ν_eff.
	CoverageFactor float64
	// Digits of u that the numbers are to be good for, 1 or 2 (JCGM 101, 7.9.2);
	// 0 means 2.
	Digits int
	// MaxTrials bounds the trials; 0 means 5,000,000. Where they end before the
	// numbers settle, Settled is false. One block is always run.
	MaxTrials int
	// All runs MaxTrials, settled before or not.
	All bool
	// Workers is how many blocks run at once; 0 means one for each processor.
	// The answer does not depend on it.
	Workers int
	// Stop is asked now and then; an error ends the run with it. Nil never does.
	Stop func() error
}

// Bounds of a run.
const (
	DefaultTrials  = 5_000_000
	MaxTrials      = 200_000_000
	MaxProbability = 0.9999
)

// An Outcome is the distribution of one quantity.
type Outcome struct {
	// Mean of the trials; nil where a source of ν ≤ 1 leaves it undefined.
	Mean *float64
	// StandardUncertainty of the trials; nil where a source of ν ≤ 2 leaves it undefined.
	StandardUncertainty *float64
	// Low and High bound the probabilistically symmetric interval, ShortestLow
	// and ShortestHigh the shortest one. Both are off by less than Resolution
	// from those of the sorted trials.
	Low, High                 float64
	ShortestLow, ShortestHigh float64
	Resolution                float64
	Trials                    int
	// Settled says that mean, u and both end points are known to δ/5.
	Settled bool
	Check   Check
}

// A Check is the comparison of JCGM 101 clause 8.
type Check struct {
	// Value, its u and FirstOrder are y ± U from the first-order chain.
	Value               float64
	StandardUncertainty float64
	FirstOrder          uncertain.Expanded
	// Tolerance is δ = ½·10^l for u = c·10^l with two digits (or one).
	Tolerance float64
	// LowDifference and HighDifference are |y − U − low| and |y + U − high|.
	LowDifference, HighDifference float64
	// Valid says that both are within the tolerance.
	Valid bool
}

// Run propagates the distributions to the given quantities, all in the same
// trials: what two quantities share is drawn once, so that a difference of them
// (a [Chain.Linear]) is one more quantity.
//
// Memory does not grow with the trials. Errors: *ChainError; what Stop says; that of a
// fit that cannot be solved for some trial.
func (c *Chain) Run(of []Handle, o Options) ([]Outcome, error) {
	if err := o.fill(); err != nil {
		return nil, err
	}
	for i, h := range of {
		if int(h) < 0 || int(h) >= len(c.nodes) {
			return nil, &ChainError{fmt.Sprintf("quantities[%d]", i), fmt.Sprint(h), "a quantity of this chain"}
		}
	}
	out := make([]Outcome, len(of))
	for i, h := range of {
		n := c.numbers[h]
		x, err := uncertain.Expand(n, c.groups, uncertain.Coverage{Probability: o.Probability, Factor: o.CoverageFactor})
		if err != nil {
			return nil, fmt.Errorf("propagate quantity %d: %w", i, err)
		}
		out[i].Check = Check{Value: n.Value, FirstOrder: x, StandardUncertainty: n.StandardUncertainty()}
		out[i].Check.Tolerance = Tolerance(out[i].Check.StandardUncertainty, o.Digits)
	}
	p, err := c.compile(of, planKind{})
	if err != nil {
		return nil, err
	}
	r := runner{plan: p, o: o, out: out, least: c.leastDF(of), size: blockSize(o.Probability)}
	if err := r.run(); err != nil {
		return nil, err
	}
	return out, nil
}

func (o *Options) fill() error {
	if o.Probability == 0 {
		o.Probability = uncertain.DefaultProbability
	}
	if !(o.Probability > 0 && o.Probability <= MaxProbability) {
		return &ChainError{"probability", fmt.Sprint(o.Probability), fmt.Sprintf("above 0, at most %v", MaxProbability)}
	}
	if o.Digits == 0 {
		o.Digits = 2
	}
	if o.Digits != 1 && o.Digits != 2 {
		return &ChainError{"digits", fmt.Sprint(o.Digits), "1 or 2"}
	}
	if o.MaxTrials == 0 {
		o.MaxTrials = DefaultTrials
	}
	if o.MaxTrials < 0 || o.MaxTrials > MaxTrials {
		return &ChainError{"max_trials", fmt.Sprint(o.MaxTrials), fmt.Sprintf("1 to %d", MaxTrials)}
	}
	if o.Workers < 0 {
		return &ChainError{"workers", fmt.Sprint(o.Workers), "a number that is not negative"}
	}
	if o.Stop == nil {
		o.Stop = func() error { return nil }
	}
	if o.Workers == 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	return nil
}

// Tolerance is δ = ½·10^l of a standard uncertainty c·10^l, c of the given
// number of digits (1 or 2).
func Tolerance(u float64, digits int) float64 {
	if !(u > 0) || math.IsInf(u, 0) {
		return 0
	}
	least := 1.0
	if digits == 2 {
		least = 10
	}
	unit := 1.0
	// 10^l by counting: c = u/10^l rounded must have the digits.
	for math.Round(u/unit) >= 10*least {
		unit *= 10
	}
	for math.Round(u/unit) < least {
		unit /= 10
	}
	return unit / 2
}

// blockSize is max(10⁴, 100/(1 − p)), JCGM 101 7.9.4 b.
func blockSize(p float64) int {
	return max(10_000, int(math.Ceil(100/(1-p))))
}

// A runner runs a plan in blocks. Workers take blocks in order, run them at
// once, and hand them over in order.
type runner struct {
	plan  *plan
	o     Options
	out   []Outcome
	least []float64 // smallest ν of what each quantity rests on
	size  int

	grids []grid
	total []*tally
	stats []settling

	mu      sync.Mutex
	turn    *sync.Cond
	next    int // block to be taken
	due     int // block to be handed over
	most    int
	stopped bool
	err     error
}

func (r *runner) run() error {
	r.turn = sync.NewCond(&r.mu)
	r.most = max(1, r.o.MaxTrials/r.size)
	if err := r.first(); err != nil {
		return err
	}
	var wait sync.WaitGroup
	for range min(r.o.Workers, r.most-1) {
		wait.Add(1)
		go func() {
			defer wait.Done()
			r.work()
		}()
	}
	wait.Wait()
	if r.err != nil {
		return r.err
	}
	for i := range r.out {
		if mean, _ := r.total[i].moments(&r.grids[i]); math.IsNaN(mean) || math.IsInf(mean, 0) {
			return &ChainError{fmt.Sprintf("quantities[%d]", i), "a trial whose value is not a finite number", "a slope that no trial can make zero"}
		}
		r.finish(i)
	}
	return nil
}

// first runs block 0, which says where the others are counted.
func (r *runner) first() error {
	m, err := r.plan.machine()
	if err != nil {
		return err
	}
	b := make(pilot, len(r.out))
	err = r.block(m, 0, func(i int, values []float64) { b[i] = append(b[i], values...) })
	if err != nil {
		return err
	}
	r.grids = b.grids(r.o.Probability, r.out)
	r.stats = make([]settling, len(r.out))
	tallies := make([]*tally, len(r.out))
	for i := range r.grids {
		r.total = append(r.total, r.grids[i].tally())
		tallies[i] = r.grids[i].tally()
		tallies[i].add(&r.grids[i], b[i])
	}
	r.next, r.due = 1, 1
	r.take(tallies)
	return nil
}

// block runs one block's trials and hands each quantity's values over.
func (r *runner) block(m *machine, index int, yield func(i int, values []float64)) error {
	m.stream = newStream(r.o.Seed, uint64(index))
	for done := 0; done < r.size; done += lanes {
		if done%(64*lanes) == 0 {
			if err := r.o.Stop(); err != nil {
				return err
			}
		}
		n := min(lanes, r.size-done)
		if err := r.plan.run(m, n); err != nil {
			return err
		}
		for i, slot := range r.plan.out {
			yield(i, m.slots[slot][:n])
		}
	}
	return nil
}

// work takes blocks until there are none or everything has settled.
func (r *runner) work() {
	m, err := r.plan.machine()
	tallies := make([]*tally, len(r.grids))
	for i := range tallies {
		tallies[i] = r.grids[i].tally()
	}
	for {
		r.mu.Lock()
		if r.stopped || r.next >= r.most {
			r.mu.Unlock()
			return
		}
		index := r.next
		r.next++
		r.mu.Unlock()

		if err == nil {
			for _, t := range tallies {
				t.clear()
			}
			err = r.block(m, index, func(i int, values []float64) { tallies[i].add(&r.grids[i], values) })
		}

		r.mu.Lock()
		for r.due != index {
			r.turn.Wait()
		}
		switch {
		case r.stopped: // an earlier block was the last one
		case err != nil:
			r.err, r.stopped = err, true
		default:
			r.take(tallies)
		}
		r.due++
		r.turn.Broadcast()
		r.mu.Unlock()
	}
}

// take adds a block to what there is, and judges whether it is enough.
func (r *runner) take(tallies []*tally) {
	settled := true
	for i, t := range tallies {
		r.total[i].merge(t)
		r.stats[i].add(t, &r.grids[i], r.o.Probability)
		delta := r.out[i].Check.Tolerance
		r.out[i].Settled = r.stats[i].settled(delta, r.least[i] <= 2) && r.grids[i].width <= math.Max(delta/10, minimumWidth(&r.grids[i]))
		settled = settled && r.out[i].Settled
	}
	r.stopped = settled && !r.o.All
}

// minimumWidth is the width of the classes where every trial is one value.
func minimumWidth(g *grid) float64 {
	return math.Max(math.Abs(g.low), 1) * 1e-9 / fewestClasses * 1.001
}

// finish writes what one quantity's trials say.
func (r *runner) finish(i int) {
	out, t, g := &r.out[i], r.total[i], &r.grids[i]
	mean, sd := t.moments(g)
	out.Trials, out.Resolution = int(t.n), g.width
	if r.least[i] > 1 {
		out.Mean = &mean
	}
	if r.least[i] > 2 {
		out.StandardUncertainty = &sd
	}
	out.Low, out.High = t.interval(g, r.o.Probability)
	out.ShortestLow, out.ShortestHigh = t.shortest(g, r.o.Probability)
	k := &out.Check
	k.LowDifference = math.Abs(k.Value - k.FirstOrder.U - out.Low)
	k.HighDifference = math.Abs(k.Value + k.FirstOrder.U - out.High)
	k.Valid = k.LowDifference <= k.Tolerance && k.HighDifference <= k.Tolerance
}

// leastDF is the smallest ν of the variances that each quantity rests on.
func (c *Chain) leastDF(of []Handle) []float64 {
	nu := map[string]float64{}
	for _, g := range c.groups {
		least := math.Inf(1)
		for j, v := range degrees(g) {
			if g.Variances[j] > 0 {
				least = math.Min(least, v)
			}
		}
		nu[g.ID] = least
	}
	out := make([]float64, len(of))
	for i, h := range of {
		out[i] = math.Inf(1)
		for _, t := range c.numbers[h].Terms {
			take := func(group string) {
				if v, ok := nu[group]; ok && t.U > 0 && t.Sensitivity != 0 {
					out[i] = math.Min(out[i], v)
				}
			}
			take(t.Group)
			for _, s := range t.Shares {
				take(s.Group)
			}
		}
	}
	return out
}
