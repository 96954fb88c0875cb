package exchange

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"
)

// textWidth is the most columns a line of text has.
const textWidth = 100

// A TextPage writes text for a terminal or a printer, in lines of at most 100
// columns, and keeps the first error.
type TextPage struct {
	w   io.Writer
	err error
}

// NewTextPage begins a page.
func NewTextPage(w io.Writer) *TextPage { return &TextPage{w: w} }

// Err is the first error of writing.
func (p *TextPage) Err() error { return p.err }

// Line writes one line as it is.

func (p *TextPage) Line(text string) {
	if p.err == nil {
		_, p.err = io.WriteString(p.w, strings.TrimRight(text, " ")+"\n")
	}
}

// A number and its sign stay on one line: joint stands for the space between
// them until words are laid out.
const joint = "\x00"

var joined = strings.NewReplacer(" ‰", joint+"‰", " %", joint+"%")

// Paragraph writes text in lines of at most textWidth columns; the first begins
// after lead, the others under where it began.
func (p *TextPage) Paragraph(lead, text string) {
	indent := strings.Repeat(" ", utf8.RuneCountInString(lead))
	line, empty := lead, true
	for _, word := range strings.Fields(joined.Replace(text)) {
		word = strings.ReplaceAll(word, joint, " ")
		n := utf8.RuneCountInString(line) + utf8.RuneCountInString(word)
		if !empty && n+1 > textWidth {
			p.Line(line)
			line, empty = indent, true
		}
		// A word longer than the line, such as a hash, is broken.
		for room := textWidth - utf8.RuneCountInString(line); empty && utf8.RuneCountInString(word) > room; room = textWidth - len(indent) {
			runes := []rune(word)
			p.Line(line + string(runes[:room]))
			line, word = indent, string(runes[room:])
		}
		if !empty {
			line += " "
		}
		line, empty = line+word, false
	}
	p.Line(line)
}

// Decimals is how many decimals two digits of a standard uncertainty have; 3
// where there is none.
func Decimals(u float64) int {
	if !(u > 0) || math.IsInf(u, 0) {
		return 3
	}
	d := 1 - int(math.Floor(math.Log10(u)))
	if math.Round(u*math.Pow10(d)) >= 100 { // 0.0996 has the digits 0.10
		d--
	}
	return min(max(d, 0), 9)
}

// Fixed writes a number with a true minus sign.
func Fixed(x float64, digits int) string {
	s := strconv.FormatFloat(x, 'f', digits, 64)
	if rest, ok := strings.CutPrefix(s, "-"); ok {
		if strings.Trim(rest, "0.") == "" {
			return rest
		}
		return "−" + rest
	}
	return s
}

// pad fills a text up to a number of columns, on the left or on the right.
func pad(text string, columns int, right bool) string {
	gap := strings.Repeat(" ", max(columns-utf8.RuneCountInString(text), 0))
	if right {
		return gap + text
	}
	return text + gap
}

// Tabulate writes rows under headings; columns that hold numbers stand right.
func (p *TextPage) Tabulate(indent string, headings []string, right []bool, rows [][]string) {
	textWidths := make([]int, len(headings))
	for _, row := range append([][]string{headings}, rows...) {
		for i, c := range row {
			textWidths[i] = max(textWidths[i], utf8.RuneCountInString(c))
		}
	}
	for i, row := range append([][]string{headings}, rows...) {
		line := indent
		for j, c := range row {
			line += pad(c, textWidths[j], right[j]) + "  "
		}
		p.Line(line)
		if i == 0 {
			rule := indent
			for _, n := range textWidths {
				rule += strings.Repeat("-", n) + "  "
			}
			p.Line(rule)
		}
	}
}

func Count(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}
