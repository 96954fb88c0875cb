package calib

import (
	"fmt"
	"math"

	"deltamoor/calib/adjust"
)

// A sizeTerm is the effect of the size of a peak, around the reference size,
// the mean size of the fitted readings:
//
//	linear   h = s − s_ref          one coefficient, the same shift for every material
//	log      h = ln(s/s_ref)
//	inverse  h = 1/s − 1/s_ref
//	blank    (κ0 + κ1·τ)(1/s − 1/s_ref): a constant blank, which acts in
//	         proportion to the difference between reading and blank
//
// s is the measured size, blank included.
type sizeTerm struct {
	kind      Size
	reference float64
}

func (t *sizeTerm) value(size float64) float64 {
	switch t.kind {
	case SizeLinear:
		return size - t.reference
	case SizeInverse, SizeBlank:
		return 1/size - 1/t.reference
	case SizeLog:
		return adjust.NaturalLog(size / t.reference)
	}
	return 0
}

// names lists the reported parameters.
func (t *sizeTerm) names() []string {
	switch t.kind {
	case SizeNone:
		return nil
	case SizeBlank:
		return []string{"size", "size.slope"}
	}
	return []string{"size"}
}

// takeSize makes the size term for the fitted readings.
func (in *input) takeSize(fitted []int) (sizeTerm, error) {
	t := sizeTerm{kind: in.model.Size, reference: math.NaN()}
	weighted := in.model.weights() == WeightsSize
	if t.kind == "" {
		t.kind = SizeNone
	}
	if t.kind == SizeNone && !weighted {
		return t, nil
	}
	why := "size " + string(t.kind)
	if weighted {
		why = "weights size"
	}
	positive := weighted || t.kind != SizeLinear
	for i := range in.readings {
		rd := &in.readings[i]
		if !rd.usable {
			continue
		}
		switch {
		case math.IsNaN(rd.size):
			return t, &TermInputError{Refusal{Place: fmt.Sprintf("readings[%d].size", rd.index), Found: "nothing", Expected: "a size (" + why + ")"}}
		case positive && rd.size <= 0:
			return t, &TermInputError{Refusal{Place: fmt.Sprintf("readings[%d].size", rd.index), Found: fmt.Sprint(rd.size), Expected: "a positive size (" + why + ")"}}
		}
	}
	var sum float64
	var distinct distinctValues
	for _, i := range fitted {
		sum += in.readings[i].size
		distinct.add(in.readings[i].size)
	}
	t.reference = sum / float64(len(fitted))
	if t.kind != SizeNone && distinct.n < 2 {
		return t, &TermInputError{Refusal{Place: "model.size", Found: "one size of fitted readings", Expected: "at least 2 (" + why + ")"}}
	}
	return t, nil
}
