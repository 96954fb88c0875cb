// Command deltamoor is the registry: server, pages and command line in one
// program. `deltamoor help` lists its subcommands.
//
// Exit status: 0 done, 1 refused or a difference found, 2 wrong usage.
package main

import (
	"context"
	"os"
	"os/signal"
	"syscall"
)

func main() {
	os.Exit(mainStatus())
}

// mainStatus is apart from main so that its deferred call runs before the exit.
func mainStatus() int {
	ctx, stop := signal.NotifyContext(context.Background(), os.Interrupt, syscall.SIGTERM)
	defer stop()
	// The first signal asks for an orderly end; a second one ends at once.
	context.AfterFunc(ctx, stop)
	return run(ctx, os.Args[1:], os.Environ(), os.Stdin, os.Stdout, os.Stderr)
}
