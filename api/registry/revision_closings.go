package registry

import (
	"context"
	"strings"

	"deltamoor/store"
)

// Actions are how one set of a revision, the deltas of one report, is closed.
var Actions = []string{"re-issue", "annotate", "no action"}

// A RevisionSet is one report with deltas that a revision moves, and what
// became of it; Closing is nil while it is open.
type RevisionSet struct {
	Report  string
	Lines   int
	Closing *Item[store.Closing]
}

func closingKey(laboratory, revision, report string) store.Key {
	return store.Key{Laboratory: laboratory, Kind: store.KindClosing, Code: revision + "/" + report}
}

// RevisionSets lists the reports that a revision moves, by code, beginning
// after one; limit is that of a page.
func (r *Registry) RevisionSets(ctx context.Context, actor Actor, revision, after string, limit int) ([]RevisionSet, error) {
	var out []RevisionSet
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		if _, err := newest[store.Revision](ctx, v, store.Key{Laboratory: actor.Laboratory, Kind: store.KindRevision, Code: revision}); err != nil {
			return err
		}
		reports, err := v.ReportsOfRevision(ctx, actor.Laboratory, revision, after, "", Query{Limit: limit}.limit())
		if err != nil {
			return err
		}
		for _, rep := range reports {
			set := RevisionSet{Report: rep.Report, Lines: rep.Lines}
			closing, err := newest[store.Closing](ctx, v, closingKey(actor.Laboratory, revision, rep.Report))
			if ignoreNotFound(err) != nil {
				return err
			}
			if err == nil {
				set.Closing = &closing
			}
			out = append(out, set)
		}
		return nil
	})
	return out, err
}

// A Notice is one line of a report with its delta before and after a revision:
// what a letter to the client says.
type Notice struct {
	ReportedDelta
	// NewValue and NewStandardUncertainty are those of the draft, or of what is
	// approved of it (‰); Moved is false for lines that the revision does not touch.
	NewValue, NewStandardUncertainty float64
	Moved                            bool
}

// RevisionNotice gives the lines of one report with their new values.
func (r *Registry) RevisionNotice(ctx context.Context, actor Actor, revision, report string) ([]Notice, error) {
	rep, err := r.Report(ctx, actor, report)
	if err != nil {
		return nil, err
	}
	var out []Notice
	err = r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		out = nil
		for _, line := range rep.Lines {
			n := Notice{ReportedDelta: line, NewValue: line.Value, NewStandardUncertainty: line.StandardUncertainty}
			draft, err := v.DraftOf(ctx, revision, line.Final.Key, nil)
			if ignoreNotFound(err) != nil {
				return err
			}
			if err == nil && draft.Version > line.Final.Version {
				f, err := decodeVersion[store.Final](ctx, v, draft)
				if err != nil {
					return err
				}
				n.NewValue, n.NewStandardUncertainty, n.Moved = f.Value.Value, f.Value.StandardUncertainty, true
			}
			out = append(out, n)
		}
		return nil
	})
	return out, err
}

// A ClosingRequest says what becomes of one report that a revision moves.
type ClosingRequest struct {
	Revision, Report string
	Action           string
	Reason           string
}

// CloseRevision records what becomes of one report that an approved revision
// moves: it is issued again, as an amended report that cites the old one and
// the revision; or annotated; or nothing is done, and why.
func (r *Registry) CloseRevision(ctx context.Context, actor Actor, q ClosingRequest) (RevisionSet, error) {
	var out RevisionSet
	var c complaints
	c.oneOf("body.action", q.Action, Actions...)
	c.text("body.reason", q.Reason, 3000)
	if err := Complain("this set cannot be closed", c); err != nil {
		return out, err
	}
	if err := actor.need(MayApprove); err != nil {
		return out, err
	}
	lines, reissued, err := r.openSet(ctx, actor, q)
	if err != nil {
		return out, err
	}
	if q.Action == "re-issue" && reissued.Version == 0 {
		if reissued, err = r.reissue(ctx, actor, q); err != nil {
			return out, err
		}
	}
	out = RevisionSet{Report: q.Report, Lines: lines}
	key := closingKey(actor.Laboratory, q.Revision, q.Report)
	err = r.write(ctx, actor, MayApprove, func(ctx context.Context, tx *store.Tx) error {
		revision, state, err := tx.InForce(ctx, store.Key{Laboratory: actor.Laboratory, Kind: store.KindRevision, Code: q.Revision}, store.Moment{})
		if err != nil {
			return err
		}
		if state != store.Approved {
			return Refuse(Conflict, "revision %s is %s", store.FormatCode(q.Revision), state)
		}
		report, err := tx.Newest(ctx, store.Key{Laboratory: actor.Laboratory, Kind: store.KindReport, Code: q.Report})
		if err != nil {
			return err
		}
		body := store.Closing{Action: q.Action, Lines: lines}
		inputs := []store.Input{{Part: "closes", Ref: revision.Ref}, {Part: "report", Ref: report.Ref}}
		if q.Action == "re-issue" {
			body.Reissued = reissued.Code
			inputs = append(inputs, store.Input{Part: "reissued", Ref: reissued})
		}
		_, err = appendVersion(ctx, tx, actor, key, Edit{Reason: q.Reason}, inputs, body)
		return err
	})
	if err != nil {
		return out, err
	}
	closing, err := reread[store.Closing](ctx, r, actor, store.KindClosing, key.Code)
	out.Closing = &closing
	return out, err
}

// openSet checks that a set may be closed, and finds the amended report where
// an earlier attempt ended between issuing it and recording that.
func (r *Registry) openSet(ctx context.Context, actor Actor, q ClosingRequest) (lines int, reissued store.Ref, err error) {
	err = r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindRevision, Code: q.Revision}
		if _, err := v.Newest(ctx, key); err != nil {
			return missing(err, key)
		}
		_, state, err := v.InForce(ctx, key, store.Moment{})
		if ignoreNotFound(err) != nil {
			return err
		}
		if err != nil || state != store.Approved {
			return Refuse(Conflict, "revision %s is not approved: its sets are closed after that", store.FormatCode(q.Revision))
		}
		sets, err := v.ReportsOfRevision(ctx, actor.Laboratory, q.Revision, "", q.Report, 1)
		if err != nil {
			return err
		}
		if len(sets) == 0 {
			return Refuse(NotFound, "revision %s moves no delta of a report %q", store.FormatCode(q.Revision), store.FormatCode(q.Report))
		}
		lines = sets[0].Lines
		if _, err := v.Newest(ctx, closingKey(actor.Laboratory, q.Revision, q.Report)); err == nil {
			return Refuse(Conflict, "report %s is closed already for revision %s", store.FormatCode(q.Report), store.FormatCode(q.Revision))
		} else if ignoreNotFound(err) != nil {
			return err
		}
		edges, _, err := v.EdgesTo(ctx, store.EdgeQuery{To: store.Key{Laboratory: actor.Laboratory, Kind: store.KindReport, Code: q.Report}, FromKind: store.KindReport, Limit: MaxPage})
		if err != nil {
			return err
		}
		for _, e := range edges {
			if e.Part != "amends" {
				continue
			}
			raw, err := v.Version(ctx, e.From.Key, e.From.Version)
			if err != nil {
				return err
			}
			if strings.HasPrefix(raw.Reason, reasonOf(q.Revision, "")) {
				reissued = raw.Ref
			}
		}
		return nil
	})
	return lines, reissued, err
}

// reissue issues the amended report: the same lines, by what is in force now.
func (r *Registry) reissue(ctx context.Context, actor Actor, q ClosingRequest) (store.Ref, error) {
	old, err := r.Report(ctx, actor, q.Report)
	if err != nil {
		return store.Ref{}, err
	}
	request := ReportRequest{Client: old.Value.Client, Title: old.Value.Title, Amends: q.Report, Reason: reasonOf(q.Revision, q.Reason), Note: old.Value.Note, Conformity: old.Value.Conformity}
	err = r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		request.Finals = nil
		for _, line := range old.Lines {
			request.Finals = append(request.Finals, line.Final.Code)
			draft, err := v.DraftOf(ctx, q.Revision, line.Final.Key, nil)
			if ignoreNotFound(err) != nil {
				return err
			}
			if err == nil {
				state, _, err := v.State(ctx, draft, store.Moment{})
				if err != nil {
					return err
				}
				if state != store.Approved && state != store.Superseded {
					return Refuse(Conflict, "%s is %s: the approval of the revision has not reached it", versionName(draft), state)
				}
			}
		}
		return nil
	})
	if err != nil {
		return store.Ref{}, err
	}
	// The request's key belongs to the closing, which is the act that was asked for;
	// a repetition finds this report by what it amends.
	rep, err := r.Issue(context.WithValue(ctx, requestKey{}, nil), actor, request)
	return rep.Version.Ref, err
}

// Revisions lists the revisions of the laboratory.
func (r *Registry) Revisions(ctx context.Context, actor Actor, q Query) (Page[Item[store.Revision]], error) {
	var page Page[Item[store.Revision]]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		page, err = list[store.Revision](ctx, v, actor.Laboratory, store.KindRevision, q)
		return err
	})
	return page, err
}
