package exchange

import (
	"bytes"
	"fmt"
	"io"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// ReadTable reads a table of raw deltas as the mapping says: one row of the
// file is one analysis or peak and gives one reading for each mapped quantity
// whose condition holds, in the order of the mapping. name is the file's name,
// for messages only.
//
// Empty cells: the name and the raw delta of a quantity must be there, unless
// the quantity is optional, in which case the row gives no reading of it;
// everything else is left unset. Rows whose cells are all empty are passed over.
//
// It refuses with a *registry.Error: Invalid with the faults of mapping,
// headings or cells, TooLarge beyond registry.MaxUpload or registry.MaxReadings.
func ReadTable(mapping store.Mapping, name string, data []byte) (registry.ReadingTable, error) {
	message := "read " + fileName(name)
	if err := bounded(message, data); err != nil {
		return registry.ReadingTable{}, err
	}
	if faults := CheckMapping(mapping); len(faults) > 0 {
		return registry.ReadingTable{}, registry.Complain(message+": the import mapping cannot be used", faults)
	}
	source, err := openTable(message, mapping, data)
	if err != nil {
		return registry.ReadingTable{}, err
	}
	defer source.close()
	t, err := newTableReader(message, mapping, source)
	if err != nil {
		return registry.ReadingTable{}, err
	}
	return t.readAll()
}

// A tableSource is a file whose dialect is settled.
type tableSource struct {
	rows
	encoding, delimiter, sheet string
	from1904                   bool
	// ragged rows may be shorter than the heading row, as workbooks store them.
	ragged bool
}

// openTable settles format, encoding and delimiter.
func openTable(message string, m store.Mapping, data []byte) (*tableSource, error) {
	if len(bytes.TrimSpace(data)) == 0 {
		return nil, refuseOne(message, "the file", "nothing in it", "a heading row and rows of readings")
	}
	format := m.Format
	if format == "" && bytes.HasPrefix(data, []byte("PK\x03\x04")) {
		format = formatXLSX
	}
	if format == formatXLSX {
		w, err := openWorkbook(message, data)
		if err != nil {
			return nil, err
		}
		s, err := w.sheet(m.Sheet)
		if err != nil {
			return nil, err
		}
		r, err := w.rows(s)
		if err != nil {
			return nil, err
		}
		return &tableSource{rows: r, sheet: s.name, from1904: w.from1904, ragged: true}, nil
	}
	text, encoding, err := decodeText(message, m.Encoding, data)
	if err != nil {
		return nil, err
	}
	skip := max(m.HeaderRow, 1) - 1
	body, ok := skipLines(text, skip)
	if !ok {
		return nil, refuseOne(message, placeOf(skip+1, ""), "the end of the file", "the heading row")
	}
	delimiter := ','
	switch {
	case m.Delimiter != "":
		delimiter = []rune(m.Delimiter)[0]
	case format == formatTSV:
		delimiter = '\t'
	case format == "":
		// Of the two defaults the one that the heading row contains.
		line, _, _ := bytes.Cut(body, []byte{'\n'})
		if bytes.IndexByte(line, '\t') >= 0 {
			delimiter = '\t'
		}
	}
	return &tableSource{rows: newCSV(message, body, delimiter, skip), encoding: encoding, delimiter: string(delimiter)}, nil
}

// A tableReader turns rows into readings.
type tableReader struct {
	message string
	source  *tableSource
	columns *columns
	mapping store.Mapping
	decimal byte
	clock   clock
	roles   map[string]calib.Role
	faults  complaints
	texts   map[string]string
	table   registry.ReadingTable
	origins []origin
	row     int
	// attempted counts the readings that rows should give, read or faulty, so
	// that a file full of faults meets the bound as well.
	attempted int
}

// An origin is where a reading stands: its row, and which of the mapping's quantities it is.
type origin struct{ row, quantity int32 }

func newTableReader(message string, m store.Mapping, source *tableSource) (*tableReader, error) {
	wanted := max(m.HeaderRow, 1)
	number, cells, err := source.next()
	for err == nil && number < wanted {
		number, cells, err = source.next()
	}
	if err != nil && err != io.EOF {
		return nil, err
	}
	if err == io.EOF || number > wanted || allEmpty(cells) {
		return nil, refuseOne(message, placeOf(wanted, ""), "no headings", "the heading row")
	}
	if len(cells) > maxColumns {
		return nil, refuseOne(message, placeOf(wanted, ""), fmt.Sprintf("%d columns", len(cells)), fmt.Sprintf("at most %d", maxColumns))
	}
	found, err := findColumns(message, m, number, cells)
	if err != nil {
		return nil, err
	}
	t := &tableReader{message: message, source: source, columns: found, mapping: m, decimal: '.', texts: map[string]string{}}
	if m.Decimal == "," {
		t.decimal = ','
	}
	t.clock, _, _ = newClock(m.Zone, m.TimeLayout)
	t.roles = map[string]calib.Role{}
	for _, r := range roles {
		t.roles[string(r)] = r
	}
	// The mapping's own words outrank the contract's.
	for word, r := range m.RoleWords {
		t.roles[strings.ToLower(plainSpaces(word))] = r
	}
	t.table.Encoding, t.table.Delimiter, t.table.Sheet = source.encoding, source.delimiter, source.sheet
	t.table.Ignored = found.ignored
	return t, nil
}

func allEmpty(cells []cell) bool {
	for _, c := range cells {
		if c.fault != "" || trim(c.text) != "" {
			return false
		}
	}
	return true
}

func (t *tableReader) readAll() (registry.ReadingTable, error) {
	for {
		number, cells, err := t.source.next()
		if err == io.EOF {
			break
		}
		if err != nil {
			return registry.ReadingTable{}, t.with(err)
		}
		if allEmpty(cells) {
			continue
		}
		t.row = number
		t.table.Rows++
		t.readRow(cells)
		if t.attempted > registry.MaxReadings {
			return registry.ReadingTable{}, registry.Refuse(registry.TooLarge,
				"%s: row %d goes beyond the %d readings that one import may have; divide the file", t.message, number, registry.MaxReadings)
		}
	}
	switch {
	case t.faults.count() > 0:
		return registry.ReadingTable{}, t.faults.err(t.message + ": nothing was imported")
	case t.table.Rows == 0:
		return registry.ReadingTable{}, refuseOne(t.message, "the file", "headings and no rows", "rows of readings")
	case len(t.table.Readings) == 0:
		return registry.ReadingTable{}, refuseOne(t.message, "the file",
			fmt.Sprintf("%d rows, of which none gives a reading", t.table.Rows), "rows for which the mapping's conditions hold: "+t.conditions())
	}
	t.table.Place = t.place()
	return t.table, nil
}

// with puts the faults found so far before the one that ended the reading.
func (t *tableReader) with(err error) error {
	last, ok := err.(*registry.Error)
	if !ok || t.faults.count() == 0 || last.Meaning != registry.Invalid {
		return err
	}
	for _, c := range last.Complaints {
		t.faults.add(c.Place, c.Found, c.Expected)
	}
	return t.faults.err(t.message + ": nothing was imported")
}

func (t *tableReader) conditions() string {
	var list []string
	for _, q := range t.columns.quantities {
		if q.when.mapped() {
			list = append(list, fmt.Sprintf("column %s equal to %s", quote(q.when.heading), quote(q.equals)))
		} else {
			list = append(list, fmt.Sprintf("column %s filled", quote(q.raw.heading)))
		}
	}
	return strings.Join(list, ", ")
}

// place names the cells of the readings, without keeping the file.
func (t *tableReader) place() func(int, string) string {
	origins, f := t.origins, t.columns
	return func(reading int, field string) string {
		if reading < 0 || reading >= len(origins) {
			return "the file"
		}
		o := origins[reading]
		return placeOf(int(o.row), f.of(field, int(o.quantity)).heading)
	}
}

// of finds the column of a field, by its JSON name.
func (f *columns) of(field string, quantity int) column {
	q := f.quantities[quantity]
	switch field {
	case "name":
		return f.name
	case "role":
		return f.role
	case "unit":
		return f.unit
	case "analysis":
		return f.analysis
	case "preparation":
		return f.preparation
	case "position":
		return f.position
	case "peak":
		return f.peak
	case "time":
		return f.time
	case "amount":
		return f.amount
	case "compound":
		return f.compound
	case "retention":
		return f.retention
	case "width":
		return f.width
	case "group":
		return f.group
	case "warning":
		return f.warning
	case "quantity":
		return q.when
	case "raw":
		return q.raw
	case "u":
		return q.u
	case "size":
		return q.size
	case "intensity":
		return q.intensity
	case "gas_intensity":
		return q.gasIntensity
	case "gas_ratio":
		return q.gasRatio
	}
	return column{index: -1}
}
