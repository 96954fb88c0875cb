package montecarlo

import (
	"fmt"
	"math"
	"runtime"
	"slices"
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
	// MaxTrials bounds the trials; 0 means 5,000,000. Where they end before the
	// numbers settle, Settled is false.
	MaxTrials int
	// Workers is how many blocks run at once; 0 means one for each processor.
	// The answer does not depend on it.
	Workers int
}

const defaultTrials = 5_000_000

// An Outcome is the distribution of one quantity.
type Outcome struct {
	Mean float64
	// StandardUncertainty of the trials; nil where a source of ν ≤ 2 leaves it undefined.
	StandardUncertainty *float64
	// Low and High bound the probabilistically symmetric interval.
	Low, High float64
	Trials    int
	// Settled says that mean, u and both end points are known to δ/5.
	Settled bool
	Check   Check
}

// A Check is the comparison of JCGM 101 clause 8.
type Check struct {
	// FirstOrder is y ± U from the first-order chain.
	Value      float64
	FirstOrder uncertain.Expanded
	// Tolerance is δ = ½·10^l for u = c·10^l with two digits.
	Tolerance float64
	// LowDifference and HighDifference are |y − U − low| and |y + U − high|.
	LowDifference, HighDifference float64
	// Valid says that both are within the tolerance.
	Valid bool
}

// Run propagates the distributions to the given quantities.
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
		out[i].Check = Check{Value: n.Value, FirstOrder: x, Tolerance: Tolerance(n.StandardUncertainty())}
	}
	blocks, err := c.blocks(of, o, out)
	if err != nil {
		return nil, err
	}
	undefined := c.undefinedU(of)
	for i := range out {
		finish(&out[i], blocks, i, o.Probability, undefined[i])
	}
	return out, nil
}

func (o *Options) fill() error {
	if o.Probability == 0 {
		o.Probability = uncertain.DefaultProbability
	}
	if !(o.Probability > 0 && o.Probability < 1) {
		return &ChainError{"probability", fmt.Sprint(o.Probability), "between 0 and 1"}
	}
	if o.MaxTrials == 0 {
		o.MaxTrials = defaultTrials
	}
	if o.MaxTrials < 0 || o.Workers < 0 {
		return &ChainError{"options", fmt.Sprintf("%d trials, %d workers", o.MaxTrials, o.Workers), "numbers that are not negative"}
	}
	if o.Workers == 0 {
		o.Workers = runtime.GOMAXPROCS(0)
	}
	return nil
}

// Tolerance is δ = ½·10^l of a standard uncertainty c·10^l, c of two digits.
func Tolerance(u float64) float64 {
	if !(u > 0) || math.IsInf(u, 0) {
		return 0
	}
	unit := 1.0
	// 10^l by counting: c = u/10^l rounded must lie in 10 … 99.
	for math.Round(u/unit) >= 100 {
		unit *= 10
	}
	for math.Round(u/unit) < 10 {
		unit /= 10
	}
	return unit / 2
}

// blockSize is max(10⁴, 100/(1 − p)), JCGM 101 7.9.4 b.
func blockSize(p float64) int {
	return max(10_000, int(math.Ceil(100/(1-p))))
}

// A block is one block's trials, one slice for each quantity, sorted.
type block struct {
	values [][]float64
	err    error
}

// blocks runs blocks until everything has settled, JCGM 101 7.9.4. Several run
// at once, but they are judged one after the other.
func (c *Chain) blocks(of []Handle, o Options, out []Outcome) ([]block, error) {
	size := blockSize(o.Probability)
	most := max(1, o.MaxTrials/size)
	var all []block
	stats := make([]settling, len(of))
	for len(all) < most {
		batch := make([]block, min(o.Workers, most-len(all)))
		var wait sync.WaitGroup
		for k := range batch {
			wait.Add(1)
			go func() {
				defer wait.Done()
				batch[k] = c.block(of, newStream(o.Seed, uint64(len(all)+k)), size)
			}()
		}
		wait.Wait()
		for _, b := range batch {
			if b.err != nil {
				return nil, b.err
			}
			all = append(all, b)
			settled := true
			for i := range stats {
				stats[i].add(b.values[i], o.Probability)
				out[i].Settled = stats[i].settled(out[i].Check.Tolerance)
				settled = settled && out[i].Settled
			}
			if settled {
				return all, nil
			}
		}
	}
	return all, nil
}

// settling follows the block averages of mean, u, low and high.
type settling struct {
	n    float64
	sum  [4]float64
	sum2 [4]float64
	zero [4]float64 // first values, subtracted
}

func (s *settling) add(sorted []float64, p float64) {
	mean, sd := moments(sorted)
	low, high := interval(sorted, p)
	for k, v := range [4]float64{mean, sd, low, high} {
		if s.n == 0 {
			s.zero[k] = v
		}
		v -= s.zero[k]
		s.sum[k] += v
		s.sum2[k] += float64(v * v)
	}
	s.n++
}

// settled: twice the standard deviation of each average is at most δ/5.
func (s *settling) settled(tolerance float64) bool {
	if s.n < 2 {
		return false
	}
	for k := range s.sum {
		variance := (s.sum2[k] - float64(s.sum[k]*s.sum[k])/s.n) / float64(s.n*(s.n-1))
		if 2*math.Sqrt(math.Max(0, variance)) > tolerance/5 {
			return false
		}
	}
	return true
}

func moments(v []float64) (mean, sd float64) {
	for _, x := range v {
		mean += x
	}
	mean /= float64(len(v))
	var s float64
	for _, x := range v {
		s += float64((x - mean) * (x - mean))
	}
	return mean, math.Sqrt(s / float64(len(v)-1))
}

// interval is the probabilistically symmetric coverage interval of sorted
// trials, JCGM 101 7.7.
func interval(sorted []float64, p float64) (low, high float64) {
	m := len(sorted)
	q := int(float64(p*float64(m)) + 0.5)
	r := (m - q + 1) / 2
	if r < 1 {
		r = 1
	}
	return sorted[r-1], sorted[min(r+q, m)-1]
}

// finish pools the blocks of one quantity.
func finish(out *Outcome, blocks []block, i int, p float64, undefined bool) {
	var all []float64
	for _, b := range blocks {
		all = append(all, b.values[i]...)
	}
	mean, sd := moments(all)
	slices.Sort(all)
	out.Mean, out.Trials = mean, len(all)
	if !undefined {
		out.StandardUncertainty = &sd
	}
	out.Low, out.High = interval(all, p)
	k := &out.Check
	k.LowDifference = math.Abs(k.Value - k.FirstOrder.U - out.Low)
	k.HighDifference = math.Abs(k.Value + k.FirstOrder.U - out.High)
	k.Valid = k.LowDifference <= k.Tolerance && k.HighDifference <= k.Tolerance
}

// undefinedU says which quantities rest on a variance of ν ≤ 2.
func (c *Chain) undefinedU(of []Handle) []bool {
	small := map[string]bool{}
	for _, g := range c.groups {
		for _, nu := range degrees(g) {
			small[g.ID] = small[g.ID] || nu <= 2
		}
	}
	out := make([]bool, len(of))
	for i, h := range of {
		for _, t := range c.numbers[h].Terms {
			out[i] = out[i] || (small[t.Group] && t.U > 0)
		}
	}
	return out
}

// block runs one block.
func (c *Chain) block(of []Handle, s stream, size int) block {
	t, err := c.newTrial()
	if err != nil {
		return block{err: err}
	}
	b := block{values: make([][]float64, len(of))}
	for i := range b.values {
		b.values[i] = make([]float64, size)
	}
	for k := range size {
		if err := t.run(&s); err != nil {
			return block{err: err}
		}
		for i, h := range of {
			b.values[i][k] = t.values[h]
		}
	}
	for i := range b.values {
		slices.Sort(b.values[i])
	}
	return b
}
