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

// A listForm is a list under fixed headings, in any order: CSV, TSV or XLSX
// (first sheet). The delimiter is the one of comma, semicolon and tab under
// which the first row holds the telling heading; the encoding is UTF-8, or what
// a byte order mark says. Unknown headings are refused, because a misspelt one
// would lose its column.
type listForm struct {
	of       string   // what the rows are, such as "samples"
	headings []string // the needed ones first
	needed   int
	telling  string
	most     int // rows
}

func newListForm(of, headings string, needed int, telling string, most int) listForm {
	return listForm{of, strings.Split(headings, ","), needed, telling, most}
}

// A listRow is one row of a list. What is wrong with it is gathered, so that
// one refusal names every fault.
type listRow struct {
	number int // the file's own, from 1
	cells  []cell
	list   *openList
}

type openList struct {
	columns map[string]column
	faults  complaints
	comma   bool // a comma can be a decimal sign
}

// read hands over the rows of a list one by one; nothing is imported where one
// of them has a fault.
func (f listForm) read(name string, data []byte, row func(listRow)) error {
	message := "read " + fileName(name)
	if err := bounded(message, data); err != nil {
		return err
	}
	source, comma, err := f.open(message, data)
	if err != nil {
		return err
	}
	defer source.close()
	number, cells, err := source.next()
	if err != nil && err != io.EOF {
		return err
	}
	if err == io.EOF || number > 1 || allEmpty(cells) {
		return refuseOne(message, placeOf(1, ""), "no headings", "the headings "+strings.Join(f.headings, ","))
	}
	list := &openList{comma: comma}
	if list.columns, err = f.columns(message, cells); err != nil {
		return err
	}
	rows := 0
	for width := len(cells); ; {
		number, cells, err := source.next()
		if err == io.EOF {
			break
		}
		if err != nil {
			return err
		}
		if allEmpty(cells) {
			continue
		}
		if rows++; rows > f.most {
			return registry.Refuse(registry.TooLarge, "%s: row %d goes beyond the %d %s that one list may have; divide the file", message, number, f.most, f.of)
		}
		if n := len(cells); n > width && !allEmpty(cells[width:]) || n < width && !source.ragged {
			list.faults.add(placeOf(number, ""), fmt.Sprintf("%d cells", n), fmt.Sprintf("%d, as the heading row has", width))
			continue
		}
		row(listRow{number, cells, list})
	}
	if err := list.faults.err(message + ": nothing was imported"); err != nil {
		return err
	}
	if rows == 0 {
		return refuseOne(message, "the file", "headings and no rows", "rows of "+f.of)
	}
	return nil
}

// open settles the dialect by the headings, which are known.
func (f listForm) open(message string, data []byte) (source *tableSource, comma bool, err error) {
	m := store.Mapping{Delimiter: ","}
	if len(data) > 0 && !strings.HasPrefix(string(data[:min(4, len(data))]), "PK\x03\x04") {
		text, _, err := decodeText(message, "", data)
		if err != nil {
			return nil, false, err
		}
		line, _, _ := strings.Cut(string(text[:min(len(text), 4096)]), "\n")
		for _, d := range []string{",", ";", "\t"} {
			if strings.Contains(line, d) && slices.ContainsFunc(strings.Split(line, d), func(h string) bool { return listHeading(strings.Trim(h, `"`)) == f.telling }) {
				m.Delimiter = d
				break
			}
		}
	}
	source, err = openTable(message, m, data)
	return source, m.Delimiter != ",", err
}

func listHeading(s string) string { return strings.ToLower(heading(s)) }

// columns finds the fixed headings.
func (f listForm) columns(message string, cells []cell) (map[string]column, error) {
	var faults complaints
	columns := map[string]column{}
	for _, k := range f.headings {
		columns[k] = column{index: -1, heading: k}
	}
	for i, c := range cells {
		h := listHeading(c.text)
		switch {
		case h == "":
		case !slices.Contains(f.headings, h):
			expected := "one of " + strings.Join(f.headings, ", ")
			if n := nearest(h, f.headings); n != "" {
				expected += "; the nearest is " + quote(n)
			}
			faults.add(placeOf(1, heading(c.text)), "an unknown heading", expected)
		case columns[h].mapped():
			faults.add(placeOf(1, h), fmt.Sprintf("the heading in columns %d and %d", columns[h].index+1, i+1), "each heading once")
		default:
			columns[h] = column{i, h}
		}
	}
	for _, k := range f.headings[:f.needed] {
		if !columns[k].mapped() {
			faults.add(placeOf(1, ""), "no heading "+quote(k), "the headings "+strings.Join(f.headings[:f.needed], ", ")+", and perhaps "+strings.Join(f.headings[f.needed:], ", "))
		}
	}
	return columns, faults.err(message + ": the headings in row 1 are not those of a list of " + f.of)
}

// place names a cell of the row by its heading.
func (r listRow) place(heading string) string { return placeOf(r.number, heading) }

func (r listRow) fault(heading, found, expected string) {
	r.list.faults.add(r.place(heading), found, expected)
}

// text is a cell as it stands; "" where it is empty or its column is not there.
func (r listRow) text(h string) string {
	c := at(r.cells, r.list.columns[h])
	if c.fault != "" {
		r.fault(h, c.fault, "a value")
		return ""
	}
	v := strings.Clone(plainSpaces(c.text))
	if len(v) > longestText {
		r.fault(h, fmt.Sprintf("a text of %d bytes", len(v)), fmt.Sprintf("at most %d", longestText))
		return ""
	}
	return v
}

// needed is a text that must be there.
func (r listRow) needed(h, must string) string {
	c := at(r.cells, r.list.columns[h])
	v := r.text(h)
	if v == "" && c.fault == "" && len(plainSpaces(c.text)) == 0 {
		r.fault(h, "an empty cell", must)
	}
	return v
}

var decimalComma = regexp.MustCompile(`^[-+]?[0-9]+,[0-9]+$`)

// digits is a number as it was typed. A decimal comma is understood where the
// file is not divided by commas.
func (r listRow) digits(h string) string {
	v := strings.ReplaceAll(r.text(h), "\u2212", "-") // the sign that typesetters use
	if r.list.comma && decimalComma.MatchString(v) {
		v = strings.Replace(v, ",", ".", 1)
	}
	return v
}

// optional is a number, nil for an empty cell.
func (r listRow) optional(h string) *float64 {
	v := r.digits(h)
	if v == "" {
		return nil
	}
	x, err := strconv.ParseFloat(v, 64)
	if err != nil {
		r.fault(h, quote(v), "a number, or nothing")
		return nil
	}
	return &x
}

// numeric is a number, 0 for an empty cell.
func (r listRow) numeric(h string) float64 {
	if x := r.optional(h); x != nil {
		return *x
	}
	return 0
}

// whole is a whole number of at least 1, nil for an empty cell.
func (r listRow) whole(h string) *int {
	x := r.optional(h)
	if x == nil {
		return nil
	}
	n := int(*x)
	if float64(n) != *x || n < 1 {
		r.fault(h, fmt.Sprint(*x), "a whole number of 1 or more, or nothing")
		return nil
	}
	return &n
}

// instant is a day or a time, nil for an empty cell.
func (r listRow) instant(h string) *store.Instant {
	v := r.text(h)
	if v == "" {
		return nil
	}
	at, err := time.Parse("2006-01-02", v)
	if err != nil {
		at, err = time.Parse(time.RFC3339Nano, v)
	}
	if err != nil {
		r.fault(h, quote(v), "a day such as 2018-01-01, or a time (RFC 3339)")
		return nil
	}
	instant := store.InstantOf(at)
	return &instant
}

// amount is a decimal with its unit of measurement, nil for an empty cell.
func (r listRow) amount(value, unit string) *store.Amount {
	v := r.digits(value)
	if v == "" {
		return nil
	}
	if _, err := strconv.ParseFloat(v, 64); err != nil {
		r.fault(value, quote(v), "a number, or nothing")
		return nil
	}
	return &store.Amount{Value: store.Decimal(v), Unit: r.needed(unit, "the unit of measurement of "+value)}
}
