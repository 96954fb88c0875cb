package rest

import (
	"context"
	"fmt"
	"math"

	"deltamoor/api/registry"
)

// A NewComparison names what is set against each other.
type NewComparison struct {
	Codes       []string `json:"codes" minItems:"2" maxItems:"200" doc:"Codes of reported deltas on one scale."`
	Probability float64  `json:"probability,omitempty" minimum:"0" maximum:"1" doc:"Coverage probability of the verdict; left out: that of the first delta."`
}

// A Comparison sets reported deltas against each other, with what they share cancelled.
type Comparison struct {
	Scale      string          `json:"scale"`
	Measurand  string          `json:"measurand"`
	Deltas     []Reported      `json:"deltas"`
	Covariance [][]float64     `json:"covariance" doc:"Of the deltas, in their order (‰²)."`
	Pair       *PairComparison `json:"pair" doc:"Of two; null for more."`
	Mean       ComparedMean    `json:"mean"`
}

// A PairComparison is the first delta less the second.
type PairComparison struct {
	Difference       float64  `json:"difference" doc:"‰"`
	U                float64  `json:"u" doc:"Standard uncertainty of the difference, everything shared cancelled (‰)."`
	RootSumOfSquares float64  `json:"root_sum_of_squares" doc:"What u would be if nothing were shared (‰)."`
	Correlation      float64  `json:"correlation"`
	NuEff            *float64 `json:"nu_eff" doc:"null where infinite."`
	K                float64  `json:"k"`
	Expanded         float64  `json:"U" doc:"k·u (‰)."`
	P                float64  `json:"p"`
	Z                *float64 `json:"z" doc:"Difference/u; null for u = 0."`
	En               *float64 `json:"E_n" doc:"Difference/(2u); null for u = 0."`
	PValue           *float64 `json:"p_value" doc:"Probability of a difference as large or larger if both were alike, by Student's t at nu_eff; null for u = 0."`
	Different        bool     `json:"different" doc:"|difference| > U."`
	Verdict          string   `json:"verdict" doc:"The same in words."`
}

// A ComparedMean is the unweighted mean of the deltas.
type ComparedMean struct {
	Value      float64  `json:"value" doc:"‰"`
	U          float64  `json:"u" doc:"Never below what all of them share (‰)."`
	K          float64  `json:"k"`
	Expanded   float64  `json:"U"`
	P          float64  `json:"p"`
	NuEff      *float64 `json:"nu_eff" doc:"null where infinite."`
	CommonPart float64  `json:"common_part" doc:"Standard uncertainty of what all of them share (‰)."`
}

func finiteOrNil(x float64) *float64 {
	if math.IsInf(x, 0) || math.IsNaN(x) {
		return nil
	}
	return &x
}

// ShowComparison is the public shape of a comparison.
func ShowComparison(c registry.Comparison) Comparison {
	out := Comparison{Scale: c.Scale, Measurand: c.Measurand, Deltas: convert(c.Deltas, showReported), Covariance: c.Covariance,
		Mean: ComparedMean{Value: c.Mean.Value, U: c.Mean.StandardUncertainty(), K: c.MeanExpanded.CoverageFactor, Expanded: c.MeanExpanded.U, P: c.MeanExpanded.Probability,
			NuEff: finiteOrNil(c.MeanExpanded.DegreesOfFreedom), CommonPart: c.MeanCommonPart}}
	if p := c.Pair; p != nil {
		out.Pair = &PairComparison{Difference: p.Difference, U: p.StandardUncertainty, RootSumOfSquares: p.RootSumOfSquares, Correlation: p.Correlation,
			NuEff: finiteOrNil(p.Expanded.DegreesOfFreedom), K: p.Expanded.CoverageFactor, Expanded: p.Expanded.U, P: p.Expanded.Probability,
			Z: p.Zeta, En: p.En, PValue: p.PValue, Different: p.Different, Verdict: p.Verdict()}
	}
	return out
}

func (f *face) compare(ctx context.Context, actor registry.Actor, in *struct{ Body NewComparison }) (*plain[Comparison], error) {
	var codes []string
	for i, text := range in.Body.Codes {
		code, err := parseCode(fmt.Sprintf("body.codes[%d]", i), text, kindReported)
		if err != nil {
			return nil, err
		}
		codes = append(codes, code)
	}
	c, err := f.registry.Compare(ctx, actor, codes, in.Body.Probability)
	if err != nil {
		return nil, err
	}
	return &plain[Comparison]{ShowComparison(c)}, nil
}
