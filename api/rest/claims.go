package rest

import (
	"context"

	"github.com/danielgtaylor/huma/v2"
	"github.com/danielgtaylor/huma/v2/adapters/humaecho"

	"deltamoor/api/registry"
)

// metaClaimed marks the operations that confirm who asks by their own read: at
// the volume of people typing codes from paper, two questions to the database
// are twice as slow as one.
const metaClaimed = "claimed"

// An unconfirmed asker is one whose token stood for a person at an earlier state
// of the ledger. Whoever serves them confirms that state, or authenticates.
type unconfirmed struct {
	claim        registry.Claim
	authenticate func() (registry.Actor, error)
}

// claim takes an asker at their word for an operation that will confirm it.
func (f *face) claim(ctx huma.Context) (*unconfirmed, bool) {
	if !marked(ctx.Operation(), metaClaimed) {
		return nil, false
	}
	claim, ok := f.auth.Claim(ctx.Header("Authorization"))
	if !ok {
		return nil, false
	}
	return &unconfirmed{claim, func() (registry.Actor, error) {
		return f.auth.Authenticate(ctx.Context(), ctx.Header("Authorization"), f.options.Address(humaecho.Unwrap(ctx).Request()))
	}}, true
}

// handleClaimed registers an operation with a short way for askers whose claim
// the read itself confirms. Where it does not, they are authenticated as always.
func handleClaimed[I, O any](f *face, op huma.Operation, short func(context.Context, registry.Claim, *I) (*O, bool, error),
	fn func(context.Context, registry.Actor, *I) (*O, error)) {
	op.Metadata[metaClaimed] = true
	huma.Register(f.api, op, func(ctx context.Context, in *I) (*O, error) {
		actor, known := ctx.Value(actorKey).(registry.Actor)
		if asker, ok := ctx.Value(claimKey).(*unconfirmed); ok && !known {
			if out, confirmed, err := short(ctx, asker.claim, in); confirmed && err == nil {
				return out, nil
			}
			var err error
			if actor, err = asker.authenticate(); err != nil {
				return nil, f.problem(ctx, err)
			}
			known = true
		}
		if !known {
			return nil, f.problem(ctx, registry.Refuse(registry.Unauthenticated, "sign in or send a token first"))
		}
		out, err := fn(ctx, actor, in)
		if err != nil {
			return nil, f.problem(ctx, err)
		}
		return out, nil
	})
}
