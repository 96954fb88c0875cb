package rest

import (
	"context"
	"mime"
	"net/http"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

const mediaZIP = "application/zip"

// reportedPack answers with the evidence for a reported delta as one ZIP file,
// written as it is read.
func (f *face) reportedPack(ctx context.Context, actor registry.Actor, in *struct {
	CodeParam
	Uploads bool `query:"uploads" doc:"Also the files that name samples of other clients: for an assessor of the laboratory."`
}) (*answer, error) {
	code, err := parseCode("path.code", in.Code, kindReported)
	if err != nil {
		return nil, err
	}
	collect := f.registry.Pack
	if in.Uploads {
		collect = f.registry.PackWithUploads
	}
	pack, err := collect(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &answer{Body: func(hc huma.Context) {
		hc.SetHeader("Content-Type", mediaZIP)
		hc.SetHeader("Content-Disposition", mime.FormatMediaType("attachment", map[string]string{"filename": store.FormatCode(code) + ".zip"}))
		hc.SetStatus(http.StatusOK)
		if err := exchange.WritePack(hc.Context(), hc.BodyWriter(), pack); err != nil {
			f.options.Log.ErrorContext(hc.Context(), "pack broke off", "request_id", requestID(hc.Context()), "error", err.Error())
			panic(http.ErrAbortHandler) // an archive that ends early would not open
		}
	}}, nil
}
