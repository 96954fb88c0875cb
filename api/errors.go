package api

import (
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"net/http"

	"github.com/labstack/echo/v4"

	"deltamoor/api/rest"
)

// writeProblem answers what no handler did: unknown addresses, methods that do
// not exist, panics. The table from meaning to status is rest's.
func writeProblem(log *slog.Logger) echo.HTTPErrorHandler {
	return func(err error, c echo.Context) {
		ctx := c.Request().Context()
		id := c.Response().Header().Get(requestIDHeader)
		p := problemOf(err, c, id)
		var broken *errPanic
		switch {
		case gone(ctx, err):
		case errors.As(err, &broken):
			log.ErrorContext(ctx, "panic", "request_id", id, "value", fmt.Sprint(broken.value), "stack", string(broken.stack))
		case p.Status >= 500:
			log.ErrorContext(ctx, "request failed", "request_id", id, "error", err.Error())
		}
		if c.Response().Committed { // half an answer must not look like a whole one
			panic(http.ErrAbortHandler)
		}
		writeProblemTo(c.Response(), p)
	}
}

func problemOf(err error, c echo.Context, id string) *rest.Problem {
	var he *echo.HTTPError
	if !errors.As(err, &he) {
		return rest.NewProblem(err, id)
	}
	detail := fmt.Sprint(he.Message)
	switch he.Code {
	case http.StatusNotFound:
		detail = "there is nothing at this address"
	case http.StatusMethodNotAllowed:
		detail = fmt.Sprintf("%s does not exist here; %s does", c.Request().Method, nameOr(c.Response().Header().Get("Allow"), "GET"))
	}
	return rest.StatusProblem(he.Code, detail, id)
}

func nameOr(name, other string) string {
	if name == "" {
		return other
	}
	return name
}

func writeProblemTo(w http.ResponseWriter, p *rest.Problem) {
	for name, values := range p.GetHeaders() {
		for _, v := range values {
			w.Header().Set(name, v)
		}
	}
	body, err := json.Marshal(p)
	if err != nil { // texts and numbers only
		body = []byte("{}")
	}
	w.Header().Set("Content-Type", p.ContentType(""))
	w.WriteHeader(p.Status)
	_, _ = w.Write(append(body, '\n'))
}
