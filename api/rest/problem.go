package rest

import (
	"errors"
	"fmt"
	"net/http"
	"strconv"
	"strings"
	"sync"

	"github.com/danielgtaylor/huma/v2"

	"deltamoor/api/registry"
	"deltamoor/store"
)

// A Problem is the body of every refusal, after RFC 9457. Its type is
// /problems/<meaning> and stays the same for ever; errors name the faults one
// by one.
type Problem struct {
	Type   string  `json:"type" doc:"What kind of refusal this is: /problems/ and its meaning. It never changes." example:"/problems/invalid"`
	Title  string  `json:"title" doc:"The same in a few words." example:"Invalid content"`
	Status int     `json:"status" doc:"The HTTP status." example:"422"`
	Detail string  `json:"detail" doc:"What was refused and why, in a sentence." example:"this value cannot be stated"`
	Errors []Fault `json:"errors,omitempty" doc:"The faults one by one, the first 50 of them."`
	More   int     `json:"more,omitempty" doc:"Faults beyond those listed."`
	// RequestID finds the request in the server's log.
	RequestID string `json:"request_id,omitempty" doc:"Finds the request in the server's log."`

	retryAfter int
	challenge  bool
}

// A Fault is one fault: where it stands, what is expected there, what was found.
type Fault struct {
	Location string `json:"location,omitempty" doc:"Where: a path in the request, or row and column in the words of the sender's own file." example:"row 17, column \"d13C raw\""`
	Message  string `json:"message" doc:"What is expected." example:"expected a number with the decimal sign \".\""`
	Value    any    `json:"value,omitempty" doc:"What was found."`
}

// Error is the detail, and with it the faults.
func (p *Problem) Error() string {
	var b strings.Builder
	b.WriteString(p.Detail)
	for _, f := range p.Errors {
		fmt.Fprintf(&b, "\n  %s: %s", f.Location, f.Message)
	}
	return b.String()
}

// GetStatus is the HTTP status, for huma.
func (p *Problem) GetStatus() int { return p.Status }

// ContentType is application/problem+json, for huma.
func (p *Problem) ContentType(string) string { return problemType }

// GetHeaders are the headers that belong to the refusal, for huma.
func (p *Problem) GetHeaders() http.Header {
	h := http.Header{}
	if p.retryAfter > 0 {
		h.Set("Retry-After", strconv.Itoa(p.retryAfter))
	}
	if p.challenge {
		h.Set("WWW-Authenticate", `Bearer realm="deltamoor"`)
	}
	return h
}

const problemType = "application/problem+json"

// A kind of problem: its meaning, and what becomes of it in HTTP.
type problemKind struct {
	Meaning registry.Meaning
	Status  int
	Title   string
	// About is what /problems/<meaning> says.
	About string
}

// Meanings that only HTTP has.
const (
	methodNotAllowed registry.Meaning = "method-not-allowed"
	notAcceptable    registry.Meaning = "not-acceptable"
	unsupportedMedia registry.Meaning = "unsupported-media-type"
	tooSlow          registry.Meaning = "too-slow"
)

// problemKinds is the one table from what a refusal means to its status.
var problemKinds = [...]problemKind{
	{registry.Unauthenticated, http.StatusUnauthorized, "Who asks is not known", "The request had no token, or one that is unknown, expired or revoked. Send a token in the header Authorization: Bearer …"},
	{registry.Refused, http.StatusForbidden, "Not permitted", "Who asks is known, but the role or the scopes of the token do not allow this, or the work is one's own and needs another person."},
	{registry.NotFound, http.StatusNotFound, "Not found", "There is nothing under this address that the asker's laboratory may see. What another laboratory has not shared is not found."},
	{methodNotAllowed, http.StatusMethodNotAllowed, "Method not allowed", "Nothing is replaced or deleted here: PUT, PATCH and DELETE do not exist. A change is a POST of a further version with its reason."},
	{notAcceptable, http.StatusNotAcceptable, "Not acceptable", "The header Accept asks for a form that this resource does not have."},
	{tooSlow, http.StatusRequestTimeout, "Too slow", "The request's body did not arrive in time."},
	{registry.Conflict, http.StatusConflict, "Conflict", "The state of the registry does not allow this: a code is taken, a decision is made already, something needed is not approved."},
	{registry.Stale, http.StatusPreconditionFailed, "Somebody wrote between", "The version named in If-Match is not the present one. Read it again, look at what changed, and send the request with the new ETag."},
	{registry.TooLarge, http.StatusRequestEntityTooLarge, "Too large", "The request is over a bound, which the refusal names."},
	{unsupportedMedia, http.StatusUnsupportedMediaType, "Unsupported media type", "The body is of a type that this resource does not take."},
	{registry.Invalid, http.StatusUnprocessableEntity, "Invalid content", "The content of the request cannot be used. Each fault says where it stands, what was found and what is expected. Nothing was changed."},
	{registry.Unconditional, http.StatusPreconditionRequired, "Condition required", "Somebody else may have been first. Read the resource, and send its ETag in the header If-Match."},
	{registry.TooMany, http.StatusTooManyRequests, "Too many requests", "Slow down; Retry-After says when to try again."},
	{registry.Internal, http.StatusInternalServerError, "Internal fault", "The fault is the server's. It is in the log under the request's id."},
	{registry.Unavailable, http.StatusServiceUnavailable, "Unavailable", "The registry cannot answer now; Retry-After says when to try again."},
}

func kindOf(meaning registry.Meaning) problemKind {
	for _, k := range problemKinds {
		if k.Meaning == meaning {
			return k
		}
	}
	return kindOf(registry.Internal)
}

// kindOfStatus finds the kind for a status that huma or the router chose.
func kindOfStatus(status int) problemKind {
	if status == http.StatusBadRequest { // what cannot be parsed is content too
		status = http.StatusUnprocessableEntity
	}
	for _, k := range problemKinds {
		if k.Status == status {
			return k
		}
	}
	if status >= 400 && status < 500 {
		return kindOf(registry.Invalid)
	}
	return kindOf(registry.Internal)
}

func (k problemKind) problem(detail string) *Problem {
	p := &Problem{Type: "/problems/" + string(k.Meaning), Title: k.Title, Status: k.Status, Detail: detail}
	switch k.Meaning {
	case registry.Unauthenticated:
		p.challenge = true
	case registry.Unavailable, registry.TooMany:
		p.retryAfter = 5
	}
	return p
}

// NewProblem states the refusal of an error. What nobody gave a meaning is
// internal: its text is for the log and does not stand in the problem.
func NewProblem(err error, requestID string) *Problem {
	var done *Problem
	if errors.As(err, &done) {
		done.RequestID = requestID
		return done
	}
	meaning := registry.MeaningOf(err)
	var refusal *registry.Error
	var code *store.CodeError
	var invalid *store.InvalidError
	var p *Problem
	switch {
	case errors.As(err, &refusal):
		p = kindOf(refusal.Meaning).problem(refusal.Message)
		for _, c := range refusal.Complaints {
			p.Errors = append(p.Errors, faultOf(c))
		}
		p.More = refusal.More
	case errors.As(err, &code):
		p = kindOf(registry.Invalid).problem(code.Error())
	case errors.As(err, &invalid):
		p = kindOf(registry.Invalid).problem(invalid.Error())
		p.Errors = []Fault{{Location: invalid.Place, Message: "expected " + invalid.Expected, Value: invalid.Found}}
	case errors.Is(err, store.ErrKeyReused):
		p = kindOf(registry.Invalid).problem("this Idempotency-Key was used for another request")
	case meaning == registry.Internal:
		p = kindOf(meaning).problem("the fault is the server's; it is in the log under the request's id")
	case meaning == registry.Unavailable:
		p = kindOf(meaning).problem("the registry cannot answer now; nothing was changed")
	default:
		p = kindOf(meaning).problem(err.Error())
	}
	p.RequestID = requestID
	var wait interface{ RetryAfter() int }
	if errors.As(err, &wait) {
		p.retryAfter = wait.RetryAfter()
	}
	return p
}

// StatusProblem states a refusal for which only the status is known.
func StatusProblem(status int, detail, requestID string) *Problem {
	p := kindOfStatus(status).problem(detail)
	p.RequestID = requestID
	return p
}

func faultOf(c registry.Complaint) Fault {
	f := Fault{Location: c.Place, Message: "expected " + c.Expected}
	if c.Found != "" {
		f.Value = c.Found
	}
	return f
}

// longestValue bounds what a refusal quotes of a request.
const longestValue = 200

// humaOnce makes huma refuse in the same shape and as strictly as we do. Its
// hooks are variables of its package, so they are set once, before any server
// exists.
var humaOnce sync.Once

func setUpHuma() {
	humaOnce.Do(func() {
		huma.ValidateStrictCasing = true
		huma.DefaultArrayNullable = false
		huma.NewError = func(status int, message string, errs ...error) huma.StatusError {
			return humaProblem("", status, message, errs)
		}
		huma.NewErrorWithContext = func(ctx huma.Context, status int, message string, errs ...error) huma.StatusError {
			return humaProblem(requestID(ctx.Context()), status, message, errs)
		}
	})
}

func humaProblem(id string, status int, message string, errs []error) *Problem {
	switch message {
	case "validation failed":
		message = "the request is not as the API description says; nothing was changed"
	case "unexpected error occurred":
		message, errs = "the fault is the server's; it is in the log under the request's id", nil
	}
	p := StatusProblem(status, message, id)
	for _, err := range errs {
		if err == nil {
			continue
		}
		if len(p.Errors) == registry.MaxComplaints {
			p.More++
			continue
		}
		var detail huma.ErrorDetailer
		if !errors.As(err, &detail) {
			p.Errors = append(p.Errors, Fault{Message: err.Error()})
			continue
		}
		d := detail.ErrorDetail()
		f := Fault{Location: d.Location, Message: d.Message, Value: d.Value}
		switch v := f.Value.(type) {
		case string:
			if len(v) > longestValue {
				f.Value = strings.ToValidUTF8(v[:longestValue], "") + "…"
			}
			if v == "" {
				f.Value = nil
			}
		case map[string]any: // the whole object around a missing or unknown member says nothing
			f.Value = nil
		case []any:
			f.Value = fmt.Sprintf("a list of %d", len(v))
		}
		p.Errors = append(p.Errors, f)
	}
	return p
}
