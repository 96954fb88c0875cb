package figure

import (
	"bytes"
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"
)

// Colours of every figure.
const (
	ink    = "var(--figure-ink, #1d2b30)"
	quiet  = "var(--figure-quiet, #5b6b70)"
	paper  = "var(--figure-paper, #ffffff)"
	tint   = "var(--figure-tint, #eef3f4)"
	rule   = "var(--figure-line, #9fb2b7)"
	accent = "var(--figure-accent, #00687a)"
	warn   = "var(--figure-warn, #a83c00)"
)

// A drawing collects the text of an SVG.
type drawing struct {
	b bytes.Buffer
}

// open begins a figure of a size in CSS pixels.
func (d *drawing) open(width, height float64, title, description string) {
	fmt.Fprintf(&d.b, `<svg xmlns="http://www.w3.org/2000/svg" role="img" width="%s" height="%s" viewBox="0 0 %[1]s %[2]s" font-family="system-ui, 'Liberation Sans', Arial, sans-serif" font-size="12">`+"\n",
		px(width), px(height))
	fmt.Fprintf(&d.b, "<title>%s</title>\n<desc>%s</desc>\n", escape(title), escape(description))
	fmt.Fprintf(&d.b, `<rect width="%s" height="%s" fill="%s"/>`+"\n", px(width), px(height), paper)
}

func (d *drawing) writeTo(w io.Writer) error {
	d.b.WriteString("</svg>\n")
	_, err := w.Write(d.b.Bytes())
	return err
}

func (d *drawing) printf(format string, args ...any) { fmt.Fprintf(&d.b, format, args...) }

// text writes a line of text; anchor is start, middle or end.
func (d *drawing) text(x, y float64, anchor, fill string, size float64, content string, more ...string) {
	d.printf(`<text x="%s" y="%s" text-anchor="%s" fill="%s" font-size="%s"%s>%s</text>`+"\n", px(x), px(y), anchor, fill, px(size), strings.Join(more, ""), escape(content))
}

func (d *drawing) line(x1, y1, x2, y2 float64, stroke string, width float64, more ...string) {
	d.printf(`<path d="M%s %sL%s %s" stroke="%s" stroke-width="%s" fill="none"%s/>`+"\n", px(x1), px(y1), px(x2), px(y2), stroke, px(width), strings.Join(more, ""))
}

// px writes a coordinate to a hundredth, without a negative zero.
func px(x float64) string {
	return strconv.FormatFloat(math.Round(x*100)/100+0, 'f', -1, 64)
}

// escape makes text safe inside XML; characters that XML has no room for are replaced.
func escape(s string) string {
	s = strings.Map(func(r rune) rune {
		if r < ' ' && r != '\n' && r != '\t' || r == 0xfffe || r == 0xffff || r == utf8.RuneError {
			return '\ufffd'
		}
		return r
	}, s)
	return strings.NewReplacer("&", "&amp;", "<", "&lt;", ">", "&gt;", `"`, "&quot;").Replace(s)
}

// fit cuts text to a number of characters.
func fit(s string, most int) string {
	runes := []rune(s)
	if len(runes) <= most {
		return s
	}
	return strings.TrimRight(string(runes[:most-1]), " ,;(") + "…"
}

// widthOf is a bound on the width of text in the widest of the fonts that the
// figures name: no measurement, since the reader's font is not known.
func widthOf(s string, size float64) float64 {
	ems := 0.0
	for _, r := range s {
		switch {
		case strings.ContainsRune(" .,:;|'ijlI()[]-/", r):
			ems += 0.38
		case r >= 'A' && r <= 'Z' || strings.ContainsRune("mw%‰@…", r):
			ems += 0.75
		default:
			ems += 0.62
		}
	}
	return ems * size
}

// wrap breaks text into at most n lines of a width in CSS pixels; what does
// not go in is cut.
func wrap(s string, size, width float64, n int) []string {
	narrow := func(s string) string {
		for most := utf8.RuneCountInString(s); widthOf(s, size) > width && most > 1; most-- {
			s = fit(s, most)
		}
		return s
	}
	var lines []string
	words := strings.Fields(s)
	line := ""
	for i, w := range words {
		next := strings.TrimSpace(line + " " + w)
		if widthOf(next, size) <= width || line == "" {
			line = next
			continue
		}
		if len(lines) == n-1 {
			return append(lines, narrow(line+" "+strings.Join(words[i:], " ")))
		}
		lines = append(lines, narrow(line))
		line = w
	}
	return append(lines, narrow(line))
}

// signed writes a number for a person: a true minus sign, fixed decimals.
func signed(x float64, decimals int) string {
	text := strconv.FormatFloat(x, 'f', decimals, 64)
	rest, negative := strings.CutPrefix(text, "-")
	if negative && strings.Trim(rest, "0.") != "" {
		return "−" + rest
	}
	return rest
}

// decimalsOf is how many decimals show two digits of an uncertainty, 2 where it has none.
func decimalsOf(u float64) int {
	if !(u > 0) || math.IsInf(u, 0) {
		return 2
	}
	return min(max(1-int(math.Floor(math.Log10(u))), 0), 12)
}
