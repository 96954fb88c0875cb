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
		return addJob(ctx, tx, jobCode, JobRevisionApproval, actor.Person, revisionArguments{code, actor.Person, strings.TrimSpace(q.Reason)})
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
