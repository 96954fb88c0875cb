package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/store"
)

func (p *program) buildVerify(cmd *cobra.Command) {
	cmd.Long = `Recompute everything the registry holds: every hash, every ledger's Merkle
root, every derived row, every calibration, final value, assigned value and line
of a report from its stored inputs. With CODE (as in "deltamoor trace"),
recompute the chain of that one number, and prove that each of its versions is
in the ledger. Each difference is named by table and key, with what was found
and what is expected. Exit status 1 means that something was found.

With the name of a file that "deltamoor export" wrote, check that evidence pack
instead, without any database: every hash, proof and signature, and every number
computed again. Name the laboratory's public key with --key, else the pack is
held against itself alone.

A ledger cannot show by itself that its newest entries were cut off. A signed
checkpoint that was kept elsewhere can: name its file with --checkpoint.

With CODE and --draws, the distributions of everything that the number rests on
are propagated through the whole chain as well, every fit of every generation
solved again, and its U is held against them (JCGM 101, clause 8). That shows
whether U can be relied on; it is no difference, and leaves the exit status.
A chain in which something differs is not propagated.

Reading asks for the right to open the database, and for no token.`
	cmd.Example = `  deltamoor verify
  deltamoor verify D7K3M-9Q2XG
  deltamoor verify D7K3M-9Q2XG --draws 1000000
  deltamoor verify evidence.zip --checkpoint kept-elsewhere.txt
  deltamoor verify --laboratory FJO --checkpoint kept-elsewhere.txt`
	var laboratory string
	var workers int
	var checkpoints, keys []string
	var draws drawFlags
	laboratoryFlag(cmd, &laboratory)
	draws.add(cmd)
	cmd.Flags().Lookup("laboratory").Usage = "only the ledger of the laboratory with this `code`"
	cmd.Flags().IntVar(&workers, "workers", 0, "`how many` versions to check at once; 0 is one for each processor")
	cmd.Flags().StringArrayVar(&checkpoints, "checkpoint", nil, "`file` of a signed checkpoint kept outside; may be repeated")
	cmd.Flags().StringArrayVar(&keys, "key", nil, "public `key` to trust beside those recorded; may be repeated")
	settingFlags(cmd, "data", "database")
	cmd.Args = func(cmd *cobra.Command, args []string) error {
		if len(args) == 0 || len(args) == 1 && isPackFile(args[0]) {
			for _, name := range []string{"draws", "seed", "digits"} {
				if cmd.Flags().Changed(name) {
					return fmt.Errorf("--%s: found without a code, expected only with one", name)
				}
			}
			return nil
		}
		for _, name := range []string{"workers", "checkpoint", "key"} {
			if cmd.Flags().Changed(name) {
				return fmt.Errorf("--%s: found with a code, expected only without", name)
			}
		}
		return arguments("CODE")(cmd, args)
	}
	cmd.ValidArgsFunction = cobra.NoFileCompletions
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		if workers < 0 {
			return usagef("--workers: found %d, expected 0 or more", workers)
		}
		if err := draws.check(); err != nil {
			return err
		}
		q := registry.VerifyRequest{Workers: workers, Verifiers: keys}
		for _, name := range checkpoints {
			note, err := os.ReadFile(name)
			if err != nil {
				return err
			}
			q.Outside = append(q.Outside, note)
		}
		if len(args) == 1 && isPackFile(args[0]) {
			return p.verifyPack(ctx, args[0], registry.PackCheckRequest{Verifiers: q.Verifiers, Outside: q.Outside})
		}
		o, err := p.openRegistry(ctx, cmd, toRead)
		if err != nil {
			return err
		}
		defer o.close()
		if len(args) == 1 {
			return p.verifyChain(ctx, o, laboratory, args[0], draws)
		}
		if laboratory != "" {
			if _, err := o.reader(ctx, laboratory); err != nil {
				return err
			}
			q.Laboratories = []string{laboratory}
		}
		return p.verifyAll(ctx, o, q)
	})
}

// A verifyAnswer is what verify prints for programs.
type verifyAnswer struct {
	Clean      bool            `json:"clean"`
	Ledgers    []ledgerAnswer  `json:"ledgers"`
	Versions   []nodeAnswer    `json:"versions,omitempty"`
	Recomputed int             `json:"recomputed"`
	Equal      int             `json:"equal"`
	Proved     *int            `json:"proved,omitempty"`
	Findings   []findingAnswer `json:"findings"`
	// More counts findings beyond those listed, Cut versions that were not followed.
	More int `json:"more,omitempty"`
	Cut  int `json:"cut,omitempty"`
	// Propagation is there where draws were asked for.
	Propagation *exchange.PropagationAnswer `json:"propagation,omitempty"`
}

type ledgerAnswer struct {
	Laboratory  string `json:"laboratory"`
	Entries     int64  `json:"entries"`
	Root        string `json:"root"`
	Checkpoints *int   `json:"checkpoints,omitempty"`
}

type nodeAnswer struct {
	Laboratory string `json:"laboratory"`
	Kind       string `json:"kind"`
	Code       string `json:"code"`
	Version    int    `json:"version"`
	Hash       string `json:"hash"`
	Position   int64  `json:"position"`
	Recomputed bool   `json:"recomputed"`
	Equal      bool   `json:"equal"`
	Proved     bool   `json:"proved"`
	Findings   int    `json:"findings"`
}

type findingAnswer struct {
	Table    string `json:"table"`
	Key      string `json:"key"`
	Found    string `json:"found"`
	Expected string `json:"expected"`
}

func findingAnswers(list []store.Finding) []findingAnswer {
	out := make([]findingAnswer, 0, len(list))
	for _, f := range list {
		out = append(out, findingAnswer{f.Table, f.Key, f.Found, f.Expected})
	}
	return out
}

func (p *program) verifyAll(ctx context.Context, o *opened, q registry.VerifyRequest) error {
	bar := p.startProgress("verify", 0)
	q.Progress = bar.reached
	v, err := o.Verify(ctx, q)
	bar.end(err == nil)
	if err != nil {
		return err
	}
	if p.json {
		answer := verifyAnswer{Clean: v.Clean(), Ledgers: []ledgerAnswer{}, Recomputed: v.Recomputed, Equal: v.Equal, Findings: findingAnswers(v.Findings), More: v.Count - len(v.Findings)}
		for _, l := range v.Laboratories {
			answer.Ledgers = append(answer.Ledgers, ledgerAnswer{l.Laboratory, l.Entries, store.Hash(l.Root).String(), &l.Checkpoints})
		}
		return errors.Join(p.printJSON(answer), difference(v.Clean()))
	}
	t := newTable("ledger", ">entries", ">checkpoints", "root")
	for _, l := range v.Laboratories {
		t.add(l.Laboratory, fmt.Sprint(l.Entries), fmt.Sprint(l.Checkpoints), store.Hash(l.Root).String())
	}
	if err := t.print(p.stdout); err != nil {
		return err
	}
	if len(v.Laboratories) == 0 {
		fmt.Fprintln(p.stdout, "this registry holds no ledger")
	}
	fmt.Fprintf(p.stdout, "\nrecomputed        %d numbers\nequal to the bit  %d\n\n", v.Recomputed, v.Equal)
	return p.printFindings(v.Findings, v.Count)
}

// verifyChain verifies what one number rests on.
func (p *program) verifyChain(ctx context.Context, o *opened, laboratory, text string, draws drawFlags) error {
	s, err := parseSubject(text)
	if err != nil {
		return err
	}
	actor, err := o.reader(ctx, laboratory)
	if err != nil {
		return err
	}
	if err := s.resolve(ctx, o, actor); err != nil {
		return err
	}
	bar := p.startProgress("verify", 0)
	v, err := o.VerifyChain(ctx, actor, s.kind, s.code, s.version, bar.reached)
	bar.end(err == nil)
	if err != nil {
		return err
	}
	var distributions *exchange.PropagationAnswer
	if draws.draws > 0 && v.Clean() {
		var propagation registry.Propagation
		if s.kind == "" {
			propagation, err = o.PropagateReported(ctx, actor, s.code, draws.request())
		} else {
			propagation, err = o.PropagateVersion(ctx, actor, s.kind, s.code, s.version, draws.request())
		}
		if err != nil {
			return err
		}
		answer := exchange.NewPropagationAnswer(propagation)
		distributions = &answer
	}
	if p.json {
		answer := verifyAnswer{Clean: v.Clean(), Propagation: distributions, Ledgers: []ledgerAnswer{}, Recomputed: v.Recomputed, Equal: v.Equal, Proved: &v.Proved, Findings: findingAnswers(v.Findings), Cut: v.Cut}
		for _, l := range v.Ledgers {
			answer.Ledgers = append(answer.Ledgers, ledgerAnswer{l.Laboratory, l.Entries, store.Hash(l.Root).String(), &l.Checkpoints})
		}
		for _, n := range v.Nodes {
			answer.Versions = append(answer.Versions, nodeAnswer{n.Laboratory, string(n.Kind), codeOf(n.Kind, n.Code), n.Version, n.Hash.String(), n.Position, n.Recomputed, n.Equal, n.Proved, len(n.Findings)})
		}
		return errors.Join(p.printJSON(answer), difference(v.Clean()))
	}
	t := newTable("version", "kind", "ledger", ">position", "in the ledger", "numbers", ">findings")
	for _, n := range v.Nodes {
		t.add(versionCode(n.Ref), string(n.Kind), n.Laboratory, fmt.Sprint(n.Position), proof(n), recomputation(n), fmt.Sprint(len(n.Findings)))
	}
	if err := t.print(p.stdout); err != nil {
		return err
	}
	fmt.Fprintln(p.stdout)
	heads := newTable("ledger", ">entries", ">checkpoints", "root")
	for _, l := range v.Ledgers {
		heads.add(l.Laboratory, fmt.Sprint(l.Entries), fmt.Sprint(l.Checkpoints), store.Hash(l.Root).String())
	}
	if err := heads.print(p.stdout); err != nil {
		return err
	}
	fmt.Fprintf(p.stdout, "\nversions          %d, with their decisions %d entries proved\nrecomputed        %d numbers\nequal to the bit  %d\n", len(v.Nodes), v.Proved, v.Recomputed, v.Equal)
	if v.Cut > 0 {
		fmt.Fprintf(p.stdout, "not followed      %d versions beyond the first %d\n", v.Cut, registry.MaxTrace)
	}
	fmt.Fprintln(p.stdout)
	if distributions != nil {
		if err := printPropagation(p.stdout, *distributions); err != nil {
			return err
		}
		fmt.Fprintln(p.stdout)
	}
	return p.printFindings(v.Findings, len(v.Findings))
}

func proof(n registry.NodeVerification) string {
	if n.Proved {
		return "proved"
	}
	return "not proved"
}

func recomputation(n registry.NodeVerification) string {
	switch {
	case n.Equal:
		return "equal"
	case n.Recomputed && len(n.Findings) == 0:
		return "within rounding"
	case n.Recomputed:
		return "differ"
	}
	return "–"
}

// printFindings lists what was found, and ends with it.
func (p *program) printFindings(list []store.Finding, count int) error {
	if count == 0 {
		_, err := fmt.Fprintln(p.stdout, "nothing differs")
		return err
	}
	if count == 1 {
		fmt.Fprintln(p.stdout, "1 difference:")
	} else {
		fmt.Fprintf(p.stdout, "%d differences:\n", count)
	}
	for _, f := range list {
		if err := printFinding(p.stdout, f); err != nil {
			return err
		}
	}
	if more := count - len(list); more > 0 {
		fmt.Fprintf(p.stdout, "and %d more\n", more)
	}
	return errDifference
}

func printFinding(w io.Writer, f store.Finding) error {
	_, err := fmt.Fprintf(w, "  %s %s\n    found    %s\n    expected %s\n", f.Table, f.Key, f.Found, f.Expected)
	return err
}

func difference(clean bool) error {
	if clean {
		return nil
	}
	return errDifference
}
