package exchange

import (
	"math"
	"strconv"
	"strings"
	"unicode"
)

// noBreakSpace is what word processors and spreadsheets put between a number and its unit.
const noBreakSpace = '\u00a0'

// padding reports the white space that may stand around a cell's text,
// including what unicode does not count as space: the zero-width ones and a
// byte order mark that a program left in the middle of a file.
func padding(r rune) bool { return unicode.IsSpace(r) || zeroWidth(r) }

func zeroWidth(r rune) bool { return r == '\u200b' || r == '\u2060' || r == '\ufeff' }

// trim drops padding from both ends.
func trim(s string) string {
	if s == "" || (s[0] > ' ' && s[0] < 0x7f && s[len(s)-1] > ' ' && s[len(s)-1] < 0x7f) {
		return s
	}
	return strings.TrimFunc(s, padding)
}

// minusSign reports the characters that programs and typists use as a minus
// sign. An em dash is not among them: alone in a cell it means "nothing".
func minusSign(r rune) bool {
	switch r {
	case '-', '\u2010', '\u2011', '\u2012', '\u2013', '\u2212':
		return true
	}
	return false
}

// longestNumber bounds the text of a number; a float64 written in full has 17 digits.
const longestNumber = 64

const tooLong = "a number of at most 64 characters"

// readNumber reads one number with the given decimal sign. perMil allows a
// per-mil sign behind it. The second result says what was expected instead, and
// is "" when the text was a number. Minus zero is returned as zero.
func readNumber(text string, decimal byte, perMil bool) (x float64, expected string) {
	s := trim(text)
	if perMil {
		if t, ok := strings.CutSuffix(s, "‰"); ok {
			s = trim(t)
		}
	}
	if len(s) > 3*longestNumber {
		return 0, tooLong
	}
	var plain [longestNumber + 1]byte
	n := 0
	put := func(c byte) {
		if n < len(plain) {
			plain[n] = c
			n++
		}
	}
	digits, exponentDigits := 0, 0
	seenDecimal, seenExponent, signAllowed := false, false, true
	separator := false
	for _, r := range s {
		switch {
		case r >= '0' && r <= '9':
			put(byte(r))
			if seenExponent {
				exponentDigits++
			} else {
				digits++
			}
		case signAllowed && minusSign(r):
			put('-')
		case signAllowed && r == '+':
			put('+')
		case r == rune(decimal) && !seenDecimal && !seenExponent:
			put('.')
			seenDecimal = true
		case (r == 'e' || r == 'E') && digits > 0 && !seenExponent:
			put('e')
			seenExponent, signAllowed = true, true
			continue
		case digits > 0 && thousandsSeparator(r):
			separator = true
		default:
			return 0, aNumber(decimal)
		}
		signAllowed = false
	}
	switch {
	case separator && digits > 1:
		return 0, aNumber(decimal) + " and without separators of thousands: what stands there could be read as two different numbers"
	case digits == 0, separator, seenExponent && exponentDigits == 0:
		return 0, aNumber(decimal)
	case n == len(plain):
		return 0, tooLong
	}
	x, err := strconv.ParseFloat(string(plain[:n]), 64)
	if err != nil || math.IsInf(x, 0) {
		return 0, "a number of magnitude below 1.8e308"
	}
	if x == 0 {
		x = 0 // −0 becomes 0
	}
	return x, ""
}

func aNumber(decimal byte) string {
	return `a number with the decimal sign "` + string(rune(decimal)) + `"`
}

// thousandsSeparator reports the signs that people group digits with.
func thousandsSeparator(r rune) bool {
	switch r {
	case '.', ',', '\'', '’', '_', '·', '٬':
		return true
	}
	return padding(r)
}

// readStored reads a number as workbooks and canonical texts store it: with a
// point, exponent allowed, no padding of any kind.
func readStored(s string) (float64, bool) {
	if s == "" || len(s) > longestNumber {
		return 0, false
	}
	for _, c := range []byte(s) {
		// ParseFloat also reads hexadecimal, underscores, "inf" and "nan".
		if (c < '0' || c > '9') && c != '.' && c != '-' && c != '+' && c != 'e' && c != 'E' {
			return 0, false
		}
	}
	x, err := strconv.ParseFloat(s, 64)
	if err != nil || math.IsInf(x, 0) {
		return 0, false
	}
	if x == 0 {
		x = 0
	}
	return x, true
}

// FormatNumber writes a float64 with the fewest digits that read back as the
// same float64, in the form of JSON numbers. What is no number (NaN, infinite)
// becomes the empty text: absent, not zero.
func FormatNumber(x float64) string {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return ""
	}
	if x == 0 {
		return "0"
	}
	format := byte('f')
	if a := math.Abs(x); a < 1e-6 || a >= 1e21 {
		format = 'e'
	}
	return strconv.FormatFloat(x, format, -1, 64)
}

// FormatOptional is FormatNumber of what x points to, and the empty text for nil.
func FormatOptional(x *float64) string {
	if x == nil {
		return ""
	}
	return FormatNumber(*x)
}
