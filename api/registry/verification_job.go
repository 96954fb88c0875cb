package registry

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"sync/atomic"
	"time"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// maxKeptFindings bounds the differences that a verification's job keeps.
const maxKeptFindings = 500

// How often a verification in the background tells how far it is, and looks
// whether it was cancelled.
const verificationPulse = 2 * time.Second

// keptVerification is what a job keeps of a verification: in its cursor, since
// nothing follows on it.
type keptVerification struct {
	Laboratories []keptLaboratory `json:"laboratories"`
	Recomputed   int              `json:"recomputed"`
	Equal        int              `json:"equal"`
	Count        int              `json:"count"`
	Findings     []store.Finding  `json:"findings"`
}

type keptLaboratory struct {
	Laboratory  string     `json:"laboratory"`
	Entries     int64      `json:"entries"`
	Root        store.Hash `json:"root"`
	Checkpoints int        `json:"checkpoints"`
}

// StartVerification starts the job that recomputes everything the actor's
// laboratory holds. One that waits or runs already is answered with that: two
// at once would tell the same.
func (r *Registry) StartVerification(ctx context.Context, actor Actor) (store.Job, error) {
	code, err := store.NewCode(store.LetterJob, r.rand)
	if err != nil {
		return store.Job{}, err
	}
	there := ""
	err = r.write(ctx, actor, MayRead, func(ctx context.Context, tx *store.Tx) error {
		there = code
		for _, state := range []store.JobState{store.JobRunning, store.JobWaiting} {
			jobs, err := tx.Jobs(ctx, actor.Laboratory, state, store.MaxLimit)
			if err != nil {
				return err
			}
			for _, j := range jobs {
				if j.Kind == JobVerification {
					there = j.Code
					return nil
				}
			}
		}
		return addJob(ctx, tx, code, JobVerification, actor.Person, struct{}{})
	})
	if err != nil {
		return store.Job{}, err
	}
	return r.Job(ctx, actor, there)
}

// VerificationBy gives what the job of a verification found. One that has not
// come to its end, or is of another kind, is refused.
func (r *Registry) VerificationBy(ctx context.Context, actor Actor, job string) (Verification, error) {
	j, err := r.Job(ctx, actor, job)
	if err != nil {
		return Verification{}, err
	}
	switch {
	case j.Kind != JobVerification:
		return Verification{}, Refuse(NotFound, "job %s is no verification: it is a %s", store.FormatCode(job), j.Kind)
	case j.State == store.JobFailed:
		return Verification{}, Refuse(Conflict, "the verification failed: %s", j.Message)
	case j.State != store.JobDone:
		return Verification{}, Refuse(Conflict, "the verification is %s, %d of %d entries done: ask again when it has ended", j.State, j.Done, j.Total)
	}
	var kept keptVerification
	if err := json.Unmarshal([]byte(j.Cursor), &kept); err != nil {
		return Verification{}, fmt.Errorf("what job %s found: %w", job, err)
	}
	out := Verification{Findings: kept.Findings, Count: kept.Count, Recomputed: kept.Recomputed, Equal: kept.Equal}
	for _, l := range kept.Laboratories {
		out.Laboratories = append(out.Laboratories, LaboratoryVerification{Laboratory: l.Laboratory, Entries: l.Entries, Root: ledger.Hash(l.Root), Checkpoints: l.Checkpoints})
	}
	return out, nil
}

// verifyInBackground does the work of a verification's job. It reads only, so
// it needs no steps: a pulse tells how far it is and notices a cancellation. A
// worker that is stopped leaves the job to be taken again from the beginning.
func (r *Registry) verifyInBackground(ctx context.Context, laboratory string, job store.Job) error {
	inner, cancel := context.WithCancel(ctx)
	defer cancel()
	var done, total atomic.Int64
	type ended struct {
		v   Verification
		err error
	}
	end := make(chan ended, 1)
	go func() {
		v, err := r.Verify(inner, VerifyRequest{Laboratories: []string{laboratory}, Workers: 1, Progress: func(d, t int64) { done.Store(d); total.Store(t) }})
		end <- ended{v, err}
	}()
	advance := func(j store.Job) error {
		j.Done, j.Total = done.Load(), total.Load()
		_, err := r.store.Write(ctx, laboratory, func(ctx context.Context, tx *store.Tx) error { return tx.AdvanceJob(ctx, j, stepLease) })
		return err
	}
	pulse := time.NewTicker(verificationPulse)
	defer pulse.Stop()
	for {
		select {
		case <-pulse.C:
			err := advance(job)
			switch {
			case errors.Is(err, store.ErrConflict): // cancelled, or taken by another
				cancel()
				<-end
				return nil
			case err != nil && ctx.Err() == nil && MeaningOf(err) != Unavailable:
				cancel()
				<-end
				return err
			}
		case e := <-end:
			if e.err != nil {
				return r.fail(ctx, laboratory, job, e.err)
			}
			kept := keptVerification{Recomputed: e.v.Recomputed, Equal: e.v.Equal, Count: e.v.Count, Findings: e.v.Findings[:min(len(e.v.Findings), maxKeptFindings)]}
			for _, l := range e.v.Laboratories {
				kept.Laboratories = append(kept.Laboratories, keptLaboratory{l.Laboratory, l.Entries, store.Hash(l.Root), l.Checkpoints})
			}
			text, err := json.Marshal(kept)
			if err != nil {
				return err
			}
			job.State, job.Cursor = store.JobDone, string(text)
			job.Message = fmt.Sprintf("%d numbers computed again, %d equal to the bit; %d differences found", e.v.Recomputed, e.v.Equal, e.v.Count)
			if err := advance(job); errors.Is(err, store.ErrConflict) {
				return nil // cancelled at the last moment
			} else if err != nil {
				return err
			}
			return nil
		}
	}
}
