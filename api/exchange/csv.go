package exchange

import (
	"bufio"
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"iter"
	"strings"
	"unicode/utf8"
)

// A cell is what stands in one place of a table.
type cell struct {
	text string
	// number: a workbook stores it as a number, text is in stored form.
	number bool
	// fault says why the cell has no value (an error value, a formula never computed); "" when it has one.
	fault string
}

// rows streams a table: each row with the number that a spreadsheet shows for
// it. Rows without any cell may be left out. io.EOF ends it.
type rows interface {
	next() (number int, cells []cell, err error)
	close()
}

// csvRows streams delimited text.
type csvRows struct {
	message string
	reader  *csv.Reader
	cells   []cell
	// behind is how far line numbers run ahead of row numbers: lines inside quoted fields.
	skipped, behind int
}

// newCSV reads UTF-8 text with LF line ends. skipped lines were taken off its front.
func newCSV(message string, text []byte, delimiter rune, skipped int) *csvRows {
	r := csv.NewReader(bytes.NewReader(text))
	r.Comma = delimiter
	r.FieldsPerRecord = -1
	r.ReuseRecord = true
	return &csvRows{message: message, reader: r, skipped: skipped}
}

func (r *csvRows) close() {}

func (r *csvRows) next() (int, []cell, error) {
	record, err := r.reader.Read()
	if err == io.EOF {
		return 0, nil, io.EOF
	}
	var fault *csv.ParseError
	if errors.As(err, &fault) {
		row := fault.StartLine - r.behind + r.skipped
		place, found, expected := placeOf(row, ""), "text that breaks the rules of quoting", "a field in double quotes, with quotes inside it doubled"
		switch {
		case errors.Is(err, csv.ErrBareQuote):
			found = "a quotation mark inside a field that does not begin with one"
		case errors.Is(err, csv.ErrQuote):
			found = "a quoted field with text behind its closing quotation mark, or none to close it"
		}
		return 0, nil, refuseOne(r.message, place, found, expected)
	}
	if err != nil {
		return 0, nil, fmt.Errorf("%s: %w", r.message, err)
	}
	line, _ := r.reader.FieldPos(0)
	number := line - r.behind + r.skipped
	r.cells = r.cells[:0]
	for _, field := range record {
		r.behind += strings.Count(field, "\n")
		r.cells = append(r.cells, cell{text: field})
	}
	return number, r.cells, nil
}

// WriteCSV streams a table as CSV after RFC 4180: UTF-8 without byte order
// mark, comma, CRLF, a field in double quotes only where it holds a comma, a
// quotation mark, a line end or outer spaces. Fields are written byte for byte:
// a standard reader gives them back, line ends inside them included.
//
// Spreadsheet programs run a cell as a formula when it begins with one of
// = + - @ or a tab. A field that does and is not a plain number gets an
// apostrophe in front, the spreadsheets' own mark for text; [Unguard] takes it
// off again. So −25.1 written "-25.1" stays a number, and a label "-A1" or
// "=SUM(A1)" cannot act. This is told from the field itself, because a list's
// columns hold whatever people typed.
//
// Every row must have as many fields as the header. An error of rows, or of w,
// ends the writing and is returned; what was written before stands.
func WriteCSV(w io.Writer, header []string, rows iter.Seq2[[]string, error]) error {
	out := bufio.NewWriterSize(w, 32<<10)
	if err := writeRecord(out, header); err != nil {
		return fmt.Errorf("write CSV: %w", err)
	}
	n := 0
	for record, err := range rows {
		if err != nil {
			out.Flush()
			return fmt.Errorf("write CSV: %w", err)
		}
		n++
		if len(record) != len(header) {
			out.Flush()
			return fmt.Errorf("write CSV: row %d has %d fields, expected %d", n, len(record), len(header))
		}
		if err := writeRecord(out, record); err != nil {
			return fmt.Errorf("write CSV: %w", err)
		}
	}
	if err := out.Flush(); err != nil {
		return fmt.Errorf("write CSV: %w", err)
	}
	return nil
}

// writeRecord writes one line. A bufio.Writer keeps its first error, so that
// of the last write is enough.
func writeRecord(out *bufio.Writer, record []string) error {
	for i, field := range record {
		if i > 0 {
			out.WriteByte(',')
		}
		field = Guard(field)
		// A row of one empty field would be an empty line, which readers skip.
		if !needsQuotes(field) && (field != "" || len(record) > 1) {
			out.WriteString(field)
			continue
		}
		out.WriteByte('"')
		for {
			at := strings.IndexByte(field, '"')
			if at < 0 {
				break
			}
			out.WriteString(field[:at+1])
			out.WriteByte('"')
			field = field[at+1:]
		}
		out.WriteString(field)
		out.WriteByte('"')
	}
	_, err := out.WriteString("\r\n")
	return err
}

func needsQuotes(field string) bool {
	if field == "" {
		return false
	}
	if strings.ContainsAny(field, ",\"\r\n") {
		return true
	}
	first, last := field[0], field[len(field)-1]
	return first == ' ' || last == ' ' || first == '\t' || last == '\t'
}

// Guard puts an apostrophe before a text that a spreadsheet would run as a
// formula, and before one that already looks guarded, so that [Unguard] gives
// the text back. Numbers and all other texts are returned as they are.
func Guard(field string) string {
	if !startsFormula(field) && !guarded(field) {
		return field
	}
	if _, number := readStored(field); number {
		return field
	}
	return "'" + field
}

// Unguard takes off the apostrophe of [Guard]: Unguard(Guard(s)) == s for every s.
func Unguard(field string) string {
	if guarded(field) {
		return field[1:]
	}
	return field
}

// guarded reports one or more apostrophes before the beginning of a formula.
func guarded(field string) bool {
	rest := strings.TrimLeft(field, "'")
	return len(rest) < len(field) && startsFormula(rest)
}

func startsFormula(field string) bool {
	first, _ := utf8.DecodeRuneInString(field)
	return strings.ContainsRune("=+-@\t\r\n＝＋－＠", first)
}
