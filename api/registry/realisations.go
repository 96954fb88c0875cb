package registry

import (
	"context"
	"fmt"
	"slices"

	"deltamoor/calib"
	"deltamoor/calib/assign"
	"deltamoor/store"
)

// realisations evaluates a campaign's sessions on the other realisations of
// its scale, with the anchors' values there and everything else as it is.
func realisations(ctx context.Context, v *store.View, laboratory string, d campaignData) ([]RealisedValue, error) {
	if len(d.members) == 0 {
		return nil, nil
	}
	quantity := d.members[0].calibration.Value.Quantity
	var scales []string
	for _, lab := range []string{laboratory, store.Common} {
		raws, _, err := v.List(ctx, store.ListQuery{Laboratory: lab, Kind: store.KindScale, Limit: MaxPage})
		if err != nil {
			return nil, err
		}
		for _, raw := range raws {
			s, err := store.Decode[store.Scale](raw.Raw)
			if err != nil {
				return nil, err
			}
			if s.Value.Quantity == quantity && raw.Code != d.quantity.Scale && !slices.Contains(scales, raw.Code) {
				scales = append(scales, raw.Code)
			}
		}
	}
	slices.Sort(scales)
	var out []RealisedValue
	for _, scale := range scales {
		rv, err := realised(ctx, v, laboratory, d, scale)
		if err != nil {
			return nil, err
		}
		out = append(out, rv)
	}
	return out, nil
}

func realised(ctx context.Context, v *store.View, laboratory string, d campaignData, scale string) (RealisedValue, error) {
	out := RealisedValue{Scale: scale}
	var ws []witness
	for _, m := range d.members {
		a, err := assembleStored(ctx, v, m.calibration)
		if err != nil {
			return out, err
		}
		left, err := a.rescale(ctx, v, laboratory, scale)
		if err != nil {
			return out, err
		}
		for _, material := range left {
			if !slices.Contains(out.LeftOut, material) {
				out.LeftOut = append(out.LeftOut, material)
			}
		}
		if len(a.anchors) < 2 {
			out.Refusal = fmt.Sprintf("session %s has %d anchors with a value on %s; a line needs two", store.FormatCode(m.calibration.Value.Session), len(a.anchors), scale)
			return out, nil
		}
		r, s, err := a.result()
		if err != nil {
			out.Refusal = err.Error()
			return out, nil
		}
		for i, subject := range r.Subjects {
			if subject.Subject == d.plan.Value.Material {
				ws = append(ws, witness{member: m, number: r.Number(i), groups: append(slices.Clone(s.Groups), r.Groups()...)})
				break
			}
		}
	}
	a, err := assign.Analyse(campaignOf(d.plan.Code, d.quantity, ws))
	if err != nil {
		out.Refusal = err.Error()
		return out, nil
	}
	out.Value, out.StandardUncertainty, out.Sessions = a.Value.Value, a.Value.StandardUncertainty(), len(a.Sessions)
	return out, nil
}

// rescale gives the anchors of a session their values on another realisation,
// as they held when it began; anchors without one leave the line.
func (a *assembly) rescale(ctx context.Context, v *store.View, laboratory, scale string) (left []string, err error) {
	held := store.Moment{ValidAt: a.session.Value.StartedAt}
	anchors := a.anchors
	a.anchors, a.controls, a.between, a.flags = nil, nil, nil, nil
	for _, anchor := range anchors {
		value, err := valueInForce(ctx, v, laboratory, anchor.Value.Material, scale, anchor.Value.Measurand, held)
		if ignoreNotFound(err) != nil {
			return nil, err
		}
		if err != nil || value.State == store.Withdrawn || (value.Value.StandardUncertainty == 0 && !value.Value.Exact && value.Value.Sources == nil) {
			left = append(left, anchor.Value.Material)
			continue
		}
		a.anchors = append(a.anchors, value.Version)
	}
	a.spec.Scale = scale
	a.readings = slices.Clone(a.readings)
	for i, rd := range a.readings {
		if rd.Role == calib.Anchor && slices.Contains(left, rd.Material) {
			a.readings[i].Role = calib.Conditioning
		}
	}
	return left, nil
}
