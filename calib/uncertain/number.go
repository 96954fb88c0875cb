package uncertain

import (
	"fmt"
	"math"
	"slices"
	"strings"
)

// A Kind says what a source is.
type Kind string

// The kinds of sources.
const (
	KindAnchor         Kind = "anchor"
	KindReading        Kind = "reading"
	KindPreparation    Kind = "preparation"
	KindUnit           Kind = "unit"
	KindStability      Kind = "stability"
	KindBetweenSession Kind = "between_session"
	KindCampaign       Kind = "campaign"
	KindCorrection     Kind = "correction"
	KindFit            Kind = "fit" // the readings' part through the parameters, summed for display
)

// A Source is one random input with a lasting identity.
type Source struct {
	ID   string `json:"id"`
	Kind Kind   `json:"kind"`
	// U is its standard uncertainty (‰).
	U float64 `json:"u"`
	// Group names the variance estimates that U² is scaled by; "" when U is known.
	Group string `json:"group,omitempty"`
	// Per is ∂U²/∂φ for each variance of the group, in the group's order; nil
	// for a group of one variance means U²/φ.
	Per []float64 `json:"per,omitempty"`
	// Shares is set, in place of Group and Per, only where numbers were combined
	// in which one source had variances of several groups.
	Shares []Share `json:"shares,omitempty"`
}

// A Share is the part of a source's U² that scales with one group.
type Share struct {
	Group string `json:"group"`
	// Variance is that part, used when Per is nil; negative where the parts of
	// a difference oppose each other.
	Variance float64 `json:"variance,omitempty"`
	// Per is ∂U²/∂φ for each variance of the group.
	Per []float64 `json:"per,omitempty"`
}

// A Term is a source with the number's sensitivity to it.
type Term struct {
	Source
	Sensitivity float64 `json:"sensitivity"`
}

// A Number is a value and its terms, sorted by source ID, each ID once.
// The zero Number is exactly 0.
type Number struct {
	Value float64 `json:"value"`
	Terms []Term  `json:"terms,omitempty"`
}

// A Group holds variance estimates that are correlated with each other.
type Group struct {
	ID         string      `json:"id"`
	Variances  []float64   `json:"variances"`
	Covariance [][]float64 `json:"covariance"`
}

// NewGroup is the group of one variance estimate with its degrees of freedom:
// Cov = 2φ²/ν.
func NewGroup(id string, variance, degreesOfFreedom float64) Group {
	return Group{ID: id, Variances: []float64{variance}, Covariance: [][]float64{{2 * variance * variance / degreesOfFreedom}}}
}

// A ValueError says what in an uncertain number cannot be used.
type ValueError struct {
	// Place is where in the number, such as "terms[2].u".
	Place           string
	Found, Expected string
}

func (e *ValueError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }

// Exact is a value without uncertainty.
func Exact(value float64) Number { return Number{Value: value} }

// New builds a number from terms in any order. Terms of one source are added.
// It refuses what [Number.Validate] refuses.
func New(value float64, terms ...Term) (Number, error) {
	n := Number{Value: value, Terms: slices.Clone(terms)}
	slices.SortStableFunc(n.Terms, func(a, b Term) int { return strings.Compare(a.ID, b.ID) })
	out := n.Terms[:0]
	for _, t := range n.Terms {
		if k := len(out) - 1; k >= 0 && out[k].ID == t.ID {
			out[k] = add(out[k], t, 1, 1)
			continue
		}
		out = append(out, t)
	}
	n.Terms = out
	return n, n.Validate()
}

// Validate refuses values, sensitivities and uncertainties that are not
// finite, negative uncertainties, sources without identity, and terms that
// are not sorted with each source once. The error is a *ValueError.
func (n Number) Validate() error {
	if !finite(n.Value) {
		return &ValueError{Place: "value", Found: fmt.Sprint(n.Value), Expected: "a finite number"}
	}
	for i, t := range n.Terms {
		place := fmt.Sprintf("terms[%d]", i)
		switch {
		case t.ID == "":
			return &ValueError{Place: place + ".id", Found: "nothing", Expected: "the identity of the source"}
		case !finite(t.Sensitivity):
			return &ValueError{Place: place + ".sensitivity", Found: fmt.Sprint(t.Sensitivity), Expected: "a finite number"}
		case !finite(t.U) || t.U < 0:
			return &ValueError{Place: place + ".u", Found: fmt.Sprint(t.U), Expected: "a finite standard uncertainty, not negative"}
		case i > 0 && n.Terms[i-1].ID >= t.ID:
			return &ValueError{Place: place + ".id", Found: fmt.Sprintf("%q after %q", t.ID, n.Terms[i-1].ID), Expected: "terms sorted by source, each source once"}
		}
	}
	return nil
}

// StandardUncertainty is u of the number (k = 1).
func (n Number) StandardUncertainty() float64 { return math.Sqrt(n.Variance()) }

// Variance is u².
func (n Number) Variance() float64 {
	var v float64
	for _, t := range n.Terms {
		c := float64(t.Sensitivity * t.U)
		v += float64(c * c)
	}
	return v
}

// Covariance is Σ c1·u1·c2·u2 over the sources that both numbers have.
func Covariance(a, b Number) float64 {
	var v float64
	for i, j := 0, 0; i < len(a.Terms) && j < len(b.Terms); {
		s, t := &a.Terms[i], &b.Terms[j]
		switch strings.Compare(s.ID, t.ID) {
		case -1:
			i++
		case 1:
			j++
		default:
			v += float64(float64(s.Sensitivity*s.U) * float64(t.Sensitivity*t.U))
			i, j = i+1, j+1
		}
	}
	return v
}

// Linear is constant + Σ coefficients_i·numbers_i. Sources that cancel
// exactly are dropped. It refuses coefficients that are not finite and
// slices of different length.
func Linear(constant float64, coefficients []float64, numbers []Number) (Number, error) {
	if len(coefficients) != len(numbers) {
		return Number{}, &ValueError{Place: "coefficients", Found: fmt.Sprint(len(coefficients)), Expected: fmt.Sprintf("one for each of %d numbers", len(numbers))}
	}
	if !finite(constant) {
		return Number{}, &ValueError{Place: "constant", Found: fmt.Sprint(constant), Expected: "a finite number"}
	}
	out := Number{Value: constant}
	for i, c := range coefficients {
		if !finite(c) {
			return Number{}, &ValueError{Place: fmt.Sprintf("coefficients[%d]", i), Found: fmt.Sprint(c), Expected: "a finite number"}
		}
		if err := numbers[i].Validate(); err != nil {
			return Number{}, fmt.Errorf("combine number %d: %w", i, err)
		}
		out.Value += float64(c * numbers[i].Value)
		out.Terms = merge(out.Terms, numbers[i].Terms, c)
	}
	out.Terms = slices.DeleteFunc(out.Terms, func(t Term) bool { return t.Sensitivity == 0 })
	return out, nil
}

// merge adds c times the terms b to the terms a; both are sorted.
func merge(a, b []Term, c float64) []Term {
	out := make([]Term, 0, len(a)+len(b))
	i, j := 0, 0
	for i < len(a) && j < len(b) {
		switch strings.Compare(a[i].ID, b[j].ID) {
		case -1:
			out, i = append(out, a[i]), i+1
		case 1:
			out, j = append(out, scaled(b[j], c)), j+1
		default:
			out = append(out, add(a[i], b[j], 1, c))
			i, j = i+1, j+1
		}
	}
	out = append(out, a[i:]...)
	for ; j < len(b); j++ {
		out = append(out, scaled(b[j], c))
	}
	return out
}

func scaled(t Term, c float64) Term {
	t.Sensitivity = float64(t.Sensitivity * c)
	return t
}

// add is ca·a + cb·b for two terms of one source. Where their variances come
// from different estimates, or from one estimate in different proportion, the
// sum keeps a share for each:
//
//	q = ca·ua + cb·ub,   ∂q²/∂φ_a = q·(ca·ua)·(∂ua²/∂φ_a)/ua²
func add(a, b Term, ca, cb float64) Term {
	ca, cb = float64(ca*a.Sensitivity), float64(cb*b.Sensitivity)
	if a.U == b.U && sameScaling(a.Source, b.Source) {
		a.Sensitivity = ca + cb
		return a
	}
	qa, qb := float64(ca*a.U), float64(cb*b.U)
	if qb == 0 {
		a.Sensitivity = ca
		return a
	}
	if qa == 0 {
		b.Sensitivity = cb
		return b
	}
	q := qa + qb
	out := a
	out.Sensitivity = q / a.U
	if q == 0 {
		return out
	}
	// Per unit of out's own U²: q·qa/out.Sensitivity² of U², and so for b.
	c2 := float64(out.Sensitivity * out.Sensitivity)
	shares := appendShares(nil, a.Source, float64(q*qa)/c2)
	shares = appendShares(shares, b.Source, float64(q*qb)/c2)
	out.Group, out.Per, out.Shares = "", nil, shares
	return out
}

func sameScaling(a, b Source) bool {
	return a.Group == b.Group && slices.Equal(a.Per, b.Per) && len(a.Shares) == 0 && len(b.Shares) == 0
}

// appendShares adds the groups of s with the attributed part of U² they scale,
// adding to shares of the same group.
func appendShares(shares []Share, s Source, part float64) []Share {
	for _, h := range s.shares() {
		h = Share{Group: h.Group, Variance: part * h.Variance / (s.U * s.U), Per: scaledSlice(h.Per, part/(s.U*s.U))}
		k := slices.IndexFunc(shares, func(o Share) bool { return o.Group == h.Group && (o.Per == nil) == (h.Per == nil) })
		if k < 0 {
			shares = append(shares, h)
			continue
		}
		shares[k].Variance += h.Variance
		for i, v := range h.Per {
			shares[k].Per[i] += v
		}
	}
	return shares
}

func scaledSlice(v []float64, c float64) []float64 {
	if v == nil {
		return nil
	}
	out := make([]float64, len(v))
	for i, x := range v {
		out[i] = float64(c * x)
	}
	return out
}

// shares lists the groups a source scales with, by whichever form it states them.
func (s Source) shares() []Share {
	if s.Shares != nil {
		return s.Shares
	}
	if s.Group == "" {
		return nil
	}
	return []Share{{Group: s.Group, Variance: float64(s.U * s.U), Per: s.Per}}
}
