package rest

import (
	"context"
	"fmt"
	"net/http"
	"reflect"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
)

// maxFit bounds the body of a stateless fit.
const maxFit = 16 << 20

// CalculationParams are the body of a calculation that stores nothing, read as it came.
type CalculationParams struct {
	ContentType string `header:"Content-Type" hidden:"true"`
	RawBody     []byte `contentType:"application/octet-stream"`
}

// may refuses who may not read, and what is not JSON.
func (p *CalculationParams) may(actor registry.Actor) error {
	if !actor.May(registry.MayRead) {
		return registry.Refuse(registry.Refused, "%s may not read in laboratory %s", actor.Person, actor.Laboratory)
	}
	media, err := FileParams{ContentType: nameOr(p.ContentType, mediaJSON)}.media()
	if err != nil || media != mediaJSON {
		return StatusProblem(http.StatusUnsupportedMediaType, fmt.Sprintf("found the media type %q, expected %s", p.ContentType, mediaJSON), "")
	}
	return nil
}

// calculateFit is the engine without storing anything.
func (f *face) calculateFit(ctx context.Context, actor registry.Actor, in *CalculationParams) (*plain[exchange.FitAnswer], error) {
	if err := in.may(actor); err != nil {
		return nil, err
	}
	request, err := exchange.DecodeFit(in.RawBody)
	if err != nil {
		return nil, err
	}
	answer, err := exchange.AnswerFit(request)
	if err != nil {
		return nil, err
	}
	return &plain[exchange.FitAnswer]{answer}, nil
}

// fitBody describes the body of a stateless fit, which is read as it came.
func fitBody(f *face, op *huma.Operation) {
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[exchange.FitRequest](), true, "")
	op.MaxBodyBytes = maxFit + 1
	op.SkipValidateBody = true // read as it came
	op.Metadata[metaOnlyJSON] = true
	op.RequestBody = &huma.RequestBody{Required: true, Content: map[string]*huma.MediaType{mediaJSON: {Schema: schema}}}
}
