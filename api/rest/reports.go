package rest

import (
	"context"
	"fmt"
	"strings"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A ReportSummary is a version of a report, without its lines' values.
type ReportSummary struct {
	Recorded
	Client string   `json:"client"`
	Title  string   `json:"title"`
	Amends string   `json:"amends,omitempty" doc:"Code of the report that this one replaces."`
	Note   string   `json:"note,omitempty"`
	Codes  []string `json:"codes" doc:"The permanent codes of its lines, in order."`
}

// A Report is an issued report with its lines.
type Report struct {
	ReportSummary
	AmendedBy  []string         `json:"amended_by" doc:"Codes of reports that replace it, newest last."`
	Conformity []ConformityRule `json:"conformity,omitempty" doc:"The decision rules of its statement of conformity."`
	Missing    []string         `json:"missing,omitempty" doc:"When it is issued: what the completeness check misses."`
	Lines      []Reported       `json:"lines"`
}

// A ConformityRule is a decision rule, recorded before the statement.
type ConformityRule struct {
	Scale     string   `json:"scale" maxLength:"40"`
	Measurand string   `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Lower     *float64 `json:"lower,omitempty" doc:"Tolerance limit (‰); left out: open."`
	Upper     *float64 `json:"upper,omitempty" doc:"Tolerance limit (‰); left out: open."`
	Guard     float64  `json:"guard,omitempty" minimum:"0" maximum:"10" doc:"Guard band in expanded uncertainties U of each line; 0: simple acceptance."`
	Source    string   `json:"source" minLength:"1" maxLength:"1000" doc:"Where the limits come from, and who agreed on the rule."`
}

// A Conformity is the statement on one line.
type Conformity struct {
	Conforms    bool     `json:"conforms" doc:"The value lies within the acceptance interval."`
	Probability float64  `json:"probability" doc:"That the measurand lies within the tolerance limits (JCGM 106:2012)."`
	Risk        float64  `json:"risk" doc:"Probability that the statement is wrong."`
	Guard       float64  `json:"guard" doc:"Guard band (‰)."`
	Lower       *float64 `json:"lower" doc:"Of the acceptance interval (‰); null where open."`
	Upper       *float64 `json:"upper" doc:"Of the acceptance interval (‰); null where open."`
}

// A Reported is a reported delta: what a permanent code stands for.
type Reported struct {
	Code       string    `json:"code" example:"D7K3M-9Q2XG"`
	Laboratory string    `json:"laboratory"`
	Report     string    `json:"report"`
	Line       int       `json:"line" doc:"Index in the report, from 0."`
	Final      Input     `json:"final" doc:"The version of the final value that was reported."`
	FinalState string    `json:"final_state" doc:"What became of that version since."`
	Sample     string    `json:"sample"`
	Client     string    `json:"client"`
	Label      string    `json:"label" doc:"The client's own name of the sample."`
	Quantity   string    `json:"quantity"`
	Scale      string    `json:"scale"`
	Measurand  string    `json:"measurand"`
	Value      float64   `json:"value" doc:"‰"`
	U          float64   `json:"u" doc:"Standard uncertainty, k = 1 (‰)."`
	K          float64   `json:"k"`
	Expanded   float64   `json:"U" doc:"Expanded uncertainty k·u (‰)."`
	P          float64   `json:"p"`
	NuEff      *float64  `json:"nu_eff" doc:"null where infinite."`
	Flags      []string  `json:"flags"`
	IssuedAt   time.Time `json:"issued_at"`
	IssuedBy   string    `json:"issued_by"`
	Hash       string    `json:"hash" doc:"SHA-256 of the line's canonical bytes, as the report holds it."`

	Conformity *Conformity `json:"conformity,omitempty" doc:"Where the report holds a decision rule for the line."`
	Successor  string      `json:"successor,omitempty" doc:"Read by itself: the reported delta that replaces it, in an amended report."`
	AmendedBy  string      `json:"amended_by,omitempty" doc:"Read by itself: the newest report that amends its own."`
	Replaces   string      `json:"replaces,omitempty" doc:"Read by itself: the reported delta that it replaces."`
}

func showReported(d registry.ReportedDelta) Reported {
	out := Reported{Code: store.FormatCode(d.Code), Laboratory: d.Laboratory, Report: store.FormatCode(d.Report), Line: d.Line,
		Final:      Input{Part: "line", Laboratory: d.Final.Laboratory, Kind: string(d.Final.Kind), Code: store.FormatCode(d.Final.Code), Version: d.Final.Version, Hash: d.Final.Hash.String()},
		FinalState: string(d.FinalState), Sample: store.FormatCode(d.Sample), Client: d.Client, Label: d.Label, Quantity: d.Quantity, Scale: d.Scale, Measurand: d.Measurand,
		Value: d.Value, U: d.StandardUncertainty, K: d.K, Expanded: d.Expanded, P: d.Probability, NuEff: d.EffectiveDF, Flags: append([]string{}, d.Flags...),
		IssuedAt: d.IssuedAt.Time(), IssuedBy: d.IssuedBy, Hash: d.Hash.String()}
	if c := d.Conformity; c != nil {
		out.Conformity = &Conformity{c.Conforms, c.Probability, c.Risk, c.Guard, finiteOrNil(c.AcceptLower), finiteOrNil(c.AcceptUpper)}
	}
	return out
}

func showReportSummary(it registry.Item[store.Report]) ReportSummary {
	r := it.Value
	return ReportSummary{Recorded: recorded(it), Client: r.Client, Title: r.Title, Amends: showCode(store.KindReport, r.Amends), Note: r.Note,
		Codes: convert(r.Lines, func(l store.ReportHash) string { return store.FormatCode(l.Code) })}
}

var reportKind = kindOfRecord[store.Report, ReportSummary]{kind: store.KindReport, show: showReportSummary, made: true,
	csv: table[ReportSummary]{columns("client", "title", "amends", "lines"), func(r ReportSummary) []string {
		return r.row(r.Client, r.Title, r.Amends, fmt.Sprint(len(r.Codes)))
	}}}

var reportedTable = table[Reported]{[]string{"code", "report", "line", "client", "label", "sample", "quantity", "scale", "measurand", "value", "u", "k", "U", "p", "nu_eff",
	"flags", "final", "final_version", "final_state", "issued_at", "issued_by", "hash"}, func(r Reported) []string {
	return []string{r.Code, r.Report, whole(&r.Line), r.Client, r.Label, r.Sample, r.Quantity, r.Scale, r.Measurand, number(r.Value), number(r.U), number(r.K), number(r.Expanded),
		number(r.P), optional(r.NuEff), spaced(r.Flags), r.Final.Code, whole(&r.Final.Version), r.FinalState, clock(&r.IssuedAt), r.IssuedBy, r.Hash}
}}

// A NewReport issues final values.
type NewReport struct {
	Client string   `json:"client" maxLength:"200"`
	Title  string   `json:"title" maxLength:"200"`
	Finals []string `json:"finals" minItems:"1" maxItems:"5000" doc:"Codes of approved final values, in the order of the report."`
	Amends string   `json:"amends,omitempty" maxLength:"40" doc:"Code of a report that this one replaces."`
	Reason string   `json:"reason,omitempty" maxLength:"4000" doc:"Asked for when amending."`
	Note   string   `json:"note,omitempty" maxLength:"4000"`

	Conformity []ConformityRule `json:"conformity,omitempty" maxItems:"50" doc:"Decision rules, where a statement of conformity is asked for."`
}

func (f *face) issue(ctx context.Context, actor registry.Actor, in *struct{ Body NewReport }) (*one[Report], error) {
	b := in.Body
	q := registry.ReportRequest{Client: b.Client, Title: b.Title, Reason: b.Reason, Note: b.Note,
		Conformity: convertOrNil(b.Conformity, func(c ConformityRule) store.ConformityRule { return store.ConformityRule(c) })}
	for i, text := range b.Finals {
		code, err := parseCode(fmt.Sprintf("body.finals[%d]", i), text, store.KindFinal)
		if err != nil {
			return nil, err
		}
		q.Finals = append(q.Finals, code)
	}
	if b.Amends != "" {
		var err error
		if q.Amends, err = parseCode("body.amends", b.Amends, store.KindReport); err != nil {
			return nil, err
		}
	}
	r, err := f.registry.Issue(ctx, actor, q)
	if err != nil {
		return nil, err
	}
	return reportAnswer(r), nil
}

func reportAnswer(r registry.Report) *one[Report] {
	out := Report{ReportSummary: showReportSummary(r.Item), AmendedBy: convert(r.AmendedBy, store.FormatCode), Missing: r.Missing, Lines: convert(r.Lines, showReported),
		Conformity: convertOrNil(r.Value.Conformity, func(c store.ConformityRule) ConformityRule { return ConformityRule(c) })}
	return &one[Report]{ETag: quoteTag(r.Tag()), Location: "/v1/reports/" + out.Code, Body: out}
}

// reportedAnswer is a reported delta with the links that lead from it.
type reportedAnswer struct {
	Link string `header:"Link" doc:"What replaces it, as rel=\"successor-version\" (RFC 5829), and what it replaces, as rel=\"predecessor-version\"."`
	Body Reported
}

// ReportedParams name a reported delta, and the moment at which it is looked at.
type ReportedParams struct {
	CodeParam
	MomentParams
}

func (f *face) reported(ctx context.Context, actor registry.Actor, in *ReportedParams) (*reportedAnswer, error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	var d registry.ReportedDelta
	if m := in.moment(); m == (store.Moment{}) {
		d, err = f.registry.Reported(ctx, actor, code)
	} else {
		d, err = f.registry.ReportedAt(ctx, actor, code, m)
	}
	if err != nil {
		return nil, err
	}
	return f.reportedAnswer(ctx, d)
}

// reportedAnswer adds what came before and after a delta.
func (f *face) reportedAnswer(ctx context.Context, d registry.ReportedDelta) (*reportedAnswer, error) {
	s, err := f.registry.Successors(ctx, d)
	if err != nil {
		return nil, err
	}
	out := showReported(d)
	var links []string
	for _, x := range []struct {
		code, address, relation string
		into                    *string
	}{{s.Successor, "/v1/reported/", "successor-version", &out.Successor}, {s.Replaces, "/v1/reported/", "predecessor-version", &out.Replaces}, {s.Amended, "/v1/reports/", "related", &out.AmendedBy}} {
		if x.code != "" {
			*x.into = store.FormatCode(x.code)
			links = append(links, fmt.Sprintf(`<%s%s>; rel="%s"`, x.address, *x.into, x.relation))
		}
	}
	return &reportedAnswer{strings.Join(links, ", "), out}, nil
}

// reportedShort answers askers known by a claim, where the delta is known too.
func (f *face) reportedShort(ctx context.Context, claim registry.Claim, in *ReportedParams) (*reportedAnswer, bool, error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil || in.moment() != (store.Moment{}) {
		return nil, false, err
	}
	d, confirmed, err := f.registry.ReportedClaimed(ctx, claim, code)
	if err != nil || !confirmed {
		return nil, false, err
	}
	return &reportedAnswer{Body: showReported(d)}, true, nil // nothing replaces it, nor does it replace anything
}
