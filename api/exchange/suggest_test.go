package exchange

import (
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// What is proposed for the good files reads them: the same deltas, row by row.
func TestSuggestMappingReadsGoodFiles(t *testing.T) {
	for _, name := range []string{"utf8-comma.csv", "bare-cr.csv", "crlf-bom.csv", "latin1-semicolon.csv", "utf16-bom.tsv", "windows1252-dashes.csv", "unicode-minus.csv"} {
		t.Run(name, func(t *testing.T) {
			_, data := session(t, "good", name)
			m, notes := SuggestMapping(name, data, []string{"d13C", "d15N"})
			table, err := ReadTable(m, name, data)
			if err != nil {
				t.Fatalf("mapping %+v: %v", m, err)
			}
			want := baseReadings()
			if len(table.Readings) != len(want) {
				t.Fatalf("%d readings, expected %d", len(table.Readings), len(want))
			}
			for i, r := range table.Readings {
				if r.Raw != want[i].Raw || r.Name != want[i].Name || r.Quantity != want[i].Quantity || *r.Size != *want[i].Size || !cmp.Equal(r.U, want[i].U) {
					t.Errorf("reading %d: %+v, expected %+v", i, r, want[i])
				}
			}
			if guessed := contains(notes, "import.encoding"); guessed != strings.Contains(name, "1252") && guessed != strings.Contains(name, "latin1") {
				t.Errorf("encoding guessed without saying so, or said without guessing: %v", notes)
			}
		})
	}
}

func contains(notes []registry.Complaint, place string) bool {
	for _, n := range notes {
		if n.Place == place {
			return true
		}
	}
	return false
}

func TestSuggestMappingFindsHeaderRowColumnsAndLayout(t *testing.T) {
	text := "made in the north hall;;;;;;;\n" +
		"Sample;Type;Date;Time;δ13C raw (‰);u d13C;Area C;δ¹⁵N\n" +
		"MOOR-1;anchor;23.03.2026;08:15;-33,1;0,05;5,1;3,25\n" +
		"KELP;control;24.03.2026;08:27;-18,2;0,05;5,0;\n"
	m, notes := SuggestMapping("x.csv", []byte(text), []string{"d13C", "d15N", "d34S"})
	want := store.Mapping{
		Format: "csv", HeaderRow: 2, Encoding: "utf-8", Delimiter: ";", Decimal: ",", TimeLayout: "DD.MM.YYYY hh:mm",
		Columns: store.Columns{Name: "Sample", Role: "Type", Date: "Date", Time: "Time"},
		Quantities: []store.QuantityColumns{
			{Quantity: "d13C", Raw: "δ13C raw (‰)", U: "u d13C", Size: "Area C"}, {Quantity: "d15N", Raw: "δ¹⁵N"}, {Quantity: "d34S"},
		},
	}
	if diff := cmp.Diff(want, m); diff != "" {
		t.Errorf("(-want +got):\n%s", diff)
	}
	if !contains(notes, "row 2") || !contains(notes, "import.zone") {
		t.Errorf("notes %v, expected one on the missing d34S and one on the zone", notes)
	}
}

func TestSuggestMappingSaysWhatItCannotTell(t *testing.T) {
	for _, c := range []struct{ name, text, place string }{
		{"day or month", "sample,time,d13C\nA,03/02/2026 08:15:00,1.5\n", "import.time_layout"},
		{"strange time", "sample,time,d13C\nA,8h15,1.5\n", "import.time_layout"},
		{"two decimal signs", "sample;d13C\nA;1,5\nB;1.5\n", "import.decimal"},
		{"no decimals", "sample;d13C\nA;1\n", "import.decimal"},
		{"no name", "x;d13C\nA;1.5\n", "import.columns.name"},
		{"no headings", "1,2\n3,4\n", "the file"},
		{"nothing", "", "the file"},
		{"picture", "\x89PNG", "the first bytes"},
		{"quotes", "a\"b,c\nd\"e,f\n", "the file"},
	} {
		t.Run(c.name, func(t *testing.T) {
			if m, notes := SuggestMapping(c.name, []byte(c.text), []string{"d13C"}); !contains(notes, c.place) {
				t.Errorf("mapping %+v with notes %v, expected one at %s", m, notes, c.place)
			}
		})
	}
}

func TestSuggestMappingReadsWorkbooks(t *testing.T) {
	_, data := session(t, "good", "workbook.xlsx")
	// Its first sheet holds no table: that is said, and the sheet is for a person to choose.
	if _, notes := SuggestMapping("workbook.xlsx", data, []string{"d13C"}); !contains(notes, "the file") {
		t.Errorf("notes %v", notes)
	}
	book := miniWorkbook(t, textRow(1, "sample", "d13C raw")+`<row r="2"><c t="inlineStr"><is><t>A</t></is></c><c><v>1.25</v></c></row>`)
	m, _ := SuggestMapping("x.xlsx", book, []string{"d13C"})
	table, err := ReadTable(m, "x.xlsx", book)
	if err != nil || len(table.Readings) != 1 || table.Readings[0].Raw != 1.25 {
		t.Errorf("mapping %+v: %+v, %v", m, table.Readings, err)
	}
}
