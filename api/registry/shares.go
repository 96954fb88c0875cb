package registry

import (
	"cmp"
	"context"
	"math"
	"slices"
	"strings"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// A VarianceShare is one part of a number's variance: an anchor's assigned
// value, or what the sessions and the method bring themselves.
type VarianceShare struct {
	// Kind is anchor, shared (what anchors and readings have in common beyond
	// their own parts), or the kind of the sources: reading, preparation, unit,
	// stability, between_session, campaign, correction.
	Kind string
	// Value is the version of the anchor's value; nil for other kinds. Its
	// campaign is named where one assigned it.
	Value    *store.Ref
	Material string
	Scale    string
	Basis    string
	Campaign string
	// Share of u²; that of "shared" may be negative. All shares add up to 1.
	Share float64
}

// sharesOf splits the variance of what a trace starts at: of a reported delta
// or a final value by the anchors of its sessions, of an assigned value by its
// outside sources. nil where it has none.
func sharesOf(ctx context.Context, v source, t Trace, line int) ([]VarianceShare, error) {
	if len(t.Nodes) == 0 {
		return nil, nil
	}
	start := t.Nodes[0]
	if start.Kind == store.KindReport {
		if line < 0 {
			return nil, nil
		}
		report, err := decodeVersion[store.Report](ctx, v, start.Ref)
		if err != nil || line >= len(report.Inputs) {
			return nil, err
		}
		start.Ref = report.Inputs[line].Ref
	}
	switch start.Kind {
	case store.KindFinal:
		final, err := decodeVersion[store.Final](ctx, v, start.Ref)
		if err != nil {
			return nil, err
		}
		return finalShares(ctx, v, final)
	case store.KindValue:
		value, err := decodeVersion[store.Value](ctx, v, start.Ref)
		if err != nil || value.Value.Sources == nil {
			return nil, err
		}
		n, _, err := numberOf(value)
		if err != nil || n.Variance() == 0 {
			return nil, err
		}
		return bySource(n.Terms, n.Variance()), nil
	}
	return nil, nil
}

// finalShares splits u² of y = Σ w_m·y_m. With c_a = Σ w_m·∂y_m/∂(anchor a) an
// anchor brings c_a²·u_a²; the remainder R = y − Σ c_a·a is the sessions' own,
// split by kind of source; what is left are the covariances among them.
func finalShares(ctx context.Context, v source, final store.Version[store.Final]) ([]VarianceShare, error) {
	if len(final.Value.Members) == 0 { // converted from another scale: its relation and the value behind it say
		return nil, nil
	}
	_, members, err := againFinal(ctx, v, final)
	if err != nil {
		return nil, err
	}
	numbers, _, err := memberNumbers(ctx, v, members)
	if err != nil {
		return nil, err
	}
	weights := make([]float64, len(members))
	coefficients := map[store.Ref]float64{}
	anchors := map[store.Ref]uncertain.Number{}
	values := map[store.Ref]store.Value{}
	var order []store.Ref
	for i, m := range members {
		weights[i] = final.Value.Members[i].Weight
		a, err := assembleStored(ctx, v, m.calibration)
		if err != nil {
			return nil, err
		}
		result := m.calibration.Value.Results[m.line]
		for k, value := range a.anchors {
			c := 0.0
			for p, g := range result.Gradient {
				if p < len(m.calibration.Value.AnchorSensitivities) && k < len(m.calibration.Value.AnchorSensitivities[p]) {
					c += g * m.calibration.Value.AnchorSensitivities[p][k]
				}
			}
			if _, ok := anchors[value.Ref]; !ok {
				// The homogeneity of a lot joins where its units are used; it is told as
				// the units' own part, not as the value's.
				n, _, err := numberOf(value)
				if err != nil {
					return nil, err
				}
				anchors[value.Ref], values[value.Ref] = n, value.Value
				order = append(order, value.Ref)
			}
			coefficients[value.Ref] += weights[i] * c
		}
	}
	whole, err := uncertain.Linear(0, weights, numbers)
	if err != nil {
		return nil, err
	}
	total := whole.Variance()
	if total == 0 || math.IsNaN(total) {
		return nil, nil
	}
	var out []VarianceShare
	rest := []uncertain.Number{whole}
	factors := []float64{1}
	for _, ref := range order {
		c, n, val := coefficients[ref], anchors[ref], values[ref]
		share := VarianceShare{Kind: string(uncertain.KindAnchor), Value: &ref, Material: val.Material, Scale: val.Scale, Basis: val.Basis, Share: c * c * n.Variance() / total}
		if val.Campaign != nil {
			share.Campaign = campaignCode(ctx, v, ref)
		}
		out = append(out, share)
		rest, factors = append(rest, n), append(factors, -c)
	}
	own, err := uncertain.Linear(0, factors, rest)
	if err != nil {
		return nil, err
	}
	for _, s := range bySource(own.Terms, total) {
		if s.Kind == string(uncertain.KindAnchor) {
			continue // rounding leaves of what cancelled
		}
		out = append(out, s)
	}
	left := 1.0
	for _, s := range out {
		left -= s.Share
	}
	slices.SortStableFunc(out, func(a, b VarianceShare) int { return cmp.Compare(b.Share, a.Share) })
	if math.Abs(left) > 1e-9 {
		out = append(out, VarianceShare{Kind: "shared", Share: left})
	}
	return out, nil
}

// campaignCode is the code of the campaign that assigned a value.
func campaignCode(ctx context.Context, v source, value store.Ref) string {
	raw, err := v.Version(ctx, value.Key, value.Version)
	if err != nil {
		return ""
	}
	for _, in := range raw.Inputs {
		if in.Kind == store.KindAssignment {
			return in.Code
		}
	}
	return ""
}

// bySource sums terms' parts of a variance: outside values one by one, other
// sources by kind.
func bySource(terms []uncertain.Term, total float64) []VarianceShare {
	var out []VarianceShare
	at := map[string]int{}
	for _, t := range terms {
		part := t.Sensitivity * t.Sensitivity * t.U * t.U / total
		key, share := string(t.Kind), VarianceShare{Kind: string(t.Kind)}
		if t.Kind == uncertain.KindAnchor {
			key = t.ID
			if ref, ok := anchorRef(t.ID); ok {
				share.Value = &ref
				share.Material, share.Scale, _ = valueParts(ref.Code)
			}
		}
		i, ok := at[key]
		if !ok {
			i = len(out)
			at[key] = i
			out = append(out, share)
		}
		out[i].Share += part
	}
	slices.SortStableFunc(out, func(a, b VarianceShare) int { return cmp.Compare(b.Share, a.Share) })
	return out
}

// anchorRef reads the identity of an outside value's uncertainty, as sourceID writes it.
func anchorRef(id string) (store.Ref, bool) {
	id, own := strings.CutPrefix(id, "anchor:")
	laboratory, rest, ok := strings.Cut(id, "/")
	dot := strings.LastIndexByte(rest, '.')
	if !own || !ok || dot < 0 {
		return store.Ref{}, false
	}
	number := 0
	for _, c := range rest[dot+1:] {
		if c < '0' || c > '9' || number > 1<<20 {
			return store.Ref{}, false
		}
		number = 10*number + int(c-'0')
	}
	return store.Ref{Key: store.Key{Laboratory: laboratory, Kind: store.KindValue, Code: rest[:dot]}, Version: number}, number > 0
}

// valueParts splits the code of a value.
func valueParts(code string) (material, scale, measurand string) {
	material, rest, _ := strings.Cut(code, "/")
	scale, measurand, _ = strings.Cut(rest, "/")
	return material, scale, measurand
}
