package demo

import (
	"archive/zip"
	"bytes"
	"encoding/xml"
	"fmt"
	"strconv"
	"strings"
	"time"

	"deltamoor/store"
)

// A cell of a file: a text, or a number with its decimals.
type cell struct {
	text   string
	number bool
}

// layOut makes the table that an instrument exports: headings and rows, in the
// columns that the mapping names.
func layOut(m store.Mapping, rows []row, digits map[string]int) ([][]cell, error) {
	at, err := time.LoadLocation(m.Zone)
	if err != nil {
		return nil, fmt.Errorf("zone %q: %w", m.Zone, err)
	}
	layout := strings.NewReplacer("YYYY", "2006", "MM", "01", "DD", "02", "hh", "15", "mm", "04", "ss", "05").Replace(m.TimeLayout)
	if m.TimeLayout == "" {
		layout = time.DateTime
	}
	texts := func(list ...string) []cell {
		var cells []cell
		for _, s := range list {
			cells = append(cells, cell{text: s})
		}
		return cells
	}
	number := func(x float64, decimals int) cell {
		return cell{text: strconv.FormatFloat(x, 'f', decimals, 64), number: true}
	}
	c := m.Columns
	head := texts(c.Position, c.Name, c.Role, c.Unit, c.Preparation, c.Time, c.Amount)
	for _, q := range m.Quantities {
		head = append(head, texts(q.Raw, q.Size)...)
		if q.Intensity != "" {
			head = append(head, texts(q.Intensity, q.GasIntensity, q.GasRatio)...)
		}
	}
	table := [][]cell{append(head, texts(c.Warning)...)}
	for _, r := range rows {
		name := r.name
		if name == "" {
			name = r.subject
		}
		line := []cell{number(float64(r.position), 0)}
		line = append(line, texts(name, r.role, r.unit, portionOf(r), r.at.In(at).Format(layout))...)
		line = append(line, number(r.amount, 0))
		for _, q := range m.Quantities {
			if raw, ok := r.raw[q.Quantity]; ok {
				line = append(line, number(raw, digits[q.Quantity]), number(r.size[q.Quantity], 2))
			} else {
				line = append(line, cell{}, cell{})
			}
			if height, ok := r.height[q.Quantity]; ok && q.Intensity != "" {
				line = append(line, number(height, 3), number(r.gas[q.Quantity][0], 3), number(r.gas[q.Quantity][1], 3))
			} else if q.Intensity != "" {
				line = append(line, cell{}, cell{}, cell{})
			}
		}
		table = append(table, append(line, cell{text: r.remark}))
	}
	return table, nil
}

// portionOf names the portion of a row: one for each position, but where several share one.
func portionOf(r row) string {
	if r.portion != "" {
		return r.portion
	}
	return fmt.Sprintf("k%03d", r.position)
}

// fileOf writes a table in the mapping's own dialect.
func fileOf(m store.Mapping, table [][]cell) ([]byte, error) {
	if m.Format == "xlsx" {
		return workbookOf(m.Sheet, table)
	}
	var b strings.Builder
	for _, line := range table {
		for i, c := range line {
			if i > 0 {
				b.WriteString(m.Delimiter)
			}
			text := c.text
			if c.number {
				text = strings.Replace(text, ".", m.Decimal, 1)
			}
			if strings.ContainsAny(text, "\"\r\n"+m.Delimiter) {
				text = `"` + strings.ReplaceAll(text, `"`, `""`) + `"`
			}
			b.WriteString(text)
		}
		b.WriteString("\r\n")
	}
	if m.Encoding == "iso-8859-1" {
		return latin1(b.String())
	}
	return []byte(b.String()), nil
}

// latin1 writes a text in ISO 8859-1.
func latin1(text string) ([]byte, error) {
	var b []byte
	for _, r := range text {
		if r > 0xff {
			return nil, fmt.Errorf("%q has no place in ISO 8859-1", r)
		}
		b = append(b, byte(r))
	}
	return b, nil
}

// workbookOf writes the least that is a workbook (ECMA-376 part 1): one sheet,
// texts inline, parts stored uncompressed and undated so that equal tables are
// equal bytes on every version of the compressor.
func workbookOf(sheet string, table [][]cell) ([]byte, error) {
	var rows strings.Builder
	for i, line := range table {
		fmt.Fprintf(&rows, `<row r="%d">`, i+1)
		for j, c := range line {
			place := column(j) + strconv.Itoa(i+1)
			switch {
			case c.text == "":
			case c.number:
				fmt.Fprintf(&rows, `<c r="%s"><v>%s</v></c>`, place, c.text)
			default:
				fmt.Fprintf(&rows, `<c r="%s" t="inlineStr"><is><t>%s</t></is></c>`, place, escape(c.text))
			}
		}
		rows.WriteString("</row>")
	}
	const head = `<?xml version="1.0" encoding="UTF-8" standalone="yes"?>` + "\n"
	const main = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
	const links = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
	const packaged = "http://schemas.openxmlformats.org/package/2006/"
	parts := []struct{ name, text string }{
		{"[Content_Types].xml", `<Types xmlns="` + packaged + `content-types"><Default Extension="rels" ContentType="application/vnd.openxmlformats-package.relationships+xml"/>` +
			`<Override PartName="/xl/workbook.xml" ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.sheet.main+xml"/>` +
			`<Override PartName="/xl/worksheets/sheet1.xml" ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.worksheet+xml"/></Types>`},
		{"_rels/.rels", `<Relationships xmlns="` + packaged + `relationships"><Relationship Id="rId1" Type="` + links + `/officeDocument" Target="xl/workbook.xml"/></Relationships>`},
		{"xl/workbook.xml", `<workbook xmlns="` + main + `" xmlns:r="` + links + `"><sheets><sheet name="` + escape(sheet) + `" sheetId="1" r:id="rId1"/></sheets></workbook>`},
		{"xl/_rels/workbook.xml.rels", `<Relationships xmlns="` + packaged + `relationships"><Relationship Id="rId1" Type="` + links + `/worksheet" Target="worksheets/sheet1.xml"/></Relationships>`},
		{"xl/worksheets/sheet1.xml", `<worksheet xmlns="` + main + `"><sheetData>` + rows.String() + `</sheetData></worksheet>`},
	}
	var out bytes.Buffer
	archive := zip.NewWriter(&out)
	for _, p := range parts {
		w, err := archive.CreateHeader(&zip.FileHeader{Name: p.name, Method: zip.Store})
		if err != nil {
			return nil, fmt.Errorf("write workbook part %s: %w", p.name, err)
		}
		if _, err := w.Write([]byte(head + p.text)); err != nil {
			return nil, fmt.Errorf("write workbook part %s: %w", p.name, err)
		}
	}
	if err := archive.Close(); err != nil {
		return nil, fmt.Errorf("write workbook: %w", err)
	}
	return out.Bytes(), nil
}

// column names a spreadsheet column: A … Z, AA …
func column(i int) string {
	name := ""
	for i++; i > 0; i = (i - 1) / 26 {
		name = string(rune('A'+(i-1)%26)) + name
	}
	return name
}

func escape(s string) string {
	var b strings.Builder
	_ = xml.EscapeText(&b, []byte(s)) // a strings.Builder does not fail
	return b.String()
}
