package api_test

import (
	"context"
	"io"
	"net"
	"net/http"
	"testing"
	"time"

	"deltamoor/api"
)

// TestShutdownLetsRunningRequestsFinish ends the server while a request runs:
// the request gets its whole answer, a new one gets none.
func TestShutdownLetsRunningRequestsFinish(t *testing.T) {
	begun, finish := make(chan struct{}), make(chan struct{})
	handler := http.HandlerFunc(func(w http.ResponseWriter, _ *http.Request) {
		close(begun)
		<-finish
		_, _ = io.WriteString(w, "whole")
	})
	listener, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(context.Background())
	served := make(chan error, 1)
	go func() { served <- api.Serve(ctx, listener, handler, nil) }()
	answered := make(chan string, 1)
	go func() {
		r, err := http.Get("http://" + listener.Addr().String())
		if err != nil {
			answered <- err.Error()
			return
		}
		defer r.Body.Close()
		body, err := io.ReadAll(r.Body)
		if err != nil {
			answered <- err.Error()
			return
		}
		answered <- string(body)
	}()
	<-begun
	stop()
	// The listener closes first; then the running request is waited for.
	for {
		c, err := net.DialTimeout("tcp", listener.Addr().String(), time.Second)
		if err != nil {
			break
		}
		c.Close()
		time.Sleep(time.Millisecond)
	}
	select {
	case err := <-served:
		t.Fatalf("served ended with a request running: %v", err)
	default:
	}
	close(finish)
	if got := <-answered; got != "whole" {
		t.Errorf("the running request got %q", got)
	}
	if err := <-served; err != nil {
		t.Errorf("orderly end: %v", err)
	}
}
