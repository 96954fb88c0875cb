package exchange

import (
	"fmt"
	"io"
	"slices"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// SampleHeadings are the headings of a list of samples; the first three must be there.
const SampleHeadings = "client,label,wanted,matrix,note"

// A SampleRow is one sample of a list: whose it is, what the client calls it,
// and on which scales its delta is wanted.
type SampleRow struct {
	// Row is the file's own row number, from 1.
	Row    int
	Client string
	Label  string
	Wanted []string
	Matrix string
	Note   string
}

// Place names a cell of the row by its heading.
func (r SampleRow) Place(heading string) string { return placeOf(r.Row, heading) }

// ReadSamples reads a list of samples, as CSV, TSV or XLSX (first sheet), by
// the fixed headings of SampleHeadings in any order. wanted lists scales,
// separated by spaces, commas or semicolons. The delimiter is the one of comma,
// semicolon and tab under which the first row holds the headings; the encoding
// is UTF-8, or what a byte order mark says.
//
// A sample is a client with a label: a second row of the same pair is refused,
// as are unknown headings, because a misspelt one would lose its column.
func ReadSamples(name string, data []byte) ([]SampleRow, error) {
	message := "read " + fileName(name)
	if err := bounded(message, data); err != nil {
		return nil, err
	}
	source, err := openSamples(message, data)
	if err != nil {
		return nil, err
	}
	defer source.close()
	number, cells, err := source.next()
	if err != nil && err != io.EOF {
		return nil, err
	}
	if err == io.EOF || number > 1 || allEmpty(cells) {
		return nil, refuseOne(message, placeOf(1, ""), "no headings", "the headings "+SampleHeadings)
	}
	at, headings, err := sampleColumns(message, cells)
	if err != nil {
		return nil, err
	}
	var faults complaints
	var list []SampleRow
	first := map[[2]string]int{}
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
		if len(list) >= registry.MaxReadings {
			return nil, registry.Refuse(registry.TooLarge, "%s: row %d goes beyond the %d samples that one list may have; divide the file", message, number, registry.MaxReadings)
		}
		list = append(list, readSample(&faults, source, number, cells, at, len(headings)))
		s := &list[len(list)-1]
		key := [2]string{strings.ToLower(s.Client), s.Label}
		if row, ok := first[key]; ok && s.Client != "" && s.Label != "" {
			faults.add(placeOf(number, "label"), fmt.Sprintf("%s of %s, which row %d has as well", quote(s.Label), quote(s.Client), row), "each label of a client once")
		} else {
			first[key] = number
		}
	}
	if err := faults.err(message + ": nothing was imported"); err != nil {
		return nil, err
	}
	if len(list) == 0 {
		return nil, refuseOne(message, "the file", "headings and no rows", "rows of samples")
	}
	return list, nil
}

// openSamples settles the dialect by the headings, which are known.
func openSamples(message string, data []byte) (*tableSource, error) {
	m := store.Mapping{Delimiter: ","}
	if len(data) > 0 && !strings.HasPrefix(string(data[:min(4, len(data))]), "PK\x03\x04") {
		text, _, err := decodeText(message, "", data)
		if err != nil {
			return nil, err
		}
		line, _, _ := strings.Cut(string(text[:min(len(text), 4096)]), "\n")
		for _, d := range []string{",", ";", "\t"} {
			if strings.Contains(line, d) && slices.ContainsFunc(strings.Split(line, d), func(h string) bool { return sampleHeading(strings.Trim(h, `"`)) == "label" }) {
				m.Delimiter = d
				break
			}
		}
	}
	return openTable(message, m, data)
}

func sampleHeading(s string) string { return strings.ToLower(heading(s)) }

// sampleColumns finds the fixed headings.
func sampleColumns(message string, cells []cell) (at map[string]column, headings []string, err error) {
	var faults complaints
	known := strings.Split(SampleHeadings, ",")
	at = map[string]column{}
	for _, k := range known {
		at[k] = column{index: -1, heading: k}
	}
	for i, c := range cells {
		h := sampleHeading(c.text)
		headings = append(headings, heading(c.text))
		switch {
		case h == "":
		case !slices.Contains(known, h):
			expected := "one of " + strings.Join(known, ", ")
			if n := nearest(h, known); n != "" {
				expected += "; the nearest is " + quote(n)
			}
			faults.add(placeOf(1, heading(c.text)), "an unknown heading", expected)
		case at[h].mapped():
			faults.add(placeOf(1, h), fmt.Sprintf("the heading in columns %d and %d", at[h].index+1, i+1), "each heading once")
		default:
			at[h] = column{i, h}
		}
	}
	for _, k := range known[:3] {
		if !at[k].mapped() {
			faults.add(placeOf(1, ""), "no heading "+quote(k), "the headings "+SampleHeadings+", of which the first three must be there")
		}
	}
	return at, headings, faults.err(message + ": the headings in row 1 are not those of a list of samples")
}

func readSample(faults *complaints, source *tableSource, number int, cells []cell, columns map[string]column, width int) SampleRow {
	s := SampleRow{Row: number}
	if n := len(cells); n > width && !allEmpty(cells[width:]) || n < width && !source.ragged {
		faults.add(placeOf(number, ""), fmt.Sprintf("%d cells", n), fmt.Sprintf("%d, as the heading row has", width))
		return s
	}
	text := func(h string, must string) string {
		c := at(cells, columns[h])
		v := strings.Clone(plainSpaces(c.text))
		switch {
		case c.fault != "":
			faults.add(placeOf(number, h), c.fault, "a text")
			return ""
		case len(v) > longestText:
			faults.add(placeOf(number, h), fmt.Sprintf("a text of %d bytes", len(v)), fmt.Sprintf("at most %d", longestText))
			return ""
		case v == "" && must != "":
			faults.add(placeOf(number, h), "an empty cell", must)
		}
		return v
	}
	s.Client = text("client", "the client's name")
	s.Label = text("label", "the client's label of the sample")
	s.Matrix, s.Note = text("matrix", ""), text("note", "")
	wanted := text("wanted", "the scales wanted, for example d13C-VPDB d15N-AIR")
	s.Wanted = strings.FieldsFunc(wanted, func(r rune) bool { return r == ' ' || r == ',' || r == ';' })
	for i, w := range s.Wanted {
		if slices.Contains(s.Wanted[:i], w) {
			faults.add(placeOf(number, "wanted"), quote(w)+" twice", "each scale once")
		}
	}
	if wanted != "" && len(s.Wanted) == 0 {
		faults.add(placeOf(number, "wanted"), quote(wanted), "the scales wanted, for example d13C-VPDB d15N-AIR")
	}
	return s
}
