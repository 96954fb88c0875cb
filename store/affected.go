package store

import (
	"context"
	"crypto/sha256"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
)

// Bare is the reference without its hash, as edges give it.
func (r Ref) Bare() Ref {
	r.Hash = Hash{}
	return r
}

// An AffectedQuery asks for everything that rests on some versions.
type AffectedQuery struct {
	// Laboratory whose versions are asked for.
	Laboratory string
	// Roots are versions of values and calibrations. They are part of the answer
	// where they are of the laboratory. Hashes do not count.
	Roots []Ref
	// AsOf leaves out what was recorded later; nil is now.
	AsOf *Instant
	// After begins after a ledger position; -1 at the beginning.
	After int64
	// Limit 0 is no limit.
	Limit int
	// FitsOnly leaves final values and reports to RestingOn.
	FitsOnly bool
}

// An AffectedVersion is a calibration, value, final value or report that rests
// on a root, through anchors, members, lines and conversions alone.
type AffectedVersion struct {
	Ref
	Position int64
	// State is as far as the current rows tell: Approved for the version in force
	// now, the newest version's own state, and Superseded for others.
	State State
}

// Joins are written crosswise with their conditions after: SQLite then takes the
// tables in the order they stand, and without statistics it would not find it.
// What was recorded too late is left out at the end, since whatever rests on it
// is later still: the walk then needs nothing but the index of edges.
const selectAffected = `), up (laboratory, kind, code, version) AS (
		SELECT r.laboratory, r.kind, r.code, r.version FROM wanted w CROSS JOIN versions r
		WHERE r.laboratory = w.laboratory AND r.kind = w.kind AND r.code = w.code AND r.version = w.version
		UNION
		SELECT e.laboratory, e.from_kind, e.from_code, e.from_version FROM up u CROSS JOIN edges e
		WHERE e.laboratory = $2 AND e.to_laboratory = u.laboratory AND e.to_kind = u.kind AND e.to_code = u.code AND e.to_version = u.version
			AND e.part IN ('anchor', 'member', 'line', 'converted') AND e.from_kind IN ('calibration', 'value', 'final', 'report')
	)
	SELECT v.kind, v.code, v.version, v.position, v.hash, c.newest, c.state, c.in_force, c.held
	FROM up u CROSS JOIN versions v CROSS JOIN currents c
	WHERE u.laboratory = $2 AND v.laboratory = u.laboratory AND v.kind = u.kind AND v.code = u.code AND v.version = u.version
		AND c.laboratory = v.laboratory AND c.kind = v.kind AND c.code = v.code AND v.recorded_at <= $3 AND v.position > $4
	ORDER BY v.position LIMIT $5`

// Affected calls row for everything that rests on the roots, at any depth, in
// the order of the ledger, in which a version stands after all it rests on. The
// database walks and sorts; nothing is kept here. Row must not use this view:
// its connection is busy.
func (v *View) Affected(ctx context.Context, q AffectedQuery, row func(AffectedVersion) error) error {
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
	statement := strings.Replace(v.q.engine.withWanted, "wanted", "RECURSIVE wanted", 1) + selectAffected
	if q.FitsOnly {
		statement = strings.Replace(statement, "('calibration', 'value', 'final', 'report')", "('calibration', 'value')", 1)
	}
	err = v.q.each(ctx, statement, []any{list, q.Laboratory, int64(as), q.After, limit}, func(scan func(...any) error) error {
		a := AffectedVersion{Ref: Ref{Key: Key{Laboratory: q.Laboratory}}}
		var hash []byte
		var newest, inForce int
		var state, held string
		if err := scan(&a.Kind, &a.Code, &a.Version, &a.Position, &hash, &newest, &state, &inForce, &held); err != nil {
			return err
		}
		copy(a.Hash[:], hash)
		switch a.Version {
		case inForce:
			a.State = State(held)
		case newest:
			a.State = State(state)
		default:
			a.State = Superseded
		}
		return row(a)
	})
	if err != nil {
		return fmt.Errorf("read what rests on %d versions of %s: %w", len(q.Roots), q.Laboratory, err)
	}
	return nil
}

// A CalibrationBlock is what a shift needs of one calibration version.
type CalibrationBlock struct {
	Sensitivities
	// Anchors are the values' versions by material code, the order of the columns;
	// without hashes.
	Anchors []Ref
	// Session, Scale and StartedAt are those of its results; "" and nil without any.
	Session, Scale string
	StartedAt      *Instant
}

const (
	selectBlocks = `) SELECT s.calibration, s.version, s.parameters, s.results, r.session, r.scale, r.measured_at
		FROM wanted w CROSS JOIN sensitivities s
		LEFT JOIN results r ON r.laboratory = s.laboratory AND r.calibration = s.calibration AND r.version = s.version AND r.line = 0
		WHERE s.laboratory = w.laboratory AND s.calibration = w.code AND s.version = w.version`
	selectAnchors = `) SELECT e.from_code, e.from_version, e.to_laboratory, e.to_code, e.to_version
		FROM wanted w CROSS JOIN edges e
		WHERE e.laboratory = w.laboratory AND e.from_kind = w.kind AND e.from_code = w.code AND e.from_version = w.version AND e.part = 'anchor'`
)

// Blocks returns the derivatives and anchors of calibration versions of one
// laboratory, by reference without hash. Versions that do not exist are missing.
func (v *View) Blocks(ctx context.Context, laboratory string, calibrations []Ref) (map[Ref]CalibrationBlock, error) {
	ask := make([]wanted, len(calibrations))
	for i, r := range calibrations {
		ask[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(ask)
	if err != nil {
		return nil, err
	}
	key := func(code string, version int) Ref {
		return Ref{Key: Key{Laboratory: laboratory, Kind: KindCalibration, Code: code}, Version: version}
	}
	blocks := make(map[Ref]CalibrationBlock, len(calibrations))
	err = v.q.each(ctx, v.q.engine.withWanted+selectBlocks, []any{list}, func(scan func(...any) error) error {
		var code string
		var version int
		var parameters, results []byte
		var session, scale sql.Null[string]
		var at sql.Null[int64]
		if err := scan(&code, &version, &parameters, &results, &session, &scale, &at); err != nil {
			return err
		}
		s, err := unpackSensitivities(parameters, results)
		if err != nil {
			return fmt.Errorf("sensitivities of calibration %s/%s.%d: %w", laboratory, code, version, err)
		}
		b := CalibrationBlock{Sensitivities: s, Session: session.V, Scale: scale.V}
		if at.Valid && at.V != 0 {
			b.StartedAt = instantOrNil(at)
		}
		blocks[key(code, version)] = b
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("read derivatives: %w", err)
	}
	err = v.q.each(ctx, v.q.engine.withWanted+selectAnchors, []any{list}, func(scan func(...any) error) error {
		var code string
		var version int
		to := Ref{Key: Key{Kind: KindValue}}
		if err := scan(&code, &version, &to.Laboratory, &to.Code, &to.Version); err != nil {
			return err
		}
		b, ok := blocks[key(code, version)]
		if ok {
			b.Anchors = append(b.Anchors, to)
			blocks[key(code, version)] = b
		}
		return nil
	})
	if err != nil {
		return nil, fmt.Errorf("read anchors: %w", err)
	}
	for _, b := range blocks {
		sortByMaterial(b.Anchors)
	}
	return blocks, nil
}

const selectVersionsOf = `) SELECT ` + versionColumns + ` FROM wanted w
	JOIN versions v ON v.laboratory = w.laboratory AND v.kind = w.kind AND v.code = w.code AND v.version = w.version`

// VersionsOf returns many versions by reference without hash; those that do not
// exist are missing.
func (v *View) VersionsOf(ctx context.Context, refs []Ref) (map[Ref]Raw, error) {
	found := make(map[Ref]Raw, len(refs))
	if len(refs) == 0 {
		return found, nil
	}
	ask := make([]wanted, len(refs))
	for i, r := range refs {
		ask[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(ask)
	if err != nil {
		return nil, err
	}
	raws, err := v.raws(ctx, v.q.engine.withWanted+selectVersionsOf, list)
	if err != nil {
		return nil, fmt.Errorf("read %d versions: %w", len(refs), err)
	}
	for _, raw := range raws {
		found[raw.Ref.Bare()] = raw
	}
	return found, nil
}

// FinalShares is what a shift needs of one final value.
type FinalShares struct {
	Scale                      string
	Value, StandardUncertainty float64 // ‰
	Members                    []FinalShare
}

// A FinalShare is one member: a line of a calibration (without hash) and its weight.
type FinalShare struct {
	Calibration Ref
	Line        int
	Weight      float64
}

// Shares returns what final values are made of, by reference without hash, from
// their bodies but without the rest of them. Those that do not exist, or have
// another form than final/1, are missing.
func (v *View) Shares(ctx context.Context, finals []Ref) (map[Ref]FinalShares, error) {
	found := make(map[Ref]FinalShares, len(finals))
	if len(finals) == 0 {
		return found, nil
	}
	ask := make([]wanted, len(finals))
	for i, r := range finals {
		ask[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(ask)
	if err != nil {
		return nil, err
	}
	var apart []Ref // bodies too large for their row
	err = v.q.each(ctx, v.q.engine.withWanted+selectVersionsOf, []any{list}, func(scan func(...any) error) error {
		raw, body, err := scanVersion(scan)
		if err != nil {
			return err
		}
		if body == nil {
			apart = append(apart, raw.Ref.Bare())
			return nil
		}
		return addShares(found, raw.Ref, []byte(*body))
	})
	if err != nil {
		return nil, fmt.Errorf("read the shares of %d final values: %w", len(finals), err)
	}
	for _, ref := range apart {
		raw, err := v.Version(ctx, ref.Key, ref.Version)
		if err != nil {
			return nil, err
		}
		b, err := v.contentBytes(ctx, ref.Laboratory, raw.Hash)
		if err != nil {
			return nil, err
		}
		if err := addShares(found, ref, b); err != nil {
			return nil, err
		}
	}
	return found, nil
}

func addShares(found map[Ref]FinalShares, ref Ref, body []byte) error {
	var e struct {
		Form   string `json:"form"`
		Inputs []struct {
			Laboratory string `json:"laboratory"`
			Kind       Kind   `json:"kind"`
			Code       string `json:"code"`
			Version    int    `json:"version"`
		} `json:"inputs"`
		Value struct {
			Scale   string        `json:"scale"`
			Members []FinalMember `json:"members"`
			Value   float64       `json:"value"`
			U       float64       `json:"u"`
		} `json:"value"`
	}
	if err := json.Unmarshal(body, &e); err != nil {
		return &CorruptError{Ref: ref, cause: err}
	}
	if e.Form != (Final{}).Form() {
		return nil
	}
	s := FinalShares{Scale: e.Value.Scale, Value: e.Value.Value, StandardUncertainty: e.Value.U}
	for _, m := range e.Value.Members {
		if m.Input < 0 || m.Input >= len(e.Inputs) {
			return &InvalidError{Place: ref.String(), Found: fmt.Sprintf("a member of input %d of %d", m.Input, len(e.Inputs)), Expected: "an input it names"}
		}
		in := e.Inputs[m.Input]
		s.Members = append(s.Members, FinalShare{Line: m.Line, Weight: m.Weight,
			Calibration: Ref{Key: Key{Laboratory: in.Laboratory, Kind: in.Kind, Code: in.Code}, Version: in.Version}})
	}
	found[ref.Bare()] = s
	return nil
}

const selectLinesOfReport = `SELECT code, line, final, final_version, value, u FROM reported
	WHERE laboratory = $1 AND report = $2 AND version = $3 ORDER BY line`

// LinesOfReport returns the reported deltas of one report version, by line.
func (v *View) LinesOfReport(ctx context.Context, ref Ref) ([]Reported, error) {
	var lines []Reported
	err := v.q.each(ctx, selectLinesOfReport, []any{ref.Laboratory, ref.Code, ref.Version}, func(scan func(...any) error) error {
		r := Reported{Laboratory: ref.Laboratory, Report: ref.Code, Version: ref.Version}
		r.Final.Laboratory, r.Final.Kind = ref.Laboratory, KindFinal
		err := scan(&r.Code, &r.Line, &r.Final.Code, &r.Final.Version, &r.Value, &r.StandardUncertainty)
		lines = append(lines, r)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read the lines of %s: %w", ref, err)
	}
	return lines, nil
}

const selectDraftsOf = `SELECT e.from_version, v.hash, v.valid_from FROM edges e
	JOIN versions v ON v.laboratory = e.laboratory AND v.kind = e.from_kind AND v.code = e.from_code AND v.version = e.from_version
	WHERE e.laboratory = $1 AND e.from_kind = $2 AND e.from_code = $3 AND e.part = 'revision'
		AND e.to_kind = 'revision' AND e.to_code = $4 ORDER BY e.from_version`

// DraftOf returns the version of a record that a revision drafted for one
// valid_from (nil for records without a period), or ErrNotFound.
func (v *View) DraftOf(ctx context.Context, revision string, key Key, validFrom *Instant) (Ref, error) {
	found := Ref{Key: key}
	err := v.q.each(ctx, selectDraftsOf, []any{key.Laboratory, string(key.Kind), key.Code, revision}, func(scan func(...any) error) error {
		var version int
		var hash []byte
		var from sql.Null[int64]
		if err := scan(&version, &hash, &from); err != nil {
			return err
		}
		if from.Valid != (validFrom != nil) || validFrom != nil && Instant(from.V) != *validFrom {
			return nil
		}
		found.Version = version
		copy(found.Hash[:], hash)
		return nil
	})
	if err != nil {
		return Ref{}, fmt.Errorf("read what revision %s drafted of %s: %w", revision, key, err)
	}
	if found.Version == 0 {
		return Ref{}, notFound("draft of %s by revision %s", key, revision)
	}
	return found, nil
}

const (
	selectMembers = `SELECT v.kind, v.code, v.version, v.hash, v.position FROM edges e
		JOIN versions v ON v.laboratory = e.laboratory AND v.kind = e.from_kind AND v.code = e.from_code AND v.version = e.from_version
		WHERE e.laboratory = $1 AND e.to_laboratory = $1 AND e.to_kind = 'revision' AND e.to_code = $2 AND e.part = 'revision'
			AND e.from_kind IN ('value', 'calibration', 'final')
			AND v.position > $3 ORDER BY v.position LIMIT $4`
	selectMemberHashes = `SELECT v.kind, v.hash FROM edges e
		JOIN versions v ON v.laboratory = e.laboratory AND v.kind = e.from_kind AND v.code = e.from_code AND v.version = e.from_version
		WHERE e.laboratory = $1 AND e.to_laboratory = $1 AND e.to_kind = 'revision' AND e.to_code = $2 AND e.part = 'revision'
			AND e.from_kind IN ('value', 'calibration', 'final')
		ORDER BY v.hash`
)

// Drafts returns up to limit drafts of a revision, in the order of the ledger,
// beginning after a position (-1 at the beginning); limit 0 is DefaultLimit.
func (v *View) Drafts(ctx context.Context, laboratory, revision string, after int64, limit int) ([]AffectedVersion, error) {
	var all []AffectedVersion
	err := v.q.each(ctx, selectMembers, []any{laboratory, revision, after, pageLimit(limit)}, func(scan func(...any) error) error {
		a := AffectedVersion{Ref: Ref{Key: Key{Laboratory: laboratory}}}
		var hash []byte
		err := scan(&a.Kind, &a.Code, &a.Version, &hash, &a.Position)
		copy(a.Hash[:], hash)
		all = append(all, a)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read the drafts of revision %s/%s: %w", laboratory, revision, err)
	}
	return all, nil
}

// DraftedSet counts the drafts of a revision and hashes their body hashes, sorted.
func (v *View) DraftedSet(ctx context.Context, laboratory, revision string) (RevisionSet, error) {
	var set RevisionSet
	sum := sha256.New()
	err := v.q.each(ctx, selectMemberHashes, []any{laboratory, revision}, func(scan func(...any) error) error {
		var kind string
		var hash []byte
		if err := scan(&kind, &hash); err != nil {
			return err
		}
		sum.Write(hash)
		switch Kind(kind) {
		case KindCalibration:
			set.Calibrations++
		case KindValue:
			set.Values++
		case KindFinal:
			set.Finals++
		}
		return nil
	})
	if err != nil {
		return set, fmt.Errorf("hash the drafts of revision %s/%s: %w", laboratory, revision, err)
	}
	sum.Sum(set.Hash[:0])
	return set, nil
}

// A RevisionReport is a report with lines that a revision moves.
type RevisionReport struct {
	Report string
	Lines  int
}

// An older version of a final value that the revision drafted again stands on a line of the report.
const selectReportsOfRevision = `SELECT l.from_code, count(DISTINCT l.to_code) FROM edges e CROSS JOIN edges l
	WHERE l.laboratory = e.laboratory AND l.to_laboratory = e.laboratory AND l.to_kind = e.from_kind AND l.to_code = e.from_code
		AND l.from_kind = 'report' AND l.part = 'line' AND l.to_version < e.from_version AND e.laboratory = $1 AND e.to_laboratory = $1 AND e.to_kind = 'revision' AND e.to_code = $2 AND e.from_kind = 'final' AND e.part = 'revision'
		AND l.from_code > $3 AND ($4 = '' OR l.from_code = $4)
	GROUP BY l.from_code ORDER BY l.from_code LIMIT $5`

// ReportsOfRevision returns up to limit reports with lines that a revision
// moves, by code, beginning after the given one; only narrows it to one report.
func (v *View) ReportsOfRevision(ctx context.Context, laboratory, revision, after, only string, limit int) ([]RevisionReport, error) {
	var all []RevisionReport
	err := v.q.each(ctx, selectReportsOfRevision, []any{laboratory, revision, after, only, pageLimit(limit)}, func(scan func(...any) error) error {
		var r RevisionReport
		err := scan(&r.Report, &r.Lines)
		all = append(all, r)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read the reports that revision %s/%s moves: %w", laboratory, revision, err)
	}
	return all, nil
}

const countJudged = `) SELECT count(*) FROM wanted w CROSS JOIN edges e CROSS JOIN currents c
	WHERE e.laboratory = $2 AND e.to_laboratory = w.laboratory AND e.to_kind = w.kind AND e.to_code = w.code AND e.to_version = w.version
		AND e.from_kind = 'calibration' AND e.part = 'control' AND c.laboratory = e.laboratory AND c.kind = e.from_kind AND c.code = e.from_code AND c.in_force = e.from_version`

// Judged counts the calibrations in force of a laboratory whose controls were judged by
// the values named: their results do not rest on them.
func (v *View) Judged(ctx context.Context, laboratory string, values []Ref) (int64, error) {
	ask := make([]wanted, len(values))
	for i, r := range values {
		ask[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(ask)
	if err != nil {
		return 0, err
	}
	var n int64
	err = v.q.one(ctx, v.q.engine.withWanted+countJudged, []any{list, laboratory}, &n)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return 0, fmt.Errorf("count controls judged by %d values: %w", len(values), err)
	}
	return n, nil
}

// sortByMaterial orders values by their material's code, which is the order in
// which a calibration names its anchors.
func sortByMaterial(refs []Ref) {
	material := func(r Ref) string {
		m, _, _ := strings.Cut(r.Code, "/")
		return m
	}
	for i := 1; i < len(refs); i++ { // a handful
		for j := i; j > 0 && material(refs[j]) < material(refs[j-1]); j-- {
			refs[j], refs[j-1] = refs[j-1], refs[j]
		}
	}
}
