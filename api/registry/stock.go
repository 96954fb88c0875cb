package registry

import (
	"context"
	"fmt"
	"math"
	"slices"

	"deltamoor/calib/uncertain"
	"deltamoor/store"
)

// stockRule is what the newest version of a unit's material asks for; nil for nothing.
func stockRule(ctx context.Context, v *store.View, u store.Unit) (*store.StockRule, error) {
	m, err := newest[store.Material](ctx, v, store.Key{Laboratory: u.MaterialLaboratory, Kind: store.KindMaterial, Code: u.Material})
	return m.Value.Stock, err
}

// A UseEntry is one session's use of a unit, logged through its label.
type UseEntry struct {
	Unit, Session string
	At            *store.Instant
	Readings      int
	// Analyses counts passages through the instrument, each of which takes a portion.
	Analyses int
}

// A UnitStock is one unit and what became of it.
type UnitStock struct {
	Unit Item[store.Unit]
	Uses []UseEntry
	// Left is its content as stated, less the portions used since; nil where no content is stated.
	Left *float64
}

// A MaterialStock is what is left of a material.
type MaterialStock struct {
	Material Item[store.Material]
	Units    []UnitStock
	// LeftUnit is the unit of measurement of Left and of the forecast.
	LeftUnit string
	Forecast *Forecast
	// WithoutForecast says why there is no forecast.
	WithoutForecast string
}

// A Forecast says when a material runs out, if it is used as it was. Use is
// taken as portions x of any size at random times (a compound Poisson process),
// from which, with L left, X = Σx over T days and d = Σx²/X:
//
//	rate r = X/T,  t = L/r,  u²(t) = (d·L/r²)·(1 + L/X)
//
// The first term is the chance of what is still to come, the second that of the
// rate. Earliest and Latest hold the day at 95 %.
type Forecast struct {
	// Basis: "portions" (sessions' analyses, each of the material's portion),
	// "content" (statements of what is left) or "units" (units emptied).
	Basis      string
	Events     int
	Since      store.Instant
	Left       float64
	RatePerDay float64
	URate      float64
	Days       float64 // from now
	UDays      float64
	RunsOut    store.Instant
	Earliest   store.Instant
	Latest     store.Instant
}

// A consumption is an amount taken at a time.
type consumption struct {
	at     store.Instant
	amount float64
}

const microsPerDay = 86400e6

// forecast extrapolates consumptions. The window begins with the first of
// them, whose own amount is therefore before it.
func forecast(basis string, taken []consumption, left float64, now store.Instant) (*Forecast, string) {
	slices.SortFunc(taken, func(a, b consumption) int { return int(min(max(a.at-b.at, -1), 1)) })
	if len(taken) < 4 {
		return nil, fmt.Sprintf("use was logged %d times; a forecast needs four", len(taken))
	}
	f := &Forecast{Basis: basis, Events: len(taken), Since: taken[0].at, Left: left}
	var sum, squares float64
	for _, c := range taken[1:] {
		sum += c.amount
		squares += c.amount * c.amount
	}
	days := daysBetween(f.Since, now)
	if !(sum > 0) || !(days > 0) {
		return nil, "nothing was used since it was first logged"
	}
	f.RatePerDay = sum / days
	d := squares / sum
	f.URate = math.Sqrt(f.RatePerDay * d / days)
	f.Days = left / f.RatePerDay
	f.UDays = math.Sqrt(d * left / (f.RatePerDay * f.RatePerDay) * (1 + left/sum))
	k := uncertain.CoverageFactor(0.95, float64(len(taken)-2))
	day := func(x float64) store.Instant { // a forecast beyond a century is no better told
		return now + store.Instant(math.Min(math.Max(x, 0), 36525)*microsPerDay)
	}
	f.RunsOut, f.Earliest, f.Latest = day(f.Days), day(f.Days-k*f.UDays), day(f.Days+k*f.UDays)
	return f, ""
}

// inBase turns an amount into grams or litres; ok is false for other units.
func inBase(a *store.Amount) (x float64, base string, ok bool) {
	if a == nil {
		return 0, "", false
	}
	x, ok = new(complaints).number("", a.Value)
	factor, known := map[string]struct {
		f    float64
		base string
	}{"kg": {1e3, "g"}, "g": {1, "g"}, "mg": {1e-3, "g"}, "µg": {1e-6, "g"}, "ug": {1e-6, "g"}, "L": {1, "L"}, "l": {1, "L"}, "mL": {1e-3, "L"}, "ml": {1e-3, "L"}, "µL": {1e-6, "L"}, "uL": {1e-6, "L"}}[a.Unit]
	return x * factor.f, factor.base, ok && known
}

func usable(state string) bool {
	return state != "empty" && state != "disposed" && state != "quarantined"
}

// Stock tells what is left of a material, who used it, and when it runs out.
func (r *Registry) Stock(ctx context.Context, actor Actor, material string) (MaterialStock, error) {
	var out MaterialStock
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key, err := findMaterial(ctx, v, actor.Laboratory, material)
		if err != nil {
			return err
		}
		out, err = stockOf(ctx, v, actor.Laboratory, key, store.InstantOf(r.now()))
		return err
	})
	return out, err
}

func stockOf(ctx context.Context, v *store.View, laboratory string, key store.Key, now store.Instant) (MaterialStock, error) {
	var out MaterialStock
	var err error
	if out.Material, err = newest[store.Material](ctx, v, key); err != nil {
		return out, err
	}
	units, err := above(ctx, v, laboratory, key, store.KindUnit)
	if err != nil {
		return out, err
	}
	portion, portionBase, hasPortion := 0.0, "", false
	if rule := out.Material.Value.Stock; rule != nil {
		portion, portionBase, hasPortion = inBase(rule.Portion)
	}
	sessions := map[string]sessionUse{}
	var portions, stated, emptied []consumption
	left, unitsLeft, contents := 0.0, 0, 0
	for _, unit := range units {
		u, took, err := unitStock(ctx, v, laboratory, unit.Code, sessions)
		if err != nil {
			return out, err
		}
		stated = append(stated, took.stated...)
		emptied = append(emptied, took.emptied...)
		x, base, ok := inBase(u.Unit.Value.Content)
		for _, use := range u.Uses {
			if use.At != nil && hasPortion {
				portions = append(portions, consumption{*use.At, portion * float64(use.Analyses)})
				if ok && base == portionBase && *use.At > took.statedAt {
					x -= portion * float64(use.Analyses)
				}
			}
		}
		for _, k := range took.taken {
			if ok && base == took.takenBase && k.at > took.statedAt {
				x -= k.amount
			}
		}
		if hasPortion && took.takenBase == portionBase {
			portions = append(portions, took.taken...)
		}
		if ok && base == took.takenBase {
			stated = append(stated, took.taken...)
		}
		if ok {
			x = max(x, 0)
			u.Left, out.LeftUnit = &x, base
		}
		if usable(u.Unit.Value.State) {
			unitsLeft++
			if ok {
				left += x
				contents++
			}
		}
		out.Units = append(out.Units, u)
	}
	switch {
	case hasPortion && contents == unitsLeft && contents > 0 && out.LeftUnit == portionBase && len(portions) > 0:
		out.Forecast, out.WithoutForecast = forecast("portions", portions, left, now)
	case contents == unitsLeft && contents > 0 && len(stated) >= 4:
		out.Forecast, out.WithoutForecast = forecast("content", stated, left, now)
	default:
		out.LeftUnit = "units"
		out.Forecast, out.WithoutForecast = forecast("units", emptied, float64(unitsLeft), now)
	}
	return out, nil
}

// withdrawn is what the versions of a unit say was used.
type withdrawn struct {
	stated, emptied []consumption
	statedAt        store.Instant // of the last statement of its content
	// taken is what was logged outside sessions, in takenBase.
	taken     []consumption
	takenBase string
}

type sessionUse struct {
	at       *store.Instant
	analyses map[string]int
}

func unitStock(ctx context.Context, v *store.View, laboratory, code string, sessions map[string]sessionUse) (UnitStock, withdrawn, error) {
	var out UnitStock
	var t withdrawn
	key := store.Key{Laboratory: laboratory, Kind: store.KindUnit, Code: code}
	var err error
	if out.Unit, err = newest[store.Unit](ctx, v, key); err != nil {
		return out, t, err
	}
	before, beforeBase, known := 0.0, "", false
	for after := 0; ; {
		raws, err := v.Versions(ctx, key, after, MaxPage)
		if err != nil {
			return out, t, err
		}
		for _, raw := range raws {
			after = raw.Ref.Version
			u, err := store.Decode[store.Unit](raw)
			if err != nil {
				return out, t, err
			}
			x, base, ok := inBase(u.Value.Content)
			if u.Value.State == "empty" && known {
				x, base, ok = 0, beforeBase, true
			}
			at := u.RecordedAt
			if u.Value.At != nil {
				at = *u.Value.At
			}
			if u.Value.State == "empty" && len(t.emptied) == 0 {
				t.emptied = append(t.emptied, consumption{at, 1})
			}
			if ok && known && base == beforeBase && x < before {
				t.stated = append(t.stated, consumption{at, before - x})
			}
			if ok && (!known || x != before) {
				t.statedAt = max(t.statedAt, at)
			}
			if amount, of, ok := inBase(u.Value.Taken); ok {
				t.taken, t.takenBase = append(t.taken, consumption{at, amount}), of
			}
			before, beforeBase, known = x, base, ok
		}
		if len(raws) < MaxPage {
			break
		}
	}
	for after := ""; ; {
		uses, err := v.Uses(ctx, laboratory, code, after, MaxPage)
		if err != nil {
			return out, t, err
		}
		for _, use := range uses {
			s, ok := sessions[use.Session]
			if !ok {
				if s, err = sessionUses(ctx, v, laboratory, use.Session); err != nil {
					return out, t, err
				}
				sessions[use.Session] = s
			}
			out.Uses = append(out.Uses, UseEntry{Unit: code, Session: use.Session, At: s.at, Readings: use.Readings, Analyses: s.analyses[code]})
			after = use.Session
		}
		if len(uses) < MaxPage {
			return out, t, nil
		}
	}
}

// sessionUses counts the analyses of each unit in a session: readings of
// several quantities or peaks of one analysis took one portion.
func sessionUses(ctx context.Context, v *store.View, laboratory, session string) (sessionUse, error) {
	s, err := newest[store.Session](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindSession, Code: session})
	if err != nil {
		return sessionUse{}, err
	}
	out := sessionUse{at: s.Value.StartedAt, analyses: map[string]int{}}
	seen := map[[2]string]bool{}
	err = v.Readings(ctx, laboratory, session, func(rd store.Reading) error {
		name := rd.Preparation
		switch {
		case name != "":
		case rd.Analysis != "":
			name = "\x1f" + rd.Analysis
		case rd.Position != nil:
			name = fmt.Sprint("\x1f\x1f", *rd.Position)
		default:
			name = fmt.Sprint("\x1f\x1f\x1f", rd.Number)
		}
		if at := [2]string{rd.Unit, name}; rd.Unit != "" && !seen[at] {
			seen[at] = true
			out.analyses[rd.Unit]++
		}
		return nil
	})
	return out, err
}
