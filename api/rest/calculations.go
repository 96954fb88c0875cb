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

// calculateFit is the engine without storing anything.
func (f *face) calculateFit(ctx context.Context, actor registry.Actor, in *struct {
	ContentType string `header:"Content-Type" hidden:"true"`
	RawBody     []byte `contentType:"application/octet-stream"`
}) (*plain[exchange.FitAnswer], error) {
	if !actor.May(registry.MayRead) {
		return nil, registry.Refuse(registry.Refused, "%s may not read in laboratory %s", actor.Person, actor.Laboratory)
	}
	media, err := FileParams{ContentType: nameOr(in.ContentType, mediaJSON)}.media()
	if err != nil || media != mediaJSON {
		return nil, StatusProblem(http.StatusUnsupportedMediaType, fmt.Sprintf("found the media type %q, expected %s", in.ContentType, mediaJSON), "")
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
