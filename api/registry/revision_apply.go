package registry

import (
	"context"
	"encoding/json"
	"fmt"
	"strings"
	"time"

	"deltamoor/store"
)

// maxUntold bounds the versions that a revision may leave without a new value.
const maxUntold = 5000

type revisionArguments struct {
	Revision string `json:"revision"`
	By       string `json:"by"`
	Reason   string `json:"reason"`
}

type revisionCursor struct {
	After  int64                 `json:"after"`
	Untold []store.UntoldVersion `json:"untold,omitempty"`
}

// ProposeRevision records a revision, with drafts of the values it states
// itself, and starts the job that draws everything affected up again. The
// affected set is frozen at the ledger's head of this moment. Nothing that is
// in force changes.
func (r *Registry) ProposeRevision(ctx context.Context, actor Actor, p Proposal) (Item[store.Revision], store.Job, error) {
	var out Item[store.Revision]
	var job store.Job
	if err := actor.need(MayManage); err != nil {
		return out, job, err
	}
	if strings.TrimSpace(p.Reason) == "" {
		return out, job, Complain("this revision cannot be recorded", []Complaint{{Place: "body.reason", Found: "nothing", Expected: "why, in a sentence: it stands on everything drawn up again"}})
	}
	code, err := store.NewCode('X', r.rand)
	if err != nil {
		return out, job, err
	}
	jobCode, err := store.NewCode(store.LetterJob, r.rand)
	if err != nil {
		return out, job, err
	}
	err = r.write(ctx, actor, MayManage, func(ctx context.Context, tx *store.Tx) error {
		body, err := revisionOf(ctx, &tx.View, actor.Laboratory, p)
		if err != nil {
			return err
		}
		c, err := compile(ctx, &tx.View, actor.Laboratory, body)
		if err != nil {
			return err
		}
		reason := strings.TrimSpace(p.Reason)
		ref, err := tx.Append(ctx, store.Draft{Kind: store.KindRevision, Code: code, By: actor.Person, Reason: reason, Value: body, After: first})
		if err != nil {
			return err
		}
		for _, value := range body.Values {
			if value.New != nil || value.Withdrawn {
				continue
			}
			d := c.values[value.Old.Bare()].draft(actor.Laboratory, actor.Person, reasonOf(code, reason))
			d.Inputs = append(d.Inputs, store.Input{Part: "revision", Ref: ref})
			if _, err := tx.Append(ctx, d); err != nil {
				return err
			}
		}
		return addJob(ctx, tx, jobCode, JobRevision, actor.Person, revisionArguments{code, actor.Person, reason})
	})
	if err != nil {
		return out, job, err
	}
	if out, err = reread[store.Revision](ctx, r, actor, store.KindRevision, code); err != nil {
		return out, job, err
	}
	job, err = r.Job(ctx, actor, jobCode)
	return out, job, err
}

// reasonOf is the reason that stands on what a revision draws up.
func reasonOf(code, reason string) string {
	return fmt.Sprintf("revision %s: %s", store.FormatCode(code), reason)
}

// revisionStep begins, or goes on with, a job of a revision.
func (r *Registry) revisionStep(ctx context.Context, laboratory string, job *store.Job, steps stepping) (func(context.Context, *store.Tx, *store.Job) error, error) {
	var a revisionArguments
	if err := json.Unmarshal([]byte(job.Arguments), &a); err != nil {
		return nil, fmt.Errorf("arguments of job %s: %w", job.Code, err)
	}
	if job.Kind == JobRevisionApproval {
		w := &approving{laboratory: laboratory, arguments: a, steps: steps}
		return w.step, nil
	}
	w := &redrafting{registry: r, laboratory: laboratory, arguments: a, steps: steps}
	return w.step, w.begin(ctx, job)
}

// redrafting is the job that draws everything affected up again.
type redrafting struct {
	registry   *Registry
	laboratory string
	arguments  revisionArguments
	steps      stepping
	revision   store.Version[store.Revision]
	changes    *changes
	ahead      []store.AffectedVersion // next in the ledger, read before the step
	end        bool                    // nothing after ahead
}

// aheadSize is how many affected versions are read at once.
const aheadSize = 5000

func (w *redrafting) begin(ctx context.Context, job *store.Job) error {
	return w.registry.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		raw, err := v.Version(ctx, store.Key{Laboratory: w.laboratory, Kind: store.KindRevision, Code: w.arguments.Revision}, 1)
		if err != nil {
			return err
		}
		if w.revision, err = store.Decode[store.Revision](raw); err != nil {
			return err
		}
		if w.changes, err = compile(ctx, v, w.laboratory, w.revision.Value); err != nil {
			return err
		}
		if job.Total == 0 {
			q := store.AffectedQuery{Laboratory: w.laboratory, Roots: w.changes.roots(), AsOf: &w.revision.Value.FrozenAt, After: -1}
			return v.Affected(ctx, q, func(store.AffectedVersion) error { job.Total++; return nil })
		}
		return nil
	})
}

// look reads ahead when nothing is left of what was read before.
func (w *redrafting) look(ctx context.Context, v *store.View, after int64) error {
	if len(w.ahead) > 0 && w.ahead[0].Position <= after {
		n := 0
		for n < len(w.ahead) && w.ahead[n].Position <= after {
			n++
		}
		w.ahead = w.ahead[n:]
	}
	if len(w.ahead) > 0 || w.end {
		return nil
	}
	w.ahead = nil
	q := store.AffectedQuery{Laboratory: w.laboratory, Roots: w.changes.roots(), AsOf: &w.revision.Value.FrozenAt, After: after, Limit: aheadSize}
	err := v.Affected(ctx, q, func(a store.AffectedVersion) error { w.ahead = append(w.ahead, a); return nil })
	w.end = len(w.ahead) < aheadSize
	return err
}

// step draws up the next versions, or ends the job with the hash of the set.
func (w *redrafting) step(ctx context.Context, tx *store.Tx, job *store.Job) error {
	cursor := revisionCursor{After: -1}
	if job.Cursor != "" {
		if err := json.Unmarshal([]byte(job.Cursor), &cursor); err != nil {
			return fmt.Errorf("cursor of job %s: %w", job.Code, err)
		}
	}
	if err := w.look(ctx, &tx.View, cursor.After); err != nil {
		return err
	}
	if len(w.ahead) == 0 {
		return w.finish(ctx, tx, job, cursor)
	}
	here := map[string]store.Ref{} // drafts of this step, which lists do not show yet
	name := func(key store.Key, from *store.Instant) string { return key.String() + " " + instantText(from) }
	rv := &reviser{changes: w.changes, v: &tx.View, src: &tx.View, revision: w.revision.Ref, by: w.arguments.By, reason: reasonOf(w.arguments.Revision, w.arguments.Reason),
		untold: map[store.Ref]string{}, from: map[store.Ref]*store.Instant{}}
	for _, u := range cursor.Untold {
		rv.untold[u.Ref.Bare()] = u.Why
	}
	rv.put = func(ctx context.Context, d store.Draft) (store.Ref, error) {
		ref, err := tx.Append(ctx, d)
		here[name(ref.Key, d.ValidFrom)] = ref
		return ref, err
	}
	rv.drafted = func(ctx context.Context, key store.Key, from *store.Instant) (store.Ref, error) {
		if ref, ok := here[name(key, from)]; ok {
			return ref, nil
		}
		return tx.DraftOf(ctx, w.arguments.Revision, key, from)
	}
	began := time.Now()
	for i, a := range w.ahead {
		if len(here) >= w.steps.versions || i > 0 && time.Since(began) > w.steps.period {
			break
		}
		out, err := rv.revise(ctx, a)
		if err != nil {
			return err
		}
		if out.untold != "" {
			cursor.Untold = append(cursor.Untold, store.UntoldVersion{Ref: a.Ref, Why: out.untold})
			if len(cursor.Untold) > maxUntold {
				return Refuse(TooLarge, "more than %d versions could not be drawn up again: make the revision smaller", maxUntold)
			}
		}
		cursor.After = a.Position
		job.Done++
	}
	text, err := json.Marshal(cursor)
	job.Cursor = string(text)
	return err
}

func (w *redrafting) finish(ctx context.Context, tx *store.Tx, job *store.Job, cursor revisionCursor) error {
	set, err := tx.DraftedSet(ctx, w.laboratory, w.arguments.Revision)
	if err != nil {
		return err
	}
	set.Untold = cursor.Untold
	body := w.revision.Value
	body.Phase, body.Drafted = store.RevisionDrafted, &set
	after := 1
	_, err = tx.Append(ctx, store.Draft{Kind: store.KindRevision, Code: w.arguments.Revision, By: w.arguments.By, Reason: w.arguments.Reason, Value: body, After: &after})
	job.State = store.JobDone
	job.Message = fmt.Sprintf("%d calibrations, %d values, %d final values drawn up again, %d could not be; set %s", set.Calibrations, set.Values, set.Finals, len(set.Untold), set.Hash)
	return err
}
