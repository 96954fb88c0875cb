package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"os"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/api/rest"
	"deltamoor/store"
)

func (p *program) buildBundle(cmd *cobra.Command) {
	cmd.Long = `Hand assigned values on to other laboratories, and take theirs in.

A bundle is one signed file with the whole chain of one value. Who takes it in
verifies all of it without asking the sender's server, against a public key that
came another way; what is taken in is a draft until a person accepts it.`
	gathers(cmd)
	for _, c := range []command{
		{"export VALUE", "write the signed chain of a value to a file", (*program).buildBundleExport},
		{"import FILE", "verify a partner's bundle and draft its value", (*program).buildBundleImport},
		{"key", "print the public key that partners verify bundles with", (*program).buildBundleKey},
	} {
		sub := &cobra.Command{Use: c.use, Short: c.short, DisableFlagsInUseLine: true}
		c.build(p, sub)
		cmd.AddCommand(sub)
	}
}

func (p *program) buildBundleExport(cmd *cobra.Command) {
	cmd.Long = `Write the signed chain of an assigned value to a file. VALUE is
MATERIAL/SCALE[/MEASURAND]; a number behind a dot names a version, without it
the one in force is written. Files that name samples of clients are left out.

Reading asks for the right to open the database, and for no token. A file that
exists is not written over.`
	cmd.Example = `  deltamoor bundle export FJO-GLY/d13C-VPDB-LSVEC -o glycine.zip`
	var laboratory, output string
	laboratoryFlag(cmd, &laboratory)
	cmd.Flags().StringVarP(&output, "output", "o", "", "`file` to write; - is standard output")
	outAlias(cmd, &output)
	settingFlags(cmd, "data", "database")
	cmd.Args = arguments("VALUE")
	cmd.ValidArgsFunction = cobra.NoFileCompletions
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		s, err := parseSubject(args[0])
		if err != nil {
			return err
		}
		if s.kind != store.KindValue {
			return fmt.Errorf("value %q: expected MATERIAL/SCALE or MATERIAL/SCALE/MEASURAND", args[0])
		}
		if output == "" {
			return usagef("found no --output, expected the file to write")
		}
		o, err := p.openRegistry(ctx, cmd, toWrite) // the ledger's head is signed
		if err != nil {
			return err
		}
		defer o.close()
		actor, err := o.reader(ctx, laboratory)
		if err != nil {
			return err
		}
		if err := s.resolve(ctx, o, actor); err != nil {
			return err
		}
		pack, err := o.Bundle(ctx, actor, s.code, s.version)
		if err != nil {
			return err
		}
		var b bytes.Buffer
		if err := exchange.WritePack(ctx, &b, pack); err != nil {
			return err
		}
		return p.writeOutput(output, "-", b.Bytes())
	})
}

func (p *program) buildBundleImport(cmd *cobra.Command) {
	cmd.Long = `Verify a partner's bundle in full and draft its value with the basis partner:
usable once somebody approves it. The partner's public key is asked for at the
first value of an origin, and remembered.`
	cmd.Example = `  deltamoor bundle import glycine.zip --key deltamoor.local/FJO+3330bbd0+AbC…`
	var key, material string
	cmd.Flags().StringVar(&key, "key", "", "the partner's public `key`, as its laboratory published it")
	cmd.Flags().StringVar(&material, "material", "", "own `code` of the material; left out: the partner's")
	settingFlags(cmd, "data", "database", "token")
	cmd.Args = arguments("FILE")
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		data, err := os.ReadFile(args[0])
		if err != nil {
			return err
		}
		pack, err := exchange.ReadPack(bytes.NewReader(data), int64(len(data)))
		var fault *exchange.PackError
		if errors.As(err, &fault) {
			return fmt.Errorf("%s: %w", args[0], err)
		}
		if err != nil {
			return err
		}
		o, err := p.openRegistry(ctx, cmd, toWrite)
		if err != nil {
			return err
		}
		defer o.close()
		actor, err := o.writer(ctx)
		if err != nil {
			return err
		}
		b, err := o.ImportBundle(ctx, actor, registry.ImportBundleRequest{Pack: pack, Verifier: key, Material: material})
		if err != nil {
			return err
		}
		if p.json {
			return p.printJSON(rest.ShowImportedBundle(b))
		}
		v := b.Value
		what := "drafted"
		if b.Existed {
			what = "was here already"
		}
		return printPairs(p.stdout, "origin", v.Value.Partner.Origin, "their version", fmt.Sprintf("%s.%d", v.Value.Partner.Code, v.Value.Partner.Version),
			"verified", fmt.Sprintf("%d versions, %d numbers computed again, %d equal to the bit", b.Verification.Versions, b.Verification.Recomputed, b.Verification.Equal),
			what, fmt.Sprintf("%s.%d = %s ‰, u %v ‰ (%s)", v.Code, v.Version.Ref.Version, v.Value.Value, v.Value.StandardUncertainty, v.State))
	})
}

func (p *program) buildBundleKey(cmd *cobra.Command) {
	cmd.Long = `Print the public key that signs the laboratory's ledger. Give it to partners by
another way than a bundle: on paper, by telephone, on the laboratory's own pages.`
	var laboratory string
	laboratoryFlag(cmd, &laboratory)
	settingFlags(cmd, "data", "database")
	cmd.Args = arguments()
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, _ []string) error {
		o, err := p.openRegistry(ctx, cmd, toRead)
		if err != nil {
			return err
		}
		defer o.close()
		actor, err := o.reader(ctx, laboratory)
		if err != nil {
			return err
		}
		key, err := o.PublicKey(ctx, actor)
		if err != nil {
			return err
		}
		if p.json {
			return p.printJSON(rest.PublicKey{Origin: o.Origin(actor.Laboratory), Key: key})
		}
		_, err = fmt.Fprintln(p.stdout, key)
		return err
	})
}
