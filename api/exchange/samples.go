package exchange

import (
	"fmt"
	"slices"
	"strings"

	"deltamoor/api/registry"
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

// ReadSamples reads a list of samples by the fixed headings of SampleHeadings.
// wanted lists scales, separated by spaces, commas or semicolons. A sample is a
// client with a label: a second row of the same pair is refused.
func ReadSamples(name string, data []byte) ([]SampleRow, error) {
	var list []SampleRow
	first := map[[2]string]int{}
	form := newListForm("samples", SampleHeadings, 3, "label", registry.MaxReadings)
	err := form.read(name, data, func(r listRow) {
		s := SampleRow{Row: r.number, Client: r.needed("client", "the client's name"), Label: r.needed("label", "the client's label of the sample"), Matrix: r.text("matrix"), Note: r.text("note")}
		s.Wanted = wanted(r)
		list = append(list, s)
		key := [2]string{strings.ToLower(s.Client), s.Label}
		if row, ok := first[key]; ok && s.Client != "" && s.Label != "" {
			r.fault("label", fmt.Sprintf("%s of %s, which row %d has as well", quote(s.Label), quote(s.Client), row), "each label of a client once")
		} else {
			first[key] = r.number
		}
	})
	if err != nil {
		return nil, err
	}
	return list, nil
}

func wanted(r listRow) []string {
	const must = "the scales wanted, for example d13C-VPDB d15N-AIR"
	text := r.needed("wanted", must)
	scales := strings.FieldsFunc(text, func(r rune) bool { return r == ' ' || r == ',' || r == ';' })
	for i, w := range scales {
		if slices.Contains(scales[:i], w) {
			r.fault("wanted", quote(w)+" twice", "each scale once")
		}
	}
	if text != "" && len(scales) == 0 {
		r.fault("wanted", quote(text), must)
	}
	return scales
}
