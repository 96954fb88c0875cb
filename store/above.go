package store

import (
	"context"
	"fmt"
	"strings"
)

// An AboveQuery asks for everything that rests on some versions, through any
// part, within one laboratory.
type AboveQuery struct {
	// Laboratory whose versions are asked for.
	Laboratory string
	// Roots are any versions; they are not part of the answer. Hashes do not count.
	Roots []Ref
	// AsOf leaves out what was recorded later; nil is now.
	AsOf *Instant
	// After begins after a ledger position; -1 at the beginning.
	After int64
	// Limit 0 is no limit.
	Limit int
}

// A VersionAbove rests on a root.
type VersionAbove struct {
	Ref        // with its hash
	Position   int64
	Depth      int // generations above the nearest root, from 1
	RecordedAt Instant
	RecordedBy string
}

// Joins are crosswise for the reason of selectAffected. A version may be met at
// several depths; the least counts.
const selectAbove = `), above (laboratory, kind, code, version, depth) AS (
		SELECT r.laboratory, r.kind, r.code, r.version, 0 FROM wanted w CROSS JOIN versions r
		WHERE r.laboratory = w.laboratory AND r.kind = w.kind AND r.code = w.code AND r.version = w.version
		UNION
		SELECT e.laboratory, e.from_kind, e.from_code, e.from_version, u.depth + 1 FROM above u CROSS JOIN edges e
		WHERE e.laboratory = $2 AND e.to_laboratory = u.laboratory AND e.to_kind = u.kind AND e.to_code = u.code AND e.to_version = u.version
			AND e.part <> 'subject' AND e.recorded_at <= $3
	), met (laboratory, kind, code, version, depth) AS (
		SELECT laboratory, kind, code, version, MIN(depth) FROM above GROUP BY laboratory, kind, code, version
	)
	SELECT v.kind, v.code, v.version, v.hash, v.position, u.depth, v.recorded_at, v.recorded_by
	FROM met u CROSS JOIN versions v
	WHERE u.depth > 0 AND v.laboratory = u.laboratory AND v.kind = u.kind AND v.code = u.code AND v.version = u.version AND v.position > $4
	ORDER BY v.position LIMIT $5`

// Above calls row for everything that rests on the roots, at any depth, in the
// order of the ledger, in which a version stands after all it rests on.
// Decisions on versions are not followed: a number does not rest on them. The
// database walks and sorts; nothing is kept here. Row must not use this view: its connection is busy.
func (v *View) Above(ctx context.Context, q AboveQuery, row func(VersionAbove) error) error {
	as, err := v.asOf(ctx, q.Laboratory, Moment{AsOf: q.AsOf})
	if err != nil {
		return err
	}
	roots := make([]wanted, len(q.Roots))
	for i, r := range q.Roots {
		roots[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(roots)
	if err != nil {
		return err
	}
	limit := int64(q.Limit)
	if limit <= 0 {
		limit = int64(always)
	}
	statement := strings.Replace(v.q.engine.withWanted, "wanted", "RECURSIVE wanted", 1) + selectAbove
	err = v.q.each(ctx, statement, []any{list, q.Laboratory, int64(as), q.After, limit}, func(scan func(...any) error) error {
		a := VersionAbove{Ref: Ref{Key: Key{Laboratory: q.Laboratory}}}
		var hash []byte
		if err := scan(&a.Kind, &a.Code, &a.Version, &hash, &a.Position, &a.Depth, &a.RecordedAt, &a.RecordedBy); err != nil {
			return err
		}
		copy(a.Hash[:], hash)
		return row(a)
	})
	if err != nil {
		return fmt.Errorf("read what rests on %d versions of %s: %w", len(q.Roots), q.Laboratory, err)
	}
	return nil
}

const selectEdgesOf = `) SELECT e.part, e.laboratory, e.from_kind, e.from_code, e.from_version, e.to_laboratory, e.to_kind, e.to_code, e.to_version
	FROM wanted w CROSS JOIN edges e
	WHERE e.laboratory = w.laboratory AND e.from_kind = w.kind AND e.from_code = w.code AND e.from_version = w.version
	ORDER BY e.laboratory, e.from_kind, e.from_code, e.from_version, e.part, e.to_laboratory, e.to_kind, e.to_code, e.to_version`

// EdgesOf calls row for what each of some versions rests on, in one statement.
// Row must not use this view.
func (v *View) EdgesOf(ctx context.Context, refs []Ref, row func(Edge) error) error {
	wants := make([]wanted, len(refs))
	for i, r := range refs {
		wants[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(wants)
	if err != nil {
		return err
	}
	err = v.q.each(ctx, v.q.engine.withWanted+selectEdgesOf, []any{list}, func(scan func(...any) error) error {
		var e Edge
		if err := scan(&e.Part, &e.From.Laboratory, &e.From.Kind, &e.From.Code, &e.From.Version,
			&e.To.Laboratory, &e.To.Kind, &e.To.Code, &e.To.Version); err != nil {
			return err
		}
		return row(e)
	})
	if err != nil {
		return fmt.Errorf("read what %d versions rest on: %w", len(refs), err)
	}
	return nil
}
