package store

import (
	"context"
	"database/sql"
	"errors"
	"fmt"
	"time"
)

// IdempotencyPeriod is how long an answer is kept for a repeated request.
const IdempotencyPeriod = 7 * 24 * time.Hour

const selectRemembered = `SELECT request_hash, answer FROM idempotency
	WHERE laboratory = $1 AND person = $2 AND request_key = $3 AND created_at > $4`

// Recall returns the answer remembered for a person's idempotency key, or
// ErrNotFound. The same key with another request is ErrKeyReused.
func (v *View) Recall(ctx context.Context, laboratory, person, key string, request Hash) ([]byte, error) {
	var hash, answer []byte
	since := v.now - Instant(IdempotencyPeriod.Microseconds())
	err := v.q.one(ctx, selectRemembered, []any{laboratory, person, key, int64(since)}, &hash, &answer)
	if errors.Is(err, sql.ErrNoRows) {
		return nil, notFound("answer to idempotency key %q", key)
	}
	if err != nil {
		return nil, fmt.Errorf("recall idempotency key %q: %w", key, err)
	}
	if Hash(hash) != request {
		return nil, fmt.Errorf("%w: key %q", ErrKeyReused, key)
	}
	return answer, nil
}

const (
	insertRemembered = `INSERT INTO idempotency (laboratory, person, request_key, request_hash, answer, created_at) VALUES ($1, $2, $3, $4, $5, $6)`
	forget           = `DELETE FROM idempotency WHERE laboratory = $1 AND created_at <= $2`
	forgetOne        = `DELETE FROM idempotency WHERE laboratory = $1 AND person = $2 AND request_key = $3 AND created_at <= $4`
)

// Remember keeps the answer to a request under a person's idempotency key, in
// the transaction of its effect. Of two requests with one key at once the second
// is refused, ErrConflict, and finds the answer by Recall.
func (tx *Tx) Remember(ctx context.Context, person, key string, request Hash, answer []byte) error {
	if key == "" || len(key) > 255 {
		return &InvalidError{Place: "idempotency key", Found: fmt.Sprintf("%d bytes", len(key)), Expected: "1 to 255"}
	}
	since := tx.now - Instant(IdempotencyPeriod.Microseconds())
	if _, err := tx.q.exec(ctx, forgetOne, tx.laboratory, person, key, int64(since)); err != nil {
		return fmt.Errorf("remember idempotency key %q: %w", key, err)
	}
	if _, err := tx.q.exec(ctx, insertRemembered, tx.laboratory, person, key, request[:], append([]byte{}, answer...), int64(tx.now)); err != nil {
		return fmt.Errorf("remember idempotency key %q: %w", key, err)
	}
	return nil
}

const answerRemembered = `UPDATE idempotency SET answer = $5
	WHERE laboratory = $1 AND person = $2 AND request_key = $3 AND request_hash = $4`

// Answer replaces the answer that Remember kept before there was one.
func (tx *Tx) Answer(ctx context.Context, person, key string, request Hash, answer []byte) error {
	n, err := tx.q.exec(ctx, answerRemembered, tx.laboratory, person, key, request[:], append([]byte{}, answer...))
	if err != nil {
		return fmt.Errorf("answer idempotency key %q: %w", key, err)
	}
	if n == 0 {
		return notFound("request under idempotency key %q", key)
	}
	return nil
}

// Forget removes answers older than IdempotencyPeriod and returns how many.
func (tx *Tx) Forget(ctx context.Context) (int64, error) {
	since := tx.now - Instant(IdempotencyPeriod.Microseconds())
	n, err := tx.q.exec(ctx, forget, tx.laboratory, int64(since))
	if err != nil {
		return 0, fmt.Errorf("forget old idempotency keys of %s: %w", tx.laboratory, err)
	}
	return n, nil
}

const (
	takeLease = `INSERT INTO leases (laboratory, name, holder, until) VALUES ($1, $2, $3, $4)
		ON CONFLICT (laboratory, name) DO UPDATE SET holder = excluded.holder, until = excluded.until
		WHERE leases.until < $5 OR leases.holder = excluded.holder`
	dropLease = `DELETE FROM leases WHERE laboratory = $1 AND name = $2 AND holder = $3`
)

// TakeLease takes or renews a named lease for a period and reports whether the
// holder has it now. A lease not renewed runs out by itself.
func (tx *Tx) TakeLease(ctx context.Context, name, holder string, period time.Duration) (bool, error) {
	n, err := tx.q.exec(ctx, takeLease, tx.laboratory, name, holder, int64(tx.now)+period.Microseconds(), int64(tx.now))
	if err != nil {
		return false, fmt.Errorf("take lease %s/%s: %w", tx.laboratory, name, err)
	}
	return n == 1, nil
}

// DropLease gives a lease back; one held by somebody else stays.
func (tx *Tx) DropLease(ctx context.Context, name, holder string) error {
	if _, err := tx.q.exec(ctx, dropLease, tx.laboratory, name, holder); err != nil {
		return fmt.Errorf("give back lease %s/%s: %w", tx.laboratory, name, err)
	}
	return nil
}

// A JobState is where a job stands.
type JobState string

// The states of a job.
const (
	JobWaiting   JobState = "waiting"
	JobRunning   JobState = "running"
	JobDone      JobState = "done"
	JobFailed    JobState = "failed"
	JobCancelled JobState = "cancelled"
)

// Ended reports whether nothing more will happen to the job.
func (s JobState) Ended() bool { return s == JobDone || s == JobFailed || s == JobCancelled }

// A Job is long work in steps: how far it is, and how it goes on. What it did
// is versions.
type Job struct {
	Code      string
	Kind      string
	Arguments string
	State     JobState
	// Cursor is where the next step begins; "" at the beginning.
	Cursor      string
	Done, Total int64
	// Message says why it failed, or what came of it.
	Message   string
	CreatedBy string
	CreatedAt Instant
	UpdatedAt Instant
	// Holder works on it until Until.
	Holder string
	Until  Instant
}

const (
	jobColumns = `code, kind, arguments, state, cursor, done, total, message, created_by, created_at, updated_at, lease_holder, lease_until`
	selectJob  = `SELECT ` + jobColumns + ` FROM jobs WHERE laboratory = $1 AND code = $2`
	selectJobs = `SELECT ` + jobColumns + ` FROM jobs WHERE laboratory = $1 AND ($2 = '' OR state = $2)
		ORDER BY created_at DESC, code DESC LIMIT $3`
	selectNextJob = `SELECT code FROM jobs
		WHERE laboratory = $1 AND (state = 'waiting' OR state = 'running' AND lease_until < $2)
		ORDER BY created_at, code LIMIT 1`
	insertJob = `INSERT INTO jobs (laboratory, ` + jobColumns + `) VALUES ($1, $2, $3, $4, 'waiting', '', 0, $5, '', $6, $7, $7, '', 0)`
	takeJob   = `UPDATE jobs SET state = 'running', lease_holder = $3, lease_until = $4, updated_at = $5
		WHERE laboratory = $1 AND code = $2 AND (state = 'waiting' OR state = 'running' AND lease_until < $5)`
	advanceJob = `UPDATE jobs SET cursor = $4, done = $5, total = $6, message = $7, state = $8, lease_until = $9, updated_at = $10
		WHERE laboratory = $1 AND code = $2 AND lease_holder = $3 AND state = 'running'`
	cancelJob = `UPDATE jobs SET state = 'cancelled', updated_at = $3
		WHERE laboratory = $1 AND code = $2 AND state IN ('waiting', 'running')`
)

func scanJob(scan func(...any) error) (Job, error) {
	var j Job
	var state string
	err := scan(&j.Code, &j.Kind, &j.Arguments, &state, &j.Cursor, &j.Done, &j.Total, &j.Message, &j.CreatedBy, &j.CreatedAt, &j.UpdatedAt, &j.Holder, &j.Until)
	j.State = JobState(state)
	return j, err
}

// Job returns one job, or ErrNotFound.
func (v *View) Job(ctx context.Context, laboratory, code string) (Job, error) {
	var j Job
	found := false
	err := v.q.each(ctx, selectJob, []any{laboratory, code}, func(scan func(...any) error) (err error) {
		found = true
		j, err = scanJob(scan)
		return err
	})
	if err != nil {
		return Job{}, fmt.Errorf("read job %s/%s: %w", laboratory, code, err)
	}
	if !found {
		return Job{}, notFound("job %s/%s", laboratory, code)
	}
	return j, nil
}

// Jobs returns up to limit jobs, latest first; state "" is any, limit 0 is DefaultLimit.
func (v *View) Jobs(ctx context.Context, laboratory string, state JobState, limit int) ([]Job, error) {
	var jobs []Job
	err := v.q.each(ctx, selectJobs, []any{laboratory, string(state), pageLimit(limit)}, func(scan func(...any) error) error {
		j, err := scanJob(scan)
		jobs = append(jobs, j)
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("list jobs of %s: %w", laboratory, err)
	}
	return jobs, nil
}

const selectJobsFrom = `SELECT ` + jobColumns + ` FROM jobs WHERE laboratory = $1 AND ($2 = '' OR created_at < $3 OR created_at = $3 AND code < $2)
		ORDER BY created_at DESC, code DESC LIMIT $4`

// JobsFrom returns a page of jobs, latest first, and the cursor of the next
// page, "" at the end. Limit 0 is DefaultLimit.
func (v *View) JobsFrom(ctx context.Context, laboratory, after string, limit int) ([]Job, string, error) {
	code, at := "", int64(0)
	if after != "" {
		if _, err := fmt.Sscanf(after, "%d %s", &at, &code); err != nil {
			return nil, "", &InvalidError{Place: "cursor", Found: after, Expected: "a cursor of the page before"}
		}
	}
	var jobs []Job
	limit = pageLimit(limit)
	err := v.q.each(ctx, selectJobsFrom, []any{laboratory, code, at, limit + 1}, func(scan func(...any) error) error {
		j, err := scanJob(scan)
		jobs = append(jobs, j)
		return err
	})
	if err != nil {
		return nil, "", fmt.Errorf("list jobs of %s: %w", laboratory, err)
	}
	if len(jobs) <= limit {
		return jobs, "", nil
	}
	last := jobs[limit-1]
	return jobs[:limit], fmt.Sprintf("%d %s", int64(last.CreatedAt), last.Code), nil
}

// AddJob adds a waiting job. Of j only Code, Kind, Arguments, Total and
// CreatedBy count.
func (tx *Tx) AddJob(ctx context.Context, j Job) error {
	if _, err := tx.q.exec(ctx, insertJob, tx.laboratory, j.Code, j.Kind, j.Arguments, j.Total, j.CreatedBy, int64(tx.now)); err != nil {
		return fmt.Errorf("add job %s/%s: %w", tx.laboratory, j.Code, err)
	}
	return nil
}

// TakeJob takes the job that has waited longest, or one whose holder has been
// silent too long, for a period. ErrNotFound: there is none, or another was faster.
func (tx *Tx) TakeJob(ctx context.Context, holder string, period time.Duration) (Job, error) {
	var code string
	err := tx.q.one(ctx, selectNextJob, []any{tx.laboratory, int64(tx.now)}, &code)
	if errors.Is(err, sql.ErrNoRows) {
		return Job{}, notFound("waiting job of %s", tx.laboratory)
	}
	if err != nil {
		return Job{}, fmt.Errorf("look for a job of %s: %w", tx.laboratory, err)
	}
	n, err := tx.q.exec(ctx, takeJob, tx.laboratory, code, holder, int64(tx.now)+period.Microseconds(), int64(tx.now))
	if err != nil {
		return Job{}, fmt.Errorf("take job %s/%s: %w", tx.laboratory, code, err)
	}
	if n == 0 {
		return Job{}, notFound("waiting job of %s", tx.laboratory)
	}
	return tx.Job(ctx, tx.laboratory, code)
}

// AdvanceJob ends a step in the transaction of what the step did: where the next
// begins, how far it is, and for how long the holder keeps it. State is
// JobRunning, JobDone or JobFailed. Of j Code, Holder, Cursor, Done, Total, Message
// and State count. ErrConflict: it was cancelled, or somebody else has taken it.
func (tx *Tx) AdvanceJob(ctx context.Context, j Job, period time.Duration) error {
	n, err := tx.q.exec(ctx, advanceJob, tx.laboratory, j.Code, j.Holder, j.Cursor, j.Done, j.Total, j.Message, string(j.State),
		int64(tx.now)+period.Microseconds(), int64(tx.now))
	if err != nil {
		return fmt.Errorf("advance job %s/%s: %w", tx.laboratory, j.Code, err)
	}
	if n == 0 {
		return &ConflictError{Found: fmt.Sprintf("job %s/%s cancelled, ended or taken by another", tx.laboratory, j.Code), Expected: "it running under " + j.Holder}
	}
	return nil
}

// CancelJob ends a job that waits or runs; its worker notices at the next step.
// ErrConflict: it has ended.
func (tx *Tx) CancelJob(ctx context.Context, code string) error {
	n, err := tx.q.exec(ctx, cancelJob, tx.laboratory, code, int64(tx.now))
	if err != nil {
		return fmt.Errorf("cancel job %s/%s: %w", tx.laboratory, code, err)
	}
	if n == 1 {
		return nil
	}
	j, err := tx.Job(ctx, tx.laboratory, code)
	if err != nil {
		return err
	}
	return &ConflictError{Found: fmt.Sprintf("job %s/%s %s", tx.laboratory, code, j.State), Expected: "it waiting or running"}
}
