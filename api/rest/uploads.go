package rest

import (
	"context"
	"mime"
	"net/http"
	"strconv"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
)

// upload answers with the bytes of an upload as they came.
func (f *face) upload(ctx context.Context, actor registry.Actor, in *struct {
	SHA256 string `path:"sha256" maxLength:"64" doc:"SHA-256 of the bytes, 64 hexadecimal digits."`
}) (*answer, error) {
	hash, err := parseHash("path.sha256", in.SHA256)
	if err != nil {
		return nil, err
	}
	info, err := f.registry.UploadInfo(ctx, actor, *hash)
	if err != nil {
		return nil, err
	}
	return &answer{Body: func(hc huma.Context) {
		// As they came, and not for a browser to make anything of.
		hc.SetHeader("Content-Type", mediaBytes)
		hc.SetHeader("Content-Disposition", mime.FormatMediaType("attachment", map[string]string{"filename": nameOr(info.Name, hash.String())}))
		hc.SetHeader("Content-Length", strconv.FormatInt(info.Size, 10))
		hc.SetHeader("ETag", quoteTag(hash.String()))
		hc.SetStatus(http.StatusOK)
		if _, err := f.registry.Upload(hc.Context(), actor, *hash, hc.BodyWriter()); err != nil {
			f.options.Log.ErrorContext(hc.Context(), "upload broke off", "request_id", requestID(hc.Context()), "error", err.Error())
			panic(http.ErrAbortHandler) // bytes that end early would look whole
		}
	}}, nil
}
