package store

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"golang.org/x/text/cases"
	"golang.org/x/text/unicode/norm"
)

// The tables derived from a version. Their rows are a function of the version
// and, for a report, of the final values it names; so verification makes them
// again and compares.
var (
	edgesTable = table{"edges", []string{"laboratory", "from_kind", "from_code", "from_version",
		"to_laboratory", "to_kind", "to_code", "to_version", "part", "recorded_at"}}
	namesTable   = table{"names", []string{"laboratory", "kind", "name", "code", "version", "recorded_at"}}
	resultsTable = table{"results", []string{"laboratory", "calibration", "version", "line", "subject", "role", "session", "scale",
		"measurand", "instrument", "measured_at", "value", "u", "flags", "recorded_at"}}
	sensitivitiesTable = table{"sensitivities", []string{"laboratory", "calibration", "version", "parameters", "results"}}
	reportedTable      = table{"reported", []string{"code", "laboratory", "report", "version", "line", "final", "final_version",
		"value", "u", "hash"}}
)

// derivedTables lists them with the columns that name the version a row comes from.
var derivedTables = []struct {
	table
	kind, code, version string // kind "" where the table is of one kind
	of                  Kind
}{
	{edgesTable, "from_kind", "from_code", "from_version", ""},
	{namesTable, "kind", "code", "version", ""},
	{resultsTable, "", "calibration", "version", KindCalibration},
	{sensitivitiesTable, "", "calibration", "version", KindCalibration},
	{linesTable, "", "calibration", "version", KindCalibration},
	{reportedTable, "", "report", "version", KindReport},
	{sharesTable, "kind", "code", "number", ""},
}

// derived are the rows of one version, by table name.
type derived map[string][][]any

// Fold brings a name into the form names are compared in: compatibility
// characters made plain, case folded, white space collapsed.
func Fold(name string) string {
	return strings.Join(strings.Fields(cases.Fold().String(norm.NFKC.String(name))), " ")
}

// derive returns the derived rows of a recorded version. finalValue looks up a
// final value that a report names.
func derive(raw Raw, finalValue func(Input) (Version[Final], error)) (derived, error) {
	rows := make(derived, 2)
	rows["edges"] = append(rows["edges"], edgesOf(raw)...)
	var err error
	switch raw.Kind {
	case KindMaterial, KindSample, KindScale, KindInstrument, KindMethod, KindPerson, KindUnit, KindSession, KindCalibration, KindFinal:
		if rows["names"], err = namesOf(raw); err != nil {
			return nil, fmt.Errorf("derive rows of %s: %w", raw.Ref, err)
		}
	}
	switch raw.Kind {
	case KindCalibration:
		rows["results"], rows["sensitivities"], rows["lines"], err = resultsOf(raw)
	case KindReport:
		rows["reported"], rows["shares"], err = reportedOf(raw, finalValue)
	case KindFinal:
		rows["shares"], err = sharesOfFinal(raw)
	}
	if err != nil {
		return nil, fmt.Errorf("derive rows of %s: %w", raw.Ref, err)
	}
	return rows, nil
}

func edgesOf(raw Raw) [][]any {
	var rows [][]any
	seen := make(map[Input]bool, len(raw.Inputs))
	for _, in := range raw.Inputs {
		if seen[in] {
			continue // two lines of a report may rest on one final value
		}
		seen[in] = true
		rows = append(rows, []any{raw.Laboratory, string(raw.Kind), raw.Code, int64(raw.Version),
			in.Laboratory, string(in.Kind), in.Code, int64(in.Version), in.Part, int64(raw.RecordedAt)})
	}
	return rows
}

func namesOf(raw Raw) ([][]any, error) {
	names := []string{raw.Code}
	switch raw.Form {
	case Material{}.Form():
		m, err := Decode[Material](raw)
		if err != nil {
			return nil, err
		}
		names = append(append(names, m.Value.Name), m.Value.Aliases...)
	case Sample{}.Form():
		m, err := Decode[Sample](raw)
		if err != nil {
			return nil, err
		}
		names = append(names, m.Value.Label)
	case Scale{}.Form():
		m, err := Decode[Scale](raw)
		if err != nil {
			return nil, err
		}
		names = append(names, m.Value.Quantity+"-"+m.Value.Label)
	case Instrument{}.Form():
		m, err := Decode[Instrument](raw)
		if err != nil {
			return nil, err
		}
		names = append(names, m.Value.Name)
	case Method{}.Form():
		m, err := Decode[Method](raw)
		if err != nil {
			return nil, err
		}
		names = append(names, m.Value.Title)
	case Person{}.Form():
		m, err := Decode[Person](raw)
		if err != nil {
			return nil, err
		}
		names = append(names, m.Value.Name)
	case Unit{}.Form():
		m, err := Decode[Unit](raw)
		if err != nil {
			return nil, err
		}
		names = append(names, m.Value.Label)
	}
	more, err := namesOfActs(raw)
	if err != nil {
		return nil, err
	}
	names = append(names, more...)
	for i, n := range names {
		names[i] = Fold(n)
	}
	slices.Sort(names)
	var rows [][]any
	for _, n := range slices.Compact(names) {
		if n != "" {
			rows = append(rows, []any{raw.Laboratory, string(raw.Kind), n, raw.Code, int64(raw.Version), int64(raw.RecordedAt)})
		}
	}
	return rows, nil
}

func resultsOf(raw Raw) (results, sensitivities, lines [][]any, err error) {
	c, err := Decode[Calibration](raw)
	if err != nil {
		return nil, nil, nil, err
	}
	at := int64(0)
	if c.Value.StartedAt != nil {
		at = int64(*c.Value.StartedAt)
	}
	for line, r := range c.Value.Results {
		results = append(results, []any{raw.Laboratory, raw.Code, int64(raw.Version), int64(line), r.Subject, string(r.Role),
			c.Value.Session, c.Value.Scale, c.Value.Measurand, c.Value.Instrument, at, r.Value + 0, r.StandardUncertainty + 0,
			strings.Join(r.Flags, " "), int64(raw.RecordedAt)})
	}
	parameters, packed, err := packSensitivities(c.Value)
	if err != nil {
		return nil, nil, nil, err
	}
	return results, [][]any{{raw.Laboratory, raw.Code, int64(raw.Version), parameters, packed}}, lineOf(raw, c), nil
}

func sharesOfFinal(raw Raw) ([][]any, error) {
	f, err := Decode[Final](raw)
	if err != nil {
		return nil, err
	}
	return sharesOf(raw, []Version[Final]{f}, []string{f.Code})
}

func reportedOf(raw Raw, finalValue func(Input) (Version[Final], error)) (reported, shares [][]any, err error) {
	report, err := Decode[Report](raw)
	if err != nil {
		return nil, nil, err
	}
	if len(raw.Inputs) < len(report.Value.Lines) {
		return nil, nil, &InvalidError{Place: raw.Ref.String(), Found: fmt.Sprintf("%d inputs for %d lines", len(raw.Inputs), len(report.Value.Lines)), Expected: "a final value for each line"}
	}
	var finals []Version[Final]
	var codes []string
	for i, l := range report.Value.Lines {
		in := raw.Inputs[i]
		if in.Kind != KindFinal {
			return nil, nil, &InvalidError{Place: fmt.Sprintf("%s input %d", raw.Ref, i), Found: "a " + string(in.Kind), Expected: "the final value of line " + fmt.Sprint(i)}
		}
		final, err := finalValue(in)
		if err != nil {
			return nil, nil, err
		}
		line := NewReportLine(l.Code, raw.Code, i, final)
		hash, err := ReportLineHash(line)
		if err != nil {
			return nil, nil, err
		}
		if hash != l.Hash {
			return nil, nil, &InvalidError{Place: fmt.Sprintf("%s line %d (%s)", raw.Ref, i, l.Code), Found: "hash " + l.Hash.String(), Expected: "hash " + hash.String()}
		}
		finals, codes = append(finals, final), append(codes, l.Code)
		reported = append(reported, []any{l.Code, raw.Laboratory, raw.Code, int64(raw.Version), int64(i), in.Code, int64(in.Version),
			final.Value.Value + 0, final.Value.StandardUncertainty + 0, hash[:]})
	}
	shares, err = sharesOf(raw, finals, codes)
	return reported, shares, err
}

// writeDerived writes the derived rows of everything queued.
func (tx *Tx) writeDerived(ctx context.Context) error {
	finalValue := func(in Input) (Version[Final], error) { return tx.finalValue(ctx, in) }
	rows := make(derived)
	for _, q := range tx.queue {
		of, err := derive(q.raw, finalValue)
		if err != nil {
			return err
		}
		for name, r := range of {
			rows[name] = append(rows[name], r...)
		}
	}
	for _, t := range derivedTables {
		if err := tx.q.insert(ctx, t.table, rows[t.name], ""); err != nil {
			return err
		}
	}
	if err := tx.writeUses(ctx); err != nil {
		return err
	}
	return tx.writeCurrents(ctx)
}
