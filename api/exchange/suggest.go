package exchange

import (
	"bytes"
	"io"
	"slices"
	"strings"
	"unicode/utf8"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// SuggestMapping proposes how a file could be read, for a person to look at and
// change: it is never applied by itself. quantities are those of the method, in
// its order. The complaints say what could not be told from the file, and what
// was only guessed; a mapping that reads the file may still read it wrongly (a
// decimal sign, the order of day and month), which is why the preview shows the
// readings.
func SuggestMapping(name string, data []byte, quantities []string) (store.Mapping, []registry.Complaint) {
	var m store.Mapping
	var notes complaints
	message := "look at " + fileName(name)
	if err := bounded(message, data); err != nil {
		notes.add("the file", "more bytes than one import may have", "at most 64 MiB")
		return m, notes.list
	}
	grid, err := suggestDialect(&m, &notes, message, data)
	if err != nil {
		if e, ok := err.(*registry.Error); ok {
			for _, c := range e.Complaints {
				notes.add(c.Place, c.Found, c.Expected)
			}
		} else {
			notes.add("the file", err.Error(), "a table")
		}
		return m, notes.list
	}
	at := headerRow(grid)
	if at < 0 {
		notes.add("the file", "no row of headings with rows below", "a table with headings")
		return m, notes.list
	}
	if row := grid[at].number; row > 1 {
		m.HeaderRow = row
	}
	var headings []string
	for _, c := range grid[at].cells {
		headings = append(headings, heading(c.text))
	}
	below := grid[at+1:]
	m.Decimal = suggestDecimal(&notes, m, below)
	suggestColumns(&m, &notes, placeOf(grid[at].number, ""), headings, quantities)
	suggestTime(&m, &notes, headings, below)
	return m, notes.list
}

// A gridRow is one of a file's first rows, kept.
type gridRow struct {
	number int
	cells  []cell
}

// gridRows is how many rows a proposal is made from.
const gridRows = 50

func readGrid(source rows) ([]gridRow, error) {
	var grid []gridRow
	for len(grid) < gridRows {
		number, cells, err := source.next()
		if err == io.EOF {
			break
		}
		if err != nil {
			return grid, err
		}
		if !allEmpty(cells) {
			grid = append(grid, gridRow{number, slices.Clone(cells)})
		}
	}
	return grid, nil
}

// suggestDialect finds format, encoding and delimiter, and reads the first rows.
func suggestDialect(m *store.Mapping, notes *complaints, message string, data []byte) ([]gridRow, error) {
	if bytes.HasPrefix(data, []byte("PK\x03\x04")) {
		m.Format = formatXLSX
		source, err := openTable(message, *m, data)
		if err != nil {
			return nil, err
		}
		defer source.close()
		return readGrid(source)
	}
	head := data[:min(len(data), 64<<10)]
	if len(head) < len(data) {
		// Cut at a line, so that no character and no row is cut in two.
		if at := bytes.LastIndexAny(head, "\r\n"); at > 0 {
			head = head[:at+1]
		}
	}
	text, encoding, err := decodeText(message, "", head)
	if err != nil && !utf8.Valid(head) {
		if text, encoding, err = decodeText(message, encodingWindows, head); err == nil {
			notes.add("import.encoding", "bytes that are not UTF-8; windows-1252 is a guess", "the encoding that the program which wrote the file uses")
		}
	}
	if err != nil {
		return nil, err
	}
	m.Format, m.Encoding = formatCSV, encoding
	var best []gridRow
	for _, delimiter := range []rune{',', ';', '\t', '|'} {
		grid, err := readGrid(newCSV(message, text, delimiter, 0))
		if err != nil {
			continue
		}
		if best == nil || evenness(grid) > evenness(best) {
			best, m.Delimiter = grid, string(delimiter)
		}
	}
	if best == nil {
		return nil, refuseOne(message, "the file", "quotation marks that do not match", "delimited text")
	}
	if m.Delimiter == "\t" {
		m.Format = formatTSV
	}
	return best, nil
}

// evenness scores a way to split rows: the number of columns that most rows
// have, times the share of rows that have it. One column says nothing.
func evenness(grid []gridRow) float64 {
	counts := map[int]int{}
	best := 0.0
	for _, r := range grid {
		counts[len(r.cells)]++
	}
	for width, n := range counts {
		if width > 1 {
			best = max(best, float64(width*n)/float64(len(grid)))
		}
	}
	return best
}

// headerRow finds the first row without numbers that has a row with numbers
// right below and no more cells than itself.
func headerRow(grid []gridRow) int {
	for i := 0; i+1 < len(grid); i++ {
		if len(grid[i].cells) > 1 && numbers(grid[i].cells) == 0 && numbers(grid[i+1].cells) > 0 && len(grid[i+1].cells) <= len(grid[i].cells) {
			return i
		}
	}
	return -1
}

func numbers(cells []cell) int {
	n := 0
	for _, c := range cells {
		if c.number {
			n++
			continue
		}
		_, point := readNumber(c.text, '.', true)
		_, comma := readNumber(c.text, ',', true)
		if point == "" || comma == "" {
			n++
		}
	}
	return n
}

// suggestDecimal counts the texts that are numbers under one decimal sign only.
func suggestDecimal(notes *complaints, m store.Mapping, grid []gridRow) string {
	points, commas := 0, 0
	for _, r := range grid {
		for _, c := range r.cells {
			if c.number {
				continue
			}
			_, point := readNumber(c.text, '.', true)
			_, comma := readNumber(c.text, ',', true)
			switch {
			case point == "" && comma != "":
				points++
			case comma == "" && point != "":
				commas++
			}
		}
	}
	switch {
	case points > 0 && commas > 0:
		notes.add("import.decimal", "numbers with a point and numbers with a comma", "one decimal sign in all cells")
	case commas > 0:
		return ","
	case points == 0 && m.Format != formatXLSX:
		notes.add("import.decimal", "no number with a decimal sign", `"." or ","`)
	}
	return "."
}

// A headingWord is what a column may be called.
type headingWord struct {
	set   func(*store.Mapping, string)
	words []string
	// needed columns are complained of when they are not found.
	needed string
}

func headingWords() []headingWord {
	return []headingWord{
		{func(m *store.Mapping, h string) { m.Columns.Name = h }, []string{"name", "samplename", "materialname", "sample", "material", "label", "sampleid", "id"}, "import.columns.name"},
		{func(m *store.Mapping, h string) { m.Columns.Role = h }, []string{"role", "type", "kind"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Unit = h }, []string{"unit", "bottle", "vialcode"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Analysis = h }, []string{"analysis", "analysisnumber", "run"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Preparation = h }, []string{"preparation", "portion", "weighing"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Position = h }, []string{"position", "seat", "tray", "line", "row"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Peak = h }, []string{"peak", "peaknumber", "peakno"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Time = h }, []string{"time", "datetime", "measuredat", "started", "start", "clock"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Date = h }, []string{"date", "day"}, ""},
		{func(m *store.Mapping, h string) {
			m.Columns.Amount = h
			if strings.HasSuffix(strings.Trim(strings.ToLower(h), " )]"), "ug") {
				m.Columns.AmountUnit = "ug"
			}
		}, []string{"amount", "mass", "weight", "amountmg", "massmg", "weightmg", "amountug"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Compound = h }, []string{"compound", "component"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Retention = h }, []string{"retention", "retentiontime", "retentions"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Width = h }, []string{"width", "peakwidth", "widths"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Group = h }, []string{"group", "batch"}, ""},
		{func(m *store.Mapping, h string) { m.Columns.Warning = h }, []string{"warning", "remark", "comment", "note"}, ""},
	}
}

func suggestColumns(m *store.Mapping, notes *complaints, place string, headings, quantities []string) {
	keys := make([]string, len(headings))
	for i, h := range headings {
		keys[i] = folded(h)
	}
	taken := map[int]bool{}
	for _, w := range headingWords() {
		found := false
		for _, word := range w.words {
			if i := slices.Index(keys, word); i >= 0 && !taken[i] {
				w.set(m, headings[i])
				taken[i], found = true, true
				break
			}
		}
		if !found && w.needed != "" {
			notes.add(w.needed, "no heading that says so in "+quoteAll(headings), "the heading of the column that names material or sample")
		}
	}
	for _, q := range quantities {
		m.Quantities = append(m.Quantities, suggestQuantity(notes, place, q, headings, keys, taken))
	}
	if m.Columns.Date != "" && m.Columns.Time == "" {
		m.Columns.Time, m.Columns.Date = m.Columns.Date, ""
	}
}

// suggestQuantity takes the columns whose headings hold the quantity's name,
// or its element alone for the size.
func suggestQuantity(notes *complaints, place, quantity string, headings, keys []string, taken map[int]bool) store.QuantityColumns {
	q := store.QuantityColumns{Quantity: quantity}
	key := folded(quantity)
	element := strings.TrimLeft(strings.TrimPrefix(key, "d"), "0123456789")
	best := 0
	for i, k := range keys {
		if taken[i] || k == "" {
			continue
		}
		rest, ok := strings.CutPrefix(k, key)
		if !ok {
			rest, ok = strings.CutSuffix(k, key)
		}
		switch {
		case ok && (rest == "u" || strings.HasPrefix(rest, "uncertainty") || rest == "standarduncertainty"):
			q.U = headings[i]
		case ok && (strings.Contains(rest, "size") || strings.Contains(rest, "area") || strings.Contains(rest, "intensity") || strings.Contains(rest, "height")):
			q.Size = headings[i]
		case ok:
			score := 1
			if rest == "" {
				score = 2
			}
			if strings.Contains(rest, "raw") {
				score = 3
			}
			if score > best {
				best, q.Raw = score, headings[i]
			}
		case q.Size == "" && element != "" && (k == "size"+element || k == element+"size" || k == "area"+element || k == element+"area" || k == "size" || k == "area"):
			q.Size = headings[i]
		}
	}
	if q.Raw == "" {
		notes.add(place, "no heading with "+quote(quantity)+" in "+quoteAll(headings), "the heading of the column of raw deltas")
	}
	return q
}

// suggestTime tries layouts on the first value of the time column.
func suggestTime(m *store.Mapping, notes *complaints, headings []string, grid []gridRow) {
	if m.Columns.Time == "" {
		return
	}
	notes.add("import.zone", "times, whose zone no file says", "the IANA zone of the instrument's clock; UTC if left out")
	t, d := slices.Index(headings, m.Columns.Time), slices.Index(headings, m.Columns.Date)
	var texts []string
	for _, r := range grid {
		k := at(r.cells, column{index: t})
		s := plainSpaces(k.text)
		if k.number || s == "" {
			continue
		}
		if d >= 0 {
			s = plainSpaces(at(r.cells, column{index: d}).text) + " " + s
		}
		texts = append(texts, s)
	}
	if len(texts) == 0 {
		return
	}
	var fits []string
	for _, layout := range []string{"", "DD.MM.YYYY hh:mm:ss", "DD.MM.YYYY hh:mm", "DD/MM/YYYY hh:mm:ss", "MM/DD/YYYY hh:mm:ss", "DD/MM/YYYY hh:mm", "MM/DD/YYYY hh:mm", "YYYY/MM/DD hh:mm:ss", "YYYY/MM/DD hh:mm"} {
		k, _, _ := newClock("", layout)
		if !slices.ContainsFunc(texts, func(s string) bool { _, expected := k.read(s); return expected != "" }) {
			fits = append(fits, layout)
		}
	}
	place := "import.time_layout"
	switch len(fits) {
	case 0:
		notes.add(place, quote(texts[0]), "a layout made of YYYY MM DD hh mm ss")
	case 1:
		m.TimeLayout = fits[0]
	default:
		m.TimeLayout = fits[0]
		if fits[0] != "" {
			notes.add(place, quote(texts[0])+", which fits "+quoteAll(fits), "the one that the instrument uses")
		}
	}
}
