package rest

import (
	"bytes"
	"crypto/sha256"
	"encoding/json"
	"fmt"
	"io"
	"net/http"
	"strings"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
)

// A rememberedAnswer is what a repeated request is answered with.
type rememberedAnswer struct {
	Status  int               `json:"status"`
	Headers map[string]string `json:"headers"`
	Body    string            `json:"body"`
}

// idempotencyHeader is the request header, after the IETF draft of that name.
const idempotencyHeader = "Idempotency-Key"

// idempotent carries out a creating request once for each key of a person:
// sent again, it is answered with the answer of the first time and changes
// nothing. The registry records the key in the transaction of the effect, so of
// two at once one has no effect; the answer follows. A refused request is not
// remembered, so it can be tried again.
func (f *face) idempotent(ctx huma.Context, next func(huma.Context)) {
	key := ctx.Header(idempotencyHeader)
	op := ctx.Operation()
	if key == "" || !marked(op, metaCreates) || ctx.Query("preview") == "true" {
		next(ctx)
		return
	}
	if len(key) > 255 {
		f.refuse(ctx, complain("this request cannot be told from others", "header.Idempotency-Key", fmt.Sprintf("%d bytes", len(key)), "at most 255 bytes"))
		return
	}
	actor, _ := ctx.Context().Value(actorKey).(registry.Actor)
	body, err := io.ReadAll(io.LimitReader(ctx.BodyReader(), op.MaxBodyBytes))
	if err != nil {
		f.refuse(ctx, StatusProblem(http.StatusRequestTimeout, "the request's body did not arrive: "+err.Error(), requestID(ctx.Context())))
		return
	}
	target := ctx.URL()
	hash := sha256.New()
	fmt.Fprintf(hash, "%s %s\n%s\n%s\n", op.Method, target.RequestURI(), ctx.Header("Content-Type"), ctx.Header("If-Match"))
	hash.Write(body)
	request := registry.IdempotencyKey{Key: key, Request: [32]byte(hash.Sum(nil))}

	if stored, found, err := f.registry.Recall(ctx.Context(), actor, request); err != nil {
		f.refuse(ctx, err)
		return
	} else if found {
		f.replay(ctx, stored)
		return
	}

	recorder := &recorder{humaContext: ctx, body: bytes.NewReader(body), headers: map[string]string{}}
	next(huma.WithContext(recorder, registry.WithKey(ctx.Context(), request)))
	if recorder.status >= 200 && recorder.status < 300 {
		answer := rememberedAnswer{Status: recorder.status, Headers: recorder.headers, Body: recorder.out.String()}
		if marked(op, metaSecret) {
			answer.Body = withoutSecret(recorder.out.Bytes())
		}
		stored, err := json.Marshal(answer)
		if err == nil {
			err = f.registry.Remember(ctx.Context(), actor, request, stored)
		}
		if err != nil { // the effect stands; only its repetition could not be told
			f.options.Log.ErrorContext(ctx.Context(), "answer not remembered", "request_id", requestID(ctx.Context()), "error", err.Error())
		}
	}
	recorder.flush()
}

// replay writes the answer of the first time.
func (f *face) replay(ctx huma.Context, stored []byte) {
	var answer rememberedAnswer
	if err := json.Unmarshal(stored, &answer); err != nil {
		f.refuse(ctx, fmt.Errorf("read a remembered answer: %w", err))
		return
	}
	for name, value := range answer.Headers {
		ctx.SetHeader(name, value)
	}
	ctx.SetHeader("Idempotency-Replayed", "true")
	ctx.SetStatus(answer.Status)
	_, _ = io.WriteString(ctx.BodyWriter(), answer.Body)
}

// withoutSecret takes the secret out of an answer: it is shown once, and is
// stored nowhere but as a hash.
func withoutSecret(body []byte) string {
	var members map[string]json.RawMessage
	if err := json.Unmarshal(body, &members); err != nil {
		return "{}"
	}
	delete(members, "secret")
	out, err := json.Marshal(members)
	if err != nil {
		return "{}"
	}
	return string(out) + "\n"
}

// humaContext keeps the embedded context's name from hiding its method Context.
type humaContext = huma.Context

// A recorder holds an answer back until it is remembered.
type recorder struct {
	humaContext
	body    *bytes.Reader
	status  int
	headers map[string]string
	out     bytes.Buffer
}

// Unwrap gives huma the context underneath.
func (r *recorder) Unwrap() huma.Context { return r.humaContext }

func (r *recorder) BodyReader() io.Reader { return r.body }

func (r *recorder) SetStatus(code int) { r.status = code }

func (r *recorder) Status() int { return r.status }

func (r *recorder) BodyWriter() io.Writer { return &r.out }

func (r *recorder) SetHeader(name, value string) {
	r.headers[http.CanonicalHeaderKey(name)] = value
	r.humaContext.SetHeader(name, value)
}

func (r *recorder) AppendHeader(name, value string) {
	name = http.CanonicalHeaderKey(name)
	if before := r.headers[name]; before != "" {
		r.headers[name] = strings.Join([]string{before, value}, ", ")
	} else {
		r.headers[name] = value
	}
	r.humaContext.AppendHeader(name, value)
}

func (r *recorder) flush() {
	if r.status == 0 {
		r.status = http.StatusOK
	}
	r.humaContext.SetStatus(r.status)
	_, _ = r.humaContext.BodyWriter().Write(r.out.Bytes())
}
