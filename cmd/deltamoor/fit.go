package main

import (
	"context"
	"fmt"
	"io"
	"os"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/calib"
)

func (p *program) buildFit(cmd *cobra.Command) {
	cmd.Long = `Fit the session model to the anchors and readings in FILE and print the line,
its diagnosis and the delta of every sample. Nothing is stored and no registry
is needed. "-" reads standard input.

FILE holds what POST /v1/calculations/fit takes, in JSON, and --json prints
what it answers. The tables are rounded by the uncertainties; --json has every
digit. A result with flags is a result: the exit status is 0.

With --draws the distributions of readings and anchors are propagated too, and
the interval of each sample is held against its U (JCGM 101, clause 8); FILE may
then say seed, max_trials and digits, as POST /v1/calculations/propagation takes
them, and --json prints what that answers.`
	var draws drawFlags
	draws.add(cmd)
	cmd.Example = `  deltamoor fit session.json
  deltamoor fit --json - <session.json
  deltamoor fit session.json --draws 1000000 --seed 7`
	cmd.Args = arguments("FILE")
	var companion bool
	cmd.Flags().BoolVar(&companion, "companion", false, "show a robust fit beside the official one, as an opinion")
	cmd.RunE = p.action(func(ctx context.Context, _ *cobra.Command, args []string) error {
		if err := draws.check(); err != nil {
			return err
		}
		text, err := p.readInput(args[0], registry.MaxUpload)
		if err != nil {
			return err
		}
		if draws.draws > 0 {
			return p.fitDistributions(ctx, text, draws)
		}
		request, err := exchange.DecodeFit(text)
		if err != nil {
			return err
		}
		request.Companion = request.Companion || companion
		answer, err := exchange.AnswerFit(request)
		if err != nil {
			return err
		}
		if p.json {
			return p.printJSON(answer)
		}
		return printFit(p.stdout, request, answer)
	})
}

// fitDistributions prints the fit and what its distributions give.
func (p *program) fitDistributions(ctx context.Context, text []byte, draws drawFlags) error {
	request, err := exchange.DecodePropagation(text)
	if err != nil {
		return err
	}
	session, model, policy, q, err := request.Calculation()
	if err != nil {
		return err
	}
	flags := draws.request()
	q.MaxTrials, q.Unbounded = flags.MaxTrials, true
	if flags.Seed != nil {
		q.Seed = flags.Seed
	}
	if q.Digits == 0 {
		q.Digits = flags.Digits
	}
	propagation, err := registry.CalculatePropagation(ctx, session, model, policy, q)
	if err != nil {
		return exchange.FitComplaints(err)
	}
	answer := exchange.NewPropagationAnswer(propagation)
	if p.json {
		return p.printJSON(answer)
	}
	result, err := calib.Fit(session, model, policy)
	if err != nil {
		return exchange.FitComplaints(err)
	}
	if err := printFit(p.stdout, request.FitRequest, exchange.NewFitAnswer(request.FitRequest, result)); err != nil {
		return err
	}
	if _, err := fmt.Fprintln(p.stdout); err != nil {
		return err
	}
	return printPropagation(p.stdout, answer)
}

// readInput reads a file, or standard input for "-", and stops one byte past
// the bound: enough for the reader of the format to refuse it by its own words.
func (p *program) readInput(name string, bound int64) ([]byte, error) {
	from := p.stdin
	if name != "-" {
		file, err := os.Open(name)
		if err != nil {
			return nil, err
		}
		defer file.Close()
		from = file
	}
	return io.ReadAll(io.LimitReader(from, bound+1))
}

// printFit writes the answer as tables: what a person looks at first stands last,
// next to the prompt, and flags stand below everything.
func printFit(w io.Writer, request exchange.FitRequest, answer exchange.FitAnswer) error {
	var b strings.Builder // writes to it cannot fail
	pairs := []string{"scale", orDash(request.Scale), "model", describeModel(request.Model), "engine", answer.Engine}
	if t := answer.Reference.Time; t != nil {
		pairs = append(pairs, "at time", number(*t, shortest)+" h")
	}
	if s := answer.Reference.Size; s != nil {
		pairs = append(pairs, "at size", number(*s, shortest))
	}
	pairs = append(pairs, "fit", describeStatistics(answer))
	_ = printPairs(&b, pairs...)

	parameters := newTable("parameter", ">value", ">u")
	for _, x := range answer.Parameters {
		n := decimalsOf(x.StandardUncertainty)
		parameters.add(x.Name, optional(x.Value, n), optional(x.StandardUncertainty, n))
	}
	if l := answer.Line; l != nil {
		n, m := decimalsOf(l.UIntercept), decimalsOf(l.USlope)
		parameters.add("true = intercept", optional(l.Intercept, n), optional(l.UIntercept, n))
		parameters.add("     + slope·raw", optional(l.Slope, m), optional(l.USlope, m))
	}

	anchors := newTable("anchor", ">assigned ‰", ">adjusted ‰", ">left out ‰", ">u ‰", ">z")
	var us []*float64
	for _, a := range answer.Anchors {
		if a.LeftOut != nil {
			us = append(us, a.LeftOut.StandardUncertainty)
		}
	}
	n := decimalsOf(us...)
	for _, a := range answer.Anchors {
		left := exchange.FitLeftOut{}
		if a.LeftOut != nil {
			left = *a.LeftOut
		}
		anchors.add(a.Material, optional(a.Value, n), optional(a.Adjusted, n),
			optional(left.Predicted, n), optional(left.StandardUncertainty, n), optional(left.Z, 1))
	}

	samples := newTable("sample", "role", ">n", ">δ ‰", ">u ‰", ">U ‰", ">k", ">ν")
	us = nil
	for _, s := range answer.Samples {
		us = append(us, s.StandardUncertainty)
	}
	n = decimalsOf(us...)
	for _, s := range answer.Samples {
		effective := "∞"
		if s.EffectiveDF != nil {
			effective = number(*s.EffectiveDF, 1)
		}
		samples.add(s.Sample+s.Material, s.Role, strconv.Itoa(s.N), optional(s.Value, n),
			optional(s.StandardUncertainty, n), optional(s.ExpandedUncertainty, n), optional(s.CoverageFactor, 2), effective)
	}

	for _, t := range []*table{parameters, anchors, samples} {
		if len(t.rows) > 0 {
			b.WriteString("\n")
			_ = t.print(&b)
		}
	}
	for i, n := range answer.Needs {
		if i == 0 {
			b.WriteString("\n")
		}
		fmt.Fprintln(&b, n.Sentence)
	}
	if answer.Companion != nil {
		b.WriteString("\n")
		printCompanion(&b, answer)
	}
	for i, f := range answer.Flags {
		if i == 0 {
			b.WriteString("\n")
		}
		fmt.Fprintf(&b, "%s: %s\n", f.Severity, strings.TrimSpace(f.Message+" "+f.Advice))
	}
	_, err := io.WriteString(w, b.String())
	return err
}

func describeModel(m exchange.FitModel) string {
	words := []string{"line"}
	for _, term := range []struct{ name, word string }{{"drift", m.Drift}, {"size", m.Size}, {"memory", m.Memory}} {
		if term.word != "" && term.word != "none" {
			words = append(words, term.name+" "+term.word)
		}
	}
	weights := m.Weights
	if weights == "" {
		weights = string(calib.WeightsDeclared)
	}
	return strings.Join(append(words, "weights "+weights), ", ")
}

func describeStatistics(a exchange.FitAnswer) string {
	text := strconv.Itoa(a.DegreesOfFreedom) + " degrees of freedom"
	if a.ChiSquare != nil {
		text += ", chi-square " + significant(a.ChiSquare, 4) + ", p " + significant(a.PValue, 2)
	}
	if a.ResidualSD != nil {
		text += ", residual standard deviation " + significant(a.ResidualSD, 3) + " ‰"
	}
	return text
}

// decimalsOf is decimals of those uncertainties that exist.
func decimalsOf(uncertainties ...*float64) int {
	var us []float64
	for _, u := range uncertainties {
		if u != nil {
			us = append(us, *u)
		}
	}
	return decimals(us...)
}

func orDash(text string) string {
	if text == "" {
		return "–"
	}
	return text
}

// printCompanion writes the robust fit as an opinion: what it would weigh less,
// and how far that would move the values.
func printCompanion(b *strings.Builder, answer exchange.FitAnswer) {
	c := answer.Companion
	fmt.Fprintf(b, "companion: %s", c.Method)
	if c.Scale != nil {
		fmt.Fprintf(b, ", readings' u × %s", significant(c.Scale, 3))
	}
	fmt.Fprintf(b, "\n%s\n\n", c.Note)
	parameters := newTable("parameter", ">companion", ">difference/u")
	for i, x := range c.Parameters {
		parameters.add(x.Name, optional(x.Value, decimalsOf(answer.Parameters[i].StandardUncertainty)), optional(x.InUnits, 2))
	}
	if l, official := c.Line, answer.Line; l != nil && official != nil {
		parameters.add("true = intercept", optional(l.Intercept, decimalsOf(official.UIntercept)), "")
		parameters.add("     + slope·raw", optional(l.Slope, decimalsOf(official.USlope)), "")
	}
	_ = parameters.print(b)
	readings := newTable(">reading", ">residual ‰", ">residual/u", ">weight", "")
	for _, x := range c.Readings {
		if x.Weight == nil || *x.Weight >= 1 {
			continue
		}
		look := ""
		if slices.Contains(c.Suggested, x.Index) {
			look = "suggested for a look"
		}
		readings.add(strconv.Itoa(x.Index), significant(x.Residual, 3), optional(x.InUnits, 1), optional(x.Weight, 2), look)
	}
	if len(readings.rows) > 0 {
		b.WriteString("\n")
		_ = readings.print(b)
	} else {
		b.WriteString("\nEvery reading has its full weight.\n")
	}
	samples := newTable("sample", ">companion ‰", ">difference/u")
	var us []*float64
	for _, x := range answer.Samples {
		us = append(us, x.StandardUncertainty)
	}
	n := decimalsOf(us...)
	for _, x := range c.Samples {
		samples.add(x.Sample+x.Material, optional(x.Value, n), optional(x.InUnits, 2))
	}
	if len(samples.rows) > 0 {
		b.WriteString("\n")
		_ = samples.print(b)
	}
}
