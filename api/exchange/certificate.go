package exchange

import (
	"fmt"
	"html/template"
	"io"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A certificateStatement is one sentence that page and XML both carry.
type certificateStatement struct{ name, text string }

func certificateStatements(c registry.Certificate) []certificateStatement {
	var out []certificateStatement
	add := func(name, text string) {
		if strings.TrimSpace(text) != "" {
			out = append(out, certificateStatement{name, text})
		}
	}
	add("storage", c.Storage)
	add("preparation", c.Preparation)
	if m := c.MinimumPortion; m != nil {
		add("minimum portion", string(m.Value)+" "+m.Unit)
	}
	var hazards []string
	for _, h := range c.Hazards {
		hazards = append(hazards, strings.TrimSpace(h.Code+" "+h.Text))
	}
	add("hazards", strings.Join(hazards, " "))
	add("safety", c.Caution)
	add("uncertainty", "U is the expanded uncertainty, k times the standard uncertainty u, with the coverage probability p stated beside it. It holds for any one unit within the validity.")
	add("units", "Deltas are stated in per mil (‰, the value of δ multiplied by 1000) and, for machines, in the unit one.")
	add("use", "Results that decide on health, food fraud or law belong to accredited practice.")
	return out
}

// basisText says where a value comes from, in words.
func basisText(v registry.CertificateValue) string {
	var parts []string
	if v.BackLoaded {
		parts = append(parts, "assigned before deltamoor")
	}
	if v.Campaign != "" {
		parts = append(parts, "campaign "+store.FormatCode(v.Campaign))
	} else {
		parts = append(parts, v.Basis)
	}
	if v.Deviation != "" {
		parts = append(parts, "deviation from the plan: "+v.Deviation)
	}
	if v.DriftPerDay != nil {
		parts = append(parts, fmt.Sprintf("the value changes by %s ‰ a day", FormatNumber(*v.DriftPerDay)))
	}
	return strings.Join(parts, "; ")
}

// certificatePage is a fragment without style of its own: whoever shows it
// brings that, and it prints well without.
var certificatePage = template.Must(template.New("certificate").Funcs(template.FuncMap{
	"day": day, "code": store.FormatCode, "number": FormatNumber, "basis": basisText,
	"stated": func(at *store.Instant) string {
		if at == nil {
			return ""
		}
		return day(*at)
	},
	"percent": func(x float64) float64 { return 100 * x },
	"nu":      FormatOptional, "known": func(x *float64) bool { return x == nil },
}).Parse(`<article class="certificate">
<h1>Reference material {{.Certificate.Material}}: assigned values</h1>
<p>{{.Certificate.LaboratoryName}} (laboratory {{.Certificate.Laboratory}}), {{day .Certificate.IssuedAt}}. Certificate {{.Certificate.Identifier}}.</p>
<table class="material"><caption>Material</caption>
<tr><th scope="row">Name</th><td>{{.Certificate.Name}}</td></tr>
{{with .Certificate.Substance}}<tr><th scope="row">Substance</th><td>{{.}}</td></tr>
{{end}}{{with .Certificate.Formula}}<tr><th scope="row">Formula</th><td>{{.}}</td></tr>
{{end}}{{with .Certificate.Matrix}}<tr><th scope="row">Matrix</th><td>{{.}}</td></tr>
{{end}}{{with .Certificate.Producer}}<tr><th scope="row">Producer</th><td>{{.}}</td></tr>
{{end}}{{with .Certificate.Lot}}<tr><th scope="row">Lot</th><td>{{.}}</td></tr>
{{end}}</table>
<table class="values"><caption>Values</caption>
<thead><tr><th scope="col">Scale</th><th scope="col">Measurand</th><th scope="col" class="number">Value (‰)</th><th scope="col" class="number">U (‰)</th><th scope="col" class="number">k</th><th scope="col">Valid from</th><th scope="col">Valid until</th><th scope="col">Basis</th></tr></thead>
<tbody>
{{range .Certificate.Values}}<tr><th scope="row">{{.Scale}}</th><td>{{.Measurand}}</td><td class="number">{{.ValueText}}</td><td class="number">{{.ExpandedText}}</td><td class="number">{{printf "%.2f" .K}}</td><td class="day">{{stated .ValidFrom}}</td><td class="day">{{stated .ExpiresAt}}</td><td>{{basis .}}</td></tr>
{{end}}</tbody></table>
{{range .Certificate.Values}}<section><h2>{{.Scale}} ({{.Measurand}})</h2>
<p class="stated"><span><b>{{.ValueText}} ‰</b></span><span>U = {{.ExpandedText}}{{if ne .U 0.0}} ‰{{end}}</span>{{if ne .U 0.0}}<span>k = {{printf "%.2f" .K}}</span><span>p = {{number .P}}</span>{{end}}</p>
<p class="quiet">In full: {{.Value}} ‰{{if eq .U 0.0}} ({{if .Exact}}exact by definition{{else}}no uncertainty is stated{{end}}){{else}}, u = {{number .U}} ‰ (k = 1), U = {{number .Expanded}} ‰ (k = {{number .K}}, p = {{number .P}}{{if known .NuEff}}, u is known{{else}}, effective degrees of freedom {{nu .NuEff}}{{end}}){{end}}. Version {{.Code}}.{{.Version}}, SHA-256 <code>{{.Hash}}</code>.</p>
{{if .Budget}}<table class="budget"><caption>Budget</caption><thead><tr><th scope="col">Part</th><th scope="col" class="number">u (‰)</th><th scope="col" class="number">Share of u²</th></tr></thead><tbody>
{{range .Budget}}<tr><th scope="row">{{.Line}}</th><td class="number">{{printf "%.3g" .StandardUncertainty}}</td><td class="number">{{printf "%.1f" (percent .Share)}} %</td></tr>
{{end}}</tbody></table>
{{end}}{{if .Campaign}}<p>Campaign {{code .Campaign}}: {{.Sessions}} sessions, {{stated .First}} to {{stated .Last}}. Homogeneity: {{.Homogeneity}}. Stability: {{.Stability}}.{{with .MinimumPortion}} Test portions up to {{number .}} mg were measured; smaller ones were not shown to be enough.{{end}}</p>
{{else}}{{with .Evidence}}<p>{{.}}</p>
{{end}}{{end}}{{if .Anchors}}<table class="anchors"><caption>Traceable through</caption><thead><tr><th scope="col">Value</th><th scope="col">Delta (‰)</th><th scope="col">u (‰)</th><th scope="col">Basis</th></tr></thead><tbody>
{{range .Anchors}}<tr><th scope="row">{{.Version}}</th><td>{{.Value}}</td><td>{{number .U}}</td><td>{{.Basis}}</td></tr>
{{end}}</tbody></table>
{{end}}</section>
{{end}}<dl class="statements">
{{range .Statements}}<dt>{{.Name}}</dt><dd>{{.Text}}</dd>
{{end}}</dl>
<table class="signatures"><caption>Signatures</caption><tbody>
{{range .Certificate.Signatures}}<tr><th scope="row">{{.Name}}</th><td>{{.Meaning}}</td><td>{{.Of}}</td><td>{{day .At}}</td></tr>
{{end}}</tbody></table>
</article>
`))

// writeCertificate writes a certificate as a fragment of HTML.
func writeCertificate(w io.Writer, c registry.Certificate) error {
	type statement struct{ Name, Text string }
	page := struct {
		Certificate registry.Certificate
		Statements  []statement
	}{Certificate: c}
	for _, s := range certificateStatements(c) {
		page.Statements = append(page.Statements, statement{s.name, s.text})
	}
	if err := certificatePage.Execute(w, page); err != nil {
		return fmt.Errorf("write certificate of %s: %w", c.Material, err)
	}
	return nil
}
