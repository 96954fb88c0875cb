package registry

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"slices"
	"strings"

	"deltamoor/store"
)

// ApproveRevision approves everything a revision drafted by one decision, which
// binds the hash of the set that its author saw. The decision stands at one
// place of the ledger; a job then carries it to the members, from the top. What
// was in force stays as it is, superseded.
func (r *Registry) ApproveRevision(ctx context.Context, actor Actor, code string, hash store.Hash, q DecisionRequest) (store.Job, error) {
	var job store.Job
	if err := actor.need(MayApprove); err != nil {
		return job, err
	}
	jobCode, err := store.NewCode(store.LetterJob, r.rand)
	if err != nil {
		return job, err
	}
	err = r.write(ctx, actor, MayApprove, func(ctx context.Context, tx *store.Tx) error {
		key := store.Key{Laboratory: actor.Laboratory, Kind: store.KindRevision, Code: code}
		it, err := newest[store.Revision](ctx, &tx.View, key)
		if err != nil {
			return err
		}
		if it.Value.Drafted == nil {
			return Refuse(Conflict, "revision %s is not drawn up yet: its job has not ended", store.FormatCode(code))
		}
		if q.Version != it.Ref.Version {
			return Refuse(Stale, "revision %s has version %d by now, not %d: read it again", store.FormatCode(code), it.Ref.Version, q.Version)
		}
		set, err := tx.DraftedSet(ctx, actor.Laboratory, code)
		if err != nil {
			return err
		}
		if set.Hash != it.Value.Drafted.Hash || hash != set.Hash {
			return Refuse(Conflict, "the drafts of revision %s have the hash %s, not %s: look at the set again", store.FormatCode(code), set.Hash, hash)
		}
		second, err := revisionNeedsSecondPerson(ctx, &tx.View, actor.Laboratory)
		if err != nil {
			return err
		}
		if second && it.RecordedBy == actor.Person {
			return Refuse(Refused, "%s was made by %s; approval needs another person", versionName(it.Ref), actor.Person)
		}
		for _, value := range it.Value.Values {
			if value.New == nil {
				continue
			}
			state, _, err := tx.State(ctx, *value.New, store.Moment{})
			if err != nil {
				return err
			}
			if state != store.Approved && state != store.Superseded {
				return Refuse(Conflict, "revision %s rests on %s, which is %s; approve that first", store.FormatCode(code), versionName(*value.New), state)
			}
		}
		_, err = decide(ctx, tx, actor, store.Raw{Ref: it.Ref}, DecisionRequest{Act: "approved", Version: q.Version, Seen: q.Seen, Reason: q.Reason, Meaning: "set " + hash.String()})
		if err != nil {
			return err
		}
		return addJob(ctx, tx, jobCode, JobRevisionApproval, revisionArguments{code, actor.Person, strings.TrimSpace(q.Reason)})
	})
	if err != nil {
		return job, err
	}
	return r.Job(ctx, actor, jobCode)
}

// revisionNeedsSecondPerson is true where the laboratory asks for a second
// person for values or revisions, or any of its methods does.
func revisionNeedsSecondPerson(ctx context.Context, v *store.View, laboratory string) (bool, error) {
	lab, err := newest[store.Laboratory](ctx, v, store.Key{Laboratory: laboratory, Kind: store.KindLaboratory, Code: laboratory})
	if err != nil {
		return false, err
	}
	if slices.Contains(lab.Value.SecondPerson, store.KindValue) || slices.Contains(lab.Value.SecondPerson, store.KindRevision) {
		return true, nil
	}
	for after := ""; ; {
		methods, next, err := v.List(ctx, store.ListQuery{Laboratory: laboratory, Kind: store.KindMethod, After: after, Limit: MaxPage})
		if err != nil {
			return false, err
		}
		for _, raw := range methods {
			m, err := store.Decode[store.Method](raw.Raw)
			if err != nil || m.Value.Approval.SecondPerson {
				return err == nil, err
			}
		}
		if after = next; after == "" {
			return false, nil
		}
	}
}

// revisionApproved refuses a version that a revision drafted before that
// revision is approved.
func revisionApproved(ctx context.Context, v *store.View, of, revision store.Ref) error {
	_, state, err := v.InForce(ctx, revision.Key, store.Moment{})
	if ignoreNotFound(err) != nil {
		return err
	}
	if err != nil || state != store.Approved {
		return Refuse(Conflict, "%s belongs to the set of revision %s, which is not approved: it is approved with its set", versionName(of), store.FormatCode(revision.Code))
	}
	return nil
}

// approving is the job that carries the approval of a set to its members.
type approving struct {
	laboratory string
	arguments  revisionArguments
	steps      stepping
}

func (w *approving) step(ctx context.Context, tx *store.Tx, job *store.Job) error {
	cursor := revisionCursor{After: -1}
	if job.Cursor != "" {
		if err := json.Unmarshal([]byte(job.Cursor), &cursor); err != nil {
			return fmt.Errorf("cursor of job %s: %w", job.Code, err)
		}
	}
	revision, err := newest[store.Revision](ctx, &tx.View, store.Key{Laboratory: w.laboratory, Kind: store.KindRevision, Code: w.arguments.Revision})
	if err != nil {
		return err
	}
	if d := revision.Value.Drafted; d != nil {
		job.Total = d.Calibrations + d.Values + d.Finals
	}
	members, err := tx.Drafts(ctx, w.laboratory, w.arguments.Revision, cursor.After, w.steps.versions)
	if err != nil {
		return err
	}
	reason := reasonOf(w.arguments.Revision, w.arguments.Reason)
	for _, m := range members {
		why, err := w.approve(ctx, tx, m.Ref, revision.Value.FrozenAt, reason)
		if err != nil {
			return err
		}
		if why != "" && len(cursor.Untold) < maxUntold {
			cursor.Untold = append(cursor.Untold, store.UntoldVersion{Ref: m.Ref, Why: why})
		}
		cursor.After = m.Position
		job.Done++
	}
	if len(members) < w.steps.versions {
		job.State = store.JobDone
		job.Message = fmt.Sprintf("%d versions approved", job.Done-int64(len(cursor.Untold)))
		if len(cursor.Untold) > 0 {
			left := each(cursor.Untold, func(u store.UntoldVersion) string { return versionName(u.Ref) + ": " + u.Why })
			job.Message += fmt.Sprintf(", %d not: %s", len(left), short(left, 20))
		}
	}
	text, err := json.Marshal(cursor)
	job.Cursor = string(text)
	return err
}

// approve decides on one member; why says why it is left as it is.
func (w *approving) approve(ctx context.Context, tx *store.Tx, ref store.Ref, frozen store.Instant, reason string) (why string, err error) {
	raw, err := tx.Version(ctx, ref.Key, ref.Version)
	if err != nil {
		return "", err
	}
	state, decisions, err := tx.State(ctx, ref, store.Moment{})
	if err != nil {
		return "", err
	}
	switch state {
	case store.Approved, store.Superseded:
		return "", nil
	case store.Drafted, store.Submitted:
	default:
		return "it was " + string(state), nil
	}
	if ref.Kind != store.KindValue {
		now, _, err := tx.InForce(ctx, ref.Key, store.Moment{})
		if ignoreNotFound(err) != nil {
			return "", err
		}
		then, _, err := tx.InForce(ctx, ref.Key, store.Moment{AsOf: &frozen})
		if ignoreNotFound(err) != nil {
			return "", err
		}
		if now.Ref != then.Ref {
			return fmt.Sprintf("%s was approved since the revision was proposed", versionName(now.Ref)), nil
		}
	}
	second, err := needsSecondPerson(ctx, &tx.View, w.laboratory, raw)
	if err != nil {
		return "", err
	}
	if second && raw.RecordedBy == w.arguments.By {
		return "its approval needs another person", nil
	}
	if err := restsOnApproved(ctx, &tx.View, raw); err != nil {
		if refused := (*Error)(nil); errors.As(err, &refused) {
			return refused.Message, nil
		}
		return "", err
	}
	_, err = decide(ctx, tx, Actor{Person: w.arguments.By, Laboratory: w.laboratory}, raw, DecisionRequest{Act: "approved", Version: ref.Version, Seen: len(decisions),
		Reason: reason, Meaning: "approved with the set of its revision"})
	return "", err
}

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
	request := ReportRequest{Client: old.Value.Client, Title: old.Value.Title, Amends: q.Report, Reason: reasonOf(q.Revision, q.Reason), Note: old.Value.Note}
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
