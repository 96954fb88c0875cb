package store

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
)

// A RestingShare is a final value, or a line of a report, as it rests on one
// line of a calibration. It is what the table shares holds, packed.
type RestingShare struct {
	Kind Kind // KindFinal, or KindReport for a reported delta
	// Code is the final value's, or the reported delta's; Final is the final value.
	Code  string
	Final Ref // without hash
	// Report is the report's version; zero for a final value.
	Report Ref
	// Line of the calibration and of the report.
	Line, ReportLine int
	// Members is how many lines of calibrations the final value is made of, and
	// Weight that of this one.
	Members int
	Weight  float64
	// Value and StandardUncertainty are those of the final value (‰).
	Value, StandardUncertainty float64
	// Position in the ledger of the version the row comes from.
	Position int64
	// Scale of a converted value; "" for one on the calibration's own scale.
	Scale string
}

var sharesTable = table{"shares", []string{"laboratory", "calibration", "version", "kind", "code", "number", "packed"}}

// sharesOf derives what a final value, or the lines of a report, put on the
// calibrations they rest on.
func sharesOf(raw Raw, finals []Version[Final], codes []string) ([][]any, error) {
	type key struct {
		code    string
		version int
	}
	packed := map[key]*strings.Builder{}
	var order []key
	for i, f := range finals {
		for _, m := range f.Value.Members {
			if m.Input < 0 || m.Input >= len(f.Inputs) {
				return nil, &InvalidError{Place: f.Ref.String(), Found: fmt.Sprintf("a member of input %d of %d", m.Input, len(f.Inputs)), Expected: "an input it names"}
			}
			in := f.Inputs[m.Input]
			if in.Kind != KindCalibration || in.Laboratory != raw.Laboratory {
				continue
			}
			k := key{in.Code, in.Ref.Version}
			b := packed[k]
			if b == nil {
				b = &strings.Builder{}
				packed[k], order = b, append(order, k)
			} else {
				b.WriteByte('\n')
			}
			s := RestingShare{Code: codes[i], Final: f.Ref, Line: m.Line, ReportLine: i, Members: len(f.Value.Members), Weight: m.Weight,
				Value: f.Value.Value, StandardUncertainty: f.Value.StandardUncertainty, Position: raw.Position}
			if raw.Kind == KindReport {
				s.Report = raw.Ref
			}
			if slices.ContainsFunc(f.Inputs, func(in Input) bool { return in.Part == "converted" }) {
				s.Scale = f.Value.Scale
			}
			s.pack(b)
		}
	}
	var rows [][]any
	for _, k := range order {
		rows = append(rows, []any{raw.Laboratory, k.code, int64(k.version), string(raw.Kind), raw.Code, int64(raw.Ref.Version), packed[k].String()})
	}
	return rows, nil
}

func (s *RestingShare) pack(b *strings.Builder) {
	var buffer [24]byte
	number := func(n int64) {
		b.WriteByte(' ')
		b.Write(strconv.AppendInt(buffer[:0], n, 10))
	}
	float := func(f float64) {
		b.WriteByte(' ')
		b.Write(strconv.AppendUint(buffer[:0], math.Float64bits(f+0), 16))
	}
	b.WriteString(s.Code)
	b.WriteByte(' ')
	b.WriteString(s.Final.Code)
	number(int64(s.Final.Version))
	number(int64(s.Line))
	number(int64(s.Members))
	number(s.Position)
	float(s.Weight)
	float(s.Value)
	float(s.StandardUncertainty)
	if s.Report.Code != "" {
		b.WriteByte(' ')
		b.WriteString(s.Report.Code)
		number(int64(s.Report.Version))
		number(int64(s.ReportLine))
	}
	if s.Scale != "" {
		b.WriteString(" =")
		b.WriteString(s.Scale)
	}
}

// unpackShares calls f for each share of packed lines; the pointer is good
// within the call.
func unpackShares(laboratory, packed string, f func(*RestingShare) error) error {
	var s RestingShare
	for len(packed) > 0 {
		line := packed
		if i := strings.IndexByte(packed, '\n'); i >= 0 {
			line, packed = packed[:i], packed[i+1:]
		} else {
			packed = ""
		}
		ok := true
		word := func() string {
			var w string
			if i := strings.IndexByte(line, ' '); i >= 0 {
				w, line = line[:i], line[i+1:]
			} else {
				w, line = line, ""
			}
			ok = ok && w != ""
			return w
		}
		number := func() int64 {
			n := int64(0)
			for _, c := range []byte(word()) {
				if c < '0' || c > '9' {
					ok = false
				}
				n = 10*n + int64(c-'0')
			}
			return n
		}
		float := func() float64 {
			bits := uint64(0)
			for _, c := range []byte(word()) {
				switch {
				case '0' <= c && c <= '9':
					bits = bits<<4 | uint64(c-'0')
				case 'a' <= c && c <= 'f':
					bits = bits<<4 | uint64(c-'a'+10)
				default:
					ok = false
				}
			}
			return math.Float64frombits(bits)
		}
		s = RestingShare{Kind: KindFinal}
		s.Code = word()
		s.Final = Ref{Key: Key{Laboratory: laboratory, Kind: KindFinal, Code: word()}}
		s.Final.Version, s.Line, s.Members, s.Position = int(number()), int(number()), int(number()), number()
		s.Weight, s.Value, s.StandardUncertainty = float(), float(), float()
		if line != "" && line[0] != '=' {
			s.Kind = KindReport
			s.Report = Ref{Key: Key{Laboratory: laboratory, Kind: KindReport, Code: word()}}
			s.Report.Version, s.ReportLine = int(number()), int(number())
		}
		if line != "" {
			s.Scale = strings.TrimPrefix(word(), "=")
		}
		if !ok {
			return fmt.Errorf("packed shares: found a line that cannot be read")
		}
		if err := f(&s); err != nil {
			return err
		}
	}
	return nil
}

// One text for each calibration: what crosses from the database is then as many
// rows as calibrations, not as deltas.
const selectShares = `) SELECT s.calibration, s.version, JOINED FROM wanted w CROSS JOIN shares s
		WHERE s.laboratory = w.laboratory AND s.calibration = w.code AND s.version = w.version
		GROUP BY s.calibration, s.version`

// RestingOn calls f for every final value and reported delta that rests on some
// calibrations of one laboratory: together for each calibration, in no other
// order. The share is good within the call, in which the view cannot be used.
func (v *View) RestingOn(ctx context.Context, laboratory string, calibrations []Ref, f func(calibration Ref, s *RestingShare) error) error {
	ask := make([]wanted, len(calibrations))
	for i, r := range calibrations {
		ask[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(ask)
	if err != nil {
		return err
	}
	err = v.q.each(ctx, v.q.engine.withWanted+strings.Replace(selectShares, "JOINED", v.q.engine.joinPacked, 1), []any{list}, func(scan func(...any) error) error {
		ref := Ref{Key: Key{Laboratory: laboratory, Kind: KindCalibration}}
		var packed string
		if err := scan(&ref.Code, &ref.Version, &packed); err != nil {
			return err
		}
		return unpackShares(laboratory, packed, func(s *RestingShare) error { return f(ref, s) })
	})
	if err != nil {
		return fmt.Errorf("read what rests on %d calibrations of %s: %w", len(calibrations), laboratory, err)
	}
	return nil
}

const selectMoved = `SELECT c.kind, c.code, c.newest, c.state, c.in_force, c.held FROM currents c
	WHERE c.laboratory = $1 AND c.kind IN ('final', 'report') AND (c.newest > 1 OR c.state <> 'approved' OR c.until IS NOT NULL) LIMIT $2`

// Moved are the final values and reports of a laboratory of which some version
// is not simply approved.
type Moved map[Key]movedRecord

type movedRecord struct {
	newest, inForce int
	state, held     State
}

// State of a version, as far as the current rows tell.
func (m Moved) State(ref Ref) State {
	c, ok := m[ref.Key]
	switch {
	case !ok:
		return Approved
	case ref.Version == c.inForce:
		return c.held
	case ref.Version == c.newest:
		return c.state
	}
	return Superseded
}

const selectMovedOn = `) SELECT DISTINCT c.kind, c.code, c.newest, c.state, c.in_force, c.held FROM wanted w CROSS JOIN shares s CROSS JOIN currents c
	WHERE s.laboratory = w.laboratory AND s.calibration = w.code AND s.version = w.version
		AND c.laboratory = s.laboratory AND c.kind = s.kind AND c.code = s.code AND (c.newest > 1 OR c.state <> 'approved' OR c.until IS NOT NULL)`

// MovedOn reads those of them that rest on some calibrations of one laboratory.
func (v *View) MovedOn(ctx context.Context, laboratory string, calibrations []Ref) (Moved, error) {
	ask := make([]wanted, len(calibrations))
	for i, r := range calibrations {
		ask[i] = wanted{Key: r.Key, version: r.Version}
	}
	list, err := wantedList(ask)
	if err != nil {
		return nil, err
	}
	return v.moved(ctx, laboratory, v.q.engine.withWanted+selectMovedOn, list)
}

// Moved reads them, if they are at most limit; else it returns nil.
func (v *View) Moved(ctx context.Context, laboratory string, limit int) (Moved, error) {
	all, err := v.moved(ctx, laboratory, selectMoved, laboratory, limit+1)
	if err != nil || len(all) > limit {
		return nil, err
	}
	return all, nil
}

func (v *View) moved(ctx context.Context, laboratory, statement string, args ...any) (Moved, error) {
	all := Moved{}
	err := v.q.each(ctx, statement, args, func(scan func(...any) error) error {
		key := Key{Laboratory: laboratory}
		var c movedRecord
		err := scan(&key.Kind, &key.Code, &c.newest, &c.state, &c.inForce, &c.held)
		all[key] = c
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("read what is not simply approved in %s: %w", laboratory, err)
	}
	return all, nil
}
