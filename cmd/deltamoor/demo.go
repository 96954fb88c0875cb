package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/demo"
	"deltamoor/api/registry"
	"deltamoor/api/rest"
	"deltamoor/store"
)

// demoSeed gives the laboratory that the documentation speaks of.
const demoSeed = 1

func (p *program) buildDemo(cmd *cobra.Command) {
	cmd.Long = `Invent a laboratory and take it from standards on a shelf to reports, through
the same operations as any other; print one report and the trace of one of its
deltas, then serve the whole of it until interrupted. The data folder is thrown
away at the end unless --data names one, which must not hold a registry yet.
Everything about the laboratory is made up, except the international reference
materials and their published values.`
	cmd.Example = `  deltamoor demo
  deltamoor demo --once`
	var once bool
	cmd.Flags().BoolVar(&once, "once", false, "end after printing")
	settingFlags(cmd, "data", "listen")
	cmd.Flags().Lookup("data").Usage = "keep the `folder` of the embedded database; left out: a throw-away one"
	cmd.Flags().Lookup("data").DefValue = ""
	cmd.Args = arguments()
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, _ []string) (err error) {
		c, err := p.readConfig(cmd)
		if err != nil {
			return err
		}
		c.Database = "" // what is invented stays out of a shared database
		if cmd.Flags().Changed("data") {
			err = os.MkdirAll(c.Data, 0o700)
		} else if c.Data, err = os.MkdirTemp("", "deltamoor-demo-"); err == nil {
			defer func() { err = errors.Join(err, os.RemoveAll(c.Data)) }()
		}
		if err != nil {
			return err
		}
		built, err := p.buildLaboratory(ctx, c)
		if err != nil || once {
			return err
		}
		return p.serveLaboratory(ctx, c, built)
	})
}

// buildLaboratory builds the invented laboratory in an empty folder and prints it.
func (p *program) buildLaboratory(ctx context.Context, c config) (built *demo.Summary, err error) {
	file := store.SQLitePath(databaseOf(c))
	if _, err := os.Stat(file); !errors.Is(err, fs.ErrNotExist) {
		return nil, registry.Refuse(registry.Conflict, "found %s, expected a folder without a registry: \"deltamoor serve --data %s\" serves the one that is there", file, filepath.Clean(c.Data))
	}
	place, err := demo.Open(ctx, store.Options{Database: file}, demoSeed)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, place.Close()) }()
	s, err := demo.Build(ctx, place.Registry, place.Clock, demoSeed)
	if err != nil {
		return nil, err
	}
	if !p.json {
		return s, demo.Print(ctx, p.stdout, place.Registry, s)
	}
	trace, err := place.Registry.Trace(ctx, s.Auditor, "", s.Shown, 0)
	if err != nil {
		return nil, err
	}
	return s, p.printJSON(rest.ShowTrace(trace))
}

// serveLaboratory opens the laboratory again, with the real clock and real
// randomness: what a known seed drew, everybody can compute.
func (p *program) serveLaboratory(ctx context.Context, c config, built *demo.Summary) error {
	o, err := p.openConfigured(ctx, c, toWrite)
	if err != nil {
		return err
	}
	defer o.close()
	var tokens []string
	answers := []tokenAnswer{}
	for _, actor := range []registry.Actor{built.Analyst, built.Signatory, built.Manager, built.Administrator, built.Auditor} {
		it, secret, err := o.IssueToken(ctx, built.Administrator, registry.TokenRequest{Person: actor.Person, Label: "served demo"})
		if err != nil {
			return err
		}
		answer := tokenOf(it)
		answer.Token = secret
		answers = append(answers, answer)
		tokens = append(tokens, fmt.Sprintf("%s (%s)", actor.Person, strings.Join(actor.Roles, ", ")), secret)
	}
	if p.json {
		if err := p.printJSON(answers); err != nil {
			return err
		}
		return p.serve(ctx, o, p.logger())
	}
	if _, err := fmt.Fprintf(p.stdout, "\nTokens to try it with, for this folder only:\n\n"); err != nil {
		return err
	}
	if err := printPairs(p.stdout, tokens...); err != nil {
		return err
	}
	if _, err := fmt.Fprintln(p.stdout); err != nil {
		return err
	}
	return p.serve(ctx, o, p.logger())
}
