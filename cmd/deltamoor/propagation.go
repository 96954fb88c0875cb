package main

import (
	"fmt"
	"io"
	"strconv"

	"github.com/spf13/cobra"

	"deltamoor/api/exchange"
	"deltamoor/api/registry"
	"deltamoor/calib/montecarlo"
)

// drawFlags are those of commands that can propagate distributions.
type drawFlags struct {
	draws, digits int
	seed          uint64
	seeded        func() bool
}

func (d *drawFlags) add(cmd *cobra.Command) {
	cmd.Flags().IntVar(&d.draws, "draws", 0, "propagate distributions (Monte Carlo, JCGM 101) by at most `N` draws, and hold the first order against them")
	cmd.Flags().Uint64Var(&d.seed, "seed", 0, "`seed` of the draws: the same seed is the same answer")
	cmd.Flags().IntVar(&d.digits, "digits", 2, "`digits` of u that the draws are to settle for, 1 or 2")
	d.seeded = func() bool { return cmd.Flags().Changed("seed") }
}

// check says what in the flags cannot be used.
func (d *drawFlags) check() error {
	switch {
	case d.draws < 0 || d.draws > montecarlo.MaxTrials:
		return usagef("--draws: found %d, expected 1 to %d", d.draws, montecarlo.MaxTrials)
	case d.seed > registry.MaxSeed:
		return usagef("--seed: found %d, expected 0 to %d", d.seed, uint64(registry.MaxSeed))
	case d.digits != 1 && d.digits != 2:
		return usagef("--digits: found %d, expected 1 or 2", d.digits)
	}
	return nil
}

// request is what the flags ask of the registry, which bounds requests but not commands.
func (d *drawFlags) request() registry.PropagationRequest {
	q := registry.PropagationRequest{MaxTrials: d.draws, Digits: d.digits, Unbounded: true}
	if d.seeded() {
		q.Seed = &d.seed
	}
	return q
}

// printPropagation writes distributions beside first order as a table.
func printPropagation(w io.Writer, a exchange.PropagationAnswer) error {
	var us []*float64
	for _, q := range a.Quantities {
		us = append(us, q.StandardUncertainty)
	}
	n := decimalsOf(us...)
	t := newTable("distribution of", ">δ ‰", ">U ‰", ">mean ‰", ">u ‰", ">low ‰", ">high ‰", ">shortest ‰", "", "check")
	for _, q := range a.Quantities {
		d := q.Distribution
		t.add(q.Name, optional(q.Value, n), optional(q.ExpandedUncertainty, n), optional(d.Mean, n), optional(d.StandardUncertainty, n),
			optional(d.Symmetric.Low, n), optional(d.Symmetric.High, n), optional(d.Shortest.Low, n), optional(d.Shortest.High, n), q.Verdict())
	}
	if err := t.print(w); err != nil {
		return err
	}
	fits := "1 fit"
	if a.Fits != 1 {
		fits = fmt.Sprint(a.Fits, " fits")
	}
	_, err := fmt.Fprintf(w, "\n%d draws, seed %d, p %s; %s, solved again in every draw, and %d sources\n", a.Trials, a.Seed, strconv.FormatFloat(a.Probability, 'f', -1, 64), fits, a.Sources)
	return err
}
