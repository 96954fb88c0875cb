package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/registry"
	"deltamoor/store"
	"deltamoor/store/ledger"
)

// keyFile is the signing key's name in the data folder. The key is never in
// the database.
const keyFile = "ledger.key"

// An opened registry of one command.
type opened struct {
	*registry.Registry
	store  *store.Store
	config config
}

func (o *opened) close() { _ = o.store.Close() }

// How a command opens the registry.
type openMode int

const (
	toRead  openMode = iota // the database is there; nothing is written
	toWrite                 // the database is there
	toMake                  // folder, database and tables are made as needed
)

// openRegistry opens what the settings name.
func (p *program) openRegistry(ctx context.Context, cmd *cobra.Command, mode openMode) (*opened, error) {
	c, err := p.readConfig(cmd)
	if err != nil {
		return nil, err
	}
	return p.openConfigured(ctx, c, mode)
}

func (p *program) openConfigured(ctx context.Context, c config, mode openMode) (*opened, error) {
	if mode == toMake {
		if err := os.MkdirAll(c.Data, 0o700); err != nil {
			return nil, err
		}
	} else if c.Database == "" {
		if _, err := os.Stat(store.SQLitePath(databaseOf(c))); errors.Is(err, fs.ErrNotExist) {
			return nil, &registry.Error{Meaning: registry.NotFound, Err: err,
				Message: fmt.Sprintf("found no registry in the folder %s: make one with \"deltamoor init\", or name its folder with --data", c.Data)}
		}
	}
	key, err := p.readKey(c.Data)
	if err != nil {
		return nil, err
	}
	s, err := store.Open(ctx, store.Options{Database: databaseOf(c), Migrate: mode == toMake, ReadOnly: mode == toRead})
	if err != nil {
		return nil, explainSchema(err)
	}
	return &opened{registry.New(s, registry.Options{Key: key}), s, c}, nil
}

// explainSchema says what to do about a database that does not fit the program.
func explainSchema(err error) error {
	switch {
	case errors.Is(err, store.ErrOutdated):
		return fmt.Errorf("%w: run \"deltamoor migrate\" first", err)
	case errors.Is(err, store.ErrNewer):
		return fmt.Errorf("%w: a newer program made it, and only such a one may open it", err)
	}
	return err
}

// databaseOf is the shared database, or the embedded one in the data folder.
func databaseOf(c config) string {
	if c.Database != "" {
		return c.Database
	}
	return c.Data + string(filepath.Separator)
}

// keyVariable holds the signing key itself, where no file should.
const keyVariable = variablePrefix + "LEDGER_KEY"

// readKey reads the signing key from the variable, else from the file in the
// data folder; nil where there is none.
func (p *program) readKey(folder string) (*ledger.Key, error) {
	if text := lookup(p.env, keyVariable); text != "" {
		key, err := ledger.ParseKey(text)
		if err != nil {
			return nil, usagef("%s: %v", keyVariable, err)
		}
		return &key, nil
	}
	text, err := os.ReadFile(filepath.Join(folder, keyFile))
	if errors.Is(err, fs.ErrNotExist) {
		return nil, nil
	}
	if err != nil {
		return nil, err
	}
	key, err := ledger.ParseKey(strings.TrimSpace(string(text)))
	if err != nil {
		return nil, fmt.Errorf("%s: %w", filepath.Join(folder, keyFile), err)
	}
	return &key, nil
}

// writer is who the token stands for. Whether that person may, the operation asks.
func (o *opened) writer(ctx context.Context) (registry.Actor, error) {
	if o.config.Token == "" {
		return registry.Actor{}, registry.Refuse(registry.Unauthenticated, "this needs a token: set DELTAMOOR_TOKEN, or --token")
	}
	actor, err := o.Authenticate(ctx, o.config.Token)
	if err != nil {
		return actor, err
	}
	return actor, o.TouchToken(ctx, actor)
}

// laboratories are those of the registry, without the common one.
func (o *opened) laboratories(ctx context.Context) ([]string, error) {
	var known []string
	err := o.store.Read(ctx, func(ctx context.Context, v *store.View) error {
		all, err := v.Laboratories(ctx)
		known = nil
		for _, code := range all {
			if code != store.Common {
				known = append(known, code)
			}
		}
		return err
	})
	return known, err
}

// reader reads in one laboratory. Who may open the database may read it, as
// with any tool that opens it.
func (o *opened) reader(ctx context.Context, laboratory string) (registry.Actor, error) {
	known, err := o.laboratories(ctx)
	if err != nil {
		return registry.Actor{}, err
	}
	switch {
	case len(known) == 0:
		return registry.Actor{}, registry.Refuse(registry.Unavailable, "this registry has no laboratory yet: run \"deltamoor init\"")
	case laboratory == "" && len(known) == 1:
		laboratory = known[0]
	case laboratory == "":
		return registry.Actor{}, usagef("found no --laboratory, expected one of %s", strings.Join(known, ", "))
	case !slices.Contains(known, laboratory):
		return registry.Actor{}, usagef("--laboratory: found %q, expected one of %s", laboratory, strings.Join(known, ", "))
	}
	return registry.Actor{Person: "command-line", Laboratory: laboratory, Roles: []string{registry.Auditor}}, nil
}

// laboratoryFlag adds --laboratory for commands that read without a token.
func laboratoryFlag(cmd *cobra.Command, laboratory *string) {
	cmd.Flags().StringVar(laboratory, "laboratory", "", "`code` of the laboratory, where there are several")
}
