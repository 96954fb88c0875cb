package store

import (
	"context"
	"crypto/sha256"
	"database/sql"
	"fmt"
	"math"
	"slices"
	"strconv"

	"deltamoor/calib"
	"deltamoor/store/ledger"
)

// readingsPerBlock is how many readings one hash of a session covers.
const readingsPerBlock = 64

var readingColumns = []string{"laboratory", "session", "number", "analysis", "preparation", "position", "peak",
	"quantity", "role", "material", "unit", "sample", "compound", "grouping", "measured_at", "raw", "u", "size", "extra"}

// appendLine appends the canonical JSON (RFC 8785) of a reading: the members of
// Reading's JSON, sorted, without those that are empty. It is written out by hand
// because an import hashes thousands; a test compares it with ledger.Canonical.
func (r *Reading) appendLine(b []byte) []byte {
	member := func(name string) {
		b = append(append(append(b, '"'), name...), `":`...)
	}
	always := func(name, value string) {
		member(name)
		b = append(ledger.AppendString(b, value), ',')
	}
	text := func(name, value string) {
		if value != "" {
			always(name, value)
		}
	}
	number := func(name string, value *float64) {
		if value != nil {
			member(name)
			b = append(ledger.AppendNumber(b, *value), ',')
		}
	}
	integer := func(name string, value *int) {
		if value != nil {
			member(name)
			b = append(strconv.AppendInt(b, int64(*value), 10), ',')
		}
	}
	b = append(b, '{')
	text("analysis", r.Analysis)
	if r.At != nil {
		always("at", r.At.String())
	}
	text("compound", r.Compound)
	text("extra", r.Extra)
	text("group", r.Group)
	text("material", r.Material)
	integer("number", &r.Number)
	integer("peak", r.Peak)
	integer("position", r.Position)
	text("preparation", r.Preparation)
	always("quantity", r.Quantity)
	number("raw", &r.Raw)
	always("role", string(r.Role))
	text("sample", r.Sample)
	always("session", r.Session)
	number("size", r.Size)
	number("u", r.U)
	text("unit", r.Unit)
	b[len(b)-1] = '}'
	return b
}

// ReadingLine returns the canonical bytes of a reading.
func ReadingLine(r Reading) []byte { return r.appendLine(nil) }

// blockHasher hashes readings as they come, by number.
type blockHasher struct {
	blocks []Hash
	buffer []byte
	inside int
	count  int
}

func (h *blockHasher) add(r *Reading) {
	if h.inside > 0 {
		h.buffer = append(h.buffer, '\n')
	}
	h.buffer = r.appendLine(h.buffer)
	h.count++
	if h.inside++; h.inside == readingsPerBlock {
		h.flush()
	}
}

func (h *blockHasher) flush() {
	if h.inside > 0 {
		h.blocks = append(h.blocks, sha256.Sum256(h.buffer))
		h.buffer, h.inside = h.buffer[:0], 0
	}
}

func (h *blockHasher) sum() []Hash {
	h.flush()
	return h.blocks
}

// ReadingBlocks returns what a session's body holds of its readings: one SHA-256
// for every 64, in the order given, over their canonical lines joined by line feeds.
func ReadingBlocks(readings []Reading) []Hash {
	var h blockHasher
	for i := range readings {
		h.add(&readings[i])
	}
	return h.sum()
}

// maxReadingText bounds one text of a reading, in bytes.
const maxReadingText = 10_000

// check refuses what cannot be stored and read back the same, or found again.
func (r *Reading) check(laboratory string) error {
	place := func(field string) string {
		return fmt.Sprintf("session %s/%s reading %d %s", laboratory, r.Session, r.Number, field)
	}
	for _, t := range [...]struct{ name, text string }{
		{"session", r.Session}, {"analysis", r.Analysis}, {"preparation", r.Preparation}, {"quantity", r.Quantity},
		{"role", string(r.Role)}, {"material", r.Material}, {"unit", r.Unit}, {"sample", r.Sample},
		{"compound", r.Compound}, {"group", r.Group}, {"extra", r.Extra},
	} {
		if textFault(t.text, maxReadingText) {
			return checkText(place(t.name), t.text, maxReadingText)
		}
	}
	for _, f := range [...]struct {
		name  string
		value *float64
	}{{"raw", &r.Raw}, {"u", r.U}, {"size", r.Size}} {
		if f.value != nil && (math.IsNaN(*f.value) || math.IsInf(*f.value, 0)) {
			return &InvalidError{Place: place(f.name), Found: strconv.FormatFloat(*f.value, 'g', -1, 64), Expected: "a finite number"}
		}
	}
	if r.Extra != "" {
		canonical, err := ledger.CanonicalJSON([]byte(r.Extra))
		if err != nil || string(canonical) != r.Extra || r.Extra[0] != '{' {
			return &InvalidError{Place: place("extra"), Found: strconv.Quote(r.Extra), Expected: "a canonical JSON object"}
		}
	}
	return nil
}

func floatBits(f float64) uint64 {
	if f == 0 {
		return 0 // negative zero is zero, as in every canonical form
	}
	return math.Float64bits(f)
}

func nullFloat(f *float64) any {
	if f == nil {
		return nil
	}
	return *f + 0 // negative zero is zero
}

func nullInt(i *int) any {
	if i == nil {
		return nil
	}
	return int64(*i)
}

func (r *Reading) row(laboratory string) []any {
	return []any{laboratory, r.Session, int64(r.Number), r.Analysis, r.Preparation, nullInt(r.Position), nullInt(r.Peak),
		r.Quantity, string(r.Role), r.Material, r.Unit, r.Sample, r.Compound, r.Group, nullInstant(r.At),
		r.Raw + 0, nullFloat(r.U), nullFloat(r.Size), nullable(r.Extra)}
}

// sessionRows follows what a transaction adds to one session.
type sessionRows struct {
	hasher blockHasher
	units  map[string]int
	next   int
}

const selectLastReading = `SELECT coalesce(max(number), 0) FROM readings WHERE laboratory = $1 AND session = $2`

// AppendReadings adds rows to the readings of sessions, in bulk. The numbers of
// a session run from 1 without gaps, and the same transaction must append the
// session's version, whose body counts and hashes all its readings
// (ReadingBlocks): rows that nothing binds are refused.
func (tx *Tx) AppendReadings(ctx context.Context, readings []Reading) error {
	if tx.sessions == nil {
		tx.sessions = make(map[string]*sessionRows)
	}
	rows := make([][]any, len(readings))
	var s *sessionRows
	for i := range readings {
		r := &readings[i]
		if err := r.check(tx.laboratory); err != nil {
			return err
		}
		if i == 0 || r.Session != readings[i-1].Session {
			var err error
			if s, err = tx.session(ctx, r.Session); err != nil {
				return err
			}
		}
		if r.Number != s.next {
			return &InvalidError{Place: fmt.Sprintf("session %s/%s reading %d", tx.laboratory, r.Session, r.Number),
				Found: "number " + strconv.Itoa(r.Number), Expected: strconv.Itoa(s.next)}
		}
		s.next++
		s.hasher.add(r)
		if r.Unit != "" {
			s.units[r.Unit]++
		}
		rows[i] = r.row(tx.laboratory)
	}
	if err := tx.store.engine.copyReadings(ctx, tx.conn, tx.sql, rows); err != nil {
		return fmt.Errorf("store readings: %w", tx.q.note(err))
	}
	return nil
}

// session begins to follow a session. Readings it already has are hashed again,
// since the body's blocks run over all of them.
func (tx *Tx) session(ctx context.Context, code string) (*sessionRows, error) {
	if s, ok := tx.sessions[code]; ok {
		return s, nil
	}
	s := &sessionRows{units: make(map[string]int)}
	var last int
	if err := tx.q.one(ctx, selectLastReading, []any{tx.laboratory, code}, &last); err != nil {
		return nil, fmt.Errorf("read session %s/%s: %w", tx.laboratory, code, err)
	}
	if last > 0 {
		err := tx.Readings(ctx, tx.laboratory, code, func(r Reading) error {
			s.hasher.add(&r)
			if r.Unit != "" {
				s.units[r.Unit]++
			}
			return nil
		})
		if err != nil {
			return nil, err
		}
	}
	s.next = last + 1
	if tx.sessions == nil {
		tx.sessions = make(map[string]*sessionRows)
	}
	tx.sessions[code] = s
	return s, nil
}

// bindReadings refuses rows that no version of the same act binds, and queued
// sessions whose body does not fit its rows.
func (tx *Tx) bindReadings(ctx context.Context) error {
	bound := make(map[string]bool)
	for _, q := range tx.queue {
		if q.raw.Kind != KindSession {
			continue
		}
		body, err := Decode[Session](q.raw)
		if err != nil {
			return err
		}
		s, err := tx.session(ctx, q.raw.Code)
		if err != nil {
			return err
		}
		bound[q.raw.Code] = true
		place := q.raw.Ref.String()
		if body.Value.Readings != s.hasher.count {
			return &InvalidError{Place: place, Found: fmt.Sprintf("a body of %d readings", body.Value.Readings), Expected: strconv.Itoa(s.hasher.count)}
		}
		if blocks := s.hasher.sum(); !slices.Equal(blocks, body.Value.Blocks) {
			return &InvalidError{Place: place, Found: fmt.Sprintf("%d blocks", len(body.Value.Blocks)), Expected: fmt.Sprintf("the %d hashes of its readings", len(blocks))}
		}
	}
	for code := range tx.sessions {
		if !bound[code] {
			return &InvalidError{Place: fmt.Sprintf("readings of session %s/%s", tx.laboratory, code), Found: "no version of the session in the same act", Expected: "the version that binds them"}
		}
	}
	return nil
}

const selectReadings = `SELECT session, number, analysis, preparation, position, peak, quantity, role, material, unit,
		sample, compound, grouping, measured_at, raw, u, size, extra
	FROM readings WHERE laboratory = $1 AND session = $2 AND number > $3 ORDER BY number LIMIT $4`

// Readings calls f for every reading of a session, by number. f must not use the
// view: the rows are still being read.
func (v *View) Readings(ctx context.Context, laboratory, session string, f func(Reading) error) error {
	return v.readings(ctx, laboratory, session, 0, math.MaxInt32, f)
}

// ReadingsPage returns up to limit readings of a session with a number greater
// than after; limit 0 is DefaultLimit.
func (v *View) ReadingsPage(ctx context.Context, laboratory, session string, after, limit int) ([]Reading, error) {
	var page []Reading
	err := v.readings(ctx, laboratory, session, after, pageLimit(limit), func(r Reading) error {
		page = append(page, r)
		return nil
	})
	return page, err
}

func (v *View) readings(ctx context.Context, laboratory, session string, after, limit int, f func(Reading) error) error {
	err := v.q.each(ctx, selectReadings, []any{laboratory, session, after, limit}, func(scan func(...any) error) error {
		r, err := scanReading(scan)
		if err != nil {
			return err
		}
		return f(r)
	})
	if err != nil {
		return fmt.Errorf("read readings of session %s/%s: %w", laboratory, session, err)
	}
	return nil
}

func scanReading(scan func(...any) error) (Reading, error) {
	var r Reading
	var position, peak, at sql.Null[int64]
	var u, size sql.Null[float64]
	var extra sql.Null[string]
	var role string
	if err := scan(&r.Session, &r.Number, &r.Analysis, &r.Preparation, &position, &peak, &r.Quantity, &role, &r.Material, &r.Unit,
		&r.Sample, &r.Compound, &r.Group, &at, &r.Raw, &u, &size, &extra); err != nil {
		return Reading{}, err
	}
	r.Role = calib.Role(role)
	r.Position, r.Peak, r.At = intOrNil(position), intOrNil(peak), instantOrNil(at)
	if u.Valid {
		r.U = &u.V
	}
	if size.Valid {
		r.Size = &size.V
	}
	r.Extra = extra.V
	return r, nil
}

func intOrNil(n sql.Null[int64]) *int {
	if !n.Valid {
		return nil
	}
	i := int(n.V)
	return &i
}
