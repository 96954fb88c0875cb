package exchange

import (
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"iter"
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

func sequence(rows [][]string, end error) iter.Seq2[[]string, error] {
	return func(yield func([]string, error) bool) {
		for _, r := range rows {
			if !yield(r, nil) {
				return
			}
		}
		if end != nil {
			yield(nil, end)
		}
	}
}

func TestWriteCSVWritesTheseBytes(t *testing.T) {
	var b bytes.Buffer
	err := WriteCSV(&b, []string{"code", "value", "note"}, sequence([][]string{
		{"D7K3M-9Q2XG", "-25.1", "plain"},
		{"-A1", "-1e-7", "=SUM(A1)"},
		{"+x", "+5", "@here"},
		{"a,b", "", "say \"no\""},
		{"'=x", "'free", " outer "},
		{"Rübe 3", "0", "two\nlines"},
	}, nil))
	if err != nil {
		t.Fatal(err)
	}
	want := "code,value,note\r\n" +
		"D7K3M-9Q2XG,-25.1,plain\r\n" +
		"'-A1,-1e-7,'=SUM(A1)\r\n" +
		"'+x,+5,'@here\r\n" +
		"\"a,b\",,\"say \"\"no\"\"\"\r\n" +
		"''=x,'free,\" outer \"\r\n" +
		"Rübe 3,0,\"two\nlines\"\r\n"
	if diff := cmp.Diff(want, b.String()); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
}

// Whatever is written reads back through a standard reader, but for the
// reader's own rule that CRLF inside a field becomes LF.
func TestWriteCSVRoundTrips(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		width := rapid.IntRange(1, 4).Draw(t, "width")
		field := rapid.OneOf(rapid.String(), rapid.StringMatching(`['=+\-@\t", \n0-9.e]{0,6}`))
		rows := rapid.SliceOfN(rapid.SliceOfN(field, width, width), 0, 6).Draw(t, "rows")
		header := rapid.SliceOfN(field, width, width).Draw(t, "header")
		var b bytes.Buffer
		if err := WriteCSV(&b, header, sequence(rows, nil)); err != nil {
			t.Fatal(err)
		}
		r := csv.NewReader(&b)
		r.FieldsPerRecord = width
		got, err := r.ReadAll()
		if err != nil {
			t.Fatalf("%v in %q", err, b.String())
		}
		want := append([][]string{header}, rows...)
		if len(got) != len(want) {
			t.Fatalf("%d records, wrote %d", len(got), len(want))
		}
		for i, record := range want {
			for j, s := range record {
				s = strings.ReplaceAll(s, "\r\n", "\n")
				if g := Unguard(got[i][j]); g != s {
					t.Fatalf("field %q came back as %q", s, g)
				}
				if _, number := readStored(got[i][j]); !number && startsFormula(got[i][j]) {
					t.Fatalf("field %q begins a formula", got[i][j])
				}
			}
		}
	})
}

func TestWriteCSVStopsAtTheFirstError(t *testing.T) {
	broken := errors.New("connection gone")
	var b bytes.Buffer
	err := WriteCSV(&b, []string{"a"}, sequence([][]string{{"1"}, {"2"}}, broken))
	if !errors.Is(err, broken) || b.String() != "a\r\n1\r\n2\r\n" {
		t.Errorf("error %v after %q", err, b.String())
	}
	if err := WriteCSV(&b, []string{"a", "b"}, sequence([][]string{{"1"}}, nil)); err == nil || !strings.Contains(err.Error(), "row 1 has 1 fields, expected 2") {
		t.Errorf("a row that is too short: %v", err)
	}
	// A writer that is gone ends the reading of rows, too.
	taken := 0
	endless := func(yield func([]string, error) bool) {
		for i := 0; i < 10_000_000; i++ {
			taken++
			if !yield([]string{strconv.Itoa(i)}, nil) {
				return
			}
		}
	}
	if err := WriteCSV(failingWriter{broken}, []string{"a"}, endless); !errors.Is(err, broken) || taken > 100_000 {
		t.Errorf("error %v after taking %d rows", err, taken)
	}
}

type failingWriter struct{ err error }

func (w failingWriter) Write([]byte) (int, error) { return 0, w.err }

func TestFormatNumberRoundTripsEveryFloat(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x := math.Float64frombits(rapid.Uint64().Draw(t, "bits"))
		s := FormatNumber(x)
		if math.IsNaN(x) || math.IsInf(x, 0) {
			if s != "" {
				t.Fatalf("%v written as %q", x, s)
			}
			return
		}
		got, ok := readStored(s)
		if !ok || got != x {
			t.Fatalf("%v written as %q, read as %v", x, s, got)
		}
		if Guard(s) != s {
			t.Fatalf("number %q was guarded", s)
		}
	})
	tenth, fifth := 0.1, 0.2 // constants would be added exactly
	for x, want := range map[float64]string{0: "0", tenth + fifth: "0.30000000000000004", -10.45: "-10.45", 1e21: "1e+21", 1e-7: "1e-07", 123456789: "123456789"} {
		if got := FormatNumber(x); got != want {
			t.Errorf("%v is written %q, expected %q", x, got, want)
		}
	}
	if got := FormatNumber(math.Copysign(0, -1)); got != "0" {
		t.Errorf("minus zero is written %q", got)
	}
	if got := FormatOptional(nil); got != "" {
		t.Errorf("nil is written %q", got)
	}
}

// The rows and fields of every well-formed file are those of encoding/csv.
func TestCSVRowsCountLikeASpreadsheet(t *testing.T) {
	text := "a,b\n\n\"x\ny\",1\n,\nlast,2"
	r := newCSV("read", []byte(text), ',', 3)
	var got []string
	for {
		number, cells, err := r.next()
		if err != nil {
			break
		}
		got = append(got, fmt.Sprint(number, " ", cells[0].text))
	}
	// Row 2 is empty and passed over; the quoted field makes no row of its own.
	want := []string{"4 a", "6 x\ny", "7 ", "8 last"}
	if !slices.Equal(got, want) {
		t.Errorf("rows %q, expected %q", got, want)
	}
}
