package montecarlo

import (
	"fmt"
	"math"

	"deltamoor/calib"
	"deltamoor/calib/adjust"
)

// A target is a number that the readings of a fit give: a point or a subject.
type target struct {
	row  []float64 // over the readings
	by   []float64 // over the corrections
	rest float64
}

// line adds a fit in line form; done is false where its numbers do not allow it.
func (p *plan) line(f *fitNode, form *calib.LineForm, subjects, dst []int, live []bool) (done bool, err error) {
	k := len(form.Points)
	var b, lambda = (*adjust.Matrix)(nil), []float64(nil)
	if k > 2 {
		var ok bool
		if b, lambda, ok = diagonal(form); !ok {
			return false, nil
		}
	}
	points := make([]target, k)
	for a := range points {
		points[a] = target{form.Points[a], form.PointsBy[a], form.PointsAtRest[a]}
	}
	targets := transform(b, points)
	for _, s := range subjects {
		targets = append(targets, target{form.Subjects[s], form.SubjectsBy[s], form.SubjectsAtRest[s]})
	}
	slots, temporary, err := p.targets(f, targets, live)
	if err != nil {
		return false, err
	}
	values := make([]int, k)
	at := func(a int) weight { return weight{p.handles[f.anchors[form.Anchors[a]]], -1, 1} }
	off := func(a int) float64 { return form.Values[a] - f.centres[form.Anchors[a]] }
	for a := range values {
		o := &sumOp{}
		if b == nil {
			o.constant, o.of = off(a), []weight{at(a)}
		} else {
			for c := 0; c < k; c++ {
				w := at(c)
				w.factor = b.At(a, c)
				o.constant += float64(w.factor * off(c))
				o.of = append(o.of, w)
			}
		}
		o.dst = p.slot()
		p.add(o)
		values[a], temporary = o.dst, append(temporary, o.dst)
	}
	switch {
	case k == 1:
		p.add(&ratioOp{x: slots[0], y: values[0], centre: form.Centre, from: slots[1:], dst: dst})
	case k == 2:
		p.add(&pairOp{x: [2]int{slots[0], slots[1]}, y: [2]int{values[0], values[1]}, centre: form.Centre, from: slots[2:], dst: dst})
	default:
		o := &lineOp{x: slots[:k], y: values, lambda: lambda, alpha: form.Intercept, beta: form.Slope, centre: form.Centre, from: slots[k:], dst: dst}
		for a := 0; a < k; a++ {
			var one float64
			for c := 0; c < k; c++ {
				one += b.At(a, c)
			}
			o.one = append(o.one, one)
		}
		if form.Terms != nil {
			for _, s := range subjects {
				h := make([]float64, k)
				for a := range h {
					h[a] = adjust.Dot(form.Terms.Row(s), b.Row(a))
				}
				o.terms = append(o.terms, h)
			}
		}
		p.add(o)
	}
	p.free = append(p.free, temporary...)
	return true, nil
}

// diagonal gives B with B·Noise·Bᵀ = I and B·V·Bᵀ = Λ.
func diagonal(form *calib.LineForm) (b *adjust.Matrix, lambda []float64, ok bool) {
	k := form.Noise.Rows
	l := form.Noise.Copy()
	if adjust.Cholesky(l, k) != nil {
		return nil, nil, false
	}
	inverse := adjust.NewMatrix(k, k) // column c of L⁻¹ in row c
	for c := 0; c < k; c++ {
		inverse.Set(c, c, 1)
		adjust.SolveLower(l, inverse.Row(c))
	}
	lambda = make([]float64, k)
	b = adjust.NewMatrix(k, k)
	if form.ValueCovariance == nil {
		for a := 0; a < k; a++ {
			for c := 0; c < k; c++ {
				b.Set(a, c, inverse.At(c, a))
			}
		}
		return b, lambda, true
	}
	v := adjust.NewMatrix(k, k) // L⁻¹ V L⁻ᵀ
	for a := 0; a < k; a++ {
		for c := 0; c <= a; c++ {
			var sum float64
			for i := 0; i < k; i++ {
				sum += float64(inverse.At(i, a) * adjust.Dot(form.ValueCovariance.Row(i), column(inverse, c)))
			}
			v.Set(a, c, sum)
			v.Set(c, a, sum)
		}
	}
	q := eigen(v)
	for a := 0; a < k; a++ {
		lambda[a] = math.Max(0, v.At(a, a))
		for c := 0; c < k; c++ {
			b.Set(a, c, adjust.Dot(column(q, a), inverse.Row(c)))
		}
	}
	return b, lambda, true
}

func column(m *adjust.Matrix, k int) []float64 {
	out := make([]float64, m.Rows)
	for i := range out {
		out[i] = m.At(i, k)
	}
	return out
}

// transform is b·targets; b nil leaves them.
func transform(b *adjust.Matrix, of []target) []target {
	if b == nil {
		return of
	}
	out := make([]target, len(of))
	for a := range out {
		t := target{row: make([]float64, len(of[0].row))}
		if of[0].by != nil {
			t.by = make([]float64, len(of[0].by))
		}
		for c, x := range of {
			w := b.At(a, c)
			t.rest += float64(w * x.rest)
			adjust.AddScaled(t.row, w, x.row)
			adjust.AddScaled(t.by, w, x.by)
		}
		out[a] = t
	}
	return out
}

// A bundle is the sources of one scale that are drawn together, with what each
// target takes of each of them.
type bundle struct {
	scale int
	loads [][]float64 // of each target, by source
}

// targets makes a slot for each target: its rest, the corrections, the sources
// drawn apart, and those drawn together. What a fit sees of one source may come
// through several readings.
func (p *plan) targets(f *fitNode, targets []target, live []bool) (slots, temporary []int, err error) {
	ops := make([]*sumOp, len(targets))
	for i, t := range targets {
		ops[i] = &sumOp{dst: p.slot(), constant: t.rest}
		slots = append(slots, ops[i].dst)
		for k, c := range t.by {
			if c != 0 {
				ops[i].constant -= float64(c * f.inputs[k])
				ops[i].of = append(ops[i].of, weight{p.handles[f.corrections[k]], -1, c})
			}
		}
	}
	temporary = append(temporary, slots...)
	var bundles []*bundle
	type place struct{ source, scale int }
	at := map[place]struct {
		b     *bundle
		index int
	}{}
	for n := range f.noise {
		x := &f.noise[n]
		if !live[x.reading] {
			continue
		}
		u, scale := p.size(&x.part)
		factor := float64(x.factor * u)
		if factor == 0 {
			continue
		}
		if !p.together(x.source) {
			before := p.drawn[x.source] >= 0
			slot := p.draw(x.source)
			if !before && p.uses[x.source] == 1 {
				temporary = append(temporary, slot)
			}
			for i, t := range targets {
				if c := float64(t.row[x.reading] * factor); c != 0 {
					ops[i].of = append(ops[i].of, weight{slot, scale, c})
				}
			}
			continue
		}
		entry, ok := at[place{x.source, scale}]
		if !ok {
			for _, b := range bundles {
				if b.scale == scale {
					entry.b = b
				}
			}
			if entry.b == nil {
				entry.b = &bundle{scale: scale, loads: make([][]float64, len(targets))}
				bundles = append(bundles, entry.b)
			}
			entry.index = len(entry.b.loads[0])
			for i := range targets {
				entry.b.loads[i] = append(entry.b.loads[i], 0)
			}
			at[place{x.source, scale}] = entry
		}
		for i, t := range targets {
			entry.b.loads[i][entry.index] += float64(t.row[x.reading] * factor)
		}
	}
	for _, b := range bundles {
		drawn, err := p.bundle(b, ops)
		if err != nil {
			return nil, nil, err
		}
		temporary = append(temporary, drawn...)
	}
	for _, o := range ops {
		p.add(o)
	}
	return slots, temporary, nil
}

// negligible is a correlation that is nothing but rounding.
const negligible = 1e-13

// bundle draws a bundle's effect on the targets: as many normals as its
// covariance has rank, by the Cholesky factor.
func (p *plan) bundle(b *bundle, ops []*sumOp) (temporary []int, err error) {
	n := len(ops)
	l := adjust.NewMatrix(n, n)
	for i := 0; i < n; i++ {
		for j := 0; j <= i; j++ {
			v := adjust.Dot(b.loads[i], b.loads[j])
			l.Set(i, j, v)
			l.Set(j, i, v)
		}
	}
	for i := 0; i < n; i++ {
		for j := 0; j < i; j++ {
			if v := l.At(i, j); float64(v*v) <= float64(negligible*negligible)*l.At(i, i)*l.At(j, j) {
				l.Set(i, j, 0)
				l.Set(j, i, 0)
			}
		}
	}
	if err := adjust.SemiCholesky(l); err != nil {
		return nil, fmt.Errorf("draw the readings of a fit together: %w", err)
	}
	for j := 0; j < n; j++ {
		uses := 0
		for i := j; i < n; i++ {
			if l.At(i, j) != 0 {
				uses++
			}
		}
		slot := -1
		if uses > 1 {
			slot = p.slot()
			p.add(&drawOp{dst: slot, of: Normal})
			temporary = append(temporary, slot)
		}
		for i := j; i < n; i++ {
			if v := l.At(i, j); v != 0 {
				ops[i].of = append(ops[i].of, weight{slot, b.scale, v})
			}
		}
	}
	return temporary, nil
}
