// Package api puts deltamoor's faces together into one HTTP server: the API
// under /v1, and what operators need. Middleware stands in reading order in New.
package api

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"net"
	"net/http"
	"net/netip"
	"time"

	"github.com/labstack/echo/v4"

	"deltamoor/api/auth"
	"deltamoor/api/registry"
	"deltamoor/api/rest"
)

// Options of the server; the zero value serves with the documented bounds.
type Options struct {
	// Version of the program.
	Version string
	// Log gets one line for each request, and internal faults; nil is slog.Default.
	Log *slog.Logger
	// Now is the clock; nil is time.Now.
	Now func() time.Time
	// TrustedProxies are the networks whose X-Forwarded-For is believed. Without
	// any, requests come from whoever holds the connection.
	TrustedProxies []netip.Prefix
	// TrustedOrigins are origins, as in https://lab.example, whose pages may send
	// requests here with a browser's credentials.
	TrustedOrigins []string
	// Sign-in and API bounds; zero values are the documented ones.
	Auth auth.Options
	API  rest.Options
}

// New makes the handler that serves a registry.
func New(r *registry.Registry, o Options) (http.Handler, error) {
	if o.Log == nil {
		o.Log = slog.Default()
	}
	if o.Now == nil {
		o.Now = time.Now
	}
	origins := http.NewCrossOriginProtection()
	for _, origin := range o.TrustedOrigins {
		if err := origins.AddTrustedOrigin(origin); err != nil {
			return nil, fmt.Errorf("trusted origin %q: %w", origin, err)
		}
	}
	address := clientAddress(o.TrustedProxies)
	m := newMetrics(o.Version)

	e := echo.New()
	e.HideBanner, e.HidePort = true, true
	e.HTTPErrorHandler = writeProblem(o.Log)
	origins.SetDenyHandler(http.HandlerFunc(refuseCrossOrigin))

	e.Use(
		observe(o.Log, m, address, o.Now), // outermost, so that it sees what the client gets
		recoverPanics,
		secureHeaders,
		echo.WrapMiddleware(origins.Handler),
	)

	operators(e, r, m)
	if o.API.Version == "" {
		o.API.Version = o.Version
	}
	if o.API.Log == nil {
		o.API.Log = o.Log
	}
	o.API.Address = address
	if o.Auth.Now == nil {
		o.Auth.Now = o.Now
	}
	if _, err := rest.Mount(e, r, auth.New(r, o.Auth), o.API); err != nil {
		return nil, err
	}
	return answerHead(e), nil
}

// Bounds of a connection.
const (
	readHeaderTimeout = 10 * time.Second
	idleTimeout       = 2 * time.Minute
	maxHeaderBytes    = 64 << 10
	// shutdownPeriod is how long requests that run may take to end.
	shutdownPeriod = 30 * time.Second
)

// Serve answers on a listener until the context ends, then lets running
// requests finish, for at most half a minute. It returns nil after an orderly end.
func Serve(ctx context.Context, listener net.Listener, handler http.Handler, log *slog.Logger) error {
	if log == nil {
		log = slog.Default()
	}
	server := &http.Server{Handler: handler, ReadHeaderTimeout: readHeaderTimeout, IdleTimeout: idleTimeout, MaxHeaderBytes: maxHeaderBytes,
		ErrorLog: slog.NewLogLogger(log.Handler(), slog.LevelWarn)}
	ended := make(chan error, 1)
	go func() { ended <- server.Serve(listener) }()
	select {
	case err := <-ended:
		return fmt.Errorf("serve on %s: %w", listener.Addr(), err)
	case <-ctx.Done():
	}
	bounded, cancel := context.WithTimeout(context.WithoutCancel(ctx), shutdownPeriod)
	defer cancel()
	err := server.Shutdown(bounded)
	if err != nil {
		err = errors.Join(fmt.Errorf("requests still run after %s: %w", shutdownPeriod, err), server.Close())
	}
	if served := <-ended; !errors.Is(served, http.ErrServerClosed) {
		err = errors.Join(err, served)
	}
	return err
}
