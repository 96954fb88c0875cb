package registry

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// What a fit finds beyond the inputs that its version pins (the instrument's
// earlier lines, samples' matrices, what a bottle still held) is judged once,
// when the fit is made, and stored with it as observed: recomputing takes it
// over, so that a stored calibration stays what it was.

// observe judges a fit by what is known around it. body is the fit itself.
func (a *assembly) observe(ctx context.Context, v *store.View, laboratory string, body store.Calibration) error {
	a.observed = nil
	for _, step := range []func(context.Context, *store.View, string, store.Calibration) error{
		a.observeHistory, a.observeValues, a.observeUnits, a.observeMatrices, a.observeGroups,
	} {
		if err := step(ctx, v, laboratory, body); err != nil {
			return err
		}
	}
	return nil
}

// addObserved puts what was observed into a body: the flags themselves, and
// their codes at the results they concern.
func (a *assembly) addObserved(body *store.Calibration) {
	body.Observed, body.History = slices.Clone(a.observed), a.history
	body.Flags = append(body.Flags, a.observed...)
	for i := range body.Results {
		r := &body.Results[i]
		for _, f := range a.observed {
			concerns := f.Subject == r.Subject || f.Subject == "" && slices.ContainsFunc(f.Readings, func(n int) bool { return slices.Contains(r.Readings, n) })
			if concerns && !slices.Contains(r.Flags, f.Code) {
				r.Flags = append(r.Flags, f.Code)
			}
		}
	}
}

// observeValues looks at the anchors' and controls' values: made from this very
// session, or stated on different versions of the scale's definition.
func (a *assembly) observeValues(_ context.Context, _ *store.View, _ string, _ store.Calibration) error {
	values := slices.Clone(a.anchors)
	for _, material := range slices.Sorted(mapKeys(a.controls)) {
		values = append(values, a.controls[material])
	}
	prefix := "reading:" + a.session.Code + "/"
	for i, value := range values {
		if value.Value.Basis != "assignment" {
			continue
		}
		n, _, err := numberOf(value)
		if err != nil {
			return err
		}
		for _, t := range n.Terms {
			if !strings.HasPrefix(t.ID, prefix) {
				continue
			}
			role := "anchor"
			if i >= len(a.anchors) {
				role = "control"
			}
			a.observed = append(a.observed, calib.Flag{Code: "circular_assignment", Severity: calib.Serious, Subject: value.Value.Material,
				Message: fmt.Sprintf("The value of %s, %s here, was assigned from readings of this very session: it would be judged by itself.", value.Value.Material, role),
				Advice:  "Use the value that held before, or leave the material out of the roles anchor and control in this session."})
			break
		}
	}
	versions := map[store.Ref][]string{}
	for _, value := range a.anchors {
		if ref, err := inputOf(value.Inputs, "scale"); err == nil {
			versions[ref] = append(versions[ref], value.Value.Material)
		}
	}
	if len(versions) > 1 {
		var parts []string
		for ref, materials := range versions {
			parts = append(parts, fmt.Sprintf("%s on version %d", strings.Join(materials, ", "), ref.Version))
		}
		slices.Sort(parts)
		a.observed = append(a.observed, calib.Flag{Code: "definitions_differ", Severity: calib.Warning,
			Message: fmt.Sprintf("The anchors' values were stated on different versions of the definition of %s: %s.", a.spec.Scale, strings.Join(parts, "; ")),
			Advice:  "Read what changed in the definition; if it moves values, state those of the older version anew."})
	}
	return nil
}

// observeUnits looks for bottles from which more was taken than they held.
// Readings of the sessions that used a bottle are counted only where its
// material states a portion and the bottle a content.
func (a *assembly) observeUnits(ctx context.Context, v *store.View, laboratory string, _ store.Calibration) error {
	codes := map[string]bool{}
	for _, rd := range a.readings {
		if rd.Unit != "" && rd.Role != calib.Sample {
			codes[rd.Unit] = true
		}
	}
	sessions := map[string]sessionUse{}
	for _, code := range slices.Sorted(mapKeys(codes)) {
		unit, err := newest[store.Unit](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: code})
		if err != nil {
			return err
		}
		rule, err := stockRule(ctx, v, unit.Value)
		if err != nil {
			return err
		}
		if rule == nil {
			continue
		}
		portion, base, ok := inBase(rule.Portion)
		content, contentBase, known := inBase(unit.Value.Content)
		if !ok || !known || base != contentBase {
			continue
		}
		used, took, err := unitStock(ctx, v, laboratory, code, sessions)
		if err != nil {
			return err
		}
		analyses := 0
		for _, use := range used.Uses {
			if use.At != nil && *use.At > took.statedAt && *use.At <= *a.session.Value.StartedAt {
				analyses += use.Analyses
			}
		}
		if need := float64(portion * float64(analyses)); need > content*(1+1e-9) {
			a.observed = append(a.observed, calib.Flag{Code: "unit_overdrawn", Severity: calib.Warning, Subject: unit.Value.Material,
				Message: fmt.Sprintf("Unit %s (%s) of %s held %s %s, and %d analyses of %s %s were taken from it since: more than there was.", store.FormatCode(code), unit.Value.Label, unit.Value.Material,
					unit.Value.Content.Value, unit.Value.Content.Unit, analyses, rule.Portion.Value, rule.Portion.Unit),
				Advice: "Check which bottle was used, and state what is in it now."})
		}
	}
	return nil
}

// observeMatrices asks for identical treatment: samples of a matrix that none
// of the anchors has. It is silent where a matrix is not recorded.
func (a *assembly) observeMatrices(ctx context.Context, v *store.View, laboratory string, body store.Calibration) error {
	have := map[string]bool{}
	var names []string
	for _, value := range a.anchors {
		ref, err := inputOf(value.Inputs, "material")
		if err != nil {
			return nil
		}
		m, err := decodeVersion[store.Material](ctx, v, ref)
		if err != nil {
			return err
		}
		matrix := store.Fold(m.Value.Matrix)
		if matrix == "" {
			return nil
		}
		if !have[matrix] {
			have[matrix] = true
			names = append(names, m.Value.Matrix)
		}
	}
	if len(have) == 0 {
		return nil
	}
	other := map[string][]int{} // readings by matrix
	written := map[string]string{}
	for _, r := range body.Results {
		if r.Role != calib.Sample {
			continue
		}
		sample, err := newest[store.Sample](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindSample, Code: r.Subject})
		if ignoreNotFound(err) != nil {
			return err
		}
		if err != nil {
			continue // a material measured as an unknown
		}
		if matrix := store.Fold(sample.Value.Matrix); matrix != "" && !have[matrix] {
			other[matrix] = append(other[matrix], r.Readings...)
			written[matrix] = sample.Value.Matrix
		}
	}
	slices.Sort(names)
	for _, matrix := range slices.Sorted(mapKeys(other)) {
		slices.Sort(other[matrix])
		a.observed = append(a.observed, calib.Flag{Code: "matrix_mismatch", Severity: calib.Warning, Readings: other[matrix],
			Message: fmt.Sprintf("Samples of %s are put on the scale by anchors of %s: what the preparation does to one it may not do to the other.", written[matrix], strings.Join(names, ", ")),
			Advice:  "Use anchors of the samples' kind that went through the same treatment, or state evidence that the two behave alike."})
	}
	return nil
}

// observeGroups looks for samples whose group (tray, acid batch, culture,
// reagent lot) holds no anchor.
func (a *assembly) observeGroups(_ context.Context, _ *store.View, _ string, _ store.Calibration) error {
	anchored, samples := map[string]bool{}, map[string][]int{}
	for _, rd := range a.readings {
		switch {
		case rd.Group == "" || a.excluded[rd.Number]:
		case rd.Role == calib.Anchor:
			anchored[rd.Group] = true
		case rd.Role == calib.Sample:
			samples[rd.Group] = append(samples[rd.Group], rd.Number)
		}
	}
	for _, group := range slices.Sorted(mapKeys(samples)) {
		if !anchored[group] {
			a.observed = append(a.observed, calib.Flag{Code: "group_without_anchor", Severity: calib.Warning, Readings: samples[group],
				Message: fmt.Sprintf("The group %s holds samples and no anchor: what happened to the group as a whole is not seen.", group),
				Advice:  "Put anchors into every group that is treated together."})
		}
	}
	return nil
}
