package main

import (
	"bytes"
	"context"
	"crypto/rand"
	"log/slog"
	"path/filepath"
	"testing"
	"time"

	"deltamoor/store"
	"deltamoor/store/ledger"
)

// TestHeadsAreSignedAsTheyMove: a head is signed once, again only when it has
// moved and the time has come, and by no key but the registry's own.
func TestHeadsAreSignedAsTheyMove(t *testing.T) {
	data := filepath.Join(t.TempDir(), "lab")
	p := &program{}
	c := config{Data: data}
	token := initRegistry(t, "--data", data)
	o, err := p.openConfigured(t.Context(), c, toWrite)
	if err != nil {
		t.Fatal(err)
	}
	defer o.close()
	key, err := p.readKey(data)
	if err != nil || key == nil {
		t.Fatalf("key %v, %v", key, err)
	}
	var lines bytes.Buffer
	log := slog.New(slog.NewTextHandler(&lines, nil))
	checkpoints := func() int {
		t.Helper()
		n := 0
		err := o.store.Read(t.Context(), func(ctx context.Context, v *store.View) error {
			all, err := v.Checkpoints(ctx, "FJO", 0, 100)
			n = len(all)
			return err
		})
		if err != nil {
			t.Fatal(err)
		}
		return n
	}
	addPerson := func(code string) {
		t.Helper()
		if status, _, stderr := call(t.Context(), nil, "", "user", "add", code, "--name", code, "--role", "analyst", "--data", data, "--token", token); status != statusDone {
			t.Fatal(stderr)
		}
	}
	signed := map[string]time.Time{}
	for _, step := range []struct {
		name string
		do   func()
		want int
	}{
		{"a new ledger", func() {}, 1},
		{"a head that is signed", func() {}, 1},
		{"a head that moved a moment ago", func() { addPerson("ana") }, 1},
		{"a head that moved some time ago", func() { signed["FJO"] = time.Now().Add(-signPeriod) }, 2},
	} {
		step.do()
		o.signHeads(t.Context(), log, *key, signed)
		if got := checkpoints(); got != step.want {
			t.Errorf("%s: %d checkpoints, want %d", step.name, got, step.want)
		}
	}
	if lines.Len() > 0 {
		t.Errorf("logged %s", lines.String())
	}

	other, err := ledger.NewKey(rand.Reader)
	if err != nil {
		t.Fatal(err)
	}
	addPerson("bo")
	o.signHeads(t.Context(), log, other, map[string]time.Time{})
	if got := checkpoints(); got != 2 || !bytes.Contains(lines.Bytes(), []byte("a new key has to be signed by the old one first")) {
		t.Errorf("a key that is not the registry's: %d checkpoints, logged %s", got, lines.String())
	}
	status, answer := verifyJSON(t, "--data", data, "--laboratory", "FJO")
	if status != statusDone || *answer.Ledgers[0].Checkpoints != 2 {
		t.Errorf("verify: status %d, %+v", status, answer)
	}
}

// TestIdleServerWritesNothing: looking for jobs is a read.
func TestIdleServerWritesNothing(t *testing.T) {
	data := filepath.Join(t.TempDir(), "lab")
	initRegistry(t, "--data", data)
	p := &program{}
	o, err := p.openConfigured(t.Context(), config{Data: data}, toRead) // where a write is an error
	if err != nil {
		t.Fatal(err)
	}
	defer o.close()
	waiting, err := o.waiting(t.Context())
	if err != nil || len(waiting) > 0 {
		t.Errorf("waiting %v, %v", waiting, err)
	}
}

func TestEveryEndsAfterItsLastCall(t *testing.T) {
	ctx, stop := context.WithCancel(t.Context())
	calls := 0 // without a lock: the race detector tells if a call outlives every
	every(ctx, time.Millisecond, func() {
		if calls++; calls == 3 {
			stop()
		}
	})
	if calls < 3 {
		t.Errorf("%d calls, want 3", calls)
	}
}
