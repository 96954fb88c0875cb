package exchange

import (
	"bytes"
	"fmt"
	"unicode/utf16"
	"unicode/utf8"

	"golang.org/x/text/encoding/charmap"

	"deltamoor/api/registry"
)

// The encodings that a mapping may name.
const (
	encodingUTF8    = "utf-8"
	encodingUTF16LE = "utf-16le"
	encodingUTF16BE = "utf-16be"
	encodingWindows = "windows-1252"
	encodingLatin1  = "iso-8859-1"
)

var encodings = [...]string{encodingUTF8, encodingUTF16LE, encodingUTF16BE, encodingWindows, encodingLatin1}

const someEncoding = "utf-8, utf-16le, utf-16be, windows-1252 or iso-8859-1"

// decodeText turns the bytes of a text file into UTF-8 with LF line ends.
// A byte order mark outranks the encoding that the mapping names; without both,
// bytes that are not UTF-8 are refused, because nothing in them tells one
// single-byte encoding from another. It returns the encoding used.
func decodeText(message, wanted string, data []byte) (text []byte, encoding string, err error) {
	encoding = wanted
	switch {
	case bytes.HasPrefix(data, []byte{0xff, 0xfe, 0, 0}), bytes.HasPrefix(data, []byte{0, 0, 0xfe, 0xff}):
		return nil, "", refuseOne(message, "the first bytes", "the byte order mark of UTF-32", "a file in "+someEncoding)
	case bytes.HasPrefix(data, []byte{0xef, 0xbb, 0xbf}):
		encoding, data = encodingUTF8, data[3:]
	case bytes.HasPrefix(data, []byte{0xff, 0xfe}):
		encoding, data = encodingUTF16LE, data[2:]
	case bytes.HasPrefix(data, []byte{0xfe, 0xff}):
		encoding, data = encodingUTF16BE, data[2:]
	}
	if c, ok := otherFormat(data); ok {
		return nil, "", refuseOne(message, "the first bytes", c, "a text file")
	}
	switch encoding {
	case "", encodingUTF8:
		text = data
		if at := invalidUTF8(data); at >= 0 {
			expected := "UTF-8; name the file's encoding in the mapping, for example windows-1252"
			if encoding == encodingUTF8 {
				expected = "UTF-8, as the mapping or the byte order mark says"
			}
			return nil, "", refuseOne(message, placeOfLine(data, at), fmt.Sprintf("the byte 0x%02X", data[at]), expected)
		}
		encoding = encodingUTF8
	case encodingUTF16LE, encodingUTF16BE:
		text, err = decodeUTF16(message, data, encoding == encodingUTF16BE)
	case encodingWindows, encodingLatin1:
		text, err = decodeSingleByte(message, data, encoding)
	}
	if err != nil {
		return nil, "", err
	}
	if err := refuseControls(message, text); err != nil {
		return nil, "", err
	}
	return unixLines(text), encoding, nil
}

// otherFormat recognises files that are no text by their first bytes.
func otherFormat(data []byte) (string, bool) {
	for _, f := range []struct{ magic, what string }{
		{"PK\x03\x04", "a zip archive, perhaps an .xlsx workbook"},
		{"\xd0\xcf\x11\xe0", "an old .xls workbook or one with a password"},
		{"%PDF", "a PDF document"},
		{"\x1f\x8b", "a gzip archive"},
		{"\x89PNG", "a picture"},
		{"SQLite format 3", "a database"},
	} {
		if bytes.HasPrefix(data, []byte(f.magic)) {
			return f.what, true
		}
	}
	return "", false
}

func invalidUTF8(data []byte) int {
	if utf8.Valid(data) {
		return -1
	}
	for at := 0; at < len(data); {
		r, n := utf8.DecodeRune(data[at:])
		if r == utf8.RuneError && n == 1 {
			return at
		}
		at += n
	}
	return -1
}

// placeOfLine names the line of a byte: before a file can be decoded it has no rows.
func placeOfLine(data []byte, at int) string { return fmt.Sprintf("line %d", lineOf(data, at)) }

// lineOf counts the line of a byte, from 1.
func lineOf(data []byte, at int) int {
	line := 1
	for i, c := range data[:at] {
		if c == '\n' || (c == '\r' && (i+1 == len(data) || data[i+1] != '\n')) {
			line++
		}
	}
	return line
}

func decodeUTF16(message string, data []byte, bigEndian bool) ([]byte, error) {
	unit := func(i int) uint16 {
		if bigEndian {
			return uint16(data[i])<<8 | uint16(data[i+1])
		}
		return uint16(data[i+1])<<8 | uint16(data[i])
	}
	if len(data)%2 != 0 {
		return nil, refuseOne(message, "the last byte", "an odd number of bytes", "UTF-16, two bytes for each unit")
	}
	text := make([]byte, 0, len(data)/2+len(data)/8)
	for i := 0; i < len(data); i += 2 {
		r := rune(unit(i))
		if utf16.IsSurrogate(r) {
			low := rune(0)
			if i+3 < len(data) {
				low = rune(unit(i + 2))
			}
			r = utf16.DecodeRune(r, low)
			if r == utf8.RuneError {
				return nil, refuseOne(message, placeOfLine(text, len(text)), fmt.Sprintf("half a surrogate pair, 0x%04X", unit(i)), "UTF-16")
			}
			i += 2
		}
		text = utf8.AppendRune(text, r)
	}
	return text, nil
}

// decodeSingleByte refuses bytes that the encoding does not give a character,
// and those that ISO 8859-1 gives a control: they say that the encoding is another.
func decodeSingleByte(message string, data []byte, encoding string) ([]byte, error) {
	text := make([]byte, 0, len(data)+len(data)/16)
	for i, c := range data {
		switch {
		case c < 0x80:
			text = append(text, c)
		case c >= 0xa0:
			text = utf8.AppendRune(text, rune(c))
		case encoding == encodingLatin1:
			found := fmt.Sprintf("the byte 0x%02X", c)
			if r := charmap.Windows1252.DecodeByte(c); r >= 0xa0 && r != utf8.RuneError {
				found += fmt.Sprintf(", which windows-1252 reads as %q", r)
			}
			return nil, refuseOne(message, placeOfLine(data, i), found, "a character of iso-8859-1; check the encoding that the mapping names")
		default:
			r := charmap.Windows1252.DecodeByte(c)
			if r < 0xa0 || r == utf8.RuneError {
				return nil, refuseOne(message, placeOfLine(data, i), fmt.Sprintf("the byte 0x%02X", c), "a character of windows-1252; check the encoding that the mapping names")
			}
			text = utf8.AppendRune(text, r)
		}
	}
	return text, nil
}

// refuseControls finds what no table contains: NUL and its like. Many NULs say
// that the file is UTF-16 without its mark.
func refuseControls(message string, text []byte) error {
	for i, c := range text {
		if (c >= ' ' && c != 0x7f) || c == '\t' || c == '\n' || c == '\r' || c == '\f' || c == '\v' {
			continue
		}
		found, expected := fmt.Sprintf("the control character 0x%02X", c), "text; this looks like a binary file"
		if c == 0 && i < 4 && bytes.Count(text, []byte{0}) >= len(text)/3 {
			expected = "text; if the file is UTF-16, say utf-16le or utf-16be in the mapping"
		}
		return refuseOne(message, placeOfLine(text, i), found, expected)
	}
	return nil
}

// unixLines makes CR and CRLF into LF: encoding/csv takes a file whose lines
// end in CR alone for a single record, without a word.
func unixLines(text []byte) []byte {
	first := bytes.IndexByte(text, '\r')
	if first < 0 {
		return text
	}
	out := make([]byte, first, len(text))
	copy(out, text)
	for i := first; i < len(text); i++ {
		c := text[i]
		if c == '\r' {
			if i+1 < len(text) && text[i+1] == '\n' {
				continue
			}
			c = '\n'
		}
		out = append(out, c)
	}
	return out
}

// skipLines moves a reader behind n lines; false when the text has fewer.
func skipLines(text []byte, n int) ([]byte, bool) {
	for ; n > 0; n-- {
		at := bytes.IndexByte(text, '\n')
		if at < 0 {
			return nil, false
		}
		text = text[at+1:]
	}
	return text, true
}

// bounded refuses what is too large to look at, naming the bound.
func bounded(message string, data []byte) error {
	if len(data) > registry.MaxUpload {
		return registry.Refuse(registry.TooLarge, "%s: %d bytes, more than the %d (64 MiB) that one import may have", message, len(data), registry.MaxUpload)
	}
	return nil
}
