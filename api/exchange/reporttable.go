package exchange

import (
	"archive/zip"
	"bytes"
	"encoding/json"
	"encoding/xml"
	"fmt"
	"io"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A ReportColumn is one column of a report's table with its entry in the data dictionary.
type ReportColumn struct {
	Name, Type  string // Type: string number integer boolean datetime, as Table Schema names them
	Unit        string // "" where it has none
	Description string
	text        func(d registry.ReportedDelta) string
}

// ReportColumns are the columns of a report as a table, in their order. Numbers
// are in full: rounding is for pages.
func ReportColumns() []ReportColumn {
	number := func(f func(registry.ReportedDelta) float64) func(registry.ReportedDelta) string {
		return func(d registry.ReportedDelta) string { return FormatNumber(f(d)) }
	}
	return []ReportColumn{
		{"code", "string", "", "Permanent code of the reported delta.", func(d registry.ReportedDelta) string { return store.FormatCode(d.Code) }},
		{"report", "string", "", "Code of the report.", func(d registry.ReportedDelta) string { return store.FormatCode(d.Report) }},
		{"line", "integer", "", "Index of the line in the report, from 0.", func(d registry.ReportedDelta) string { return strconv.Itoa(d.Line) }},
		{"client", "string", "", "Who the report is for.", func(d registry.ReportedDelta) string { return d.Client }},
		{"label", "string", "", "The client's own name of the sample.", func(d registry.ReportedDelta) string { return d.Label }},
		{"sample", "string", "", "The laboratory's code of the sample.", func(d registry.ReportedDelta) string { return store.FormatCode(d.Sample) }},
		{"quantity", "string", "", "The isotope delta, such as d13C.", func(d registry.ReportedDelta) string { return d.Quantity }},
		{"scale", "string", "", "Delta scale in its realisation, such as d13C-VPDB-LSVEC.", func(d registry.ReportedDelta) string { return d.Scale }},
		{"measurand", "string", "", "What of the sample: total unless it says otherwise.", func(d registry.ReportedDelta) string { return d.Measurand }},
		{"value", "number", "permil", "The delta.", number(func(d registry.ReportedDelta) float64 { return d.Value })},
		{"u", "number", "permil", "Standard uncertainty (k = 1), anchors included.", number(func(d registry.ReportedDelta) float64 { return d.StandardUncertainty })},
		{"k", "number", "", "Coverage factor.", number(func(d registry.ReportedDelta) float64 { return d.K })},
		{"U", "number", "permil", "Expanded uncertainty k·u.", number(func(d registry.ReportedDelta) float64 { return d.Expanded })},
		{"p", "number", "", "Coverage probability of value ± U.", number(func(d registry.ReportedDelta) float64 { return d.Probability })},
		{"nu_eff", "number", "", "Effective degrees of freedom of u; empty where infinite.", func(d registry.ReportedDelta) string { return FormatOptional(d.EffectiveDF) }},
		{"flags", "string", "", "Judgements that travel with the result, by code, separated by spaces.", func(d registry.ReportedDelta) string { return strings.Join(d.Flags, " ") }},
		{"conforms", "boolean", "", "Whether the line conforms by the report's decision rule; empty where none was asked for.", func(d registry.ReportedDelta) string {
			if d.Conformity == nil {
				return ""
			}
			return strconv.FormatBool(d.Conformity.Conforms)
		}},
		{"conformance_probability", "number", "", "Probability that the measurand lies within the tolerance limits; empty where no rule was asked for.", func(d registry.ReportedDelta) string {
			if d.Conformity == nil {
				return ""
			}
			return FormatNumber(d.Conformity.Probability)
		}},
		{"final_state", "string", "", "What became of the reported final value since: approved, superseded, withdrawn.", func(d registry.ReportedDelta) string { return string(d.FinalState) }},
		{"issued_at", "datetime", "", "When the report was issued (RFC 3339, UTC).", func(d registry.ReportedDelta) string { return d.IssuedAt.String() }},
		{"issued_by", "string", "", "Who issued it.", func(d registry.ReportedDelta) string { return d.IssuedBy }},
		{"hash", "string", "", "SHA-256 of the line's canonical bytes, as the report holds it.", func(d registry.ReportedDelta) string { return d.Hash.String() }},
	}
}

func reportRows(r registry.Report) (header []string, rows [][]string) {
	columns := ReportColumns()
	for _, c := range columns {
		header = append(header, c.Name)
	}
	for _, d := range r.Lines {
		row := make([]string, len(columns))
		for i, c := range columns {
			row[i] = c.text(d)
		}
		rows = append(rows, row)
	}
	return header, rows
}

// The names in a package.
const (
	packageDescriptor = "datapackage.json"
	packageTable      = "lines.csv"
)

// WriteReportPackage writes a report as a Data Package (datapackage.org, profile
// tabular-data-package) in one ZIP file: the lines as CSV, and datapackage.json
// with the data dictionary, one field for each column with type, unit and meaning.
func WriteReportPackage(w io.Writer, r registry.Report, licence string) error {
	type field struct {
		Name        string `json:"name"`
		Type        string `json:"type"`
		Unit        string `json:"unit,omitempty"`
		Description string `json:"description"`
	}
	var fields []field
	for _, c := range ReportColumns() {
		fields = append(fields, field{c.Name, c.Type, c.Unit, c.Description})
	}
	header, rows := reportRows(r)
	var table bytes.Buffer
	err := WriteCSV(&table, header, func(yield func([]string, error) bool) {
		for _, row := range rows {
			if !yield(row, nil) {
				return
			}
		}
	})
	if err != nil {
		return fmt.Errorf("write report %s: %w", r.Code, err)
	}
	descriptor := map[string]any{
		"profile": "tabular-data-package", "name": "report-" + strings.ToLower(r.Code), "id": store.FormatCode(r.Code), "title": r.Value.Title, "created": r.RecordedAt.String(),
		"description": "Reported isotope deltas with their uncertainties; value, u and U in per mil, in full digits.",
		"resources": []any{map[string]any{"profile": "tabular-data-resource", "name": "lines", "path": packageTable, "format": "csv", "mediatype": "text/csv", "encoding": "utf-8",
			"bytes": table.Len(), "hash": "sha256:" + hashText(table.Bytes()), "schema": map[string]any{"fields": fields, "primaryKey": "code", "missingValues": []string{""}}}},
	}
	if licence != "" {
		descriptor["licenses"] = []any{map[string]any{"name": licence}}
	}
	text, err := json.MarshalIndent(descriptor, "", "  ")
	if err != nil {
		return err
	}
	return writeZIP(w, []namedFile{{packageDescriptor, append(text, '\n')}, {packageTable, table.Bytes()}})
}

// writeZIP writes files into one archive, the same bytes for the same files.
func writeZIP(w io.Writer, files []namedFile) error {
	z := zip.NewWriter(w)
	for _, f := range files {
		part, err := z.CreateHeader(&zip.FileHeader{Name: f.name, Method: zip.Deflate})
		if err != nil {
			return err
		}
		if _, err := part.Write(f.data); err != nil {
			return err
		}
	}
	return z.Close()
}

// WriteReportXLSX writes a report as a workbook (ECMA-376, Office Open XML): a
// sheet of lines and a sheet with the data dictionary. Numbers are written with
// all the digits that a float64 has, which spreadsheet libraries round to 15.
func WriteReportXLSX(w io.Writer, r registry.Report) error {
	header, rows := reportRows(r)
	columns := ReportColumns()
	numeric := make([]bool, len(columns))
	var dictionary [][]string
	for i, c := range columns {
		numeric[i] = c.Type == "number" || c.Type == "integer"
		dictionary = append(dictionary, []string{c.Name, c.Type, c.Unit, c.Description})
	}
	const head = `<?xml version="1.0" encoding="UTF-8" standalone="yes"?>` + "\n"
	const sheets = "http://schemas.openxmlformats.org/spreadsheetml/2006/main"
	const relations = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
	err := writeZIP(w, []namedFile{
		{"[Content_Types].xml", []byte(head + `<Types xmlns="http://schemas.openxmlformats.org/package/2006/content-types"><Default Extension="rels" ContentType="application/vnd.openxmlformats-package.relationships+xml"/><Default Extension="xml" ContentType="application/xml"/><Override PartName="/xl/workbook.xml" ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.sheet.main+xml"/><Override PartName="/xl/worksheets/sheet1.xml" ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.worksheet+xml"/><Override PartName="/xl/worksheets/sheet2.xml" ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.worksheet+xml"/></Types>`)},
		{"_rels/.rels", []byte(head + `<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships"><Relationship Id="rId1" Type="` + relations + `/officeDocument" Target="xl/workbook.xml"/></Relationships>`)},
		{"xl/workbook.xml", []byte(head + `<workbook xmlns="` + sheets + `" xmlns:r="` + relations + `"><sheets><sheet name="lines" sheetId="1" r:id="rId1"/><sheet name="dictionary" sheetId="2" r:id="rId2"/></sheets></workbook>`)},
		{"xl/_rels/workbook.xml.rels", []byte(head + `<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships"><Relationship Id="rId1" Type="` + relations + `/worksheet" Target="worksheets/sheet1.xml"/><Relationship Id="rId2" Type="` + relations + `/worksheet" Target="worksheets/sheet2.xml"/></Relationships>`)},
		{"xl/worksheets/sheet1.xml", []byte(head + sheetXML(sheets, append([][]string{header}, rows...), numeric))},
		{"xl/worksheets/sheet2.xml", []byte(head + sheetXML(sheets, append([][]string{{"name", "type", "unit", "description"}}, dictionary...), make([]bool, 4)))},
	})
	if err != nil {
		return fmt.Errorf("write report %s as a workbook: %w", r.Code, err)
	}
	return nil
}

// sheetXML writes rows as cells; the first row is text.
func sheetXML(namespace string, rows [][]string, numeric []bool) string {
	var b strings.Builder
	b.WriteString(`<worksheet xmlns="` + namespace + `"><sheetData>`)
	for i, row := range rows {
		fmt.Fprintf(&b, `<row r="%d">`, i+1)
		for j, cell := range row {
			if cell == "" {
				continue
			}
			name := columnName(j) + strconv.Itoa(i+1)
			if i > 0 && numeric[j] {
				fmt.Fprintf(&b, `<c r="%s"><v>%s</v></c>`, name, cell)
				continue
			}
			fmt.Fprintf(&b, `<c r="%s" t="inlineStr"><is><t xml:space="preserve">`, name)
			_ = xml.EscapeText(&b, []byte(cell)) // a strings.Builder takes everything
			b.WriteString(`</t></is></c>`)
		}
		b.WriteString("</row>")
	}
	b.WriteString("</sheetData></worksheet>")
	return b.String()
}

// columnName is the letter name of a spreadsheet's column, from 0.
func columnName(i int) string {
	name := ""
	for i++; i > 0; i = (i - 1) / 26 {
		name = string(rune('A'+(i-1)%26)) + name
	}
	return name
}
