package calib

import (
	"fmt"
	"math"

	"deltamoor/calib/adjust"
)

// Several variances at once, V_r = Σ φ_j V_j, by restricted maximum likelihood:
//
//	eᵀΣ⁻¹V_jΣ⁻¹e = tr(P V_j),  Cov(φ̂) = 2[tr(P V_j P V_k)]⁻¹
//
// by Fisher scoring, alternated with the adjustment. In whitened coordinates,
// with Q the rows of the reduction, P = L⁻ᵀ(I − Q S Qᵀ)L⁻¹, S = I − P_rows (or I
// with every level free), and T_j = L⁻¹V_jL⁻ᵀ,
//
//	tr(P V_j)       = tr T_j − tr(S M_j),                M_j = QᵀT_jQ
//	tr(P V_j P V_k) = tr(T_jT_k) − 2tr(S N_jk) + tr(S M_j S M_k),  N_jk = QᵀT_jT_kQ

// solveComponents estimates several variances about the fit itself.
func (p *problem) solveComponents(v *variances) (*solved, error) {
	var last *solved
	err := p.score(v, func(w *whitening) (*reduction, *adjust.Matrix, []float64, error) {
		r, err := p.reduce(w)
		if err != nil {
			return nil, nil, nil, err
		}
		var start []float64
		if last != nil {
			start = last.s.Theta
		}
		s, err := p.finish(r, v, 1, start)
		if err != nil {
			return nil, nil, nil, err
		}
		last = s
		proj, _ := s.s.Projection()
		for i := range proj.Data {
			proj.Data[i] = -proj.Data[i]
		}
		for i := 0; i < proj.Rows; i++ {
			proj.Set(i, i, 1+proj.At(i, i))
		}
		return r, proj, s.weightedReadings(), nil
	})
	if err != nil {
		return nil, err
	}
	w := p.whiten(v)
	if w == nil {
		return nil, p.refuse(&adjust.SingularError{})
	}
	r, err := p.reduce(w)
	if err != nil {
		return nil, err
	}
	return p.finish(r, v, 1, nil)
}

// solveReplicatePreparations estimates both variances with every level free,
// so that neither can absorb what is wrong with assigned values.
func (p *problem) solveReplicatePreparations(v *variances) (*solved, error) {
	if p.layout.blank >= 0 {
		return nil, &UnsupportedTermError{Refusal{Place: "model.weights", Found: "replicate with size blank and several readings of a preparation", Expected: "weights equal, or declared"}}
	}
	err := p.score(v, func(w *whitening) (*reduction, *adjust.Matrix, []float64, error) {
		r, err := p.reduce(w)
		if err != nil {
			return nil, nil, nil, err
		}
		if r.freeDF() <= 0 {
			return nil, nil, nil, p.noDegrees(r.freeDF())
		}
		s := adjust.NewMatrix(len(r.z), len(r.z))
		for i := range r.z {
			s.Set(i, i, 1)
		}
		lambda := append([]float64(nil), r.tail...)
		w.applyTransposed(lambda)
		return r, s, lambda, nil
	})
	if err != nil {
		return nil, err
	}
	r, err := p.reduce(p.whiten(v))
	if err != nil {
		return nil, err
	}
	return p.finish(r, v, 1, nil)
}

// weightedReadings is Σ⁻¹e for each fitted reading.
func (s *solved) weightedReadings() []float64 {
	out := make([]float64, s.r.n)
	if s.r.white == nil {
		copy(out, s.s.Weighted)
		return out
	}
	s.r.spread(s.problem, s.s.Weighted, out)
	for j, t := range s.r.tail {
		out[j] += t / s.unit
	}
	s.r.white.applyTransposed(out)
	return out
}

// score runs Fisher scoring on φ. Each step asks for the reduction, S and Σ⁻¹e
// at the present φ.
func (p *problem) score(v *variances, at func(*whitening) (*reduction, *adjust.Matrix, []float64, error)) error {
	first, err := p.reduce(p.unitWhitening())
	if err != nil {
		return err
	}
	start, err := p.firstVariance(first)
	if err != nil {
		return err
	}
	least := p.leastVariance()
	p.startPhi(v, math.Max(start, least))
	var path scoringPath
	last := math.Inf(1)
	for iteration := 1; iteration <= maxScoring; iteration++ {
		w := p.whiten(v)
		if w == nil {
			return p.refuse(&adjust.SingularError{})
		}
		r, s, lambda, err := at(w)
		if err != nil {
			return err
		}
		gradient, information := p.restricted(v, r, s, lambda)
		if path.overshot(v.phi, gradient) {
			continue
		}
		next, err := scoringStep(v.phi, gradient, information, least)
		if err != nil {
			return p.unidentified(v)
		}
		move := 0.0
		for j := range next {
			move = math.Max(move, math.Abs(next[j]-v.phi[j])/(v.phi[j]+math.Sqrt(2/information.At(j, j))))
		}
		// Fisher scoring converges linearly where a variance is hardly determined: the
		// last step counts as settled when it is far below any uncertainty of φ.
		if move < 1e-13 || (move >= last && last < 1e-9) || (iteration == maxScoring && move < slowScoring) {
			if v.cov, err = inverse(information); err != nil {
				return p.unidentified(v)
			}
			for i := range v.cov.Data {
				v.cov.Data[i] += v.cov.Data[i] // 2[tr(P V_j P V_k)]⁻¹
			}
			return nil
		}
		if iteration > plainScoring && iteration%4 == 0 {
			extrapolate(v.phi, next, move/last)
		}
		last = move
		path.take(v.phi, next, gradient)
		copy(v.phi, next)
	}
	return &ConvergenceError{Refusal{Place: "model.weights", Found: fmt.Sprintf("variances not settled after %d iterations", maxScoring), Expected: "a maximum of the restricted likelihood"}}
}

// plainScoring is how many plain scoring steps there are before extrapolated
// ones are mixed in, maxScoring bounds both; slowScoring is the relative change
// of φ below which the last of them is taken as it is.
const (
	plainScoring = 500
	maxScoring   = 800
	slowScoring  = 1e-7
)

// extrapolate lengthens a step of a slow series. One that shrinks by a ratio
// each time is taken to where it would end (Aitken 1926), a hundred times as far
// at most; where the likelihood is so flat that steps do not shrink, that far. A
// step too far is taken back by [scoringPath.overshot].
func extrapolate(phi, next []float64, ratio float64) {
	factor := 100.0
	switch {
	case !(ratio > 0.5):
		return
	case ratio < 0.99:
		factor = 1 / (1 - ratio)
	}
	for ; factor > 1; factor /= 2 {
		inside := true
		for j := range phi {
			inside = inside && (next[j] <= 0 || phi[j]+float64(factor*(next[j]-phi[j])) > phi[j]/10)
		}
		if inside {
			break
		}
	}
	for j := range phi {
		if next[j] > 0 && factor > 1 {
			next[j] = phi[j] + float64(factor*(next[j]-phi[j]))
		}
	}
}

// A scoringPath remembers the last step, to take part of it back where the
// likelihood has already begun to fall along it.
type scoringPath struct {
	from, direction []float64
	rise            float64 // the gradient along the step, at its start
	factor          float64
}

func (s *scoringPath) take(phi, next, gradient []float64) {
	s.from, s.direction, s.rise, s.factor = append(s.from[:0], phi...), s.direction[:0], 0, 1
	for j := range phi {
		d := next[j] - phi[j]
		s.direction = append(s.direction, d)
		s.rise += float64(gradient[j] * d)
	}
}

// overshot says that the step went too far, and moves φ back to where the
// secant of the gradient along it vanishes.
func (s *scoringPath) overshot(phi, gradient []float64) bool {
	if s.from == nil || s.factor < 1e-6 {
		return false
	}
	var now float64
	for j, d := range s.direction {
		now += float64(gradient[j] * d)
	}
	if !(s.rise > 0 && now < -float64(0.5*s.rise)) {
		return false
	}
	s.factor = float64(s.factor * math.Max(0.1, s.rise/(s.rise-now)))
	for j := range phi {
		phi[j] = s.from[j] + float64(s.factor*s.direction[j])
	}
	return true
}

// startPhi shares the first variance out among the patterns.
func (p *problem) startPhi(v *variances, total float64) {
	for j, k := range v.patterns {
		v.phi[j] = total / float64(len(v.patterns))
		if k == patternSize {
			var mean float64
			for _, i := range p.fitted {
				mean += k.diagonal(&p.in.readings[i])
			}
			v.phi[j] /= mean / float64(len(p.fitted))
		}
	}
}

// scoringStep is φ + I⁻¹·gradient with every φ held at zero or above; the
// first, where it alone keeps V_r positive, at the least variance. A φ at zero
// whose gradient is negative stays there.
func scoringStep(phi, gradient []float64, information *adjust.Matrix, least float64) ([]float64, error) {
	m := len(phi)
	held := make([]bool, m)
	for {
		var free []int
		for j := range phi {
			if !held[j] {
				free = append(free, j)
			}
		}
		next := make([]float64, m)
		if len(free) == 0 {
			next[0] = least
			return next, nil
		}
		a, b := adjust.NewMatrix(len(free), len(free)), make([]float64, len(free))
		for x, j := range free {
			b[x] = gradient[j]
			for k := range phi {
				if held[k] {
					b[x] += float64(information.At(j, k) * phi[k])
				}
			}
			for y, k := range free {
				a.Set(x, y, information.At(j, k))
			}
		}
		d, err := adjust.LeastSquares(a, b)
		if err != nil {
			return nil, err
		}
		worst, at := 0.0, -1
		for x, j := range free {
			next[j] = phi[j] + d[x]
			if floor := floorOf(j, held, least); next[j] < floor && floor-next[j] > worst {
				worst, at = floor-next[j], j
			}
		}
		if at < 0 {
			for j := range next {
				next[j] = math.Max(next[j], floorOf(j, held, least))
				if !held[j] && next[j] < phi[j]/10 {
					next[j] = phi[j] / 10
				}
			}
			return next, nil
		}
		held[at] = true
		next[at] = 0
	}
}

func floorOf(j int, held []bool, least float64) float64 {
	if j == 0 {
		return least
	}
	return 0
}

func (p *problem) unidentified(v *variances) error {
	if hasPattern(v.patterns, patternPreparation) {
		return &PreparationError{Refusal{Place: "readings", Found: "preparations and readings that do not tell their variances apart", Expected: "several preparations of a material, and several readings of a preparation; or declared weights"}}
	}
	return &NoReplicatesError{Refusal{Place: "model.weights", Found: "sizes that do not tell the two parts of the variance apart", Expected: "repeated readings at different sizes, or weights equal"}}
}

func inverse(a *adjust.Matrix) (*adjust.Matrix, error) {
	out := adjust.NewMatrix(a.Rows, a.Rows)
	for j := 0; j < a.Rows; j++ {
		unit := make([]float64, a.Rows)
		unit[j] = 1
		x, err := adjust.LeastSquares(a, unit) // symmetric: columns are rows
		if err != nil {
			return nil, err
		}
		for i := range x {
			out.Set(i, j, x[i])
		}
	}
	return out, nil
}

// restricted is the gradient and information of twice the restricted
// likelihood at φ.
func (p *problem) restricted(v *variances, r *reduction, s *adjust.Matrix, lambda []float64) ([]float64, *adjust.Matrix) {
	m, d := len(v.phi), len(r.z)
	q := adjust.NewMatrix(d, r.n)
	column := make([]float64, d)
	for j := 0; j < r.n; j++ {
		clear(column)
		r.coordinates(p, j, 1, column)
		for i, c := range column {
			q.Set(i, j, c)
		}
	}
	tq := make([]*adjust.Matrix, m) // rows T_j q_i
	sm := make([]*adjust.Matrix, m) // S M_j
	gradient := make([]float64, m)
	for j, k := range v.patterns {
		tq[j] = adjust.NewMatrix(d, r.n)
		copy(tq[j].Data, q.Data)
		for i := 0; i < d; i++ {
			p.applyPattern(k, r.white, tq[j].Row(i))
		}
		sm[j] = product(s, crossProducts(q, tq[j]))
		vl := append([]float64(nil), lambda...)
		p.pattern(k, vl)
		gradient[j] = adjust.Dot(lambda, vl) - (p.patternTrace(k, -1, r.white) - trace(sm[j]))
	}
	information := adjust.NewMatrix(m, m)
	for j := range v.patterns {
		for k := 0; k <= j; k++ {
			n := product(s, crossProducts(tq[j], tq[k]))
			h := p.patternTrace(v.patterns[j], v.patterns[k], r.white) - float64(2*trace(n)) + trace(product(sm[j], sm[k]))
			information.Set(j, k, h)
			information.Set(k, j, h)
		}
	}
	return gradient, information
}

func trace(a *adjust.Matrix) float64 {
	var t float64
	for i := 0; i < a.Rows; i++ {
		t += a.At(i, i)
	}
	return t
}

func crossProducts(a, b *adjust.Matrix) *adjust.Matrix {
	out := adjust.NewMatrix(a.Rows, b.Rows)
	for i := 0; i < a.Rows; i++ {
		for j := 0; j < b.Rows; j++ {
			out.Set(i, j, adjust.Dot(a.Row(i), b.Row(j)))
		}
	}
	return out
}

func product(a, b *adjust.Matrix) *adjust.Matrix {
	out := adjust.NewMatrix(a.Rows, b.Cols)
	for i := 0; i < a.Rows; i++ {
		for k := 0; k < a.Cols; k++ {
			adjust.AddScaled(out.Row(i), a.At(i, k), b.Row(k))
		}
	}
	return out
}

// pattern overwrites x with V_j x.
func (p *problem) pattern(k pattern, x []float64) {
	if k == patternPreparation {
		sums := make([]float64, p.in.preparations)
		for j, i := range p.fitted {
			sums[p.in.readings[i].preparation] += x[j]
		}
		for j, i := range p.fitted {
			x[j] = sums[p.in.readings[i].preparation]
		}
		return
	}
	for j, i := range p.fitted {
		x[j] = float64(x[j] * k.diagonal(&p.in.readings[i]))
	}
}

// applyPattern overwrites x with T_j x = L⁻¹V_jL⁻ᵀx.
func (p *problem) applyPattern(k pattern, w *whitening, x []float64) {
	w.applyTransposed(x)
	p.pattern(k, x)
	w.apply(x)
}

// patternTrace is tr T_a, or tr(T_a T_b) for b ≥ 0.
func (p *problem) patternTrace(a, b pattern, w *whitening) float64 {
	var t float64
	entry := func(k pattern, j int) float64 {
		return float64(k.diagonal(&p.in.readings[p.fitted[j]]) * float64(w.single[j]*w.single[j]))
	}
	for j, s := range w.single {
		if s == 0 {
			continue
		}
		v := entry(a, j)
		if b >= 0 {
			v = float64(v * entry(b, j))
		}
		t += v
	}
	for _, g := range w.groups {
		ta := p.groupPattern(a, g)
		if b < 0 {
			t += trace(ta)
			continue
		}
		t += adjust.Dot(ta.Data, p.groupPattern(b, g).Data) // both symmetric
	}
	return t
}

// groupPattern is T_j within one preparation.
func (p *problem) groupPattern(k pattern, g preparationGroup) *adjust.Matrix {
	n := len(g.rows)
	t := adjust.NewMatrix(n, n)
	for x := 0; x < n; x++ {
		row := t.Row(x)
		row[x] = 1
		adjust.SolveLowerTransposed(g.l, row) // L⁻ᵀ e_x
		if k == patternPreparation {
			var sum float64
			for _, v := range row {
				sum += v
			}
			for y := range row {
				row[y] = sum
			}
		} else {
			for y := range row {
				row[y] = float64(row[y] * k.diagonal(&p.in.readings[p.fitted[g.rows[y]]]))
			}
		}
		adjust.SolveLower(g.l, row)
	}
	return t
}
