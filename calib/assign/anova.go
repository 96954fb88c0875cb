package assign

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/stat/distuv"

	"deltamoor/calib/adjust"
)

// An Anova is a one-way analysis of variance of groups, blocks removed first.
type Anova struct {
	Groups, Count         int
	Mean                  float64
	BetweenDF, WithinDF   int
	SumBetween, SumWithin float64
	MeanSquareBetween     float64 // MSB
	MeanSquareWithin      float64 // MSW; 0 where WithinDF is 0
	// F against (BetweenDF, WithinDF) and its p; nil where MSW is 0 or has no
	// degrees of freedom.
	F, P *float64

	EffectiveReplicates      float64 // n0
	BetweenVariance          float64 // (MSB − MSW)/n0, negative where it comes out so
	BetweenVarianceVariance  float64 // 2(MSB²/ν_B + MSW²/ν_W)/n0²
	RSquared                 float64 // SSB/(SSB + SSW)
	WithinStandardDeviation  float64 // √MSW
	BetweenStandardDeviation float64 // √BetweenVariance, 0 where that is negative
}

// finish completes an analysis from its sums of squares.
func (a *Anova) finish() {
	a.MeanSquareBetween = a.SumBetween / float64(a.BetweenDF)
	if a.WithinDF > 0 {
		a.MeanSquareWithin = a.SumWithin / float64(a.WithinDF)
		if a.MeanSquareWithin > 0 {
			f := a.MeanSquareBetween / a.MeanSquareWithin
			p := distuv.F{D1: float64(a.BetweenDF), D2: float64(a.WithinDF)}.Survival(f)
			a.F, a.P = &f, &p
		}
	}
	a.BetweenVariance = (a.MeanSquareBetween - a.MeanSquareWithin) / a.EffectiveReplicates
	b := float64(a.MeanSquareBetween*a.MeanSquareBetween) / float64(a.BetweenDF)
	if a.WithinDF > 0 {
		b += float64(a.MeanSquareWithin*a.MeanSquareWithin) / float64(a.WithinDF)
	}
	a.BetweenVarianceVariance = 2 * b / float64(a.EffectiveReplicates*a.EffectiveReplicates)
	if t := a.SumBetween + a.SumWithin; t > 0 {
		a.RSquared = a.SumBetween / t
	}
	a.WithinStandardDeviation = math.Sqrt(a.MeanSquareWithin)
	a.BetweenStandardDeviation = math.Sqrt(math.Max(0, a.BetweenVariance))
}

// A Summary is a group known by its mean, standard deviation and size only.
type Summary struct {
	Mean, StandardDeviation float64
	Count                   int
}

// AnovaOfSummaries is the one-way analysis of groups given by summaries
// (JCGM 100:2008, H.5):
//
//	SSB = Σ nᵢ(x̄ᵢ − x̄)²,  SSW = Σ (nᵢ − 1)sᵢ²,  n0 = (n − Σnᵢ²/n)/(a − 1)
//
// Fewer than two groups, a group without measurements, or figures that are not
// finite, are an *InputError.
func AnovaOfSummaries(groups []Summary) (Anova, error) {
	if len(groups) < 2 {
		return Anova{}, &InputError{Place: "groups", Found: fmt.Sprint(len(groups)), Expected: "two or more"}
	}
	a := Anova{Groups: len(groups), BetweenDF: len(groups) - 1}
	var n, squares, mean float64
	for i, g := range groups {
		switch {
		case g.Count < 1:
			return Anova{}, &InputError{Place: fmt.Sprintf("groups[%d].count", i), Found: fmt.Sprint(g.Count), Expected: "one or more"}
		case !finite(g.Mean) || !finite(g.StandardDeviation) || g.StandardDeviation < 0:
			return Anova{}, &InputError{Place: fmt.Sprintf("groups[%d]", i), Found: fmt.Sprintf("mean %v, standard deviation %v", g.Mean, g.StandardDeviation), Expected: "finite numbers"}
		}
		c := float64(g.Count)
		n += c
		squares += float64(c * c)
		mean += float64(c * (g.Mean - groups[0].Mean))
		a.WithinDF += g.Count - 1
		a.SumWithin += float64(float64(g.Count-1) * float64(g.StandardDeviation*g.StandardDeviation))
	}
	mean /= n
	for _, g := range groups {
		d := g.Mean - groups[0].Mean - mean
		a.SumBetween += float64(float64(g.Count) * float64(d*d))
	}
	a.Count, a.Mean = int(n), groups[0].Mean+mean
	a.EffectiveReplicates = (n - squares/n) / float64(a.BetweenDF)
	a.finish()
	return a, nil
}

// projection is an orthonormal basis grown column by column; what a column
// adds is found by Gram–Schmidt, done twice.
type projection struct {
	columns [][]float64
}

// residual removes from v what the basis explains.
func (p *projection) residual(v []float64) {
	for range 2 {
		for _, c := range p.columns {
			adjust.AddScaled(v, -adjust.Dot(c, v), c)
		}
	}
}

// add takes what is new in the column into the basis; it returns the squared
// length of that, 0 where the basis explains the column.
func (p *projection) add(column []float64) float64 {
	before := adjust.Dot(column, column)
	p.residual(column)
	after := adjust.Dot(column, column)
	if after <= 1e-12*before {
		return 0
	}
	length := math.Sqrt(after)
	for i := range column {
		column[i] /= length
	}
	p.columns = append(p.columns, column)
	return after
}

// indicators are the columns of a factor.
func indicators(labels []int, levels int) [][]float64 {
	out := make([][]float64, levels)
	for k := range out {
		out[k] = make([]float64, len(labels))
	}
	for i, k := range labels {
		out[k][i] = 1
	}
	return out
}

// A layout is measurements with their group and block.
type layout struct {
	y              []float64
	group, block   []int
	groups, blocks int
}

// analyse removes the blocks, then the groups:
//
//	SSB = ‖M y‖² − ‖residual‖²,  n0 = tr(ZᵀMZ)/ν_B,  ν_B = rank(MZ)
//
// with M the projection away from the blocks and Z the groups' indicators
// (Henderson's third method); for one block n0 = (n − Σnᵢ²/n)/(a − 1). Extra,
// when not nil, is a column set between blocks and groups; its sum of squares
// is returned apart and is part of SSB.
func (l *layout) analyse(extra []float64) (a Anova, extraSum float64, residual []float64) {
	n := len(l.y)
	y := make([]float64, n)
	shift := l.y[0]
	var mean float64
	for i, v := range l.y {
		y[i] = v - shift
		mean += y[i]
	}
	mean /= float64(n)
	for i := range y {
		y[i] -= mean
	}
	a = Anova{Groups: l.groups, Count: n, Mean: shift + mean}
	p := &projection{}
	for _, c := range indicators(l.block, l.blocks) {
		p.add(c)
	}
	p.residual(y)
	blocks := len(p.columns)
	var trace float64
	for _, c := range indicators(l.group, l.groups) {
		p.residual(c)
		trace += adjust.Dot(c, c)
	}
	if extra != nil {
		p.add(extra)
	}
	first := len(p.columns)
	for _, c := range indicators(l.group, l.groups) {
		p.add(c)
	}
	for k := blocks; k < len(p.columns); k++ {
		s := adjust.Dot(p.columns[k], y)
		s2 := float64(s * s)
		a.SumBetween += s2
		if k < first {
			extraSum += s2
		}
	}
	a.BetweenDF = len(p.columns) - blocks
	p.residual(y)
	a.SumWithin = adjust.Dot(y, y)
	a.WithinDF = n - len(p.columns)
	if a.BetweenDF > 0 {
		a.EffectiveReplicates = trace / float64(a.BetweenDF)
		a.finish()
	}
	return a, extraSum, y
}
