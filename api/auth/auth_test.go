package auth

import (
	"context"
	"encoding/base64"
	"errors"
	"fmt"
	"net/netip"
	"testing"
	"time"

	"deltamoor/api/registry"
)

// oneToken knows one secret.
type oneToken struct {
	secret  string
	looked  int
	touched int
	err     error
}

func (o *oneToken) Authenticate(_ context.Context, secret string) (registry.Actor, error) {
	o.looked++
	if o.err != nil {
		return registry.Actor{}, o.err
	}
	if secret != o.secret {
		return registry.Actor{}, registry.Refuse(registry.Unauthenticated, "unknown, expired or revoked token")
	}
	return registry.Actor{Person: "ana", Laboratory: "TST", Token: "T1"}, nil
}

func (o *oneToken) Claim(secret string) (registry.Claim, bool) {
	return registry.Claim{}, secret == o.secret
}

func (o *oneToken) TouchToken(context.Context, registry.Actor) error { o.touched++; return nil }

func TestHeadersThatNameAToken(t *testing.T) {
	basic := func(s string) string { return "Basic " + base64.StdEncoding.EncodeToString([]byte(s)) }
	for header, want := range map[string]bool{
		"Bearer dm_good": true, "bearer dm_good": true, "BEARER  dm_good": true, basic("x:dm_good"): true, basic(":dm_good"): true,
		"": false, "dm_good": false, "Bearer": false, "Bearer ": false, "Basic dm_good": false, basic("dm_good"): false, basic("x:"): false, "Digest dm_good": false, "Bearer dm_bad": false,
	} {
		a := New(&oneToken{secret: "dm_good"}, Options{})
		_, err := a.Authenticate(context.Background(), header, netip.MustParseAddr("192.0.2.1"))
		if (err == nil) != want {
			t.Errorf("%q: %v, want a sign-in: %v", header, err, want)
		}
		if err != nil && registry.MeaningOf(err) != registry.Unauthenticated {
			t.Errorf("%q is refused as %s", header, registry.MeaningOf(err))
		}
	}
}

func TestEveryRequestIsLookedUp(t *testing.T) {
	tokens := &oneToken{secret: "dm_good"}
	now := time.Unix(0, 0)
	a := New(tokens, Options{Now: func() time.Time { return now }})
	for range 5 {
		if _, err := a.Authenticate(context.Background(), "Bearer dm_good", netip.Addr{}); err != nil {
			t.Fatal(err)
		}
	}
	tokens.secret = "dm_other" // revoked
	if _, err := a.Authenticate(context.Background(), "Bearer dm_good", netip.Addr{}); err == nil {
		t.Error("a revoked token signs in")
	}
	if tokens.looked != 6 || tokens.touched != 1 {
		t.Errorf("%d looks and %d touches, want 6 and 1", tokens.looked, tokens.touched)
	}
	tokens.secret = "dm_good"
	now = now.Add(touchEvery)
	if _, err := a.Authenticate(context.Background(), "Bearer dm_good", netip.Addr{}); err != nil || tokens.touched != 2 {
		t.Errorf("%v, %d touches, want 2", err, tokens.touched)
	}
}

func TestFailuresOfOneAddressAreLimitedAndForgiven(t *testing.T) {
	tokens := &oneToken{secret: "dm_good"}
	now := time.Unix(1000, 0)
	a := New(tokens, Options{Now: func() time.Time { return now }, Failures: 3, Forgive: 10 * time.Second})
	try := func(header, address string) error {
		_, err := a.Authenticate(context.Background(), header, netip.MustParseAddr(address))
		return err
	}
	for range 3 {
		if err := try("Bearer dm_bad", "192.0.2.1"); registry.MeaningOf(err) != registry.Unauthenticated {
			t.Fatalf("within the limit: %v", err)
		}
	}
	var limit *LimitError
	if err := try("Bearer dm_bad", "192.0.2.1"); !errors.As(err, &limit) || limit.RetryAfter() != 10 || registry.MeaningOf(err) != registry.TooMany {
		t.Errorf("over the limit: %v", err)
	}
	if err := try("Bearer dm_good", "192.0.2.1"); err != nil {
		t.Errorf("a good token from the same address: %v", err)
	}
	if err := try("Bearer dm_bad", "192.0.2.2"); errors.As(err, &limit) {
		t.Errorf("another address is limited: %v", err)
	}
	now = now.Add(10 * time.Second)
	if err := try("Bearer dm_bad", "192.0.2.1"); errors.As(err, &limit) {
		t.Errorf("one more after the wait: %v", err)
	}
	// Whoever has one address of a /64 has all of it.
	for i := range 3 {
		_ = try("Bearer dm_bad", fmt.Sprintf("2001:db8::%x", i+1))
	}
	if err := try("Bearer dm_bad", "2001:db8::ffff"); !errors.As(err, &limit) {
		t.Errorf("the same network: %v", err)
	}
	// A database that is gone is no failed sign-in.
	tokens.err = registry.Refuse(registry.Unavailable, "gone")
	for range 10 {
		if err := try("Bearer dm_good", "192.0.2.7"); registry.MeaningOf(err) != registry.Unavailable {
			t.Fatalf("unavailable: %v", err)
		}
	}
}

func TestLimiterForgetsTheOldestAndStaysSmall(t *testing.T) {
	l := newLimiter(1, time.Hour)
	now := time.Unix(0, 0)
	address := func(i int) netip.Addr { return netip.AddrFrom4([4]byte{10, byte(i >> 16), byte(i >> 8), byte(i)}) }
	for i := range maxAddresses + 100 {
		l.failed(address(i), now)
	}
	if n := len(l.addresses); n != maxAddresses || l.recent.Len() != n {
		t.Errorf("%d addresses, %d in order, want %d", n, l.recent.Len(), maxAddresses)
	}
	if l.failed(address(0), now) != 0 {
		t.Error("the oldest address is remembered")
	}
	if l.failed(address(maxAddresses+99), now) == 0 {
		t.Error("the newest address is forgotten")
	}
}

// A claim is told only within a while of a use that was noted, so that uses go
// on being noted.
func TestClaimsEndWithTheWhileOfANotedUse(t *testing.T) {
	now := time.Unix(0, 0)
	a := New(&oneToken{secret: "dm_good"}, Options{Now: func() time.Time { return now }})
	if _, ok := a.Claim("Bearer dm_good"); ok {
		t.Error("a token never used is claimed")
	}
	if _, err := a.Authenticate(context.Background(), "Bearer dm_good", netip.Addr{}); err != nil {
		t.Fatal(err)
	}
	a.touched.due(registry.Claim{}.Name(), now) // the fake's claims have no name
	if _, ok := a.Claim("Bearer dm_good"); !ok {
		t.Error("a token used just now is not claimed")
	}
	for _, bad := range []string{"", "Bearer dm_bad", "Digest dm_good"} {
		if _, ok := a.Claim(bad); ok {
			t.Errorf("%q is claimed", bad)
		}
	}
	now = now.Add(touchEvery)
	if _, ok := a.Claim("Bearer dm_good"); ok {
		t.Error("a token is claimed after the while of its last noted use")
	}
}
