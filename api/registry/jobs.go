package registry

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"deltamoor/store"
)

// The kinds of jobs.
const (
	JobRevision         = "revision"          // draws everything affected up again
	JobRevisionApproval = "revision approval" // carries the approval of a set to its members
	JobVerification     = "verification"      // recomputes everything that the laboratory holds
)

// A stepping bounds the steps of a job.
type stepping struct {
	versions int
	period   time.Duration
	after    func() // called when a step is on disk; nil: nothing
}

// steadily is how jobs are worked on.
func steadily() stepping { return stepping{versions: 500, period: 2 * time.Second} }

// stepLease is how long a worker keeps a job without a word.
const stepLease = 30 * time.Second

func addJob(ctx context.Context, tx *store.Tx, code, kind string, by string, arguments any) error {
	text, err := json.Marshal(arguments)
	if err != nil {
		return err
	}
	return tx.AddJob(ctx, store.Job{Code: code, Kind: kind, Arguments: string(text), CreatedBy: by})
}

// Job reads the progress of long work.
func (r *Registry) Job(ctx context.Context, actor Actor, code string) (store.Job, error) {
	var job store.Job
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		job, err = v.Job(ctx, actor.Laboratory, code)
		return err
	})
	return job, err
}

// Work takes the job of a laboratory that has waited longest, or one whose
// worker has been silent, and runs it to its end in steps, each one act that
// also moves the job's cursor. An error leaves the job to be taken again when
// its lease has run out; what it did stays, and the next worker goes on from
// there. False: there is no job to do.
func (r *Registry) Work(ctx context.Context, laboratory, holder string) (bool, error) {
	return r.work(ctx, laboratory, holder, steadily())
}

func (r *Registry) work(ctx context.Context, laboratory, holder string, steps stepping) (bool, error) {
	var job store.Job
	_, err := r.store.Write(ctx, laboratory, func(ctx context.Context, tx *store.Tx) error {
		var err error
		job, err = tx.TakeJob(ctx, holder, stepLease)
		return err
	})
	if err != nil {
		return false, ignoreNotFound(err)
	}
	var step func(context.Context, *store.Tx, *store.Job) error
	switch job.Kind {
	case JobRevision, JobRevisionApproval:
		if step, err = r.revisionStep(ctx, laboratory, &job, steps); err != nil {
			return true, r.fail(ctx, laboratory, job, err)
		}
	case JobVerification:
		return true, r.verifyInBackground(ctx, laboratory, job)
	default:
		return true, r.fail(ctx, laboratory, job, fmt.Errorf("job %s is of the unknown kind %q", job.Code, job.Kind))
	}
	for !job.State.Ended() {
		var next store.Job
		_, err := r.store.Write(ctx, laboratory, func(ctx context.Context, tx *store.Tx) error {
			next = job
			if err := step(ctx, tx, &next); err != nil {
				return err
			}
			return tx.AdvanceJob(ctx, next, stepLease)
		})
		if err != nil {
			return true, r.fail(ctx, laboratory, job, err)
		}
		job = next
		if steps.after != nil {
			steps.after()
		}
	}
	return true, nil
}

// KeepWorking works on the jobs of every laboratory until the context ends,
// looking for new ones after each pause; failed is told what a job ended with.
func (r *Registry) KeepWorking(ctx context.Context, holder string, pause time.Duration, failed func(error)) {
	for ctx.Err() == nil {
		var laboratories []string
		err := r.store.Read(ctx, func(ctx context.Context, v *store.View) error {
			var err error
			laboratories, err = v.Laboratories(ctx)
			return err
		})
		busy := false
		for _, laboratory := range laboratories {
			did, workErr := r.Work(ctx, laboratory, holder)
			busy = busy || did && workErr == nil
			err = errors.Join(err, workErr)
		}
		if err != nil && ctx.Err() == nil {
			failed(err)
		}
		if busy {
			continue
		}
		select {
		case <-ctx.Done():
		case <-time.After(pause):
		}
	}
}

// fail ends a job that can never succeed, and returns the error. A worker that
// is being stopped, or a database that is away, ends nothing.
func (r *Registry) fail(ctx context.Context, laboratory string, job store.Job, cause error) error {
	if ctx.Err() != nil || MeaningOf(cause) == Unavailable || MeaningOf(cause) == Conflict || MeaningOf(cause) == Stale {
		return cause
	}
	job.State, job.Message = store.JobFailed, cause.Error()
	_, err := r.store.Write(ctx, laboratory, func(ctx context.Context, tx *store.Tx) error { return tx.AdvanceJob(ctx, job, 0) })
	if err != nil {
		return fmt.Errorf("%w; and ending the job: %v", cause, err)
	}
	return cause
}

// Jobs lists the jobs of the actor's laboratory, latest first.
func (r *Registry) Jobs(ctx context.Context, actor Actor, q Query) (Page[store.Job], error) {
	var page Page[store.Job]
	err := r.read(ctx, actor, func(ctx context.Context, v *store.View) error {
		var err error
		page.Items, page.After, err = v.JobsFrom(ctx, actor.Laboratory, q.After, q.limit())
		return err
	})
	return page, err
}

// CancelJob ends a job that waits or runs; what it did stays. Who started it
// may, and managers. One that carries a recorded approval to its members is not
// ended: the approval stands, and what it approves would be half in force.
func (r *Registry) CancelJob(ctx context.Context, actor Actor, code string) (store.Job, error) {
	job, err := r.Job(ctx, actor, code)
	if err != nil {
		return job, err
	}
	if job.CreatedBy != actor.Person {
		if err := actor.need(MayManage); err != nil {
			return job, err
		}
	}
	if job.Kind == JobRevisionApproval {
		return job, Refuse(Conflict, "job %s carries a recorded approval to its members, and goes on to its end", store.FormatCode(code))
	}
	_, err = r.store.Write(ctx, actor.Laboratory, func(ctx context.Context, tx *store.Tx) error { return tx.CancelJob(ctx, code) })
	if errors.Is(err, store.ErrConflict) {
		return job, &Error{Meaning: Conflict, Message: fmt.Sprintf("job %s has ended already", store.FormatCode(code)), Err: err}
	}
	if err != nil {
		return job, err
	}
	return r.Job(ctx, actor, code)
}
