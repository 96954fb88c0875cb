package registry

import (
	"context"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A Comparison sets reported deltas of one scale against each other.
type Comparison struct {
	Scale, Measurand string
	Deltas           []ReportedDelta
	// Covariance of the deltas, in their order (‰²): what they share is in it.
	Covariance [][]float64
	// Pair judges the first two, where there are two.
	Pair *PairComparison
	// Mean of them all with its uncertainty, which never falls below what they share.
	Mean           uncertain.Number
	MeanExpanded   uncertain.Expanded
	MeanCommonPart float64 // standard uncertainty of what all of them share (‰)
}

// A PairComparison is a difference with everything shared cancelled.
type PairComparison struct {
	Difference, StandardUncertainty float64
	// RootSumOfSquares is what u would be if nothing were shared, for showing beside it.
	RootSumOfSquares float64
	Correlation      float64
	Expanded         uncertain.Expanded
	Zeta, En         *float64
	// PValue is the probability of a difference as large or larger if both were
	// alike, by Student's t at the difference's ν_eff; nil for u = 0.
	PValue    *float64
	Different bool
}

// Verdict says in words whether the two differ.
func (p PairComparison) Verdict() string {
	if p.StandardUncertainty == 0 {
		if p.Different {
			return "they differ: both are exact"
		}
		return "they are the same: both are exact"
	}
	word := "no difference is shown"
	if p.Different {
		word = "they differ"
	}
	return fmt.Sprintf("%s at a coverage probability of %g %%", word, 100*p.Expanded.Probability)
}

// MaxCompared bounds the deltas of one comparison.
const MaxCompared = 200

// Compare sets two or more reported deltas against each other, each once. The
// coverage probability 0 means that of the first.
func (r *Registry) Compare(ctx context.Context, actor Actor, codes []string, probability float64) (Comparison, error) {
	var out Comparison
	if !(probability >= 0 && probability < 1) {
		return out, Complain("nothing to compare", []Complaint{{Place: "body.probability", Found: fmt.Sprint(probability), Expected: "a probability between 0 and 1"}})
	}
	for i, code := range codes {
		if j := slices.Index(codes, code); j < i {
			return out, Complain("nothing to compare", []Complaint{{Place: fmt.Sprintf("body.codes[%d]", i), Found: store.FormatCode(code), Expected: fmt.Sprintf("each delta once; body.codes[%d] is the same", j)}})
		}
	}
	if len(codes) < 2 || len(codes) > MaxCompared {
		return out, Complain("nothing to compare", []Complaint{{Place: "body.codes", Found: fmt.Sprintf("%d codes", len(codes)), Expected: fmt.Sprintf("2 to %d codes of reported deltas", MaxCompared)}})
	}
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = Comparison{}
		var numbers []uncertain.Number
		var groups []uncertain.Group
		seen := map[string]bool{}
		for i, code := range codes {
			d, err := reported(ctx, v, actor.Laboratory, code)
			if err != nil {
				return err
			}
			if i == 0 {
				out.Scale, out.Measurand = d.Scale, d.Measurand
			} else if d.Scale != out.Scale || d.Measurand != out.Measurand {
				return Complain("these deltas cannot be compared", []Complaint{{Place: fmt.Sprintf("body.codes[%d]", i), Found: fmt.Sprintf("%s on %s (%s)", store.FormatCode(code), d.Scale, d.Measurand),
					Expected: fmt.Sprintf("a delta on %s (%s), as %s is", out.Scale, out.Measurand, store.FormatCode(codes[0]))}})
			}
			final, err := decodeVersion[store.Final](ctx, v, d.Final)
			if err != nil {
				return err
			}
			n, gs, err := finalNumber(ctx, v, final)
			if err != nil {
				return err
			}
			out.Deltas = append(out.Deltas, d)
			numbers = append(numbers, n)
			for _, g := range gs {
				if !seen[g.ID] {
					seen[g.ID] = true
					groups = append(groups, g)
				}
			}
		}
		return out.judge(numbers, groups, probability)
	})
	return out, err
}

func (c *Comparison) judge(numbers []uncertain.Number, groups []uncertain.Group, probability float64) error {
	c.Covariance = make([][]float64, len(numbers))
	for i := range numbers {
		c.Covariance[i] = make([]float64, len(numbers))
		for j := range numbers {
			c.Covariance[i][j] = uncertain.Covariance(numbers[i], numbers[j])
		}
	}
	coverage := uncertain.Coverage{Probability: probability}
	if probability == 0 {
		coverage.Probability = c.Deltas[0].Probability
	}
	if len(numbers) == 2 {
		p, err := uncertain.Compare(numbers[0], numbers[1], groups, coverage)
		if err != nil {
			return err
		}
		c.Pair = &PairComparison{Difference: p.Difference.Value, StandardUncertainty: p.StandardUncertainty, RootSumOfSquares: p.RootSumOfSquares,
			Correlation: p.Correlation, Zeta: p.Zeta, En: p.En, Different: p.Different,
			Expanded: uncertain.Expanded{U: p.CoverageFactor * p.StandardUncertainty, CoverageFactor: p.CoverageFactor, Probability: coverage.Probability, DegreesOfFreedom: p.DegreesOfFreedom}}
	}
	if p := c.Pair; p != nil && p.Zeta != nil {
		value := 2 * studentTail(math.Abs(*p.Zeta), p.Expanded.DegreesOfFreedom)
		p.PValue = &value
	}
	weights := make([]float64, len(numbers))
	shared := map[string]int{}
	for i, n := range numbers {
		weights[i] = 1 / float64(len(numbers))
		for _, t := range n.Terms {
			shared[t.ID]++
		}
	}
	var err error
	if c.Mean, err = uncertain.Linear(0, weights, numbers); err != nil {
		return err
	}
	if c.MeanExpanded, err = uncertain.Expand(c.Mean, groups, coverage); err != nil {
		return err
	}
	common := uncertain.Number{}
	for _, t := range c.Mean.Terms {
		if shared[t.ID] == len(numbers) {
			common.Terms = append(common.Terms, t)
		}
	}
	c.MeanCommonPart = common.StandardUncertainty()
	return nil
}

// finalNumber is the uncertain number of a final value, with every source it rests on.
func finalNumber(ctx context.Context, v source, f store.Version[store.Final]) (uncertain.Number, []uncertain.Group, error) {
	from, rel, isConverted, err := converted(ctx, v, f.Inputs)
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	again, members, err := againFinal(ctx, v, f)
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	numbers, groups, err := memberNumbers(ctx, v, members)
	if err != nil {
		return uncertain.Number{}, nil, err
	}
	weights := make([]float64, len(members))
	for i, m := range f.Value.Members {
		weights[i] = m.Weight
	}
	if !isConverted {
		n, err := uncertain.Linear(0, weights, numbers)
		return n, groups, err
	}
	for i, m := range again.Members { // those of the original
		weights[i] = m.Weight
	}
	n, err := uncertain.Linear(0, weights, numbers)
	if err != nil {
		return n, nil, err
	}
	original, err := decodeVersion[store.Final](ctx, v, from)
	if err != nil {
		return n, nil, err
	}
	n, _, err = convert(rel, original.Value.Scale, n)
	return n, groups, err
}

// studentTail is P(T > t) of Student's t with ν degrees of freedom, of the
// normal distribution for ν infinite.
func studentTail(t, nu float64) float64 {
	if math.IsInf(nu, 1) || nu <= 0 {
		return distuv.UnitNormal.Survival(t)
	}
	return distuv.StudentsT{Mu: 0, Sigma: 1, Nu: nu}.Survival(t)
}
