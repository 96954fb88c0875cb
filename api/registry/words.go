package registry

import (
	"fmt"
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"

	"deltamoor/store"
)

// complaints collects the faults of one request.
type complaints []Complaint

func (c *complaints) add(place, found, expected string, args ...any) {
	*c = append(*c, Complaint{Place: place, Found: found, Expected: fmt.Sprintf(expected, args...)})
}

var (
	codePattern       = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9._-]{0,39}$`)
	laboratoryPattern = regexp.MustCompile(`^[A-Z]{2,8}$`)
	quantityPattern   = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9._%-]{0,19}$`)
)

func (c *complaints) code(place, code string) {
	if !codePattern.MatchString(code) {
		c.add(place, quote(code), "a code of 1 to 40 of A–Z a–z 0–9 . _ -, first a letter or digit")
	}
}

func (c *complaints) text(place, text string, most int) {
	if strings.TrimSpace(text) == "" {
		c.add(place, "nothing", "a text")
	} else if len(text) > most {
		c.add(place, fmt.Sprintf("%d bytes", len(text)), "at most %d bytes", most)
	}
}

func (c *complaints) oneOf(place, word string, words ...string) {
	if !slices.Contains(words, word) {
		c.add(place, quote(word), "one of %s", strings.Join(words, ", "))
	}
}

func quote(s string) string {
	if s == "" {
		return "nothing"
	}
	if len(s) > 80 {
		s = s[:80] + "…"
	}
	return strconv.Quote(s)
}

// number parses a decimal as typed; ok is false and a complaint added where it is none.
func (c *complaints) number(place string, d store.Decimal) (float64, bool) {
	x, err := strconv.ParseFloat(string(d), 64)
	if err != nil || math.IsNaN(x) || math.IsInf(x, 0) || !decimalPattern.MatchString(string(d)) {
		c.add(place, quote(string(d)), `a decimal number such as "-10.450"`)
		return 0, false
	}
	return x, true
}

var decimalPattern = regexp.MustCompile(`^[-+]?[0-9]+(\.[0-9]+)?([eE][-+]?[0-9]{1,3})?$`)

// short truncates a list for a sentence.
func short(list []string, most int) string {
	if len(list) <= most {
		return strings.Join(list, ", ")
	}
	return fmt.Sprintf("%s and %d more", strings.Join(list[:most], ", "), len(list)-most)
}
