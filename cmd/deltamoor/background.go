package main

import (
	"context"
	"crypto/rand"
	"errors"
	"log/slog"
	"time"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// How often a server looks for jobs that wait.
const workInterval = 2 * time.Second

// work runs the jobs of all laboratories, one at a time, until ctx ends.
// A job that is stopped goes on, here or elsewhere, when its lease has run out.
func (o *opened) work(ctx context.Context, log *slog.Logger) {
	holder := rand.Text()
	every(ctx, workInterval, func() {
		waiting, err := o.waiting(ctx)
		if err != nil {
			complain(ctx, log, "look for jobs", "", err)
		}
		for _, laboratory := range waiting {
			for more := true; more && ctx.Err() == nil; {
				if more, err = o.Work(ctx, laboratory, holder); err != nil {
					complain(ctx, log, "job", laboratory, err)
					break
				}
			}
		}
	})
}

// waiting lists the laboratories that have a job to do. To ask is a read, so
// that an idle server writes nothing.
func (o *opened) waiting(ctx context.Context) ([]string, error) {
	known, err := o.laboratories(ctx)
	if err != nil {
		return nil, err
	}
	var out []string
	err = o.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		out = nil
		for _, laboratory := range known {
			for _, state := range []store.JobState{store.JobWaiting, store.JobRunning} {
				jobs, err := v.Jobs(ctx, laboratory, state, 1)
				if err != nil {
					return err
				}
				if len(jobs) > 0 {
					out = append(out, laboratory)
					break
				}
			}
		}
		return nil
	})
	return out, err
}

// When a server signs the head of a ledger: after so many entries, or when
// there are any and so much time has passed.
const (
	signInterval = time.Minute
	signEntries  = 1000
	signPeriod   = 10 * time.Minute
)

// sign signs the heads of all ledgers as they move, with the key that readKey
// finds each time: "deltamoor init" may come after "deltamoor serve", and what is
// found then signs on request too. Several
// servers may do so at once; one head signed twice is one checkpoint.
func (o *opened) sign(ctx context.Context, log *slog.Logger, readKey func() (*ledger.Key, error)) {
	signed := map[string]time.Time{} // when this server last did
	every(ctx, signInterval, func() {
		key, err := readKey()
		if err != nil || key == nil {
			if err != nil {
				complain(ctx, log, "read the signing key", "", err)
			}
			return
		}
		o.UseKey(key)
		o.signHeads(ctx, log, *key, signed)
	})
}

// signHeads signs the heads that are due once.
func (o *opened) signHeads(ctx context.Context, log *slog.Logger, key ledger.Key, signed map[string]time.Time) {
	known, err := o.laboratories(ctx)
	if err != nil {
		complain(ctx, log, "sign ledgers", "", err)
		return
	}
	if len(known) == 0 { // not initialised
		return
	}
	for _, laboratory := range append(known, store.Common) {
		grown, err := o.unsigned(ctx, laboratory)
		if err == nil && (grown >= signEntries || grown > 0 && time.Since(signed[laboratory]) >= signPeriod) {
			if _, err = o.SignCheckpoint(ctx, laboratory, key); err == nil {
				signed[laboratory] = time.Now()
			}
		}
		if err != nil {
			complain(ctx, log, "sign the ledger", laboratory, err)
		}
	}
}

// unsigned counts the entries since the last checkpoint.
func (o *opened) unsigned(ctx context.Context, laboratory string) (int64, error) {
	var grown int64
	err := o.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		head, err := v.Head(ctx, laboratory)
		if err != nil {
			return err
		}
		last, err := v.LastCheckpoint(ctx, laboratory)
		if err != nil && !errors.Is(err, store.ErrNotFound) {
			return err
		}
		grown = head.Size - last.Size
		return nil
	})
	return grown, err
}

// every calls f at an interval until ctx ends; it returns after the last call.
func every(ctx context.Context, interval time.Duration, f func()) {
	ticker := time.NewTicker(interval)
	defer ticker.Stop()
	for {
		select {
		case <-ctx.Done():
			return
		case <-ticker.C:
			f()
		}
	}
}

func complain(ctx context.Context, log *slog.Logger, what, laboratory string, err error) {
	if ctx.Err() != nil { // the server is ending
		return
	}
	log.Error(what, "laboratory", laboratory, "error", err.Error())
}
