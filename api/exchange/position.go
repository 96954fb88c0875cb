package exchange

import (
	"fmt"
	"strconv"
	"strings"
	"unicode/utf8"

	"deltamoor/api/registry"
)

// placeOf names a cell in the sender's own words; a heading of "" names the row alone.
func placeOf(row int, heading string) string {
	if heading == "" {
		return "row " + strconv.Itoa(row)
	}
	return "row " + strconv.Itoa(row) + ", column " + quote(heading)
}

// placeOfColumn names a cell by the number of its column, where no heading says more.
func placeOfColumn(row, column int) string {
	return fmt.Sprintf("row %d, column %d", row, column)
}

// longestQuote bounds what a complaint repeats of a cell, in characters.
const longestQuote = 60

// quote shows a text of the file: cut to a readable length, with characters
// that cannot be seen (no-break spaces, controls) written as escapes.
func quote(s string) string {
	return strconv.Quote(shorten(s, longestQuote))
}

func shorten(s string, n int) string {
	if len(s) <= n {
		return s
	}
	at := 0
	for i := range s {
		if at == n {
			return s[:i] + "…"
		}
		at++
	}
	return s
}

// quoteAll lists headings for people.
func quoteAll(list []string) string {
	const most = 40
	var b strings.Builder
	for i, s := range list {
		if i == most {
			fmt.Fprintf(&b, " and %d more", len(list)-most)
			break
		}
		if i > 0 {
			b.WriteString(", ")
		}
		b.WriteString(quote(s))
	}
	return b.String()
}

// complaints collects faults: the first ones are kept, the rest counted, so
// that a file with a fault in every cell costs no more than one with fifty.
type complaints struct {
	list []registry.Complaint
	more int
}

func (c *complaints) add(place, found, expected string) {
	if len(c.list) >= registry.MaxComplaints {
		c.more++
		return
	}
	c.list = append(c.list, registry.Complaint{Place: place, Found: found, Expected: expected})
}

func (c *complaints) count() int { return len(c.list) + c.more }

// err is the refusal, nil when there was nothing to complain of.
func (c *complaints) err(message string) error {
	if len(c.list) == 0 {
		return nil
	}
	return &registry.Error{Meaning: registry.Invalid, Message: message, Complaints: c.list, More: c.more}
}

// refuseOne is a refusal with a single fault.
func refuseOne(message, place, found, expected string) error {
	return registry.Complain(message, []registry.Complaint{{Place: place, Found: found, Expected: expected}})
}

// fileName is how a message calls the file.
func fileName(name string) string {
	if name == "" {
		return "the file"
	}
	return shorten(name, longestQuote)
}

// nearest finds the candidate that was most likely meant, "" when none is
// close: differences of case, spaces and punctuation cost nothing, other
// characters one each, and at most a third of them may differ.
func nearest(wanted string, candidates []string) string {
	best, found := -1, ""
	key := folded(wanted)
	for _, c := range candidates {
		k := folded(c)
		if k == "" || len(k) > 200 || len(key) > 200 {
			continue
		}
		d := editDistance(key, k)
		if limit := max(utf8.RuneCountInString(key)/3, 1); d > limit {
			continue
		}
		if best < 0 || d < best {
			best, found = d, c
		}
	}
	return found
}

// folded drops what two spellings of one heading may differ in.
func folded(s string) string {
	s = strings.ReplaceAll(strings.ToLower(s), "δ", "d")
	return strings.Map(func(r rune) rune {
		switch {
		case r >= '⁰' && r <= '⁹':
			return '0' + r - '⁰'
		case r == '¹':
			return '1'
		case r == '²':
			return '2'
		case r == '³':
			return '3'
		case r >= 'a' && r <= 'z', r >= '0' && r <= '9', r > 127 && r != noBreakSpace:
			return r
		}
		return -1
	}, s)
}

// editDistance counts insertions, removals, replacements and exchanges of
// neighbouring characters (optimal string alignment).
func editDistance(a, b string) int {
	x, y := []rune(a), []rune(b)
	before, last, line := make([]int, len(y)+1), make([]int, len(y)+1), make([]int, len(y)+1)
	for j := range line {
		line[j] = j
	}
	for i := range x {
		before, last, line = last, line, before
		line[0] = i + 1
		for j := range y {
			cost := last[j]
			if x[i] != y[j] {
				cost++
			}
			cost = min(cost, last[j+1]+1, line[j]+1)
			if i > 0 && j > 0 && x[i] == y[j-1] && x[i-1] == y[j] {
				cost = min(cost, before[j-1]+1)
			}
			line[j+1] = cost
		}
	}
	return line[len(y)]
}
