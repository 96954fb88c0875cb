package montecarlo

import (
	"math"
	"slices"
)

// A grid is the classes that trials of one quantity are counted in. A quantile
// of the counts, interpolated within its class, is off by less than a class.
type grid struct {
	low, width, inverse float64
	classes             int
	// centre is subtracted from sums, which keeps them exact.
	centre float64
}

// The classes are a twentieth of the tolerance δ wide (a fortieth of a unit of
// the last digit), within these bounds of their number.
const (
	fewestClasses  = 1 << 10
	mostClasses    = 1 << 17
	classesByDelta = 20
)

// newGrid takes the range from a first block, sorted: the interval and half its
// width beyond either end, where no end point of another block is.
func newGrid(sorted []float64, p, tolerance, centre float64) grid {
	low, high := interval(sorted, p)
	span := 2 * (high - low)
	if !(span > 0) || math.IsInf(span, 0) {
		span = math.Max(math.Abs(low), 1) * 1e-9 // every trial is one value
	}
	n := fewestClasses
	if tolerance > 0 {
		n = int(math.Min(mostClasses, math.Max(fewestClasses, math.Ceil(span*classesByDelta/tolerance))))
	}
	g := grid{width: span / float64(n), classes: n, centre: centre}
	g.low = (low+high)/2 - span/2
	g.inverse = 1 / g.width
	return g
}

// A tally is the counts and sums of some trials of one quantity.
type tally struct {
	counts       []uint32
	below, above uint64
	n            uint64
	sum, sum2    float64 // of the distances from the grid's centre
}

func (g *grid) tally() *tally { return &tally{counts: make([]uint32, g.classes)} }

func (t *tally) clear() {
	clear(t.counts)
	*t = tally{counts: t.counts}
}

// add counts trials.
func (t *tally) add(g *grid, values []float64) {
	var sum, sum2 float64
	counts, below, above := t.counts, t.below, t.above
	low, inverse, centre := g.low, g.inverse, g.centre
	for _, v := range values {
		d := v - centre
		sum += d
		sum2 += float64(d * d)
		x := float64((v - low) * inverse)
		switch {
		case !(x >= 0): // NaN too
			below++
		case x >= float64(len(counts)):
			above++
		default:
			counts[int(x)]++
		}
	}
	t.sum += sum
	t.sum2 += sum2
	t.below, t.above = below, above
	t.n += uint64(len(values))
}

// merge adds other's trials.
func (t *tally) merge(other *tally) {
	counts := t.counts[:len(other.counts)]
	for i, c := range other.counts {
		counts[i] += c
	}
	t.below += other.below
	t.above += other.above
	t.n += other.n
	t.sum += other.sum
	t.sum2 += other.sum2
}

// moments are the mean and the standard deviation of the trials.
func (t *tally) moments(g *grid) (mean, sd float64) {
	n := float64(t.n)
	mean = t.sum / n
	variance := (t.sum2 - float64(t.sum*mean)) / (n - 1)
	return g.centre + mean, math.Sqrt(math.Max(0, variance))
}

// ranks are those of the probabilistically symmetric interval, from 1, and q
// the trials between them (JCGM 101, 7.7).
func ranks(m int, p float64) (low, q int) {
	q = int(float64(p*float64(m)) + 0.5)
	return max(1, (m-q+1)/2), q
}

// interval is the probabilistically symmetric coverage interval of sorted trials.
func interval(sorted []float64, p float64) (low, high float64) {
	r, q := ranks(len(sorted), p)
	return sorted[r-1], sorted[min(r+q, len(sorted))-1]
}

// interval is the same of the counts.
func (t *tally) interval(g *grid, p float64) (low, high float64) {
	r, q := ranks(int(t.n), p)
	return t.value(g, float64(r)), t.valueDown(g, float64(min(r+q, int(t.n))))
}

// value is the number of the given rank, counted from below.
func (t *tally) value(g *grid, rank float64) float64 {
	before := float64(t.below)
	if rank <= before {
		return g.low
	}
	for i, c := range t.counts {
		if here := float64(c); before+here >= rank {
			return g.at(i, rank-before, here)
		} else {
			before += here
		}
	}
	return g.at(g.classes, 0.5, 1)
}

// valueDown is the same, looked for from above.
func (t *tally) valueDown(g *grid, rank float64) float64 {
	after := float64(t.n) - float64(t.above) // trials up to the class at hand
	if rank > after {
		return g.at(g.classes, 0.5, 1)
	}
	for i := len(t.counts) - 1; i >= 0; i-- {
		here := float64(t.counts[i])
		if after-here < rank {
			return g.at(i, rank-(after-here), here)
		}
		after -= here
	}
	return g.low
}

// at is where the k-th of n trials of a class stands, evenly spread.
func (g *grid) at(class int, k, n float64) float64 {
	return g.low + float64(g.width*(float64(class)+(k-0.5)/n))
}

// shortest is the shortest interval that holds the same number of trials as the
// symmetric one (JCGM 101, 7.7.4), with its lower end at a class.
func (t *tally) shortest(g *grid, p float64) (low, high float64) {
	_, q := ranks(int(t.n), p)
	best := math.Inf(1)
	before := float64(t.below) // trials below class i
	j, upTo := 0, float64(t.below)
	for i := 0; i < g.classes; i++ {
		want := before + float64(q)
		for j < g.classes && upTo+float64(t.counts[j]) < want {
			upTo += float64(t.counts[j])
			j++
		}
		if j == g.classes {
			break
		}
		end := float64(j)
		if c := float64(t.counts[j]); c > 0 {
			end += (want - upTo) / c
		}
		if length := end - float64(i); length < best {
			best = length
			low, high = g.low+float64(g.width*float64(i)), g.low+float64(g.width*end)
		}
		before += float64(t.counts[i])
	}
	if math.IsInf(best, 1) {
		return t.interval(g, p)
	}
	return low, high
}

// A pilot is the first block, kept whole until its grids are made.
type pilot [][]float64

func (b pilot) grids(p float64, out []Outcome) []grid {
	grids := make([]grid, len(b))
	for i, values := range b {
		sorted := slices.Clone(values)
		slices.Sort(sorted)
		grids[i] = newGrid(sorted, p, out[i].Check.Tolerance, out[i].Check.Value)
	}
	return grids
}

// settling follows the block averages of mean, u, low and high.
type settling struct {
	n    float64
	sum  [4]float64
	sum2 [4]float64
	zero [4]float64 // first values, subtracted
}

func (s *settling) add(t *tally, g *grid, p float64) {
	mean, sd := t.moments(g)
	low, high := t.interval(g, p)
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

// settled: twice the standard deviation of each average is at most δ/5. Without
// an u of the trials (undefined) that is not asked of the mean and the u.
func (s *settling) settled(tolerance float64, undefined bool) bool {
	if s.n < 2 {
		return false
	}
	for k := range s.sum {
		if undefined && k < 2 {
			continue
		}
		variance := (s.sum2[k] - float64(s.sum[k]*s.sum[k])/s.n) / float64(s.n*(s.n-1))
		if 2*math.Sqrt(math.Max(0, variance)) > tolerance/5 {
			return false
		}
	}
	return true
}
