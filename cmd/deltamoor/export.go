package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/figure"
	"deltamoor/api/registry"
	"deltamoor/store"
)

// What export writes of a reported delta.
const (
	formatPack    = "pack"
	formatPROV    = "prov"
	formatPicture = "svg"
)

func (p *program) buildExport(cmd *cobra.Command) {
	cmd.Long = `Write what a reported delta rests on to a file that needs no registry to be
read: by default an evidence pack, one ZIP file with a page to read, every
version, reading and file of the chain, and the proofs that they stand in the
ledger. "deltamoor verify FILE" checks it anywhere, without a database.

A file that a session was imported from is left out where it names samples of
other clients; --uploads takes it in, for an assessor.

With a signing key the heads of the ledgers are signed first. --checkpoint
writes the signed head of a laboratory's ledger alone: keep it elsewhere, and
"deltamoor verify --checkpoint FILE" shows later that nothing was cut off.

Reading asks for the right to open the database, and for no token. A file that
exists is not written over.`
	cmd.Example = `  deltamoor export D7K3M-9Q2XG -o evidence.zip
  deltamoor export D7K3M-9Q2XG --format prov
  deltamoor export --checkpoint -o kept-elsewhere.txt`
	var laboratory, output, format string
	var uploads, checkpoint bool
	laboratoryFlag(cmd, &laboratory)
	cmd.Flags().StringVarP(&output, "output", "o", "", "`file` to write; - is standard output, where everything but a pack goes by default; a pack goes to CODE.zip")
	outAlias(cmd, &output)
	cmd.Flags().StringVar(&format, "format", formatPack, "`what` to write: pack; prov, the trace as W3C PROV (PROV-JSONLD); svg, the picture of the trace")
	cmd.Flags().BoolVar(&uploads, "uploads", false, "take in every file, whosever samples it names")
	cmd.Flags().BoolVar(&checkpoint, "checkpoint", false, "the signed head of the ledger, instead of a delta")
	settingFlags(cmd, "data", "database")
	cmd.Args = func(cmd *cobra.Command, args []string) error {
		if !checkpoint {
			return arguments("CODE")(cmd, args)
		}
		for _, name := range []string{"format", "uploads"} {
			if cmd.Flags().Changed(name) {
				return fmt.Errorf("--%s: found with --checkpoint, expected only without", name)
			}
		}
		return arguments()(cmd, args)
	}
	cmd.ValidArgsFunction = cobra.NoFileCompletions
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		var s subject
		if !checkpoint {
			var err error
			if s, err = parseSubject(args[0]); err != nil {
				return err
			}
			switch {
			case format != formatPack && format != formatPROV && format != formatPicture:
				return usagef("--format: found %q, expected %s, %s or %s", format, formatPack, formatPROV, formatPicture)
			case format == formatPack && s.kind != "":
				return fmt.Errorf("code %q: expected the code of a reported delta, for a pack", args[0])
			case uploads && format != formatPack:
				return usagef("--uploads: found with --format %s, expected only with %s", format, formatPack)
			}
		}
		mode := toRead
		if checkpoint || format == formatPack {
			mode = toWrite // the ledger's head is signed
		}
		o, err := p.openRegistry(ctx, cmd, mode)
		if err != nil {
			return err
		}
		defer o.close()
		actor, err := o.reader(ctx, laboratory)
		if err != nil {
			return err
		}
		if checkpoint {
			c, err := o.Checkpoint(ctx, actor)
			if err != nil {
				return err
			}
			return p.writeOutput(output, "-", c.Note)
		}
		if err := s.resolve(ctx, o, actor); err != nil {
			return err
		}
		var b bytes.Buffer
		fallback := "-"
		if format == formatPack {
			fallback = store.FormatCode(s.code) + ".zip"
			err = o.writePack(ctx, &b, actor, s.code, uploads)
		} else {
			err = o.writeTrace(ctx, &b, actor, s, format)
		}
		if err != nil {
			return err
		}
		return p.writeOutput(output, fallback, b.Bytes())
	})
}

func (o *opened) writePack(ctx context.Context, w io.Writer, actor registry.Actor, code string, uploads bool) error {
	pack := o.Pack
	if uploads {
		pack = o.PackWithUploads
	}
	collected, err := pack(ctx, actor, code)
	if err != nil {
		return err
	}
	return exchange.WritePack(ctx, w, collected)
}

func (o *opened) writeTrace(ctx context.Context, w io.Writer, actor registry.Actor, s subject, format string) error {
	t, err := o.Trace(ctx, actor, s.kind, s.code, s.version)
	if err != nil {
		return err
	}
	if format == formatPROV {
		return exchange.WritePROV(w, o.Name(), t)
	}
	return figure.Trace(w, t, figure.TraceStyle{})
}

// outAlias lets --output be called --out.
func outAlias(cmd *cobra.Command, output *string) {
	cmd.Flags().StringVar(output, "out", "", "the same as --output")
	_ = cmd.Flags().MarkHidden("out") // it was just made
}

// writeOutput writes to the named file, which must not exist, or to standard
// output for "-".
func (p *program) writeOutput(name, fallback string, data []byte) error {
	if name == "" {
		name = fallback
	}
	if name == "-" {
		_, err := p.stdout.Write(data)
		return err
	}
	f, err := os.OpenFile(name, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o600)
	if err != nil {
		return err
	}
	_, err = f.Write(data)
	if err = errors.Join(err, f.Close()); err != nil {
		return errors.Join(err, os.Remove(name))
	}
	if p.json {
		return p.printJSON(struct {
			File  string `json:"file"`
			Bytes int    `json:"bytes"`
		}{name, len(data)})
	}
	_, err = fmt.Fprintf(p.stdout, "%s written, %d bytes\n", name, len(data))
	return err
}

// isPackFile tells whether an argument names a file that is an evidence pack.
// A code is no name of a file, unless somebody made one of that name.
func isPackFile(name string) bool {
	f, err := os.Open(name)
	if err != nil {
		return false
	}
	defer func() { _ = f.Close() }()
	head := make([]byte, 64)
	n, err := io.ReadFull(f, head)
	return (err == nil || errors.Is(err, io.ErrUnexpectedEOF)) && (exchange.IsPack(head[:n]) || strings.HasSuffix(strings.ToLower(name), ".zip"))
}

// A packAnswer is what verify prints of a pack for programs.
type packAnswer struct {
	Clean      bool                `json:"clean"`
	Registry   string              `json:"registry"`
	Laboratory string              `json:"laboratory"`
	Code       string              `json:"code"`
	Versions   int                 `json:"versions"`
	Readings   int                 `json:"readings"`
	Uploads    int                 `json:"uploads"`
	Recomputed int                 `json:"recomputed"`
	Equal      int                 `json:"equal"`
	Ledgers    []packLedgerAnswer  `json:"ledgers"`
	Findings   []packFindingAnswer `json:"findings"`
	Notes      []string            `json:"notes"`
}

type packLedgerAnswer struct {
	Origin   string   `json:"origin"`
	Size     int64    `json:"size"`
	Root     string   `json:"root"`
	Proved   int      `json:"proved"`
	SignedBy []string `json:"signed_by"`
	Outside  bool     `json:"known_from_outside"`
}

type packFindingAnswer struct {
	File     string `json:"file"`
	Found    string `json:"found"`
	Expected string `json:"expected"`
}

// verifyPack checks an evidence pack without a registry.
func (p *program) verifyPack(ctx context.Context, name string, q registry.PackCheckRequest) error {
	f, err := os.Open(name)
	if err != nil {
		return err
	}
	defer func() { _ = f.Close() }()
	info, err := f.Stat()
	if err != nil {
		return err
	}
	v, err := exchange.VerifyPack(ctx, f, info.Size(), q)
	if err != nil {
		return fmt.Errorf("%s: %w", name, err)
	}
	if p.json {
		a := packAnswer{Clean: v.Clean(), Registry: v.Registry, Laboratory: v.Laboratory, Code: store.FormatCode(v.Code), Versions: v.Versions, Readings: v.Readings, Uploads: v.Uploads,
			Recomputed: v.Recomputed, Equal: v.Equal, Ledgers: []packLedgerAnswer{}, Findings: []packFindingAnswer{}, Notes: v.Notes}
		for _, l := range v.Ledgers {
			a.Ledgers = append(a.Ledgers, packLedgerAnswer{l.Origin, l.Size, l.Root.String(), l.Proved, append([]string{}, l.SignedBy...), l.Outside})
		}
		for _, finding := range v.Findings {
			a.Findings = append(a.Findings, packFindingAnswer(finding))
		}
		return errors.Join(p.printJSON(a), difference(v.Clean()))
	}
	t := newTable("ledger", ">entries", ">proved", "signed by", "root")
	for _, l := range v.Ledgers {
		by := strings.Join(l.SignedBy, ", ")
		if by == "" {
			by = "nobody"
		}
		t.add(l.Origin, fmt.Sprint(l.Size), fmt.Sprint(l.Proved), by, l.Root.String())
	}
	about := "evidence for the reported delta " + store.FormatCode(v.Code)
	if v.Value != nil {
		about = fmt.Sprintf("the chain of the assigned value %s.%d", v.Value.Code, v.Value.Version)
	}
	fmt.Fprintf(p.stdout, "%s of %s in %s\n\n", about, v.Laboratory, v.Registry)
	if err := t.print(p.stdout); err != nil {
		return err
	}
	fmt.Fprintf(p.stdout, "\nversions          %d\nreadings          %d\nfiles imported    %d\nrecomputed        %d numbers\nequal to the bit  %d\n\n", v.Versions, v.Readings, v.Uploads, v.Recomputed, v.Equal)
	for _, note := range v.Notes {
		fmt.Fprintf(p.stdout, "note: %s\n", note)
	}
	if v.Clean() {
		_, err := fmt.Fprintln(p.stdout, "nothing differs")
		return err
	}
	fmt.Fprintf(p.stdout, "%d found:\n", len(v.Findings))
	for _, finding := range v.Findings {
		if _, err := fmt.Fprintf(p.stdout, "  %s\n    found    %s\n    expected %s\n", finding.File, finding.Found, finding.Expected); err != nil {
			return err
		}
	}
	return errDifference
}
