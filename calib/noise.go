package calib

import (
	"math"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// A noise is the readings' part of the sources: what each reading that counts
// contributes, and through what.
type noise struct {
	in *input
	v  *variances // nil for declared, known
	// own is each reading's own variance, without its preparation's.
	own []float64
	// phiA is the variance of a preparation; preparations says that the model has one.
	phiA         float64
	preparations bool
	// loads and crossLoads replace own where the readings are correlated with
	// each other or with the anchors: reading = crossLoads·anchor sources +
	// loads·reading sources, all standardised.
	loads, crossLoads *adjust.Matrix
	group             string
	// general says that a sample's own readings may be correlated with the fit.
	general bool
}

// newNoise gathers the variances of a solved problem.
func (s *solved) newNoise(sources *anchorSources) (*noise, error) {
	in := s.in
	nz := &noise{in: in, v: s.variances, own: make([]float64, len(in.readings)), group: in.session.NoiseGroup}
	if nz.group == "" {
		nz.group = "fit:" + in.readings[s.fitted[0]].sourceID()[len("reading:"):]
	}
	if s.variances != nil {
		nz.preparations = hasPattern(s.variances.patterns, patternPreparation)
		nz.phiA = s.variances.preparation()
	}
	for i := range in.readings {
		nz.own[i] = s.variances.own(&in.readings[i])
	}
	nz.general = in.model.Memory == MemoryCarryover || in.covariance != nil || in.cross != nil || (nz.preparations && s.sharedAcross())
	if in.covariance == nil && in.cross == nil {
		return nz, nil
	}
	return nz, nz.decompose(sources)
}

// sharedAcross says that some preparation has fitted and other readings.
func (s *solved) sharedAcross() bool {
	fitted := make([]bool, s.in.preparations)
	for _, i := range s.fitted {
		fitted[s.in.readings[i].preparation] = true
	}
	for i := range s.in.readings {
		rd := &s.in.readings[i]
		if rd.usable && rd.class < 0 && rd.shared && fitted[rd.preparation] {
			return true
		}
	}
	return false
}

// decompose finds the loads: with T the anchors' standardised sources, V_y =
// T Tᵀ, the readings' loads on them are A = V_ry V_y⁺ T, and what is left,
// V_r − A Aᵀ, is the readings' own, by Cholesky in the readings' order.
func (nz *noise) decompose(sources *anchorSources) error {
	in := nz.in
	n := len(in.readings)
	rest := adjust.NewMatrix(n, n)
	for i := range in.readings {
		if !in.readings[i].usable {
			continue
		}
		for j := range in.readings {
			switch {
			case !in.readings[j].usable:
			case in.covariance != nil:
				rest.Set(i, j, in.covariance.At(i, j))
			case i == j:
				rest.Set(i, i, nz.own[i])
			}
		}
	}
	if in.cross != nil {
		a, err := sources.loads(in)
		if err != nil {
			return err
		}
		nz.crossLoads = a
		for i := 0; i < n; i++ {
			for j := 0; j < n; j++ {
				rest.Set(i, j, rest.At(i, j)-adjust.Dot(a.Row(i), a.Row(j)))
			}
		}
	}
	if err := adjust.SemiCholesky(rest); err != nil {
		return notPositive()
	}
	nz.loads = rest
	return nil
}

// variance is the variance of Σ w_i r_i over all readings, without what goes
// through the anchors' sources.
func (nz *noise) variance(w []float64) float64 {
	var v float64
	if nz.loads != nil {
		for _, q := range nz.standardised(w) {
			v += float64(q * q)
		}
		return v
	}
	for i, c := range w {
		if c != 0 {
			v += float64(float64(c*c) * nz.own[i])
		}
	}
	if nz.phiA > 0 {
		v += float64(nz.phiA * nz.pattern(patternPreparation, w))
	}
	return v
}

// standardised is wᵀ times the loads on the reading sources.
func (nz *noise) standardised(w []float64) []float64 {
	out := make([]float64, len(w))
	for i, c := range w {
		if c != 0 {
			adjust.AddScaled(out, c, nz.loads.Row(i))
		}
	}
	return out
}

// throughAnchors is wᵀ times the loads on the anchors' sources.
func (nz *noise) throughAnchors(w []float64) []float64 {
	out := make([]float64, nz.crossLoads.Cols)
	for i, c := range w {
		if c != 0 {
			adjust.AddScaled(out, c, nz.crossLoads.Row(i))
		}
	}
	return out
}

// pattern is wᵀV_j w.
func (nz *noise) pattern(k pattern, w []float64) float64 {
	var v float64
	if k == patternPreparation {
		sums := make([]float64, nz.in.preparations)
		for i, c := range w {
			sums[nz.in.readings[i].preparation] += c
		}
		for _, s := range sums {
			v += float64(s * s)
		}
		return v
	}
	for i, c := range w {
		if c != 0 {
			v += float64(float64(c*c) * k.diagonal(&nz.in.readings[i]))
		}
	}
	return v
}

// bilinear is aᵀ V_r b for two rows over the readings, with all of V_r.
func (nz *noise) bilinear(a, b []float64) float64 {
	var v float64
	if nz.loads != nil {
		v = adjust.Dot(nz.standardised(a), nz.standardised(b))
		if nz.crossLoads != nil {
			v += adjust.Dot(nz.throughAnchors(a), nz.throughAnchors(b))
		}
		return v
	}
	for i, c := range a {
		if c != 0 {
			v += float64(float64(c*nz.own[i]) * b[i])
		}
	}
	if nz.phiA > 0 {
		v += float64(nz.phiA * nz.patternBilinear(a, b))
	}
	return v
}

func (nz *noise) patternBilinear(a, b []float64) float64 {
	sums := make([]float64, 2*nz.in.preparations)
	x, y := sums[:nz.in.preparations], sums[nz.in.preparations:]
	for i := range a {
		p := nz.in.readings[i].preparation
		x[p] += a[i]
		y[p] += b[i]
	}
	return adjust.Dot(x, y)
}

// terms lists the reading and preparation sources of Σ w_i r_i.
func (nz *noise) terms(w []float64) []uncertain.Term {
	var out []uncertain.Term
	if nz.loads != nil {
		for i, q := range nz.standardised(w) {
			if u := nz.loads.At(i, i); u > 0 && q != 0 {
				out = append(out, uncertain.Term{Source: nz.readingSource(i, u), Sensitivity: q / u})
			}
		}
		return out
	}
	for i, c := range w {
		if c != 0 {
			out = append(out, uncertain.Term{Source: nz.readingSource(i, math.Sqrt(nz.own[i])), Sensitivity: c})
		}
	}
	if !nz.preparations {
		return out
	}
	sums := make([]float64, nz.in.preparations)
	name := make([]string, nz.in.preparations)
	for i, c := range w {
		rd := &nz.in.readings[i]
		if c == 0 {
			continue
		}
		sums[rd.preparation] += c
		if name[rd.preparation] == "" {
			name[rd.preparation] = rd.preparationID()
		}
	}
	for k, c := range sums {
		if name[k] != "" && c != 0 {
			out = append(out, nz.preparationTerm(name[k], c))
		}
	}
	return out
}

func (nz *noise) readingSource(i int, u float64) uncertain.Source {
	rd := &nz.in.readings[i]
	s := uncertain.Source{ID: rd.sourceID(), Kind: uncertain.KindReading, U: u}
	if nz.v == nil {
		return s
	}
	s.Group = nz.group
	if len(nz.v.patterns) > 1 {
		s.Per = make([]float64, len(nz.v.patterns))
		for j, k := range nz.v.patterns {
			if k != patternPreparation {
				s.Per[j] = k.diagonal(rd)
			}
		}
	}
	return s
}

func (nz *noise) preparationTerm(id string, c float64) uncertain.Term {
	per := make([]float64, len(nz.v.patterns))
	for j, k := range nz.v.patterns {
		per[j] = indicator(k == patternPreparation)
	}
	return uncertain.Term{Sensitivity: c, Source: uncertain.Source{
		ID: id, Kind: uncertain.KindPreparation, U: math.Sqrt(nz.phiA), Group: nz.group, Per: per,
	}}
}

// groupOf is the fit's own variance group; ok is false for known variances.
func (nz *noise) groupOf() (g uncertain.Group, ok bool) {
	if nz.v == nil {
		return g, false
	}
	return uncertain.Group{ID: nz.group, Variances: append([]float64(nil), nz.v.phi...), Covariance: nz.v.cov.Slices()}, true
}
