package rest

import (
	"context"
	"fmt"
	"time"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A RevisionSet is one report with deltas that a revision moves.
type RevisionSet struct {
	Report   string     `json:"report"`
	Lines    int        `json:"lines" doc:"How many of its lines move."`
	Action   string     `json:"action" doc:"How it was closed: re-issue, annotate or no action; empty while it is open."`
	Reason   string     `json:"reason"`
	By       string     `json:"by"`
	At       *time.Time `json:"at"`
	Reissued string     `json:"reissued" doc:"The amended report, with re-issue."`
}

func showSet(s registry.RevisionSet) RevisionSet {
	out := RevisionSet{Report: store.FormatCode(s.Report), Lines: s.Lines}
	if c := s.Closing; c != nil {
		at := c.RecordedAt.Time()
		out.Action, out.Reason, out.By, out.At = c.Value.Action, c.Reason, c.RecordedBy, &at
		if c.Value.Reissued != "" {
			out.Reissued = store.FormatCode(c.Value.Reissued)
		}
	}
	return out
}

var setTable = table[RevisionSet]{[]string{"report", "lines", "action", "reason", "by", "at", "reissued"}, func(s RevisionSet) []string {
	return []string{s.Report, whole(&s.Lines), s.Action, s.Reason, s.By, clock(s.At), s.Reissued}
}}

func (f *face) revisionSets(ctx context.Context, actor registry.Actor, in *CodeVersions) (*answer, error) {
	code, err := revisionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	read := func(ctx context.Context, q registry.Query) (registry.Page[registry.RevisionSet], error) {
		items, err := f.registry.RevisionSets(ctx, actor, code, q.After, q.Limit)
		page := registry.Page[registry.RevisionSet]{Items: items}
		if len(items) > 0 && len(items) == q.Limit {
			page.After = items[len(items)-1].Report
		}
		return page, err
	}
	return answerList(ctx, f, &in.ListParams, read, showSet, setTable)
}

// A NewClosing says what becomes of one report that a revision moves.
type NewClosing struct {
	Report string `json:"report" maxLength:"40"`
	Action string `json:"action" enum:"re-issue,annotate,no action"`
	Reason string `json:"reason" minLength:"1" maxLength:"3000"`
}

func (f *face) closeRevision(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Body NewClosing
}) (*plain[RevisionSet], error) {
	code, err := revisionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	report, err := parseCode("body.report", in.Body.Report, store.KindReport)
	if err != nil {
		return nil, err
	}
	s, err := f.registry.CloseRevision(ctx, actor, registry.ClosingRequest{Revision: code, Report: report, Action: in.Body.Action, Reason: in.Body.Reason})
	if err != nil {
		return nil, err
	}
	return &plain[RevisionSet]{showSet(s)}, nil
}

// A Notice is one line of a report before and after a revision.
type Notice struct {
	Reported
	NewValue float64 `json:"new_value" doc:"‰"`
	NewU     float64 `json:"new_u" doc:"Standard uncertainty (‰)."`
	Moved    bool    `json:"moved"`
}

var noticeTable = table[Notice]{append(append([]string{}, reportedTable.header...), "new_value", "new_u", "moved"), func(n Notice) []string {
	return append(reportedTable.row(n.Reported), number(n.NewValue), number(n.NewU), fmt.Sprint(n.Moved))
}}

// NoticeParams name a report that a revision moves.
type NoticeParams struct {
	CodeParam
	Report string `path:"report" maxLength:"40" doc:"Code of the report."`
	ListParams
}

func (f *face) revisionNotice(ctx context.Context, actor registry.Actor, in *NoticeParams) (*answer, error) {
	code, err := revisionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	report, err := parseCode("path.report", in.Report, store.KindReport)
	if err != nil {
		return nil, err
	}
	lines, err := f.registry.RevisionNotice(ctx, actor, code, report)
	if err != nil {
		return nil, err
	}
	return answerList(ctx, f, &in.ListParams, wholeList(lines, nil), func(n registry.Notice) Notice {
		return Notice{showReported(n.ReportedDelta), n.NewValue, n.NewStandardUncertainty, n.Moved}
	}, noticeTable)
}
