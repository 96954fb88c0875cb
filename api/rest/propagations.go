package rest

import (
	"context"
	"reflect"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// propagationsAtOnce bounds how many propagations run beside each other: each
// takes every processor for seconds.
const propagationsAtOnce = 2

// propagating runs one propagation, or says that enough are running.
func (f *face) propagating(work func() (registry.Propagation, error)) (*plain[exchange.PropagationAnswer], error) {
	select {
	case f.propagations <- struct{}{}:
		defer func() { <-f.propagations }()
	default:
		return nil, registry.Refuse(registry.TooMany, "%d propagations are running; ask again when one has ended", propagationsAtOnce)
	}
	p, err := work()
	if err != nil {
		return nil, err
	}
	return &plain[exchange.PropagationAnswer]{exchange.NewPropagationAnswer(p)}, nil
}

// A PropagationBody says how the chain of a stored number is propagated.
type PropagationBody struct {
	exchange.PropagationOptions
	Probability float64 `json:"probability,omitempty" minimum:"0" maximum:"0.9999" doc:"Coverage probability of the intervals; left out: that of the number." example:"0.95"`
}

func (b PropagationBody) request() registry.PropagationRequest {
	q := b.Request()
	q.Probability = b.Probability
	return q
}

func (f *face) propagateReported(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Body PropagationBody
}) (*plain[exchange.PropagationAnswer], error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	return f.propagating(func() (registry.Propagation, error) {
		return f.registry.PropagateReported(ctx, actor, code, in.Body.request())
	})
}

func (f *face) propagateCalibration(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Version int `query:"version" minimum:"1" doc:"Of this version; left out: the one in force, else the newest."`
	Body    PropagationBody
}) (*plain[exchange.PropagationAnswer], error) {
	code, err := calibrationKind.code(in.Code)
	if err != nil {
		return nil, err
	}
	return f.propagating(func() (registry.Propagation, error) {
		return f.registry.PropagateVersion(ctx, actor, store.KindCalibration, code, in.Version, in.Body.request())
	})
}

// calculatePropagation is the same for a fit that is not stored.
func (f *face) calculatePropagation(ctx context.Context, actor registry.Actor, in *CalculationParams) (*plain[exchange.PropagationAnswer], error) {
	if err := in.may(actor); err != nil {
		return nil, err
	}
	request, err := exchange.DecodePropagation(in.RawBody)
	if err != nil {
		return nil, err
	}
	session, model, policy, q, err := request.Calculation()
	if err != nil {
		return nil, exchange.FitComplaints(err)
	}
	return f.propagating(func() (registry.Propagation, error) {
		p, err := registry.CalculatePropagation(ctx, session, model, policy, q)
		return p, exchange.FitComplaints(err)
	})
}

// propagationBody describes the body of a stateless propagation, which is read as it came.
func propagationBody(f *face, op *huma.Operation) {
	fitBody(f, op)
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[exchange.PropagationRequest](), true, "")
	op.RequestBody.Content[mediaJSON].Schema = schema
}
