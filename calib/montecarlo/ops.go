package montecarlo

import (
	"math"

	"deltamoor/calib"
)

// lanes is how many trials an operation does at once: enough that choosing the
// operation costs nothing beside them, few enough that what they use stays in
// the fastest cache. It decides which random number goes where, so a change
// moves every answer.
const lanes = 128

// An op does one step of the plan for the machine's trials.
type op interface{ run(m *machine) error }

// A machine runs a plan for some trials at a time. It belongs to one goroutine.
type machine struct {
	stream
	n       int // trials at hand, at most lanes
	slots   [][]float64
	scratch []float64
	refits  []*refitState // of the fits that have no line form
}

// normals fills dst with standard normal numbers.
func (s *stream) normals(dst []float64) {
	counter := s.counter
	for j := range dst {
		counter += golden
		bits := mix(counter)
		i := uint8(bits)
		x := float64(float64(int64(bits)>>11) * zigguratSteps[i])
		if !(math.Abs(x) < zigguratEdges[int(i)+1]) {
			s.counter = counter
			x = s.edge(i, x)
			counter = s.counter
		}
		dst[j] = x
	}
	s.counter = counter
}

// drawOp draws a source that is used in several places.
type drawOp struct {
	dst int
	of  Distribution
}

func (o *drawOp) run(m *machine) error {
	dst := m.slots[o.dst][:m.n]
	switch o.of {
	case Rectangular:
		for j := range dst {
			dst[j] = float64((2*m.uniform() - 1) * math.Sqrt(3))
		}
	case Triangular:
		for j := range dst {
			dst[j] = float64((m.uniform() - m.uniform()) * math.Sqrt(6))
		}
	default:
		m.normals(dst)
	}
	return nil
}

// varianceOp draws φ over φ̂ of one variance of a group, ν/χ²_ν.
type varianceOp struct {
	dst int
	nu  float64
}

func (o *varianceOp) run(m *machine) error {
	dst := m.slots[o.dst][:m.n]
	for j := range dst {
		if o.nu > 0 {
			dst[j] = o.nu / m.chiSquare(o.nu)
		} else {
			dst[j] = 0
		}
	}
	return nil
}

// scaleOp is √Σ share·variance: u of a source of a group over its stored u.
type scaleOp struct {
	dst       int
	variances []int // slots; −1 for a known one
	shares    []float64
}

func (o *scaleOp) run(m *machine) error {
	dst := m.slots[o.dst][:m.n]
	clear(dst)
	for k, share := range o.shares {
		if o.variances[k] < 0 {
			for j := range dst {
				dst[j] += share
			}
			continue
		}
		x := m.slots[o.variances[k]][:len(dst)]
		for j := range dst {
			dst[j] += float64(share * x[j])
		}
	}
	for j := range dst {
		dst[j] = math.Sqrt(math.Max(0, dst[j]))
	}
	return nil
}

// A weight is a slot's factor, times the slot scale where that is not −1.
type weight struct {
	slot, scale int
	factor      float64
}

// sumOp is constant + Σ weights·slots + Σ own normals, each own one drawn here
// and used nowhere else (its slot is −1).
type sumOp struct {
	dst      int
	constant float64
	of       []weight
}

func (o *sumOp) run(m *machine) error {
	dst := m.slots[o.dst][:m.n]
	for j := range dst {
		dst[j] = o.constant
	}
	for _, w := range o.of {
		x := m.scratch[:len(dst)]
		if w.slot < 0 {
			m.normals(x)
		} else {
			x = m.slots[w.slot][:len(dst)]
		}
		if w.scale < 0 {
			for j := range dst {
				dst[j] += float64(w.factor * x[j])
			}
			continue
		}
		s := m.slots[w.scale][:len(dst)]
		for j := range dst {
			dst[j] += float64(float64(w.factor*s[j]) * x[j])
		}
	}
	return nil
}

// pairOp is the line through two points, which determines it: a subject is
// y₁ + (R − x₁)(y₂ − y₁)/(x₂ − x₁).
type pairOp struct {
	x, y   [2]int
	centre float64
	from   []int // R of each subject
	dst    []int
}

func (o *pairOp) run(m *machine) error {
	n := m.n
	x1, x2 := m.slots[o.x[0]][:n], m.slots[o.x[1]][:n]
	y1, y2 := m.slots[o.y[0]][:n], m.slots[o.y[1]][:n]
	inverse := m.scratch[:n]
	for j := range inverse {
		inverse[j] = (y2[j] - y1[j]) / (x2[j] - x1[j])
	}
	for k, dst := range o.dst {
		r, out := m.slots[o.from[k]][:n], m.slots[dst][:n]
		for j := range out {
			out[j] = float64((r[j]-x1[j])*inverse[j]) + (y1[j] + o.centre)
		}
	}
	return nil
}

// ratioOp is one anchor in the ratio form: x = (y − g)/(1 + g/1000) gives the
// working gas' delta g, and a subject is R·(1 + g/1000) + g.
type ratioOp struct {
	x, y   int
	centre float64
	from   []int
	dst    []int
}

func (o *ratioOp) run(m *machine) error {
	n := m.n
	x, y := m.slots[o.x][:n], m.slots[o.y][:n]
	g := m.scratch[:n]
	for j := range g {
		g[j] = (y[j] - x[j]) / (1 + x[j]/1000)
	}
	for k, dst := range o.dst {
		r, out := m.slots[o.from[k]][:n], m.slots[dst][:n]
		for j := range out {
			out[j] = float64(r[j]*(1+g[j]/1000)) + (g[j] + o.centre)
		}
	}
	return nil
}

// lineOp is the line through three or more points with errors in both
// coordinates. Noise and value covariance are diagonal together in the
// coordinates B: with B·Noise·Bᵀ = I and B·V·Bᵀ = Λ, χ² = Σ w_k(x_k − α·one_k −
// β·y_k)², w_k = 1/(1 + β²λ_k), whose minimum Newton's method finds from the
// fit's own α and β.
type lineOp struct {
	x, y        []int // in the coordinates B
	one, lambda []float64
	alpha, beta float64
	terms       [][]float64 // of each subject in the coordinates B; nil for none
	centre      float64
	from, dst   []int
}

func (o *lineOp) run(m *machine) error {
	var x, y, rest [calib.MaxLinePoints]float64
	p := len(o.x)
	for j := 0; j < m.n; j++ {
		for k := range o.x {
			x[k], y[k] = m.slots[o.x[k]][j], m.slots[o.y[k]][j]
		}
		alpha, beta, ok := o.solve(x[:p], y[:p], rest[:p])
		if !ok {
			alpha, beta = o.search(x[:p], y[:p], rest[:p])
		}
		inverse := 1 / beta
		for s, dst := range o.dst {
			r := m.slots[o.from[s]][j] - alpha
			if o.terms != nil {
				for k, h := range o.terms[s] {
					r -= float64(h * rest[k])
				}
			}
			m.slots[dst][j] = float64(r*inverse) + o.centre
		}
	}
	return nil
}

const (
	lineSteps   = 30
	lineSettled = 1e-9 // of a step relative to the slope: the next is lost in rounding
)

// solve minimises χ², and leaves w_k·residual_k in rest.
func (o *lineOp) solve(x, y, rest []float64) (alpha, beta float64, ok bool) {
	alpha, beta = o.alpha, o.beta
	lambda, one := o.lambda[:len(x)], o.one[:len(x)]
	y, rest = y[:len(x)], rest[:len(x)]
	for range lineSteps {
		// Half the gradient and half the Hessian of χ².
		var ga, gb, haa, hab, hbb, gauss float64
		for k, xk := range x {
			e, l, yk := one[k], lambda[k], y[k]
			r := xk - float64(alpha*e) - float64(beta*yk)
			w := 1 / (1 + float64(float64(beta*beta)*l))
			we, wy, wr := float64(w*e), float64(w*yk), float64(w*r)
			bl := float64(beta * l)
			q := float64(bl * w)  // βλw
			qr := float64(q * wr) // βλw²r
			ga -= float64(we * r)
			gb -= float64(qr*r) + float64(wy*r)
			haa += float64(we * e)
			hab += float64(2*float64(qr*e)) + float64(we*yk)
			hbb += float64(wy*yk) + float64(4*float64(qr*yk)) + float64(float64(wr*r)*(float64(4*float64(q*q))-float64(l*w)))
			gauss += float64(wy * yk)
		}
		// The intercept is taken out; then one step along the slope.
		curvature := hbb - float64(hab*hab)/haa
		if !(curvature > 0) {
			curvature = gauss
		}
		step := -(gb - float64(hab*ga)/haa) / curvature
		if most := 0.5 * math.Abs(beta); math.Abs(step) > most {
			step = math.Copysign(most, step)
		}
		alpha -= (ga + float64(hab*step)) / haa
		beta += step
		if math.Abs(step) <= lineSettled*math.Abs(beta) {
			for k, xk := range x {
				w := 1 / (1 + float64(float64(beta*beta)*lambda[k]))
				rest[k] = float64(w * (xk - float64(alpha*one[k]) - float64(beta*y[k])))
			}
			return alpha, beta, true
		}
	}
	return 0, 0, false
}

// profile is χ² at a slope with the best intercept, which it returns too.
func (o *lineOp) profile(x, y []float64, beta float64) (chi2, alpha float64) {
	var above, below float64
	for k, xk := range x {
		we := o.one[k] / (1 + float64(float64(beta*beta)*o.lambda[k]))
		above += float64(we * (xk - float64(beta*y[k])))
		below += float64(we * o.one[k])
	}
	alpha = above / below
	for k, xk := range x {
		r := xk - float64(alpha*o.one[k]) - float64(beta*y[k])
		chi2 += float64(r*r) / (1 + float64(float64(beta*beta)*o.lambda[k]))
	}
	return chi2, alpha
}

// search finds the lowest χ² of all slopes, for the rare trial whose points are
// so far from a line that Newton's method does not settle: slopes from −∞ to ∞
// are b·t/(1 − t²) with b the fit's own and −1 < t < 1; the best of a row of t
// is bracketed, and the bracket divided until it is lost in rounding.
func (o *lineOp) search(x, y, rest []float64) (alpha, beta float64) {
	const row = 400
	slope := func(t float64) float64 { return float64(o.beta*t) / (1 - float64(t*t)) }
	best, at := math.Inf(1), 0
	for i := 1 - row; i < row; i++ {
		if chi2, _ := o.profile(x, y, slope(float64(i)/row)); chi2 < best {
			best, at = chi2, i
		}
	}
	low, high := float64(at-1)/row, float64(at+1)/row
	low, high = math.Max(low, -1+1e-9), math.Min(high, 1-1e-9)
	for range 60 {
		third := (high - low) / 3
		a, _ := o.profile(x, y, slope(low+third))
		b, _ := o.profile(x, y, slope(high-third))
		if a <= b {
			high -= third
		} else {
			low += third
		}
	}
	beta = slope((low + high) / 2)
	_, alpha = o.profile(x, y, beta)
	for k, xk := range x {
		r := xk - float64(alpha*o.one[k]) - float64(beta*y[k])
		rest[k] = r / (1 + float64(float64(beta*beta)*o.lambda[k]))
	}
	return alpha, beta
}

// refitOp solves a fit again by the engine itself, one trial after the other.
type refitOp struct {
	fit                  int // in machine.refits
	readings             int
	noise                []readingWeight
	anchors, corrections []int // slots of their deviations
	subjects, dst        []int
}

type readingWeight struct {
	reading int
	weight
}

type refitState struct {
	*calib.Refitter
	noise, anchors, corrections []float64
}

func (o *refitOp) run(m *machine) error {
	f := m.refits[o.fit]
	for j := 0; j < m.n; j++ {
		clear(f.noise)
		for k := range o.noise {
			w := &o.noise[k]
			factor := w.factor
			if w.scale >= 0 {
				factor = float64(factor * m.slots[w.scale][j])
			}
			f.noise[w.reading] += float64(factor * m.slots[w.slot][j])
		}
		for k, slot := range o.anchors {
			f.anchors[k] = m.slots[slot][j]
		}
		for k, slot := range o.corrections {
			f.corrections[k] = m.slots[slot][j]
		}
		if err := f.Solve(f.noise, f.anchors, f.corrections); err != nil {
			return err
		}
		for k, s := range o.subjects {
			m.slots[o.dst[k]][j] = f.Value(s)
		}
	}
	return nil
}
