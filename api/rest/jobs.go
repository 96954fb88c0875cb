package rest

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"reflect"
	"time"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// accepted202: work that grows with the registry is accepted and goes on as a job.
func accepted202[T any](f *face, op *huma.Operation) {
	schema := f.api.OpenAPI().Components.Schemas.Schema(reflect.TypeFor[T](), true, "")
	op.DefaultStatus = http.StatusAccepted
	op.Responses["202"] = &huma.Response{Description: "Accepted; the work goes on as a job.", Content: map[string]*huma.MediaType{"application/json": {Schema: schema}}}
}

// A Job is long work in steps.
type Job struct {
	Code      string    `json:"code"`
	Kind      string    `json:"kind"`
	State     string    `json:"state" enum:"waiting,running,done,failed,cancelled"`
	Done      int64     `json:"done"`
	Total     int64     `json:"total" doc:"0 while it is not known."`
	Message   string    `json:"message"`
	Result    string    `json:"result,omitempty" doc:"Where what it found can be read, when it is done."`
	CreatedBy string    `json:"created_by"`
	CreatedAt time.Time `json:"created_at"`
	UpdatedAt time.Time `json:"updated_at"`
}

func showJob(j store.Job) Job {
	out := Job{Code: store.FormatCode(j.Code), Kind: j.Kind, State: string(j.State), Done: j.Done, Total: j.Total, Message: j.Message,
		CreatedBy: j.CreatedBy, CreatedAt: j.CreatedAt.Time(), UpdatedAt: j.UpdatedAt.Time()}
	if j.Kind == registry.JobVerification && j.State == store.JobDone {
		out.Result = "/v1/verification/" + out.Code
	}
	return out
}

var jobTable = table[Job]{[]string{"code", "kind", "state", "done", "total", "message", "created_by", "created_at", "updated_at"}, func(j Job) []string {
	return []string{j.Code, j.Kind, j.State, fmt.Sprint(j.Done), fmt.Sprint(j.Total), j.Message, j.CreatedBy, clock(&j.CreatedAt), clock(&j.UpdatedAt)}
}}

func parseJob(text string) (string, error) {
	code, err := store.ParseCode(text)
	if fault := (*store.CodeError)(nil); errors.As(err, &fault) || err == nil && code[0] != store.LetterJob {
		return "", complain("this is not the code of a job", "path.code", text, "the code of a job")
	}
	return code, err
}

func (f *face) job(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[Job], error) {
	code, err := parseJob(in.Code)
	if err != nil {
		return nil, err
	}
	j, err := f.registry.Job(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &plain[Job]{showJob(j)}, nil
}

func (f *face) jobs(ctx context.Context, actor registry.Actor, in *ListParams) (*answer, error) {
	read := func(ctx context.Context, q registry.Query) (registry.Page[store.Job], error) {
		return f.registry.Jobs(ctx, actor, q)
	}
	return answerList(ctx, f, in, read, showJob, jobTable)
}

// cancelJob ends a job; what it did stays.
func (f *face) cancelJob(ctx context.Context, actor registry.Actor, in *CodeParam) (*plain[Job], error) {
	code, err := parseJob(in.Code)
	if err != nil {
		return nil, err
	}
	j, err := f.registry.CancelJob(ctx, actor, code)
	if err != nil {
		return nil, err
	}
	return &plain[Job]{showJob(j)}, nil
}
