package registry_test

import (
	"bytes"
	"context"
	"math/rand/v2"
	"strings"
	"testing"

	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

func testKey(t testing.TB, n byte) ledger.Key {
	t.Helper()
	key, err := ledger.NewKey(rand.NewChaCha8([32]byte{n}))
	if err != nil {
		t.Fatal(err)
	}
	return key
}

func TestCheckpointIsSignedForTheHeadAndVerifiesOutside(t *testing.T) {
	b := openBench(t)
	key := testKey(t, 1)
	c, err := b.SignCheckpoint(b.ctx, "TST", key)
	b.must(err)
	verifier, err := key.Verifier("deltamoor.local/TST")
	b.must(err)
	signed, err := ledger.Open(c.Note, verifier)
	b.must(err)
	root, size, err := b.LedgerRoot(b.ctx, b.auditor, -1)
	b.must(err)
	if signed.Origin != "deltamoor.local/TST" || signed.Size != size || store.Hash(signed.Root) != root || signed.Signer != c.Signer {
		t.Errorf("signed %+v, the ledger has size %d and root %s", signed, size, root)
	}
	again, err := b.SignCheckpoint(b.ctx, "TST", key)
	b.must(err)
	if !bytes.Equal(again.Note, c.Note) {
		t.Errorf("the same head signed again gives another note:\n%s\n%s", c.Note, again.Note)
	}
	list, err := b.Checkpoints(b.ctx, b.auditor, -1, 0)
	b.must(err)
	if len(list) != 1 || !bytes.Equal(list[0].Note, c.Note) {
		t.Errorf("kept checkpoints: %+v, want the one that was signed", list)
	}
	b.sample("Marsh survey", "A1") // the head moves
	later, err := b.SignCheckpoint(b.ctx, "TST", key)
	b.must(err)
	v, err := b.Verify(b.ctx, registry.VerifyRequest{Laboratories: []string{"TST"}, Outside: [][]byte{c.Note, later.Note}})
	b.must(err)
	if !v.Clean() || v.Laboratories[0].Checkpoints != 2 {
		t.Errorf("verification with both checkpoints kept outside: %+v", v)
	}
	if _, err := b.SignCheckpoint(b.ctx, "TST", testKey(t, 2)); err == nil || !strings.Contains(err.Error(), "signed by the old one") {
		t.Errorf("a second key without rotation: %v, want a refusal", err)
	}
}

func TestCheckpointWithoutAKeyIsRefused(t *testing.T) {
	b := openBench(t)
	if _, err := b.Checkpoint(b.ctx, b.auditor); err == nil || !strings.Contains(err.Error(), "no signing key") {
		t.Errorf("checkpoint without a key: %v", err)
	}
}

func TestReplacedKeyIsSignedByTheOldOne(t *testing.T) {
	b := openBench(t)
	old, replacement := testKey(t, 1), testKey(t, 2)
	_, err := b.SignCheckpoint(b.ctx, "TST", old)
	b.must(err)
	last, err := b.RotateKey(b.ctx, "TST", "ada", "yearly", old, replacement)
	b.must(err)
	keys, err := b.Keys(b.ctx, b.auditor)
	b.must(err)
	if len(keys) != 2 || keys[1].Reason != "yearly" || keys[1].RecordedBy != "ada" {
		t.Fatalf("recorded keys: %+v", keys)
	}
	list, err := b.Checkpoints(b.ctx, b.auditor, -1, 0)
	b.must(err)
	vouched := false
	for _, c := range list {
		if signed, err := ledger.Open(c.Note, keys[0].Value.Verifier); err == nil && signed.Size > keys[1].Position {
			vouched = true
		}
	}
	if !vouched {
		t.Error("no checkpoint of the old key covers the new key's entry")
	}
	if _, err := ledger.Open(last.Note, keys[1].Value.Verifier); err != nil {
		t.Errorf("the last checkpoint is not signed by the new key: %v", err)
	}
	again, err := b.RotateKey(b.ctx, "TST", "ada", "yearly", old, replacement)
	b.must(err)
	if !bytes.Equal(again.Note, last.Note) {
		t.Error("repeating a rotation changed something")
	}
	if _, err := b.SignCheckpoint(b.ctx, "TST", old); err == nil {
		t.Error("the replaced key still signs")
	}
	v, err := b.Verify(b.ctx, registry.VerifyRequest{Laboratories: []string{"TST"}})
	b.must(err)
	if !v.Clean() {
		t.Errorf("verification after a rotation: %+v", v.Findings)
	}
	// A key that slipped in without the old one's signature is told.
	third, err := testKey(t, 3).Verifier("deltamoor.local/TST")
	b.must(err)
	after := 2
	_, err = b.store.Write(b.ctx, "TST", func(ctx context.Context, tx *store.Tx) error {
		_, err := tx.Append(ctx, store.Draft{Kind: store.KindKey, Code: registry.KeyCode, By: "ada", Reason: "none", Value: store.SigningKey{Verifier: third}, After: &after})
		return err
	})
	b.must(err)
	v, err = b.Verify(b.ctx, registry.VerifyRequest{Laboratories: []string{"TST"}})
	b.must(err)
	if v.Clean() || v.Findings[0].Key != "key TST/ledger.3" {
		t.Errorf("verification with an unsigned key: %+v, want key TST/ledger.3 named", v.Findings)
	}
}

// A server may be started before "init" has made the key.
func TestKeyFoundLaterSignsOnRequest(t *testing.T) {
	b := openBench(t)
	r := registry.New(b.store, registry.Options{})
	if _, err := r.Checkpoint(b.ctx, b.auditor); registry.MeaningOf(err) != registry.Conflict {
		t.Errorf("without a key: %v, want a refusal", err)
	}
	key := testKey(t, 5)
	r.UseKey(&key)
	r.UseKey(nil) // a file that cannot be read now takes nothing away
	if signed, err := r.Checkpoint(b.ctx, b.auditor); err != nil || len(signed.Note) == 0 {
		t.Errorf("with the key: %q, %v", signed.Note, err)
	}
}
