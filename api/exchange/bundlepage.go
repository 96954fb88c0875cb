package exchange

import (
	"bytes"
	"context"
	"fmt"
	"html/template"
	"math"
	"strconv"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// packReadmeText tells a person with a text editor what the pack is and how to
// check it by hand.
func packReadmeText(p registry.Pack) []byte {
	var b strings.Builder
	what := "Evidence for the reported delta " + p.Name()
	if p.Value != nil {
		what = "The chain of the assigned value " + p.Name()
	}
	fmt.Fprintf(&b, `%s
of laboratory %s in the registry %s

Open page.html to read what the number rests on. It needs no scripts and no
network.

  page.html      the number, its chain, who stated and who approved what
  versions/      every version in the chain, as the canonical JSON (RFC 8785)
                 that was hashed when it was recorded
  readings/      the readings of each session: one line for each, by number.
                 The session's version holds one SHA-256 for every 64 lines,
                 joined by line feeds
  uploads/       the files that readings were imported from, named by SHA-256
  ledger.json    for each version its entry in the laboratory's ledger, and the
                 audit path (RFC 6962) from there to the ledger's root
  checkpoints/   the roots as they were signed (C2SP signed notes, Ed25519)
  pack.json      every file with its SHA-256

To check it:    deltamoor verify FILE
That needs no database and no network: it hashes every file, follows every
proof to its root, checks the signatures, and computes every calibration,
assigned value and final value again from the readings.

By hand: sha256sum of a file in versions/ is the "hash" in its entry; SHA-256
of a zero byte and the entry is the leaf; the proof leads from the leaf to the
root; the root stands in the checkpoint.

A pack tells what had been recorded when its checkpoints were signed. Ask the
laboratory whether the number has been withdrawn since.
`, what, p.Laboratory, p.Registry)
	for _, w := range p.Withheld {
		fmt.Fprintf(&b, "\nLeft out: the upload with SHA-256 %s,\nbecause %s.\n", w.Hash, w.Reason)
	}
	return []byte(b.String())
}

// pageRow is one version on the page.
type pageRow struct {
	Generation   int
	Title, What  string
	Value        string
	Detail, File string
	Hash         string
	Recorded     string
	By           string
	Reason       string
	Decisions    []string
	RestsOn      []string
	Leaf         string
	ID           string
}

type pageData struct {
	About                          string
	Code, Laboratory, Registry     string
	Client, Label, Sample          string
	Quantity, Scale, Measurand     string
	Value, U, Expanded, K, P, Full string
	Issued, IssuedBy, Report       string
	Flags                          []string
	Rows                           []pageRow
	Ledgers                        []registry.PackLedger
	Withheld                       []registry.PackWithheld
}

var packTemplate = template.Must(template.New("page").Parse(`<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{{.About}}: what it rests on</title>
<style>
body { font: 1rem/1.45 system-ui, sans-serif; max-width: 60rem; margin: 2rem auto; padding: 0 1rem; color: #1a1a1a; background: #fff }
h1 { font-size: 1.5rem } h2 { font-size: 1.15rem; margin-top: 2.5rem }
.value { font-size: 1.6rem; margin: .5rem 0 }
dl { display: grid; grid-template-columns: max-content 1fr; gap: .2rem 1rem } dt { color: #555 } dd { margin: 0 }
article { border-left: .25rem solid #8aa; padding: .1rem 0 .1rem 1rem; margin: 1.2rem 0 }
article h3 { font-size: 1rem; margin: 0 } article p { margin: .25rem 0 }
code { font-size: .85em; overflow-wrap: anywhere } .quiet { color: #555 }
@media print { a { color: inherit; text-decoration: none } article { break-inside: avoid } }
</style>
</head>
<body>
<main>
<h1>{{if .Code}}Reported delta {{.Code}}{{else}}Assigned value {{.About}}{{end}}</h1>
<p class="value">{{.Value}} ‰ {{if .Code}}± {{.Expanded}}{{else}}u = {{.U}}{{end}} ‰</p>
<dl>
{{if .Code}}<dt>quantity, scale</dt><dd>{{.Quantity}} on {{.Scale}}{{if ne .Measurand "total"}}, {{.Measurand}}{{end}}</dd>
<dt>uncertainty</dt><dd>expanded, coverage factor k = {{.K}}, coverage probability {{.P}}; standard uncertainty {{.U}} ‰</dd>
<dt>full value</dt><dd>{{.Full}} ‰</dd>
<dt>sample</dt><dd>{{.Sample}}{{if .Label}}, called “{{.Label}}” by {{.Client}}{{end}}</dd>
<dt>report</dt><dd>{{.Report}}, issued {{.Issued}} by {{.IssuedBy}}</dd>
{{end}}<dt>laboratory</dt><dd>{{.Laboratory}} in the registry {{.Registry}}</dd>
{{- if .Flags}}
<dt>flags</dt><dd>{{range $i, $f := .Flags}}{{if $i}}, {{end}}{{$f}}{{end}}</dd>
{{- end}}
</dl>
<h2>What it rests on</h2>
<p class="quiet">Every version below is in this pack in the bytes that were hashed. Generations count from {{if .Code}}the report{{else}}the value{{end}} downwards.</p>
{{range .Rows}}<article id="{{.ID}}">
<h3>{{.Title}}</h3>
<p>{{if .Value}}<strong>{{.Value}}</strong>. {{end}}{{.What}}, generation {{.Generation}}{{if .Leaf}}; here the chain ends: {{.Leaf}}{{end}}.</p>
{{- if .Detail}}
<p>{{.Detail}}</p>
{{- end}}
<p>Stated by {{.By}}, recorded {{.Recorded}}{{if .Reason}}: {{.Reason}}{{end}}.{{range .Decisions}} {{.}}.{{end}}</p>
{{- if .RestsOn}}
<p>Rests on {{range $i, $r := .RestsOn}}{{if $i}}; {{end}}{{$r}}{{end}}.</p>
{{- end}}
<p class="quiet"><a href="{{.File}}">{{.File}}</a><br>SHA-256 <code>{{.Hash}}</code></p>
</article>
{{end}}<h2>What binds it</h2>
{{range .Ledgers}}<p>Ledger {{.Origin}}: {{len .Entries}} of its entries are proved to the root of {{.Size}} entries, <code>{{.Root}}</code>.
{{- range .Checkpoints}} Signed at size {{.Size}}: <a href="{{.File}}">{{.File}}</a>.{{else}} It is not signed.{{end}}</p>
{{end}}
{{- range .Withheld}}<p>Left out: the upload with SHA-256 <code>{{.Hash}}</code>, because {{.Reason}}.</p>
{{end}}<p class="quiet">This page is a reading of the files beside it. <code>deltamoor verify</code> on the pack writes it again from them and compares.</p>
</main>
</body>
</html>
`))

// packPageText writes the page from the pack's own versions.
func packPageText(ctx context.Context, p registry.Pack) ([]byte, error) {
	trace, err := registry.PackTrace(ctx, p)
	if err != nil {
		return nil, err
	}
	data := pageData{About: p.Name(), Laboratory: p.Laboratory, Registry: p.Registry, Ledgers: p.Ledgers, Withheld: p.Withheld}
	if d := trace.Reported; d != nil {
		decimals := decimalsOf(d.StandardUncertainty)
		data.Code, data.Client, data.Label, data.Sample = store.FormatCode(p.Code), d.Client, d.Label, store.FormatCode(d.Sample)
		data.Quantity, data.Scale, data.Measurand, data.Value, data.U = d.Quantity, d.Scale, d.Measurand, fixed(d.Value, decimals), fixed(d.StandardUncertainty, decimals)
		data.Expanded, data.K, data.P = fixed(d.Expanded, decimals), strconv.FormatFloat(d.K, 'f', 2, 64), strconv.FormatFloat(d.Probability, 'g', 4, 64)
		data.Full, data.Issued, data.IssuedBy, data.Report, data.Flags = strconv.FormatFloat(d.Value, 'g', -1, 64), moment(d.IssuedAt), d.IssuedBy, store.FormatCode(d.Report), d.Flags
	} else if n := trace.Nodes[0]; n.Value != nil && n.StandardUncertainty != nil {
		data.Value, data.U = fixed(*n.Value, decimalsOf(*n.StandardUncertainty)), fixed(*n.StandardUncertainty, decimalsOf(*n.StandardUncertainty))
	}
	for i, n := range trace.Nodes {
		row := pageRow{Generation: n.Depth, Title: n.Title, What: fmt.Sprintf("%s %s, version %d", n.Kind, store.FormatCode(n.Code), n.Version), Detail: n.Detail,
			File: registry.PackVersionFile(n.Ref), Hash: n.Hash.String(), Recorded: moment(n.RecordedAt), By: n.RecordedBy, Reason: n.Reason, Leaf: n.Leaf, ID: "v" + strconv.Itoa(i)}
		if n.Value != nil {
			row.Value = strconv.FormatFloat(*n.Value, 'g', -1, 64) + " ‰"
			if n.StandardUncertainty != nil && *n.StandardUncertainty > 0 {
				places := decimalsOf(*n.StandardUncertainty)
				row.Value = fixed(*n.Value, places) + " ‰, u = " + fixed(*n.StandardUncertainty, places) + " ‰"
			}
		}
		for _, decision := range n.Decisions {
			text := fmt.Sprintf("%s by %s %s", strings.ToUpper(decision.Act[:min(1, len(decision.Act))])+decision.Act[min(1, len(decision.Act)):], decision.By, moment(decision.At))
			if decision.Reason != "" {
				text += ": " + decision.Reason
			}
			row.Decisions = append(row.Decisions, text)
		}
		for _, e := range trace.Edges {
			if e.From != i {
				continue
			}
			text := trace.Nodes[e.To].Title + " (" + e.Part
			if e.Share != nil {
				text += ", " + strconv.FormatFloat(100**e.Share, 'f', 1, 64) + " % of the variance"
			}
			row.RestsOn = append(row.RestsOn, text+")")
		}
		data.Rows = append(data.Rows, row)
	}
	var b bytes.Buffer
	if err := packTemplate.Execute(&b, data); err != nil {
		return nil, err
	}
	return b.Bytes(), nil
}

func moment(i store.Instant) string { return i.Time().Format("2006-01-02 15:04:05 UTC") }

// decimalsOf is how many decimals show two digits of an uncertainty, 2 where it
// has none.
func decimalsOf(u float64) int {
	if !(u > 0) || math.IsInf(u, 0) {
		return 2
	}
	return min(max(1-int(math.Floor(math.Log10(u))), 0), 12)
}

// fixed writes a number with a true minus sign.
func fixed(x float64, decimals int) string {
	text := strconv.FormatFloat(x, 'f', decimals, 64)
	if rest, ok := strings.CutPrefix(text, "-"); ok {
		if strings.Trim(rest, "0.") == "" {
			return rest
		}
		return "−" + rest
	}
	return text
}
