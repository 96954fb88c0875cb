// Package rest is deltamoor's HTTP API, version 1: JSON in and out, CSV out of
// every list, refusals after RFC 9457, and the OpenAPI 3.1 description made
// from the same code.
//
// A handler parses, calls the registry once or twice, and answers; what may be
// done and what follows from it is the registry's business. Public shapes are
// types of this package with conversions from the stored ones, so that the
// contract and the hashed bytes change for different reasons.
package rest

import (
	"context"
	"errors"
	"log/slog"
	"net/http"
	"net/netip"
	"sync/atomic"
	"time"

	"github.com/danielgtaylor/huma/v2"
	"github.com/danielgtaylor/huma/v2/adapters/humaecho"
	"github.com/labstack/echo/v4"

	"deltamoor/api/registry"
)

// An Authenticator tells who sends a request.
type Authenticator interface {
	// Authenticate reads the Authorization header of a request from an address.
	// Its refusals are registry errors; one with a method RetryAfter() int says
	// when to try again.
	Authenticate(ctx context.Context, authorization string, address netip.Addr) (registry.Actor, error)
	// Claim tells without asking the registry who the sender was when it was last
	// asked, for reads that confirm it themselves; false where that is not known.
	Claim(authorization string) (registry.Claim, bool)
}

// Options of the API.
type Options struct {
	// Version of the program, for the description.
	Version string
	// Log gets internal faults; nil is slog.Default.
	Log *slog.Logger
	// Address tells where a request comes from; nil takes the connection's.
	Address func(*http.Request) netip.Addr
	// Timeout bounds one request; 0 means a minute. Imports, whole lists and
	// verification have LongTimeout, 0 means ten minutes.
	Timeout, LongTimeout time.Duration
	// MaxBody bounds a JSON body; 0 means 1 MiB. Imports take registry.MaxUpload.
	MaxBody int64
}

// A face is the API over one registry.
type face struct {
	registry *registry.Registry
	auth     Authenticator
	options  Options
	api      huma.API

	initialised atomic.Bool // a registry does not go back

	// propagations holds one entry for each that is running.
	propagations chan struct{}
}

// Mount registers the API on a router, under /v1, with its description at
// /openapi.json and /openapi.yaml, readable at /docs.
func Mount(e *echo.Echo, r *registry.Registry, auth Authenticator, o Options) (*huma.OpenAPI, error) {
	setUpHuma()
	if o.Log == nil {
		o.Log = slog.Default()
	}
	if o.Address == nil {
		o.Address = remoteAddress
	}
	if o.Timeout == 0 {
		o.Timeout = time.Minute
	}
	if o.LongTimeout == 0 {
		o.LongTimeout = 10 * time.Minute
	}
	if o.MaxBody == 0 {
		o.MaxBody = 1 << 20
	}
	f := &face{registry: r, auth: auth, options: o, propagations: make(chan struct{}, propagationsAtOnce)}
	f.api = humaecho.New(e, describe(o.Version))
	f.api.UseMiddleware(f.limitTime, f.authenticate, f.idempotent)
	f.routes()
	finishDescription(f.api.OpenAPI())
	return f.api.OpenAPI(), mountDocs(e, f.api.OpenAPI())
}

func remoteAddress(r *http.Request) netip.Addr {
	a, err := netip.ParseAddrPort(r.RemoteAddr)
	if err != nil {
		return netip.Addr{}
	}
	return a.Addr().Unmap()
}

type contextKey int

const (
	actorKey contextKey = iota
	requestIDKey
	claimKey
)

// WithRequestID gives a request the identity that its log lines and refusals carry.
func WithRequestID(ctx context.Context, id string) context.Context {
	return context.WithValue(ctx, requestIDKey, id)
}

func requestID(ctx context.Context) string {
	id, _ := ctx.Value(requestIDKey).(string)
	return id
}

// Marks of operations.
const (
	metaLong     = "long"      // may take LongTimeout
	metaCreates  = "creates"   // honours Idempotency-Key
	metaSecret   = "secret"    // the answer holds a secret
	metaOnlyJSON = "only JSON" // the raw body is JSON and nothing else
)

func marked(op *huma.Operation, mark string) bool {
	on, _ := op.Metadata[mark].(bool)
	return on
}

func (f *face) limitTime(ctx huma.Context, next func(huma.Context)) {
	limit := f.options.Timeout
	if marked(ctx.Operation(), metaLong) {
		limit = f.options.LongTimeout
	}
	bounded, cancel := context.WithTimeout(ctx.Context(), limit)
	defer cancel()
	next(huma.WithContext(ctx, bounded))
}

// authenticate finds out who asks, before anything of the request is read.
func (f *face) authenticate(ctx huma.Context, next func(huma.Context)) {
	if asker, ok := f.claim(ctx); ok {
		next(huma.WithValue(ctx, claimKey, asker))
		return
	}
	request := humaecho.Unwrap(ctx).Request()
	actor, err := f.auth.Authenticate(ctx.Context(), ctx.Header("Authorization"), f.options.Address(request))
	if err != nil {
		if !f.initialised.Load() {
			err = f.uninitialised(ctx.Context(), err)
		}
		f.refuse(ctx, err)
		return
	}
	next(huma.WithValue(ctx, actorKey, actor))
}

// uninitialised says of a registry that nobody can sign in to yet what it needs.
func (f *face) uninitialised(ctx context.Context, err error) error {
	done, look := f.registry.Initialised(ctx)
	switch {
	case look != nil:
		return look
	case !done:
		return registry.Refuse(registry.Unavailable, "this registry is not initialised: run init")
	}
	f.initialised.Store(true)
	return err
}

// refuse writes a refusal from a middleware.
func (f *face) refuse(ctx huma.Context, err error) {
	p := f.problem(ctx.Context(), err)
	for name, values := range p.GetHeaders() {
		for _, v := range values {
			ctx.SetHeader(name, v)
		}
	}
	ctx.SetHeader("Content-Type", problemType)
	ctx.SetStatus(p.Status)
	// Who cannot be told any more has gone.
	_ = strictJSON.Marshal(ctx.BodyWriter(), p)
}

// problem states an error, and logs what is the server's fault.
func (f *face) problem(ctx context.Context, err error) *Problem {
	p := NewProblem(err, requestID(ctx))
	switch {
	case errors.Is(err, context.Canceled) && ctx.Err() != nil: // the asker has gone
	case p.Status >= 500:
		f.options.Log.ErrorContext(ctx, "request failed", "request_id", p.RequestID, "status", p.Status, "error", err.Error())
	}
	return p
}

// handle registers one operation. Who asks is an argument of the handler.
func handle[I, O any](f *face, op huma.Operation, fn func(context.Context, registry.Actor, *I) (*O, error)) {
	huma.Register(f.api, op, func(ctx context.Context, in *I) (*O, error) {
		actor, ok := ctx.Value(actorKey).(registry.Actor)
		if !ok {
			return nil, f.problem(ctx, registry.Refuse(registry.Unauthenticated, "sign in or send a token first"))
		}
		out, err := fn(ctx, actor, in)
		if err != nil {
			return nil, f.problem(ctx, err)
		}
		return out, nil
	})
}

// one is the answer of a single resource.
type one[T any] struct {
	ETag     string `header:"ETag" doc:"Names this version and the decisions on it; send it in If-Match."`
	Location string `header:"Location" doc:"Where the new resource is."`
	Link     string `header:"Link" doc:"Of one version: the next one, as rel=\"successor-version\", and its record, as rel=\"latest-version\" (RFC 5829)."`
	Body     T
}

// plain is an answer without a tag.
type plain[T any] struct {
	Body T
}
