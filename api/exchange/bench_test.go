package exchange

import (
	"bytes"
	"fmt"
	"io"
	"testing"

	"github.com/xuri/excelize/v2"
)

// benchmarkRows is a large session file: 5,000 rows of 13 columns, two quantities.
const benchmarkRows = 5_000

func benchmarkTable() [][]string {
	table := [][]string{baseHeadings}
	for i := range benchmarkRows {
		row := append([]string{}, baseRows[i%len(baseRows)]...)
		row[0] = fmt.Sprint(i + 1)
		table = append(table, row)
	}
	return table
}

// BenchmarkReadTableCSV reads 5,000 rows; the metric is rows of the file per second.
func BenchmarkReadTableCSV(b *testing.B) {
	data := []byte(lines(benchmarkTable(), ",", "\n"))
	m := baseMapping()
	b.SetBytes(int64(len(data)))
	b.ReportAllocs()
	for b.Loop() {
		table, err := ReadTable(m, "bench.csv", data)
		if err != nil || len(table.Readings) != 2*benchmarkRows {
			b.Fatal(len(table.Readings), err)
		}
	}
	b.ReportMetric(benchmarkRows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}

// BenchmarkReadTableXLSX reads the same rows from a workbook.
func BenchmarkReadTableXLSX(b *testing.B) {
	f := excelize.NewFile()
	for i, row := range benchmarkTable() {
		cells := make([]any, len(row))
		for j, s := range row {
			if x, ok := readStored(s); ok {
				cells[j] = x
			} else {
				cells[j] = s
			}
		}
		name, _ := excelize.CoordinatesToCellName(1, i+1)
		if err := f.SetSheetRow("Sheet1", name, &cells); err != nil {
			b.Fatal(err)
		}
	}
	var book bytes.Buffer
	if err := f.Write(&book); err != nil {
		b.Fatal(err)
	}
	m := baseMapping()
	b.SetBytes(int64(book.Len()))
	b.ReportAllocs()
	for b.Loop() {
		table, err := ReadTable(m, "bench.xlsx", book.Bytes())
		if err != nil || len(table.Readings) != 2*benchmarkRows {
			b.Fatal(len(table.Readings), err)
		}
	}
	b.ReportMetric(benchmarkRows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}

// BenchmarkStreamXLSXByLibrary is what the spreadsheet library takes to stream
// the same cells as raw texts: the bar for the reader above.
func BenchmarkStreamXLSXByLibrary(b *testing.B) {
	f := excelize.NewFile()
	for i, row := range benchmarkTable() {
		name, _ := excelize.CoordinatesToCellName(1, i+1)
		if err := f.SetSheetRow("Sheet1", name, &row); err != nil {
			b.Fatal(err)
		}
	}
	var book bytes.Buffer
	if err := f.Write(&book); err != nil {
		b.Fatal(err)
	}
	b.ReportAllocs()
	for b.Loop() {
		g, err := excelize.OpenReader(bytes.NewReader(book.Bytes()), excelize.Options{RawCellValue: true})
		if err != nil {
			b.Fatal(err)
		}
		rows, err := g.Rows("Sheet1")
		if err != nil {
			b.Fatal(err)
		}
		n := 0
		for rows.Next() {
			if _, err := rows.Columns(); err != nil {
				b.Fatal(err)
			}
			n++
		}
		if n != benchmarkRows+1 || rows.Close() != nil || g.Close() != nil {
			b.Fatal(n)
		}
	}
	b.ReportMetric(benchmarkRows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}

// BenchmarkWriteCSV writes 5,000 rows of 13 columns.
func BenchmarkWriteCSV(b *testing.B) {
	table := benchmarkTable()
	b.ReportAllocs()
	for b.Loop() {
		if err := WriteCSV(io.Discard, table[0], sequence(table[1:], nil)); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(benchmarkRows*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
}

// BenchmarkReadReadingsJSON reads 10,000 readings.
func BenchmarkReadReadingsJSON(b *testing.B) {
	var body bytes.Buffer
	body.WriteString(`{"readings":[`)
	for i := range 2 * benchmarkRows {
		if i > 0 {
			body.WriteByte(',')
		}
		fmt.Fprintf(&body, `{"name":"MOOR-1","role":"anchor","position":%d,"quantity":"d13C","raw":-33.1,"u":0.05,"size":5.1}`, i)
	}
	body.WriteString(`]}`)
	b.SetBytes(int64(body.Len()))
	b.ReportAllocs()
	for b.Loop() {
		if _, err := ReadReadingsJSON(body.Bytes()); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(2*benchmarkRows*float64(b.N)/b.Elapsed().Seconds(), "readings/s")
}
