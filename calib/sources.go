package calib

import (
	"slices"
	"strings"

	"deltamoor/calib/adjust"
	"deltamoor/calib/uncertain"
)

// anchorSources are the distinct sources of all anchors, sorted by identity,
// with each anchor's standardised sensitivities to them.
type anchorSources struct {
	list []uncertain.Source
	// index of each anchor's terms in list.
	index [][]int
	// mixed says that anchors state one source with different uncertainties or
	// groups, so that only whole numbers add them up rightly.
	mixed bool
	// groups and derivatives of the sources' variances, flattened: scaling[s]
	// lists the variance estimates that source s scales with.
	groups  []uncertain.Group
	offset  []int
	scaling [][]scaling
	phis    int
}

type scaling struct {
	at  int     // position among all groups' variances
	per float64 // ∂U²/∂φ
}

func (in *input) newAnchorSources() *anchorSources {
	a := &anchorSources{index: make([][]int, len(in.inputs)), groups: in.session.Groups}
	count := 0
	for _, k := range in.inputs {
		count += len(k.terms)
	}
	a.list = make([]uncertain.Source, 0, count)
	for _, k := range in.inputs {
		for _, t := range k.terms {
			a.list = append(a.list, t.Source)
		}
	}
	slices.SortStableFunc(a.list, func(x, y uncertain.Source) int { return strings.Compare(x.ID, y.ID) })
	a.list = slices.CompactFunc(a.list, func(x, y uncertain.Source) bool {
		if x.ID != y.ID {
			return false
		}
		a.mixed = a.mixed || x.U != y.U || x.Group != y.Group || !slices.Equal(x.Per, y.Per) || len(x.Shares)+len(y.Shares) > 0
		return true
	})
	for k, anchor := range in.inputs {
		a.index[k] = make([]int, len(anchor.terms))
		for j, t := range anchor.terms {
			a.index[k][j], _ = slices.BinarySearchFunc(a.list, t.ID, func(s uncertain.Source, id string) int { return strings.Compare(s.ID, id) })
		}
	}
	a.takeScaling()
	return a
}

func (a *anchorSources) takeScaling() {
	a.offset = make([]int, len(a.groups))
	at := map[string]int{}
	for g := range a.groups {
		a.offset[g] = a.phis
		a.phis += len(a.groups[g].Variances)
		at[a.groups[g].ID] = g
	}
	a.scaling = make([][]scaling, len(a.list))
	for s, src := range a.list {
		shares := src.Shares
		if shares == nil && src.Group != "" {
			shares = []uncertain.Share{{Group: src.Group, Variance: float64(src.U * src.U), Per: src.Per}}
		}
		for _, h := range shares {
			g, ok := at[h.Group]
			switch {
			case !ok:
			case h.Per != nil:
				for j, v := range h.Per {
					a.scaling[s] = append(a.scaling[s], scaling{at: a.offset[g] + j, per: v})
				}
			case a.groups[g].Variances[0] > 0:
				a.scaling[s] = append(a.scaling[s], scaling{at: a.offset[g], per: h.Variance / a.groups[g].Variances[0]})
			}
		}
	}
}

// standardised adds Σ_k h_k · sensitivity · U to out, one entry for each source.
func (a *anchorSources) standardised(in *input, h, out []float64) {
	for k, c := range h {
		if c == 0 {
			continue
		}
		for j, t := range in.inputs[k].terms {
			out[a.index[k][j]] += float64(c * float64(t.Sensitivity*t.U))
		}
	}
}

// matrix is T, the anchors' standardised sensitivities to the sources.
func (a *anchorSources) matrix(in *input) *adjust.Matrix {
	t := adjust.NewMatrix(len(in.anchors), len(a.list))
	for k := range in.anchors {
		row := t.Row(k)
		for j, x := range in.anchors[k].terms {
			row[a.index[k][j]] += float64(x.Sensitivity * x.U)
		}
	}
	return t
}

// derivatives adds ∂(Σ q²)/∂φ to d, for standardised sensitivities q.
func (a *anchorSources) derivatives(q, d []float64) {
	for s, list := range a.scaling {
		if q[s] == 0 && a.list[s].U != 0 {
			continue
		}
		for _, x := range list {
			if u := a.list[s].U; u > 0 {
				d[x.at] += float64(float64(q[s]*q[s])*x.per) / float64(u*u)
			}
		}
	}
}

// below is Σ_g d_gᵀ Cov(φ̂_g) d_g over the anchors' groups.
func (a *anchorSources) below(d []float64) float64 {
	var v float64
	for g := range a.groups {
		part := d[a.offset[g]:]
		for i, row := range a.groups[g].Covariance {
			for j, c := range row {
				v += float64(float64(part[i]*part[j]) * c)
			}
		}
	}
	return v
}

// loads solves A Tᵀ = V_ry for the readings' standardised loads on the
// anchors' sources, of least length. Anchors whose pivot vanishes in the
// Cholesky factor of V_y depend on the others and are left out.
func (a *anchorSources) loads(in *input) (*adjust.Matrix, error) {
	n, m := len(in.readings), len(in.anchors)
	t := a.matrix(in)
	l := adjust.NewMatrix(m, m)
	copy(l.Data, in.vy.Data)
	if err := adjust.SemiCholesky(l); err != nil {
		return nil, &CovarianceError{Refusal{Place: "anchors", Found: "a negative variance of some combination of anchors", Expected: "a covariance"}}
	}
	var independent []int
	for k := 0; k < m; k++ {
		if l.At(k, k) > 0 {
			independent = append(independent, k)
		}
	}
	small := adjust.NewMatrix(len(independent), len(independent))
	for x, k := range independent {
		for y, j := range independent[:x+1] {
			small.Set(x, y, in.vy.At(k, j))
		}
	}
	if err := adjust.Cholesky(small, len(independent)); err != nil {
		return nil, &CovarianceError{Refusal{Place: "anchors", Found: "a covariance that is singular to rounding", Expected: "a covariance that carries the cross-covariance"}}
	}
	out := adjust.NewMatrix(n, len(a.list))
	w := make([]float64, len(independent))
	for i := range in.readings {
		if !in.readings[i].usable {
			continue
		}
		v := in.cross.Row(i)
		for x, k := range independent {
			w[x] = v[k]
		}
		adjust.SolveLower(small, w)
		adjust.SolveLowerTransposed(small, w)
		for x, k := range independent {
			adjust.AddScaled(out.Row(i), w[x], t.Row(k))
		}
		for k := range v {
			back := adjust.Dot(out.Row(i), t.Row(k))
			if d := back - v[k]; d*d > 1e-12*in.vy.At(k, k)*variance(in, i) && d*d > 0 {
				return nil, &CovarianceError{Refusal{Place: "cross_covariance", Found: "a covariance with an anchor that has no such uncertainty", Expected: "zero where the anchor is exact or follows from others"}}
			}
		}
	}
	return out, nil
}

func variance(in *input, i int) float64 {
	if in.covariance != nil {
		return in.covariance.At(i, i)
	}
	return float64(in.readings[i].u * in.readings[i].u)
}
