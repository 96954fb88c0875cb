package store

import (
	"context"
	"encoding/json"
	"fmt"
)

// An Edge says that one version rests on another, and the part it plays. The
// hashes of the two are zero: they stand in the bodies.
type Edge struct {
	Part     string
	From, To Ref
}

const selectEdgesFrom = `SELECT part, to_laboratory, to_kind, to_code, to_version FROM edges
	WHERE laboratory = $1 AND from_kind = $2 AND from_code = $3 AND from_version = $4
	ORDER BY part, to_laboratory, to_kind, to_code, to_version`

// EdgesFrom returns what a version rests on, by part and key. Of ref only the
// key and the number count.
func (v *View) EdgesFrom(ctx context.Context, ref Ref) ([]Edge, error) {
	var edges []Edge
	err := v.q.each(ctx, selectEdgesFrom, []any{ref.Laboratory, string(ref.Kind), ref.Code, ref.Version}, func(scan func(...any) error) error {
		e := Edge{From: Ref{Key: ref.Key, Version: ref.Version}}
		err := scan(&e.Part, &e.To.Laboratory, &e.To.Kind, &e.To.Code, &e.To.Version)
		edges = append(edges, e)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read what %s rests on: %w", ref, err)
	}
	return edges, nil
}

// An EdgeQuery asks which versions rest on a record.
type EdgeQuery struct {
	// Laboratory whose versions are asked for; "" is that of To.
	Laboratory string
	To         Key
	// Version of To; 0 is any.
	Version int
	// FromKind "" is every kind.
	FromKind Kind
	// After is the cursor of the page before; "" begins.
	After string
	// Limit is at most MaxLimit; 0 is DefaultLimit.
	Limit int
	// AsOf leaves out what was recorded later; nil is now.
	AsOf *Instant
}

// edgeCursor is the key of the last edge of a page.
type edgeCursor struct {
	Kind    string `json:"k"`
	Code    string `json:"c"`
	Version int    `json:"v"`
	To      int    `json:"t"`
	Part    string `json:"p"`
}

const selectEdgesTo = `SELECT part, from_kind, from_code, from_version, to_version FROM edges
	WHERE laboratory = $1 AND to_laboratory = $2 AND to_kind = $3 AND to_code = $4
		AND ($5 = 0 OR to_version = $5) AND ($6 = '' OR from_kind = $6) AND recorded_at <= $7
		AND (from_kind, from_code, from_version, to_version, part) > ($8, $9, $10, $11, $12)
	ORDER BY from_kind, from_code, from_version, to_version, part LIMIT $13`

// EdgesTo returns a page of what rests on a record, in the order of kind, code
// and number, and the cursor of the next page, "" at the end.
func (v *View) EdgesTo(ctx context.Context, q EdgeQuery) ([]Edge, string, error) {
	laboratory := q.Laboratory
	if laboratory == "" {
		laboratory = q.To.Laboratory
	}
	var after edgeCursor
	if q.After != "" {
		if err := json.Unmarshal([]byte(q.After), &after); err != nil {
			return nil, "", &InvalidError{Place: "cursor", Found: q.After, Expected: "a cursor of the page before"}
		}
	}
	as, err := v.asOf(ctx, laboratory, Moment{AsOf: q.AsOf})
	if err != nil {
		return nil, "", err
	}
	limit := pageLimit(q.Limit)
	var edges []Edge
	args := []any{laboratory, q.To.Laboratory, string(q.To.Kind), q.To.Code, int64(q.Version), string(q.FromKind), int64(as),
		after.Kind, after.Code, after.Version, after.To, after.Part, limit + 1}
	err = v.q.each(ctx, selectEdgesTo, args, func(scan func(...any) error) error {
		e := Edge{From: Ref{Key: Key{Laboratory: laboratory}}, To: Ref{Key: q.To}}
		err := scan(&e.Part, &e.From.Kind, &e.From.Code, &e.From.Version, &e.To.Version)
		edges = append(edges, e)
		return err
	})
	if err != nil {
		return nil, "", fmt.Errorf("read what rests on %s: %w", q.To, err)
	}
	if len(edges) <= limit {
		return edges, "", nil
	}
	edges = edges[:limit]
	last := edges[limit-1]
	cursor, err := json.Marshal(edgeCursor{Kind: string(last.From.Kind), Code: last.From.Code, Version: last.From.Version, To: last.To.Version, Part: last.Part})
	return edges, string(cursor), err
}

const selectDown = `WITH RECURSIVE below (laboratory, kind, code, version) AS (
		SELECT DISTINCT laboratory, from_kind, from_code, from_version FROM edges
		WHERE laboratory = $1 AND from_kind = $2 AND from_code = $3 AND from_version = $4
		UNION
		SELECT e.to_laboratory, e.to_kind, e.to_code, e.to_version
		FROM below b JOIN edges e ON e.laboratory = b.laboratory AND e.from_kind = b.kind AND e.from_code = b.code AND e.from_version = b.version
	)
	SELECT e.part, e.laboratory, e.from_kind, e.from_code, e.from_version, e.to_laboratory, e.to_kind, e.to_code, e.to_version
	FROM (SELECT * FROM below LIMIT $5) b
	JOIN edges e ON e.laboratory = b.laboratory AND e.from_kind = b.kind AND e.from_code = b.code AND e.from_version = b.version
	ORDER BY e.laboratory, e.from_kind, e.from_code, e.from_version, e.part, e.to_laboratory, e.to_kind, e.to_code, e.to_version`

// Down returns every edge below a version, through all laboratories, down to
// what rests on nothing; at most the edges of limit versions. Of ref only the
// key and the number count.
func (v *View) Down(ctx context.Context, ref Ref, limit int) ([]Edge, error) {
	var edges []Edge
	args := []any{ref.Laboratory, string(ref.Kind), ref.Code, ref.Version, limit}
	err := v.q.each(ctx, selectDown, args, func(scan func(...any) error) error {
		var e Edge
		err := scan(&e.Part, &e.From.Laboratory, &e.From.Kind, &e.From.Code, &e.From.Version,
			&e.To.Laboratory, &e.To.Kind, &e.To.Code, &e.To.Version)
		edges = append(edges, e)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read what %s rests on, all the way down: %w", ref, err)
	}
	return edges, nil
}

// A Use is a session that used a unit.
type Use struct {
	Session  string
	Readings int
}

const selectUses = `SELECT session, readings FROM uses
	WHERE laboratory = $1 AND unit = $2 AND session > $3 ORDER BY session LIMIT $4`

// Uses returns up to limit sessions that used a unit, by code, beginning after
// the given one; limit 0 is DefaultLimit.
func (v *View) Uses(ctx context.Context, laboratory, unit, after string, limit int) ([]Use, error) {
	var uses []Use
	err := v.q.each(ctx, selectUses, []any{laboratory, unit, after, pageLimit(limit)}, func(scan func(...any) error) error {
		var u Use
		err := scan(&u.Session, &u.Readings)
		uses = append(uses, u)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read the uses of unit %s/%s: %w", laboratory, unit, err)
	}
	return uses, nil
}

var usesTable = table{"uses", []string{"laboratory", "session", "unit", "readings"}}

// writeUses writes how often each unit was used in the sessions of the act.
func (tx *Tx) writeUses(ctx context.Context) error {
	var rows [][]any
	for code, s := range tx.sessions {
		for unit, n := range s.units {
			rows = append(rows, []any{tx.laboratory, code, unit, int64(n)})
		}
	}
	return tx.q.insert(ctx, usesTable, rows, "ON CONFLICT (laboratory, session, unit) DO UPDATE SET readings = excluded.readings")
}
