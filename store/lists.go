package store

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"strconv"
	"strings"
)

// Held is a version in a list, with its state at the moment of the list.
type Held struct {
	Raw
	State State
}

// A ListQuery asks for records of one kind, in the order of their codes.
type ListQuery struct {
	Laboratory string
	Kind       Kind
	// After is the cursor: the code the page begins after.
	After string
	// Prefix restricts to codes that begin with it.
	Prefix string
	// Limit is at most MaxLimit; 0 is DefaultLimit.
	Limit int
	// Moment of the list; the zero Moment is now.
	Moment Moment
	// Newest lists the newest version of every record, drafts included; otherwise
	// the version in force of those records that have one.
	Newest bool
}

// codesEnd is greater than every code.
const codesEnd = "\U0010FFFF"

const (
	selectCurrents = `SELECT ` + versionColumns + `, c.held, c.until FROM currents c
		JOIN versions v ON v.laboratory = c.laboratory AND v.kind = c.kind AND v.code = c.code AND v.version = %s
		WHERE c.laboratory = $1 AND c.kind = $2 AND c.code > $3 AND c.code >= $4 AND c.code < $5
		ORDER BY c.code LIMIT $6`
	// A record with no version in force yet may have one since: it is looked at through
	// its newest version, and until tells.
	currentInForce = `CASE WHEN c.in_force > 0 THEN c.in_force ELSE c.newest END`
	selectCodes    = `SELECT DISTINCT v.code FROM versions v
		WHERE v.laboratory = $1 AND v.kind = $2 AND v.code > $3 AND v.code >= $4 AND v.code < $5 AND v.recorded_at <= $6
		ORDER BY v.code LIMIT $7`
)

var (
	selectInForce     = fmt.Sprintf(selectCurrents, currentInForce)
	selectNewestOfAll = fmt.Sprintf(strings.Replace(selectCurrents, "c.held, c.until", "c.state, c.until", 1), "c.newest")
)

// List returns a page of records and the cursor of the next page, "" at the end.
func (v *View) List(ctx context.Context, q ListQuery) ([]Held, string, error) {
	q.Limit = pageLimit(q.Limit)
	past, err := v.past(ctx, q.Laboratory, q.Moment)
	if err != nil {
		return nil, "", err
	}
	var page []Held
	var next string
	if past {
		page, next, err = v.listHistory(ctx, q)
	} else {
		page, next, err = v.listCurrents(ctx, q)
	}
	if err != nil {
		return nil, "", fmt.Errorf("list %s of %s: %w", q.Kind, q.Laboratory, err)
	}
	return page, next, nil
}

// past reports whether a read must look at history instead of the current rows.
func (v *View) past(ctx context.Context, laboratory string, m Moment) (bool, error) {
	if v.cut || m.ValidAt != nil {
		return true, nil
	}
	if m.AsOf == nil {
		return false, nil
	}
	h, err := v.Head(ctx, laboratory)
	return *m.AsOf < h.At, err
}

func (v *View) listCurrents(ctx context.Context, q ListQuery) ([]Held, string, error) {
	valid, err := v.validAt(ctx, q.Laboratory, q.Moment)
	if err != nil {
		return nil, "", err
	}
	statement := selectInForce
	if q.Newest {
		statement = selectNewestOfAll
	}
	var page []Held
	for after := q.After; ; {
		var found []Held
		var bodies []*string
		var stale []bool
		want := q.Limit + 1 - len(page)
		args := []any{q.Laboratory, string(q.Kind), after, q.Prefix, q.Prefix + codesEnd, want}
		err := v.q.each(ctx, statement, args, func(scan func(...any) error) error {
			var state string
			var until sql.Null[int64]
			raw, body, err := scanVersion(scan, &state, &until)
			found, bodies = append(found, Held{Raw: raw, State: State(state)}), append(bodies, body)
			stale = append(stale, until.Valid && Instant(until.V) <= valid)
			return err
		})
		if err != nil {
			return nil, "", err
		}
		for i, h := range found {
			if stale[i] {
				if h, err = v.recompute(ctx, h.Key, q); errors.Is(err, ErrNotFound) {
					continue
				} else if err != nil {
					return nil, "", err
				}
			} else if h.State == "" {
				continue // nothing in force
			} else if err := v.fill(ctx, &h.Raw, bodies[i]); err != nil {
				return nil, "", err
			}
			page = append(page, h)
		}
		if len(page) > q.Limit {
			page = page[:q.Limit]
			return page, page[q.Limit-1].Code, nil
		}
		if len(found) < want {
			return page, "", nil
		}
		after = found[len(found)-1].Code
	}
}

// recompute answers for one record of a list from its history.
func (v *View) recompute(ctx context.Context, key Key, q ListQuery) (Held, error) {
	if !q.Newest {
		raw, state, err := v.InForce(ctx, key, q.Moment)
		return Held{Raw: raw, State: state}, err
	}
	versions, valid, as, err := v.momentOf(ctx, key, q.Moment)
	if err != nil {
		return Held{}, err
	}
	if len(versions) == 0 {
		return Held{}, notFound("%s", key)
	}
	last := len(versions) - 1
	raw, err := v.Version(ctx, key, versions[last].version)
	return Held{Raw: raw, State: stateOf(versions, last, key.Kind.Decided(), valid, as)}, err
}

func (v *View) listHistory(ctx context.Context, q ListQuery) ([]Held, string, error) {
	as, err := v.asOf(ctx, q.Laboratory, q.Moment)
	if err != nil {
		return nil, "", err
	}
	var page []Held
	for after := q.After; ; {
		var codes []string
		want := q.Limit + 1 - len(page)
		args := []any{q.Laboratory, string(q.Kind), after, q.Prefix, q.Prefix + codesEnd, int64(as), want}
		err := v.q.each(ctx, selectCodes, args, func(scan func(...any) error) error {
			var code string
			err := scan(&code)
			codes = append(codes, code)
			return err
		})
		if err != nil {
			return nil, "", err
		}
		for _, code := range codes {
			h, err := v.recompute(ctx, Key{Laboratory: q.Laboratory, Kind: q.Kind, Code: code}, q)
			if errors.Is(err, ErrNotFound) {
				continue
			}
			if err != nil {
				return nil, "", err
			}
			page = append(page, h)
		}
		if len(page) > q.Limit {
			page = page[:q.Limit]
			return page, page[q.Limit-1].Code, nil
		}
		if len(codes) < want {
			return page, "", nil
		}
		after = codes[len(codes)-1]
	}
}

// A RecentQuery asks for versions in the order they were recorded, latest first.
type RecentQuery struct {
	Laboratory string
	// Kind "" is every kind.
	Kind Kind
	// Before is the cursor: the ledger position the page begins before; 0 begins at the end.
	Before int64
	// Limit is at most MaxLimit; 0 is DefaultLimit.
	Limit int
	// AsOf cuts the list; nil is now.
	AsOf *Instant
}

const (
	selectRecent = `SELECT ` + versionColumns + ` FROM versions v
		WHERE v.laboratory = $1 AND v.kind || '' = $2 AND v.recorded_at <= $3 AND v.position < $4
		ORDER BY v.recorded_at DESC, v.position DESC LIMIT $5`
	selectRecentOfAll = `SELECT ` + versionColumns + ` FROM versions v
		WHERE v.laboratory = $1 AND v.recorded_at <= $2 AND v.position < $3
		ORDER BY v.position DESC LIMIT $4`
	selectRecordedAt = `SELECT recorded_at FROM versions WHERE laboratory = $1 AND position = $2`
)

// Recent returns a page of versions, latest first, and the cursor of the next
// page, 0 at the end.
func (v *View) Recent(ctx context.Context, q RecentQuery) ([]Raw, int64, error) {
	limit := pageLimit(q.Limit)
	as, err := v.asOf(ctx, q.Laboratory, Moment{AsOf: q.AsOf})
	if err != nil {
		return nil, 0, err
	}
	before := q.Before
	if before <= 0 {
		before = int64(always)
	} else {
		// Times and positions run together: the time of the cursor bounds the index.
		var at int64
		if err := v.q.one(ctx, selectRecordedAt, []any{q.Laboratory, before}, &at); err == nil {
			as = min(as, Instant(at))
		} else if !errors.Is(err, sql.ErrNoRows) {
			return nil, 0, fmt.Errorf("list recent versions of %s: %w", q.Laboratory, err)
		}
	}
	var page []Raw
	if q.Kind == "" {
		page, err = v.raws(ctx, selectRecentOfAll, q.Laboratory, int64(as), before, limit+1)
	} else {
		page, err = v.raws(ctx, selectRecent, q.Laboratory, string(q.Kind), int64(as), before, limit+1)
	}
	if err != nil {
		return nil, 0, fmt.Errorf("list recent versions of %s: %w", q.Laboratory, err)
	}
	if len(page) <= limit {
		return page, 0, nil
	}
	page = page[:limit]
	return page, page[limit-1].Position, nil
}

const selectNamed = `SELECT n.code FROM names n
	JOIN currents c ON c.laboratory = n.laboratory AND c.kind = n.kind AND c.code = n.code AND c.newest = n.version
	WHERE n.laboratory = $1 AND n.kind = $2 AND n.name = $3 ORDER BY n.code`

// Resolve returns the records of a laboratory that a code, name or alias may
// mean, without regard to case; none is no error. Names are those of the newest versions.
func (v *View) Resolve(ctx context.Context, laboratory string, kind Kind, name string) ([]Key, error) {
	var keys []Key
	err := v.q.each(ctx, selectNamed, []any{laboratory, string(kind), Fold(name)}, func(scan func(...any) error) error {
		k := Key{Laboratory: laboratory, Kind: kind}
		err := scan(&k.Code)
		keys = append(keys, k)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("resolve %s %s in %s: %w", kind, strconv.Quote(name), laboratory, err)
	}
	return keys, nil
}
