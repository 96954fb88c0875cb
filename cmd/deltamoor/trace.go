package main

import (
	"context"
	"fmt"
	"io"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/api/rest"
	"deltamoor/store"
)

func (p *program) buildTrace(cmd *cobra.Command) {
	cmd.Long = `Print what a number rests on, down to the definitions of its scale: values,
calibrations, sessions, methods, who stated and approved them, and when. CODE is
the code of a reported delta, or of a final value, calibration, session, sample,
unit or report, in any way of writing it; or a value as
MATERIAL/SCALE[/MEASURAND]. A number behind a dot names a version: without it
the one in force is traced.

Reading asks for the right to open the database, and for no token.`
	cmd.Example = `  deltamoor trace D7K3M-9Q2XG
  deltamoor trace FJO-GLY/d13C-VPDB-LSVEC.2
  deltamoor trace --up USGS40/d13C-VPDB-LSVEC`
	var laboratory string
	var up bool
	laboratoryFlag(cmd, &laboratory)
	cmd.Flags().BoolVar(&up, "up", false, "what rests on it, instead")
	settingFlags(cmd, "data", "database")
	cmd.Args = arguments("CODE")
	cmd.ValidArgsFunction = cobra.NoFileCompletions
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		s, err := parseSubject(args[0])
		if err != nil {
			return err
		}
		if up && s.kind == "" {
			return usagef("--up: found the code of a reported delta, on which nothing rests")
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
		if up {
			t, err = o.TraceUp(ctx, actor, s.kind, s.code, s.version)
		} else {
			t, err = o.Trace(ctx, actor, s.kind, s.code, s.version)
		}
		if err != nil {
			return err
		}
		switch {
		case p.json:
			return p.printJSON(traceJSON(t))
		case up:
			return printUp(p.stdout, t)
		}
		return exchange.WriteTrace(p.stdout, t)
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
func printUp(w io.Writer, t registry.Trace) error {
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
	if err := table.print(w); err != nil || t.Cut == 0 {
		return err
	}
	_, err := fmt.Fprintf(w, "and %d more, beyond the first %d\n", t.Cut, registry.MaxTrace)
	return err
}

// versionCode writes a version as people do: code, dot, number.
func versionCode(ref store.Ref) string {
	return fmt.Sprintf("%s.%d", codeOf(ref.Kind, ref.Code), ref.Version)
}

// traceJSON is the trace as GET …/trace answers it.
func traceJSON(t registry.Trace) rest.Trace {
	out := rest.Trace{Nodes: []rest.TraceNode{}, Edges: []rest.TraceEdge{}, Cut: t.Cut}
	if d := t.Reported; d != nil {
		out.Reported = &rest.Reported{Code: store.FormatCode(d.Code), Laboratory: d.Laboratory, Report: store.FormatCode(d.Report), Line: d.Line,
			Final:      rest.Input{Part: "line", Laboratory: d.Final.Laboratory, Kind: string(d.Final.Kind), Code: store.FormatCode(d.Final.Code), Version: d.Final.Version, Hash: d.Final.Hash.String()},
			FinalState: string(d.FinalState), Sample: store.FormatCode(d.Sample), Client: d.Client, Label: d.Label, Quantity: d.Quantity, Scale: d.Scale, Measurand: d.Measurand,
			Value: d.Value, U: d.StandardUncertainty, K: d.K, Expanded: d.Expanded, P: d.Probability, NuEff: d.EffectiveDF, Flags: append([]string{}, d.Flags...),
			IssuedAt: d.IssuedAt.Time(), IssuedBy: d.IssuedBy, Hash: d.Hash.String()}
	}
	for _, n := range t.Nodes {
		node := rest.TraceNode{Input: rest.Input{Laboratory: n.Laboratory, Kind: string(n.Kind), Code: codeOf(n.Kind, n.Code), Version: n.Version, Hash: n.Hash.String()},
			Depth: n.Depth, Title: n.Title, Detail: n.Detail, Leaf: n.Leaf, State: string(n.State), RecordedAt: n.RecordedAt.Time(), RecordedBy: n.RecordedBy,
			Reason: n.Reason, Value: n.Value, U: n.StandardUncertainty, Decisions: []rest.Decision{}}
		if n.ValidFrom != nil {
			from := n.ValidFrom.Time()
			node.ValidFrom = &from
		}
		for _, d := range n.Decisions {
			node.Decisions = append(node.Decisions, rest.Decision{Decision: d.Act, By: d.By, At: d.At.Time(), Reason: d.Reason})
		}
		out.Nodes = append(out.Nodes, node)
	}
	for _, e := range t.Edges {
		out.Edges = append(out.Edges, rest.TraceEdge(e))
	}
	return out
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
