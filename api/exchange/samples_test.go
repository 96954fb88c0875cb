package exchange

import (
	"bytes"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/xuri/excelize/v2"

	"deltamoor/api/registry"
)

func TestReadSamplesReadsEveryDialect(t *testing.T) {
	want := []SampleRow{
		{Row: 2, Client: "Fen Trust", Label: "A1", Wanted: []string{"d13C-VPDB", "d15N-AIR"}, Matrix: "peat", Note: "dry, cold"},
		{Row: 4, Client: "Loch Lab", Label: "A1", Wanted: []string{"d2H-VSMOW-SLAP"}, Matrix: "water"},
	}
	f := excelize.NewFile()
	for cell, row := range map[string][]any{
		"A1": {"client", "label", "wanted", "matrix", "note"},
		"A2": {"Fen Trust", "A1", "d13C-VPDB d15N-AIR", "peat", "dry, cold"},
		"A4": {"Loch Lab", "A1", "d2H-VSMOW-SLAP", "water"},
	} {
		if err := f.SetSheetRow("Sheet1", cell, &row); err != nil {
			t.Fatal(err)
		}
	}
	var book bytes.Buffer
	if err := f.Write(&book); err != nil {
		t.Fatal(err)
	}
	for name, data := range map[string][]byte{
		"comma.csv": []byte("client,label,wanted,matrix,note\nFen Trust,A1,\"d13C-VPDB, d15N-AIR\",peat,\"dry, cold\"\n\nLoch Lab,A1,d2H-VSMOW-SLAP,water,\n"),
		"semi.csv":  []byte("\ufeff\"Label\";Client ;WANTED;note;matrix\r\nA1;Fen Trust;d13C-VPDB d15N-AIR;dry, cold;peat\r\n;;;;\r\nA1;Loch\u00a0Lab;d2H-VSMOW-SLAP;;water\r\n"),
		"tab.tsv":   []byte("client\tlabel\twanted\tmatrix\tnote\rFen Trust\tA1\td13C-VPDB;d15N-AIR\tpeat\tdry, cold\r\rLoch Lab\tA1\td2H-VSMOW-SLAP\twater\t\r"),
		"list.xlsx": book.Bytes(),
	} {
		got, err := ReadSamples(name, data)
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		if diff := cmp.Diff(want, got); diff != "" {
			t.Errorf("%s (-want +got):\n%s", name, diff)
		}
	}
	if got := want[1].Place("wanted"); got != `row 4, column "wanted"` {
		t.Errorf("place %s", got)
	}
}

func TestReadSamplesRefusesByRowAndColumn(t *testing.T) {
	const head = "client,label,wanted,matrix,note\n"
	for _, c := range []struct{ name, text, want string }{
		{"empty", "", "the file: found nothing in it"},
		{"headings only", head, "headings and no rows"},
		{"first row empty", "\n" + head, "row 1: found no headings, expected the headings client,label,wanted,matrix,note"},
		{"unknown heading", "client,label,wanted,notes\nF,A,s,x\n", `row 1, column "notes": found an unknown heading, expected one of client, label, wanted, matrix, note; the nearest is "note"`},
		{"missing heading", "client,label\nF,A\n", `row 1: found no heading "wanted"`},
		{"heading twice", "client,label,wanted,Label\nF,A,s,B\n", `row 1, column "label": found the heading in columns 2 and 4`},
		{"no label", head + "F,,s,,\n", `row 2, column "label": found an empty cell`},
		{"no scale", head + "F,A,,,\n", `row 2, column "wanted": found an empty cell`},
		{"only separators", head + "F,A,;,,\n", `row 2, column "wanted": found ";"`},
		{"scale twice", head + "F,A,s s,,\n", `row 2, column "wanted": found "s" twice`},
		{"label twice", head + "Fen,A,s,,\nLoch,A,s,,\nfen,A,s,,\n", `row 4, column "label": found "A" of "fen", which row 2 has as well`},
		{"short row", head + "F,A,s\n", "row 2: found 3 cells, expected 5"},
		{"latin 1", "client,label,wanted\nF,\xfc,s\n", "line 2: found the byte 0xFC"},
		{"open quote", head + "F,\"A,s,,\n", "row 2: found a quoted field"},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, err := ReadSamples("list.csv", []byte(c.text))
			wantRefusal(t, err, registry.Invalid, c.want)
		})
	}
}
