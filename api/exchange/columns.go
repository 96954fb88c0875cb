package exchange

import (
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"

	"golang.org/x/text/unicode/norm"

	"deltamoor/api/registry"
	"deltamoor/calib"
	"deltamoor/store"
)

// The formats that a mapping may name.
const (
	formatCSV  = "csv"
	formatTSV  = "tsv"
	formatXLSX = "xlsx"
)

// roles are the contract's role words.
var roles = [...]calib.Role{calib.Anchor, calib.Control, calib.Monitor, calib.Blank, calib.Gas, calib.Conditioning, calib.Sample}

func roleWords() string {
	var words []string
	for _, r := range roles {
		words = append(words, string(r))
	}
	return strings.Join(words, ", ")
}

// CheckMapping finds the faults of a mapping itself, without any file. Places
// are those of the method's body: `import.columns.name`.
func CheckMapping(m store.Mapping) []registry.Complaint {
	var c complaints
	checkDialect(&c, m)
	if m.Columns.Name == "" {
		c.add("import.columns.name", "nothing", "the heading of the column that names material or sample")
	}
	if m.Columns.Date != "" && m.Columns.Time == "" {
		c.add("import.columns.time", "nothing", "the heading of the time that belongs to the date column "+quote(m.Columns.Date))
	}
	k, zone, layout := newClock(m.Zone, m.TimeLayout)
	if zone != "" {
		c.add("import.zone", quote(m.Zone), zone)
	}
	if layout != "" {
		c.add("import.time_layout", quote(m.TimeLayout), layout)
	} else if m.Columns.Date != "" {
		if date, clockTime := k.layoutHalves(); date == nil || clockTime == nil {
			c.add("import.time_layout", quote(m.TimeLayout), "a layout with a space between the date and the time, which are two columns")
		}
	}
	if len(m.Quantities) == 0 {
		c.add("import.quantities", "none", "at least one quantity with the column of its raw delta")
	}
	always := map[string]bool{}
	for i, q := range m.Quantities {
		place := fmt.Sprintf("import.quantities[%d]", i)
		if q.Quantity == "" {
			c.add(place+".quantity", "nothing", "the name of a quantity, for example d13C")
		}
		if q.Raw == "" {
			c.add(place+".raw", "nothing", "the heading of the column of raw deltas")
		}
		if q.When != nil && q.When.Column == "" {
			c.add(place+".when.column", "nothing", "the heading of the column that the condition looks at")
		}
		if q.When == nil {
			if always[q.Quantity] {
				c.add(place+".quantity", quote(q.Quantity)+" a second time", "each quantity once, unless conditions tell its rows apart")
			}
			always[q.Quantity] = true
		}
	}
	for _, word := range sortedKeys(m.RoleWords) {
		if role := m.RoleWords[word]; !slices.Contains(roles[:], role) {
			c.add("import.role_words."+word, quote(string(role)), "one of "+roleWords())
		}
	}
	return c.list
}

func checkDialect(c *complaints, m store.Mapping) {
	switch m.Format {
	case "", formatCSV, formatTSV, formatXLSX:
	default:
		c.add("import.format", quote(m.Format), "csv, tsv or xlsx")
	}
	if m.Encoding != "" && !slices.Contains(encodings[:], m.Encoding) {
		c.add("import.encoding", quote(m.Encoding), someEncoding)
	}
	if m.HeaderRow < 0 || m.HeaderRow > 1000 {
		c.add("import.header_row", fmt.Sprint(m.HeaderRow), "a row between 1 and 1000")
	}
	if d := m.Delimiter; d != "" {
		r, n := utf8.DecodeRuneInString(d)
		if n != len(d) || r == utf8.RuneError || strings.ContainsAny(d, "\"\r\n\x00") || (r >= '0' && r <= '9') || minusSign(r) {
			c.add("import.delimiter", quote(d), "one character, for example a semicolon or a tab, and no quotation mark, line end, digit or minus sign")
		}
	}
	if m.Decimal != "" && m.Decimal != "." && m.Decimal != "," {
		c.add("import.decimal", quote(m.Decimal), `"." or ","`)
	}
}

func sortedKeys[V any](m map[string]V) []string {
	keys := make([]string, 0, len(m))
	for k := range m {
		keys = append(keys, k)
	}
	slices.Sort(keys)
	return keys
}

// heading brings the text of a heading to the form in which two are compared:
// composed characters, no outer space, inner white space as one space.
func heading(s string) string {
	return norm.NFC.String(plainSpaces(s))
}

// A column is where one field of a reading stands; index −1 is "the file has none".
type column struct {
	index   int
	heading string
}

func (c column) mapped() bool { return c.index >= 0 }

// quantityColumns is a store.QuantityColumns found in the file.
type quantityColumns struct {
	quantity     string
	raw, u, size column
	// for the H3 factor
	intensity, gasIntensity, gasRatio column
	when                              column
	equals                            string
	optional                          bool
}

// A layout of columns is a mapping found in a file's headings.
type columns struct {
	headings []string
	ignored  []string

	name, role, unit, analysis, preparation, position, peak        column
	time, date, amount, compound, retention, width, group, warning column
	amountUnit                                                     string

	quantities []quantityColumns
}

// findColumns looks up every mapped heading, and complains of all that are
// missing or stand there twice. row is the heading row.
func findColumns(message string, m store.Mapping, row int, cells []cell) (*columns, error) {
	var c complaints
	f := &columns{}
	at := map[string]int{}
	twice := map[string]int{}
	for i, cell := range cells {
		h := ""
		if cell.fault == "" {
			h = heading(cell.text)
		}
		f.headings = append(f.headings, h)
		if h == "" {
			continue
		}
		if _, ok := at[h]; !ok {
			at[h] = i
		} else if _, ok := twice[h]; !ok {
			twice[h] = i
		}
	}
	known := knownHeadings(f.headings)
	used := map[string]bool{}
	missing := map[string]bool{}
	find := func(wanted, what string) column {
		if wanted == "" {
			return column{index: -1}
		}
		h := heading(wanted)
		used[h] = true
		i, ok := at[h]
		if !ok {
			if !missing[h] {
				missing[h] = true
				expected := fmt.Sprintf("the column %s, mapped as %s", quote(wanted), what)
				if n := nearest(h, known); n != "" {
					expected += "; the nearest heading is " + quote(n)
				}
				c.add(placeOf(row, ""), "no heading "+quote(wanted), expected)
			}
			return column{index: -1}
		}
		if second, ok := twice[h]; ok && !missing[h] {
			missing[h] = true
			c.add(placeOf(row, h), fmt.Sprintf("the heading in columns %d and %d", i+1, second+1), "each mapped heading once")
		}
		return column{i, f.headings[i]}
	}
	k := m.Columns
	f.name = find(k.Name, "the name of material or sample")
	f.role = find(k.Role, "the role")
	f.unit = find(k.Unit, "the unit")
	f.analysis = find(k.Analysis, "the analysis")
	f.preparation = find(k.Preparation, "the preparation")
	f.position = find(k.Position, "the position")
	f.peak = find(k.Peak, "the peak")
	f.time = find(k.Time, "the time")
	f.date = find(k.Date, "the date")
	f.amount, f.amountUnit = find(k.Amount, "the amount"), k.AmountUnit
	f.compound = find(k.Compound, "the compound")
	f.retention = find(k.Retention, "the retention")
	f.width = find(k.Width, "the width of the peak")
	f.group = find(k.Group, "the group")
	f.warning = find(k.Warning, "the instrument's warning")
	for _, q := range m.Quantities {
		p := quantityColumns{
			quantity:     q.Quantity,
			raw:          find(q.Raw, "the raw delta of "+q.Quantity),
			u:            find(q.U, "u of "+q.Quantity),
			size:         find(q.Size, "the size of "+q.Quantity),
			intensity:    find(q.Intensity, "the intensity of "+q.Quantity),
			gasIntensity: find(q.GasIntensity, "the reference pulse's intensity"),
			gasRatio:     find(q.GasRatio, "the reference pulse's ratio"),
			when:         column{index: -1},
			optional:     q.Optional,
		}
		if q.When != nil {
			p.when, p.equals = find(q.When.Column, "the condition of "+q.Quantity), plainSpaces(q.When.Equals)
		}
		f.quantities = append(f.quantities, p)
	}
	for _, h := range known {
		if !used[h] {
			f.ignored = append(f.ignored, h)
		}
	}
	if c.count() > 0 {
		what := fmt.Sprintf("%s: the headings in row %d are not those of the mapping; they are %s", message, row, quoteAll(known))
		if hint := otherDelimiter(f.headings); hint != "" {
			what += "; " + hint
		}
		return nil, c.err(what)
	}
	return f, nil
}

// knownHeadings lists the headings that say something, each once, in order.
func knownHeadings(headings []string) []string {
	var known []string
	seen := map[string]bool{}
	for _, h := range headings {
		if h != "" && !seen[h] {
			seen[h] = true
			known = append(known, h)
		}
	}
	return known
}

// otherDelimiter notices a heading row that another delimiter would split.
func otherDelimiter(headings []string) string {
	if len(headings) != 1 {
		return ""
	}
	for _, d := range []struct{ sign, word string }{{";", "semicolons"}, {",", "commas"}, {"|", "vertical bars"}} {
		if n := strings.Count(headings[0], d.sign); n > 0 {
			return fmt.Sprintf("the row is a single cell with %d %s in it: see the mapping's delimiter", n, d.word)
		}
	}
	return ""
}
