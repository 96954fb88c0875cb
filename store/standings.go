package store

import (
	"context"
	"fmt"
)

// A Standing is what had been said of a version by a moment.
type Standing struct {
	State      State
	RecordedAt Instant
	Decisions  []Version[Decision] // in order
}

// keysPerStatement bounds how many records one statement asks for.
const keysPerStatement = 200

// Standings returns the states of many versions at a moment, of any laboratory,
// by reference without hash. Versions that were not recorded by then are
// missing. It does not see what a transaction has queued.
func (v *View) Standings(ctx context.Context, refs []Ref, m Moment) (map[Ref]Standing, error) {
	keys := make(map[string][]Key)
	wantedVersions := make(map[Key][]int, len(refs))
	for _, r := range refs {
		if _, ok := wantedVersions[r.Key]; !ok {
			keys[r.Laboratory] = append(keys[r.Laboratory], r.Key)
		}
		wantedVersions[r.Key] = append(wantedVersions[r.Key], r.Version)
	}
	found := make(map[Ref]Standing, len(refs))
	for laboratory, all := range keys {
		as, err := v.asOf(ctx, laboratory, m)
		if err != nil {
			return nil, err
		}
		valid, err := v.validAt(ctx, laboratory, m)
		if err != nil {
			return nil, err
		}
		for len(all) > 0 {
			n := min(len(all), keysPerStatement)
			histories, decisions, err := v.histories(ctx, laboratory, all[:n], as)
			if err != nil {
				return nil, err
			}
			for key, history := range histories {
				for i, h := range history {
					for _, version := range wantedVersions[key] {
						if version != h.version {
							continue
						}
						ref := Ref{Key: key, Version: h.version}
						found[ref] = Standing{State: stateOf(history, i, key.Kind.Decided(), valid, as), RecordedAt: h.recordedAt, Decisions: decisions[DecisionCode(ref)]}
						break
					}
				}
			}
			all = all[n:]
		}
	}
	return found, nil
}

const selectHistories = `) SELECT v.kind, v.code, v.version, v.recorded_at, v.valid_from
	FROM wanted w JOIN versions v ON v.laboratory = w.laboratory AND v.kind = w.kind AND v.code = w.code
	WHERE v.recorded_at <= $2
	ORDER BY v.kind, v.code, v.version`

// histories returns the histories of many records by a time, and the decisions on them by code.
func (v *View) histories(ctx context.Context, laboratory string, keys []Key, asOf Instant) (map[Key][]held, map[string][]Version[Decision], error) {
	all := make(map[Key][]held, len(keys))
	var codes []string
	refs := make([]wanted, len(keys))
	for i, k := range keys {
		refs[i] = wanted{Key: k}
	}
	list, err := wantedList(refs)
	if err != nil {
		return nil, nil, err
	}
	rows, err := v.rows(ctx, 5, v.q.engine.withWanted+selectHistories, list, int64(asOf))
	if err != nil {
		return nil, nil, fmt.Errorf("read histories: %w", err)
	}
	for _, row := range rows {
		key := Key{Laboratory: laboratory, Kind: Kind(fmt.Sprint(row[0])), Code: fmt.Sprint(row[1])}
		version, _ := row[2].(int64)
		at, _ := row[3].(int64)
		h := held{version: int(version), recordedAt: Instant(at)}
		if from, ok := row[4].(int64); ok {
			h.validFrom = (*Instant)(&from)
		}
		all[key] = append(all[key], h)
		if key.Kind.Decided() {
			codes = append(codes, DecisionCode(Ref{Key: key, Version: h.version}))
		}
	}
	decisions, err := v.decisions(ctx, laboratory, codes, asOf)
	if err != nil {
		return nil, nil, fmt.Errorf("read decisions: %w", err)
	}
	for key, history := range all {
		for i, h := range history {
			for _, d := range decisions[DecisionCode(Ref{Key: key, Version: h.version})] {
				history[i].decisions = append(history[i].decisions, said{act: d.Value.Act, recordedAt: d.RecordedAt, effectAt: d.Value.EffectAt})
			}
		}
	}
	return all, decisions, nil
}
