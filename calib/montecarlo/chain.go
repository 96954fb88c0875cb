package montecarlo

import (
	"fmt"
	"math"
	"slices"

	"deltamoor/calib"
	"deltamoor/calib/uncertain"
)

// A Distribution is what a source is drawn from; its standard deviation is the
// source's u. Where the source's group has finite degrees of freedom the draw
// is scaled, which makes a normal one Student's t.
type Distribution string

// The distributions.
const (
	Normal      Distribution = "normal"
	Rectangular Distribution = "rectangular"
	Triangular  Distribution = "triangular"
)

// A Handle names one quantity of a chain.
type Handle int

// A Chain is what is evaluated anew in every trial. Quantities can only rest
// on those added before.
type Chain struct {
	nodes   []node
	numbers []uncertain.Number // first-order, of each handle
	// sources by identity: one standardised draw each.
	at            map[string]int
	distributions []Distribution
	chosen        map[string]Distribution
	groups        []uncertain.Group
	fits          []fitNode
}

// A node is a constant, parts of sources, and parts of other quantities; or a
// fit's subject.
type node struct {
	constant     float64
	parts        []part
	coefficients []float64
	of           []Handle
	fit, subject int // fit −1 for none
}

// A part is a source's share of a quantity: sensitivity × its u, scaled by its
// group's draw.
type part struct {
	source int
	scale  scale
	factor float64
}

// A scale is a source's u, as one known number, or as variances that scale
// with the draws of a group.
type scale struct {
	u     float64
	group int // −1 for known
	// per is ∂u²/∂φ × φ̂ for each variance of the group.
	per []float64
}

type fitNode struct {
	result *calib.Result
	// anchors and corrections are quantities, with the value each deviates from.
	anchors, corrections []Handle
	centres, inputs      []float64
	noise                []noisePart
	readings             int
}

type noisePart struct {
	reading int
	part
}

// NewChain makes an empty chain whose sources scale with the given groups.
// Distributions other than normal are stated by source identity.
func NewChain(groups []uncertain.Group, distributions map[string]Distribution) *Chain {
	return &Chain{at: map[string]int{}, chosen: distributions, groups: groups}
}

// A ChainError says what cannot be propagated.
type ChainError struct {
	Place, Found, Expected string
}

func (e *ChainError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

// part registers a source.
func (c *Chain) part(t uncertain.Term) (part, error) {
	k, ok := c.at[t.ID]
	if !ok {
		k = len(c.distributions)
		c.at[t.ID] = k
		d := Normal
		if x, ok := c.chosen[t.ID]; ok {
			d = x
		}
		if d != Normal && d != Rectangular && d != Triangular {
			return part{}, &ChainError{"source " + t.ID, fmt.Sprintf("distribution %q", d), "normal, rectangular or triangular"}
		}
		c.distributions = append(c.distributions, d)
	}
	p := part{source: k, factor: t.Sensitivity, scale: scale{u: t.U, group: -1}}
	if t.Shares != nil {
		return p, &ChainError{"source " + t.ID, "shares of several groups", "one group: a number that was not combined from two fits of one session"}
	}
	if t.Group == "" {
		return p, nil
	}
	for g := range c.groups {
		if c.groups[g].ID != t.Group {
			continue
		}
		p.scale.group = g
		p.scale.per = []float64{t.U * t.U}
		if t.Per != nil {
			p.scale.per = make([]float64, len(t.Per))
			for j, v := range t.Per {
				p.scale.per[j] = v * c.groups[g].Variances[j]
			}
		}
		return p, nil
	}
	return p, nil // a group that is not given has a known variance
}

// Number adds a value with its sources.
func (c *Chain) Number(n uncertain.Number) (Handle, error) {
	if err := n.Validate(); err != nil {
		return 0, fmt.Errorf("chain: %w", err)
	}
	x := node{constant: n.Value, fit: -1}
	for _, t := range n.Terms {
		p, err := c.part(t)
		if err != nil {
			return 0, err
		}
		x.parts = append(x.parts, p)
	}
	return c.add(x, n), nil
}

func (c *Chain) add(x node, n uncertain.Number) Handle {
	c.nodes, c.numbers = append(c.nodes, x), append(c.numbers, n)
	return Handle(len(c.nodes) - 1)
}

// Linear adds constant + Σ coefficients·quantities, with sources of its own
// (a unit's homogeneity, stability, a campaign's session effects).
func (c *Chain) Linear(constant float64, coefficients []float64, of []Handle, own ...uncertain.Term) (Handle, error) {
	if len(coefficients) != len(of) {
		return 0, &ChainError{"coefficients", fmt.Sprint(len(coefficients)), fmt.Sprintf("one for each of %d quantities", len(of))}
	}
	x := node{constant: constant, fit: -1, coefficients: coefficients, of: of}
	numbers := make([]uncertain.Number, 0, len(of)+1)
	for i, h := range of {
		if int(h) < 0 || int(h) >= len(c.nodes) {
			return 0, &ChainError{fmt.Sprintf("quantities[%d]", i), fmt.Sprint(h), "a quantity of this chain"}
		}
		numbers = append(numbers, c.numbers[h])
	}
	for _, t := range own {
		p, err := c.part(t)
		if err != nil {
			return 0, err
		}
		x.parts = append(x.parts, p)
	}
	extra, err := uncertain.New(0, own...)
	if err != nil {
		return 0, fmt.Errorf("chain: %w", err)
	}
	n, err := uncertain.Linear(constant, append(append([]float64(nil), coefficients...), 1), append(numbers, extra))
	if err != nil {
		return 0, fmt.Errorf("chain: %w", err)
	}
	return c.add(x, n), nil
}

// Fit adds a fit and returns a handle for each of its subjects. anchors, in
// the session's order, are the quantities that its assigned values come from;
// nil takes the session's own numbers, as does a negative handle.
func (c *Chain) Fit(r *calib.Result, anchors []Handle) ([]Handle, error) {
	numbers := r.AnchorNumbers()
	if anchors == nil {
		anchors = make([]Handle, len(numbers))
		for i := range anchors {
			anchors[i] = -1
		}
	}
	if len(anchors) != len(numbers) {
		return nil, &ChainError{"anchors", fmt.Sprint(len(anchors)), fmt.Sprintf("one for each of %d", len(numbers))}
	}
	f := fitNode{result: r}
	for i, h := range anchors {
		if h < 0 {
			var err error
			if h, err = c.Number(numbers[i]); err != nil {
				return nil, err
			}
		}
		if int(h) >= len(c.nodes) {
			return nil, &ChainError{fmt.Sprintf("anchors[%d]", i), fmt.Sprint(h), "a quantity of this chain"}
		}
		f.anchors, f.centres = append(f.anchors, h), append(f.centres, c.numbers[h].Value)
	}
	for _, n := range r.CorrectionNumbers() {
		h, err := c.Number(n)
		if err != nil {
			return nil, err
		}
		f.corrections, f.inputs = append(f.corrections, h), append(f.inputs, n.Value)
	}
	c.Adopt(r.Groups())
	if err := c.noise(r, &f); err != nil {
		return nil, err
	}
	c.fits = append(c.fits, f)
	var out []Handle
	for i := range r.Subjects {
		x := node{fit: len(c.fits) - 1, subject: i}
		for _, own := range []func(int) (uncertain.Term, bool){r.Homogeneity, r.BetweenSession} {
			t, ok := own(i)
			if !ok {
				continue
			}
			p, err := c.part(t)
			if err != nil {
				return nil, err
			}
			x.parts = append(x.parts, p)
		}
		out = append(out, c.add(x, r.Number(i)))
	}
	return out, nil
}

// FirstOrder is the first-order number of a quantity, with every source it rests on.
func (c *Chain) FirstOrder(h Handle) uncertain.Number { return c.numbers[h] }

// Size is how many fits and sources a chain has.
func (c *Chain) Size() (fits, sources int) { return len(c.fits), len(c.distributions) }

// Alone is a fit's subject without its between-session effect, for combining
// sessions whose effect is estimated from themselves.
func (c *Chain) Alone(h Handle) (Handle, error) {
	if int(h) < 0 || int(h) >= len(c.nodes) || c.nodes[h].fit < 0 {
		return 0, &ChainError{"quantity", fmt.Sprint(h), "a subject of a fit"}
	}
	x, n := c.nodes[h], c.numbers[h]
	t, ok := c.fits[x.fit].result.BetweenSession(x.subject)
	if !ok {
		return h, nil
	}
	x.parts = slices.DeleteFunc(slices.Clone(x.parts), func(p part) bool { return p.source == c.at[t.ID] })
	n.Terms = slices.DeleteFunc(slices.Clone(n.Terms), func(o uncertain.Term) bool { return o.ID == t.ID })
	return c.add(x, n), nil
}

// Adopt adds the groups that are not there yet.
func (c *Chain) Adopt(groups []uncertain.Group) {
	for _, g := range groups {
		known := false
		for i := range c.groups {
			known = known || c.groups[i].ID == g.ID
		}
		if !known {
			c.groups = append(c.groups, g)
		}
	}
}

func (c *Chain) noise(r *calib.Result, f *fitNode) error {
	refit, err := r.Refitter()
	if err != nil {
		return err
	}
	terms, n := refit.Noise()
	f.readings = n
	for _, t := range terms {
		p, err := c.part(t.Term)
		if err != nil {
			return err
		}
		f.noise = append(f.noise, noisePart{t.Reading, p})
	}
	return nil
}

// degrees are ν_j = 2φ_j²/Cov_jj of a group's variances, +Inf when known, and
// held at 1 or above as ν_eff is: a variance that is hardly known beside
// another (1/size² beside a constant) would otherwise have trials without bound.
// An estimate of zero has 0: it is drawn as zero.
func degrees(g uncertain.Group) []float64 {
	out := make([]float64, len(g.Variances))
	for j, v := range g.Variances {
		out[j] = math.Inf(1)
		if cov := g.Covariance[j][j]; cov > 0 {
			out[j] = 2 * v * v / cov
			if v > 0 {
				out[j] = math.Max(1, out[j])
			}
		}
	}
	return out
}
