package exchange

import (
	"math"
	"strconv"
	"strings"
	"testing"

	"golang.org/x/text/encoding/charmap"
	"golang.org/x/text/encoding/unicode"
	"pgregory.net/rapid"

	"deltamoor/store"
)

// Whatever names and deltas a file holds, every dialect that can write them
// gives them back to the bit.
func TestReadTableReadsBackWhatAnyDialectWrites(t *testing.T) {
	encoders := map[string]interface{ Bytes([]byte) ([]byte, error) }{
		"iso-8859-1":   charmap.ISO8859_1.NewEncoder(),
		"windows-1252": charmap.Windows1252.NewEncoder(),
		"utf-16le":     unicode.UTF16(unicode.LittleEndian, unicode.IgnoreBOM).NewEncoder(),
		"utf-16be":     unicode.UTF16(unicode.BigEndian, unicode.IgnoreBOM).NewEncoder(),
	}
	rapid.Check(t, func(t *rapid.T) {
		m := plainMapping()
		m.Delimiter = rapid.SampledFrom([]string{",", ";", "\t", "|"}).Draw(t, "delimiter")
		m.Decimal = rapid.SampledFrom([]string{".", ","}).Draw(t, "decimal")
		m.Encoding = rapid.SampledFrom([]string{"", "utf-8", "iso-8859-1", "windows-1252", "utf-16le", "utf-16be"}).Draw(t, "encoding")
		minus := rapid.SampledFrom([]string{"-", "\u2013", "\u2212"}).Draw(t, "minus")
		if m.Encoding == "iso-8859-1" || (m.Encoding == "windows-1252" && minus == "\u2212") {
			minus = "-"
		}
		unit := rapid.SampledFrom([]string{"", "‰", "\u00a0‰"}).Draw(t, "unit")
		if m.Encoding == "iso-8859-1" {
			unit = ""
		}
		end := rapid.SampledFrom([]string{"\n", "\r\n", "\r"}).Draw(t, "end")
		names := rapid.SliceOfN(rapid.StringMatching(`[A-Za-zäöüß0-9",;|.'=-]{1,12}`), 1, 8).Draw(t, "names")
		deltas := rapid.SliceOfN(rapid.Float64Range(-1000, 1e6), len(names), len(names)).Draw(t, "deltas")
		table := [][]string{{"sample", "raw"}}
		for i, name := range names {
			format := rapid.SampledFrom([]byte{'g', 'e', 'f'}).Draw(t, "format")
			if math.Abs(deltas[i]) < 1e-6 {
				format = 'e' // written out, it would be longer than a number may be
			}
			number := strconv.FormatFloat(deltas[i], format, -1, 64)
			number = strings.Replace(strings.ReplaceAll(number, "-", minus), ".", m.Decimal, 1)
			table = append(table, []string{name, number + unit})
		}
		data := []byte(lines(table, m.Delimiter, end))
		if e := encoders[m.Encoding]; e != nil {
			encoded, err := e.Bytes(data)
			if err != nil {
				t.Fatal(err)
			}
			data = encoded
		}
		got, err := ReadTable(m, "drawn.csv", data)
		if err != nil {
			t.Fatal(err)
		}
		if len(got.Readings) != len(names) {
			t.Fatalf("%d readings, wrote %d", len(got.Readings), len(names))
		}
		for i, r := range got.Readings {
			if r.Name != names[i] || r.Raw != deltas[i] {
				t.Fatalf("reading %d is %q %v, wrote %q %v", i, r.Name, r.Raw, names[i], deltas[i])
			}
		}
	})
}

// A mapping from the method's JSON, as a person would send it.
func TestReadTableTakesAMappingWithoutDialectAsTheDefaults(t *testing.T) {
	table, err := ReadTable(store.Mapping{Columns: store.Columns{Name: "sample"}, Quantities: []store.QuantityColumns{{Quantity: "d2H", Raw: "raw"}}}, "", []byte("sample,raw\nA,-1.5\n"))
	if err != nil || table.Readings[0].Raw != -1.5 {
		t.Errorf("%+v, %v", table.Readings, err)
	}
}
