package exchange

import (
	"archive/zip"
	"bytes"
	"encoding/json"
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/xuri/excelize/v2"
	"golang.org/x/text/encoding/charmap"
	"golang.org/x/text/encoding/unicode"

	"deltamoor/store"
)

// sessionFolder holds files as laboratories export them. All of it is invented.
const sessionFolder = "../../testdata/sessions"

// baseHeadings and baseRows are the session that most good files hold: C and N
// of one injection, numbers with a point, times local to Helsinki.
var (
	baseHeadings = []string{"seat", "sample", "purpose", "portion", "measured", "mass mg", "d13C raw", "d13C u", "C size", "d15N raw", "d15N u", "N size", "remark"}
	baseRows     = [][]string{
		{"1", "rinse", "conditioning", "", "2026-03-02 08:15:00", "", "-27.1", "", "4.9", "2.31", "", "1.7", "first seat"},
		{"2", "MOOR-1", "anchor", "MOOR-1 a", "2026-03-02 08:27:00", "0.412", "-33.104", "0.05", "5.12", "-4.52", "0.08", "1.93", ""},
		{"3", "MOOR-2", "anchor", "MOOR-2 a", "2026-03-02 08:39:00", "0.398", "-10.45", "0.05", "5.03", "47.6", "0.1", "1.88", ""},
		{"4", "Rübe 3", "sample", "Rübe 3 a", "2026-03-02 08:51:00", "0.55", "-25.123456789012345", "0.05", "6.2", "0", "0.08", "2.4", `drawer "B", top`},
		{"5", "Rübe 3", "sample", "Rübe 3 b", "2026-03-02 09:03:00", "0.541", "-25.09", "0.05", "6.11", "0.07", "0.08", "2.36", ""},
		{"6", "KELP", "control", "KELP a", "2026-03-02 09:15:00", "0.471", "-18.2", "0.05", "5.4", "9.81", "0.08", "2.05", ""},
		{"7", "MOOR-1", "anchor", "MOOR-1 b", "2026-03-02 09:27:00", "0.405", "-33.07", "0.05", "5.07", "-4.47", "0.08", "1.9", ""},
		{"8", "MOOR-2", "anchor", "MOOR-2 b", "2026-03-02 09:39:00", "0.391", "-10.48", "0.05", "4.98", "47.52", "0.1", "1.85", ""},
	}
)

func baseMapping() store.Mapping {
	return store.Mapping{
		Zone: "Europe/Helsinki",
		Columns: store.Columns{
			Name: "sample", Role: "purpose", Preparation: "portion", Position: "seat", Time: "measured", Amount: "mass mg", Warning: "remark",
		},
		Quantities: []store.QuantityColumns{
			{Quantity: "d13C", Raw: "d13C raw", U: "d13C u", Size: "C size"},
			{Quantity: "d15N", Raw: "d15N raw", U: "d15N u", Size: "N size"},
		},
	}
}

// sessionFile is one file of testdata/sessions with the mapping that reads it.
type sessionFile struct {
	mapping store.Mapping
	data    []byte
	// sameAsBase: the readings must equal those of the base session.
	sameAsBase bool
}

// lines joins cells into delimited text, quoting where the delimiter asks for it.
func lines(rows [][]string, delimiter, end string) string {
	var b strings.Builder
	for _, row := range rows {
		for i, s := range row {
			if i > 0 {
				b.WriteString(delimiter)
			}
			if strings.ContainsAny(s, "\"\n\r"+delimiter) {
				s = `"` + strings.ReplaceAll(s, `"`, `""`) + `"`
			}
			b.WriteString(s)
		}
		b.WriteString(end)
	}
	return b.String()
}

func baseTable() [][]string { return append([][]string{baseHeadings}, baseRows...) }

// altered copies the base table with f applied to each cell below the headings.
func altered(f func(heading, cell string) string) [][]string {
	table := [][]string{slices.Clone(baseHeadings)}
	for _, row := range baseRows {
		out := make([]string, len(row))
		for i, s := range row {
			out[i] = f(baseHeadings[i], s)
		}
		table = append(table, out)
	}
	return table
}

// numeric tells the columns of numbers, and delta those of raw deltas and their u.
func delta(heading string) bool {
	return strings.HasSuffix(heading, "raw") || strings.HasSuffix(heading, " u")
}
func numeric(heading string) bool {
	return delta(heading) || strings.HasSuffix(heading, "size") || heading == "mass mg"
}

func comma(h, s string) string {
	if numeric(h) {
		return strings.Replace(s, ".", ",", 1)
	}
	return s
}

func encoded(t testing.TB, text string, e interface{ Bytes([]byte) ([]byte, error) }) []byte {
	t.Helper()
	b, err := e.Bytes([]byte(text))
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// goodFiles makes every good file.
func goodFiles(t testing.TB) map[string]sessionFile {
	files := map[string]sessionFile{}
	base := func(name string, m store.Mapping, data []byte) {
		files[name] = sessionFile{m, data, true}
	}
	other := func(name string, m store.Mapping, data string) {
		files[name] = sessionFile{m, []byte(data), false}
	}
	base("utf8-comma.csv", baseMapping(), []byte(lines(baseTable(), ",", "\n")))
	base("bare-cr.csv", baseMapping(), []byte(lines(baseTable(), ",", "\r")))
	base("crlf-bom.csv", baseMapping(), []byte("\ufeff"+lines(baseTable(), ",", "\r\n")))

	m := baseMapping()
	m.Encoding, m.Delimiter, m.Decimal = "iso-8859-1", ";", ","
	base("latin1-semicolon.csv", m, encoded(t, lines(altered(comma), ";", "\r\n"), charmap.ISO8859_1.NewEncoder()))

	m = baseMapping()
	m.Format = "tsv"
	base("utf16-bom.tsv", m, encoded(t, lines(baseTable(), "\t", "\r\n"), unicode.UTF16(unicode.LittleEndian, unicode.UseBOM).NewEncoder()))
	m.Encoding = "utf-16be"
	base("utf16be.tsv", m, encoded(t, lines(baseTable(), "\t", "\n"), unicode.UTF16(unicode.BigEndian, unicode.IgnoreBOM).NewEncoder()))

	// Minus signs in turn: U+2212, en dash, hyphen; no-break and thin spaces; per mil.
	minus := []string{"\u2212", "\u2013", "\u2010", "-"}
	n := 0
	typeset := altered(func(h, s string) string {
		if !delta(h) || s == "" {
			return s
		}
		if s == "0" {
			return "\u22120.00\u00a0‰"
		}
		if strings.HasPrefix(s, "-") {
			s = minus[n%len(minus)] + s[1:]
			n++
		}
		return "\u2009" + s + "\u202f‰\u00a0"
	})
	base("unicode-minus.csv", baseMapping(), []byte(lines(typeset, ",", "\n")))

	m = baseMapping()
	m.Encoding, m.Delimiter, m.Decimal = "windows-1252", ";", ","
	dashes := altered(func(h, s string) string {
		if s = comma(h, s); strings.HasSuffix(h, "raw") {
			return strings.Replace(s, "-", "–", 1) + " ‰"
		}
		return s
	})
	base("windows1252-dashes.csv", m, encoded(t, lines(dashes, ";", "\r\n"), charmap.Windows1252.NewEncoder()))

	m = baseMapping()
	m.HeaderRow, m.TimeLayout, m.Columns.Date = 5, "DD.MM.YYYY hh:mm", "day"
	m.RoleWords = map[string]calibRole{"Ecke": "anchor", "Prüfung": "control", "Probe": "sample", "Vorlauf": "conditioning"}
	words := map[string]string{"anchor": "ecke", "control": "Prüfung", "sample": "Probe", "conditioning": "Vorlauf"}
	split := [][]string{append(slices.Clone(baseHeadings), "day", "operator")}
	for _, row := range baseRows {
		row = append(slices.Clone(row), row[4][8:10]+"."+row[4][5:7]+"."+row[4][:4], "m")
		row[4], row[2] = row[4][11:16], words[row[2]]
		split = append(split, row)
	}
	blank := "\n" + strings.Repeat(",", len(split[0])-1) + "\n"
	text := lines(split, ",", "\n")
	at := strings.Index(text, "\n3,") // an empty line and an empty row between readings
	base("preamble-two-columns.csv", m, []byte("Kiln hall, north side\nprinted 2 March 2026,,\n\n\n"+text[:at]+blank+text[at+1:]+"\n"))

	base("workbook.xlsx", workbookMapping(), workbookFile(t))

	// One row for each peak: the gas tells which quantity the row is of.
	peaks := [][]string{{"analysis", "sample", "peak", "gas", "delta raw", "peak size", "retention s"}}
	for i, row := range baseRows[1:4] {
		number := fmt.Sprint(i + 1)
		peaks = append(peaks,
			[]string{number, row[1], "1", "reference", "0.00", "5.0", "21.4"},
			[]string{number, row[1], "2", "N2", row[9], row[11], "64.0"},
			[]string{number, row[1], "3", "CO2", row[6], row[8], "141.2"})
	}
	other("peak-per-row.csv", store.Mapping{
		Columns: store.Columns{Name: "sample", Analysis: "analysis", Peak: "peak", Retention: "retention s"},
		Quantities: []store.QuantityColumns{
			{Quantity: "d13C", Raw: "delta raw", Size: "peak size", When: &store.Condition{Column: "gas", Equals: "CO2"}},
			{Quantity: "d15N", Raw: "delta raw", Size: "peak size", When: &store.Condition{Column: "gas", Equals: "N2"}},
		},
	}, lines(peaks, ",", "\n"))

	m = store.Mapping{
		Zone:       "Europe/Helsinki",
		Columns:    store.Columns{Name: "sample", Time: "measured"},
		Quantities: []store.QuantityColumns{{Quantity: "d2H", Raw: "d2H raw"}, {Quantity: "d18O", Raw: "d18O raw", Optional: true}},
	}
	other("clocks-with-offset.csv", m, "sample,measured,d2H raw,d18O raw\n"+
		"TARN-1,2026-10-25 02:59:30,-180.1,\n"+
		"TARN-1,2026-10-25T03:30:00+03:00,-180.4,-23.1\n"+
		"TARN-1,2026-10-25T03:30:00+02:00,-179.9,\n"+
		"TARN-1,2026-10-25 04:00,-180.2,-23\n")

	// A line break inside a quoted cell and inside a heading; an exponent; no size given.
	m = store.Mapping{
		Format: "csv", Delimiter: "|", Columns: store.Columns{Name: "material name", Warning: "remark"},
		Quantities: []store.QuantityColumns{{Quantity: "d34S", Raw: "d34S raw", Size: "area", Optional: true}},
	}
	other("line-breaks.csv", m, "\"material\nname\"|d34S raw|area|remark\n"+
		"FEN-S1|2.1e1|3.5E-2|\"flow\nlow\"\nFEN-S2|+.5||\nFEN-S3|||lost\n'=FEN|-0|1|")
	return files
}

// workbookMapping reads the second sheet, whose times are day numbers and whose
// deltas are numbers, but for those typed as text with a decimal comma.
func workbookMapping() store.Mapping {
	m := baseMapping()
	m.Sheet, m.Decimal, m.HeaderRow = "Readings", ",", 2
	return m
}

// workbookFile writes the base session as a workbook of two sheets.
func workbookFile(t testing.TB) []byte {
	t.Helper()
	f := excelize.NewFile()
	defer f.Close()
	check := func(err error) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
	}
	check(f.SetSheetName("Sheet1", "About"))
	check(f.SetCellStr("About", "A1", "invented session"))
	_, err := f.NewSheet("Readings")
	check(err)
	check(f.SetCellStr("Readings", "A1", "exported by nobody"))
	for i, h := range baseHeadings {
		name, _ := excelize.CoordinatesToCellName(i+1, 2)
		check(f.SetCellStr("Readings", name, h))
	}
	day0 := time.Date(1899, 12, 30, 0, 0, 0, 0, time.UTC)
	for r, row := range baseRows {
		for i, s := range row {
			name, _ := excelize.CoordinatesToCellName(i+1, r+3)
			h := baseHeadings[i]
			at, timeErr := time.Parse("2006-01-02 15:04:05", s)
			x, numeric := readStored(s)
			switch {
			case s == "":
			case h == "measured" && timeErr == nil:
				check(f.SetCellFloat("Readings", name, at.Sub(day0).Hours()/24, -1, 64))
			case len(s) > 17, h == "d15N raw" && r%2 == 0:
				// What has more digits than the library writes, and every second N: text.
				check(f.SetCellStr("Readings", name, strings.Replace(s, ".", ",", 1)))
			case numeric:
				check(f.SetCellFloat("Readings", name, x, -1, 64))
			default:
				check(f.SetCellStr("Readings", name, s))
			}
		}
	}
	var b bytes.Buffer
	check(f.Write(&b))
	return b.Bytes()
}

// miniWorkbook is the smallest workbook around one sheet's XML and shared strings.
func miniWorkbook(t testing.TB, sheetXML string, shared ...string) []byte {
	t.Helper()
	items := ""
	for _, s := range shared {
		items += "<si>" + s + "</si>"
	}
	const main = `xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main"`
	const relations = `xmlns="http://schemas.openxmlformats.org/package/2006/relationships"`
	const office = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
	return zipped(t, map[string]string{
		"xl/workbook.xml": `<workbook ` + main + ` xmlns:r="` + office + `"><sheets><sheet name="Only" sheetId="1" r:id="rId1"/></sheets></workbook>`,
		"xl/_rels/workbook.xml.rels": `<Relationships ` + relations + `><Relationship Id="rId1" Type="` + office + `/worksheet" Target="worksheets/sheet1.xml"/>` +
			`<Relationship Id="rId2" Type="` + office + `/sharedStrings" Target="sharedStrings.xml"/></Relationships>`,
		"xl/sharedStrings.xml":     `<sst ` + main + `>` + items + `</sst>`,
		"xl/worksheets/sheet1.xml": `<worksheet ` + main + `><sheetData>` + sheetXML + `</sheetData></worksheet>`,
	})
}

func zipped(t testing.TB, parts map[string]string) []byte {
	t.Helper()
	var b bytes.Buffer
	z := zip.NewWriter(&b)
	for _, name := range slices.Sorted(maps.Keys(parts)) {
		w, err := z.Create(name)
		if err == nil {
			_, err = w.Write([]byte(parts[name]))
		}
		if err != nil {
			t.Fatal(err)
		}
	}
	if err := z.Close(); err != nil {
		t.Fatal(err)
	}
	return b.Bytes()
}

// textRow is a row of inline texts.
func textRow(number int, cells ...string) string {
	var b strings.Builder
	fmt.Fprintf(&b, `<row r="%d">`, number)
	for _, c := range cells {
		b.WriteString(`<c t="inlineStr"><is><t>` + c + `</t></is></c>`)
	}
	return b.String() + "</row>"
}

// brokenFiles makes every broken file, with the mapping that it is refused under.
func brokenFiles(t testing.TB) map[string]sessionFile {
	files := map[string]sessionFile{}
	m := store.Mapping{
		Zone:       "Europe/Helsinki",
		Columns:    store.Columns{Name: "sample", Role: "purpose", Position: "seat", Time: "measured"},
		Quantities: []store.QuantityColumns{{Quantity: "d13C", Raw: "d13C raw", U: "d13C u", Size: "C size"}},
	}
	const head = "seat,sample,purpose,measured,d13C raw,d13C u,C size\n"
	const good = "1,MOOR-1,anchor,2026-03-02 08:27:00,-33.1,0.05,5.1\n"
	add := func(name, text string) { files[name] = sessionFile{mapping: m, data: []byte(text)} }
	with := func(name string, change func(*store.Mapping), data []byte) {
		k := m
		change(&k)
		files[name] = sessionFile{mapping: k, data: data}
	}
	asIs := func(*store.Mapping) {}

	add("empty.csv", "")
	add("only-spaces.csv", " \r\n\t\n")
	add("headings-only.csv", head)
	add("no-headings.csv", "\n\n"+head+good)
	with("header-row-beyond.csv", func(m *store.Mapping) { m.HeaderRow = 9 }, []byte(head+good))
	add("missing-headings.csv", "Seat,sample,purpose,measured,δ¹³C Raw,C-size,comment\n1,MOOR-1,anchor,2026-03-02 08:27:00,-33.1,5.1,\n")
	add("duplicate-heading.csv", "seat,sample,purpose,measured,d13C raw,d13C u,C size,d13C raw,note,note\n"+strings.TrimSuffix(good, "\n")+",-33.2,,\n")
	add("semicolons.csv", strings.ReplaceAll(head+good, ",", ";"))
	add("numbers.csv", head+
		"1,MOOR-1,anchor,2026-03-02 08:27:00,n/a,0.05,5.1\n"+
		"2,MOOR-1,anchor,2026-03-02 08:39:00,\"-33,1\",-0.05,5.1\n"+
		"3,MOOR-2,anchor,2026-03-02 08:51:00,\"1,234.5\",0.05,5 100\n"+
		"4,MOOR-2,anchor,2026-03-02 09:03:00,,0.05,5.1 V\n"+
		"5.5,,sample,2026-03-02 09:15:00,-25.1,NaN,—\n"+
		"-6,KELP,sample,2026-03-02 09:27:00,1e400,0x1p-4,1_0\n"+
		"7,KELP,sample,2026-03-02 09:27:00,--5,5 ‰,5 ‰\n"+
		"8,KELP,sample,2026-03-02 09:27:00,#N/A,<0.05,1.2.3\n")
	with("decimal-comma.csv", func(m *store.Mapping) { m.Delimiter, m.Decimal = ";", "," },
		[]byte(strings.ReplaceAll(head, ",", ";")+"1;MOOR-1;anchor;2026-03-02 08:27:00;-33,1;0.05;5.100\n2;MOOR-1;anchor;2026-03-02 08:27:00;1.234,5;0,05;5\u00a0100,5\n"))
	add("roles.csv", head+"1,MOOR-1,Anker,2026-03-02 08:27:00,-33.1,0.05,5.1\n2,MOOR-2,ANCHOR,2026-03-02 08:39:00,-10.4,0.05,5.1\n3,KELP,standard,2026-03-02 08:51:00,-18.2,0.05,5.1\n")
	add("row-lengths.csv", head+"1,MOOR-1,anchor,2026-03-02 08:27:00,-33,1,0.05,5.1\n2,MOOR-1,anchor,2026-03-02 08:39:00,-33.1\n3,MOOR-1,anchor,2026-03-02 08:51:00,-33.1,0.05,5.1,\n")
	add("times.csv", head+
		"1,MOOR-1,anchor,02.03.2026 08:27,-33.1,0.05,5.1\n"+
		"2,MOOR-1,anchor,2026-02-30 08:27:00,-33.1,0.05,5.1\n"+
		"3,MOOR-1,anchor,2026-03-29 03:30:00,-33.1,0.05,5.1\n"+
		"4,MOOR-1,anchor,2026-10-25 03:30:00,-33.1,0.05,5.1\n"+
		"5,MOOR-1,anchor,2026-03-02 08:27:00 PM,-33.1,0.05,5.1\n"+
		"6,MOOR-1,anchor,46083.35,-33.1,0.05,5.1\n"+
		"7,MOOR-1,anchor,2026-03-02 24:00:00,-33.1,0.05,5.1\n")
	with("date-without-time.csv", func(m *store.Mapping) { m.Columns.Date, m.TimeLayout = "day", "YYYY-MM-DD hh:mm" },
		[]byte("seat,sample,purpose,day,measured,d13C raw,d13C u,C size\n1,MOOR-1,anchor,2026-03-02,,-33.1,0.05,5.1\n2,MOOR-1,anchor,,08:39,-33.1,0.05,5.1\n3,MOOR-1,anchor,2026-03-32,08:39,-33.1,0.05,5.1\n"))
	add("open-quote.csv", head+good+"2,\"MOOR-2,anchor,2026-03-02 08:39:00,-10.4,0.05,5.1\n")
	add("stray-quote.csv", head+"1,MOOR-1,anchor,2026-03-02 08:27:00,x,0.05,5.1\n2,vial 5\",anchor,2026-03-02 08:39:00,-10.4,0.05,5.1\n")
	add("latin1-unnamed.csv", strings.ReplaceAll(head+good, "MOOR-1", "R\xfcbe 3"))
	with("not-utf8.csv", func(m *store.Mapping) { m.Encoding = "utf-8" }, []byte(strings.ReplaceAll(head+good, "MOOR-1", "R\xfcbe 3")))
	with("latin1-with-dash.csv", func(m *store.Mapping) { m.Encoding = "iso-8859-1" }, []byte(strings.ReplaceAll(head+good, "-33.1", "\x9633.1")))
	with("windows1252-hole.csv", func(m *store.Mapping) { m.Encoding = "windows-1252" }, []byte(strings.ReplaceAll(head+good, "MOOR-1", "MOOR\x81")))
	utf16 := encoded(t, head+good, unicode.UTF16(unicode.LittleEndian, unicode.IgnoreBOM).NewEncoder())
	with("utf16-unnamed.csv", asIs, utf16)
	with("utf16-odd.csv", func(m *store.Mapping) { m.Encoding = "utf-16le" }, utf16[:len(utf16)-1])
	with("utf16-surrogate.csv", func(m *store.Mapping) { m.Encoding = "utf-16le" }, slices.Concat(utf16[:20], []byte{0x00, 0xd8}, utf16[20:]))
	with("utf32.csv", asIs, []byte{0xff, 0xfe, 0, 0, 's', 0, 0, 0})
	add("garbage.csv", head+"\x01\x02\x03\x7f\x04")
	add("picture.csv", "\x89PNG\r\n\x1a\n\x00\x00\x00\rIHDR")
	add("old-workbook.xls", "\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1")
	with("old-workbook-as.xlsx", func(m *store.Mapping) { m.Format = "xlsx" }, []byte("\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1"))
	with("conditions.csv", func(m *store.Mapping) {
		m.Quantities = []store.QuantityColumns{{Quantity: "d13C", Raw: "d13C raw", When: &store.Condition{Column: "purpose", Equals: "CO2"}}}
	}, []byte(head+good))
	with("mapping.csv", func(m *store.Mapping) {
		m.Format, m.Encoding, m.Delimiter, m.Decimal, m.HeaderRow = "ods", "macintosh", ";;", "'", -1
		m.Zone, m.TimeLayout = "Moon/Mare", "DD.MM. hh:mm"
		m.Columns.Name, m.Columns.Time, m.Columns.Date = "", "", "day"
		m.RoleWords = map[string]calibRole{"Ecke": "corner"}
		m.Quantities = append(m.Quantities, store.QuantityColumns{Quantity: "d13C", When: &store.Condition{}}, store.QuantityColumns{Raw: "x"}, m.Quantities[0])
	}, []byte(head+good))

	book := func(name string, change func(*store.Mapping), sheet string) {
		with(name, change, miniWorkbook(t, sheet))
	}
	heads := textRow(1, "seat", "sample", "purpose", "measured", "d13C raw", "d13C u", "C size")
	const before = `<c t="inlineStr"><is><t>MOOR-1</t></is></c><c t="inlineStr"><is><t>anchor</t></is></c>`
	book("values.xlsx", asIs, heads+
		`<row r="3"><c><v>1</v></c>`+before+`<c><v>46083.352083333</v></c><c t="e"><v>#DIV/0!</v></c><c><f>A1*2</f></c><c t="b"><v>1</v></c></row>`+
		`<row r="4"><c><v>2.5</v></c>`+before+`<c><v>46110.1458333333</v></c><c t="s"><v>7</v></c><c><v>nan</v></c><c t="q"><v>1</v></c></row>`+
		`<row r="7"><c r="A7"><v>3</v></c><c r="C7" t="inlineStr"><is><t>anchor</t></is></c><c r="D7"><v>0.35</v></c><c r="E7"><v>-33.1</v></c></row>`+
		`<row r="8"><c r="A8"><v>3</v></c><c r="B8" t="str"><v>KELP</v></c><c r="E8"><v>-18.2</v></c><c r="J8"><v>1</v></c></row>`)
	book("wrong-sheet.xlsx", func(m *store.Mapping) { m.Sheet = "Readings" }, heads)
	book("headings-only.xlsx", asIs, heads)
	book("broken-off.xlsx", asIs, heads+`<row r="2"><c><v>1</v></c>`+before+`<c><v>46083.35`)
	book("rows-backwards.xlsx", asIs, heads+textRow(4, "1")+textRow(3, "2"))
	book("cells-backwards.xlsx", asIs, heads+`<row r="2"><c r="C2"><v>1</v></c><c r="B2"><v>1</v></c></row>`)
	book("wide.xlsx", asIs, heads+`<row r="2"><c r="XFD2"><v>1</v></c></row>`)
	with("cut.xlsx", asIs, miniWorkbook(t, heads)[:400])
	with("other-zip.xlsx", asIs, zipped(t, map[string]string{"mimetype": "application/vnd.oasis.opendocument.spreadsheet"}))
	with("text-as.xlsx", func(m *store.Mapping) { m.Format = "xlsx" }, []byte(head+good))
	with("workbook-as.csv", func(m *store.Mapping) { m.Format = "csv" }, miniWorkbook(t, heads))
	return files
}

func writeSessionFiles(t *testing.T, folder string, files map[string]sessionFile) {
	t.Helper()
	for name, f := range files {
		mapping, err := json.MarshalIndent(f.mapping, "", "  ")
		if err != nil {
			t.Fatal(err)
		}
		path := filepath.Join(sessionFolder, folder, name)
		for p, b := range map[string][]byte{path: f.data, path + ".mapping.json": append(mapping, '\n')} {
			if err := os.MkdirAll(filepath.Dir(p), 0o755); err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(p, b, 0o644); err != nil {
				t.Fatal(err)
			}
		}
	}
}
