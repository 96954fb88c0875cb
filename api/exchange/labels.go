package exchange

import (
	"encoding/xml"
	"fmt"
	"io"
	"strings"

	qr "github.com/piglig/go-qr"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A LabelOptions lays out a sheet of labels; lengths in mm. The zero value is
// A4 with three columns of eight labels, 66 mm by 34 mm.
type LabelOptions struct {
	// Address is what the codes are resolved under, such as
	// "https://registry.example"; "" puts the bare code into the QR code.
	Address       string
	Width, Height float64
	Columns, Rows int
	Margin        float64
	// Page from 1; 0 is 1.
	Page int
}

func (o LabelOptions) complete() LabelOptions {
	if o.Width == 0 {
		o.Width, o.Height = 210, 297
	}
	if o.Columns == 0 {
		o.Columns, o.Rows = 3, 8
	}
	if o.Margin == 0 {
		o.Margin = 6
	}
	o.Page = max(o.Page, 1)
	return o
}

// LabelPages counts the sheets that a number of labels takes.
func LabelPages(labels int, o LabelOptions) int {
	o = o.complete()
	each := o.Columns * o.Rows
	return (labels + each - 1) / each
}

// A LabelError says what of a sheet cannot be made.
type LabelError struct{ Place, Found, Expected string }

func (e *LabelError) Error() string {
	return fmt.Sprintf("%s: found %s, expected %s", e.Place, e.Found, e.Expected)
}

// LabelAddress is what the QR code of a unit holds: its address, by which any
// reader of such codes opens it, or its bare code.
func LabelAddress(l registry.UnitLabel, o LabelOptions) string {
	code := store.FormatCode(l.Code)
	if o.Address == "" {
		return code
	}
	return strings.TrimRight(o.Address, "/") + "/units/" + code
}

// WriteLabels writes one sheet of labels as SVG in true size: for every unit
// its QR code with four modules of quiet space, its code in clear, material, lot,
// hazards and storage. The same labels give the same bytes.
func WriteLabels(w io.Writer, labels []registry.UnitLabel, o LabelOptions) error {
	o = o.complete()
	if o.Columns < 1 || o.Columns > 20 || o.Rows < 1 || o.Rows > 50 || o.Width < 20 || o.Width > 2000 || o.Height < 20 || o.Height > 2000 || o.Margin < 0 {
		return &LabelError{"sheet", fmt.Sprintf("%d × %d labels on %g mm × %g mm", o.Columns, o.Rows, o.Width, o.Height), "1 to 20 columns and 1 to 50 rows on 20 mm to 2000 mm"}
	}
	pages := LabelPages(len(labels), o)
	if o.Page > pages {
		return &LabelError{"page", fmt.Sprint(o.Page), fmt.Sprintf("1 to %d", pages)}
	}
	width, height := (o.Width-2*o.Margin)/float64(o.Columns), (o.Height-2*o.Margin)/float64(o.Rows)
	if width < 15 || height < 10 {
		return &LabelError{"label", fmt.Sprintf("%.1f mm × %.1f mm", width, height), "15 mm × 10 mm or more"}
	}
	each := o.Columns * o.Rows
	labels = labels[(o.Page-1)*each : min(o.Page*each, len(labels))]
	s := svgSheet{w: w}
	s.printf(`<svg xmlns="http://www.w3.org/2000/svg" width="%gmm" height="%gmm" viewBox="0 0 %g %g" font-family="sans-serif">`+"\n", o.Width, o.Height, o.Width, o.Height)
	s.printf("<title>Labels, sheet %d of %d</title>\n", o.Page, pages)
	for i, l := range labels {
		x, y := o.Margin+float64(i%o.Columns)*width, o.Margin+float64(i/o.Columns)*height
		if err := s.label(l, LabelAddress(l, o), x, y, width, height); err != nil {
			return err
		}
	}
	s.printf("</svg>\n")
	return s.err
}

// An svgSheet remembers the first error of its writer.
type svgSheet struct {
	w   io.Writer
	err error
}

func (s *svgSheet) printf(format string, args ...any) {
	if s.err == nil {
		_, s.err = fmt.Fprintf(s.w, format, args...)
	}
}

func escaped(text string) string {
	var b strings.Builder
	if err := xml.EscapeText(&b, []byte(text)); err != nil {
		return ""
	}
	return b.String()
}

func (s *svgSheet) label(l registry.UnitLabel, address string, x, y, width, height float64) error {
	code, err := qr.EncodeText(address, qr.Medium)
	if err != nil {
		return fmt.Errorf("encode label of %s: %w", store.FormatCode(l.Code), err)
	}
	const quiet = 4
	side := min(height-2, width/2)
	module := side / float64(code.Size()+2*quiet)
	s.printf(`<g id="%s"><rect x="%.3f" y="%.3f" width="%.3f" height="%.3f" fill="#fff" stroke="#ccc" stroke-width="0.1"/>`+"\n", escaped(store.FormatCode(l.Code)), x, y, width, height)
	s.printf(`<path fill="#000" shape-rendering="crispEdges" transform="translate(%.3f %.3f) scale(%.5f)" d="`, x+1+quiet*module, y+1+quiet*module, module)
	for row := range code.Size() {
		for column := range code.Size() {
			if code.Module(column, row) {
				s.printf("M%d %dh1v1h-1z", column, row)
			}
		}
	}
	s.printf(`"/>` + "\n")
	left, line := x+side+2, y+4.5
	room := int((width - side - 3) / 1.35) // letters of 2.6 mm that fit
	most := func(size float64) int { return max(int(float64(room)*2.6/size), 4) }
	write := func(size float64, bold bool, text string) {
		if text = plainText(text); text == "" || line > y+height-1 {
			return
		}
		if letters := []rune(text); len(letters) > most(size) {
			text = string(letters[:most(size)-1]) + "…"
		}
		weight := ""
		if bold {
			weight = ` font-weight="bold"`
		}
		s.printf(`<text x="%.3f" y="%.3f" font-size="%.1f"%s>%s</text>`+"\n", left, line, size, weight, escaped(text))
		line += size * 1.35
	}
	write(3.4, true, store.FormatCode(l.Code))
	write(3, true, l.Material)
	write(2.6, false, l.Label)
	if l.Lot != "" {
		write(2.6, false, "lot "+l.Lot)
	}
	if l.OpenedAt != nil {
		write(2.6, false, "opened "+day(*l.OpenedAt))
	}
	for i, text := range []string{strings.Join(l.Hazards, " "), l.Storage} {
		for text = plainText(text); text != "" && line <= y+height-1; { // the last line that fits says whether more follows
			part, rest := firstWords(text, most(2.6))
			if line+2.6*1.35 > y+height-1 {
				part, rest = text, ""
			}
			write(2.6, i == 0, part)
			text = rest
		}
	}
	s.printf("</g>\n")
	return nil
}

// firstWords divides a text behind the last word that fits.
func firstWords(text string, most int) (part, rest string) {
	letters := []rune(text)
	if len(letters) <= most {
		return text, ""
	}
	for i := most; i > 0; i-- {
		if letters[i] == ' ' {
			return string(letters[:i]), strings.TrimSpace(string(letters[i:]))
		}
	}
	return string(letters[:most]), string(letters[most:])
}
