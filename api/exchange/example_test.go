package exchange_test

import (
	"fmt"
	"strings"

	"deltamoor/api/exchange"
	"deltamoor/store"
)

func ExampleReadTable() {
	mapping := store.Mapping{
		Delimiter: ";", Decimal: ",", Zone: "Europe/Helsinki", TimeLayout: "DD.MM.YYYY hh:mm",
		Columns:    store.Columns{Name: "sample", Time: "measured"},
		Quantities: []store.QuantityColumns{{Quantity: "d13C", Raw: "d13C raw"}},
	}
	file := "sample;measured;d13C raw\nMOOR-1;2.3.2026 8:15;−33,10 ‰\n"
	table, err := exchange.ReadTable(mapping, "session.csv", []byte(file))
	if err != nil {
		fmt.Println(err)
		return
	}
	r := table.Readings[0]
	fmt.Println(r.Name, r.Quantity, r.Raw, r.Time)
	fmt.Println(table.Place(0, "raw"))

	_, err = exchange.ReadTable(mapping, "session.csv", []byte(file+"MOOR-1;29.3.2026 3:30;n/a\n"))
	fmt.Println(err)
	// Output:
	// MOOR-1 d13C -33.1 2026-03-02T06:15:00Z
	// row 2, column "d13C raw"
	// read session.csv: nothing was imported
	//   row 3, column "measured": found "29.3.2026 3:30", expected a time that exists in Europe/Helsinki: clocks were put forward over this one
	//   row 3, column "d13C raw": found "n/a", expected a number with the decimal sign ","
}

func ExampleWriteCSV() {
	rows := func(yield func([]string, error) bool) {
		_ = yield([]string{"D7K3M-9Q2XG", exchange.FormatNumber(-25.1), "=1+1"}, nil)
	}
	var file strings.Builder
	if err := exchange.WriteCSV(&file, []string{"code", "value", "label"}, rows); err != nil {
		fmt.Println(err)
	}
	fmt.Print(strings.ReplaceAll(file.String(), "\r\n", "\n"))
	// Output:
	// code,value,label
	// D7K3M-9Q2XG,-25.1,'=1+1
}
