package store

import (
	"bytes"
	"context"
	"database/sql"
	"errors"
	"fmt"
	"strconv"

	"deltamoor/store/ledger"
)

// tables checks what the walk along the ledger cannot see: rows that nothing
// in the ledger asks for, and the rows that are updated. Everything is read in one
// state of the registry.
func (c *checker) tables(ctx context.Context) error {
	return c.store.Read(ctx, func(ctx context.Context, v *View) error {
		v.tolerant = true
		if err := c.head(ctx, v); err != nil {
			return err
		}
		for _, o := range orphans {
			rows, err := v.rows(ctx, len(o.key), o.statement, c.laboratory)
			if err != nil {
				return fmt.Errorf("look for rows of %s that nothing asks for: %w", o.table, err)
			}
			for _, row := range rows {
				c.find(-1, o.table, orphanKey(o, row), "a row", "none: "+o.missing)
			}
		}
		if err := c.sessions(ctx, v); err != nil {
			return err
		}
		if err := c.loose(ctx, v); err != nil {
			return err
		}
		return c.currents(ctx, v)
	})
}

// An orphan is a row without the row it belongs to.
type orphan struct {
	table, missing string
	key            []string // how the columns selected are written
	statement      string
}

func orphanKey(o orphan, row []any) string {
	key := ""
	for i, format := range o.key {
		key += fmt.Sprintf(format, fmt.Sprint(row[i]))
	}
	return key
}

var orphans = []orphan{
	// Of positions below the size the walk has seen entry and version.
	{"versions", "the ledger ends before its position", []string{"%s ", "%s", "/%s", ".%s"},
		`SELECT kind, laboratory, code, version FROM versions WHERE laboratory = $1
			AND position >= (SELECT coalesce(max(size), 0) FROM ledger_heads WHERE laboratory = $1) ORDER BY position`},
	{"entries", "the ledger ends before it", []string{"%s", " position %s"},
		`SELECT laboratory, position FROM entries WHERE laboratory = $1
			AND position >= (SELECT coalesce(max(size), 0) FROM ledger_heads WHERE laboratory = $1) ORDER BY position`},
	{"edges", "no version it comes from", []string{"%s", " %s", " %s", " %s", " %s", " %s", " %s", " %s", " %s"},
		`SELECT d.laboratory, d.from_kind, d.from_code, d.from_version, d.to_laboratory, d.to_kind, d.to_code, d.to_version, d.part FROM edges d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = d.from_kind AND v.code = d.from_code AND v.version = d.from_version
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.from_kind, d.from_code, d.from_version`},
	{"names", "no version it comes from", []string{"%s", " %s", " %s", " %s", " %s"},
		`SELECT d.laboratory, d.kind, d.name, d.code, d.version FROM names d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = d.kind AND v.code = d.code AND v.version = d.version
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.kind, d.code, d.version`},
	{"results", "no version it comes from", []string{"%s", " %s", " %s", " %s"},
		`SELECT d.laboratory, d.calibration, d.version, d.line FROM results d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = 'calibration' AND v.code = d.calibration AND v.version = d.version
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.calibration, d.version, d.line`},
	{"sensitivities", "no version it comes from", []string{"%s", " %s", " %s"},
		`SELECT d.laboratory, d.calibration, d.version FROM sensitivities d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = 'calibration' AND v.code = d.calibration AND v.version = d.version
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.calibration, d.version`},
	{"lines", "no version it comes from", []string{"%s", " %s", " %s"},
		`SELECT d.laboratory, d.calibration, d.version FROM lines d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = 'calibration' AND v.code = d.calibration AND v.version = d.version
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.calibration, d.version`},
	{"reported", "no version it comes from", []string{"%s"},
		`SELECT d.code FROM reported d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = 'report' AND v.code = d.report AND v.version = d.version
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.code`},
	{"shares", "no version it comes from", []string{"%s", " %s", " %s", " %s", " %s", " %s"},
		`SELECT d.laboratory, d.calibration, d.version, d.kind, d.code, d.number FROM shares d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = d.kind AND v.code = d.code AND v.version = d.number
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.calibration, d.version, d.code, d.number`},
	{"uses", "no session it comes from", []string{"%s", " %s", " %s"},
		`SELECT d.laboratory, d.session, d.unit FROM uses d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = 'session' AND v.code = d.session AND v.version = 1
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.session, d.unit`},
	{"currents", "no record it is about", []string{"%s", " %s", " %s"},
		`SELECT d.laboratory, d.kind, d.code FROM currents d
			LEFT JOIN versions v ON v.laboratory = d.laboratory AND v.kind = d.kind AND v.code = d.code AND v.version = 1
			WHERE d.laboratory = $1 AND v.version IS NULL ORDER BY d.kind, d.code`},
}

const (
	selectHeadRow = `SELECT size, recorded_at, checkpoints FROM ledger_heads WHERE laboratory = $1`
	selectLastRow = `SELECT position, recorded_at FROM versions WHERE laboratory = $1 ORDER BY position DESC LIMIT 1`
	countSigned   = `SELECT count(*) FROM checkpoints WHERE laboratory = $1`
	selectNodesTo = `SELECT node FROM tree_hashes WHERE laboratory = $1 AND node >= $2 ORDER BY node LIMIT 100`
)

// head checks the one row writers queue for.
func (c *checker) head(ctx context.Context, v *View) error {
	var size, at, checkpoints, signed, lastAt int64
	last := int64(-1)
	rows, err := v.rows(ctx, 3, selectHeadRow, c.laboratory)
	if err != nil {
		return fmt.Errorf("read the head: %w", err)
	}
	if err := v.q.one(ctx, selectLastRow, []any{c.laboratory}, &last, &lastAt); err != nil && !errors.Is(err, sql.ErrNoRows) {
		return fmt.Errorf("read the last version: %w", err)
	}
	if err := v.q.one(ctx, countSigned, []any{c.laboratory}, &signed); err != nil {
		return fmt.Errorf("count the checkpoints: %w", err)
	}
	if len(rows) == 0 {
		if last >= 0 || signed > 0 {
			c.find(-1, "ledger_heads", c.laboratory, "no row", fmt.Sprintf("size %d", last+1))
		}
		return nil
	}
	size, _ = rows[0][0].(int64)
	at, _ = rows[0][1].(int64)
	checkpoints, _ = rows[0][2].(int64)
	if size != last+1 {
		c.find(-1, "ledger_heads", c.laboratory, fmt.Sprintf("size %d", size), fmt.Sprintf("size %d, one more than the last position", last+1))
	}
	if at != lastAt {
		c.find(-1, "ledger_heads", c.laboratory, "recorded at "+Instant(at).String(), "the time of the last version, "+Instant(lastAt).String())
	}
	if checkpoints != signed {
		c.find(-1, "ledger_heads", c.laboratory, fmt.Sprintf("%d checkpoints", checkpoints), fmt.Sprint(signed))
		c.find(-1, "checkpoints", c.laboratory, fmt.Sprintf("%d rows", signed), fmt.Sprint(checkpoints))
	}
	want := ledger.NodeCount(size)
	extra, err := v.rows(ctx, 1, selectNodesTo, c.laboratory, want)
	if err != nil {
		return fmt.Errorf("read nodes: %w", err)
	}
	for _, row := range extra {
		c.find(-1, "tree_hashes", fmt.Sprintf("%s node %v", c.laboratory, row[0]), "a row", fmt.Sprintf("none: a tree of %d has %d nodes", size, want))
	}
	return nil
}

const (
	nextSession   = `SELECT coalesce(min(session), '') FROM readings WHERE laboratory = $1 AND session > $2`
	sessionExists = `SELECT count(*) FROM versions WHERE laboratory = $1 AND kind = 'session' AND code = $2`
)

// sessions looks for readings of sessions that do not exist, from one session
// to the next by the index.
func (c *checker) sessions(ctx context.Context, v *View) error {
	for session := ""; ; {
		if err := v.q.one(ctx, nextSession, []any{c.laboratory, session}, &session); err != nil {
			return fmt.Errorf("read sessions of readings: %w", err)
		}
		if session == "" {
			break
		}
		var n int
		if err := v.q.one(ctx, sessionExists, []any{c.laboratory, session}, &n); err != nil {
			return fmt.Errorf("look up session %s: %w", session, err)
		}
		if n == 0 {
			c.find(-1, "readings", c.laboratory+"/"+session, "rows", "none: no version of the session")
		}
	}
	return nil
}

const (
	nextUpload   = `SELECT sha256 FROM uploads WHERE laboratory = $1 AND sha256 > $2 ORDER BY sha256 LIMIT 1`
	nextContent  = `SELECT sha256 FROM content WHERE laboratory = $1 AND sha256 > $2 ORDER BY sha256 LIMIT 1`
	uploadExists = `SELECT count(*) FROM uploads WHERE laboratory = $1 AND sha256 = $2`
)

// loose looks for uploads no version binds, and for content that belongs neither
// to an upload nor to a body.
func (c *checker) loose(ctx context.Context, v *View) error {
	step := func(statement string, after []byte) ([]byte, error) {
		rows, err := v.rows(ctx, 1, statement, c.laboratory, after)
		if err != nil || len(rows) == 0 {
			return nil, err
		}
		next, _ := rows[0][0].([]byte)
		return bytes.Clone(next), nil
	}
	for after := []byte{}; ; {
		next, err := step(nextUpload, after)
		if err != nil {
			return fmt.Errorf("read uploads: %w", err)
		}
		if next == nil {
			break
		}
		after = next
		hash := Hash(next)
		_, err = v.Newest(ctx, Key{Laboratory: c.laboratory, Kind: KindDocument, Code: hash.String()})
		if errors.Is(err, ErrNotFound) {
			c.find(-1, "uploads", c.laboratory+" "+hash.String(), "a row", "none: no version binds it")
		} else if err != nil {
			return err
		}
	}
	for after := []byte{}; ; {
		next, err := step(nextContent, after)
		if err != nil {
			return fmt.Errorf("read content: %w", err)
		}
		if next == nil {
			break
		}
		after = next
		var n int
		if err := v.q.one(ctx, uploadExists, []any{c.laboratory, next}, &n); err != nil {
			return fmt.Errorf("look up upload: %w", err)
		}
		if hash := Hash(next); n == 0 && !c.apart[hash] {
			c.find(-1, "content", c.laboratory+" "+hash.String(), "rows", "none: no upload and no body")
		}
	}
	return nil
}

const (
	selectCurrentRows = `SELECT c.laboratory, c.kind, c.code, c.newest, c.state, c.in_force, c.held, c.until FROM currents c
		WHERE c.laboratory = $1 AND (c.kind, c.code) > ($2, $3) ORDER BY c.kind, c.code LIMIT 200`
	selectHasCurrent = `) SELECT c.laboratory, c.kind, c.code FROM wanted w
		JOIN currents c ON c.laboratory = w.laboratory AND c.kind = w.kind AND c.code = w.code`
)

// haveCurrents checks that the records which begin in a batch have a row.
func (c *checker) haveCurrents(ctx context.Context, v *View, rows []versionRow) error {
	missing := make(map[string]int64)
	var refs []wanted
	for _, r := range rows {
		if r.raw.Version == 1 {
			refs = append(refs, wanted{Key: r.raw.Key})
			missing[rowKey("currents", []any{r.raw.Laboratory, string(r.raw.Kind), r.raw.Code})] = r.raw.Position
		}
	}
	if len(refs) == 0 {
		return nil
	}
	list, err := wantedList(refs)
	if err != nil {
		return err
	}
	found, err := v.rows(ctx, 3, v.q.engine.withWanted+selectHasCurrent, list)
	if err != nil {
		return fmt.Errorf("look for current rows: %w", err)
	}
	for _, row := range found {
		delete(missing, rowKey("currents", row))
	}
	for key, position := range missing {
		c.find(position, "currents", key, "no row", "a row")
	}
	return nil
}

// currents computes the row of every record again, page by page.
func (c *checker) currents(ctx context.Context, v *View) error {
	kind, code := "", ""
	for {
		page, err := v.rows(ctx, len(currentsTable.columns), selectCurrentRows, c.laboratory, kind, code)
		if err != nil {
			return fmt.Errorf("read current rows: %w", err)
		}
		if len(page) == 0 {
			return nil
		}
		keys := make([]Key, len(page))
		for i, row := range page {
			kind, code = fmt.Sprint(row[1]), fmt.Sprint(row[2])
			keys[i] = Key{Laboratory: c.laboratory, Kind: Kind(kind), Code: code}
		}
		histories, _, err := v.histories(ctx, c.laboratory, keys, always)
		if err != nil {
			return err
		}
		for i, row := range page {
			history := histories[keys[i]]
			if len(history) == 0 {
				continue // told as an orphan
			}
			r := currentOf(keys[i], history)
			expected := []any{c.laboratory, string(keys[i].Kind), keys[i].Code, int64(r.newest), string(r.state), int64(r.inForce), string(r.held), nullInstant(r.until)}
			if f, e := rowText(row), rowText(expected); f != e {
				c.find(-1, "currents", rowKey("currents", row), f, e)
			}
		}
	}
}

const selectKeys = `SELECT ` + versionColumns + ` FROM versions v
	WHERE v.laboratory = $1 AND v.kind = 'key' ORDER BY v.code, v.version`

// loadCheckpoints reads the signed checkpoints and the public keys, and notes
// at which sizes the root will be asked for.
func (c *checker) loadCheckpoints(ctx context.Context, v *View) error {
	c.keys = c.options.Verifiers
	// Every version counts: a key that was replaced has signed its time.
	recorded, err := v.raws(ctx, selectKeys, c.laboratory)
	if err != nil {
		return fmt.Errorf("read the public keys: %w", err)
	}
	for _, raw := range recorded {
		if key, err := Decode[SigningKey](raw); err == nil {
			c.keys = append(c.keys, key.Value.Verifier)
		}
	}
	for after := int64(-1); ; {
		page, err := v.Checkpoints(ctx, c.laboratory, after, MaxLimit)
		if err != nil {
			return err
		}
		c.stored = append(c.stored, page...)
		if len(page) < MaxLimit {
			break
		}
		after = page[len(page)-1].Size
	}
	for i, text := range c.options.Outside {
		signed, err := ledger.Open(text, c.keys...)
		if err != nil {
			c.find(-1, "checkpoints", fmt.Sprintf("%s number %d of those kept outside", c.laboratory, i+1), err.Error(), "a note signed by a known key")
			continue
		}
		c.outside = append(c.outside, Checkpoint{Size: signed.Size, Signer: signed.Signer, Note: text})
	}
	for _, p := range append(append([]Checkpoint{}, c.stored...), c.outside...) {
		c.roots[p.Size] = ledger.Hash{}
		if signed, err := ledger.Open(p.Note, c.keys...); err == nil {
			c.roots[signed.Size] = ledger.Hash{}
		}
	}
	c.roots[0] = ledger.EmptyRoot()
	return nil
}

// checkCheckpoints compares the checkpoints, stored and kept outside, with the
// roots recomputed on the way.
func (c *checker) checkCheckpoints() {
	size := c.tree.Size()
	key := func(p Checkpoint) string { return fmt.Sprintf("%s size %d %s", c.laboratory, p.Size, p.Signer) }
	byKey := make(map[string]Checkpoint, len(c.stored))
	for _, p := range c.stored {
		byKey[key(p)] = p
		signed, err := ledger.Open(p.Note, c.keys...)
		switch {
		case err != nil:
			c.find(-1, "checkpoints", key(p), err.Error(), "a note signed by a known key")
		case signed.Size != p.Size || signed.Signer != p.Signer:
			c.find(-1, "checkpoints", key(p), fmt.Sprintf("a note for size %d by %s", signed.Size, signed.Signer), "size and signer of its row")
		case signed.Size > size:
			c.find(-1, "entries", c.laboratory+" position "+strconv.FormatInt(size, 10), "no row", fmt.Sprintf("entries up to the checkpoint of size %d", signed.Size))
		case c.roots[signed.Size] != signed.Root:
			c.find(-1, "checkpoints", key(p), "root "+signed.Root.String(), "the recomputed root "+c.roots[signed.Size].String())
		default:
			c.signed++
		}
	}
	for _, p := range c.outside {
		signed, err := ledger.Open(p.Note, c.keys...)
		if err != nil {
			continue // told when it was loaded
		}
		if signed.Size > size {
			c.find(-1, "entries", c.laboratory+" position "+strconv.FormatInt(size, 10), "no row", fmt.Sprintf("entries up to the checkpoint kept outside, of size %d", signed.Size))
			continue
		}
		if c.roots[signed.Size] != signed.Root {
			c.find(-1, "entries", c.laboratory+" positions below "+strconv.FormatInt(signed.Size, 10), "root "+c.roots[signed.Size].String(), "the root kept outside, "+signed.Root.String())
		}
		if stored, ok := byKey[key(p)]; !ok || !bytes.Equal(stored.Note, p.Note) {
			c.find(-1, "checkpoints", key(p), "no such note", "the note kept outside")
		}
	}
}
