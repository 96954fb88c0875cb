package rest

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"reflect"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A NewRevision says what may have been wrong: any number of values, bottles,
// method versions and readings, all in one revision.
type NewRevision struct {
	Reason     string              `json:"reason,omitempty" maxLength:"3000" doc:"Asked for unless preview=true; it stands on everything drawn up again."`
	Values     []RevisedValue      `json:"values,omitempty" maxItems:"500"`
	Units      []SuspectUnit       `json:"units,omitempty" maxItems:"500"`
	Methods    []RevisedMethod     `json:"methods,omitempty" maxItems:"500"`
	Exclusions []RevisionExclusion `json:"exclusions,omitempty" maxItems:"500"`
}

// A RevisedValue is one assigned value that changes or falls away. Exactly one
// of value, use and withdrawn is given.
type RevisedValue struct {
	Laboratory string     `json:"laboratory,omitempty" maxLength:"8" doc:"Left out: the own one where it has such a value, else common."`
	Material   string     `json:"material" maxLength:"40"`
	Scale      string     `json:"scale" maxLength:"40" example:"d13C-VPDB-LSVEC"`
	Measurand  string     `json:"measurand,omitempty" maxLength:"60" doc:"Left out: total."`
	Version    int        `json:"version,omitempty" minimum:"1" doc:"The version no longer to be used; left out: the one in force."`
	Use        int        `json:"use,omitempty" minimum:"1" doc:"Number of a recorded version to use in its place."`
	Value      *Decimal   `json:"value,omitempty" doc:"‰; a version that the revision drafts."`
	U          *Decimal   `json:"u,omitempty" doc:"Standard uncertainty of value, k = 1 (‰): short for stated with the kind standard."`
	Stated     *Stated    `json:"stated,omitempty" doc:"The uncertainty of value as its source printed it."`
	Basis      string     `json:"basis,omitempty" enum:"certificate,literature,partner,provisional" doc:"Of value; left out: literature."`
	Evidence   string     `json:"evidence,omitempty" maxLength:"2000"`
	Withdrawn  bool       `json:"withdrawn,omitempty" doc:"Sessions are fitted without it."`
	From       *time.Time `json:"from,omitempty" doc:"For sessions that started then or later; left out: all."`
}

// A SuspectUnit is a bottle whose readings do not count since a date.
type SuspectUnit struct {
	Unit  string     `json:"unit" maxLength:"40" doc:"Code of the unit."`
	Since *time.Time `json:"since,omitempty" doc:"In sessions that started then or later; left out: since when the unit is recorded as suspect, else all."`
}

// A RevisedMethod says which version of a method should have been used.
type RevisedMethod struct {
	Method  string `json:"method" maxLength:"40"`
	Version int    `json:"version" minimum:"1" doc:"The wrong one."`
	Use     int    `json:"use" minimum:"1" doc:"The right one."`
}

// A RevisionExclusion names readings that should have been left out.
type RevisionExclusion struct {
	Session  string `json:"session" maxLength:"40"`
	Readings []int  `json:"readings" minItems:"1" maxItems:"10000"`
}

func (n NewRevision) proposal() (registry.Proposal, error) {
	p := registry.Proposal{Reason: n.Reason}
	for i, v := range n.Values {
		q := registry.ProposedValue{Laboratory: v.Laboratory, Material: v.Material, Scale: v.Scale, Measurand: v.Measurand, Version: v.Version, Use: v.Use,
			Basis: v.Basis, Evidence: v.Evidence, Withdrawn: v.Withdrawn, From: instantPointer(v.From)}
		if v.Value != nil {
			q.Value = store.Decimal(*v.Value)
		}
		switch {
		case v.U != nil && v.Stated != nil:
			return p, complain("this revision cannot be evaluated", fmt.Sprintf("body.values[%d].u", i), string(*v.U)+", beside stated", "one of the two")
		case v.U != nil:
			q.Stated = store.Stated{Text: string(*v.U), Kind: "standard"}
		case v.Stated != nil:
			q.Stated = store.Stated(*v.Stated)
		}
		p.Values = append(p.Values, q)
	}
	for i, u := range n.Units {
		code, err := parseCode(fmt.Sprintf("body.units[%d].unit", i), u.Unit, store.KindUnit)
		if err != nil {
			return p, err
		}
		p.Units = append(p.Units, store.SuspectUnit{Unit: code, Since: instantPointer(u.Since)})
	}
	for _, m := range n.Methods {
		p.Methods = append(p.Methods, registry.ProposedMethod(m))
	}
	for i, x := range n.Exclusions {
		code, err := parseCode(fmt.Sprintf("body.exclusions[%d].session", i), x.Session, store.KindSession)
		if err != nil {
			return p, err
		}
		p.Exclusions = append(p.Exclusions, store.RevisionExclusion{Session: code, Readings: x.Readings})
	}
	return p, nil
}

// A RevisionPreview says what a proposal would move; nothing is stored.
type RevisionPreview struct {
	Laboratory   string           `json:"laboratory"`
	Position     int64            `json:"position" doc:"Size of the ledger that it was evaluated at."`
	Calibrations AffectedCount    `json:"calibrations"`
	Results      AffectedCount    `json:"results" doc:"Of samples and controls in those calibrations."`
	Values       AffectedCount    `json:"values"`
	Finals       AffectedCount    `json:"finals"`
	Reported     AffectedCount    `json:"reported"`
	Passed       int64            `json:"passed" doc:"Drafts, and what is declined, superseded or withdrawn: not counted above."`
	Judged       int64            `json:"judged" doc:"Calibrations whose controls were judged by a changed value."`
	Spread       []AffectedSpread `json:"spread" doc:"How many results move by how much of their own u."`
	Largest      []Affected       `json:"largest" doc:"Assigned values, final values and reported deltas by |shift|/u, largest first."`
	Affected     []Affected       `json:"affected" doc:"In the order of the ledger, at most limit."`
	More         int64            `json:"more" doc:"Affected beyond limit."`
}

// An AffectedCount counts what a revision moves of one kind.
type AffectedCount struct {
	Moved  int64 `json:"moved"`
	Over   int64 `json:"over" doc:"By more than half of u."`
	Untold int64 `json:"untold" doc:"By how much cannot be told."`
}

// An AffectedSpread is one class of |shift|/u.
type AffectedSpread struct {
	Below *float64 `json:"below" doc:"null for the last class."`
	Count int64    `json:"count"`
}

// An Affected thing is a calibration, an assigned value, a final value or a reported delta.
type Affected struct {
	Kind     string        `json:"kind" enum:"calibration,value,final,reported"`
	Code     string        `json:"code" doc:"Of the record; of a reported delta its permanent code."`
	Version  int           `json:"version"`
	Line     *int          `json:"line,omitempty" doc:"Of a calibration: the result that moves most. Of a reported delta: its line."`
	State    string        `json:"state"`
	Scale    string        `json:"scale,omitempty"`
	Position int64         `json:"position"`
	Value    *float64      `json:"value" doc:"As it stands (‰)."`
	U        *float64      `json:"u" doc:"As it stands (‰)."`
	Shift    *float64      `json:"shift" doc:"Predicted to first order (‰); null where it cannot be told."`
	Ratio    *float64      `json:"ratio" doc:"|shift|/u; null where u is 0 or the shift cannot be told."`
	Parts    []float64     `json:"parts" doc:"What each change brings, in the order values, units, methods, exclusions; they add up to the shift."`
	Why      string        `json:"why,omitempty" doc:"Why the shift cannot be told."`
	Full     *Reevaluation `json:"full,omitempty" doc:"With full=true: drawn up again."`
}

// A Reevaluation is a value drawn up again.
type Reevaluation struct {
	Fixed *float64 `json:"fixed" doc:"Shift at the variances and weights of the old value (‰)."`
	Shift *float64 `json:"shift" doc:"Shift with everything estimated again (‰)."`
	U     *float64 `json:"u" doc:"The new standard uncertainty (‰)."`
	Why   string   `json:"why,omitempty" doc:"Why it cannot be told."`
}

func showAffected(a registry.Affected) Affected {
	out := Affected{Kind: string(a.Kind), Code: showCode(a.Kind, a.Ref.Code), Version: a.Ref.Version, State: string(a.State), Scale: a.Scale, Position: a.Position,
		Parts: append([]float64{}, a.Parts...), Why: a.Why}
	if a.Kind == store.KindReport {
		out.Kind, out.Code = "reported", store.FormatCode(a.Reported)
	}
	if a.Kind == store.KindReport || a.Kind == store.KindCalibration && a.Line >= 0 {
		out.Line = &a.Line
	}
	if a.Kind != store.KindCalibration || a.Line >= 0 {
		out.Value, out.U = &a.Value, &a.StandardUncertainty
	}
	if a.Why == "" {
		out.Shift = &a.Shift
		if a.StandardUncertainty > 0 || a.Shift == 0 {
			out.Ratio = &a.Ratio
		}
	}
	if e := a.Full; e != nil {
		out.Full = &Reevaluation{Why: e.Why}
		if e.Why == "" {
			out.Full.Fixed, out.Full.Shift, out.Full.U = &e.Fixed, &e.Shift, &e.StandardUncertainty
		}
	}
	return out
}

// accepted202: work that grows with the registry is accepted and goes on as a job.
func accepted202[T any](f *face, op *huma.Operation) {
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[T](), true, "")
	op.DefaultStatus = http.StatusAccepted
	op.Responses["202"] = &huma.Response{Description: "Recorded; a job draws everything up again.", Content: map[string]*huma.MediaType{"application/json": {Schema: schema}}}
}

// A RevisionMade is a recorded revision and the job that draws everything up again.
type RevisionMade struct {
	Revision Revision `json:"revision"`
	Job      Job      `json:"job"`
}

// RevisionParams are those of a proposal.
type RevisionParams struct {
	PreviewParam
	Full      bool    `query:"full" doc:"With preview=true: also draw up again, for at most 2000 versions."`
	Drafts    bool    `query:"drafts" doc:"With preview=true: drafts too."`
	Threshold float64 `query:"threshold" minimum:"0" doc:"With preview=true: list only what moves by this part of its u or more."`
	Top       int     `query:"top" minimum:"1" maximum:"1000" doc:"With preview=true: how many are ranked; left out: 50."`
	Limit     int     `query:"limit" minimum:"1" maximum:"5000" doc:"With preview=true: how many are listed; left out: 100."`
}

func (f *face) addRevision(ctx context.Context, actor registry.Actor, in *struct {
	RevisionParams
	Body NewRevision
}) (*answer, error) {
	p, err := in.Body.proposal()
	if err != nil {
		return nil, err
	}
	if in.Preview {
		return f.previewRevision(ctx, actor, p, in.RevisionParams)
	}
	it, job, err := f.registry.ProposeRevision(ctx, actor, p)
	if err != nil {
		return nil, err
	}
	out := RevisionMade{showRevision(it), showJob(job)}
	return jsonAnswer(out, 202, map[string]string{"ETag": quoteTag(it.Tag()), "Location": "/v1/revisions/" + out.Revision.Code})
}

func (f *face) previewRevision(ctx context.Context, actor registry.Actor, p registry.Proposal, in RevisionParams) (*answer, error) {
	p.Full, p.Drafts, p.Threshold, p.Top = in.Full, in.Drafts, in.Threshold, in.Top
	limit := in.Limit
	if limit == 0 {
		limit = 100
	}
	out := RevisionPreview{Affected: []Affected{}}
	s, err := f.registry.PreviewRevision(ctx, actor, p, func(a registry.Affected) error {
		if len(out.Affected) < limit {
			out.Affected = append(out.Affected, showAffected(a))
		} else {
			out.More++
		}
		return nil
	})
	if err != nil {
		return nil, err
	}
	out.Laboratory, out.Position, out.Passed, out.Judged = s.Laboratory, s.Position, s.Passed, s.Judged
	out.Calibrations, out.Results, out.Values = AffectedCount(s.Calibrations), AffectedCount(s.Results), AffectedCount(s.Values)
	out.Finals, out.Reported = AffectedCount(s.Finals), AffectedCount(s.Reported)
	limits := registry.SpreadLimits()
	for i, n := range s.Spread {
		class := AffectedSpread{Count: n}
		if i < len(limits) {
			class.Below = &limits[i]
		}
		out.Spread = append(out.Spread, class)
	}
	out.Largest = convert(s.Largest, showAffected)
	return jsonAnswer(out, 200, nil)
}

// A Revision is a recorded revision.
type Revision struct {
	Recorded
	Phase      string              `json:"phase" enum:"proposed,drafted" doc:"proposed until its job has drawn everything up again."`
	Values     []RevisedVersion    `json:"values"`
	Units      []SuspectUnit       `json:"units"`
	Methods    []RevisedMethod     `json:"methods"`
	Exclusions []RevisionExclusion `json:"exclusions"`
	FrozenAt   time.Time           `json:"frozen_at" doc:"Nothing recorded later belongs to the affected set."`
	Frozen     int64               `json:"frozen_position" doc:"Size of the ledger then."`
	Drafted    *DraftedSet         `json:"drafted" doc:"null while proposed."`
}

// A RevisedVersion is a value that a revision replaces or withdraws.
type RevisedVersion struct {
	Old       Input      `json:"old"`
	New       *Input     `json:"new,omitempty" doc:"A recorded version used in its place."`
	Value     *Decimal   `json:"value,omitempty" doc:"Of the version that the revision drafts (‰)."`
	U         *float64   `json:"u,omitempty" doc:"Its standard uncertainty (‰)."`
	Withdrawn bool       `json:"withdrawn,omitempty"`
	From      *time.Time `json:"from,omitempty"`
}

// A DraftedSet is what a revision drew up.
type DraftedSet struct {
	Calibrations int64           `json:"calibrations"`
	Values       int64           `json:"values"`
	Finals       int64           `json:"finals"`
	Hash         string          `json:"hash" doc:"SHA-256 over the drafts' body hashes, sorted: an approval binds it."`
	Untold       []UntoldVersion `json:"untold" doc:"What could not be drawn up again."`
}

// An UntoldVersion is a version whose new value cannot be told, and why.
type UntoldVersion struct {
	Kind    string `json:"kind"`
	Code    string `json:"code"`
	Version int    `json:"version"`
	Why     string `json:"why"`
}

func showVersionRef(part string, ref store.Ref) Input {
	return Input{Part: part, Laboratory: ref.Laboratory, Kind: string(ref.Kind), Code: showCode(ref.Kind, ref.Code), Version: ref.Version, Hash: ref.Hash.String()}
}

func showRevision(it registry.Item[store.Revision]) Revision {
	v := it.Value
	out := Revision{Recorded: recorded(it), Phase: v.Phase, FrozenAt: v.FrozenAt.Time(), Frozen: v.Position,
		Values: convert(v.Values, func(r store.RevisedValue) RevisedVersion {
			x := RevisedVersion{Old: showVersionRef("old", r.Old), Withdrawn: r.Withdrawn, From: timePointer(r.From)}
			if r.New != nil {
				now := showVersionRef("new", *r.New)
				x.New = &now
			} else if !r.Withdrawn {
				value := Decimal(r.Value)
				x.Value, x.U = &value, &r.StandardUncertainty
			}
			return x
		}),
		Units: convert(v.Units, func(u store.SuspectUnit) SuspectUnit {
			return SuspectUnit{store.FormatCode(u.Unit), timePointer(u.Since)}
		}),
		Methods: convert(v.Methods, func(m store.ReplacedMethod) RevisedMethod {
			return RevisedMethod{m.Old.Code, m.Old.Version, m.New.Version}
		}),
		Exclusions: convert(v.Exclusions, func(x store.RevisionExclusion) RevisionExclusion {
			return RevisionExclusion{store.FormatCode(x.Session), append([]int{}, x.Readings...)}
		})}
	if d := v.Drafted; d != nil {
		out.Drafted = &DraftedSet{d.Calibrations, d.Values, d.Finals, d.Hash.String(), convert(d.Untold, func(u store.UntoldVersion) UntoldVersion {
			return UntoldVersion{string(u.Ref.Kind), showCode(u.Ref.Kind, u.Ref.Code), u.Ref.Version, u.Why}
		})}
	}
	return out
}

var revisionKind = kindOfRecord[store.Revision, Revision]{kind: store.KindRevision, show: showRevision, made: true,
	csv: table[Revision]{columns("phase", "calibrations", "values", "finals", "set"), func(r Revision) []string {
		d := r.Drafted
		if d == nil {
			d = &DraftedSet{}
		}
		return r.row(r.Phase, fmt.Sprint(d.Calibrations), fmt.Sprint(d.Values), fmt.Sprint(d.Finals), d.Hash)
	}}}

// A RevisionDecision is a decision on a revision; an approval names the hash of the set.
type RevisionDecision struct {
	NewDecision
	Set string `json:"set,omitempty" maxLength:"64" doc:"With approved: the hash of the drafted set that its author saw."`
}

// decideRevision records a decision. An approval starts the job that carries it
// to the members of the set.
func (f *face) decideRevision(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	MatchParam
	Body RevisionDecision
}) (*one[Revision], error) {
	code, err := revisionKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	if in.Body.Decision != "approved" {
		it, err := decide[store.Revision](ctx, f, actor, store.KindRevision, code, in.MatchParam, in.Body.NewDecision)
		if err != nil {
			return nil, err
		}
		return &one[Revision]{ETag: quoteTag(it.Tag()), Body: showRevision(it)}, nil
	}
	if !actor.May(registry.MayApprove) { // before anything of the record is told
		return nil, registry.Refuse(registry.Refused, "%s may not approve in laboratory %s", actor.Person, actor.Laboratory)
	}
	it, err := seen[store.Revision](ctx, f, actor, store.KindRevision, code, in.MatchParam)
	if err != nil {
		return nil, err
	}
	hash, err := parseHash("body.set", in.Body.Set)
	if err != nil {
		return nil, err
	}
	if hash == nil {
		return nil, complain("this revision cannot be approved", "body.set", "", "the hash of the drafted set, as the revision shows it")
	}
	if _, err := f.registry.ApproveRevision(ctx, actor, code, *hash, registry.DecisionRequest{Version: it.Ref.Version, Seen: len(it.Decisions), Reason: in.Body.Reason}); err != nil {
		return nil, err
	}
	it, err = registry.One[store.Revision](ctx, f.registry, actor, store.KindRevision, code, it.Ref.Version, store.Moment{})
	if err != nil {
		return nil, err
	}
	return &one[Revision]{ETag: quoteTag(it.Tag()), Body: showRevision(it)}, nil
}

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

// A Job is long work in steps.
type Job struct {
	Code      string    `json:"code"`
	Kind      string    `json:"kind"`
	State     string    `json:"state" enum:"waiting,running,done,failed,cancelled"`
	Done      int64     `json:"done"`
	Total     int64     `json:"total" doc:"0 while it is not known."`
	Message   string    `json:"message"`
	CreatedBy string    `json:"created_by"`
	CreatedAt time.Time `json:"created_at"`
	UpdatedAt time.Time `json:"updated_at"`
}

func showJob(j store.Job) Job {
	return Job{store.FormatCode(j.Code), j.Kind, string(j.State), j.Done, j.Total, j.Message, j.CreatedBy, j.CreatedAt.Time(), j.UpdatedAt.Time()}
}

func (f *face) job(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[Job], error) {
	code, err := store.ParseCode(in.Code)
	if fault := (*store.CodeError)(nil); errors.As(err, &fault) || err == nil && code[0] != store.LetterJob {
		return nil, complain("this is not the code of a job", "path.code", in.Code, "the code of a job")
	}
	if err != nil {
		return nil, err
	}
	j, err := f.registry.Job(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &plain[Job]{showJob(j)}, nil
}
