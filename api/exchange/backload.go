package exchange

import (
	"fmt"
	"io"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// ValueHeadings are the headings of a list of values assigned before the
// registry was in use; the first four, basis and valid_from must be there.
const ValueHeadings = "material,scale,value,kind,basis,valid_from,uncertainty,k,n,nu,measurand,evidence"

const valueHeadingsNeeded = 6

var decimalComma = regexp.MustCompile(`^[-+]?[0-9]+,[0-9]+$`)

// ReadValues reads values assigned before the registry was in use, as CSV, TSV
// or XLSX (first sheet), by the fixed headings of ValueHeadings in any order.
// Uncertainty is as printed, and kind says what it is: standard, expanded (with
// k), sd (with n), half-width, exact, none. Values keep their digits; a
// decimal comma is understood where the file is not divided by commas.
func ReadValues(name string, data []byte) ([]registry.BackLoadRow, error) {
	message := "read " + fileName(name)
	if err := bounded(message, data); err != nil {
		return nil, err
	}
	source, comma, err := openValues(message, data)
	if err != nil {
		return nil, err
	}
	defer source.close()
	number, cells, err := source.next()
	if err != nil && err != io.EOF {
		return nil, err
	}
	if err == io.EOF || number > 1 || allEmpty(cells) {
		return nil, refuseOne(message, placeOf(1, ""), "no headings", "the headings "+ValueHeadings)
	}
	columns, width, err := valueColumns(message, cells)
	if err != nil {
		return nil, err
	}
	var faults complaints
	var list []registry.BackLoadRow
	for {
		number, cells, err := source.next()
		if err == io.EOF {
			break
		}
		if err != nil {
			return nil, err
		}
		if allEmpty(cells) {
			continue
		}
		if len(list) >= registry.MaxBackLoad {
			return nil, registry.Refuse(registry.TooLarge, "%s: row %d goes beyond the %d values that one list may have; divide the file", message, number, registry.MaxBackLoad)
		}
		if n := len(cells); n > width && !allEmpty(cells[width:]) || n < width && !source.ragged {
			faults.add(placeOf(number, ""), fmt.Sprintf("%d cells", n), fmt.Sprintf("%d, as the heading row has", width))
			continue
		}
		list = append(list, valueRow(&faults, number, cells, columns, comma))
	}
	if err := faults.err(message + ": nothing was imported"); err != nil {
		return nil, err
	}
	if len(list) == 0 {
		return nil, refuseOne(message, "the file", "headings and no rows", "rows of values")
	}
	return list, nil
}

// openValues settles the dialect by the headings; comma tells whether a comma can be a decimal sign.
func openValues(message string, data []byte) (source *tableSource, comma bool, err error) {
	m := store.Mapping{Delimiter: ","}
	if len(data) > 0 && !strings.HasPrefix(string(data[:min(4, len(data))]), "PK\x03\x04") {
		text, _, err := decodeText(message, "", data)
		if err != nil {
			return nil, false, err
		}
		line, _, _ := strings.Cut(string(text[:min(len(text), 4096)]), "\n")
		for _, d := range []string{",", ";", "\t"} {
			if slices.ContainsFunc(strings.Split(line, d), func(h string) bool { return sampleHeading(strings.Trim(h, `"`)) == "material" }) && strings.Contains(line, d) {
				m.Delimiter = d
				break
			}
		}
	}
	source, err = openTable(message, m, data)
	return source, m.Delimiter != ",", err
}

func valueColumns(message string, cells []cell) (map[string]column, int, error) {
	var faults complaints
	known := strings.Split(ValueHeadings, ",")
	columns := map[string]column{}
	for _, k := range known {
		columns[k] = column{index: -1, heading: k}
	}
	for i, c := range cells {
		h := sampleHeading(c.text)
		switch {
		case h == "":
		case !slices.Contains(known, h):
			expected := "one of " + strings.Join(known, ", ")
			if n := nearest(h, known); n != "" {
				expected += "; the nearest is " + quote(n)
			}
			faults.add(placeOf(1, heading(c.text)), "an unknown heading", expected)
		case columns[h].mapped():
			faults.add(placeOf(1, h), fmt.Sprintf("the heading in columns %d and %d", columns[h].index+1, i+1), "each heading once")
		default:
			columns[h] = column{i, h}
		}
	}
	for _, k := range known[:valueHeadingsNeeded] {
		if !columns[k].mapped() {
			faults.add(placeOf(1, ""), "no heading "+quote(k), "the headings "+strings.Join(known[:valueHeadingsNeeded], ", "))
		}
	}
	return columns, len(cells), faults.err(message + ": the headings in row 1 are not those of a list of values")
}

func valueRow(faults *complaints, number int, cells []cell, columns map[string]column, comma bool) registry.BackLoadRow {
	text := func(h string) string {
		c := at(cells, columns[h])
		if c.fault != "" {
			faults.add(placeOf(number, h), c.fault, "a value")
			return ""
		}
		v := strings.Clone(plainSpaces(c.text))
		if len(v) > longestText {
			faults.add(placeOf(number, h), fmt.Sprintf("a text of %d bytes", len(v)), fmt.Sprintf("at most %d", longestText))
			return ""
		}
		return v
	}
	digits := func(h string) string {
		v := strings.ReplaceAll(text(h), "\u2212", "-") // the sign that typesetters use
		if comma && decimalComma.MatchString(v) {
			v = strings.Replace(v, ",", ".", 1)
		}
		return v
	}
	optional := func(h string) *float64 {
		v := digits(h)
		if v == "" {
			return nil
		}
		x, err := strconv.ParseFloat(v, 64)
		if err != nil {
			faults.add(placeOf(number, h), quote(v), "a number, or nothing")
			return nil
		}
		return &x
	}
	row := registry.BackLoadRow{Material: text("material"), Scale: text("scale"), Measurand: text("measurand"), Value: store.Decimal(digits("value")),
		Stated: store.Stated{Text: digits("uncertainty"), Kind: text("kind"), K: optional("k")}, DegreesOfFreedom: optional("nu"),
		Basis: text("basis"), Evidence: text("evidence"), Place: func(field string) string { return placeOf(number, field) }}
	if x := optional("n"); x != nil {
		n := int(*x)
		if float64(n) != *x || n < 1 {
			faults.add(placeOf(number, "n"), fmt.Sprint(*x), "a whole number of 1 or more, or nothing")
		}
		row.Stated.N = &n
	}
	for _, h := range []string{"material", "scale"} {
		if text(h) == "" {
			faults.add(placeOf(number, h), "an empty cell", "its code")
		}
	}
	if v := text("valid_from"); v != "" {
		at, err := time.Parse("2006-01-02", v)
		if err != nil {
			at, err = time.Parse(time.RFC3339Nano, v)
		}
		if err != nil {
			faults.add(placeOf(number, "valid_from"), quote(v), "a day such as 2018-01-01, or a time (RFC 3339)")
		} else {
			instant := store.InstantOf(at)
			row.ValidFrom = &instant
		}
	}
	return row
}
