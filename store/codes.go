package store

import (
	"errors"
	"fmt"
	"io"
	"strings"
)

// Codes made by the registry are ten symbols of Crockford's base 32 (no I, L,
// O, U), written 5-5 and stored without the hyphen: the letter of what it names,
// eight random symbols (40 bits), and a check symbol.
//
// The check symbol is c₁₀ = Σ αⁱ·cᵢ, i = 1 … 9, in GF(32) with the polynomial
// x⁵+x²+1 and α = 2. Every weight differs and none is zero, so one wrong symbol
// and two exchanged symbols always show.
const (
	codeSymbols = "0123456789ABCDEFGHJKMNPQRSTVWXYZ"
	codeLength  = 10
)

// The letters a code begins with.
const (
	LetterReported    = 'D'
	LetterFinal       = 'V'
	LetterCalibration = 'C'
	LetterSession     = 'S'
	LetterReport      = 'R'
	LetterUnit        = 'B'
	LetterSample      = 'P'
	LetterAssignment  = 'A'
	LetterRevision    = 'X'
	LetterJob         = 'J'
	LetterToken       = 'T'
)

// CodeKind returns the kind of record whose codes begin with the letter.
// Reported deltas (D) and jobs (J) are no records; for them, and for letters
// that begin no code, it returns "".
func CodeKind(letter byte) Kind {
	switch letter {
	case LetterFinal:
		return KindFinal
	case LetterCalibration:
		return KindCalibration
	case LetterSession:
		return KindSession
	case LetterReport:
		return KindReport
	case LetterUnit:
		return KindUnit
	case LetterSample:
		return KindSample
	case LetterAssignment:
		return KindAssignment
	case LetterRevision:
		return KindRevision
	case LetterToken:
		return KindToken
	}
	return ""
}

func codeLetter(letter byte) bool {
	return letter == LetterReported || letter == LetterJob || CodeKind(letter) != ""
}

// What can be wrong with a code that was typed.
var (
	// ErrMistyped: the check symbol does not fit; at least one symbol is wrong.
	ErrMistyped = errors.New("mistyped code")
	// ErrMalformed: it is no code at all.
	ErrMalformed = errors.New("malformed code")
)

// A CodeError is a text that is not a code.
type CodeError struct {
	Found    string
	Expected string
	// Mistyped: it has the form of a code, but the check symbol does not fit.
	Mistyped bool
}

func (e *CodeError) Error() string {
	if e.Mistyped {
		return fmt.Sprintf("code %q is mistyped: %s", e.Found, e.Expected)
	}
	return fmt.Sprintf("code %q: expected %s", e.Found, e.Expected)
}

// Is makes it an ErrMistyped or an ErrMalformed.
func (e *CodeError) Is(target error) bool {
	return target == ErrMistyped && e.Mistyped || target == ErrMalformed && !e.Mistyped
}

// NewCode draws a code with the given letter. Two equal codes are improbable,
// not impossible: the key of the table refuses the second, and the caller draws again.
func NewCode(letter byte, rand io.Reader) (string, error) {
	if !codeLetter(letter) {
		return "", &CodeError{Found: string(rune(letter)), Expected: "a letter that begins codes (" + codeLetters + ")"}
	}
	var random [5]byte
	if _, err := io.ReadFull(rand, random[:]); err != nil {
		return "", fmt.Errorf("draw code: %w", err)
	}
	code := make([]byte, 0, codeLength)
	code = append(code, letter)
	bits := uint64(random[0])<<32 | uint64(random[1])<<24 | uint64(random[2])<<16 | uint64(random[3])<<8 | uint64(random[4])
	for shift := 35; shift >= 0; shift -= 5 {
		code = append(code, codeSymbols[bits>>shift&31])
	}
	return string(append(code, checkSymbol(code))), nil
}

const codeLetters = "D V C S R B P A F X J T"

// ParseCode reads a code as people write it: case, spaces and hyphens do not
// matter, I and L are read as 1, O as 0. It returns the stored form, ten symbols
// without a hyphen. The error is a CodeError.
func ParseCode(text string) (string, error) {
	code := make([]byte, 0, codeLength)
	for _, r := range text {
		if 'a' <= r && r <= 'z' {
			r += 'A' - 'a'
		}
		switch r {
		case ' ', '-', '\t', '\u00a0', '\u2010', '\u2011', '\u2013':
			continue
		case 'I', 'L':
			r = '1'
		case 'O':
			r = '0'
		case 'U':
			return "", &CodeError{Found: text, Expected: "no letter U"}
		}
		if r > 'Z' || strings.IndexByte(codeSymbols, byte(r)) < 0 {
			return "", &CodeError{Found: text, Expected: "digits and letters, not " + fmt.Sprintf("%q", r)}
		}
		if len(code) == codeLength {
			return "", &CodeError{Found: text, Expected: "ten symbols"}
		}
		code = append(code, byte(r))
	}
	if len(code) != codeLength {
		return "", &CodeError{Found: text, Expected: "ten symbols"}
	}
	if want := checkSymbol(code[:codeLength-1]); code[codeLength-1] != want {
		return "", &CodeError{Found: text, Expected: "at least one symbol is wrong, or two are exchanged", Mistyped: true}
	}
	if !codeLetter(code[0]) {
		return "", &CodeError{Found: text, Expected: "a first letter out of " + codeLetters}
	}
	return string(code), nil
}

// FormatCode writes a code for people, 5-5. Anything but ten symbols comes
// back unchanged.
func FormatCode(code string) string {
	if len(code) != codeLength {
		return code
	}
	return code[:5] + "-" + code[5:]
}

// checkSymbol computes Σ αⁱ·cᵢ over the nine symbols by Horner's rule.
func checkSymbol(symbols []byte) byte {
	sum := byte(0)
	for i := len(symbols) - 1; i >= 0; i-- {
		sum = timesAlpha(sum ^ byte(strings.IndexByte(codeSymbols, symbols[i])))
	}
	return codeSymbols[sum]
}

// timesAlpha multiplies by x in GF(32) modulo x⁵+x²+1.
func timesAlpha(c byte) byte {
	c <<= 1
	if c&32 != 0 {
		c ^= 0b100101
	}
	return c
}
