package exchange

import (
	"strings"
	"testing"
	"time"

	"deltamoor/api/registry"
)

func TestValuesOfBeforeAreReadWithTheirDigits(t *testing.T) {
	comma := "material,scale,value,kind,basis,valid_from,uncertainty,k,evidence\nPEAT-OLD,d13C-VPDB,-27.100,expanded,certificate,2018-01-01,0.10,2,certificate 12\n"
	semicolon := "Material;Scale;Value;Uncertainty;Kind;k;Basis;Valid_from;Evidence\r\nPEAT-OLD;d13C-VPDB;\u221227,100;0,10;expanded;2;certificate;2018-01-01T00:00:00Z;certificate 12\r\n\r\n"
	for name, text := range map[string]string{"commas": comma, "semicolons and decimal commas": semicolon, "tabs": strings.ReplaceAll(comma, ",", "\t")} {
		rows, err := ReadValues("values.csv", []byte(text))
		if err != nil {
			t.Errorf("%s: %v", name, err)
			continue
		}
		r := rows[0]
		if len(rows) != 1 || r.Material != "PEAT-OLD" || r.Value != "-27.100" || r.Stated.Text != "0.10" || r.Stated.Kind != "expanded" || r.Stated.K == nil || *r.Stated.K != 2 || r.Evidence != "certificate 12" {
			t.Errorf("%s: %+v", name, rows)
		}
		if r.ValidFrom == nil || !r.ValidFrom.Time().Equal(time.Date(2018, 1, 1, 0, 0, 0, 0, time.UTC)) {
			t.Errorf("%s: valid from %v", name, r.ValidFrom)
		}
		if got := r.Place("value"); got != `row 2, column "value"` {
			t.Errorf("%s: place %s", name, got)
		}
	}
}

func TestListsOfValuesThatCannotBeReadAreRefusedByPlace(t *testing.T) {
	const head = "material,scale,value,kind,basis,valid_from,n\n"
	for text, want := range map[string]string{
		"":                      "nothing in it",
		head:                    "headings and no rows",
		"material,scale\nA,B\n": `no heading "value"`,
		"material,scal,value,kind,basis,valid_from\n":           `the nearest is "scale"`,
		"material,material,scale,value,kind,basis,valid_from\n": "columns 1 and 2",
		head + "A,d13C-VPDB,1,none,literature,01.02.2018,\n":    `row 2, column "valid_from": found "01.02.2018"`,
		head + "A,d13C-VPDB,1,none,literature,2018-01-01,2.5\n": `row 2, column "n"`,
		head + ",d13C-VPDB,1,none,literature,2018-01-01,\n":     `row 2, column "material"`,
		head + "A,d13C-VPDB,1\n":                                "row 2: found 3 cells",
	} {
		if rows, err := ReadValues("values.csv", []byte(text)); err == nil || registry.MeaningOf(err) != registry.Invalid || !strings.Contains(err.Error(), want) {
			t.Errorf("%q: %v, %v, want %q", text, rows, err, want)
		}
	}
}

func FuzzReadValues(f *testing.F) {
	f.Add([]byte("material,scale,value,kind,basis,valid_from\nA,d13C-VPDB,1,none,literature,2018-01-01\n"))
	f.Add([]byte("PK\x03\x04"))
	f.Fuzz(func(t *testing.T, data []byte) {
		rows, err := ReadValues("fuzz", data)
		if (err == nil) != (len(rows) > 0) {
			t.Errorf("%d rows and error %v", len(rows), err)
		}
	})
}
