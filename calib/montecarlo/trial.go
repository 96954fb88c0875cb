package montecarlo

import (
	"math"

	"deltamoor/calib"
)

// A trial holds the buffers of one goroutine.
type trial struct {
	c      *Chain
	draws  []float64
	groups [][]float64 // for each group, φ drawn over φ̂ of each variance
	nu     [][]float64
	values []float64
	refits []*calib.Refitter
	solved []bool
	noise  [][]float64
	moved  [][2][]float64 // deviations of anchors and corrections
}

func (c *Chain) newTrial() (*trial, error) {
	t := &trial{c: c, draws: make([]float64, len(c.distributions)), values: make([]float64, len(c.nodes)), solved: make([]bool, len(c.fits))}
	for _, g := range c.groups {
		t.nu = append(t.nu, degrees(g))
		t.groups = append(t.groups, make([]float64, len(g.Variances)))
	}
	for i := range c.fits {
		f := &c.fits[i]
		r, err := f.result.Refitter()
		if err != nil {
			return nil, err
		}
		t.refits = append(t.refits, r)
		t.noise = append(t.noise, make([]float64, f.readings))
		t.moved = append(t.moved, [2][]float64{make([]float64, len(f.anchors)), make([]float64, len(f.corrections))})
	}
	return t, nil
}

// run draws every source once and evaluates every quantity.
func (t *trial) run(s *stream) error {
	c := t.c
	for i, d := range c.distributions {
		t.draws[i] = draw(s, d)
	}
	for g, nu := range t.nu {
		for j, v := range nu {
			switch {
			case math.IsInf(v, 1):
				t.groups[g][j] = 1
			case v > 0:
				t.groups[g][j] = v / s.chiSquare(v)
			default:
				t.groups[g][j] = 0
			}
		}
	}
	clear(t.solved)
	for h := range c.nodes {
		x := &c.nodes[h]
		v := x.constant
		if x.fit >= 0 {
			if !t.solved[x.fit] {
				if err := t.solve(x.fit); err != nil {
					return err
				}
			}
			v = t.refits[x.fit].Value(x.subject)
		}
		for _, p := range x.parts {
			v += t.part(&p)
		}
		for k, o := range x.of {
			v += float64(x.coefficients[k] * t.values[o])
		}
		t.values[h] = v
	}
	return nil
}

// solve solves a fit with what was drawn.
func (t *trial) solve(i int) error {
	f := &t.c.fits[i]
	noise := t.noise[i]
	clear(noise)
	for k := range f.noise {
		n := &f.noise[k]
		noise[n.reading] += t.part(&n.part)
	}
	anchors, corrections := t.moved[i][0], t.moved[i][1]
	for k, h := range f.anchors {
		anchors[k] = t.values[h] - f.centres[k]
	}
	for k, h := range f.corrections {
		corrections[k] = t.values[h] - f.inputs[k]
	}
	t.solved[i] = true
	return t.refits[i].Solve(noise, anchors, corrections)
}

// part is a source's contribution in this trial.
func (t *trial) part(p *part) float64 {
	u := p.scale.u
	if g := p.scale.group; g >= 0 {
		var variance float64
		for j, v := range p.scale.per {
			variance += float64(v * t.groups[g][j])
		}
		u = math.Sqrt(math.Max(0, variance))
	}
	return float64(float64(p.factor*u) * t.draws[p.source])
}

// draw is one standardised value.
func draw(s *stream, d Distribution) float64 {
	switch d {
	case Rectangular:
		return float64((2*s.uniform() - 1) * math.Sqrt(3))
	case Triangular:
		return float64((s.uniform() - s.uniform()) * math.Sqrt(6))
	}
	return s.normal()
}
