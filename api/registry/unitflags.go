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
