package store

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
)

// A View reads the registry within one transaction. Inside a Write it also sees
// the versions its own transaction has queued, with the time they would have
// now; lists (List, Recent, Edges, Results, Resolve) do not.
type View struct {
	store *Store
	q     *queries
	// now is the clock at the beginning of the transaction.
	now Instant
	// cut: reads are cut at the head seen first, since other writers go on.
	cut   bool
	heads map[string]Head
	// tx is the transaction whose queue the view shows too; nil outside Write.
	tx *Tx
	// tolerant passes over versions whose body is not what was recorded: a
	// verification names them elsewhere and goes on.
	tolerant bool
}

// A Head is the state of a laboratory's ledger: the number of its entries and
// the time of the last. A laboratory without a ledger has the zero state.
type Head struct {
	Laboratory string
	Size       int64
	At         Instant
}

const selectHead = `SELECT size, recorded_at FROM ledger_heads WHERE laboratory = $1`

// Head returns the state of a laboratory's ledger as the view sees it.
func (v *View) Head(ctx context.Context, laboratory string) (Head, error) {
	if h, ok := v.heads[laboratory]; ok {
		return h, nil
	}
	h := Head{Laboratory: laboratory}
	err := v.q.one(ctx, selectHead, []any{laboratory}, &h.Size, &h.At)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return Head{}, fmt.Errorf("head of ledger %s: %w", laboratory, err)
	}
	if v.heads == nil {
		v.heads = make(map[string]Head, 2)
	}
	v.heads[laboratory] = h
	return h, nil
}

// selectLaboratories is the one statement that looks across laboratories: it
// tells their names and nothing else. It reads history beside the heads, which
// are derived: a head taken away must not hide its laboratory from verify. Each
// name is found by one step along the key, however many rows it has.
const selectLaboratories = `WITH RECURSIVE
		bound(laboratory) AS (
			SELECT min(laboratory) FROM entries
			UNION ALL
			SELECT (SELECT min(e.laboratory) FROM entries e WHERE e.laboratory > b.laboratory) FROM bound b WHERE b.laboratory IS NOT NULL),
		stated(laboratory) AS (
			SELECT min(laboratory) FROM versions
			UNION ALL
			SELECT (SELECT min(v.laboratory) FROM versions v WHERE v.laboratory > s.laboratory) FROM stated s WHERE s.laboratory IS NOT NULL)
	SELECT laboratory FROM bound WHERE laboratory IS NOT NULL
	UNION SELECT laboratory FROM stated WHERE laboratory IS NOT NULL
	UNION SELECT laboratory FROM ledger_heads ORDER BY laboratory`

// Laboratories returns the names of all laboratories that have a ledger, common
// included.
func (v *View) Laboratories(ctx context.Context) ([]string, error) {
	var all []string
	err := v.q.each(ctx, selectLaboratories, nil, func(scan func(...any) error) error {
		var l string
		err := scan(&l)
		all = append(all, l)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("list laboratories: %w", err)
	}
	return all, nil
}

// asOf resolves the recorded side of a moment for one laboratory: nothing later
// than the head the transaction saw first.
func (v *View) asOf(ctx context.Context, laboratory string, m Moment) (Instant, error) {
	at := always
	if m.AsOf != nil {
		at = *m.AsOf
	}
	return v.cutAt(ctx, laboratory, at)
}

// cutAt cuts a time at the head the transaction saw first. Outside Write there
// is nothing to cut: the transaction sees one state anyway.
func (v *View) cutAt(ctx context.Context, laboratory string, at Instant) (Instant, error) {
	if !v.cut {
		return at, nil
	}
	h, err := v.Head(ctx, laboratory)
	if err != nil {
		return 0, err
	}
	return min(at, h.At), nil
}

// validAt resolves the valid side of a moment. Now is never before the last
// thing said in the ledger, whatever the clocks of the machines say.
func (v *View) validAt(ctx context.Context, laboratory string, m Moment) (Instant, error) {
	if m.ValidAt != nil {
		return *m.ValidAt, nil
	}
	if v.tx != nil && laboratory == v.tx.laboratory {
		return v.tx.provisional(ctx)
	}
	h, err := v.Head(ctx, laboratory)
	if err != nil {
		return 0, err
	}
	return max(v.now, h.At), nil
}

// Moment returns the moment a read of this laboratory really uses: both times
// given, nothing later than the ledger's head; and that head. Pages of one list
// belong together when each is asked for with the same returned moment.
func (v *View) Moment(ctx context.Context, laboratory string, m Moment) (Moment, Head, error) {
	h, err := v.Head(ctx, laboratory)
	if err != nil {
		return Moment{}, Head{}, err
	}
	valid, err := v.validAt(ctx, laboratory, m)
	if err != nil {
		return Moment{}, Head{}, err
	}
	as := h.At
	if m.AsOf != nil {
		as = min(as, *m.AsOf)
	}
	return Moment{ValidAt: &valid, AsOf: &as}, h, nil
}

// versionColumns are read by scanVersion; what else a version has is in its body.
const versionColumns = `v.laboratory, v.kind, v.code, v.version, v.recorded_at, v.position, v.hash, v.body`

// scanVersion reads versionColumns. A body kept apart comes as nil.
func scanVersion(scan func(...any) error, more ...any) (Raw, *string, error) {
	var raw Raw
	var hash []byte
	var body sql.Null[string]
	err := scan(append([]any{&raw.Laboratory, &raw.Kind, &raw.Code, &raw.Version, &raw.RecordedAt, &raw.Position, &hash, &body}, more...)...)
	if err != nil {
		return Raw{}, nil, err
	}
	copy(raw.Hash[:], hash)
	if !body.Valid {
		return raw, nil, nil
	}
	return raw, &body.V, nil
}

// fill decodes the body, fetched from the content parts where it is kept apart.
func (v *View) fill(ctx context.Context, raw *Raw, body *string) error {
	if body != nil {
		return decodeBody(raw, []byte(*body))
	}
	b, err := v.contentBytes(ctx, raw.Laboratory, raw.Hash)
	if errors.Is(err, ErrNotFound) || isContentError(err) {
		return &CorruptError{Ref: raw.Ref, cause: err}
	}
	if err != nil {
		return fmt.Errorf("body of %s: %w", raw.Ref, err)
	}
	return decodeBody(raw, b)
}

func isContentError(err error) bool {
	_, ok := errors.AsType[*ContentError](err)
	return ok
}

// raws runs a statement that selects versionColumns.
func (v *View) raws(ctx context.Context, statement string, args ...any) ([]Raw, error) {
	var all []Raw
	var bodies []*string
	err := v.q.each(ctx, statement, args, func(scan func(...any) error) error {
		raw, body, err := scanVersion(scan)
		all, bodies = append(all, raw), append(bodies, body)
		return err
	})
	if err != nil {
		return nil, err
	}
	intact := all[:0]
	for i := range all {
		err := v.fill(ctx, &all[i], bodies[i])
		if _, corrupt := errors.AsType[*CorruptError](err); corrupt && v.tolerant {
			continue
		}
		if err != nil {
			return nil, err
		}
		intact = append(intact, all[i])
	}
	return intact, nil
}

const selectVersion = `SELECT ` + versionColumns + ` FROM versions v
	WHERE v.laboratory = $1 AND v.kind = $2 AND v.code = $3 AND v.version = $4`

// Version returns one version of a record.
func (v *View) Version(ctx context.Context, key Key, version int) (Raw, error) {
	if v.tx != nil {
		for _, q := range v.tx.queue {
			if q.raw.Key == key && q.raw.Version == version {
				return v.tx.queued(ctx, q)
			}
		}
	}
	all, err := v.raws(ctx, selectVersion, key.Laboratory, key.Kind, key.Code, version)
	if err != nil {
		return Raw{}, fmt.Errorf("read %s.%d: %w", key, version, err)
	}
	if len(all) == 0 {
		return Raw{}, notFound("%s.%d", key, version)
	}
	return all[0], nil
}

const selectNewest = `SELECT ` + versionColumns + ` FROM versions v
	WHERE v.laboratory = $1 AND v.kind = $2 AND v.code = $3 AND v.recorded_at <= $4
	ORDER BY v.version DESC LIMIT 1`

// Newest returns the newest version of a record, whatever has been decided on it.
func (v *View) Newest(ctx context.Context, key Key) (Raw, error) {
	if v.tx != nil {
		if q := v.tx.newestQueued(key); q != nil {
			return v.tx.queued(ctx, *q)
		}
	}
	as, err := v.asOf(ctx, key.Laboratory, Moment{})
	if err != nil {
		return Raw{}, err
	}
	all, err := v.raws(ctx, selectNewest, key.Laboratory, key.Kind, key.Code, int64(as))
	if err != nil {
		return Raw{}, fmt.Errorf("read the newest version of %s: %w", key, err)
	}
	if len(all) == 0 {
		return Raw{}, notFound("%s", key)
	}
	return all[0], nil
}

const selectVersions = `SELECT ` + versionColumns + ` FROM versions v
	WHERE v.laboratory = $1 AND v.kind = $2 AND v.code = $3 AND v.version > $4 AND v.recorded_at <= $5
	ORDER BY v.version LIMIT $6`

// Versions returns up to limit versions of a record, in order, beginning after
// the given number; limit 0 is DefaultLimit. A record that does not exist has none.
func (v *View) Versions(ctx context.Context, key Key, after, limit int) ([]Raw, error) {
	as, err := v.asOf(ctx, key.Laboratory, Moment{})
	if err != nil {
		return nil, err
	}
	limit = pageLimit(limit)
	all, err := v.raws(ctx, selectVersions, key.Laboratory, key.Kind, key.Code, after, int64(as), limit)
	if err != nil {
		return nil, fmt.Errorf("read the versions of %s: %w", key, err)
	}
	if v.tx != nil {
		for _, q := range v.tx.queue {
			if q.raw.Key == key && q.raw.Version > after && len(all) < limit {
				raw, err := v.tx.queued(ctx, q)
				if err != nil {
					return nil, err
				}
				all = append(all, raw)
			}
		}
	}
	return all, nil
}

const (
	selectHistory = `SELECT v.version, v.recorded_at, v.valid_from FROM versions v
		WHERE v.laboratory = $1 AND v.kind = $2 AND v.code = $3 AND v.recorded_at <= $4
		ORDER BY v.version`
	selectDecisions = `SELECT ` + versionColumns + ` FROM versions v
		WHERE v.laboratory = $1 AND v.kind = 'decision' AND v.recorded_at <= $2 AND v.code IN (`
	orderDecisions = `) ORDER BY v.code, v.version`
)

// history returns what is needed to tell what held of a record, by asOf.
func (v *View) history(ctx context.Context, key Key, asOf Instant) ([]held, error) {
	stored, err := v.cutAt(ctx, key.Laboratory, asOf)
	if err != nil {
		return nil, err
	}
	var all []held
	err = v.q.each(ctx, selectHistory, []any{key.Laboratory, key.Kind, key.Code, int64(stored)}, func(scan func(...any) error) error {
		var h held
		var from sql.Null[int64]
		err := scan(&h.version, &h.recordedAt, &from)
		h.validFrom = instantOrNil(from)
		all = append(all, h)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read the history of %s: %w", key, err)
	}
	if v.tx != nil && key.Laboratory == v.tx.laboratory {
		at, err := v.tx.provisional(ctx)
		if err != nil {
			return nil, err
		}
		for _, q := range v.tx.queue {
			if q.raw.Key == key && at <= asOf {
				all = append(all, held{version: q.raw.Version, recordedAt: at, validFrom: q.raw.ValidFrom})
			}
		}
	}
	if !key.Kind.Decided() {
		return all, nil
	}
	codes := make([]string, len(all))
	for i, h := range all {
		codes[i] = DecisionCode(Ref{Key: key, Version: h.version})
	}
	decisions, err := v.decisions(ctx, key.Laboratory, codes, asOf)
	if err != nil {
		return nil, fmt.Errorf("read the decisions on %s: %w", key, err)
	}
	for i := range all {
		for _, d := range decisions[codes[i]] {
			all[i].decisions = append(all[i].decisions, said{act: d.Value.Act, recordedAt: d.RecordedAt, effectAt: d.Value.EffectAt})
		}
	}
	return all, nil
}

// codesPerStatement bounds an IN list.
const codesPerStatement = 128

// decisions returns the decisions of some decision records, by code, in order.
func (v *View) decisions(ctx context.Context, laboratory string, codes []string, asOf Instant) (map[string][]Version[Decision], error) {
	stored, err := v.cutAt(ctx, laboratory, asOf)
	if err != nil {
		return nil, err
	}
	found := make(map[string][]Version[Decision])
	for rest := codes; len(rest) > 0; {
		n := min(len(rest), codesPerStatement)
		// Filled up to a power of two with the last code, so that there are few
		// different statements to prepare.
		filled := 1
		for filled < n {
			filled *= 2
		}
		args := make([]any, 0, 2+filled)
		args = append(args, laboratory, int64(stored))
		for i := range filled {
			args = append(args, rest[min(i, n-1)])
		}
		raws, err := v.raws(ctx, selectDecisions+list(3, filled)+orderDecisions, args...)
		if err != nil {
			return nil, err
		}
		for _, raw := range raws {
			d, err := Decode[Decision](raw)
			if err != nil {
				if v.tolerant {
					continue
				}
				return nil, err
			}
			found[d.Code] = append(found[d.Code], d)
		}
		rest = rest[n:]
	}
	if v.tx == nil || laboratory != v.tx.laboratory {
		return found, nil
	}
	for _, q := range v.tx.queue {
		if q.raw.Kind != KindDecision {
			continue
		}
		raw, err := v.tx.queued(ctx, q)
		if err != nil {
			return nil, err
		}
		for _, c := range codes {
			if c == raw.Code && raw.RecordedAt <= asOf {
				d, err := Decode[Decision](raw)
				if err != nil {
					return nil, err
				}
				found[c] = append(found[c], d)
			}
		}
	}
	return found, nil
}

// overlay lifts the cut for what the transaction itself has queued.
func (v *View) overlay(ctx context.Context, laboratory string, asOf Instant, m Moment) (Instant, error) {
	if v.tx == nil || laboratory != v.tx.laboratory || m.AsOf != nil {
		return asOf, nil
	}
	return v.tx.provisional(ctx)
}

// InForce returns the version of a record that held at the moment, and its
// state. Of records with periods that is, among the versions approved by AsOf
// with valid_from by ValidAt, the one with the greatest valid_from, then the
// greatest number; it is returned as Withdrawn where a withdrawal has taken
// effect. Of records that are not decided it is the newest. ErrNotFound: none held.
func (v *View) InForce(ctx context.Context, key Key, m Moment) (Raw, State, error) {
	versions, valid, as, err := v.momentOf(ctx, key, m)
	if err != nil {
		return Raw{}, "", err
	}
	i, state := inForce(versions, key.Kind.Decided(), valid, as)
	if i < 0 {
		return Raw{}, "", notFound("%s in force", key)
	}
	raw, err := v.Version(ctx, key, versions[i].version)
	return raw, state, err
}

// momentOf loads a record's history and resolves the moment for it.
func (v *View) momentOf(ctx context.Context, key Key, m Moment) (versions []held, valid, as Instant, err error) {
	if as, err = v.asOf(ctx, key.Laboratory, m); err != nil {
		return nil, 0, 0, err
	}
	if as, err = v.overlay(ctx, key.Laboratory, as, m); err != nil {
		return nil, 0, 0, err
	}
	if valid, err = v.validAt(ctx, key.Laboratory, m); err != nil {
		return nil, 0, 0, err
	}
	versions, err = v.history(ctx, key, as)
	return versions, valid, as, err
}

// State returns the state of one version at the moment and the decisions on it
// by then, in order. Of ref only the key and the number count.
func (v *View) State(ctx context.Context, ref Ref, m Moment) (State, []Version[Decision], error) {
	versions, valid, as, err := v.momentOf(ctx, ref.Key, m)
	if err != nil {
		return "", nil, err
	}
	for i, h := range versions {
		if h.version != ref.Version {
			continue
		}
		state := stateOf(versions, i, ref.Kind.Decided(), valid, as)
		if !ref.Kind.Decided() {
			return state, nil, nil
		}
		code := DecisionCode(ref)
		decisions, err := v.decisions(ctx, ref.Laboratory, []string{code}, as)
		return state, decisions[code], err
	}
	return "", nil, notFound("%s", ref)
}

// A wanted version is looked up by key and number.
type wanted struct {
	Key
	version int
}

// hashesOf returns the hashes of versions, of any laboratory, without their
// bodies. Versions that do not exist are missing from the answer.
func (v *View) hashesOf(ctx context.Context, refs []wanted) (map[wanted]Hash, error) {
	found := make(map[wanted]Hash, len(refs))
	if len(refs) == 0 {
		return found, nil
	}
	list, err := wantedList(refs)
	if err != nil {
		return nil, err
	}
	err = v.q.each(ctx, v.q.engine.withWanted+selectHashes, []any{list}, func(scan func(...any) error) error {
		var w wanted
		var hash []byte
		err := scan(&w.Laboratory, &w.Kind, &w.Code, &w.version, &hash)
		var h Hash
		copy(h[:], hash)
		found[w] = h
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("look up hashes of versions: %w", err)
	}
	return found, nil
}

// Many versions are asked for as one parameter, a JSON array of arrays, so that
// the statement is the same however many there are.
const (
	wantedRows = `WITH wanted (laboratory, kind, code, version) AS (
		SELECT j.value ->> 0, j.value ->> 1, j.value ->> 2, cast(j.value ->> 3 as bigint) FROM `
	selectHashes = `) SELECT v.laboratory, v.kind, v.code, v.version, v.hash
		FROM wanted w JOIN versions v ON v.laboratory = w.laboratory AND v.kind = w.kind AND v.code = w.code AND v.version = w.version`
)

// wantedList writes the one parameter.
func wantedList(refs []wanted) (string, error) {
	rows := make([][4]any, len(refs))
	for i, r := range refs {
		rows[i] = [4]any{r.Laboratory, string(r.Kind), r.Code, r.version}
	}
	b, err := json.Marshal(rows)
	return string(b), err
}

// DefaultLimit and MaxLimit bound a page.
const (
	DefaultLimit = 100
	MaxLimit     = 1000
)

func pageLimit(limit int) int {
	if limit <= 0 {
		return DefaultLimit
	}
	return min(limit, MaxLimit)
}
