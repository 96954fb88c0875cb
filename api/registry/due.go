package registry

import (
	"context"
	"fmt"
	"slices"

	"deltamoor/store"
)

// A DueItem is something that has to be looked at by a day.
type DueItem struct {
	// What: expiry, recheck, suspect, successor, opened_too_often, open_too_long,
	// storage_excursion, in_doubt.
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
		return recheckOf(ctx, v, laboratory, s.Material, now, add)
	}
	return nil
}

// recheckOf tells when the values of a material are to be checked, and what the
// checks so far propose.
func recheckOf(ctx context.Context, v *store.View, laboratory string, m Item[store.Material], now store.Instant, add func(what, material, code string, at store.Instant, format string, args ...any)) error {
	rule := m.Value.Stock
	raws, _, err := v.List(ctx, store.ListQuery{Laboratory: laboratory, Kind: store.KindValue, Prefix: m.Code + "/", Limit: MaxPage})
	if err != nil {
		return err
	}
	valued := false
	for _, raw := range raws {
		if raw.State == store.Withdrawn {
			continue
		}
		it, err := item[store.Value](ctx, v, raw.Raw, store.Moment{})
		if err != nil {
			return err
		}
		mon, err := monitor(ctx, v, laboratory, m, it, now)
		if err != nil {
			return err
		}
		valued = true
		if mon.Next != nil {
			sentence := "%s on %s is to be checked every %g days"
			if n := len(mon.Points); n > 0 {
				sentence += "; it was last measured on " + mon.Points[n-1].At.Time().Format("2006-01-02")
			}
			if mon.Overdue {
				sentence += "; that is overdue"
			}
			add("recheck", m.Code, it.Code, *mon.Next, sentence+".", m.Code, it.Value.Scale, rule.RecheckDays)
		}
		if mon.Proposal != "" {
			add("suspect", m.Code, it.Code, now, "%s.", mon.Proposal)
		}
	}
	if !valued {
		at := m.RecordedAt + store.Instant(rule.RecheckDays*microsPerDay)
		add("recheck", m.Code, m.Code, at, "%s is to be checked every %g days and has no value yet.", m.Code, rule.RecheckDays)
	}
	return nil
}
