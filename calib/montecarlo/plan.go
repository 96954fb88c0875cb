package montecarlo

import (
	"fmt"
	"math"
	"slices"
)

// A plan is a chain made ready for many trials: a flat list of operations on
// slots of numbers, without what the wanted quantities do not rest on.
//
// Sources that reach everything through one quantity or one fit, are normal and
// scale with the same variances are drawn together: what they add to the
// quantity, or to the points and subjects of the fit's line form, is jointly
// normal with a covariance that does not change from trial to trial, so that as
// many draws as there are points and subjects have exactly the distribution
// that one draw for each reading has.
type plan struct {
	c     *Chain
	ops   []op
	slots int
	free  []int
	fixed map[int]float64 // slots that hold a constant
	out   []int           // slots of the wanted quantities
	// refits lists the fits that are solved by the engine.
	refits []int

	how     planKind
	live    []bool
	wanted  [][]int // of each fit, the subjects
	uses    []int   // of each source, the quantities and fits that it enters
	handles []int   // slot of each quantity, −1 before it has one
	drawn   []int   // slot of each source, −1 before
	phi     [][]int // slot of each group's variances, −1 before or known
	scales  map[string]int
	solved  []bool
}

// A planKind chooses between ways to the same answer, for tests.
type planKind struct {
	// apart draws every source by itself; engine solves every fit by the engine.
	apart, engine bool
}

func (c *Chain) compile(of []Handle, how planKind) (*plan, error) {
	p := &plan{c: c, fixed: map[int]float64{}, how: how, scales: map[string]int{},
		live: make([]bool, len(c.nodes)), wanted: make([][]int, len(c.fits)), uses: make([]int, len(c.distributions)),
		handles: make([]int, len(c.nodes)), drawn: make([]int, len(c.distributions)), solved: make([]bool, len(c.fits))}
	for i := range p.handles {
		p.handles[i] = -1
	}
	for i := range p.drawn {
		p.drawn[i] = -1
	}
	for _, g := range c.groups {
		slots := make([]int, len(g.Variances))
		for j := range slots {
			slots[j] = -1
		}
		p.phi = append(p.phi, slots)
	}
	p.mark(of)
	for h := range c.nodes {
		if !p.live[h] {
			continue
		}
		if err := p.node(h); err != nil {
			return nil, err
		}
	}
	for _, h := range of {
		p.out = append(p.out, p.handles[h])
	}
	return p, nil
}

// mark finds what the wanted quantities rest on, and counts uses of sources.
func (p *plan) mark(of []Handle) {
	c := p.c
	for _, h := range of {
		p.live[h] = true
	}
	fits := make([]bool, len(c.fits))
	for h := len(c.nodes) - 1; h >= 0; h-- { // quantities rest on earlier ones only
		if !p.live[h] {
			continue
		}
		x := &c.nodes[h]
		for _, o := range x.of {
			p.live[o] = true
		}
		if x.fit < 0 {
			continue
		}
		fits[x.fit] = true
		if !slices.Contains(p.wanted[x.fit], x.subject) {
			p.wanted[x.fit] = append(p.wanted[x.fit], x.subject)
		}
		for _, o := range c.fits[x.fit].anchors {
			p.live[o] = true
		}
		for _, o := range c.fits[x.fit].corrections {
			p.live[o] = true
		}
	}
	for h, live := range p.live {
		if live {
			p.count(c.nodes[h].parts)
		}
	}
	for f, live := range fits {
		if !live {
			continue
		}
		first := map[int]*part{}
		for k := range c.fits[f].noise {
			x := &c.fits[f].noise[k].part
			switch y := first[x.source]; {
			case y == nil:
				first[x.source] = x
				p.uses[x.source]++
			case y.scale.group != x.scale.group || !slices.Equal(y.scale.per, x.scale.per):
				p.uses[x.source]++ // not of one scale: apart
			}
		}
	}
}

func (p *plan) count(parts []part) {
	for i := range parts {
		p.uses[parts[i].source]++
	}
}

// slot takes a free slot.
func (p *plan) slot() int {
	if n := len(p.free); n > 0 {
		s := p.free[n-1]
		p.free = p.free[:n-1]
		return s
	}
	p.slots++
	return p.slots - 1
}

// constant is a slot that always holds v.
func (p *plan) constant(v float64) int {
	p.slots++
	p.fixed[p.slots-1] = v
	return p.slots - 1
}

func (p *plan) add(o op) { p.ops = append(p.ops, o) }

// draw is the slot of a source's draw.
func (p *plan) draw(source int) int {
	if p.drawn[source] < 0 {
		p.drawn[source] = p.slot()
		p.add(&drawOp{dst: p.drawn[source], of: p.c.distributions[source]})
	}
	return p.drawn[source]
}

// size is a part's stored u, and the slot of what scales it (−1 for nothing).
func (p *plan) size(x *part) (u float64, scale int) {
	g := x.scale.group
	if g < 0 {
		return x.scale.u, -1
	}
	var variance float64
	for _, v := range x.scale.per {
		variance += v
	}
	if !(variance > 0) {
		return 0, -1
	}
	shares := make([]float64, len(x.scale.per))
	key := fmt.Sprint(g)
	for j, v := range x.scale.per {
		shares[j] = v / variance
		key += fmt.Sprintf(" %x", math.Float64bits(shares[j]))
	}
	if s, ok := p.scales[key]; ok {
		return math.Sqrt(variance), s
	}
	o := &scaleOp{shares: shares, variances: make([]int, len(shares))}
	nu, random := degrees(p.c.groups[g]), false
	for j := range shares {
		o.variances[j] = -1
		if shares[j] == 0 || math.IsInf(nu[j], 1) {
			continue
		}
		random = true
		if p.phi[g][j] < 0 {
			p.phi[g][j] = p.slot()
			p.add(&varianceOp{dst: p.phi[g][j], nu: nu[j]})
		}
		o.variances[j] = p.phi[g][j]
	}
	s := -1
	if random {
		o.dst = p.slot()
		s = o.dst
		p.add(o)
	}
	p.scales[key] = s
	return math.Sqrt(variance), s
}

// together says that a source may be drawn with others of its kind.
func (p *plan) together(source int) bool {
	return !p.how.apart && p.uses[source] == 1 && p.c.distributions[source] == Normal
}

// node gives a quantity its slot.
func (p *plan) node(h int) error {
	x := &p.c.nodes[h]
	o := &sumOp{constant: x.constant}
	if x.fit >= 0 {
		if err := p.fit(x.fit); err != nil {
			return err
		}
		if len(x.parts) == 0 {
			return nil // the fit's own slot
		}
		o.of = append(o.of, weight{p.handles[h], -1, 1})
	}
	for k, of := range x.of {
		o.of = append(o.of, weight{p.handles[of], -1, x.coefficients[k]})
	}
	own := map[int]int{} // by scale, the weight in o.of
	for i := range x.parts {
		u, scale := p.size(&x.parts[i])
		factor := float64(x.parts[i].factor * u)
		source := x.parts[i].source
		if factor == 0 {
			continue
		}
		if !p.together(source) {
			o.of = append(o.of, weight{p.draw(source), scale, factor})
			continue
		}
		if at, ok := own[scale]; ok {
			w := &o.of[at]
			w.factor = math.Sqrt(float64(w.factor*w.factor) + float64(factor*factor))
			continue
		}
		own[scale] = len(o.of)
		o.of = append(o.of, weight{-1, scale, factor})
	}
	if len(o.of) == 0 {
		p.handles[h] = p.constant(x.constant)
		return nil
	}
	o.dst = p.slot()
	p.handles[h] = o.dst
	p.add(o)
	return nil
}

// fit solves a fit for its wanted subjects, whose handles get their slots.
func (p *plan) fit(i int) error {
	if p.solved[i] {
		return nil
	}
	p.solved[i] = true
	f := &p.c.fits[i]
	dst := make([]int, len(p.wanted[i]))
	for k := range dst {
		dst[k] = p.slot()
	}
	for h := range p.c.nodes {
		if x := &p.c.nodes[h]; x.fit == i && p.live[h] {
			for k, s := range p.wanted[i] {
				if s == x.subject {
					p.handles[h] = dst[k]
				}
			}
		}
	}
	refit, err := f.result.Refitter()
	if err != nil {
		return err
	}
	live := refit.Live(p.wanted[i])
	if form, ok := refit.Line(); ok && !p.how.engine {
		if done, err := p.line(f, form, p.wanted[i], dst, live); done || err != nil {
			return err
		}
	}
	o := &refitOp{fit: len(p.refits), readings: f.readings, subjects: p.wanted[i], dst: dst}
	p.refits = append(p.refits, i)
	var temporary []int
	for k := range f.noise {
		n := &f.noise[k]
		if !live[n.reading] {
			continue
		}
		u, scale := p.size(&n.part)
		if factor := float64(n.factor * u); factor != 0 {
			before := p.drawn[n.source] >= 0
			o.noise = append(o.noise, readingWeight{n.reading, weight{p.draw(n.source), scale, factor}})
			if !before && p.uses[n.source] == 1 {
				temporary = append(temporary, p.drawn[n.source])
			}
		}
	}
	deviation := func(h Handle, centre float64) int {
		d := &sumOp{dst: p.slot(), constant: -centre, of: []weight{{p.handles[h], -1, 1}}}
		p.add(d)
		temporary = append(temporary, d.dst)
		return d.dst
	}
	for k, h := range f.anchors {
		o.anchors = append(o.anchors, deviation(h, f.centres[k]))
	}
	for k, h := range f.corrections {
		o.corrections = append(o.corrections, deviation(h, f.inputs[k]))
	}
	p.add(o)
	p.free = append(p.free, temporary...)
	return nil
}

// machine makes the buffers of one goroutine.
func (p *plan) machine() (*machine, error) {
	data := make([]float64, (p.slots+1)*lanes)
	m := &machine{scratch: data[p.slots*lanes:]}
	for s := 0; s < p.slots; s++ {
		m.slots = append(m.slots, data[s*lanes:(s+1)*lanes:(s+1)*lanes])
	}
	for s, v := range p.fixed {
		for j := range m.slots[s] {
			m.slots[s][j] = v
		}
	}
	for _, i := range p.refits {
		f := &p.c.fits[i]
		r, err := f.result.Refitter()
		if err != nil {
			return nil, err
		}
		m.refits = append(m.refits, &refitState{r, make([]float64, f.readings), make([]float64, len(f.anchors)), make([]float64, len(f.corrections))})
	}
	return m, nil
}

// run evaluates n ≤ lanes trials.
func (p *plan) run(m *machine, n int) error {
	m.n = n
	for _, o := range p.ops {
		if err := o.run(m); err != nil {
			return err
		}
	}
	return nil
}
