// Package scale converts deltas: between scales by affine relations with
// uncertain, versioned constants, between references by the chain rule of
// ratios, between delta and ratio, and between units.
//
// Deltas are in per mil (‰). A delta is (R/R_reference − 1)·1000, a relative
// difference of isotope ratios (Coplen 2011, doi:10.1002/rcm.5129); the factor
// 1000 belongs to the unit. Two realisations of one scale are two scales: no
// relation between them is built in.
package scale

import (
	"fmt"
	"math"
	"strings"

	"deltamoor/calib/uncertain"
)

// A Relation is one version of an affine conversion between two scales of one
// quantity,
//
//	y = Factor·x + Offset
//
// such as VSMOW = 1.03092·VPDB + 30.92 for oxygen (Brand et al. 2014,
// doi:10.1515/pac-2013-1023). Its inverse is exact, never the printed rounded one.
type Relation struct {
	// ID is the identity of the version. Its constants' sources are
	// "correction:<ID>/factor" and "correction:<ID>/offset".
	ID             string
	Factor, Offset float64
	// Covariance of (Factor, Offset); zero for constants that are fixed.
	Covariance [2][2]float64
}

// A ConversionError says what cannot be converted.
type ConversionError struct {
	Place, Found, Expected string
}

func (e *ConversionError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

// constants are factor and offset as uncertain numbers that share sources.
func (r Relation) constants() (factor, offset uncertain.Number, err error) {
	if r.Factor == 0 || !finite(r.Factor) || !finite(r.Offset) {
		return factor, offset, &ConversionError{"relation " + r.ID, fmt.Sprintf("%v·x + %v", r.Factor, r.Offset), "finite constants and a factor that is not zero"}
	}
	c := [][]float64{r.Covariance[0][:], r.Covariance[1][:]}
	n, err := uncertain.FromCovariance("correction:"+r.ID+"/", uncertain.KindCorrection, []string{"factor", "offset"}, []float64{r.Factor, r.Offset}, c)
	if err != nil {
		return factor, offset, fmt.Errorf("relation %s: %w", r.ID, err)
	}
	if r.ID == "" && len(n[0].Terms)+len(n[1].Terms) > 0 {
		return factor, offset, &ConversionError{"relation", "uncertain constants without identity", "the relation's version"}
	}
	return n[0], n[1], nil
}

// Apply converts a number, with its sources and the constants'.
func (r Relation) Apply(x uncertain.Number) (uncertain.Number, error) {
	factor, offset, err := r.constants()
	if err != nil {
		return uncertain.Number{}, err
	}
	// A·x + B with the value exact: the terms carry x·dA + dB + A·dx.
	y, err := uncertain.Linear(0, []float64{r.Factor, x.Value, 1}, []uncertain.Number{x, factor, offset})
	if err != nil {
		return uncertain.Number{}, fmt.Errorf("relation %s: %w", r.ID, err)
	}
	y.Value = float64(r.Factor*x.Value) + r.Offset
	return y, nil
}

// Invert converts back: x = (y − Offset)/Factor exactly. A number that was
// converted and comes back has its own sources again: the constants' cancel.
func (r Relation) Invert(y uncertain.Number) (uncertain.Number, error) {
	factor, offset, err := r.constants()
	if err != nil {
		return uncertain.Number{}, err
	}
	value := (y.Value - r.Offset) / r.Factor
	x, err := uncertain.Linear(0, []float64{1 / r.Factor, -value / r.Factor, -1 / r.Factor}, []uncertain.Number{y, factor, offset})
	if err != nil {
		return uncertain.Number{}, fmt.Errorf("relation %s: %w", r.ID, err)
	}
	x.Value = value
	return x, nil
}

// ChangeReference turns δ(A/B) and δ(B/C) into δ(A/C):
//
//	δ(A/C) = δ(A/B) + δ(B/C) + δ(A/B)·δ(B/C)/1000
//
// The product is not to be left out: 2.5 ‰ for 50 ‰ of 50 ‰.
func ChangeReference(ab, bc uncertain.Number) (uncertain.Number, error) {
	n, err := uncertain.Linear(0, []float64{1 + bc.Value/1000, 1 + ab.Value/1000}, []uncertain.Number{ab, bc})
	if err != nil {
		return uncertain.Number{}, fmt.Errorf("change the reference: %w", err)
	}
	n.Value = ab.Value + bc.Value + float64(ab.Value*bc.Value)/1000
	return n, nil
}

// Exchange turns δ(A/B) into δ(B/A) = −δ/(1 + δ/1000). A delta of −1000 or
// below, a ratio of nothing, is a *ConversionError.
func Exchange(ab uncertain.Number) (uncertain.Number, error) {
	ratio := 1 + ab.Value/1000
	if !(ratio > 0) {
		return uncertain.Number{}, &ConversionError{"delta", fmt.Sprint(ab.Value), "above −1000 ‰"}
	}
	n, err := uncertain.Linear(0, []float64{-1 / float64(ratio*ratio)}, []uncertain.Number{ab})
	if err != nil {
		return uncertain.Number{}, fmt.Errorf("exchange sample and reference: %w", err)
	}
	n.Value = -ab.Value/ratio + 0
	return n, nil
}

// FromRatio is the delta of a ratio relative to the reference's; both positive.
func FromRatio(ratio, reference float64) (float64, error) {
	if !(ratio > 0) || !(reference > 0) || !finite(ratio) || !finite(reference) {
		return 0, &ConversionError{"ratio", fmt.Sprintf("%v to %v", ratio, reference), "positive ratios"}
	}
	return float64((ratio - reference) / reference * 1000), nil
}

// ToRatio is the ratio of a delta; above −1000 ‰.
func ToRatio(delta, reference float64) (float64, error) {
	if !(delta > -1000) || !finite(delta) || !(reference > 0) || !finite(reference) {
		return 0, &ConversionError{"delta", fmt.Sprintf("%v of a reference ratio %v", delta, reference), "above −1000 ‰ of a positive ratio"}
	}
	return float64(reference * (1 + delta/1000)), nil
}

// A Unit is one that deltas are stated in.
type Unit string

// The units of deltas.
const (
	PerMil    Unit = "permil"  // 10⁻³
	MilliUrey Unit = "mUr"     // 10⁻³ (Brand and Coplen 2012, doi:10.1080/10256016.2012.666977)
	PPM       Unit = "ppm"     // 10⁻⁶
	PerMeg    Unit = "per-meg" // 10⁻⁶
)

// PerMil converts a delta or its uncertainty from the unit to ‰. A unit that
// is not known is a *ConversionError.
func (u Unit) PerMil(v float64) (float64, error) {
	switch u {
	case PerMil, MilliUrey:
		return v, nil
	case PPM, PerMeg:
		return v / 1000, nil
	}
	return 0, &ConversionError{"delta_unit", fmt.Sprintf("%q", u), "one of permil, mUr, ppm, per-meg"}
}

// Quantity splits the name of a scale, d13C-VPDB-LSVEC, into the quantity and
// the label of its realisation: two scales of one quantity, but not two
// quantities, may be related.
func Quantity(name string) (quantity, label string, err error) {
	quantity, label, ok := strings.Cut(name, "-")
	if !ok || quantity == "" || label == "" {
		return "", "", &ConversionError{"scale", fmt.Sprintf("%q", name), "a quantity and a label, as in d13C-VPDB"}
	}
	return quantity, label, nil
}
