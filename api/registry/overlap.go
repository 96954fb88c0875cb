package registry

import (
	"context"
	"fmt"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// partWaiver is the part that a material's version plays in a calibration whose
// anchor has not been measured beside the material it follows.
const partWaiver = "overlap waiver"

// overlap says whether a material that follows another may be an anchor with
// this value: a campaign must have measured the two side by side, on the scale
// of the value. missing is "" where it may; waiver is the material's version
// that says why it may all the same, nil for none.
func overlap(ctx context.Context, v *store.View, value store.Version[store.Value]) (missing string, waiver *store.Ref, err error) {
	m, err := newest[store.Material](ctx, v, store.Key{Laboratory: value.Value.MaterialLaboratory, Kind: store.KindMaterial, Code: value.Value.Material})
	if err != nil || m.Value.Succeeds == "" || links(value.Value, m.Value.Succeeds) {
		return "", nil, err
	}
	// A later value may rest on sessions without the predecessor: it was linked before.
	for after := 0; ; {
		raws, err := v.Versions(ctx, value.Key, after, MaxPage)
		if err != nil {
			return "", nil, err
		}
		for _, raw := range raws {
			after = raw.Ref.Version
			older, err := store.Decode[store.Value](raw)
			if err != nil {
				return "", nil, err
			}
			if !links(older.Value, m.Value.Succeeds) {
				continue
			}
			state, _, err := v.State(ctx, raw.Ref, store.Moment{})
			if err != nil {
				return "", nil, err
			}
			if state == store.Approved || state == store.Superseded {
				return "", nil, nil
			}
		}
		if len(raws) < MaxPage {
			break
		}
	}
	if m.Value.OverlapWaiver != "" {
		return "", &m.Ref, nil
	}
	return fmt.Sprintf("a material that follows %s, with no approved campaign that measured both", m.Value.Succeeds), nil, nil
}

// links tells whether a value's campaign met the predecessor's value again.
func links(v store.Value, predecessor string) bool {
	return v.Campaign != nil && v.Campaign.Step != nil && strings.EqualFold(v.Campaign.Step.Material, predecessor)
}

// waive flags an anchor that is used on a waiver.
func (a *assembly) waive(ctx context.Context, v source, ref store.Ref) error {
	m, err := decodeVersion[store.Material](ctx, v, ref)
	if err != nil {
		return err
	}
	a.flags = append(a.flags, calib.Flag{Code: "overlap_waived", Severity: calib.Warning, Subject: m.Code,
		Message: fmt.Sprintf("%s follows %s and was not measured beside it; %s waived that: %s", m.Code, m.Value.Succeeds, m.RecordedBy, m.Value.OverlapWaiver),
		Advice:  "Measure both in the sessions of a campaign."})
	return nil
}

// checkSuccession completes what a material says of the one it follows.
func checkSuccession(ctx context.Context, v *store.View, key store.Key, m *store.Material) error {
	switch {
	case m.Succeeds == "" && m.OverlapWaiver != "":
		return Complain("this material cannot be registered", []Complaint{{Place: "body.overlap_waiver", Found: quote(m.OverlapWaiver), Expected: "nothing, where the material follows no other"}})
	case m.Succeeds == "":
		return nil
	}
	before, err := findMaterial(ctx, v, key.Laboratory, m.Succeeds)
	if ignoreNotFound(err) != nil {
		return err
	}
	if err != nil || before.Code == key.Code {
		return Complain("this material cannot be registered", []Complaint{{Place: "body.succeeds", Found: quote(m.Succeeds), Expected: "the code of another registered material"}})
	}
	m.Succeeds = before.Code
	return nil
}
