package main

import (
	"context"
	"fmt"
	"log/slog"
	"net"
	"sync"

	"github.com/spf13/cobra"

	"deltamoor/api"
	"deltamoor/store/ledger"
)

func (p *program) buildServe(cmd *cobra.Command) {
	cmd.Long = `Answer over HTTP until interrupted: the API under /v1, its description under
/docs and /openapi.json, and /healthz, /readyz and /metrics for operators.

The embedded database is made and brought up to date as needed; a shared one is
brought up to date by "deltamoor migrate", and any number of servers may stand
before it. Until "deltamoor init" has been run the server is alive but not
ready. Encryption on the wire is the business of the proxy in front.

The log goes to standard error: JSON, or plain text on a terminal. Interrupted
(SIGINT, SIGTERM), the server takes no new requests, finishes those under way,
for at most half a minute, and ends with exit status 0.`
	settingFlags(cmd, "data", "database", "listen")
	cmd.Args = arguments()
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, _ []string) error {
		c, err := p.readConfig(cmd)
		if err != nil {
			return err
		}
		mode := toMake
		if c.Database != "" {
			mode = toWrite
		}
		o, err := p.openConfigured(ctx, c, mode)
		if err != nil {
			return err
		}
		defer o.close()
		return p.serve(ctx, o, p.logger())
	})
}

// A serveAnswer says where the server answers.
type serveAnswer struct {
	Address string `json:"address"`
	Ready   bool   `json:"ready"`
}

// serve answers on the configured address until ctx ends, and does what waits
// in the background meanwhile.
func (p *program) serve(ctx context.Context, o *opened, log *slog.Logger) error {
	handler, err := api.New(o.Registry, api.Options{Version: version().Version, Log: log})
	if err != nil {
		return err
	}
	ready, err := o.Initialised(ctx)
	if err != nil {
		return err
	}
	listener, err := (&net.ListenConfig{}).Listen(ctx, "tcp", o.config.Listen)
	if err != nil {
		return err
	}
	answer := serveAnswer{Address: "http://" + listener.Addr().String(), Ready: ready}
	if p.json {
		err = p.printJSON(answer)
	} else {
		text := "serving on " + answer.Address + "\n"
		if !ready {
			text += "not ready: this registry is empty; run \"deltamoor init\"\n"
		}
		_, err = fmt.Fprint(p.stdout, text)
	}
	if err != nil { // nobody would learn the address
		_ = listener.Close()
		return err
	}
	log.Info("serving", "address", listener.Addr().String(), "engine", o.store.Engine(), "version", version().Version, "initialised", ready)

	beside, stop := context.WithCancel(ctx)
	var background sync.WaitGroup
	background.Go(func() { o.work(beside, log) })
	background.Go(func() {
		o.sign(beside, log, func() (*ledger.Key, error) { return p.readKey(o.config.Data) })
	})
	err = api.Serve(ctx, listener, handler, log)
	stop()
	background.Wait()
	log.Info("ended")
	return err
}

// logger writes for people on a terminal and for programs elsewhere.
func (p *program) logger() *slog.Logger {
	if p.terminal {
		return slog.New(slog.NewTextHandler(p.stderr, nil))
	}
	return slog.New(slog.NewJSONHandler(p.stderr, nil))
}
