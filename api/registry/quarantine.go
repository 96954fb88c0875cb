package registry

import (
	"context"
	"slices"
	"strings"

	"deltamoor/calib"
	"deltamoor/store"
)

// Quarantine takes a unit out of use, in doubt since its last good moment. The
// sessions that used it later are not changed; [Registry.Affected] lists them.
func (r *Registry) Quarantine(ctx context.Context, actor Actor, code string, since store.Instant, e Edit) (Item[store.Unit], error) {
	var out Item[store.Unit]
	if strings.TrimSpace(e.Reason) == "" {
		return out, Complain("this unit cannot be quarantined", []Complaint{{Place: "body.reason", Found: "nothing", Expected: "why it is in doubt"}})
	}
	key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindUnit, Code: code}
	err := r.write(ctx, actor, MayImport, func(ctx context.Context, tx *store.Tx) error {
		old, err := newest[store.Unit](ctx, &tx.View, key)
		if err != nil {
			return err
		}
		body := old.Value
		if body.State != "quarantined" && !slices.Contains(unitSteps[body.State], "quarantined") {
			return Refuse(Conflict, "unit %s is %s and cannot be quarantined", store.FormatCode(code), body.State)
		}
		body.State, body.SuspectSince = "quarantined", &since
		if e.After == 0 {
			e.After = old.Ref.Version
		}
		_, err = appendVersion(ctx, tx, actor, key, e, old.Inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	return reread[store.Unit](ctx, r, actor, store.KindUnit, code)
}

// An AffectedSession used a unit since a moment.
type AffectedSession struct {
	Session Item[store.Session]
	// Roles are the roles that the unit's readings had, and how many.
	Roles        map[calib.Role]int
	Calibrations []Item[store.Calibration]
	Finals       []string
	Values       []string // values that rest on the session
	Reports      []string
}

// Affected lists the sessions that used a unit since a moment (nil: since the
// unit's own last good moment), with what rests on them: newest calibrations,
// final and assigned values, reports.
func (r *Registry) Affected(ctx context.Context, actor Actor, unit string, since *store.Instant) ([]AffectedSession, error) {
	var out []AffectedSession
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		u, err := newest[store.Unit](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindUnit, Code: unit})
		if err != nil {
			return err
		}
		from := since
		if from == nil {
			from = u.Value.SuspectSince
		}
		for after := ""; ; {
			uses, err := v.Uses(ctx, actor.Laboratory, unit, after, MaxPage)
			if err != nil {
				return err
			}
			for _, use := range uses {
				after = use.Session
				s, err := newest[store.Session](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindSession, Code: use.Session})
				if err != nil {
					return err
				}
				end := s.Value.EndedAt
				if end == nil {
					end = s.Value.StartedAt
				}
				if from != nil && end != nil && *end < *from {
					continue
				}
				a, err := affected(ctx, v, s, unit)
				if err != nil {
					return err
				}
				out = append(out, a)
			}
			if len(uses) < MaxPage {
				return nil
			}
		}
	})
	return out, err
}

func affected(ctx context.Context, v *store.View, s Item[store.Session], unit string) (AffectedSession, error) {
	out := AffectedSession{Session: s, Roles: map[calib.Role]int{}}
	if err := v.Readings(ctx, s.Laboratory, s.Code, func(rd store.Reading) error {
		if rd.Unit == unit {
			out.Roles[rd.Role]++
		}
		return nil
	}); err != nil {
		return out, err
	}
	calibrations, err := above(ctx, v, s.Laboratory, s.Key, store.KindCalibration)
	if err != nil {
		return out, err
	}
	for _, key := range calibrations {
		c, err := newest[store.Calibration](ctx, v, key)
		if err != nil {
			return out, err
		}
		out.Calibrations = append(out.Calibrations, c)
		finals, err := above(ctx, v, s.Laboratory, key, store.KindFinal)
		if err != nil {
			return out, err
		}
		for _, f := range finals {
			out.Finals = append(out.Finals, f.Code)
			reports, err := above(ctx, v, s.Laboratory, f, store.KindReport)
			if err != nil {
				return out, err
			}
			for _, rep := range reports {
				if !slices.Contains(out.Reports, rep.Code) {
					out.Reports = append(out.Reports, rep.Code)
				}
			}
		}
		values, err := above(ctx, v, s.Laboratory, key, store.KindValue)
		if err != nil {
			return out, err
		}
		for _, val := range values {
			out.Values = append(out.Values, val.Code)
		}
	}
	return out, nil
}

// above are the records of a kind, of one laboratory, that name a record as an
// input, by code.
func above(ctx context.Context, v *store.View, laboratory string, key store.Key, kind store.Kind) ([]store.Key, error) {
	var out []store.Key
	for after := ""; ; {
		edges, next, err := v.EdgesTo(ctx, store.EdgeQuery{Laboratory: laboratory, To: key, FromKind: kind, After: after, Limit: MaxPage})
		if err != nil {
			return nil, err
		}
		for _, e := range edges {
			if len(out) == 0 || out[len(out)-1] != e.From.Key {
				out = append(out, e.From.Key)
			}
		}
		if after = next; after == "" {
			return out, nil
		}
	}
}
