package exchange

import (
	"strings"
	"testing"

	"deltamoor/api/registry"
)

func TestStockListsKeepDigitsPlacesAndDecimalCommas(t *testing.T) {
	units, err := ReadUnits("units.csv", []byte("label;material;content;content_unit;container;filling_order\nvial 1;PEAT;0,50;g;vial;3\nvial 2;PEAT;;;;\n"))
	if err != nil {
		t.Fatal(err)
	}
	if u := units[0]; len(units) != 2 || u.Content.Value != "0.50" || u.Content.Unit != "g" || u.Container != "vial" || u.FillingOrder != 3 || units[1].Content != nil || u.Place("label") != `row 2, column "label"` {
		t.Errorf("units %+v", units)
	}
	uses, err := ReadUses("uses.csv", []byte("unit,at,taken,amount_unit,reason\nvial 1,2026-03-04,5.0,mg,weighed\n"))
	if err != nil {
		t.Fatal(err)
	}
	if u := uses[0]; u.Unit != "vial 1" || u.Taken.Value != "5.0" || u.At == nil || u.At.String() != "2026-03-04T00:00:00Z" || u.Left != nil {
		t.Errorf("uses %+v", uses)
	}
	study, place, err := ReadStudy("study.csv", []byte("unit\tvalue\tdays\tsession\nA\t\u221228,10\t180\tMay\n"))
	if err != nil {
		t.Fatal(err)
	}
	if m := study[0]; m.Unit != "A" || m.Value != -28.1 || m.Days != 180 || m.Session != "May" || place(0, "days") != `row 2, column "days"` {
		t.Errorf("study %+v at %s", study, place(0, "days"))
	}
}

func TestStockListsThatCannotBeReadAreRefusedByPlace(t *testing.T) {
	units := func(data string) error { _, err := ReadUnits("u.csv", []byte(data)); return err }
	uses := func(data string) error { _, err := ReadUses("u.csv", []byte(data)); return err }
	study := func(data string) error { _, _, err := ReadStudy("u.csv", []byte(data)); return err }
	for _, c := range []struct {
		read       func(string) error
		text, want string
	}{
		{units, "material,label\n", "headings and no rows"},
		{units, "material,lable\nA,b\n", `the nearest is "label"`},
		{units, "material,label,content\nA,b,1\n", `row 2, column "content_unit": found an empty cell`},
		{units, "material,label,content,content_unit\nA,b,a bit,g\n", `row 2, column "content": found "a bit"`},
		{units, "material,label,filling_order\nA,b,0\n", `row 2, column "filling_order"`},
		{uses, "unit,at\nA,2026-03-04\n", `no heading "reason"`},
		{uses, "unit,reason,at\nA,x,4.3.2026\n", `row 2, column "at": found "4.3.2026"`},
		{uses, "unit,reason\nA,\n", `row 2, column "reason": found an empty cell`},
		{study, "unit,value\nA,\n", `row 2, column "value": found an empty cell`},
		{study, "unit,value\nA,1\n,2\n", `row 3, column "unit": found an empty cell`},
		{study, "unit,value,days\nA,1,soon\n", `row 2, column "days": found "soon"`},
	} {
		if err := c.read(c.text); registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%q: %v, want %q", c.text, err, c.want)
		}
	}
}

func FuzzReadStudy(f *testing.F) {
	f.Add([]byte("unit,value,days\nA,1,0\n"))
	f.Add([]byte("PK\x03\x04"))
	f.Fuzz(func(t *testing.T, data []byte) {
		rows, place, err := ReadStudy("fuzz", data)
		if (err == nil) != (len(rows) > 0) || (err == nil) != (place != nil) {
			t.Errorf("%d rows and error %v", len(rows), err)
		}
	})
}
