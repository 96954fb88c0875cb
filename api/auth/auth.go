// Package auth finds out who sends a request, and stops there: it turns a
// token into a registry.Actor. What the actor may do is the registry's to say.
//
// Nothing that was true a moment ago is believed: every request is looked up,
// so a revoked token, a closed account or a role taken away ends at once. That
// costs one read by key; the read that people wait for most confirms it itself.
package auth

import (
	"context"
	"encoding/base64"
	"fmt"
	"net/netip"
	"strings"
	"sync"
	"time"

	"deltamoor/api/registry"
)

// Tokens knows what secrets stand for; the registry does.
type Tokens interface {
	Authenticate(ctx context.Context, secret string) (registry.Actor, error)
	// Claim tells who a secret stood for when it was last asked; false where that is
	// not known. It is no permission until a read of the registry has confirmed it.
	Claim(secret string) (registry.Claim, bool)
	// TouchToken notes that a token was used, as a courtesy to people who tidy up.
	TouchToken(ctx context.Context, actor registry.Actor) error
}

// Options of signing in.
type Options struct {
	// Now is the clock; nil is time.Now.
	Now func() time.Time
	// Failures is how many failed sign-ins of one address are answered at once;
	// 0 means 20. One more is forgiven every Forgive; 0 means 3 seconds.
	Failures int
	Forgive  time.Duration
}

// An Authenticator tells who sends a request. It is safe for concurrent use.
type Authenticator struct {
	tokens  Tokens
	now     func() time.Time
	limiter limiter
	touched touches
}

// New makes an authenticator over tokens.
func New(tokens Tokens, o Options) *Authenticator {
	if o.Now == nil {
		o.Now = time.Now
	}
	if o.Failures == 0 {
		o.Failures = 20
	}
	if o.Forgive == 0 {
		o.Forgive = 3 * time.Second
	}
	return &Authenticator{tokens: tokens, now: o.Now, limiter: newLimiter(o.Failures, o.Forgive), touched: touches{at: map[string]time.Time{}}}
}

// A LimitError refuses an address with too many failed sign-ins.
type LimitError struct {
	// Wait is the time until one more attempt is answered.
	Wait time.Duration
	err  error
}

func (e *LimitError) Error() string { return e.err.Error() }

func (e *LimitError) Unwrap() error { return e.err }

// RetryAfter is the wait in whole seconds, 1 or more.
func (e *LimitError) RetryAfter() int { return max(1, int((e.Wait+time.Second-1)/time.Second)) }

// Authenticate reads the Authorization header of a request: Bearer with the
// token, or Basic with the token as password and any user name.
//
// Addresses with too many failures are refused with a LimitError, but only when
// they fail again: a good token is answered however many bad ones its address
// sends, since a laboratory often has one address for everybody, and a secret of
// 256 random bits cannot be found by trying. The limit keeps failures cheap to
// answer and visible. Passwords will need one that comes before the look.
func (a *Authenticator) Authenticate(ctx context.Context, authorization string, address netip.Addr) (registry.Actor, error) {
	secret, err := bearer(authorization)
	if err != nil {
		return registry.Actor{}, err
	}
	actor, err := a.tokens.Authenticate(ctx, secret)
	if err != nil {
		if registry.MeaningOf(err) != registry.Unauthenticated {
			return registry.Actor{}, err
		}
		if wait := a.limiter.failed(address, a.now()); wait > 0 {
			return registry.Actor{}, &LimitError{Wait: wait, err: registry.Refuse(registry.TooMany, "too many failed sign-ins from this address")}
		}
		return registry.Actor{}, err
	}
	if a.touched.due(actor.Laboratory+"/"+actor.Token, a.now()) {
		// That it was used is worth knowing and not worth failing for.
		_ = a.tokens.TouchToken(ctx, actor)
	}
	return actor, nil
}

// Claim tells who sent a header when that was last asked, for a read that
// confirms it. Now and then it tells nothing, so that the use of a token is noted.
func (a *Authenticator) Claim(authorization string) (registry.Claim, bool) {
	secret, err := bearer(authorization)
	if err != nil {
		return registry.Claim{}, false
	}
	claim, ok := a.tokens.Claim(secret)
	if !ok || !a.touched.recent(claim.Name(), a.now()) {
		return registry.Claim{}, false
	}
	return claim, true
}

// bearer takes the secret out of an Authorization header.
func bearer(authorization string) (string, error) {
	if authorization == "" {
		return "", registry.Refuse(registry.Unauthenticated, "send a token in the header Authorization: Bearer …")
	}
	scheme, rest, _ := strings.Cut(authorization, " ")
	rest = strings.TrimSpace(rest)
	switch strings.ToLower(scheme) {
	case "bearer":
		if rest == "" {
			return "", registry.Refuse(registry.Unauthenticated, "the header Authorization names no token")
		}
		return rest, nil
	case "basic":
		decoded, err := base64.StdEncoding.DecodeString(rest)
		_, password, ok := strings.Cut(string(decoded), ":")
		if err != nil || !ok || password == "" {
			return "", registry.Refuse(registry.Unauthenticated, "Basic needs a user name and, as the password, a token")
		}
		return password, nil
	}
	return "", registry.Refuse(registry.Unauthenticated, "found the authorization scheme %q, expected Bearer or Basic", fmt.Sprintf("%.20s", scheme))
}

// touchEvery is how often the use of a token is noted.
const touchEvery = time.Minute

// maxTouched bounds the memory of touches.
const maxTouched = 4096

// touches remembers when tokens were last noted as used, so that most requests
// need no write. It decides nothing about who may sign in.
type touches struct {
	mu sync.Mutex
	at map[string]time.Time
}

// recent tells whether a use was noted within the last while.
func (t *touches) recent(token string, now time.Time) bool {
	t.mu.Lock()
	defer t.mu.Unlock()
	last, ok := t.at[token]
	return ok && now.Sub(last) < touchEvery
}

func (t *touches) due(token string, now time.Time) bool {
	t.mu.Lock()
	defer t.mu.Unlock()
	if last, ok := t.at[token]; ok && now.Sub(last) < touchEvery {
		return false
	}
	if len(t.at) >= maxTouched { // forgetting costs a write too many, nothing else
		clear(t.at)
	}
	t.at[token] = now
	return true
}
