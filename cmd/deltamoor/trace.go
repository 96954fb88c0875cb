package main

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/figure"
	"deltamoor/api/registry"
	"deltamoor/api/rest"
	"deltamoor/store"
)

func (p *program) buildTrace(cmd *cobra.Command) {
	cmd.Long = `Print what a number rests on, down to the definitions of its scale: values,
calibrations, sessions, methods, who stated and approved them, and when. CODE is
the code of a reported delta, or of a final value, calibration, session, sample,
unit or report, in any way of writing it; or a value as
MATERIAL/SCALE[/MEASURAND]; or the SHA-256 of a file that was imported. A number
behind a dot names a version: without it the one in force is traced.

With --direction up, print what rests on it instead: everything of the
laboratory, up to reports.

Reading asks for the right to open the database, and for no token.`
	cmd.Example = `  deltamoor trace D7K3M-9Q2XG
  deltamoor trace D7K3M-9Q2XG --format html -o trace.html
  deltamoor trace FJO-GLY/d13C-VPDB-LSVEC.2
  deltamoor trace --direction up USGS40/d13C-VPDB-LSVEC`
	var laboratory, direction, format, output string
	laboratoryFlag(cmd, &laboratory)
	cmd.Flags().StringVar(&direction, "direction", "down", "`which` way: down, what it rests on; up, what rests on it")
	cmd.Flags().StringVar(&format, "format", "text", "`what` to write: text; json; prov, W3C PROV (PROV-JSONLD); svg, the picture; html, a page to print")
	cmd.Flags().StringVarP(&output, "output", "o", "", "`file` to write; left out: standard output")
	outAlias(cmd, &output)
	settingFlags(cmd, "data", "database")
	cmd.Args = arguments("CODE")
	cmd.ValidArgsFunction = cobra.NoFileCompletions
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		s, err := parseSubject(args[0])
		if err != nil {
			return err
		}
		up := direction == "up"
		if p.json && !cmd.Flags().Changed("format") {
			format = "json"
		}
		switch {
		case direction != "up" && direction != "down":
			return usagef("--direction: found %q, expected up or down", direction)
		case up && s.kind == "":
			return usagef("--direction up: found the code of a reported delta, on which nothing rests")
		case !slices.Contains([]string{"text", "json", "prov", "svg", "html"}, format):
			return usagef("--format: found %q, expected text, json, prov, svg or html", format)
		}
		o, err := p.openRegistry(ctx, cmd, toRead)
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
		var t registry.Trace
		var more bool
		if up {
			var page registry.AbovePage
			page, err = o.TraceAbove(ctx, actor, registry.AboveRequest{Kind: s.kind, Code: s.code, Version: s.version, Limit: registry.MaxTrace})
			t, more = page.Trace, page.Next != nil
		} else {
			t, err = o.Trace(ctx, actor, s.kind, s.code, s.version)
		}
		if err != nil {
			return err
		}
		var b bytes.Buffer
		switch format {
		case "json":
			err = writeJSON(&b, rest.ShowTrace(t))
		case "prov":
			err = exchange.WritePROV(&b, o.Name(), t)
		case "svg":
			err = figure.Trace(&b, t, figure.TraceStyle{})
		case "html":
			err = exchange.WriteTracePage(&b, t, exchange.TracePage{Up: up, More: more})
		default:
			if up {
				err = printUp(&b, t, more)
			} else {
				err = exchange.WriteTrace(&b, t)
			}
		}
		if err != nil {
			return err
		}
		return p.writeOutput(output, "-", b.Bytes())
	})
}

// A subject is what somebody typed to name a number.
type subject struct {
	kind    store.Kind // "" for a reported delta
	code    string
	version int // 0: the one in force
}

// parseSubject reads a code as people write it.
func parseSubject(text string) (subject, error) {
	var s subject
	name := text
	if i := strings.LastIndexByte(text, '.'); i >= 0 {
		if number, err := strconv.Atoi(text[i+1:]); err == nil && number > 0 {
			name, s.version = text[:i], number
		}
	}
	if parts := strings.Split(name, "/"); len(parts) > 1 {
		if len(parts) > 3 || parts[0] == "" || parts[1] == "" {
			return s, fmt.Errorf("value %q: expected MATERIAL/SCALE or MATERIAL/SCALE/MEASURAND", text)
		}
		s.kind, s.code = store.KindValue, name
		return s, nil
	}
	if file := new(store.Hash); len(name) == 64 && file.UnmarshalText([]byte(name)) == nil {
		s.kind, s.code = store.KindDocument, file.String()
		return s, nil
	}
	code, err := store.ParseCode(name)
	if err != nil {
		return s, err
	}
	s.code = code
	if code[0] == store.LetterReported {
		if s.version != 0 {
			return s, fmt.Errorf("code %q: a reported delta has no versions", text)
		}
		return s, nil
	}
	if s.kind = store.CodeKind(code[0]); s.kind == "" || s.kind == store.KindToken {
		return s, fmt.Errorf("code %q: expected the code of a record that numbers rest on", text)
	}
	return s, nil
}

// resolve turns a material's name or alias in a value into its code.
func (s *subject) resolve(ctx context.Context, o *opened, actor registry.Actor) error {
	if s.kind != store.KindValue {
		return nil
	}
	parts := append(strings.Split(s.code, "/"), "")
	material, err := o.FindMaterial(ctx, actor, parts[0], store.Moment{})
	if err != nil {
		return err
	}
	s.code = registry.ValueCode(material.Code, parts[1], parts[2])
	return nil
}

// printUp writes what rests on a version, generation by generation.
func printUp(w io.Writer, t registry.Trace, more bool) error {
	var us []float64
	for _, n := range t.Nodes {
		if n.StandardUncertainty != nil {
			us = append(us, *n.StandardUncertainty)
		}
	}
	d := decimals(us...)
	table := newTable("version", "what", "state", ">‰", ">u ‰", "recorded", "by")
	for _, n := range t.Nodes {
		table.add(strings.Repeat("  ", n.Depth)+versionCode(n.Ref), n.Title, string(n.State), optional(n.Value, d), optional(n.StandardUncertainty, d),
			n.RecordedAt.Time().Format("2006-01-02"), n.RecordedBy)
	}
	if err := table.print(w); err != nil || !more {
		return err
	}
	_, err := fmt.Fprintf(w, "and more, beyond the first %d\n", registry.MaxTrace)
	return err
}

// versionCode writes a version as people do: code, dot, number.
func versionCode(ref store.Ref) string {
	return fmt.Sprintf("%s.%d", codeOf(ref.Kind, ref.Code), ref.Version)
}

// codeOf writes a record's code for people: 5-5 where the registry made it.
// Codes that people chose stay as they are, whatever their length.
func codeOf(kind store.Kind, code string) string {
	switch kind {
	case store.KindExclusion: // one record for each session
		return store.FormatCode(code)
	case store.KindOutcome:
		session, quantity, _ := strings.Cut(code, "/")
		return store.FormatCode(session) + "/" + quantity
	}
	if len(code) > 0 && store.CodeKind(code[0]) == kind {
		return store.FormatCode(code)
	}
	return code
}
