package store_test

import (
	"context"
	"sync/atomic"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"deltamoor/store"
)

func TestWorkingRowsLeaveTheLedgerAlone(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2026-01-01").Time()}
		s := open(store.Options{Now: c.now})
		now := store.InstantOf(c.at)
		hash, other := store.Hash{1}, store.Hash{2}
		commit := write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			if err := tx.SetCredential(ctx, store.Credential{Person: "mara", PasswordHash: "$argon2id$1", Temporary: true}); err != nil {
				return err
			}
			if err := tx.AddTokenSecret(ctx, store.TokenSecret{Hash: hash, Code: "T1", Person: "mara"}); err != nil {
				return err
			}
			return tx.KeepSignIn(ctx, store.SignIn{Hash: other, Person: "mara", ExpiresAt: now + 1000, Data: "d"})
		})
		if commit.Count != 0 {
			t.Errorf("working rows made %d entries", commit.Count)
		}
		read(t, s, func(ctx context.Context, v *store.View) error {
			if h, err := v.Head(ctx, lab); err != nil || h.Size != 0 {
				t.Errorf("head %+v, %v", h, err)
			}
			got, err := v.Credential(ctx, lab, "mara")
			if diff := cmp.Diff(store.Credential{Person: "mara", PasswordHash: "$argon2id$1", Temporary: true, ChangedAt: now}, got); diff != "" || err != nil {
				t.Errorf("credential differs, %v (-want +got):\n%s", err, diff)
			}
			_, err = v.Credential(ctx, "OTHER", "mara")
			wantIs(t, err, store.ErrNotFound)
			token, err := v.TokenSecret(ctx, lab, hash)
			if diff := cmp.Diff(store.TokenSecret{Hash: hash, Code: "T1", Person: "mara"}, token); diff != "" || err != nil {
				t.Errorf("token differs, %v (-want +got):\n%s", err, diff)
			}
			_, err = v.TokenSecret(ctx, "OTHER", hash)
			wantIs(t, err, store.ErrNotFound)
			in, err := v.SignIn(ctx, lab, other)
			if diff := cmp.Diff(store.SignIn{Hash: other, Person: "mara", CreatedAt: now, SeenAt: now, ExpiresAt: now + 1000, Data: "d"}, in); diff != "" || err != nil {
				t.Errorf("sign-in differs, %v (-want +got):\n%s", err, diff)
			}
			return nil
		})
		c.at = c.at.Add(time.Second)
		later := store.InstantOf(c.at)
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			if err := tx.SetCredential(ctx, store.Credential{Person: "mara", PasswordHash: "$argon2id$2"}); err != nil {
				return err
			}
			return tx.TouchToken(ctx, "T1")
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			got, err := v.Credential(ctx, lab, "mara")
			if err != nil || got.PasswordHash != "$argon2id$2" || got.Temporary {
				t.Errorf("credential %+v, %v, want the new one", got, err)
			}
			used, err := v.TokenUsedAt(ctx, lab, "T1")
			if err != nil || used == nil || *used != later {
				t.Errorf("token used at %v, %v, want %s", used, err, later)
			}
			_, err = v.SignIn(ctx, lab, other) // expired meanwhile
			wantIs(t, err, store.ErrNotFound)
			return nil
		})
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			if err := tx.KeepSignIn(ctx, store.SignIn{Hash: other, Person: "mara", ExpiresAt: later + 1_000_000}); err != nil {
				return err
			}
			if err := tx.DropTokenSecret(ctx, "T1"); err != nil {
				return err
			}
			return tx.DropCredential(ctx, "mara")
		})
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error { return tx.DropSignIns(ctx, "mara") })
		read(t, s, func(ctx context.Context, v *store.View) error {
			_, err := v.Credential(ctx, lab, "mara")
			wantIs(t, err, store.ErrNotFound)
			_, err = v.TokenSecret(ctx, lab, hash)
			wantIs(t, err, store.ErrNotFound)
			_, err = v.SignIn(ctx, lab, other)
			wantIs(t, err, store.ErrNotFound)
			return nil
		})
		if _, err := s.Write(t.Context(), lab, func(ctx context.Context, tx *store.Tx) error {
			return tx.SetCredential(ctx, store.Credential{Person: "mara"})
		}); err == nil {
			t.Error("a credential without a hash was set")
		}
	})
}

func TestLeaseHasOneHolderAtATime(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2026-01-01").Time()}
		s := open(store.Options{Now: c.now})
		take := func(holder string) (got bool) {
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) (err error) {
				got, err = tx.TakeLease(ctx, "checkpoint", holder, time.Minute)
				return err
			})
			return got
		}
		taken, renewed := take("a"), take("a")
		if !taken || !renewed || take("b") {
			t.Error("a takes and renews, b does not get it")
		}
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error { return tx.DropLease(ctx, "checkpoint", "b") })
		if take("b") {
			t.Error("b gave back what a holds")
		}
		c.at = c.at.Add(61 * time.Second)
		if !take("b") || take("a") {
			t.Error("after its time b takes the lease over from a")
		}
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error { return tx.DropLease(ctx, "checkpoint", "b") })
		var won atomic.Int32
		together(6, func(i int) {
			var got bool
			if _, err := s.Write(context.Background(), lab, func(ctx context.Context, tx *store.Tx) (err error) {
				got, err = tx.TakeLease(ctx, "checkpoint", string(rune('a'+i)), time.Minute)
				return err
			}); err != nil {
				t.Error(err)
			}
			if got {
				won.Add(1)
			}
		})
		if won.Load() != 1 {
			t.Errorf("%d of six at once took the lease, want 1", won.Load())
		}
	})
}

func TestJobIsTakenAdvancedAndEnded(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2026-01-01").Time()}
		s := open(store.Options{Now: c.now})
		do := func(f func(ctx context.Context, tx *store.Tx) error) error {
			_, err := s.Write(t.Context(), lab, f)
			return err
		}
		add := func(code string) {
			t.Helper()
			if err := do(func(ctx context.Context, tx *store.Tx) error {
				return tx.AddJob(ctx, store.Job{Code: code, Kind: "verify", Arguments: "{}", Total: 10, CreatedBy: "mara"})
			}); err != nil {
				t.Fatal(err)
			}
			c.at = c.at.Add(time.Second)
		}
		take := func(holder string) (j store.Job, err error) {
			err = do(func(ctx context.Context, tx *store.Tx) (err error) {
				j, err = tx.TakeJob(ctx, holder, time.Minute)
				return err
			})
			return j, err
		}
		advance := func(j store.Job) error {
			return do(func(ctx context.Context, tx *store.Tx) error { return tx.AdvanceJob(ctx, j, time.Minute) })
		}
		add("J1")
		add("J2")
		j, err := take("a")
		if err != nil || j.Code != "J1" || j.State != store.JobRunning || j.Total != 10 || j.Holder != "a" {
			t.Fatalf("took %+v, %v, want J1", j, err)
		}
		j.Cursor, j.Done, j.Holder = "x", 4, "b"
		wantIs(t, advance(j), store.ErrConflict) // not b's
		j.Holder = "a"
		if err := advance(j); err != nil {
			t.Error(err)
		}
		j2, err := take("b")
		if err != nil || j2.Code != "J2" {
			t.Errorf("took %+v, %v, want J2", j2, err)
		}
		_, err = take("c")
		wantIs(t, err, store.ErrNotFound)
		c.at = c.at.Add(2 * time.Minute) // a and b have died
		again, err := take("c")
		if err != nil || again.Code != "J1" || again.Cursor != "x" || again.Done != 4 {
			t.Errorf("took over %+v, %v, want J1 at its cursor", again, err)
		}
		wantIs(t, advance(j), store.ErrConflict) // a comes too late
		again.State, again.Message = store.JobDone, "clean"
		if err := advance(again); err != nil {
			t.Error(err)
		}
		cancel := func(code string) error {
			return do(func(ctx context.Context, tx *store.Tx) error { return tx.CancelJob(ctx, code) })
		}
		wantIs(t, cancel("J1"), store.ErrConflict)
		wantIs(t, cancel("J9"), store.ErrNotFound)
		if err := cancel("J2"); err != nil {
			t.Error(err)
		}
		read(t, s, func(ctx context.Context, v *store.View) error {
			jobs, err := v.Jobs(ctx, lab, "", 0)
			if err != nil || len(jobs) != 2 || jobs[0].State != store.JobCancelled || jobs[1].State != store.JobDone || jobs[1].Message != "clean" || !jobs[0].State.Ended() {
				t.Errorf("jobs %+v, %v", jobs, err)
			}
			waiting, err := v.Jobs(ctx, lab, store.JobWaiting, 0)
			if err != nil || len(waiting) != 0 {
				t.Errorf("waiting %+v, %v", waiting, err)
			}
			_, err = v.Job(ctx, "OTHER", "J1")
			wantIs(t, err, store.ErrNotFound)
			return nil
		})
	})
}

func TestForgetRemovesOldAnswersAlone(t *testing.T) {
	forEachEngine(t, func(t *testing.T, open func(store.Options) *store.Store) {
		c := &clock{at: day(t, "2026-01-01").Time()}
		s := open(store.Options{Now: c.now})
		for _, key := range []string{"old", "new"} {
			write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
				return tx.Remember(ctx, "mara", key, store.Hash{1}, []byte(key))
			})
			c.at = c.at.Add(store.IdempotencyPeriod - time.Hour)
		}
		c.at = c.at.Add(-store.IdempotencyPeriod + 3*time.Hour)
		write(t, s, lab, func(ctx context.Context, tx *store.Tx) error {
			n, err := tx.Forget(ctx)
			if n != 1 {
				t.Errorf("forgot %d answers, want the old one", n)
			}
			return err
		})
		read(t, s, func(ctx context.Context, v *store.View) error {
			answer, err := v.Recall(ctx, lab, "mara", "new", store.Hash{1})
			if string(answer) != "new" || err != nil {
				t.Errorf("recalled %q, %v", answer, err)
			}
			_, err = v.Recall(ctx, lab, "ada", "new", store.Hash{1})
			wantIs(t, err, store.ErrNotFound)
			return nil
		})
	})
}
