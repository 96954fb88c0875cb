package rest

import (
	"bytes"
	"context"
	"fmt"
	"net/http"
	"net/url"
	"strconv"
	"strings"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/figure"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Trace is what one number rests on, down to scale definitions and
// certificates; or, upwards, a page of what rests on a version.
type Trace struct {
	Direction string       `json:"direction" enum:"down,up"`
	Reported  *Reported    `json:"reported,omitempty" doc:"The delta the trace was asked for."`
	Nodes     []TraceNode  `json:"nodes" doc:"Versions; the first is where the trace starts. Downwards generations in order; upwards the ledger's order, in which a version stands after all it rests on."`
	Edges     []TraceEdge  `json:"edges" doc:"Among the nodes of this answer."`
	Shares    []TraceShare `json:"shares,omitempty" doc:"Where the number's variance comes from."`
	Cut       int          `json:"cut" doc:"Versions beyond the bound of 2000 that were not followed."`
	After     string       `json:"after,omitempty" doc:"Upwards: cursor of the next page; absent at the end."`
	AsOf      *time.Time   `json:"as_of,omitempty" doc:"Upwards: the moment that all pages belong to."`
}

// A TraceNode is one version in a trace.
type TraceNode struct {
	Input
	Origin     string     `json:"origin,omitempty" doc:"Ledger of another registry that it stands in; absent for those of this one."`
	Depth      int        `json:"depth" doc:"Generations from the start."`
	Title      string     `json:"title"`
	Detail     string     `json:"detail,omitempty"`
	Leaf       string     `json:"leaf,omitempty" doc:"Why the chain ends here."`
	State      string     `json:"state"`
	RecordedAt time.Time  `json:"recorded_at"`
	RecordedBy string     `json:"recorded_by"`
	ValidFrom  *time.Time `json:"valid_from,omitempty"`
	Reason     string     `json:"reason,omitempty"`
	Decisions  []Decision `json:"decisions"`
	Value      *float64   `json:"value,omitempty" doc:"‰"`
	U          *float64   `json:"u,omitempty" doc:"Standard uncertainty (‰)."`
}

// A TraceEdge says that one node rests on another.
type TraceEdge struct {
	From  int      `json:"from" doc:"Index in nodes."`
	To    int      `json:"to" doc:"Index in nodes."`
	Part  string   `json:"part" doc:"The part that the latter plays."`
	Share *float64 `json:"variance_share,omitempty" doc:"Its part of the variance, where that is known."`
}

// A TraceShare is one part of a number's variance.
type TraceShare struct {
	Kind     string  `json:"kind" doc:"anchor, a kind of source (reading, preparation, unit, stability, between_session, campaign, correction), or shared: what these have in common."`
	Value    *Input  `json:"value,omitempty" doc:"Of an anchor: the version of its assigned value."`
	Material string  `json:"material,omitempty"`
	Basis    string  `json:"basis,omitempty"`
	Campaign string  `json:"campaign,omitempty" doc:"The campaign that assigned it."`
	Share    float64 `json:"variance_share" doc:"Part of u²; all of them add up to 1. That of shared may be negative."`
	Text     string  `json:"text,omitempty" doc:"The same in words."`
}

// ShowTrace is the public shape of a trace.
func ShowTrace(t registry.Trace) Trace {
	out := Trace{Direction: "down", Nodes: make([]TraceNode, 0, len(t.Nodes)), Edges: make([]TraceEdge, 0, len(t.Edges)), Cut: t.Cut}
	if t.Reported != nil {
		d := showReported(*t.Reported)
		out.Reported = &d
	}
	for _, n := range t.Nodes {
		out.Nodes = append(out.Nodes, TraceNode{
			Input: Input{Laboratory: n.Laboratory, Kind: string(n.Kind), Code: showCode(n.Kind, n.Code), Version: n.Version, Hash: n.Hash.String()}, Origin: n.Origin,
			Depth: n.Depth, Title: n.Title, Detail: n.Detail, Leaf: n.Leaf, State: string(n.State), RecordedAt: n.RecordedAt.Time(), RecordedBy: n.RecordedBy,
			ValidFrom: timePointer(n.ValidFrom), Reason: n.Reason, Value: n.Value, U: n.StandardUncertainty,
			Decisions: convert(n.Decisions, func(d registry.TraceDecision) Decision {
				return Decision{Decision: d.Act, By: d.By, At: d.At.Time(), Reason: d.Reason}
			})})
	}
	for _, e := range t.Edges {
		out.Edges = append(out.Edges, TraceEdge(e))
	}
	for _, s := range t.Shares {
		x := TraceShare{Kind: s.Kind, Material: s.Material, Basis: s.Basis, Share: s.Share}
		if s.Value != nil {
			ref := showVersionRef("anchor", *s.Value)
			x.Value = &ref
		}
		if s.Campaign != "" {
			x.Campaign = store.FormatCode(s.Campaign)
		}
		if words := exchange.ShareSentences(registry.Trace{Shares: []registry.VarianceShare{s}}); len(words) == 1 {
			x.Text = words[0]
		}
		out.Shares = append(out.Shares, x)
	}
	return out
}

// The forms of a trace beside JSON, and their media types.
const (
	mediaText = "text/plain"
	mediaHTML = "text/html"
	mediaSVG  = "image/svg+xml"
	mediaPROV = "application/ld+json"
)

var traceForms = map[string]string{mediaText: "text", mediaHTML: "html", mediaSVG: "svg", mediaPROV: "prov", mediaCSV: "csv"}

// tracing describes what every trace answers with.
func tracing(f *face, op *huma.Operation) {
	long(f, op)
	answers[Trace](f, op)
	op.Responses["200"].Headers = map[string]*huma.Param{"Link": {Schema: &huma.Schema{Type: huma.TypeString}, Description: `Upwards: the next page, as rel="next"; absent at the end.`}}
	for media, text := range map[string]string{mediaText: "Indented lines; upwards one line for each version.", mediaHTML: "A page for reading and printing.", mediaSVG: "The picture.",
		mediaPROV: "W3C PROV-DM in its PROV-JSONLD serialisation.", mediaCSV: "Upwards: every version, streamed."} {
		also(media, text)(f, op)
	}
}

// TraceForm chooses direction and form.
type TraceForm struct {
	MomentParams
	Direction string `query:"direction" enum:"down,up" doc:"down: what it rests on (left out: that); up: what rests on it, page by page in the order of the ledger."`
	Format    string `query:"format" enum:"json,text,prov,svg,html,csv" doc:"The header Accept does the same. csv only upwards, whole."`
	Version   int    `query:"version" minimum:"1" doc:"Of this version; left out: the one in force, else the newest."`
	Limit     int    `query:"limit" minimum:"1" maximum:"2000" doc:"Upwards: versions on one page; left out: 500."`
	After     string `query:"after" maxLength:"1000" doc:"Upwards: where the page begins: the cursor of the page before, as it came."`
	format    string
	self      url.URL
}

// Resolve settles the form.
func (p *TraceForm) Resolve(ctx huma.Context) []error {
	p.self = ctx.URL()
	if p.format = p.Format; p.format == "" {
		p.format = traceForms[accepted(ctx.Header("Accept"), "application/json", mediaHTML, mediaSVG, mediaPROV, mediaText, mediaCSV)]
	}
	return nil
}

// form is the address of the same trace in another form.
func (p TraceForm) form(format string) string {
	q := p.self.Query()
	q.Set("format", format)
	return p.self.Path + "?" + q.Encode()
}

// answerTrace answers with the trace of a record, or of a reported delta (kind "").
func (f *face) answerTrace(ctx context.Context, actor registry.Actor, form TraceForm, kind store.Kind, code string) (*answer, error) {
	if form.Direction == "up" {
		return f.answerAbove(ctx, actor, form, kind, code)
	}
	if form.format == "csv" || form.Limit != 0 || form.After != "" {
		return nil, complain("a trace downwards is one graph", "query.format", "csv, limit or after", "those only with direction=up")
	}
	t, err := f.registry.TraceAt(ctx, actor, registry.TraceQuery{Kind: kind, Code: code, Version: form.Version, Moment: form.moment()})
	if err != nil {
		return nil, err
	}
	if form.format == "" || form.format == "json" {
		return jsonAnswer(ShowTrace(t), 200, nil)
	}
	return f.drawnTrace(actor, form, t, false)
}

// drawnTrace writes a trace in one of the forms for people and other programs.
func (f *face) drawnTrace(actor registry.Actor, form TraceForm, t registry.Trace, more bool) (*answer, error) {
	var b bytes.Buffer
	var err error
	media := mediaText
	policy := ""
	switch form.format {
	case "prov":
		media = mediaPROV
		err = exchange.WritePROV(&b, f.registry.Name(), t)
	case "svg":
		media = mediaSVG
		policy = pictureStyles
		err = figure.Trace(&b, t, figure.TraceStyle{Link: seeAddress(actor)})
	case "html":
		media = mediaHTML
		page := exchange.TracePage{Link: seeAddress(actor), Up: form.Direction == "up", More: more}
		for _, other := range []struct{ name, format string }{{"JSON", "json"}, {"W3C PROV", "prov"}, {"a picture", "svg"}, {"plain text", "text"}} {
			page.Others = append(page.Others, exchange.NamedLink{Name: other.name, Address: form.form(other.format)})
		}
		err = exchange.WriteTracePage(&b, t, page)
	default:
		if form.Direction == "up" {
			err = exchange.WriteAbove(&b, t)
		} else {
			err = exchange.WriteTrace(&b, t)
		}
	}
	if err != nil {
		return nil, err
	}
	return shownAnswer(media, policy, b.Bytes()), nil
}

// pictureStyles lets a picture that is opened by itself keep its style.
const pictureStyles = "default-src 'none'; style-src 'unsafe-inline'; frame-ancestors 'none'"

// shownAnswer answers with bytes that a browser may show: pages bring the one
// style that the policy names, and nothing else is loaded or run.
func shownAnswer(media, policy string, body []byte) *answer {
	if media == mediaHTML && policy == "" {
		policy = "default-src 'none'; style-src " + exchange.PageStyleHash() + "; frame-ancestors 'none'"
	}
	return &answer{Body: func(hc huma.Context) {
		if strings.HasPrefix(media, "text/") {
			media += "; charset=utf-8"
		}
		hc.SetHeader("Content-Type", media)
		if policy != "" {
			hc.SetHeader("Content-Security-Policy", policy)
		}
		hc.SetStatus(http.StatusOK)
		_, _ = hc.BodyWriter().Write(body) // who has gone needs no answer
	}}
}

var aboveTable = table[store.VersionAbove]{[]string{"kind", "code", "version", "depth", "recorded_at", "recorded_by", "hash", "position"}, func(a store.VersionAbove) []string {
	at := a.RecordedAt.Time()
	return []string{string(a.Kind), showCode(a.Kind, a.Code), whole(&a.Version), whole(&a.Depth), clock(&at), a.RecordedBy, a.Hash.String(), strconv.FormatInt(a.Position, 10)}
}}

// answerAbove answers with what rests on a record.
func (f *face) answerAbove(ctx context.Context, actor registry.Actor, form TraceForm, kind store.Kind, code string) (*answer, error) {
	q := registry.AboveRequest{Kind: kind, Code: code, Version: form.Version, Limit: form.Limit, Moment: form.moment()}
	if form.format == "csv" {
		if _, err := f.registry.TraceAbove(ctx, actor, registry.AboveRequest{Kind: kind, Code: code, Version: form.Version, Limit: 1, Moment: form.moment()}); err != nil { // a refusal still is one
			return nil, err
		}
		return &answer{Body: func(hc huma.Context) {
			streamCSV(hc, f, aboveTable, func(yield func([]string, error) bool) {
				err := f.registry.EachAbove(hc.Context(), actor, q, func(a store.VersionAbove) error {
					if !yield(aboveTable.row(a), nil) {
						return context.Canceled
					}
					return nil
				})
				if err != nil && hc.Context().Err() == nil {
					yield(nil, err)
				}
			})
		}}, nil
	}
	if form.After != "" {
		list := ListParams{After: form.After}
		begin, err := list.query()
		if err != nil {
			return nil, err
		}
		position, err := strconv.ParseInt(begin.After, 10, 64)
		if err != nil {
			return nil, complain("this is not a cursor", "query.after", form.After, "the cursor of the page before, as it came")
		}
		q.After, q.Moment = &position, begin.Moment
	}
	page, err := f.registry.TraceAbove(ctx, actor, q)
	if err != nil {
		return nil, err
	}
	if form.format != "" && form.format != "json" {
		return f.drawnTrace(actor, form, page.Trace, page.Next != nil)
	}
	out := ShowTrace(page.Trace)
	at := page.AsOf.Time()
	out.Direction, out.AsOf = "up", &at
	link := ""
	if page.Next != nil {
		out.After = cursor{strconv.FormatInt(*page.Next, 10), &page.AsOf, q.Moment.ValidAt}.String()
		next := form.self.Query()
		next.Set("after", out.After)
		for _, name := range []string{"as_of", "valid_at"} { // the cursor holds them
			next.Del(name)
		}
		link = fmt.Sprintf(`<%s?%s>; rel="next"`, form.self.Path, next.Encode())
	}
	return jsonAnswer(out, 200, map[string]string{"Link": link})
}

func (f *face) traceReported(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	TraceForm
}) (*answer, error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	return f.answerTrace(ctx, actor, in.TraceForm, "", code)
}

// TraceParams name the record whose trace is wanted.
type TraceParams struct {
	RecordCode
	TraceForm
}

// traceOf traces the records of a kind.
func (f *face) traceOf(kind store.Kind, made bool) func(context.Context, registry.Actor, *TraceParams) (*answer, error) {
	return func(ctx context.Context, actor registry.Actor, in *TraceParams) (*answer, error) {
		code, err := in.parse(kind, made)
		if err != nil {
			return nil, err
		}
		return f.answerTrace(ctx, actor, in.TraceForm, kind, code)
	}
}

func (f *face) traceValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	TraceForm
}) (*answer, error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	return f.answerTrace(ctx, actor, in.TraceForm, store.KindValue, code)
}

func (f *face) traceUpload(ctx context.Context, actor registry.Actor, in *struct {
	SHA256 string `path:"sha256" maxLength:"64" doc:"SHA-256 of the bytes, 64 hexadecimal digits."`
	TraceForm
}) (*answer, error) {
	hash, err := parseHash("path.sha256", in.SHA256)
	if err != nil {
		return nil, err
	}
	return f.answerTrace(ctx, actor, in.TraceForm, store.KindDocument, hash.String())
}
