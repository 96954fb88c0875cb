package store

import (
	"context"
	"database/sql"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strings"

	"deltamoor/calib"
)

// A ResultRow is one line of a calibration, for lists and charts.
type ResultRow struct {
	Laboratory  string
	Calibration string
	Version     int
	Line        int // index in the calibration's results
	Subject     string
	Role        calib.Role
	Session     string
	Scale       string
	Measurand   string
	Instrument  string
	// At is the start of the session; nil where it is not known.
	At                  *Instant
	Value               float64 // ‰
	StandardUncertainty float64 // ‰
	Flags               []string
	RecordedAt          Instant
}

// A ResultQuery asks for results of one subject, or of one scale, in the order
// of time.
type ResultQuery struct {
	Laboratory string
	// Subject is a sample's or a control material's code; "" is any, then Scale is asked for.
	Subject   string
	Scale     string // "" is any
	Measurand string // "" is any
	// Instrument and Role restrict further; "" is any.
	Instrument string
	Role       calib.Role
	// From and To bound the start of the session, both inclusive; nil is open.
	From, To *Instant
	// After is the cursor of the page before; "" begins.
	After string
	// Limit is at most MaxLimit; 0 is DefaultLimit.
	Limit int
	// AsOf leaves out what was recorded later; nil is now.
	AsOf *Instant
}

type resultCursor struct {
	At      int64  `json:"a"`
	Code    string `json:"c"`
	Version int    `json:"v"`
	Line    int    `json:"l"`
}

const (
	resultColumns = `r.calibration, r.version, r.line, r.subject, r.role, r.session, r.scale, r.measurand, r.instrument,
		r.measured_at, r.value, r.u, r.flags, r.recorded_at`
	resultConditions = ` AND ($4 = '' OR r.measurand = $4) AND ($5 = '' OR r.instrument = $5) AND ($6 = '' OR r.role = $6)
			AND r.measured_at >= $7 AND r.measured_at <= $8 AND r.recorded_at <= $9
			AND (r.measured_at, r.calibration, r.version, r.line) > ($10, $11, $12, $13)
		ORDER BY r.measured_at, r.calibration, r.version, r.line LIMIT $14`
	selectResultsOfSubject = `SELECT ` + resultColumns + ` FROM results r
		WHERE r.laboratory = $1 AND r.subject = $2 AND ($3 = '' OR r.scale = $3)` + resultConditions
	selectResultsOfScale = `SELECT ` + resultColumns + ` FROM results r
		WHERE r.laboratory = $1 AND ($2 = '' OR r.subject = $2) AND r.scale = $3` + resultConditions
)

// Results returns a page of results of every version of calibrations, drafts
// included, and the cursor of the next page, "" at the end.
func (v *View) Results(ctx context.Context, q ResultQuery) ([]ResultRow, string, error) {
	statement := selectResultsOfSubject
	if q.Subject == "" {
		if q.Scale == "" {
			return nil, "", &InvalidError{Place: "list of results", Found: "neither subject nor scale", Expected: "one of them"}
		}
		statement = selectResultsOfScale
	}
	after := resultCursor{At: math.MinInt64}
	if q.After != "" {
		if err := json.Unmarshal([]byte(q.After), &after); err != nil {
			return nil, "", &InvalidError{Place: "cursor", Found: q.After, Expected: "a cursor of the page before"}
		}
	}
	from, to := int64(math.MinInt64), int64(math.MaxInt64)
	if q.From != nil {
		from = int64(*q.From)
	}
	if q.To != nil {
		to = int64(*q.To)
	}
	as, err := v.asOf(ctx, q.Laboratory, Moment{AsOf: q.AsOf})
	if err != nil {
		return nil, "", err
	}
	limit := pageLimit(q.Limit)
	var page []ResultRow
	args := []any{q.Laboratory, q.Subject, q.Scale, q.Measurand, q.Instrument, string(q.Role), from, to, int64(as),
		after.At, after.Code, after.Version, after.Line, limit + 1}
	err = v.q.each(ctx, statement, args, func(scan func(...any) error) error {
		r := ResultRow{Laboratory: q.Laboratory}
		var role, flags string
		var at Instant
		err := scan(&r.Calibration, &r.Version, &r.Line, &r.Subject, &role, &r.Session, &r.Scale, &r.Measurand, &r.Instrument,
			&at, &r.Value, &r.StandardUncertainty, &flags, &r.RecordedAt)
		r.Role, r.Flags = calib.Role(role), strings.Fields(flags)
		if at != 0 {
			r.At = &at
		}
		page = append(page, r)
		return err
	})
	if err != nil {
		return nil, "", fmt.Errorf("list results of %s: %w", q.Laboratory, err)
	}
	if len(page) <= limit {
		return page, "", nil
	}
	page = page[:limit]
	last := page[limit-1]
	cursor := resultCursor{Code: last.Calibration, Version: last.Version, Line: last.Line}
	if last.At != nil {
		cursor.At = int64(*last.At)
	}
	text, err := json.Marshal(cursor)
	return page, string(text), err
}

// Reported is one reported delta, found by the code on paper.
type Reported struct {
	Code                string
	Laboratory          string
	Report              string
	Version             int
	Line                int
	Final               Ref     // without hash
	Value               float64 // ‰
	StandardUncertainty float64 // ‰
	// Hash of the line's canonical bytes, as the report's body holds it.
	Hash Hash
}

// selectReported is keyed without a laboratory: codes are unique in the
// registry, and whoever asks checks the laboratory afterwards.
const selectReported = `SELECT code, laboratory, report, version, line, final, final_version, value, u, hash FROM reported WHERE code = $1`

// Reported returns a reported delta by its code in stored form. It may be of
// any laboratory: the caller checks who may see it.
func (v *View) Reported(ctx context.Context, code string) (Reported, error) {
	var r Reported
	var hash []byte
	err := v.q.one(ctx, selectReported, []any{code}, &r.Code, &r.Laboratory, &r.Report, &r.Version, &r.Line,
		&r.Final.Code, &r.Final.Version, &r.Value, &r.StandardUncertainty, &hash)
	if errors.Is(err, sql.ErrNoRows) {
		return Reported{}, notFound("reported delta %s", FormatCode(code))
	}
	if err != nil {
		return Reported{}, fmt.Errorf("read reported delta %s: %w", FormatCode(code), err)
	}
	r.Final.Laboratory, r.Final.Kind = r.Laboratory, KindFinal
	copy(r.Hash[:], hash)
	return r, nil
}

// Sensitivities are the derivatives of a calibration and its results, packed
// for questions that touch many calibrations.
type Sensitivities struct {
	// AnchorSensitivities and AnchorDerivatives have a row for each parameter and
	// a column for each anchor: for uncertainty, and exact for shifts.
	AnchorSensitivities [][]float64
	AnchorDerivatives   [][]float64
	// NoiseCovariance is parameters × parameters.
	NoiseCovariance [][]float64
	Results         []ResultSensitivity
}

// A ResultSensitivity is what one result is made of.
type ResultSensitivity struct {
	Value               float64 // ‰
	StandardUncertainty float64 // ‰
	// Gradient by the parameters; Coefficients by its own readings.
	Gradient     []float64
	Coefficients []float64
}

// packSensitivities packs a calibration's derivatives in two blocks of float64:
// rows and columns before each matrix, the two counts before each result.
func packSensitivities(c Calibration) (parameters, results []byte, err error) {
	var flat []float64
	for _, m := range [][][]float64{c.AnchorSensitivities, c.AnchorDerivatives, c.NoiseCovariance} {
		columns := 0
		if len(m) > 0 {
			columns = len(m[0])
		}
		flat = append(flat, float64(len(m)), float64(columns))
		for i, row := range m {
			if len(row) != columns {
				return nil, nil, &InvalidError{Place: fmt.Sprintf("matrix row %d", i), Found: fmt.Sprintf("%d columns", len(row)), Expected: fmt.Sprint(columns)}
			}
			flat = append(flat, row...)
		}
	}
	var lines []float64
	for _, r := range c.Results {
		lines = append(lines, r.Value, r.StandardUncertainty, float64(len(r.Gradient)), float64(len(r.Coefficients)))
		lines = append(append(lines, r.Gradient...), r.Coefficients...)
	}
	return packFloats(flat), packFloats(lines), nil
}

const selectSensitivities = `SELECT parameters, results FROM sensitivities
	WHERE laboratory = $1 AND calibration = $2 AND version = $3`

// Sensitivities returns the packed derivatives of one calibration version.
func (v *View) Sensitivities(ctx context.Context, laboratory, calibration string, version int) (Sensitivities, error) {
	var parameters, results []byte
	err := v.q.one(ctx, selectSensitivities, []any{laboratory, calibration, version}, &parameters, &results)
	place := fmt.Sprintf("sensitivities of calibration %s/%s.%d", laboratory, calibration, version)
	if errors.Is(err, sql.ErrNoRows) {
		return Sensitivities{}, notFound("%s", place)
	}
	if err != nil {
		return Sensitivities{}, fmt.Errorf("read %s: %w", place, err)
	}
	s, err := unpackSensitivities(parameters, results)
	if err != nil {
		return Sensitivities{}, fmt.Errorf("read %s: %w", place, err)
	}
	return s, nil
}

func unpackSensitivities(parameters, results []byte) (Sensitivities, error) {
	var s Sensitivities
	f := newFloats(parameters)
	for _, m := range []*[][]float64{&s.AnchorSensitivities, &s.AnchorDerivatives, &s.NoiseCovariance} {
		rows, columns := f.count(), f.count()
		for range rows {
			*m = append(*m, f.take(columns))
		}
	}
	if f.bad || len(f.b) > 0 {
		return s, fmt.Errorf("block of parameters: found %d bytes left over or missing", len(f.b))
	}
	f = newFloats(results)
	for len(f.b) > 0 && !f.bad {
		var r ResultSensitivity
		head := f.take(2)
		gradient, coefficients := f.count(), f.count()
		r.Gradient, r.Coefficients = f.take(gradient), f.take(coefficients)
		if !f.bad {
			r.Value, r.StandardUncertainty = head[0], head[1]
			s.Results = append(s.Results, r)
		}
	}
	if f.bad {
		return s, fmt.Errorf("block of results: found %d bytes, expected whole results", len(results))
	}
	return s, nil
}

// floats reads packed float64; bad is set when they run out. What is taken are
// parts of one slice.
type floats struct {
	b   []byte // what is left, in bytes
	all []float64
	bad bool
}

func newFloats(b []byte) floats {
	f := floats{b: b, all: make([]float64, len(b)/8)}
	for i := range f.all {
		f.all[i] = math.Float64frombits(binary.LittleEndian.Uint64(b[8*i:]))
	}
	return f
}

func (f *floats) take(n int) []float64 {
	if f.bad || n < 0 || 8*n > len(f.b) {
		f.bad = true
		return nil
	}
	values := f.all[:n:n]
	f.all, f.b = f.all[n:], f.b[8*n:]
	return values
}

func (f *floats) count() int {
	n := f.take(1)
	if f.bad || n[0] < 0 || n[0] > 1<<20 || n[0] != math.Trunc(n[0]) {
		f.bad = true
		return 0
	}
	return int(n[0])
}
