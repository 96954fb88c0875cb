package api

import (
	"bytes"
	"io"
	"log/slog"
	"net/http"
	"net/http/httptest"
	"net/netip"
	"strings"
	"testing"
	"time"

	"github.com/labstack/echo/v4"
)

func TestAPanicIsAnInternalFaultThatTellsNothing(t *testing.T) {
	var logged bytes.Buffer
	log := slog.New(slog.NewTextHandler(&logged, nil))
	e := echo.New()
	e.HTTPErrorHandler = writeProblem(log)
	e.Use(observe(log, newMetrics("test"), clientAddress(nil), time.Now), recoverPanics, secureHeaders)
	e.GET("/panic", func(echo.Context) error { panic("the secret of the table") })
	e.GET("/half", func(c echo.Context) error {
		_, _ = io.WriteString(c.Response(), "half")
		panic("in the middle")
	})
	server := httptest.NewServer(e)
	defer server.Close()

	r, err := http.Get(server.URL + "/panic")
	if err != nil {
		t.Fatal(err)
	}
	defer r.Body.Close()
	body, err := io.ReadAll(r.Body)
	if err != nil {
		t.Fatal(err)
	}
	if r.StatusCode != 500 || r.Header.Get("Content-Type") != "application/problem+json" || strings.Contains(string(body), "secret") || !strings.Contains(string(body), "/problems/internal") {
		t.Errorf("status %d, %s: %s", r.StatusCode, r.Header.Get("Content-Type"), body)
	}
	id := r.Header.Get(requestIDHeader)
	if id == "" || !strings.Contains(string(body), id) || !strings.Contains(logged.String(), id) || !strings.Contains(logged.String(), "the secret of the table") {
		t.Errorf("request %q is not to be found: %s\n%s", id, body, &logged)
	}

	// Half an answer must not look like a whole one: the connection is cut.
	if r, err := http.Get(server.URL + "/half"); err == nil {
		defer r.Body.Close()
		if body, err := io.ReadAll(r.Body); err == nil {
			t.Errorf("half an answer came as a whole one: %q", body)
		}
	}
}

func TestClientAddressBelievesOnlyTrustedProxies(t *testing.T) {
	trusted := []netip.Prefix{netip.MustParsePrefix("10.0.0.0/8")}
	for _, c := range []struct {
		trusted         []netip.Prefix
		peer, forwarded string
		want            string
	}{
		{nil, "192.0.2.1:1234", "", "192.0.2.1"},
		{nil, "192.0.2.1:1234", "203.0.113.9", "192.0.2.1"},
		{trusted, "192.0.2.1:1234", "203.0.113.9", "192.0.2.1"},
		{trusted, "10.0.0.1:1234", "203.0.113.9", "203.0.113.9"},
		{trusted, "10.0.0.1:1234", "6.6.6.6, 203.0.113.9", "203.0.113.9"}, // what the client itself wrote does not count
		{trusted, "10.0.0.1:1234", "203.0.113.9, 10.0.0.2", "203.0.113.9"},
		{trusted, "10.0.0.1:1234", "", "10.0.0.1"},
		{trusted, "10.0.0.1:1234", "nonsense", "10.0.0.1"},
		{trusted, "[::ffff:10.0.0.1]:1234", "2001:db8::1", "2001:db8::1"},
	} {
		r := httptest.NewRequest("GET", "/", nil)
		r.RemoteAddr = c.peer
		if c.forwarded != "" {
			r.Header.Set("X-Forwarded-For", c.forwarded)
		}
		if got := clientAddress(c.trusted)(r).String(); got != c.want {
			t.Errorf("peer %s, forwarded %q: %s, want %s", c.peer, c.forwarded, got, c.want)
		}
	}
}
