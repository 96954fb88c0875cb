package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"

	"github.com/spf13/cobra"
	"golang.org/x/term"
)

// The exit statuses of the contract.
const (
	statusDone    = 0
	statusRefused = 1 // or a difference found
	statusUsage   = 2
)

// A command is one row of the table of subcommands. Usage texts, help and
// completions come from it.
type command struct {
	use   string // name and arguments, as shown in the usage line
	short string // what it does, in one line
	// build adds the long help, the arguments, the flags and the action.
	build func(*program, *cobra.Command)
}

func commands() []command {
	return []command{
		{"serve", "answer over HTTP", (*program).buildServe},
		{"demo", "invent a laboratory, from standards to a traced report, print it and serve it", (*program).buildDemo},
		{"init", "make a registry: tables, key, first laboratory, first administrator", (*program).buildInit},
		{"migrate", "bring a registry's tables to those of this program", (*program).buildMigrate},
		{"import FILE", "bring a session's readings from a file", (*program).buildImport},
		{"fit FILE", "fit the session model to the readings in a file, storing nothing", (*program).buildFit},
		{"trace CODE", "show what a number rests on, down to the definitions of its scale", (*program).buildTrace},
		{"verify [CODE|FILE]", "recompute everything stored, one chain or an evidence pack, and name what differs", (*program).buildVerify},
		{"compare CODE CODE…", "set reported deltas against each other, with what they share cancelled", (*program).buildCompare},
		{"export CODE", "write the evidence for a reported delta to a file", (*program).buildExport},
		{"bundle SUBCOMMAND", "hand assigned values on to other laboratories, and take theirs in: export, import, key", (*program).buildBundle},
		{"user SUBCOMMAND", "keep the people of a laboratory: list, add, change, close", (*program).buildUser},
		{"token SUBCOMMAND", "keep access tokens: list, issue, revoke", (*program).buildToken},
		{"version", "say which program and which engine this is", (*program).buildVersion},
	}
}

// A program is one call of deltamoor: its surroundings, and what the flags of
// the root command said.
type program struct {
	env    []string
	stdin  io.Reader
	stdout io.Writer
	stderr io.Writer
	// terminal tells that stderr is one, so that progress may be drawn on it.
	terminal bool

	json   bool
	config string

	// acting is set once a command line was understood: errors after that are
	// refusals, errors before it are wrong usage.
	acting bool
}

// run is the whole program; args come without the program's name. It touches
// nothing but its arguments and what they name.
func run(ctx context.Context, args, env []string, stdin io.Reader, stdout, stderr io.Writer) int {
	p := &program{env: env, stdin: stdin, stdout: stdout, stderr: stderr, terminal: isTerminal(stderr)}
	if args == nil {
		args = []string{} // cobra takes nil to mean os.Args
	}
	root := p.root()
	root.SetArgs(args)
	cmd, err := root.ExecuteContextC(ctx)
	if err == nil {
		return statusDone
	}
	if errors.Is(err, errDifference) {
		return statusRefused // the command has printed what differs
	}
	if ctx.Err() != nil && errors.Is(err, context.Canceled) {
		err = errors.New("interrupted")
	}
	var usage *usageError
	if !p.acting || errors.As(err, &usage) {
		fmt.Fprintf(stderr, "%s: %v\nTry \"%s --help\".\n", cmd.CommandPath(), err, cmd.CommandPath())
		return statusUsage
	}
	p.printRefusal(cmd.CommandPath(), err)
	return statusRefused
}

// errDifference ends a command that did its work and found a difference.
var errDifference = errors.New("a difference was found")

// usageError is a fault of the command line or the configuration that shows
// only after the flags were parsed.
type usageError struct{ text string }

func (e *usageError) Error() string { return e.text }

func usagef(format string, args ...any) error {
	return &usageError{fmt.Sprintf(format, args...)}
}

// root makes the command tree.
func (p *program) root() *cobra.Command {
	root := &cobra.Command{
		Use:   "deltamoor SUBCOMMAND",
		Short: "moor every reported delta to its anchors",
		Long: `deltamoor keeps the chain from raw readings through calibrations, assigned
values and international scales to every delta a laboratory reports.

Configuration is read from flags, then variables named DELTAMOOR_…, then the
file that --config or DELTAMOOR_CONFIG names.

Exit status: 0 done, 1 refused or a difference found, 2 wrong usage.`,
		SilenceErrors:         true,
		SilenceUsage:          true,
		DisableFlagsInUseLine: true,
	}
	gathers(root)
	// One usage line is enough for a command with subcommands.
	root.SetUsageTemplate(strings.Replace(root.UsageTemplate(), "\n  {{.CommandPath}} [command]", "", 1))
	root.SetIn(p.stdin)
	root.SetOut(p.stdout)
	root.SetErr(p.stderr)
	root.PersistentFlags().BoolVar(&p.json, "json", false, "answer in JSON, for programs")
	root.PersistentFlags().StringVar(&p.config, "config", "", "read settings from a TOML `file`")
	root.SetHelpCommand(helpCommand())
	for _, c := range commands() {
		cmd := &cobra.Command{Use: c.use, Short: c.short, DisableFlagsInUseLine: true}
		c.build(p, cmd)
		root.AddCommand(cmd)
	}
	return root
}

// gathers makes a command that does nothing without a subcommand.
func gathers(cmd *cobra.Command) {
	cmd.SuggestionsMinimumDistance = 2
	cmd.Args = func(cmd *cobra.Command, args []string) error {
		if len(args) == 0 {
			return errors.New("found no subcommand, expected one")
		}
		text := fmt.Sprintf("unknown subcommand %q", args[0])
		for i, near := range cmd.SuggestionsFor(args[0]) {
			if i == 0 {
				text += "; is it"
			}
			text += " " + near
		}
		return errors.New(text)
	}
	cmd.RunE = func(*cobra.Command, []string) error { return nil } // never reached: Args refuses
}

// helpCommand differs from cobra's own in that asking for help on something
// that does not exist is wrong usage.
func helpCommand() *cobra.Command {
	return &cobra.Command{
		Use:                   "help [SUBCOMMAND]",
		Short:                 "explain a subcommand",
		DisableFlagsInUseLine: true,
		Args:                  cobra.MaximumNArgs(2), // as in help user add
		RunE: func(cmd *cobra.Command, args []string) error {
			topic := cmd.Root()
			if len(args) > 0 {
				found, rest, err := topic.Find(args)
				if err != nil || len(rest) > 0 {
					return fmt.Errorf("unknown subcommand %q", strings.Join(args, " "))
				}
				topic = found
			}
			topic.InitDefaultHelpFlag()
			return topic.Help()
		},
	}
}

// action wraps what a command does, once its command line was understood.
func (p *program) action(do func(ctx context.Context, cmd *cobra.Command, args []string) error) func(*cobra.Command, []string) error {
	return func(cmd *cobra.Command, args []string) error {
		p.acting = true
		return do(cmd.Context(), cmd, args)
	}
}

// arguments asks for exactly the named arguments, and names the one that is missing.
func arguments(names ...string) cobra.PositionalArgs {
	return func(_ *cobra.Command, args []string) error {
		switch {
		case len(args) < len(names):
			return fmt.Errorf("found %d arguments, expected %d: %s is missing", len(args), len(names), names[len(args)])
		case len(args) > len(names):
			return fmt.Errorf("found %d arguments, expected %d: %q is one too many", len(args), len(names), args[len(names)])
		}
		return nil
	}
}

func isTerminal(w io.Writer) bool {
	f, ok := w.(*os.File)
	return ok && term.IsTerminal(int(f.Fd()))
}
