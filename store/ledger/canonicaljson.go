package ledger

import (
	"encoding"
	"encoding/json"
	"fmt"
	"math"
	"reflect"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/gowebpki/jcs"
)

// maxInteger is 2⁵³: beyond it a JSON number no longer names one integer
// (RFC 8785, 3.2.2.3 reads numbers as IEEE 754 doubles).
const maxInteger = 1 << 53

// A CanonicalError is a value that has no canonical form: where it stands,
// what was found and what was expected.
type CanonicalError struct {
	// Path leads to the value, as in "results[3].u"; "" is the whole.
	Path     string
	Found    string
	Expected string
}

func (e *CanonicalError) Error() string {
	where := e.Path
	if where == "" {
		where = "value"
	}
	return fmt.Sprintf("%s: found %s, expected %s", where, e.Found, e.Expected)
}

// Canonical returns the canonical JSON (RFC 8785) of a Go value as
// encoding/json writes it. Refused, as a CanonicalError with the place, is
// what JSON cannot say exactly: NaN and infinities, text that is not UTF-8,
// integers beyond 2⁵³. Negative zero becomes 0.
func Canonical(v any) ([]byte, error) {
	if err := checkValue(reflect.ValueOf(v), ""); err != nil {
		return nil, err
	}
	raw, err := json.Marshal(v)
	if err != nil {
		return nil, err
	}
	return CanonicalJSON(raw)
}

// CanonicalJSON brings JSON text into canonical form. Refused are repeated
// member names, text that is not UTF-8, lone surrogates, numbers that are no
// finite double, and integers beyond 2⁵³ that would be rounded silently.
func CanonicalJSON(raw []byte) ([]byte, error) {
	if len(raw) == 0 {
		return nil, &CanonicalError{Found: "nothing", Expected: "JSON text"}
	}
	if err := checkIntegers(raw); err != nil {
		return nil, err
	}
	out, err := jcs.Transform(raw)
	if err != nil {
		return nil, &CanonicalError{Found: "malformed JSON (" + err.Error() + ")", Expected: "JSON text that RFC 8785 can express"}
	}
	return out, nil
}

// checkIntegers looks for number tokens without fraction and exponent that no
// double can hold. It steps over strings and leaves every other fault to the
// transformation.
func checkIntegers(raw []byte) error {
	for i := 0; i < len(raw); i++ {
		switch c := raw[i]; {
		case c == '"':
			for i++; i < len(raw) && raw[i] != '"'; i++ {
				if raw[i] == '\\' {
					i++
				}
			}
		case '0' <= c && c <= '9':
			start := i
			integer := true
			for i < len(raw) && strings.IndexByte("0123456789+-.eE", raw[i]) >= 0 {
				if strings.IndexByte(".eE", raw[i]) >= 0 {
					integer = false
				}
				i++
			}
			if token := string(raw[start:i]); integer && i-start >= 16 {
				// Beyond 2⁵³ only what a double writes itself is no rounded integer.
				f, err := strconv.ParseFloat(token, 64)
				if err != nil || f >= maxInteger && string(AppendNumber(nil, f)) != token {
					return &CanonicalError{Found: "integer " + token, Expected: "at most 2^53 in magnitude (write larger ones as strings)"}
				}
			}
			i--
		}
	}
	return nil
}

var (
	jsonMarshaler = reflect.TypeFor[json.Marshaler]()
	textMarshaler = reflect.TypeFor[encoding.TextMarshaler]()
)

// checkValue walks what encoding/json would write and reports the first value
// it would refuse without a place, or change without a word.
func checkValue(v reflect.Value, path string) error {
	if !v.IsValid() {
		return nil
	}
	if t := v.Type(); t.Implements(jsonMarshaler) || t.Implements(textMarshaler) {
		return nil // its own text is checked as JSON text
	}
	switch v.Kind() {
	case reflect.Float64, reflect.Float32:
		if f := v.Float(); math.IsNaN(f) || math.IsInf(f, 0) {
			return &CanonicalError{Path: path, Found: strconv.FormatFloat(f, 'g', -1, 64), Expected: "a finite number"}
		}
	case reflect.Int, reflect.Int8, reflect.Int16, reflect.Int32, reflect.Int64:
		if n := v.Int(); n > maxInteger || n < -maxInteger {
			return &CanonicalError{Path: path, Found: strconv.FormatInt(n, 10), Expected: "at most 2^53 in magnitude (write larger ones as strings)"}
		}
	case reflect.Uint, reflect.Uint8, reflect.Uint16, reflect.Uint32, reflect.Uint64, reflect.Uintptr:
		if n := v.Uint(); n > maxInteger {
			return &CanonicalError{Path: path, Found: strconv.FormatUint(n, 10), Expected: "at most 2^53 (write larger ones as strings)"}
		}
	case reflect.String:
		if s := v.String(); !utf8.ValidString(s) {
			return &CanonicalError{Path: path, Found: strconv.QuoteToASCII(s), Expected: "UTF-8 text"}
		}
	case reflect.Pointer, reflect.Interface:
		if !v.IsNil() {
			return checkValue(v.Elem(), path)
		}
	case reflect.Slice:
		if v.Type().Elem().Kind() == reflect.Uint8 {
			return nil // base64
		}
		fallthrough
	case reflect.Array:
		for i := range v.Len() {
			if err := checkValue(v.Index(i), path+"["+strconv.Itoa(i)+"]"); err != nil {
				return err
			}
		}
	case reflect.Map:
		for iter := v.MapRange(); iter.Next(); {
			if err := checkValue(iter.Key(), path); err != nil {
				return err
			}
			if err := checkValue(iter.Value(), join(path, fmt.Sprint(iter.Key().Interface()))); err != nil {
				return err
			}
		}
	case reflect.Struct:
		t := v.Type()
		for i := range t.NumField() {
			field := t.Field(i)
			name, _, _ := strings.Cut(field.Tag.Get("json"), ",")
			if !field.IsExported() && !field.Anonymous || name == "-" {
				continue
			}
			at := path
			switch {
			case name != "":
				at = join(path, name)
			case !field.Anonymous:
				at = join(path, field.Name)
			}
			if err := checkValue(v.Field(i), at); err != nil {
				return err
			}
		}
	}
	return nil
}

func join(path, name string) string {
	if path == "" {
		return name
	}
	return path + "." + name
}

// AppendString appends s as a canonical JSON string (RFC 8785, 3.2.2.2). The
// caller has checked that s is UTF-8.
func AppendString(dst []byte, s string) []byte {
	const hexadecimal = "0123456789abcdef"
	dst = append(dst, '"')
	for i := range len(s) {
		switch c := s[i]; c {
		case '"', '\\':
			dst = append(dst, '\\', c)
		case '\b':
			dst = append(dst, `\b`...)
		case '\t':
			dst = append(dst, `\t`...)
		case '\n':
			dst = append(dst, `\n`...)
		case '\f':
			dst = append(dst, `\f`...)
		case '\r':
			dst = append(dst, `\r`...)
		default:
			if c < 0x20 {
				dst = append(dst, '\\', 'u', '0', '0', hexadecimal[c>>4], hexadecimal[c&15])
			} else {
				dst = append(dst, c)
			}
		}
	}
	return append(dst, '"')
}

// AppendNumber appends f as ECMAScript writes it (RFC 8785, 3.2.2.3). The
// caller has checked that f is finite; negative zero is written 0.
func AppendNumber(dst []byte, f float64) []byte {
	if f == 0 {
		return append(dst, '0')
	}
	format := byte('f')
	if a := math.Abs(f); a < 1e-6 || a >= 1e21 {
		format = 'e'
	}
	dst = strconv.AppendFloat(dst, f, format, -1, 64)
	if n := len(dst); format == 'e' && dst[n-2] == '0' && (dst[n-3] == '-' || dst[n-3] == '+') {
		// Go writes at least two digits of exponent, ECMAScript no leading zero.
		dst[n-2] = dst[n-1]
		dst = dst[:n-1]
	}
	return dst
}
