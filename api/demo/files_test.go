package demo

import (
	"bytes"
	"math"
	"testing"

	"deltamoor/api/exchange"
	"deltamoor/store"
)

func TestFilesAreReadAsTheyWereWritten(t *testing.T) {
	for name, mapping := range map[string]*store.Mapping{"Latin-1 with decimal commas": combustionMapping(), "UTF-8 with commas": furnaceMapping(), "workbook": workbookMapping()} {
		t.Run(name, func(t *testing.T) {
			quantity := mapping.Quantities[0].Quantity
			rows := []row{
				{seat: seat{subject: "OV-KELP", role: firstRole(*mapping), unit: "OV-KELP jar 1", amount: 2000}, position: 1, at: at(4, 14, 17), raw: map[string]float64{quantity: -0.125}, size: map[string]float64{quantity: 21.5}},
				{seat: seat{subject: "P", name: "A1, or so; \"odd\"", amount: 150, remark: "queue"}, position: 2, at: at(4, 14, 18), raw: map[string]float64{quantity: 1234.5}, size: map[string]float64{quantity: 0.25}},
			}
			table, err := layOut(*mapping, rows, map[string]int{quantity: 3})
			if err != nil {
				t.Fatal(err)
			}
			data, err := fileOf(*mapping, table)
			if err != nil {
				t.Fatal(err)
			}
			again, err := fileOf(*mapping, table)
			if err != nil || !bytes.Equal(data, again) {
				t.Errorf("writing twice gives different bytes, error %v", err)
			}
			read, err := exchange.ReadTable(*mapping, "file", data)
			if err != nil {
				t.Fatal(err)
			}
			if len(read.Readings) != len(rows) || len(read.Ignored) > 0 {
				t.Fatalf("%d readings, columns ignored %v; want %d and none", len(read.Readings), read.Ignored, len(rows))
			}
			for i, want := range rows {
				got := read.Readings[i]
				name := want.name
				if name == "" {
					name = want.subject
				}
				if got.Name != name || got.Unit != want.unit || got.Warning != want.remark || got.Quantity != quantity || got.Raw != want.raw[quantity] ||
					got.Size == nil || *got.Size != want.size[quantity] || got.Amount == nil || *got.Amount != want.amount/1000 || got.Position == nil || *got.Position != want.position ||
					got.Time == nil || !got.Time.Time().Equal(want.at) || (got.Role == "conditioning") != (want.role != "") {
					t.Errorf("row %d came back as %+v, want %+v", i+1, got, want)
				}
			}
		})
	}
}

func firstRole(m store.Mapping) string {
	for word, role := range m.RoleWords {
		if role == "conditioning" {
			return word
		}
	}
	return ""
}

// The working gas's relation in ratios: (1 + δ_true) = (1 + δ_raw)(1 + δ_gas),
// metrology of the delta against a working gas; the expected value is that
// equation solved by hand for −100 ‰ against a gas at −50 ‰: 0.9/0.95 − 1.
func TestChannelKeepsTheWorkingGasRelation(t *testing.T) {
	c := channel{gas: -50, stretch: 1}
	if got, want := c.raw(-100, 3, 7, 99, 0), (0.9/0.95-1)*1000; math.Abs(got-want) > 1e-10 {
		t.Errorf("raw delta %.12f ‰, want %.12f ‰", got, want)
	}
	c = channel{stretch: 1, drift: 0.5, size: 0.1, reference: 5, memory: 0.25}
	// f = −8 + 0.5·2 + 0.1·(7 − 5) = −6.8; r = 0.75·(−6.8) + 0.25·4 + 0.3 = −3.8
	if got := c.raw(-8, 2, 7, 4, 0.3); math.Abs(got+3.8) > 1e-12 {
		t.Errorf("raw delta %.12f ‰, want −3.8 ‰", got)
	}
}
