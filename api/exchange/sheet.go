package exchange

import (
	"encoding/xml"
	"fmt"
	"io"
	"strconv"
	"strings"
)

// sheetNames lists the sheets for a complaint.
func (w *workbook) sheetNames() []string {
	names := make([]string, len(w.sheets))
	for i, s := range w.sheets {
		names[i] = s.name
	}
	return names
}

// sheet finds a sheet by its name without regard to case, as spreadsheet programs do; "" is the first.
func (w *workbook) sheet(name string) (sheetEntry, error) {
	if name == "" {
		return w.sheets[0], nil
	}
	for _, s := range w.sheets {
		if strings.EqualFold(s.name, name) {
			return s, nil
		}
	}
	expected := "one of its sheets: " + quoteAll(w.sheetNames())
	return sheetEntry{}, w.broken("import.sheet", quote(name), expected)
}

// A sheetRows streams the rows of a sheet.
type sheetRows struct {
	w     *workbook
	part  *xmlPart
	cells []cell
	row   int
	done  bool
}

func (w *workbook) rows(s sheetEntry) (*sheetRows, error) {
	p, err := w.open(s.part)
	if err != nil {
		return nil, err
	}
	if p == nil {
		return nil, w.broken("sheet "+quote(s.name), "no part "+s.part, "a workbook that is complete; save it again")
	}
	return &sheetRows{w: w, part: p}, nil
}

func (r *sheetRows) close() { r.part.source.Close() }

// next returns the next row that the sheet stores, with its own number; io.EOF
// after the last. Cells are valid until the next call.
func (r *sheetRows) next() (int, []cell, error) {
	for !r.done {
		t, err := r.part.next()
		if err == io.EOF {
			r.done = true
			break
		}
		if err != nil {
			return 0, nil, r.w.partError(r.part.name, err)
		}
		if e, ok := t.(xml.StartElement); ok && e.Name.Local == "row" {
			number := r.row + 1
			if a := attribute(e, "r"); a != "" {
				n, err := strconv.Atoi(a)
				if err != nil || n < number || n > 1<<20 {
					return 0, nil, r.w.broken(placeOf(number, ""), "the row number "+quote(a), "rows that are numbered upwards, at most 1048576")
				}
				number = n
			}
			r.row = number
			cells, err := r.readRow()
			return number, cells, err
		}
	}
	return 0, nil, io.EOF
}

func (r *sheetRows) readRow() ([]cell, error) {
	clear(r.cells)
	r.cells = r.cells[:0]
	for {
		t, err := r.part.next()
		if err != nil {
			return nil, r.w.partError(r.part.name, unexpected(err))
		}
		switch t := t.(type) {
		case xml.EndElement:
			if t.Name.Local == "row" {
				return r.cells, nil
			}
		case xml.StartElement:
			if t.Name.Local != "c" {
				continue
			}
			column := len(r.cells) + 1
			if a := attribute(t, "r"); a != "" {
				c, ok := columnOf(a)
				if !ok || c < column {
					return nil, r.w.broken(placeOf(r.row, ""), "the cell reference "+quote(a), "cells in the order of their columns")
				}
				column = c
			}
			if column > maxColumns {
				return nil, r.w.broken(placeOfColumn(r.row, column), "a cell", fmt.Sprintf("at most %d columns", maxColumns))
			}
			c, err := r.readCell(t)
			if err != nil {
				return nil, err
			}
			for len(r.cells) < column-1 {
				r.cells = append(r.cells, cell{})
			}
			r.cells = append(r.cells, c)
		}
	}
}

func unexpected(err error) error {
	if err == io.EOF {
		return io.ErrUnexpectedEOF
	}
	return err
}

// columnOf reads the letters of a cell reference: A is 1.
func columnOf(reference string) (int, bool) {
	n, i := 0, 0
	for ; i < len(reference) && reference[i] >= 'A' && reference[i] <= 'Z'; i++ {
		n = 26*n + int(reference[i]-'A'+1)
		if n > 16384 {
			return n, i > 0
		}
	}
	return n, i > 0
}

// readCell reads to the end of one c element.
func (r *sheetRows) readCell(start xml.StartElement) (cell, error) {
	var value, inline strings.Builder
	formula, depth := false, 1
	inValue, inText, phonetic := false, false, 0
	for depth > 0 {
		t, err := r.part.next()
		if err != nil {
			return cell{}, r.w.partError(r.part.name, unexpected(err))
		}
		switch t := t.(type) {
		case xml.StartElement:
			depth++
			switch t.Name.Local {
			case "v":
				inValue = true
			case "f":
				formula = true
			case "rPh":
				phonetic++
			case "t":
				inText = phonetic == 0
			}
		case xml.EndElement:
			depth--
			switch t.Name.Local {
			case "v":
				inValue = false
			case "rPh":
				phonetic--
			case "t":
				inText = false
			}
		case xml.CharData:
			switch {
			case inValue:
				value.Write(t)
			case inText:
				inline.Write(t)
			}
		}
	}
	return r.w.cellOf(attribute(start, "t"), value.String(), inline.String(), formula), nil
}

// cellOf gives a stored value its meaning by the cell's type (ECMA-376 part 1, 18.18.11).
func (w *workbook) cellOf(kind, value, inline string, formula bool) cell {
	switch kind {
	case "", "n":
		if value == "" && formula {
			return cell{fault: "a formula without a stored result"}
		}
		return cell{text: value, number: value != ""}
	case "s":
		n, err := strconv.Atoi(value)
		if err != nil || n < 0 || n >= len(w.strings) {
			return cell{fault: "a text that the workbook does not hold"}
		}
		return cell{text: w.strings[n]}
	case "str", "d":
		return cell{text: value}
	case "inlineStr":
		return cell{text: inline}
	case "b":
		if value == "1" || value == "true" {
			return cell{text: "TRUE"}
		}
		return cell{text: "FALSE"}
	case "e":
		return cell{fault: "the error value " + shorten(value, 20)}
	}
	return cell{fault: "a cell of the unknown kind " + quote(kind)}
}
