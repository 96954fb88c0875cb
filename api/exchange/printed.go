package exchange

import (
	"bytes"
	"crypto/sha256"
	"encoding/base64"
	"fmt"
	"html/template"
	"io"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// printStyle is the whole look of a printed page: A4, one column, figures that
// line up, nothing that needs a script or the network.
const printStyle = `
:root { color-scheme: light; --ink: #16201c; --quiet: #55615c; --rule: #b9c4bf; --mark: #14553f }
@page { size: A4; margin: 16mm 16mm 18mm }
* { box-sizing: border-box }
body { font: 10.5pt/1.42 "Source Sans 3", "Noto Sans", system-ui, sans-serif; color: var(--ink); background: #fff; margin: 0 auto; padding: 1.5rem; max-width: 190mm; overflow-wrap: break-word }
h1 { font-size: 17pt; line-height: 1.2; margin: 0 0 .15rem } h2 { font-size: 12.5pt; margin: 1.4rem 0 .3rem; color: var(--mark) } h3 { font-size: 10.5pt; margin: .9rem 0 .2rem }
p { margin: .35rem 0; max-width: 75ch } .quiet, caption, dt { color: var(--quiet) } code { font-size: .82em; overflow-wrap: anywhere }
table { border-collapse: collapse; width: 100%; margin: .5rem 0 .8rem; font-variant-numeric: tabular-nums } caption { text-align: left; font-size: 9.5pt; padding-bottom: .15rem }
th, td { text-align: left; vertical-align: top; padding: .22rem .6rem .22rem 0; border-bottom: .5pt solid var(--rule); font-weight: normal } thead th { color: var(--quiet); border-bottom: 1pt solid var(--ink); font-size: 9.5pt }
th[scope=row] { font-weight: 600 } .day { white-space: nowrap } .number { text-align: right; white-space: nowrap } .soon { font-weight: 600 }
table.material { width: auto } table.material th { color: var(--quiet); font-weight: normal; padding-right: 1.2rem }
.stated { border: 1pt solid var(--ink); border-left-width: 4pt; border-left-color: var(--mark); padding: .45rem .8rem; margin: .6rem 0 } .stated b { font-size: 15pt } .stated span { margin-right: 1.4rem; white-space: nowrap }
dl { display: grid; grid-template-columns: max-content 1fr; gap: .15rem 1rem; margin: .6rem 0 } dd { margin: 0 }
.safety { border: 1pt solid #8a3b12; padding: .35rem .8rem; margin: .8rem 0 } .safety h2, .safety h3 { color: #8a3b12; margin-top: 0 }
.sheet { break-after: page; margin: 0 auto; width: max-content; max-width: 100% } .sheet svg { display: block; max-width: 100%; height: auto }
footer { margin-top: 1.6rem; border-top: .5pt solid var(--rule); padding-top: .3rem; font-size: 8.5pt; color: var(--quiet) }
section, tr, .stated, .safety, dl > * { break-inside: avoid } h2, h3, caption { break-after: avoid } thead { display: table-header-group }
@media print { body { padding: 0; max-width: none } a { color: inherit; text-decoration: none } body.labels { margin: 0; padding: 0 } }
`

// labelStyle leaves the margins to the sheet, which is in true size.
const labelStyle = `
@page { size: A4; margin: 0 }
body.labels { max-width: 210mm; padding: 0 } body.labels .sheet { width: auto } body.labels .sheet svg { width: 210mm; height: 296.9mm; max-width: none }
`

// PrintPolicy is the content security policy under which printed pages show:
// their own style and nothing else.
func PrintPolicy() string {
	hash := func(style string) string {
		sum := sha256.Sum256([]byte(style))
		return "'sha256-" + base64.StdEncoding.EncodeToString(sum[:]) + "'"
	}
	return "default-src 'none'; style-src " + hash(printStyle) + " " + hash(printStyle+labelStyle) + "; frame-ancestors 'none'; base-uri 'none'; form-action 'none'"
}

var printLayout = template.Must(template.New("layout").Parse(`<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8"/>
<meta name="viewport" content="width=device-width, initial-scale=1"/>
<title>{{.Title}}</title>
<style>{{.Style}}</style>
</head>
<body{{with .Class}} class="{{.}}"{{end}}>
<main>
{{.Body}}</main>
{{with .Foot}}<footer>{{.}}</footer>
{{end}}</body>
</html>
`))

func writePrinted(w io.Writer, title, class, foot string, body []byte) error {
	style := printStyle
	if class == "labels" {
		style += labelStyle
	}
	err := printLayout.Execute(w, struct {
		Title, Class, Foot string
		Style              template.CSS
		Body               template.HTML
	}{title, class, foot, template.CSS(style), template.HTML(body)}) //nolint:gosec // both are made by our own templates, which escape
	if err != nil {
		return fmt.Errorf("write page %q: %w", title, err)
	}
	return nil
}

// WriteCertificatePage writes a certificate as a page for printing.
func WriteCertificatePage(w io.Writer, c registry.Certificate) error {
	var b bytes.Buffer
	if err := writeCertificate(&b, c); err != nil {
		return err
	}
	return writePrinted(w, "Certificate of "+c.Material, "", fmt.Sprintf("Certificate %s, laboratory %s. The registry answers for every version named here.", c.Identifier, c.Laboratory), b.Bytes())
}

// WriteLabelPages writes all sheets of labels as a page, each sheet a sheet of paper.
func WriteLabelPages(w io.Writer, material string, labels []registry.UnitLabel, o LabelOptions) error {
	var b bytes.Buffer
	pages := LabelPages(len(labels), o)
	if pages == 0 {
		b.WriteString("<p>There is no unit that can still be used.</p>\n")
	}
	for page := range pages {
		o.Page = page + 1
		b.WriteString(`<section class="sheet">` + "\n")
		if err := WriteLabels(&b, labels, o); err != nil {
			return err
		}
		b.WriteString("</section>\n")
	}
	return writePrinted(w, "Labels of "+material, "labels", "", b.Bytes())
}

var pageWords = template.FuncMap{
	"day": day, "code": store.FormatCode, "number": FormatNumber, "nu": FormatOptional, "list": func(s []string) string { return strings.Join(s, ", ") },
	"codes": func(s []string) string {
		out := make([]string, len(s))
		for i, c := range s {
			out[i] = store.FormatCode(c)
		}
		return strings.Join(out, ", ")
	},
	"three": func(x float64) string { return fmt.Sprintf("%.3g", x) },
	"words": func(s string) string { return strings.NewReplacer("_", " ").Replace(s) },
	"shown": func(s string) string {
		if code, err := store.ParseCode(s); err == nil && code == s {
			return store.FormatCode(code)
		}
		return s
	},
}

// safetyText is the part of every page that shows how a material is handled.
const safetyText = `{{define "handling"}}{{if or .Hazards .Caution .Storage}}<section class="safety"><h2>Handling {{.Material}}</h2>
{{with .Storage}}<p>Storage: {{.}}</p>
{{end}}{{if .Hazards}}<p>{{range $i, $h := .Hazards}}{{if $i}} {{end}}{{$h.Code}} {{$h.Text}}{{end}}</p>
{{end}}{{with .Caution}}<p>{{.}}</p>
{{end}}</section>
{{end}}{{end}}`

var duePage = template.Must(template.New("due").Funcs(pageWords).Parse(`<h1>What falls due</h1>
<p class="quiet">Laboratory {{.Laboratory}}, within {{number .Days}} days of {{day .Now}}.</p>
{{if .Items}}<table><thead><tr><th scope="col">By</th><th scope="col">What</th><th scope="col">Material</th><th scope="col">Concerns</th><th scope="col">In words</th></tr></thead>
<tbody>
{{range .Items}}<tr><td class="number{{if le .At $.Now}} soon{{end}}">{{day .At}}</td><td>{{words .What}}</td><th scope="row">{{.Material}}</th><td>{{shown .Code}}</td><td>{{.Sentence}}</td></tr>
{{end}}</tbody></table>
{{else}}<p>Nothing.</p>
{{end}}`))

// A DueList is what a printed list of what falls due shows.
type DueList struct {
	Laboratory string
	Days       float64
	Now        store.Instant
	Items      []registry.DueItem
}

// WriteDuePage writes what falls due as a page for printing.
func WriteDuePage(w io.Writer, d DueList) error {
	var b bytes.Buffer
	if err := duePage.Execute(&b, d); err != nil {
		return fmt.Errorf("write the due list: %w", err)
	}
	return writePrinted(w, "What falls due in "+d.Laboratory, "", "", b.Bytes())
}

// A PlanSheet is what a printed plan of a campaign shows.
type PlanSheet struct {
	Laboratory string
	Plan       registry.Item[store.Assignment]
	Prospects  []registry.PlanProspect
	Handling   registry.Handling
	// Without says why nothing can be expected of the plan; "" where it can.
	Without string
}

var planPage = template.Must(template.Must(template.New("plan").Funcs(pageWords).Parse(safetyText)).Parse(`<h1>Campaign {{code .Plan.Code}}: {{.Plan.Value.Title}}</h1>
<p class="quiet">Laboratory {{.Laboratory}}. Plan {{code .Plan.Code}}.{{.Plan.Ref.Version}}, {{.Plan.State}}, stated by {{.Plan.RecordedBy}} on {{day .Plan.RecordedAt}}{{range .Plan.Decisions}}; {{.Value.Act}} by {{.RecordedBy}} on {{day .RecordedAt}}{{end}}.</p>
<table class="material"><caption>What is fixed before the data</caption>
<tr><th scope="row">Candidate</th><td>{{.Plan.Value.Material}}</td></tr>
{{with .Plan.Value.Predecessor}}<tr><th scope="row">Predecessor, measured beside it</th><td>{{.}}</td></tr>
{{end}}<tr><th scope="row">Sessions</th><td>{{.Plan.Value.Sessions}} or more{{with .Plan.Value.Days}}, on {{.}} days or more{{end}}; {{.Plan.Value.Replicates}} portions of the candidate in each</td></tr>
<tr><th scope="row">Methods</th><td>{{list .Plan.Value.Methods}}</td></tr>
{{with .Plan.Value.Instruments}}<tr><th scope="row">Instruments</th><td>{{list .}}</td></tr>
{{end}}{{with .Plan.Value.Units}}<tr><th scope="row">Units drawn</th><td>{{codes .}}</td></tr>
{{end}}{{with .Plan.Value.Note}}<tr><th scope="row">Note</th><td>{{.}}</td></tr>
{{end}}</table>
{{range $i, $q := .Plan.Value.Quantities}}<h2>{{$q.Scale}} ({{$q.Measurand}})</h2>
<dl>
<dt>anchors</dt><dd>{{list $q.Anchors}}{{with $q.Offered}}; on offer {{list .}}{{end}}</dd>
<dt>estimator</dt><dd>{{words $q.Estimator}}, {{$q.Weights}} weights, tests at {{number $q.Level}}</dd>
{{with $q.LongTerm}}<dt>long-term component</dt><dd>{{three .StandardUncertainty}} ‰ of method {{.Method}}.{{.Version}}; the larger of it and the campaign’s own is used</dd>
{{end}}<dt>homogeneity</dt><dd>{{with $q.Homogeneity.NotNeeded}}no study: {{.}}{{else}}{{$q.Homogeneity.Units}} units, each measured {{$q.Homogeneity.Measurements}} times{{end}}</dd>
<dt>stability</dt><dd>{{with $q.Stability.NotNeeded}}no study: {{.}}{{else}}shelf life {{number $q.Stability.ShelfLifeDays}} days{{if $q.Stability.Isochronous}}, units stored for different times and measured together{{end}}{{with $q.Stability.Prior}}; until the study ends u = {{three .StandardUncertainty}} ‰ from: {{.Evidence}}{{end}}{{end}}</dd>
<dt>accepted if</dt><dd>{{with $q.Acceptance}}{{if .Expanded}}U is {{number .Expanded}} ‰ or less. {{end}}{{if .Agreement}}The sessions agree with p of {{number .Agreement}} or more. {{end}}{{if .SessionEffect}}No session is further off than {{number .SessionEffect}} times its u. {{end}}{{end}}The numbers above are reached.</dd>
<dt>assumed</dt><dd>value {{number $q.Planning.Value}} ‰, repeatability {{number $q.Planning.Repeatability}} ‰, between sessions {{number $q.Planning.BetweenSession}} ‰, between units {{number $q.Planning.BetweenUnits}} ‰, {{$q.Planning.AnchorReplicates}} readings of each anchor in a session</dd>
</dl>
{{range $.Prospects}}{{if and (eq .Scale $q.Scale) (eq .Measurand $q.Measurand)}}<p class="stated"><span>expected U <b>{{three .Prospect.Expanded.U}} ‰</b></span><span>k = {{printf "%.2f" .Prospect.Expanded.CoverageFactor}}</span><span>u = {{three .Prospect.StandardUncertainty}} ‰</span></p>
<table><caption>Where it comes from (‰)</caption><thead><tr><th scope="col">Sessions</th><th scope="col">Anchors</th><th scope="col">Homogeneity</th><th scope="col">Stability</th><th scope="col">What more sessions cannot reduce</th></tr></thead>
<tbody><tr><td>{{three .Prospect.SessionUncertainty}}</td><td>{{three .Prospect.AnchorUncertainty}}</td><td>{{three .Prospect.HomogeneityUncertainty}}</td><td>{{three .Prospect.StabilityUncertainty}}</td><td>{{three .Prospect.Unreduced}}</td></tr></tbody></table>
<table><caption>What buys the most</caption><thead><tr><th scope="col">Change of the plan</th><th scope="col" class="number">U falls by (‰)</th><th scope="col" class="number">to (‰)</th></tr></thead>
<tbody>
{{range .Options}}<tr><th scope="row">{{.Change}}</th><td class="number">{{printf "%.4f" .GainU}}</td><td class="number">{{printf "%.4f" .Prospect.Expanded.U}}</td></tr>
{{end}}</tbody></table>
{{end}}{{end}}{{end}}{{with .Without}}<p>Nothing can be expected of it: {{.}}</p>
{{end}}{{template "handling" .Handling}}`))

// WritePlanPage writes the plan of a campaign as a page for printing.
func WritePlanPage(w io.Writer, p PlanSheet) error {
	var b bytes.Buffer
	if err := planPage.Execute(&b, p); err != nil {
		return fmt.Errorf("write the plan of %s: %w", store.FormatCode(p.Plan.Code), err)
	}
	return writePrinted(w, "Campaign "+store.FormatCode(p.Plan.Code), "", fmt.Sprintf("Plan %s.%d, SHA-256 %s.", store.FormatCode(p.Plan.Code), p.Plan.Ref.Version, p.Plan.Hash), b.Bytes())
}
