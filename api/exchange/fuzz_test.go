package exchange

import (
	"bytes"
	"encoding/json"
	"errors"
	"math"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// wantRefusalOrReadings holds for every input: readings that are finite and
// placed, or a refusal of which every part says something.
func wantRefusalOrReadings(t *testing.T, table registry.ReadingTable, err error) {
	t.Helper()
	if err != nil {
		var refusal *registry.Error
		if !errors.As(err, &refusal) {
			t.Fatalf("error %v (%T) is no refusal", err, err)
		}
		if refusal.Meaning != registry.Invalid && refusal.Meaning != registry.TooLarge {
			t.Fatalf("meaning %s", refusal.Meaning)
		}
		if refusal.Meaning == registry.Invalid && len(refusal.Complaints) == 0 {
			t.Fatalf("refusal without a complaint: %v", err)
		}
		if len(refusal.Complaints) > registry.MaxComplaints {
			t.Fatalf("%d complaints", len(refusal.Complaints))
		}
		for _, c := range refusal.Complaints {
			if c.Place == "" || c.Found == "" || c.Expected == "" || len(c.String()) > 20_000 {
				t.Fatalf("complaint %+v", c)
			}
		}
		if len(table.Readings) != 0 {
			t.Fatalf("%d readings beside a refusal", len(table.Readings))
		}
		return
	}
	if len(table.Readings) == 0 || table.Rows == 0 {
		t.Fatal("neither readings nor a refusal")
	}
	for i, r := range table.Readings {
		for _, x := range []*float64{&r.Raw, r.U, r.Size, r.Amount, r.Retention} {
			if x != nil && (math.IsNaN(*x) || math.IsInf(*x, 0) || (*x == 0 && math.Signbit(*x))) {
				t.Fatalf("reading %d holds %v", i, *x)
			}
		}
		if r.Name == "" || r.Quantity == "" || r.Name != trim(r.Name) || (r.U != nil && *r.U < 0) {
			t.Fatalf("reading %d is %+v", i, r)
		}
		if p := table.Place(i, "raw"); p == "" || p == "the file" {
			t.Fatalf("reading %d stands at %q", i, p)
		}
	}
}

// FuzzReadTable changes files, each read by one of the mappings of testdata/sessions.
func FuzzReadTable(f *testing.F) {
	var mappings []store.Mapping
	for _, folder := range []string{"good", "broken"} {
		for _, name := range sessionNames(f, folder) {
			m, data := session(f, folder, name)
			f.Add(uint8(len(mappings)), data)
			mappings = append(mappings, m)
		}
	}
	f.Fuzz(func(t *testing.T, which uint8, data []byte) {
		m := mappings[int(which)%len(mappings)]
		table, err := ReadTable(m, "fuzzed", data)
		wantRefusalOrReadings(t, table, err)
		if err != nil || m.Format == formatXLSX || table.Encoding != encodingUTF8 || bytes.HasPrefix(data, []byte("PK")) {
			return
		}
		// Line ends say nothing: every kind gives the same readings.
		unix := unixLines(bytes.TrimPrefix(data, []byte("\ufeff")))
		for _, end := range []string{"\r\n", "\r"} {
			again, err := ReadTable(m, "fuzzed", bytes.ReplaceAll(unix, []byte("\n"), []byte(end)))
			if err != nil {
				t.Fatalf("with line ends %q: %v", end, err)
			}
			if diff := cmp.Diff(table.Readings, again.Readings); diff != "" {
				t.Fatalf("with line ends %q:\n%s", end, diff)
			}
		}
	})
}

// FuzzMapping changes the mapping and leaves the file.
func FuzzMapping(f *testing.F) {
	_, data := session(f, "good", "utf8-comma.csv")
	for _, folder := range []string{"good", "broken"} {
		for _, name := range sessionNames(f, folder) {
			m, _ := session(f, folder, name)
			text, err := json.Marshal(m)
			if err != nil {
				f.Fatal(err)
			}
			f.Add(string(text))
		}
	}
	f.Fuzz(func(t *testing.T, mapping string) {
		var m store.Mapping
		if json.Unmarshal([]byte(mapping), &m) != nil {
			return
		}
		for _, c := range CheckMapping(m) {
			if c.Place == "" || c.Found == "" || c.Expected == "" {
				t.Fatalf("complaint %+v", c)
			}
		}
		table, err := ReadTable(m, "fuzzed", data)
		wantRefusalOrReadings(t, table, err)
	})
}

// FuzzReadWorkbook changes the XML of a sheet and its strings, which random
// changes of a compressed archive would never reach.
func FuzzReadWorkbook(f *testing.F) {
	head := textRow(1, "sample", "when", "raw")
	f.Add(head+`<row r="2"><c t="s"><v>0</v></c><c><v>46083.34375</v></c><c><v>-25.1</v></c></row>`, `<t>A</t>`)
	f.Add(head+`<row r="3"><c r="A3" t="str"><f>B1</f><v>A</v></c><c r="B3" t="d"><v>2026-03-02T08:15:00</v></c><c r="C3"><f>1</f></c></row>`, `<r><t>x</t></r><rPh><t>y</t></rPh>`)
	f.Add(head+`<row><c t="b"><v>1</v></c><c t="e"><v>#N/A</v></c><c t="n"><v>1E+2</v></c></row><row r="2"/>`, ``)
	f.Add(`<![CDATA[x]]><!-- y --><row r="1"><c r="XFD1"><v>&amp;</v></c></row>`, `&lt;`)
	m := plainMapping()
	m.Columns.Time = "when"
	f.Fuzz(func(t *testing.T, sheet, shared string) {
		book := miniWorkbook(t, sheet, shared)
		table, err := ReadTable(m, "fuzzed.xlsx", book)
		wantRefusalOrReadings(t, table, err)
		SuggestMapping("fuzzed.xlsx", book, []string{"d13C"})
	})
}

// FuzzReadArchive changes the archive itself.
func FuzzReadArchive(f *testing.F) {
	for _, folder := range []string{"good", "broken"} {
		for _, name := range sessionNames(f, folder) {
			if filepath.Ext(name) == ".xlsx" {
				_, data := session(f, folder, name)
				f.Add(data)
			}
		}
	}
	m := plainMapping()
	m.Format = formatXLSX
	f.Fuzz(func(t *testing.T, data []byte) {
		table, err := ReadTable(m, "fuzzed.xlsx", data)
		wantRefusalOrReadings(t, table, err)
	})
}

func FuzzReadReadingsJSON(f *testing.F) {
	f.Add([]byte(`{"readings":[{"name":"A","role":"anchor","position":3,"time":"2026-03-02T08:15:00Z","quantity":"d13C","raw":-10.450,"u":null}]}`))
	f.Add([]byte(`{"readings":[{"name":"A","quantity":"d13C","raw":1,"raw":2,"x":{"y":[1,{}]}}]}`))
	f.Add([]byte(`{"readings":[{"name":"\ud83d\ude00","quantity":"\u00e9","raw":1e-400}]}`))
	f.Fuzz(func(t *testing.T, data []byte) {
		table, err := ReadReadingsJSON(data)
		wantRefusalOrReadings(t, table, err)
		if err != nil {
			return
		}
		// What was read is written and read again without change.
		text, err := json.Marshal(map[string]any{"readings": table.Readings})
		if err != nil {
			t.Fatal(err)
		}
		again, err := ReadReadingsJSON(text)
		if err != nil {
			t.Fatalf("%v in %s", err, text)
		}
		if diff := cmp.Diff(table.Readings, again.Readings); diff != "" {
			t.Fatal(diff)
		}
	})
}

func FuzzDecodeFit(f *testing.F) {
	f.Add([]byte(fitExample))
	f.Add([]byte(iso28037Body))
	f.Add([]byte(`{"anchors":[{"material":"A","value":1,"u":1,"nu":3}],"readings":[{"role":"gas","raw":1}],"cross_covariance":[[1],[2]],"reading_covariance":[]}`))
	f.Fuzz(func(t *testing.T, data []byte) {
		request, err := DecodeFit(data)
		if err != nil {
			wantRefusalOrReadings(t, registry.ReadingTable{}, err)
			return
		}
		for _, m := range [][][]float64{request.AnchorCovariance, request.ReadingCovariance, request.CrossCovariance} {
			if m != nil && len(m) == 0 {
				return // an empty matrix is not written, and refused by its shape
			}
		}
		text, err := json.Marshal(request)
		if err != nil {
			t.Fatal(err)
		}
		again, err := DecodeFit(text)
		if err != nil {
			t.Fatalf("%v in %s", err, text)
		}
		if diff := cmp.Diff(request, again); diff != "" {
			t.Fatal(diff)
		}
		s, _, _, err := request.Session()
		if err != nil {
			wantRefusalOrReadings(t, registry.ReadingTable{}, err)
			return
		}
		if len(s.Readings) != len(request.Readings) || len(s.Anchors) != len(request.Anchors) {
			t.Fatalf("session of %d readings and %d anchors", len(s.Readings), len(s.Anchors))
		}
		if len(s.Readings) > 60 || len(s.Anchors) > 10 {
			return // larger fits only take longer
		}
		answer, err := AnswerFit(request)
		if err != nil {
			wantRefusalOrReadings(t, registry.ReadingTable{}, err)
			return
		}
		if _, err := json.Marshal(answer); err != nil {
			t.Fatalf("the answer cannot be written: %v", err)
		}
	})
}

func FuzzReadSamples(f *testing.F) {
	f.Add([]byte("client,label,wanted,matrix,note\nFen,A1,\"d13C-VPDB, d15N-AIR\",peat,\"a, b\"\n"))
	f.Add([]byte("\ufeffLabel;Client;Wanted\r\nA1;Fen;d13C-VPDB\r\n"))
	f.Add([]byte("label\tclient\twanted\rA\tB\tC\r"))
	f.Fuzz(func(t *testing.T, data []byte) {
		list, err := ReadSamples("fuzzed", data)
		if err != nil {
			wantRefusalOrReadings(t, registry.ReadingTable{}, err)
			return
		}
		for _, s := range list {
			if s.Client == "" || s.Label == "" || len(s.Wanted) == 0 || s.Row < 2 {
				t.Fatalf("sample %+v", s)
			}
		}
	})
}

func FuzzSuggestMapping(f *testing.F) {
	for _, name := range sessionNames(f, "good") {
		_, data := session(f, "good", name)
		f.Add(data)
	}
	f.Add([]byte("made in the north hall;;\nSample;Date;δ13C\nA;23.03.2026 08:15;-33,1\n"))
	f.Fuzz(func(t *testing.T, data []byte) {
		m, notes := SuggestMapping("fuzzed", data, []string{"d13C", "d15N"})
		for _, n := range notes {
			if n.Place == "" || n.Found == "" || n.Expected == "" {
				t.Fatalf("note %+v", n)
			}
		}
		if len(m.Quantities) == 2 {
			table, err := ReadTable(m, "fuzzed", data)
			wantRefusalOrReadings(t, table, err)
		}
	})
}

func FuzzReadNumber(f *testing.F) {
	for _, s := range []string{"-25.1", "−0.00 ‰", "1.234,5", "5e-3", "+.5", "1e400", "\u00a05\u2009‰", "–5", "1 000"} {
		f.Add(s, true)
		f.Add(s, false)
	}
	f.Fuzz(func(t *testing.T, s string, point bool) {
		decimal, other := byte(','), byte('.')
		if point {
			decimal, other = other, decimal
		}
		x, expected := readNumber(s, decimal, true)
		if expected != "" {
			return
		}
		if math.IsNaN(x) || math.IsInf(x, 0) || (x == 0 && math.Signbit(x)) {
			t.Fatalf("%q read as %v", s, x)
		}
		// What holds a decimal sign is read under that sign alone.
		if strings.ContainsRune(s, rune(decimal)) {
			if y, expected := readNumber(s, other, true); expected == "" {
				t.Fatalf("%q read as %v and as %v", s, x, y)
			}
		}
		written := strings.Replace(FormatNumber(x), ".", string(rune(decimal)), 1)
		if y, expected := readNumber(written, decimal, true); expected != "" || y != x {
			t.Fatalf("%q is %v, written %q, read as %v %s", s, x, written, y, expected)
		}
	})
}

func FuzzReadTime(f *testing.F) {
	f.Add("2026-10-25 03:30:00", "", "Europe/Helsinki")
	f.Add("25.10.2026 3:30", "DD.MM.YYYY hh:mm", "Australia/Lord_Howe")
	f.Add("2011-12-30T12:00:00.5", "", "Pacific/Apia")
	f.Fuzz(func(t *testing.T, text, layout, zone string) {
		if strings.ContainsAny(zone, `\.`) {
			return // only names that could be zones
		}
		k, zoneExpected, layoutExpected := newClock(zone, layout)
		if zoneExpected != "" || layoutExpected != "" {
			return
		}
		i, expected := k.read(text)
		if expected != "" {
			return
		}
		// The same moment written with its offset is the same moment. Offsets with
		// seconds (local mean times of long ago) cannot be written that way.
		local := i.Time().In(k.zone)
		if _, offset := local.Zone(); offset%60 != 0 || local.Year() < 1 || local.Year() > 9999 {
			return
		}
		again, expected := k.read(local.Format(time.RFC3339Nano))
		if expected != "" || again != i {
			t.Fatalf("%q read as %s, with its offset as %s %s", text, i, again, expected)
		}
	})
}
