package api_test

import (
	"context"
	"log/slog"
	"path/filepath"
	"testing"
	"time"

	"deltamoor/api"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// The read of a reported delta confirms who asks in its own statement. What
// ends a token must end it there at once, on every server over the database:
// each is warmed up first, so that it would answer from what it remembers.
func TestNothingRememberedOutlivesWhatEndsAToken(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	ctx := context.Background()
	path := "/v1/reported/" + j.reported

	// Another server: its own connections to the same database, its own memory.
	other, err := store.Open(ctx, store.Options{Database: filepath.Join(b.folder, "registry.db"), Now: b.now})
	b.must(err)
	t.Cleanup(func() { other.Close() })
	second, err := api.New(registry.New(other, registry.Options{Now: b.now}), api.Options{Log: slog.New(slog.DiscardHandler), Now: b.now})
	b.must(err)
	first := b.handler

	r := b.registry()
	admin, err := r.Authenticate(ctx, b.tokens["TST"][registry.Administrator])
	b.must(err)
	issue := func(q registry.TokenRequest) (code string) {
		t.Helper()
		it, secret, err := r.IssueToken(ctx, admin, q)
		b.must(err)
		b.tokens["TST"]["guest"] = secret
		return it.Code
	}
	ask := func() (int, int) {
		q := request{role: "guest", method: "GET", path: path}
		b.handler = first
		one := b.do(q).Status
		b.handler = second
		two := b.do(q).Status
		b.handler = first
		return one, two
	}
	expect := func(what string, want int) {
		t.Helper()
		for range 3 { // the first looks everything up, the next remember
			if one, two := ask(); one != want || two != want {
				t.Errorf("%s: status %d and %d, want %d from both servers", what, one, two, want)
			}
		}
	}

	token := issue(registry.TokenRequest{Person: "aud", Label: "guest"})
	expect("a good token", 200)
	_, err = r.RevokeToken(ctx, admin, token, "lost")
	b.must(err)
	expect("a revoked token", 401)

	issue(registry.TokenRequest{Person: "aud", Label: "guest", Scopes: []string{"import"}})
	expect("a token whose scopes do not read", 403)

	issue(registry.TokenRequest{Person: "aud", Label: "guest"})
	expect("another good token", 200)
	_, err = r.ChangePerson(ctx, admin, "aud", store.Person{Name: "auditor", Roles: []string{registry.Auditor}, Closed: true}, registry.Edit{After: 1, Reason: "left"})
	b.must(err)
	expect("a closed account", 401)
	_, err = r.ChangePerson(ctx, admin, "aud", store.Person{Name: "auditor", Roles: []string{registry.Auditor}}, registry.Edit{After: 2, Reason: "came back"})
	b.must(err)
	expect("the account opened again", 200)
	_, err = r.ChangePerson(ctx, admin, "aud", store.Person{Name: "auditor", Roles: []string{registry.Analyst}}, registry.Edit{After: 3, Reason: "other work"})
	b.must(err)
	expect("a token left without any role", 403)

	expires := store.InstantOf(b.now().Add(time.Minute))
	issue(registry.TokenRequest{Person: "ana", Label: "guest", ExpiresAt: &expires})
	expect("a token for a minute", 200)
	b.mu.Lock()
	b.clock = b.clock.Add(2 * time.Minute)
	b.mu.Unlock()
	expect("the token after that minute", 401)

	// A secret's row that is taken away by hand, with nothing in the ledger.
	issue(registry.TokenRequest{Person: "ana", Label: "guest"})
	expect("one more good token", 200)
	actor, err := r.Authenticate(ctx, b.tokens["TST"]["guest"])
	b.must(err)
	_, err = b.store.Write(ctx, "TST", func(ctx context.Context, tx *store.Tx) error { return tx.DropTokenSecret(ctx, actor.Token) })
	b.must(err)
	expect("a token without its secret", 401)

	b.tokens["TST"]["guest"] = b.tokens["OTH"][registry.Auditor]
	expect("a token of another laboratory", 404)
}

// What may change about a reported delta is what was said last, also on a
// server that remembers the rest.
func TestReportedDeltaShowsWhatBecameOfIt(t *testing.T) {
	b := openBench(t)
	j := b.travel()
	path := "/v1/reported/" + j.reported
	read := func(query string) answer { return b.get(registry.Auditor, path+query) }
	for range 3 {
		if got := read("").text(t, "final_state"); got != "approved" {
			t.Fatalf("final_state %q, want approved", got)
		}
	}
	label := read("").text(t, "label")
	before := b.now()
	final := read("").text(t, "final.code")
	b.decide(registry.Signatory, "/v1/finals/"+final, "withdrawn")
	for range 3 {
		a := read("")
		if got := a.text(t, "final_state"); got != "withdrawn" {
			t.Errorf("final_state %q after the withdrawal, want withdrawn", got)
		}
		if got := a.text(t, "label"); got != label {
			t.Errorf("label %q, want %q", got, label)
		}
	}
	if got := read("?as_of="+before.Format(time.RFC3339Nano)).text(t, "final_state"); got != "approved" {
		t.Errorf("final_state %q as of before the withdrawal, want approved", got)
	}
	b.want(404, request{role: registry.Auditor, method: "GET", path: path + "?as_of=2020-01-01T00:00:00Z"})
}
