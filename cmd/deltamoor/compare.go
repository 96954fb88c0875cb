package main

import (
	"context"
	"fmt"
	"strings"

	"github.com/spf13/cobra"

	"deltamoor/api/rest"
	"deltamoor/store"
)

func (p *program) buildCompare(cmd *cobra.Command) {
	cmd.Long = `Set reported deltas of one scale against each other. What they share, such as
the anchors of a session, cancels in their difference and does not average out
of their mean; beside the uncertainty of the difference stands the root sum of
squares, which it would be if they shared nothing.

Reading asks for the right to open the database, and for no token.`
	cmd.Example = `  deltamoor compare D7K3M-9Q2XG D2C4N-HT5WA
  deltamoor compare --probability 0.99 D7K3M-9Q2XG D2C4N-HT5WA`
	var laboratory string
	var probability float64
	laboratoryFlag(cmd, &laboratory)
	cmd.Flags().Float64Var(&probability, "probability", 0, "coverage `probability` of the verdict; 0 is that of the first delta")
	settingFlags(cmd, "data", "database")
	cmd.Args = func(cmd *cobra.Command, args []string) error {
		if len(args) < 2 {
			return arguments("CODE", "CODE")(cmd, args)
		}
		return nil
	}
	cmd.ValidArgsFunction = cobra.NoFileCompletions
	cmd.RunE = p.action(func(ctx context.Context, cmd *cobra.Command, args []string) error {
		var codes []string
		for _, text := range args {
			s, err := parseSubject(text)
			if err != nil {
				return err
			}
			if s.kind != "" {
				return fmt.Errorf("code %q: expected the code of a reported delta", text)
			}
			codes = append(codes, s.code)
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
		c, err := o.Compare(ctx, actor, codes, probability)
		if err != nil {
			return err
		}
		if p.json {
			return p.printJSON(rest.ShowComparison(c))
		}
		var us []float64
		for _, d := range c.Deltas {
			us = append(us, d.StandardUncertainty)
		}
		places := decimals(us...)
		t := newTable("delta", ">‰", ">u ‰", "sample", "client's label")
		for _, d := range c.Deltas {
			t.add(store.FormatCode(d.Code), number(d.Value, places), number(d.StandardUncertainty, places), store.FormatCode(d.Sample), d.Client+" / "+d.Label)
		}
		fmt.Fprintf(p.stdout, "on %s (%s)\n\n", c.Scale, c.Measurand)
		if err := t.print(p.stdout); err != nil {
			return err
		}
		fmt.Fprintln(p.stdout)
		if d := c.Pair; d != nil {
			places := decimals(d.StandardUncertainty)
			nu := d.Expanded.DegreesOfFreedom
			if err := printPairs(p.stdout, "difference", number(d.Difference, places)+" ‰", "u, shared sources cancelled", number(d.StandardUncertainty, places)+" ‰",
				"u, if nothing were shared", number(d.RootSumOfSquares, places)+" ‰", "correlation", significant(&d.Correlation, 2), "effective degrees of freedom", number(nu, 0),
				"U", fmt.Sprintf("%s ‰ (k %.2f, %g %%)", number(d.Expanded.U, places), d.Expanded.CoverageFactor, 100*d.Expanded.Probability),
				"z", significant(d.Zeta, 3), "E_n", significant(d.En, 3), "p", significant(d.PValue, 2), "verdict", d.Verdict()); err != nil {
				return err
			}
			fmt.Fprintln(p.stdout)
		} else {
			fmt.Fprintln(p.stdout, "covariance (‰²)")
			for _, row := range c.Covariance {
				var cells []string
				for _, x := range row {
					cells = append(cells, fmt.Sprintf("%12s", significant(&x, 3)))
				}
				fmt.Fprintln(p.stdout, strings.Join(cells, " "))
			}
			fmt.Fprintln(p.stdout)
		}
		u := c.Mean.StandardUncertainty()
		return printPairs(p.stdout, "mean", number(c.Mean.Value, decimals(u))+" ‰", "u of the mean", number(u, decimals(u))+" ‰",
			"of it what all share", number(c.MeanCommonPart, decimals(u))+" ‰", "U of the mean", fmt.Sprintf("%s ‰ (k %.2f)", number(c.MeanExpanded.U, decimals(u)), c.MeanExpanded.CoverageFactor))
	})
}
