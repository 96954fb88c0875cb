package store

import (
	"context"
	"encoding/json"
	"fmt"
	"math"
)

// A LineRow is the line of one version of a calibration, for the history of an
// instrument: raw = intercept + slope·true, at the reference time and size.
type LineRow struct {
	Laboratory  string
	Calibration string
	Version     int
	Instrument  string
	Method      string
	Scale       string
	Measurand   string
	Session     string
	// At is the start of the session; nil where it is not known.
	At         *Instant
	Slope      float64 // raw per true
	USlope     float64
	Intercept  float64 // ‰
	UIntercept float64
	// Drift is linear, in ‰ an hour; nil where the model has none.
	Drift, UDrift *float64
	// Approved says that this version is in force.
	Approved   bool
	RecordedAt Instant
}

var linesTable = table{"lines", []string{"laboratory", "calibration", "version", "instrument", "method", "scale", "measurand", "session",
	"measured_at", "slope", "u_slope", "intercept", "u_intercept", "drift", "u_drift", "recorded_at"}}

// lineOf derives the row of a calibration's version; none where it has no slope.
func lineOf(raw Raw, c Version[Calibration]) [][]any {
	parameter := func(name string) *Parameter {
		for i := range c.Value.Parameters {
			if c.Value.Parameters[i].Name == name {
				return &c.Value.Parameters[i]
			}
		}
		return nil
	}
	slope, intercept := parameter("slope"), parameter("intercept")
	if slope == nil || intercept == nil {
		return nil
	}
	var drift, uDrift any
	if d := parameter("drift.linear"); d != nil {
		drift, uDrift = d.Value+0, d.StandardUncertainty+0
	}
	method, at := "", int64(0)
	for _, in := range raw.Inputs {
		if in.Part == "method" {
			method = in.Code
		}
	}
	if c.Value.StartedAt != nil {
		at = int64(*c.Value.StartedAt)
	}
	return [][]any{{raw.Laboratory, raw.Code, int64(raw.Version), c.Value.Instrument, method, c.Value.Scale, c.Value.Measurand, c.Value.Session,
		at, slope.Value + 0, slope.StandardUncertainty + 0, intercept.Value + 0, intercept.StandardUncertainty + 0, drift, uDrift, int64(raw.RecordedAt)}}
}

// A LineQuery asks for the lines of one instrument, in the order of method,
// scale, measurand and time.
type LineQuery struct {
	Laboratory, Instrument string
	// Method, Scale and Measurand restrict further; "" is any.
	Method, Scale, Measurand string
	// Approved leaves out versions that are not in force.
	Approved bool
	// After is the cursor of the page before; "" begins.
	After string
	// Limit is at most MaxLimit; 0 is DefaultLimit.
	Limit int
	// AsOf leaves out what was recorded later, and says what was in force then; nil is now.
	AsOf *Instant
}

type lineCursor struct {
	Method    string `json:"m"`
	Scale     string `json:"s"`
	Measurand string `json:"d"`
	At        int64  `json:"a"`
	Code      string `json:"c"`
	Version   int    `json:"v"`
}

const (
	lineColumns = `l.calibration, l.version, l.method, l.scale, l.measurand, l.session, l.measured_at, l.slope, l.u_slope,
		l.intercept, l.u_intercept, l.drift, l.u_drift, l.recorded_at,
		CASE WHEN c.in_force = l.version AND c.held = 'approved' AND (c.until IS NULL OR c.until > $2) THEN 1 ELSE 0 END`
	selectLines = `SELECT ` + lineColumns + ` FROM lines l
		JOIN currents c ON c.laboratory = l.laboratory AND c.kind = 'calibration' AND c.code = l.calibration
		WHERE l.laboratory = $1 AND l.instrument = $3 AND ($4 = '' OR l.method = $4) AND ($5 = '' OR l.scale = $5) AND ($6 = '' OR l.measurand = $6)
			AND l.recorded_at <= $7 AND (l.method, l.scale, l.measurand, l.measured_at, l.calibration, l.version) > ($8, $9, $10, $11, $12, $13)
			AND ($14 = 0 OR (c.in_force = l.version AND c.held = 'approved' AND (c.until IS NULL OR c.until > $2)))
		ORDER BY l.method, l.scale, l.measurand, l.measured_at, l.calibration, l.version LIMIT $15`
	// Of the instrument's lines before a moment the newest ones are looked at, and of
	// those the approved ones counted: both bounded, both by the index.
	selectLastLines = `SELECT ` + lineColumns + ` FROM (SELECT * FROM lines
			WHERE laboratory = $1 AND instrument = $3 AND method = $4 AND scale = $5 AND measurand = $6 AND measured_at < $7
			ORDER BY measured_at DESC, calibration DESC, version DESC LIMIT $8) l
		JOIN currents c ON c.laboratory = $1 AND c.kind = 'calibration' AND c.code = l.calibration
		WHERE l.laboratory = $1 AND c.in_force = l.version AND c.held = 'approved' AND (c.until IS NULL OR c.until > $2)
		ORDER BY l.measured_at DESC, l.calibration DESC LIMIT $9`
)

// draftsPerLine is how many versions are looked at for each approved line
// that is asked for.
const draftsPerLine = 5

func scanLine(scan func(...any) error, q LineQuery) (LineRow, error) {
	r := LineRow{Laboratory: q.Laboratory, Instrument: q.Instrument}
	var at Instant
	var approved int
	err := scan(&r.Calibration, &r.Version, &r.Method, &r.Scale, &r.Measurand, &r.Session, &at, &r.Slope, &r.USlope,
		&r.Intercept, &r.UIntercept, &r.Drift, &r.UDrift, &r.RecordedAt, &approved)
	r.Approved = approved == 1
	if at != 0 {
		r.At = &at
	}
	return r, err
}

// Lines returns a page of an instrument's lines, and the cursor of the next
// page, "" at the end. A page may be short where versions are left out.
func (v *View) Lines(ctx context.Context, q LineQuery) ([]LineRow, string, error) {
	after := lineCursor{At: math.MinInt64}
	if q.After != "" {
		if err := json.Unmarshal([]byte(q.After), &after); err != nil {
			return nil, "", &InvalidError{Place: "cursor", Found: q.After, Expected: "a cursor of the page before"}
		}
	}
	m := Moment{AsOf: q.AsOf}
	as, err := v.asOf(ctx, q.Laboratory, m)
	if err != nil {
		return nil, "", err
	}
	past, err := v.past(ctx, q.Laboratory, m)
	if err != nil {
		return nil, "", err
	}
	limit := pageLimit(q.Limit)
	// What was in force in the past is read from history, row by row of a page.
	filter := 0
	if q.Approved && !past {
		filter = 1
	}
	var page []LineRow
	args := []any{q.Laboratory, int64(v.now), q.Instrument, q.Method, q.Scale, q.Measurand, int64(as),
		after.Method, after.Scale, after.Measurand, after.At, after.Code, after.Version, filter, limit + 1}
	err = v.q.each(ctx, selectLines, args, func(scan func(...any) error) error {
		r, err := scanLine(scan, q)
		page = append(page, r)
		return err
	})
	if err != nil {
		return nil, "", fmt.Errorf("list lines of %s in %s: %w", q.Instrument, q.Laboratory, err)
	}
	next := ""
	if len(page) > limit {
		page = page[:limit]
		last := page[limit-1]
		cursor := lineCursor{Method: last.Method, Scale: last.Scale, Measurand: last.Measurand, Code: last.Calibration, Version: last.Version}
		if last.At != nil {
			cursor.At = int64(*last.At)
		}
		text, err := json.Marshal(cursor)
		if err != nil {
			return nil, "", err
		}
		next = string(text)
	}
	if !past {
		return page, next, nil
	}
	kept := page[:0]
	for _, r := range page {
		versions, valid, until, err := v.momentOf(ctx, Key{Laboratory: q.Laboratory, Kind: KindCalibration, Code: r.Calibration}, m)
		if err != nil {
			return nil, "", err
		}
		i, state := inForce(versions, true, valid, until)
		r.Approved = i >= 0 && state == Approved && versions[i].version == r.Version
		if r.Approved || !q.Approved {
			kept = append(kept, r)
		}
	}
	return kept, next, nil
}

// LastLines returns the last lines, newest first, that an instrument had by a
// method on a scale in sessions begun before a moment, and that are approved
// now. Limit is at most MaxLimit; 0 is DefaultLimit.
func (v *View) LastLines(ctx context.Context, q LineQuery, before Instant) ([]LineRow, error) {
	limit := pageLimit(q.Limit)
	var out []LineRow
	args := []any{q.Laboratory, int64(v.now), q.Instrument, q.Method, q.Scale, q.Measurand, int64(before), limit * draftsPerLine, limit}
	err := v.q.each(ctx, selectLastLines, args, func(scan func(...any) error) error {
		r, err := scanLine(scan, q)
		out = append(out, r)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read the last lines of %s in %s: %w", q.Instrument, q.Laboratory, err)
	}
	return out, nil
}
