package exchange

import (
	"fmt"
	"io"
	"math"
	"slices"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A ReportPage is what the page of a report shows beside its lines.
type ReportPage struct {
	Report       registry.Report
	Facts        registry.ReportFacts
	Completeness registry.Completeness
	// AmendsReason and so on stand in the report itself. Link gives the address of a
	// reported delta's trace, ReportLink of another report; nil shows no links.
	Link       func(code string) string
	ReportLink func(code string) string
}

type reportPageLine struct {
	Code, Address, Label, Sample, Quantity, Scale, Measurand string
	Value, U, Expanded, Coverage, Flags, Conformity, State   string
}

type reportPageData struct {
	Title, Code, Client, Laboratory, Issued, Note, State string
	Amends, AmendsAddress, Reason                        string
	AmendedBy                                            []NamedLink
	Lines                                                []reportPageLine
	Rules                                                []string
	Conforming                                           bool
	Methods                                              MethodsText
	Missing                                              []registry.CompletenessItem
	Items                                                int
}

var reportPage = newPage("report", `{{define "methods"}}{{range .Paragraphs}}<p>{{.}}</p>
{{end}}<table><caption>Anchors</caption><thead><tr><th scope="col">Material</th><th scope="col">Scale</th><th scope="col" class="number">Assigned value (‰)</th><th scope="col" class="number">u (‰)</th><th scope="col" class="number">Sessions</th><th scope="col">Version of the value</th><th scope="col">Source</th></tr></thead><tbody>
{{range .Anchors}}<tr><th scope="row">{{.Material}}{{with .Lot}}, lot {{.}}{{end}}</th><td>{{.Scale}}</td><td class="number">{{.Value}}</td><td class="number">{{.U}}</td><td class="number">{{.Sessions}}</td><td>{{.Version}}</td><td>{{.Source}}{{with .Behind}}; rests on {{.}}{{end}}</td></tr>
{{end}}</tbody></table>
{{if .Controls}}<table><caption>Controls (never in the line)</caption><thead><tr><th scope="col">Material</th><th scope="col">Scale</th><th scope="col" class="number">Accepted (‰)</th><th scope="col" class="number">u (‰)</th><th scope="col" class="number">Found (‰)</th><th scope="col" class="number">Difference (‰)</th><th scope="col" class="number">n</th><th scope="col" class="number">Sessions</th></tr></thead><tbody>
{{range .Controls}}<tr><th scope="row">{{.Material}}</th><td>{{.Scale}}</td><td class="number">{{.Accepted}}</td><td class="number">{{.AcceptedU}}</td><td class="number">{{.Found}}</td><td class="number">{{.Deviation}}</td><td class="number">{{.Analyses}}</td><td class="number">{{.Sessions}}</td></tr>
{{end}}</tbody></table>
{{end}}{{end}}{{define "methodsPage"}}{{template "head" .Title}}<h1>{{.Title}}</h1>
{{template "methods" .Methods}}{{template "foot"}}{{end}}{{template "head" .Title}}<h1>{{.Title}}</h1>
<p>Report {{.Code}} of laboratory {{.Laboratory}} for {{.Client}}, {{.Issued}}.</p>
{{if .Amends}}<p class="notice">This report amends and replaces {{if .AmendsAddress}}<a href="{{.AmendsAddress}}">{{.Amends}}</a>{{else}}{{.Amends}}{{end}}. Reason: {{.Reason}}.</p>
{{end}}{{range .AmendedBy}}<p class="notice">This report is replaced by the amended report {{if .Address}}<a href="{{.Address}}">{{.Name}}</a>{{else}}{{.Name}}{{end}}.</p>
{{end}}{{with .State}}<p class="notice">{{.}}</p>
{{end}}<table><caption>Results</caption>
<thead><tr><th scope="col">Code</th><th scope="col">Label</th><th scope="col">Sample</th><th scope="col">Quantity, scale</th><th scope="col" class="number">Value (‰)</th><th scope="col" class="number">u (‰)</th><th scope="col" class="number">U (‰)</th><th scope="col">k, p</th>{{if .Conforming}}<th scope="col">Conformity</th>{{end}}<th scope="col">Remarks</th></tr></thead>
<tbody>
{{range .Lines}}<tr><th scope="row">{{if .Address}}<a href="{{.Address}}">{{.Code}}</a>{{else}}{{.Code}}{{end}}</th><td>{{.Label}}</td><td>{{.Sample}}</td><td>{{.Quantity}} on {{.Scale}}{{if ne .Measurand "total"}}, {{.Measurand}}{{end}}</td><td class="number">{{.Value}}</td><td class="number">{{.U}}</td><td class="number">{{.Expanded}}</td><td>{{.Coverage}}</td>{{if $.Conforming}}<td>{{.Conformity}}</td>{{end}}<td>{{.Flags}}{{with .State}} {{.}}{{end}}</td></tr>
{{end}}</tbody></table>
<p class="quiet">u is the standard uncertainty, U = k·u the expanded one; both contain the uncertainty of the anchors. Each code stands for its value for ever: what it rests on is found under it.</p>
{{with .Note}}<p>{{.}}</p>
{{end}}{{if .Rules}}<h2>Statement of conformity</h2>
{{range .Rules}}<p>{{.}}</p>
{{end}}{{end}}<h2>How it was measured</h2>
{{template "methods" .Methods}}<h2>Completeness</h2>
{{if .Missing}}<p>Of {{.Items}} things that a reported delta should carry (Skrzypek et al. 2022, doi 10.1515/pac-2021-1108) these are missing:</p>
<ul>{{range .Missing}}<li>{{.Asks}}: {{.Where}}</li>
{{end}}</ul>
{{else}}<p>All {{.Items}} things that a reported delta should carry (Skrzypek et al. 2022, doi 10.1515/pac-2021-1108) are on record.</p>
{{end}}<p class="quiet">Results that decide on health, food fraud or law belong to accredited practice.</p>
{{template "foot"}}`)

// WriteReportPage writes a report as a page of HTML for reading and printing.
// Each column of values has one number of decimals, from two digits of the
// median u of its scale.
func WriteReportPage(w io.Writer, p ReportPage) error {
	r := p.Report
	d := reportPageData{Title: r.Value.Title, Code: store.FormatCode(r.Code), Client: r.Value.Client, Laboratory: r.Laboratory, Note: r.Value.Note,
		Issued: fmt.Sprintf("issued by %s on %s", r.RecordedBy, textMoment(r.RecordedAt)), Methods: DescribeMethods(p.Facts), Conforming: len(r.Value.Conformity) > 0}
	if r.Value.Amends != "" {
		d.Amends, d.Reason = store.FormatCode(r.Value.Amends), strings.TrimSuffix(r.Reason, ".")
		if p.ReportLink != nil {
			d.AmendsAddress = p.ReportLink(r.Value.Amends)
		}
	}
	for _, code := range r.AmendedBy {
		link := NamedLink{Name: store.FormatCode(code)}
		if p.ReportLink != nil {
			link.Address = p.ReportLink(code)
		}
		d.AmendedBy = append(d.AmendedBy, link)
	}
	if r.State == store.Withdrawn {
		d.State = "This report is withdrawn."
		if n := len(r.Decisions); n > 0 && r.Decisions[n-1].Reason != "" {
			d.State = "This report is withdrawn: " + r.Decisions[n-1].Reason + "."
		}
	}
	us := map[string][]float64{}
	for _, l := range r.Lines {
		us[l.Scale] = append(us[l.Scale], l.StandardUncertainty)
	}
	places := map[string]int{}
	for scale, list := range us {
		slices.Sort(list)
		places[scale] = Decimals(list[(len(list)-1)/2])
	}
	for _, l := range r.Lines {
		n := places[l.Scale]
		row := reportPageLine{Code: store.FormatCode(l.Code), Label: l.Label, Sample: store.FormatCode(l.Sample), Quantity: l.Quantity, Scale: l.Scale, Measurand: l.Measurand,
			Value: Fixed(l.Value, n), U: Fixed(l.StandardUncertainty, n), Expanded: Fixed(l.Expanded, n), Coverage: fmt.Sprintf("%.2f, %g %%", l.K, 100*l.Probability), Flags: strings.Join(l.Flags, ", ")}
		if p.Link != nil {
			row.Address = p.Link(l.Code)
		}
		if l.FinalState != store.Approved {
			row.State = "now " + string(l.FinalState)
		}
		if s := l.Conformity; s != nil {
			word := "conforms"
			if !s.Conforms {
				word = "does not conform"
			}
			row.Conformity = fmt.Sprintf("%s (probability of conformance %s)", word, probabilityText(s.Probability))
		}
		d.Lines = append(d.Lines, row)
	}
	for _, rule := range r.Value.Conformity {
		d.Rules = append(d.Rules, registry.ConformityWords(rule))
	}
	for _, it := range p.Completeness.Items {
		if it.State == registry.NotApplicable {
			continue
		}
		d.Items++
		if it.State == registry.Missing {
			d.Missing = append(d.Missing, it)
		}
	}
	if err := reportPage.Execute(w, d); err != nil {
		return fmt.Errorf("write report %s: %w", r.Code, err)
	}
	return nil
}

// WriteMethodsPage writes how a report was measured as a page of its own.
func WriteMethodsPage(w io.Writer, title string, t MethodsText) error {
	return reportPage.ExecuteTemplate(w, "methodsPage", reportPageData{Title: title, Methods: t})
}

// probabilityText never rounds a probability to certainty.
func probabilityText(p float64) string {
	switch {
	case math.IsNaN(p):
		return "unknown"
	case p > 0.9995 && p < 1:
		return "over 99.9 %"
	case p > 0 && p < 0.0005:
		return "under 0.1 %"
	}
	return fmt.Sprintf("%.1f %%", 100*p)
}
