package assign

import (
	"math"

	"deltamoor/calib/uncertain"
)

// A Combination is the weighted mean of results, with its decomposition.
type Combination struct {
	Value   uncertain.Number
	Weights []float64
}

// Combine returns Σ wᵢ·xᵢ with weights in proportion to 1/uᵢ², uᵢ² the private
// variance of xᵢ: the part of u²(xᵢ) from sources that occur in xᵢ alone. The
// uncertainty of the mean is that of all sources, the shared ones included, so
// it never falls below the common part. Nothing is added for a scatter between
// the results: that is [Analyse].
//
// Private weights, rather than those of the full covariance, keep the mean
// inside the data: unequal sensitivities to a shared anchor would make some
// weights negative. Where a result has no private variance, all weights are
// equal. No result is [ErrNothing]; a number that cannot be used is an
// *uncertain.ValueError.
func Combine(results []uncertain.Number) (Combination, error) {
	if len(results) == 0 {
		return Combination{}, ErrNothing
	}
	weights := privateWeights(takeApart(results).private, 0)
	value, err := uncertain.Linear(0, weights, results)
	return Combination{Value: value, Weights: weights}, err
}

// privateWeights are in proportion to 1/(private + τ²) and sum to 1; equal
// where one of these variances is zero.
func privateWeights(private []float64, tau2 float64) []float64 {
	weights := make([]float64, len(private))
	sum, equal := 0.0, false
	for i, v := range private {
		weights[i] = 1 / (v + tau2)
		sum += weights[i]
		equal = equal || !(v+tau2 > 0) || math.IsInf(weights[i], 0)
	}
	for i := range weights {
		if equal {
			weights[i] = 1 / float64(len(weights))
		} else {
			weights[i] /= sum
		}
	}
	return weights
}
