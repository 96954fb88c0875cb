package exchange

import (
	"bytes"
	"errors"
	"fmt"
	"runtime"
	"strings"
	"testing"
	"time"

	"github.com/xuri/excelize/v2"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// plainMapping reads files with a name and one raw delta.
func plainMapping() store.Mapping {
	return store.Mapping{
		Columns:    store.Columns{Name: "sample"},
		Quantities: []store.QuantityColumns{{Quantity: "d13C", Raw: "raw"}},
	}
}

func wantRefusal(t *testing.T, err error, meaning registry.Meaning, parts ...string) *registry.Error {
	t.Helper()
	var refusal *registry.Error
	if !errors.As(err, &refusal) {
		t.Fatalf("error %v (%T), expected a refusal", err, err)
	}
	if refusal.Meaning != meaning {
		t.Errorf("meaning %s, expected %s: %v", refusal.Meaning, meaning, err)
	}
	for _, p := range parts {
		if !strings.Contains(err.Error(), p) {
			t.Errorf("refusal %q lacks %q", err, p)
		}
	}
	return refusal
}

// manyRows makes a file of n rows, each with the given end.
func manyRows(n int, cells string) []byte {
	var b bytes.Buffer
	b.WriteString("sample,raw\n")
	for i := range n {
		fmt.Fprintf(&b, "S%d,%s\n", i%50, cells)
	}
	return b.Bytes()
}

func TestReadTableNamesTheBoundOfReadings(t *testing.T) {
	exact := manyRows(registry.MaxReadings, "-25.1")
	table, err := ReadTable(plainMapping(), "exact.csv", exact)
	if err != nil || len(table.Readings) != registry.MaxReadings {
		t.Fatalf("%d readings, error %v; expected all %d", len(table.Readings), err, registry.MaxReadings)
	}
	for name, cells := range map[string]string{"good": "-25.1", "faulty": "n/a"} {
		_, err := ReadTable(plainMapping(), name+".csv", manyRows(1_000_000, cells))
		// The heading and MaxReadings rows fit; the next row does not.
		wantRefusal(t, err, registry.TooLarge, "100000 readings", "row 100002")
	}
	m := plainMapping()
	m.Quantities = append(m.Quantities, store.QuantityColumns{Quantity: "d15N", Raw: "raw"})
	_, err = ReadTable(m, "two.csv", manyRows(registry.MaxReadings/2+1, "1"))
	wantRefusal(t, err, registry.TooLarge, "row 50002")
}

func TestReadTableNamesTheBoundOfBytes(t *testing.T) {
	_, err := ReadTable(plainMapping(), "large.csv", make([]byte, registry.MaxUpload+1))
	wantRefusal(t, err, registry.TooLarge, "67108865 bytes", "64 MiB")
}

func TestReadTableListsFiftyFaultsAndCountsTheRest(t *testing.T) {
	_, err := ReadTable(plainMapping(), "faulty.csv", manyRows(10_000, "n/a"))
	refusal := wantRefusal(t, err, registry.Invalid, `row 2, column "raw"`)
	if len(refusal.Complaints) != registry.MaxComplaints || refusal.More != 10_000-registry.MaxComplaints {
		t.Errorf("%d complaints and %d more, expected %d and %d", len(refusal.Complaints), refusal.More, registry.MaxComplaints, 10_000-registry.MaxComplaints)
	}
}

// A workbook of a few kilobytes must not unpack without end, whether the bulk
// of it is one text, tags, shared strings or a part that is read before the sheet.
func TestReadTableNamesTheBoundOfUnpackedBytes(t *testing.T) {
	head := textRow(1, "sample", "raw")
	for name, c := range map[string]struct {
		book []byte
		want string
	}{
		"spaces":  {miniWorkbook(t, head+strings.Repeat(" ", 20<<20)), "a single text of more than 1 MiB"},
		"rows":    {miniWorkbook(t, head+strings.Repeat("<row/>", 4<<20)), "more than the 16777216 bytes"},
		"strings": {miniWorkbook(t, head, strings.Repeat("<t>a</t>", 3<<20)), "more than the 16777216 bytes"},
		"comment": {miniWorkbook(t, head+"<!--"+strings.Repeat("-<", 10<<20)+"-->"), "workbook"},
	} {
		if len(c.book) > 256<<10 {
			t.Fatalf("%s: the bomb has %d bytes", name, len(c.book))
		}
		_, err := ReadTable(plainMapping(), name+".xlsx", c.book)
		wantRefusal(t, err, registry.Invalid, c.want)
	}
}

func TestReadTableRefusesAnArchiveOfTooManyParts(t *testing.T) {
	parts := map[string]string{}
	for i := range maxParts + 1 {
		parts[fmt.Sprint(i)] = ""
	}
	_, err := ReadTable(plainMapping(), "parts.xlsx", zipped(t, parts))
	wantRefusal(t, err, registry.Invalid, "10001 files", "at most 10000")
}

// Reading may not keep the file: a mapped name is a copy.
func TestReadTableKeepsNoPartOfTheFile(t *testing.T) {
	m := plainMapping()
	data := []byte("sample,raw,padding\nS1,-25.1," + strings.Repeat("x", 32<<20) + "\n")
	table, err := ReadTable(m, "wide.csv", data)
	if err != nil {
		t.Fatal(err)
	}
	data = nil
	var memory runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&memory)
	if memory.HeapAlloc > 24<<20 {
		t.Errorf("%d MiB live after reading one reading of a 32 MiB file", memory.HeapAlloc>>20)
	}
	if got := table.Place(0, "raw"); got != `row 2, column "raw"` {
		t.Errorf("place %s", got)
	}
}

func TestPlaceNamesEachFieldByItsOwnColumn(t *testing.T) {
	m, data := session(t, "good", "utf8-comma.csv")
	table, err := ReadTable(m, "utf8-comma.csv", data)
	if err != nil {
		t.Fatal(err)
	}
	// Reading 5 (from 0) is the second quantity of the third row below the headings.
	for field, want := range map[string]string{
		"name": `row 4, column "sample"`, "role": `row 4, column "purpose"`, "raw": `row 4, column "d15N raw"`,
		"u": `row 4, column "d15N u"`, "size": `row 4, column "N size"`, "time": `row 4, column "measured"`,
		"amount": `row 4, column "mass mg"`, "position": `row 4, column "seat"`, "preparation": `row 4, column "portion"`,
		"warning": `row 4, column "remark"`, "unit": "row 4", "peak": "row 4", "analysis": "row 4", "compound": "row 4",
		"retention": "row 4", "group": "row 4", "quantity": "row 4", "no such field": "row 4",
	} {
		if got := table.Place(5, field); got != want {
			t.Errorf("place of %s is %s, expected %s", field, got, want)
		}
	}
	for _, i := range []int{-1, len(table.Readings)} {
		if got := table.Place(i, "raw"); got != "the file" {
			t.Errorf("place of reading %d is %s", i, got)
		}
	}
	if got := (&columns{quantities: []quantityColumns{{when: column{2, "gas"}}}}).of("quantity", 0).heading; got != "gas" {
		t.Errorf("a quantity that a condition chose stands in column %q, expected gas", got)
	}
}

func TestReadTableTakesTheMappingsRoleWordsBeforeTheContracts(t *testing.T) {
	m := plainMapping()
	m.Columns.Role = "what"
	m.RoleWords = map[string]calibRole{"Sample": "gas", "unknown rock": "sample"}
	table, err := ReadTable(m, "roles.csv", []byte("sample,what,raw\nA,SAMPLE,1\nB, Unknown\u00a0Rock ,2\nC,anchor,3\nD,,4\n"))
	if err != nil {
		t.Fatal(err)
	}
	for i, want := range []string{"gas", "sample", "anchor", ""} {
		if got := table.Readings[i].Role; got != want {
			t.Errorf("role %d is %q, expected %q", i, got, want)
		}
	}
	_, err = ReadTable(m, "roles.csv", []byte("sample,what,raw\nA,rock,1\n"))
	wantRefusal(t, err, registry.Invalid, `row 2, column "what"`, `found "rock"`, `a word of the mapping: "Sample", "unknown rock"`)
}

func TestReadTableReadsDayNumbersOfBothWorkbookCalendars(t *testing.T) {
	// ECMA-376 part 1, 18.17.4.1: in the 1900 calendar 1 January 1900 is 1 and
	// the (false) 29 February 1900 is 60; in the 1904 one 1 January 1904 is 0.
	// 2026-03-02 is 46083 and 44621 (counted with date -d: 20514 days after
	// 1970-01-01, which is 25569 and 24107).
	for _, from1904 := range []bool{false, true} {
		f := excelize.NewFile()
		serial := 46083.34375 // 08:15
		if from1904 {
			serial = 44621.34375
			if err := f.SetWorkbookProps(&excelize.WorkbookPropsOptions{Date1904: &from1904}); err != nil {
				t.Fatal(err)
			}
		}
		for i, row := range [][]any{{"sample", "raw", "when", "day", "clock"}, {"A", 1.5, serial, float64(int(serial)), 0.34375}, {"B", 2, "2026-03-02 08:15", "2026-03-02", 0.34375}, {"C", 2, "2026-03-02T08:15:00Z", serial, "08:15:00"}} {
			cell, _ := excelize.CoordinatesToCellName(1, i+1)
			if err := f.SetSheetRow("Sheet1", cell, &row); err != nil {
				t.Fatal(err)
			}
		}
		var b bytes.Buffer
		if err := f.Write(&b); err != nil {
			t.Fatal(err)
		}
		want := store.InstantOf(time.Date(2026, 3, 2, 8, 15, 0, 0, time.UTC))
		for _, columns := range [][2]string{{"when", ""}, {"clock", "day"}} {
			m := plainMapping()
			m.Columns.Time, m.Columns.Date = columns[0], columns[1]
			table, err := ReadTable(m, "days.xlsx", b.Bytes())
			if err != nil {
				t.Fatalf("1904 %v, columns %v: %v", from1904, columns, err)
			}
			for _, r := range table.Readings {
				if *r.Time != want {
					t.Errorf("1904 %v, columns %v, %s: %s, expected %s", from1904, columns, r.Name, r.Time, want)
				}
			}
		}
	}
}

func TestReadTableReadsFormattedTextAndSparseRows(t *testing.T) {
	book := miniWorkbook(t, `<row><c t="s"><v>0</v></c><c t="s"><v>1</v></c></row>`+
		`<row r="3"><c r="A3" t="s"><v>2</v></c><c r="B3" t="str"><f>B1</f><v> -25.5 ‰</v></c></row>`+
		`<row r="9"><c r="B9"><v>-2.5E1</v></c><c r="C9" s="1"/></row>`+
		`<row r="11"><c r="A11" t="inlineStr"><is><r><t>two </t></r><r><t>runs</t></r></is></c></row>`,
		`<r><t>sam</t></r><r><rPr><b/></rPr><t>ple</t></r><rPh sb="0" eb="1"><t>phonetic</t></rPh>`, `<t>raw</t>`, `<t xml:space="preserve"> A </t>`)
	m := plainMapping()
	m.Quantities[0].Optional = true
	_, err := ReadTable(m, "sparse.xlsx", book)
	wantRefusal(t, err, registry.Invalid, `row 9, column "sample": found an empty cell`)
	table, err := ReadTable(m, "sparse.xlsx", miniWorkbook(t, textRow(1, "sample", "raw")+`<row r="3"><c r="A3" t="s"><v>0</v></c><c r="B3" t="str"><f>B1</f><v> -25.5 ‰</v></c></row>`+
		`<row r="11"><c r="A11" t="inlineStr"><is><r><t>two </t></r><r><t>runs</t></r></is></c><c t="n"><v>1e1</v></c></row>`, `<r><t>S</t></r><rPh><t>x</t></rPh><r><t>1</t></r>`))
	if err != nil {
		t.Fatal(err)
	}
	if len(table.Readings) != 2 || table.Readings[0].Name != "S1" || table.Readings[0].Raw != -25.5 || table.Readings[1].Name != "two runs" || table.Readings[1].Raw != 10 {
		t.Errorf("readings %+v", table.Readings)
	}
	if got := table.Place(1, "raw"); got != `row 11, column "raw"` {
		t.Errorf("place %s", got)
	}
}

func TestReadNumberReadsOnlyUnambiguousNumbers(t *testing.T) {
	for _, c := range []struct {
		text    string
		decimal byte
		perMil  bool
		want    float64
	}{
		{"-25.1", '.', true, -25.1}, {"\u221225,1", ',', true, -25.1}, {"\u00a0+3.5\u2009‰", '.', true, 3.5},
		{"−0.00", '.', true, 0}, {"-0", '.', false, 0}, {".5", '.', false, 0.5}, {"5.", '.', false, 5},
		{"1e3", '.', false, 1000}, {"2,5E−3", ',', false, 0.0025}, {"9007199254740993", '.', false, 9007199254740992},
		{"-999.999", '.', true, -999.999}, {"12345.678", '.', true, 12345.678}, {"1e-400", '.', false, 0},
	} {
		got, expected := readNumber(c.text, c.decimal, c.perMil)
		if expected != "" || got != c.want || (got == 0 && 1/got < 0) {
			t.Errorf("%q with %q: %v, %q; expected %v", c.text, c.decimal, got, expected, c.want)
		}
	}
	for _, c := range []struct {
		text    string
		decimal byte
		perMil  bool
	}{
		{"", '.', true}, {"-", '.', true}, {".", '.', true}, {"‰", '.', true}, {"e5", '.', false}, {"1e", '.', false}, {"1e+", '.', false},
		{"1,5", '.', true}, {"1.5", ',', true}, {"1'000", '.', true}, {"1 000", '.', true}, {"1\u00a0000", '.', true}, {"1.000.000", '.', true},
		{"5 ‰", '.', false}, {"5 ‰ ‰", '.', true}, {"5 %", '.', true}, {"—", '.', true}, {"- 5", '.', true}, {"+-5", '.', true}, {"1e5.0", '.', true},
		{"Inf", '.', true}, {"nan", '.', true}, {"0x10", '.', true}, {"1_000", '.', true}, {"٣", '.', true}, {"½", '.', true}, {"1e309", '.', true},
		{strings.Repeat("1", 100), '.', true},
	} {
		if got, expected := readNumber(c.text, c.decimal, c.perMil); expected == "" {
			t.Errorf("%q with %q was read as %v", c.text, c.decimal, got)
		}
	}
}

func TestClockResolvesLocalTimesOnlyWhereTheyHappenedOnce(t *testing.T) {
	// Changes of clocks from the IANA zone rules: Helsinki 2026-03-29 03:00 → 04:00
	// and 2026-10-25 04:00 → 03:00; Lord Howe 2026-04-05 02:00 → 01:30 (half an
	// hour); Apia skipped the whole of 2011-12-30; Kathmandu +05:45.
	for _, c := range []struct{ zone, text, want string }{
		{"Europe/Helsinki", "2026-03-29 02:59:59", "2026-03-29T00:59:59Z"},
		{"Europe/Helsinki", "2026-03-29 03:00:00", ""},
		{"Europe/Helsinki", "2026-03-29 04:00:00", "2026-03-29T01:00:00Z"},
		{"Europe/Helsinki", "2026-10-25 02:59:59", "2026-10-24T23:59:59Z"},
		{"Europe/Helsinki", "2026-10-25 03:00:00", ""},
		{"Europe/Helsinki", "2026-10-25 03:59:59", ""},
		{"Europe/Helsinki", "2026-10-25 04:00:00", "2026-10-25T02:00:00Z"},
		{"Australia/Lord_Howe", "2026-04-05 01:45:00", ""},
		{"Australia/Lord_Howe", "2026-04-05 01:29:00", "2026-04-04T14:29:00Z"},
		{"Pacific/Apia", "2011-12-30 12:00:00", ""},
		{"Asia/Kathmandu", "2026-03-02 08:15:00", "2026-03-02T02:30:00Z"},
		{"", "2026-03-02T08:15", "2026-03-02T08:15:00Z"},
		{"", "2026-03-02 08:15:00.25", "2026-03-02T08:15:00.25Z"},
		{"Europe/Helsinki", "2026-10-25T03:30:00+02:00", "2026-10-25T01:30:00Z"},
		{"", "2026-3-2 8:15:00", "2026-03-02T08:15:00Z"},
		{"", "26-03-02 08:15:00", ""}, {"", "2026-03-02", ""}, {"", "0000-03-02 08:15:00", ""}, {"", "2026-13-02 08:15:00", ""}, {"", "2026-03-02 08:60:00", ""},
	} {
		k, zone, layout := newClock(c.zone, "")
		if zone != "" || layout != "" {
			t.Fatal(zone, layout)
		}
		got, expected := k.read(c.text)
		if c.want == "" {
			if expected == "" {
				t.Errorf("%s in %s was read as %s", c.text, c.zone, got)
			}
			continue
		}
		if expected != "" || got.String() != c.want {
			t.Errorf("%s in %s: %s %q, expected %s", c.text, c.zone, got, expected, c.want)
		}
	}
	for _, layout := range []string{"DD.MM.YYYY", "YYYY-MM-DD hh:mm mm", "MM/DD hh:mm", "YYYYMMDD hhmm YYYY", strings.Repeat(" ", 65)} {
		if _, _, expected := newClock("", layout); expected == "" {
			t.Errorf("layout %q was accepted", layout)
		}
	}
	k, _, _ := newClock("", "YYYYMMDDhhmmss")
	if got, expected := k.read("20260302081500"); expected != "" || got.String() != "2026-03-02T08:15:00Z" {
		t.Errorf("packed layout: %s %s", got, expected)
	}
	if _, expected := k.read("2026032081500"); expected == "" {
		t.Error("a packed time with a digit missing was read")
	}
	if _, zone, _ := newClock("Local", ""); zone == "" {
		t.Error("the machine's own zone was accepted")
	}
}

func TestReadTableMakesWhiteSpaceInNamesPlain(t *testing.T) {
	for text, want := range map[string]string{
		"\u00a0Rübe\u202f \t3\u200b": "Rübe 3", "A\u200bB": "AB", "\"two\nlines\"": "two lines", "plain": "plain", "a  b": "a b",
	} {
		table, err := ReadTable(plainMapping(), "", []byte("sample,raw\n"+text+",1\n"))
		if err != nil {
			t.Fatal(err)
		}
		if got := table.Readings[0].Name; got != want {
			t.Errorf("%q became %q, expected %q", text, got, want)
		}
	}
}

func TestReadTableReportsHowTheBytesWereRead(t *testing.T) {
	// A byte order mark outranks the mapping's encoding; a tab in the headings,
	// where nothing is said, outranks the comma.
	m := plainMapping()
	m.Encoding = "windows-1252"
	table, err := ReadTable(m, "", []byte("\ufeffsample\traw\tnote, free\nÄ\t1\t\n"))
	if err != nil {
		t.Fatal(err)
	}
	if table.Encoding != "utf-8" || table.Delimiter != "\t" || table.Rows != 1 || len(table.Ignored) != 1 || table.Ignored[0] != "note, free" || table.Readings[0].Name != "Ä" {
		t.Errorf("table %+v", table)
	}
}
