package exchange

import (
	"fmt"
	"io"
	"slices"
	"strings"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A TracePage says how a trace is shown as a page.
type TracePage struct {
	// Link gives the address of a version; nil, or "", shows it without a link.
	Link func(store.Ref) string
	// Up tells that the trace shows what rests on its first node; More that it is
	// one page of several.
	Up, More bool
	// Others are further forms of the same trace to offer, by name.
	Others []NamedLink
}

// A NamedLink is an address with what is to be found there.
type NamedLink struct{ Name, Address string }

type tracePageRow struct {
	Number  int
	Title   string
	Code    string // where the title does not have it
	Address string
	Detail  string
	Value   string
	History string
	RestsOn string
	Leaf    string
}

type tracePageData struct {
	Title, Value, Full string
	Facts              []string
	Shares             []string
	SharesTitle        string
	Rows               []tracePageRow
	Ends               string
	Up, More           bool
	Others             []NamedLink
}

var tracePage = newPage("trace", `{{template "head" .Title}}<h1>{{.Title}}</h1>
{{with .Value}}<p class="value">{{.}}</p>
{{end}}{{range .Facts}}<p>{{.}}</p>
{{end}}{{if .Shares}}<h2>{{.SharesTitle}}</h2>
<ul>{{range .Shares}}<li>{{.}}</li>
{{end}}</ul>
{{end}}<h2>{{if .Up}}What rests on it{{else}}What it rests on{{end}}</h2>
<ol class="chain">
{{range .Rows}}<li id="n{{.Number}}"><span class="no">{{.Number}}</span> <span class="what"><b>{{if .Address}}<a href="{{.Address}}">{{.Title}}</a>{{else}}{{.Title}}{{end}}</b>{{with .Code}} <span class="quiet">{{.}}</span>{{end}}{{with .Detail}}: {{.}}{{end}}{{with .Leaf}} <span class="quiet">(the chain ends: {{.}})</span>{{end}}</span> <span class="delta">{{with .Value}}{{.}} ‰{{end}}</span><span class="ink">; </span><span class="who">{{.History}}{{with .RestsOn}}. <i>{{if $.Up}}By way of{{else}}Rests on{{end}}</i> {{.}}{{end}}.</span></li>
{{end}}</ol>
<p>{{.Ends}}{{if .More}} There are more: this is one page of several.{{end}}</p>
{{if .Others}}<p class="screen">The same as {{range $i, $o := .Others}}{{if $i}}, {{end}}<a href="{{$o.Address}}">{{$o.Name}}</a>{{end}}.</p>
{{end}}{{template "foot"}}`)

// WriteTracePage writes a trace as a page of HTML for reading and for printing:
// the number, where its variance comes from, and every version of the chain
// with its people, times, reasons and exclusions. It needs no scripts.
func WriteTracePage(w io.Writer, t registry.Trace, p TracePage) error {
	d := tracePageData{Up: p.Up, More: p.More, Others: p.Others}
	if len(t.Nodes) == 0 {
		return fmt.Errorf("write trace: found no nodes")
	}
	start := t.Nodes[0]
	d.Title = upperFirst(start.Title)
	if r := t.Reported; r != nil {
		n := Decimals(r.StandardUncertainty)
		d.Title = "Reported delta " + store.FormatCode(r.Code)
		d.Value = fmt.Sprintf("%s ‰ ± %s ‰ on %s", Fixed(r.Value, n), Fixed(r.Expanded, n), r.Scale)
		measurand := ""
		if r.Measurand != registry.Total {
			measurand = ", " + r.Measurand
		}
		d.Facts = []string{
			fmt.Sprintf("%s%s of sample %s, which %s calls “%s”. Expanded uncertainty U with k = %.2f, %g %%; standard uncertainty u = %s ‰. In full: %s ‰.", r.Quantity, measurand,
				store.FormatCode(r.Sample), r.Client, r.Label, r.K, 100*r.Probability, Fixed(r.StandardUncertainty, n), FormatNumber(r.Value)),
			fmt.Sprintf("Line %d of report %s of laboratory %s, issued by %s on %s.%s", r.Line+1, store.FormatCode(r.Report), r.Laboratory, r.IssuedBy, textMoment(r.IssuedAt), flagSentence(r.Flags)),
		}
		if r.FinalState != store.Approved {
			d.Facts = append(d.Facts, fmt.Sprintf("The final value that was reported is now %s.", r.FinalState))
		}
	} else if start.Value != nil && start.StandardUncertainty != nil {
		d.Value = deltaText(start)
	}
	d.Shares = ShareSentences(t)
	d.SharesTitle = "Where its variance comes from"
	for i, n := range t.Nodes {
		row := tracePageRow{Number: i + 1, Title: upperFirst(n.Title), Code: fmt.Sprintf("%s.%d", store.FormatCode(n.Code), n.Version), Detail: n.Detail, Value: deltaText(n), History: pageHistory(n), Leaf: n.Leaf}
		if strings.Contains(row.Title, row.Code) {
			row.Code = ""
		}
		if n.Origin != "" {
			row.Code = strings.TrimSpace("in " + n.Origin + " " + row.Code)
		} else if p.Link != nil {
			row.Address = p.Link(n.Ref)
		}
		if n.Kind == store.KindMaterial { // that a material ends the chain goes without saying
			row.Leaf = ""
		}
		row.RestsOn = restsOn(t, i)
		d.Rows = append(d.Rows, row)
	}
	tw := &traceText{trace: t, children: make([][]registry.TraceEdge, len(t.Nodes))}
	for _, e := range t.Edges {
		tw.children[e.From] = append(tw.children[e.From], e)
	}
	d.Ends = tw.ends()
	if p.Up {
		d.Ends = Count(len(t.Nodes)-1, "version rests", "versions rest") + " on it here. Decisions about a version stand with it."
	}
	if err := tracePage.Execute(w, d); err != nil {
		return fmt.Errorf("write trace: %w", err)
	}
	return nil
}

// restsOn lists what node i rests on by number, part by part, with shares.
func restsOn(t registry.Trace, i int) string {
	words := map[string][]string{}
	var order []string
	for _, e := range t.Edges {
		if e.From != i {
			continue
		}
		if _, ok := words[e.Part]; !ok {
			order = append(order, e.Part)
		}
		text := fmt.Sprint(e.To + 1)
		if e.Share != nil {
			text += " (" + percent(*e.Share) + ")"
		}
		words[e.Part] = append(words[e.Part], text)
	}
	slices.SortStableFunc(order, func(a, b string) int { return rank(a) - rank(b) })
	var list []string
	for _, part := range order {
		list = append(list, part+" "+strings.Join(words[part], ", "))
	}
	return strings.Join(list, "; ")
}

// pageHistory is history in few words; the code stands beside it.
func pageHistory(n registry.TraceNode) string {
	reason := func(why string) string {
		if why == "" {
			return ""
		}
		return " (" + why + ")"
	}
	text := "by " + n.RecordedBy + " " + textMoment(n.RecordedAt)
	if n.ValidFrom != nil {
		text += ", holds from " + day(*n.ValidFrom)
	}
	text += reason(n.Reason)
	for _, d := range n.Decisions {
		text += fmt.Sprintf("; %s by %s %s%s", d.Act, d.By, textMoment(d.At), reason(d.Reason))
	}
	if n.Kind.Decided() && n.State != store.Approved {
		text += "; now " + string(n.State)
	}
	return text
}

func deltaText(n registry.TraceNode) string {
	if n.Value == nil || n.StandardUncertainty == nil {
		return ""
	}
	u := *n.StandardUncertainty
	if !(u > 0) {
		return Fixed(*n.Value, 3) + ", exact"
	}
	return fmt.Sprintf("%s, u %s", Fixed(*n.Value, Decimals(u)), Fixed(u, Decimals(u)))
}

// ShareSentences says in words where the variance of a trace's number comes
// from, largest part first.
func ShareSentences(t registry.Trace) []string {
	var out []string
	for _, s := range t.Shares {
		if s.Share < 0.0005 && s.Kind != "shared" {
			continue
		}
		of := percent(s.Share) + " of this value's variance is "
		switch {
		case s.Kind == "anchor" && s.Value != nil:
			text := of + fmt.Sprintf("anchor %s as %s (%s.%d)", s.Material, assignedBy(s), s.Value.Code, s.Value.Version)
			out = append(out, text)
		case s.Kind == "shared":
			sign := "adds "
			if s.Share < 0 {
				sign = "takes away "
			}
			out = append(out, "What anchors and sessions have in common "+sign+percent(s.Share)+" of the variance.")
			continue
		default:
			out = append(out, of+sourceWords(s.Kind))
		}
		out[len(out)-1] += "."
	}
	return out
}

func assignedBy(s registry.VarianceShare) string {
	switch {
	case s.Campaign != "":
		return "assigned in campaign " + store.FormatCode(s.Campaign)
	case s.Basis == "assignment":
		return "assigned from this laboratory's sessions"
	case s.Basis == "":
		return "stated"
	}
	return "stated by " + map[string]string{"certificate": "its certificate", "literature": "the literature", "definition": "definition", "partner": "a partner",
		"conversion": "conversion", "provisional": "provision"}[s.Basis]
}

func sourceWords(kind string) string {
	switch kind {
	case "anchor":
		return "an outside value of a partner"
	case "reading":
		return "the noise of readings, of sample and anchors"
	case "preparation":
		return "the scatter of preparations"
	case "unit":
		return "the difference between units of one material"
	case "stability":
		return "the stability of materials"
	case "between_session":
		return "the difference between sessions"
	case "campaign":
		return "the scatter of the campaign's sessions"
	case "correction":
		return "corrections"
	}
	return kind
}

func flagSentence(flags []string) string {
	if len(flags) == 0 {
		return ""
	}
	return " Flags: " + strings.Join(flags, ", ") + "."
}

func upperFirst(s string) string {
	r := []rune(s)
	if len(r) == 0 || strings.HasPrefix(s, "δ") {
		return s
	}
	return strings.ToUpper(string(r[:1])) + string(r[1:])
}
