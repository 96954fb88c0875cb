package registry

import (
	"context"
	"fmt"
	"slices"

	"deltamoor/store"
)

// A DueItem is something that has to be looked at by a day.
type DueItem struct {
	// What: expiry, recheck, successor, opened_too_often, open_too_long, in_doubt.
	What     string
	Material string
	Code     string // of the value or unit concerned
	At       store.Instant
	Sentence string
}

// Due lists what falls due within a number of days: values that expire,
// materials to check again, successors to begin, units beyond their limits. The
// soonest stands first.
func (r *Registry) Due(ctx context.Context, actor Actor, days float64) ([]DueItem, error) {
	var out []DueItem
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		now := store.InstantOf(r.now())
		until := now + store.Instant(min(max(days, 0), 36525)*microsPerDay)
		add := func(what, material, code string, at store.Instant, format string, args ...any) {
			if at <= until {
				out = append(out, DueItem{What: what, Material: material, Code: code, At: at, Sentence: fmt.Sprintf(format, args...)})
			}
		}
		for after := ""; ; {
			raws, next, err := v.List(ctx, store.ListQuery{Laboratory: actor.Laboratory, Kind: store.KindValue, After: after, Limit: MaxPage})
			if err != nil {
				return err
			}
			for _, raw := range raws {
				value, err := store.Decode[store.Value](raw.Raw)
				if err != nil {
					return err
				}
				if x := value.Value.ExpiresAt; x != nil && raw.State == store.Approved {
					add("expiry", value.Value.Material, value.Code, *x, "The value of %s on %s expires on %s.", value.Value.Material, value.Value.Scale, x.Time().Format("2006-01-02"))
				}
			}
			if after = next; after == "" {
				break
			}
		}
		for after := ""; ; {
			raws, next, err := v.List(ctx, store.ListQuery{Laboratory: actor.Laboratory, Kind: store.KindMaterial, After: after, Limit: MaxPage, Newest: true})
			if err != nil {
				return err
			}
			for _, raw := range raws {
				if err := dueOf(ctx, v, actor.Laboratory, raw.Key, now, add); err != nil {
					return err
				}
			}
			if after = next; after == "" {
				break
			}
		}
		slices.SortStableFunc(out, func(a, b DueItem) int { return int(min(max(a.At-b.At, -1), 1)) })
		return nil
	})
	return out, err
}

func dueOf(ctx context.Context, v *store.View, laboratory string, key store.Key, now store.Instant, add func(what, material, code string, at store.Instant, format string, args ...any)) error {
	s, err := stockOf(ctx, v, laboratory, key, now)
	if err != nil {
		return err
	}
	rule := s.Material.Value.Stock
	for _, u := range s.Units {
		if !usable(u.Unit.Value.State) && u.Unit.Value.State != "quarantined" {
			continue
		}
		for _, f := range unitFlags(u.Unit.Version, rule, &now) {
			what := f.Code
			if what == "unit_in_doubt" {
				what = "in_doubt"
			}
			add(what, key.Code, u.Unit.Code, now, "%s", f.Message)
		}
	}
	if rule == nil {
		return nil
	}
	if f := s.Forecast; f != nil && rule.LeadDays > 0 {
		begin := f.Earliest - store.Instant(rule.LeadDays*microsPerDay)
		add("successor", key.Code, key.Code, max(begin, now), "%s may run out from %s on (expected %s); a successor takes %g days, so it must be begun by %s.",
			key.Code, f.Earliest.Time().Format("2006-01-02"), f.RunsOut.Time().Format("2006-01-02"), rule.LeadDays, begin.Time().Format("2006-01-02"))
	}
	if rule.RecheckDays > 0 {
		last := s.Material.RecordedAt
		for after := ""; ; {
			rows, next, err := v.Results(ctx, store.ResultQuery{Laboratory: laboratory, Subject: key.Code, After: after, Limit: MaxPage})
			if err != nil {
				return err
			}
			for _, row := range rows {
				if row.At != nil {
					last = max(last, *row.At)
				}
			}
			if after = next; after == "" {
				break
			}
		}
		at := last + store.Instant(rule.RecheckDays*microsPerDay)
		add("recheck", key.Code, key.Code, at, "%s was last measured on %s and is to be checked every %g days.", key.Code, last.Time().Format("2006-01-02"), rule.RecheckDays)
	}
	return nil
}
