package api

import (
	"context"
	"crypto/rand"
	"encoding/base64"
	"errors"
	"fmt"
	"log/slog"
	"net/http"
	"net/netip"
	"runtime/debug"
	"slices"
	"strings"
	"time"

	"github.com/labstack/echo/v4"

	"deltamoor/api/rest"
)

// requestIDHeader names a request in answers and log.
const requestIDHeader = "X-Request-Id"

// observe gives a request its identity, logs one line of it and counts it. The
// line has the route's pattern, not the address: addresses hold codes, and
// queries may hold clients' labels.
func observe(log *slog.Logger, m *metrics, address func(*http.Request) netip.Addr, now func() time.Time) echo.MiddlewareFunc {
	return func(next echo.HandlerFunc) echo.HandlerFunc {
		return func(c echo.Context) (err error) {
			begun := now()
			id := newRequestID()
			c.SetRequest(c.Request().WithContext(rest.WithRequestID(c.Request().Context(), id)))
			c.Response().Header().Set(requestIDHeader, id)
			m.running.Inc()
			broke := true
			defer func() {
				m.running.Dec()
				status := c.Response().Status
				if broke { // a panic passes through: the connection is cut
					status = 499
				}
				route := routeOf(c)
				took := now().Sub(begun)
				m.seen(route, c.Request().Method, status, took)
				level := slog.LevelInfo
				if status >= 500 {
					level = slog.LevelError
				}
				log.LogAttrs(c.Request().Context(), level, "request", slog.String("request_id", id), slog.String("method", c.Request().Method), slog.String("route", route),
					slog.Int("status", status), slog.Int64("bytes", c.Response().Size), slog.Duration("took", took), slog.String("from", address(c.Request()).String()))
			}()
			if err := next(c); err != nil {
				c.Error(err)
			}
			broke = false
			return nil
		}
	}
}

func newRequestID() string {
	var b [9]byte
	_, _ = rand.Read(b[:]) // never fails
	return base64.RawURLEncoding.EncodeToString(b[:])
}

// routeOf is the pattern that answered, one word for all that none does: the
// number of series stays bounded.
func routeOf(c echo.Context) string {
	if c.Path() == "" || c.Response().Status == http.StatusMethodNotAllowed {
		return "none"
	}
	return c.Path()
}

// errPanic is what becomes of a panic.
type errPanic struct {
	value any
	stack []byte
}

func (e *errPanic) Error() string { return fmt.Sprintf("panic: %v", e.value) }

// recoverPanics turns a panic into an internal fault. One that cuts the
// connection on purpose passes.
func recoverPanics(next echo.HandlerFunc) echo.HandlerFunc {
	return func(c echo.Context) (err error) {
		defer func() {
			switch p := recover(); p {
			case nil:
			case http.ErrAbortHandler:
				panic(p)
			default:
				err = &errPanic{p, debug.Stack()}
			}
		}()
		return next(c)
	}
}

// secureHeaders forbids what no answer of an API needs. Pages set their own policy.
func secureHeaders(next echo.HandlerFunc) echo.HandlerFunc {
	return func(c echo.Context) error {
		h := c.Response().Header()
		h.Set("X-Content-Type-Options", "nosniff")
		h.Set("X-Frame-Options", "DENY")
		h.Set("Referrer-Policy", "no-referrer")
		h.Set("Content-Security-Policy", "default-src 'none'; frame-ancestors 'none'")
		h.Set("Cross-Origin-Resource-Policy", "same-origin")
		h.Set("Cache-Control", "no-store")
		return next(c)
	}
}

func refuseCrossOrigin(w http.ResponseWriter, r *http.Request) {
	writeProblemTo(w, rest.StatusProblem(http.StatusForbidden, "a page of another origin may not send this request", w.Header().Get(requestIDHeader)))
}

// clientAddress tells where a request comes from. Of X-Forwarded-For the last
// address that is not a trusted proxy counts, and only where the connection
// itself is one's.
func clientAddress(trusted []netip.Prefix) func(*http.Request) netip.Addr {
	isTrusted := func(a netip.Addr) bool {
		return slices.ContainsFunc(trusted, func(p netip.Prefix) bool { return p.Contains(a) })
	}
	return func(r *http.Request) netip.Addr {
		peer, err := netip.ParseAddrPort(r.RemoteAddr)
		if err != nil {
			return netip.Addr{}
		}
		address := peer.Addr().Unmap()
		hops := strings.Split(strings.Join(r.Header.Values("X-Forwarded-For"), ","), ",")
		for i := len(hops) - 1; i >= 0 && isTrusted(address); i-- {
			hop, err := netip.ParseAddr(strings.TrimSpace(hops[i]))
			if err != nil {
				break
			}
			address = hop.Unmap()
		}
		return address
	}
}

// answerHead answers HEAD as GET; the server leaves the body out.
func answerHead(next http.Handler) http.Handler {
	return http.HandlerFunc(func(w http.ResponseWriter, r *http.Request) {
		if r.Method == http.MethodHead {
			as := *r
			as.Method = http.MethodGet
			r = &as
		}
		next.ServeHTTP(w, r)
	})
}

// gone tells whether whoever asked has gone.
func gone(ctx context.Context, err error) bool {
	return errors.Is(err, context.Canceled) && ctx.Err() != nil
}
