package calib

import (
	"math"

	"deltamoor/calib/adjust"
)

// A problem is one adjustment: which readings are fitted to which classes with
// which terms. Leaving an anchor out makes another problem of the same input.
type problem struct {
	in *input
	// fitted lists positions in in.readings; class is each one's position in classes.
	fitted, class []int
	classes       []class
	time          timeTerm
	size          sizeTerm
	ratio         bool
	// anchors lists the positions in in.anchors that take part, values their
	// values less y0, vy their covariance.
	anchors []int
	values  []float64
	vy      *adjust.Matrix // nil when all are exact
	vyLow   *adjust.Matrix
	y0, r0  float64
	layout  layout
	names   []string // of the columns of the reduction, for refusals
	// extra is one more global column, by position in in.readings, for testing
	// a term that the model does not have.
	extra []float64
}

// A class is one material among the fitted readings.
type class struct {
	name   string
	anchor int // position in problem.anchors, −1 for a monitor
}

// A whitening applies L⁻¹ and L⁻ᵀ for V_r = L Lᵀ with independent preparations:
// single readings by their own 1/u, readings of one preparation together.
type whitening struct {
	single []float64 // 1/u, 0 for members of a group
	groups []preparationGroup
}

type preparationGroup struct {
	rows []int
	l    *adjust.Matrix
}

func (w *whitening) apply(v []float64) {
	for i, s := range w.single {
		if s != 0 {
			v[i] = float64(v[i] * s)
		}
	}
	for _, g := range w.groups {
		g.on(v, adjust.SolveLower)
	}
}

func (w *whitening) applyTransposed(v []float64) {
	for i, s := range w.single {
		if s != 0 {
			v[i] = float64(v[i] * s)
		}
	}
	for _, g := range w.groups {
		g.on(v, adjust.SolveLowerTransposed)
	}
}

func (g *preparationGroup) on(v []float64, solve func(*adjust.Matrix, []float64)) {
	var small [16]float64
	b := small[:0]
	for _, i := range g.rows {
		b = append(b, v[i])
	}
	solve(g.l, b)
	for k, i := range g.rows {
		v[i] = b[k]
	}
}

// A reduction is the fitted readings as a few rows that say everything the
// model can see: for each material its weighted mean (for the blank also its
// contrast with 1/s), and the pooled contrasts within materials with each
// global column. The whitened readings are an orthonormal basis times these
// rows, plus a remainder that no parameter reaches:
//
//	L⁻¹(r − r0) = Qᵀz + tail
//
// The rows without a material are the fit with every level free, so that its
// residual is the tail and its degrees of freedom n − rows.
type reduction struct {
	n     int
	model *rows
	z     []float64
	// Q: own holds each reading's entry in its class' row, contrast in its
	// class' blank row, pooled one row for each global column.
	own, contrast      []float64
	rowOf, contrastRow []int // of each class; −1 for none
	pooled             *adjust.Matrix
	firstPooled        int
	tail               []float64
	tailSquares        float64
	white              *whitening
	// noise is set, and Q is the identity, for a problem that is not reduced:
	// with a full covariance, exact readings or a cross-covariance.
	noise, cross *adjust.Matrix
}

// estimable is the part of a column, after every level is taken out, below
// which only assigned values would identify its term.
const estimable = 1e-9

// reduce builds the reduction for the given whitening.
func (p *problem) reduce(w *whitening) (*reduction, error) {
	n := len(p.fitted)
	r := &reduction{n: n, white: w, rowOf: make([]int, len(p.classes)), contrastRow: make([]int, len(p.classes))}
	buffer := make([]float64, n*(4+p.layout.globals+2))
	take := func() []float64 {
		b := buffer[:n:n]
		buffer = buffer[n:]
		return b
	}
	r.own, r.contrast, r.tail = take(), take(), take()
	columns := p.layout.globals
	if p.layout.memory >= 0 {
		columns++
	}
	r.pooled = &adjust.Matrix{Rows: columns, Cols: n, Data: make([]float64, columns*n)}
	lengths, contrasts := p.classRows(r, take())
	d := r.place(p, contrasts, columns)
	r.model = p.newRows(d)
	p.fillClassRows(r, lengths, contrasts)
	if err := p.poolColumns(r); err != nil {
		return nil, err
	}
	for j, i := range p.fitted {
		r.tail[j] = p.in.readings[i].raw - p.r0
	}
	w.apply(r.tail)
	r.z = make([]float64, d)
	r.project(p, r.tail, r.z)
	r.tailSquares = adjust.Dot(r.tail, r.tail)
	return r, nil
}

// classContrast is a class' blank contrast: the projection of 1/s on its mean
// row and what is left.
type classContrast struct{ mean, length float64 }

// classRows fills own and contrast and returns the lengths of the indicator of
// each class, and of its blank contrast.
func (p *problem) classRows(r *reduction, v []float64) ([]float64, []classContrast) {
	lengths := make([]float64, len(p.classes))
	for j := range r.own {
		r.own[j] = 1
	}
	r.white.apply(r.own) // preparations never span classes
	for j, k := range p.class {
		lengths[k] += float64(r.own[j] * r.own[j])
	}
	for k := range lengths {
		lengths[k] = math.Sqrt(lengths[k])
	}
	for j, k := range p.class {
		r.own[j] /= lengths[k]
	}
	if p.size.kind != SizeBlank {
		return lengths, nil
	}
	contrasts := make([]classContrast, len(p.classes))
	for j, i := range p.fitted {
		v[j] = p.size.value(p.in.readings[i].size)
	}
	r.white.apply(v)
	before := p.sumByClass(v, v)
	for pass := 0; pass < 2; pass++ {
		means := p.sumByClass(r.own, v)
		for j, k := range p.class {
			v[j] -= float64(means[k] * r.own[j])
		}
		for k, m := range means {
			contrasts[k].mean += m
		}
	}
	after := p.sumByClass(v, v)
	for k := range contrasts {
		if after[k] > estimable*estimable*before[k] {
			contrasts[k].length = math.Sqrt(after[k])
		}
	}
	for j, k := range p.class {
		if l := contrasts[k].length; l > 0 {
			r.contrast[j] = v[j] / l
		}
	}
	return lengths, contrasts
}

func (p *problem) sumByClass(a, b []float64) []float64 {
	out := make([]float64, len(p.classes))
	for j, k := range p.class {
		out[k] += float64(a[j] * b[j])
	}
	return out
}

// place gives each row its position: those with a latent value first.
func (r *reduction) place(p *problem, contrasts []classContrast, columns int) int {
	d := 0
	for _, latent := range []bool{true, false} {
		for k, c := range p.classes {
			if (c.anchor >= 0) == latent {
				r.rowOf[k] = d
				d++
			}
		}
		for k, c := range p.classes {
			if (c.anchor >= 0) == latent {
				r.contrastRow[k] = -1
				if contrasts != nil && contrasts[k].length > 0 {
					r.contrastRow[k] = d
					d++
				}
			}
		}
	}
	r.firstPooled = d
	return d + columns
}

func (p *problem) newRows(d int) *rows {
	m := &rows{layout: p.layout, class: make([]int, d), latent: make([]int, d), c: make([]float64, d), h: make([]float64, d),
		global: adjust.NewMatrix(p.layout.globals, d)}
	if p.layout.memory >= 0 {
		m.previous = make([]float64, d)
	}
	for i := range m.class {
		m.class[i], m.latent[i] = -1, -1
	}
	return m
}

func (p *problem) fillClassRows(r *reduction, lengths []float64, contrasts []classContrast) {
	for k, c := range p.classes {
		i := r.rowOf[k]
		r.model.class[i], r.model.latent[i], r.model.c[i] = k, c.anchor, lengths[k]
		if contrasts != nil {
			r.model.h[i] = contrasts[k].mean
		}
		if i := r.contrastRow[k]; i >= 0 {
			r.model.class[i], r.model.latent[i], r.model.h[i] = k, c.anchor, contrasts[k].length
		}
	}
}

// poolColumns takes every level out of the global columns and makes what is
// left orthonormal.
func (p *problem) poolColumns(r *reduction) error {
	coefficients := make([]float64, len(r.model.class))
	basis := make([]float64, p.layout.globals+1)
	for j, i := range p.fitted {
		p.columns(&p.in.readings[i], basis)
		for t := 0; t < r.pooled.Rows; t++ {
			r.pooled.Set(t, j, basis[t])
		}
	}
	for t := 0; t < r.pooled.Rows; t++ {
		v := r.pooled.Row(t)
		r.white.apply(v)
		before := adjust.Norm(v)
		for i := range coefficients {
			coefficients[i] = 0
		}
		r.projectUpTo(p, v, coefficients, t)
		length := adjust.Norm(v)
		if !(length > estimable*before) {
			return &NotEstimableError{Refusal{Place: "model." + termOf(p.names[t]), Found: p.names[t] + " not determined by the differences within materials", Expected: "repeated readings of one material that differ in it"}}
		}
		for i := range v {
			v[i] /= length
		}
		coefficients[r.firstPooled+t] = length
		if t < p.layout.globals {
			copy(r.model.global.Row(t), coefficients)
		} else {
			copy(r.model.previous, coefficients)
		}
	}
	return nil
}

// project takes the reduction's rows out of v and adds v's coefficients by
// them to z.
func (r *reduction) project(p *problem, v, z []float64) { r.projectUpTo(p, v, z, r.pooled.Rows) }

// projectUpTo uses the first pooled rows only. Twice is enough for
// orthogonality to rounding (Giraud et al. 2005, doi:10.1007/s00211-005-0615-4).
func (r *reduction) projectUpTo(p *problem, v, z []float64, pooled int) {
	sums := make([]float64, 2*len(p.classes))
	for pass := 0; pass < 2; pass++ {
		means, contrasts := sums[:len(p.classes)], sums[len(p.classes):]
		clear(sums)
		for j, k := range p.class {
			means[k] += float64(r.own[j] * v[j])
			contrasts[k] += float64(r.contrast[j] * v[j])
		}
		for j, k := range p.class {
			v[j] -= float64(means[k]*r.own[j]) + float64(contrasts[k]*r.contrast[j])
		}
		for k := range p.classes {
			z[r.rowOf[k]] += means[k]
			if i := r.contrastRow[k]; i >= 0 {
				z[i] += contrasts[k]
			}
		}
		for t := 0; t < pooled; t++ {
			q := r.pooled.Row(t)
			c := adjust.Dot(q, v)
			adjust.AddScaled(v, -c, q)
			z[r.firstPooled+t] += c
		}
	}
}

// columns writes the global columns of a reading, and the raw delta before it
// less r0 after them.
func (p *problem) columns(rd *reading, out []float64) {
	t := 0
	if p.size.kind != SizeNone && p.size.kind != SizeBlank {
		out[t] = p.size.value(rd.size)
		t++
	}
	if p.time.columns() > 0 {
		p.time.basis(rd.time, out[t:])
	}
	if p.extra != nil {
		out[p.layout.globals-1] = p.extra[rd.position]
	}
	if p.layout.memory >= 0 {
		out[p.layout.globals] = rd.previousRaw - p.r0
	}
}

// raw builds the rows without reduction, for the covariances that do not allow it.
func (p *problem) raw() *reduction {
	n := len(p.fitted)
	r := &reduction{n: n, model: p.newRows(n), z: make([]float64, n)}
	basis := make([]float64, p.layout.globals+1)
	for j, i := range p.fitted {
		rd := &p.in.readings[i]
		k := p.class[j]
		r.model.class[j], r.model.latent[j], r.model.c[j] = k, p.classes[k].anchor, 1
		if p.size.kind == SizeBlank {
			r.model.h[j] = p.size.value(rd.size)
		}
		p.columns(rd, basis)
		for t := 0; t < p.layout.globals; t++ {
			r.model.global.Set(t, j, basis[t])
		}
		if p.layout.memory >= 0 {
			r.model.previous[j] = basis[p.layout.globals]
		}
		r.z[j] = rd.raw - p.r0
	}
	return r
}

// coordinates writes the rows' entries of whitened reading j into v (sparse:
// zero elsewhere).
func (r *reduction) coordinates(p *problem, j int, scale float64, v []float64) {
	k := p.class[j]
	v[r.rowOf[k]] += float64(scale * r.own[j])
	if i := r.contrastRow[k]; i >= 0 {
		v[i] += float64(scale * r.contrast[j])
	}
	for t := 0; t < r.pooled.Rows; t++ {
		v[r.firstPooled+t] += float64(scale * r.pooled.At(t, j))
	}
}

// spread writes Qᵀ-weighted row into out: Σ_rows row·Q, one entry for each
// fitted reading, still whitened.
func (r *reduction) spread(p *problem, row, out []float64) {
	for j, k := range p.class {
		out[j] = float64(row[r.rowOf[k]] * r.own[j])
		if i := r.contrastRow[k]; i >= 0 {
			out[j] += float64(row[i] * r.contrast[j])
		}
	}
	for t := 0; t < r.pooled.Rows; t++ {
		adjust.AddScaled(out, row[r.firstPooled+t], r.pooled.Row(t))
	}
}

// freeDF is the degrees of freedom that are left with every level free.
func (r *reduction) freeDF() int { return r.n - len(r.z) }
