package calib

import (
	"errors"
	"fmt"
	"math"

	"deltamoor/calib/adjust"
)

// starts are the two starting points: least squares of raw on assigned values,
// and of assigned values on raw, with the other terms in both. One is enough
// for exact anchors, where the problem has one minimum.
func (p *problem) starts(r *reduction) ([][]float64, error) {
	if p.layout.gas >= 0 {
		return [][]float64{p.gasStart(r)}, nil
	}
	lay := p.layout
	n := len(r.z)
	columns := adjust.NewMatrix(lay.p, n)
	for i, k := range r.model.class {
		c, h := r.model.c[i], r.model.h[i]
		switch l := r.model.latent[i]; {
		case l >= 0:
			columns.Set(lay.intercept, i, c)
			columns.Set(lay.slope, i, float64(c*p.values[l]))
			if lay.blank >= 0 {
				columns.Set(lay.blank, i, h)
				columns.Set(lay.blankSlope, i, float64(h*p.values[l]))
			}
		case k >= 0:
			columns.Set(lay.levels[k], i, c)
			if lay.blank >= 0 {
				columns.Set(lay.blank, i, h)
			}
		}
		for t := 0; t < lay.globals; t++ {
			columns.Set(lay.firstGlobal+t, i, r.model.global.At(t, i))
		}
		if lay.memory >= 0 {
			columns.Set(lay.memory, i, r.model.previous[i])
		}
	}
	z := r.z
	if n == lay.p {
		z = equilibrate(columns, z)
	}
	direct, err := adjust.LeastSquares(columns, z)
	if err != nil {
		return nil, err
	}
	out := [][]float64{p.unlag(direct)}
	if p.vy == nil || n == lay.p {
		return out, nil
	}
	// Two minima need points far off any line; where the two regressions agree
	// to a few per cent they start in the same valley.
	if reverse := p.reverseStart(columns, r.z); reverse != nil && math.Abs(reverse[lay.slope]/direct[lay.slope]-1) > 0.05 {
		out = append(out, p.unlag(reverse))
	}
	return out, nil
}

// equilibrate scales the rows of a determined problem to unit length, in place
// for the columns: no weights enter, however different they are.
func equilibrate(columns *adjust.Matrix, z []float64) []float64 {
	out := append([]float64(nil), z...)
	for i := range out {
		var square float64
		for k := 0; k < columns.Rows; k++ {
			square += float64(columns.At(k, i) * columns.At(k, i))
		}
		if square == 0 {
			continue
		}
		length := math.Sqrt(square)
		out[i] /= length
		for k := 0; k < columns.Rows; k++ {
			columns.Set(k, i, columns.At(k, i)/length)
		}
	}
	return out
}

// unlag turns the linear coefficients of r_i on (terms, r_{i−1}) into those of
// the model, where the terms carry 1 − μ.
func (p *problem) unlag(theta []float64) []float64 {
	if p.layout.memory < 0 {
		return theta
	}
	rest := 1 - theta[p.layout.memory]
	if math.Abs(rest) < 1e-3 {
		theta[p.layout.memory], rest = 0, 1
	}
	for k := range theta {
		if k != p.layout.memory {
			theta[k] /= rest
		}
	}
	return theta
}

// reverseStart regresses the assigned values on raw, both freed of the other
// columns, and turns the line round. It is nil where raw says nothing.
func (p *problem) reverseStart(columns *adjust.Matrix, z []float64) []float64 {
	lay := p.layout
	others := adjust.NewMatrix(lay.p-1, columns.Cols)
	at := make([]int, 0, lay.p-1)
	for k := 0; k < lay.p; k++ {
		if k != lay.slope {
			copy(others.Row(len(at)), columns.Row(k))
			at = append(at, k)
		}
	}
	y := columns.Row(lay.slope)
	ofY, errY := adjust.LeastSquares(others, y)
	ofZ, errZ := adjust.LeastSquares(others, z)
	if errY != nil || errZ != nil {
		return nil
	}
	ry, rz := append([]float64(nil), y...), append([]float64(nil), z...)
	for k := range at {
		adjust.AddScaled(ry, -ofY[k], others.Row(k))
		adjust.AddScaled(rz, -ofZ[k], others.Row(k))
	}
	cross := adjust.Dot(ry, rz)
	beta := adjust.Dot(rz, rz) / cross
	if cross == 0 || !finite(beta) {
		return nil
	}
	theta := make([]float64, lay.p)
	theta[lay.slope] = beta
	for k, l := range at {
		theta[l] = ofZ[k] - float64(beta*ofY[k])
	}
	return theta
}

// gasStart inverts the ratio form at the anchor's mean: with R the anchor's
// rows, 1 + δ_gas = (1 + τ)/(1 + r).
func (p *problem) gasStart(r *reduction) []float64 {
	theta := make([]float64, p.layout.p)
	var value, raw, count float64
	for j, i := range p.fitted {
		if l := p.classes[p.class[j]].anchor; l >= 0 {
			value += p.values[l]
			raw += p.in.readings[i].raw
			count++
		}
	}
	value, raw = value/count, raw/count
	if d := 1 + raw/1000; d != 0 {
		theta[p.layout.gas] = float64(1000 * ((1+value/1000)/d - 1))
	}
	for j, i := range p.fitted {
		if k := p.layout.levels[p.class[j]]; k >= 0 {
			theta[k] = p.in.readings[i].raw
		}
	}
	return theta
}

// refuse turns the adjustment's errors into refusals that name the term.
func (p *problem) refuse(err error) error {
	var rank *adjust.RankError
	var condition *adjust.ConditionError
	var singular *adjust.SingularError
	var converge *adjust.ConvergenceError
	var refused interface{ Refused() Refusal }
	switch {
	case errors.As(err, &refused):
		return err
	case errors.As(err, &rank):
		name := p.parameterName(rank.Column)
		return &NotEstimableError{Refusal{Place: "model." + termOf(name), Found: name + " not determined by the readings", Expected: "readings that tell it from the other terms"}}
	case errors.As(err, &condition):
		return &ConditionError{Refusal{Place: "readings", Found: fmt.Sprintf("condition number %.3g", condition.Condition), Expected: fmt.Sprintf("at most %.3g: terms that the readings tell apart", condition.Limit)}}
	case errors.As(err, &singular):
		return &SingularError{Refusal{Place: "readings", Found: "a singular covariance of readings and anchors (exact or perfectly correlated readings beyond the number of parameters)", Expected: "readings with uncertainty"}}
	case errors.As(err, &converge):
		return &ConvergenceError{Refusal{Place: "readings", Found: converge.Error(), Expected: "a minimum of chi-square"}}
	}
	return err
}

// termOf is the word of the model that a parameter belongs to.
func termOf(name string) string {
	switch {
	case len(name) >= 5 && name[:5] == "drift":
		return "drift"
	case len(name) >= 4 && name[:4] == "size":
		return "size"
	case name == "memory":
		return "memory"
	}
	return name
}
