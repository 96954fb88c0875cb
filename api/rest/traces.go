package rest

import (
	"context"
	"io"
	"strings"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Trace is what one number rests on, down to scale definitions and certificates.
type Trace struct {
	Reported *Reported   `json:"reported,omitempty" doc:"The delta the trace was asked for."`
	Nodes    []TraceNode `json:"nodes" doc:"Versions; the first is where the trace starts, generations in order."`
	Edges    []TraceEdge `json:"edges"`
	Cut      int         `json:"cut" doc:"Versions beyond the bound of 2000 that were not followed."`
}

// A TraceNode is one version in a trace.
type TraceNode struct {
	Input
	Depth      int        `json:"depth" doc:"Generations below the start."`
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

func showTrace(t registry.Trace) Trace {
	out := Trace{Nodes: make([]TraceNode, 0, len(t.Nodes)), Edges: make([]TraceEdge, 0, len(t.Edges)), Cut: t.Cut}
	if t.Reported != nil {
		d := showReported(*t.Reported)
		out.Reported = &d
	}
	for _, n := range t.Nodes {
		out.Nodes = append(out.Nodes, TraceNode{
			Input: Input{Laboratory: n.Laboratory, Kind: string(n.Kind), Code: showCode(n.Kind, n.Code), Version: n.Version, Hash: n.Hash.String()},
			Depth: n.Depth, Title: n.Title, Detail: n.Detail, Leaf: n.Leaf, State: string(n.State), RecordedAt: n.RecordedAt.Time(), RecordedBy: n.RecordedBy,
			ValidFrom: timePointer(n.ValidFrom), Reason: n.Reason, Value: n.Value, U: n.StandardUncertainty,
			Decisions: convert(n.Decisions, func(d registry.TraceDecision) Decision {
				return Decision{Decision: d.Act, By: d.By, At: d.At.Time(), Reason: d.Reason}
			})})
	}
	for _, e := range t.Edges {
		out.Edges = append(out.Edges, TraceEdge(e))
	}
	return out
}

// TraceForm chooses between JSON and plain text.
type TraceForm struct {
	MomentParams
	Direction string `query:"direction" enum:"down,up" doc:"down, as where it is left out: what this rests on; up: what rests on this."`
	Format    string `query:"format" enum:"json,text" doc:"text gives the chain as indented lines; the header Accept: text/plain does the same."`
	format    string
}

// Resolve settles the form.
func (p *TraceForm) Resolve(ctx huma.Context) []error {
	p.format = p.Format
	if p.format == "" && accepted(ctx.Header("Accept"), "application/json", "text/plain") == "text/plain" {
		p.format = "text"
	}
	return nil
}

func (f *face) answerTrace(ctx context.Context, actor registry.Actor, form TraceForm, kind store.Kind, code string, version int) (*answer, error) {
	q := registry.TraceQuery{Kind: kind, Code: code, Version: version, Moment: form.moment()}
	trace := f.registry.TraceAt
	if form.Direction == "up" {
		trace = f.registry.TraceUpAt
	}
	t, err := trace(ctx, actor, q)
	if err != nil {
		return nil, err
	}
	if form.format == "text" {
		var text strings.Builder
		if err := exchange.WriteTrace(&text, t); err != nil {
			return nil, err
		}
		return &answer{Body: func(hc huma.Context) {
			hc.SetHeader("Content-Type", "text/plain; charset=utf-8")
			hc.SetStatus(200)
			_, _ = io.WriteString(hc.BodyWriter(), text.String())
		}}, nil
	}
	return jsonAnswer(showTrace(t), 200, nil)
}

func (f *face) traceReported(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	TraceForm
}) (*answer, error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	return f.answerTrace(ctx, actor, in.TraceForm, "", code, 0)
}

// TraceParams name the record whose trace is wanted.
type TraceParams struct {
	CodeParam
	TraceForm
	Version int `query:"version" minimum:"1" doc:"Of this version; left out: the one in force, else the newest."`
}

func traceOf[S store.Body, T any](f *face, k kindOfRecord[S, T]) func(context.Context, registry.Actor, *TraceParams) (*answer, error) {
	return func(ctx context.Context, actor registry.Actor, in *TraceParams) (*answer, error) {
		code, err := k.code(in.Code)
		if err != nil {
			return nil, err
		}
		return f.answerTrace(ctx, actor, in.TraceForm, k.kind, code, in.Version)
	}
}

func (f *face) traceValue(ctx context.Context, actor registry.Actor, in *struct {
	ValueParams
	TraceForm
	Version int `query:"version" minimum:"1" doc:"Of this version; left out: the one in force."`
}) (*answer, error) {
	code, err := in.code(ctx, f, actor)
	if err != nil {
		return nil, err
	}
	return f.answerTrace(ctx, actor, in.TraceForm, store.KindValue, code, in.Version)
}
