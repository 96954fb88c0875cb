package registry

import (
	"context"
	"fmt"
	"slices"

	"deltamoor/calib"
	"deltamoor/store"
)

// opens tells whether a change of state opens a unit: being opened, again too,
// or taken into use from sealed.
func opens(from, to string) bool {
	return to == "open" || (to == "in-use" && from == "sealed")
}

// flagUnit holds a unit that the fit used against the limits of its material:
// openings, age since the first opening, suspicion. It looks at the versions
// that the fit names.
func (a *assembly) flagUnit(ctx context.Context, v source, ref store.Ref) error {
	unit, err := decodeVersion[store.Unit](ctx, v, ref)
	if err != nil {
		return err
	}
	material, err := inputOf(unit.Inputs, "material")
	if err != nil {
		return nil // a unit recorded without its material's version has no limits
	}
	m, err := decodeVersion[store.Material](ctx, v, material)
	if err != nil {
		return err
	}
	a.flags = append(a.flags, unitFlags(unit, m.Value.Stock, a.session.Value.StartedAt)...)
	return nil
}

// flagPortions flags readings of anchors and controls whose test portion was
// below the least that is their material, by the version that the value names.
func (a *assembly) flagPortions(ctx context.Context, v source) error {
	values := slices.Clone(a.anchors)
	for _, code := range slices.Sorted(mapKeys(a.controls)) {
		if value := a.controls[code]; !slices.ContainsFunc(values, func(o store.Version[store.Value]) bool { return o.Value.Material == value.Value.Material }) {
			values = append(values, value)
		}
	}
	for _, value := range values {
		ref, err := inputOf(value.Inputs, "material")
		if err != nil {
			continue // a value recorded without its material's version has no least portion
		}
		m, err := decodeVersion[store.Material](ctx, v, ref)
		if err != nil {
			return err
		}
		least, base, ok := inBase(m.Value.Minimum)
		if !ok || base != "g" {
			continue
		}
		var below []int
		for _, rd := range a.readings {
			if x := amountOf(rd); rd.Material == m.Code && !a.excluded[rd.Number] && x > 0 && x < least*1000 {
				below = append(below, rd.Number)
			}
		}
		if len(below) > 0 {
			a.flags = append(a.flags, calib.Flag{Code: "portion_too_small", Severity: calib.Warning, Subject: m.Code, Readings: below,
				Message: fmt.Sprintf("%d portions of %s were below %s %s, the least that is the material.", len(below), m.Code, m.Value.Minimum.Value, m.Value.Minimum.Unit), Advice: "Weigh more: its homogeneity is not known for less."})
		}
	}
	return nil
}

func unitFlags(unit store.Version[store.Unit], rule *store.StockRule, used *store.Instant) []calib.Flag {
	var flags []calib.Flag
	u := unit.Value
	name := fmt.Sprintf("%s (%s) of %s", store.FormatCode(unit.Code), u.Label, u.Material)
	if rule != nil && rule.MaximumOpenings > 0 && u.Openings > rule.MaximumOpenings {
		flags = append(flags, calib.Flag{Code: "opened_too_often", Severity: calib.Warning, Subject: u.Material,
			Message: fmt.Sprintf("Unit %s was opened %d times; its material allows %d.", name, u.Openings, rule.MaximumOpenings), Advice: "Take a fresh unit and check it beside this one."})
	}
	if rule != nil && rule.MaximumAgeDays > 0 && u.OpenedAt != nil && used != nil && daysBetween(*u.OpenedAt, *used) > rule.MaximumAgeDays {
		flags = append(flags, calib.Flag{Code: "open_too_long", Severity: calib.Warning, Subject: u.Material,
			Message: fmt.Sprintf("Unit %s had been open for %.0f days; its material allows %g.", name, daysBetween(*u.OpenedAt, *used), rule.MaximumAgeDays), Advice: "Take a fresh unit and check it beside this one."})
	}
	for _, x := range u.Excursions {
		if used == nil || *used >= x.At {
			flags = append(flags, calib.Flag{Code: "storage_excursion", Severity: calib.Warning, Subject: u.Material,
				Message: fmt.Sprintf("Unit %s was not stored as it should be on %s: %s", name, x.At.Time().Format("2006-01-02"), x.What), Advice: "Check it beside a unit that was."})
		}
	}
	if (u.State == "suspect" || u.State == "quarantined") && (u.SuspectSince == nil || used == nil || *used >= *u.SuspectSince) {
		flags = append(flags, calib.Flag{Code: "unit_in_doubt", Severity: calib.Serious, Subject: u.Material,
			Message: fmt.Sprintf("Unit %s is %s: %s", name, u.State, nameOr(unit.Reason, "no reason was given")), Advice: "Decide about the unit before the session."})
	}
	return flags
}

// unitWarnings are the flags of the units that readings about to be imported name.
func unitWarnings(ctx context.Context, v *store.View, laboratory string, readings []store.Reading, started *store.Instant) ([]calib.Flag, error) {
	units := map[string]bool{}
	for _, rd := range readings {
		if rd.Unit != "" {
			units[rd.Unit] = true
		}
	}
	var flags []calib.Flag
	for _, code := range slices.Sorted(mapKeys(units)) {
		unit, err := newest[store.Unit](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: code})
		if err != nil {
			return nil, err
		}
		rule, err := stockRule(ctx, v, unit.Value)
		if err != nil {
			return nil, err
		}
		flags = append(flags, unitFlags(unit.Version, rule, started)...)
	}
	return flags, nil
}
