package main

import (
	"context"
	"fmt"

	"github.com/spf13/cobra"

	"proofrate/instruments/bench"
	"proofrate/sequencer/rehearsal"
)

// rehearseFlags are what `rehearse` takes.
type rehearseFlags struct {
	bench, part string
	set         []string
	gyros       int
	seed        uint64
	json        bool
}

func rehearseCommand() *cobra.Command {
	var f rehearseFlags
	c := &cobra.Command{
		Use:   "rehearse PROCEDURE",
		Short: "a procedure on many virtual gyros, compared with the truth",
		Long: `rehearse carries out a procedure on virtual gyros, each freshly drawn with a bench of its own, and compares every
figure with the truth: how far it was off, what uncertainty was claimed, how often the 95 % interval held the truth,
and how the limits were judged. Ctrl-C prints what is known so far. Nothing is written to a ledger.`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error { return rehearse(cmd, args[0], f) },
	}
	c.Flags().StringVar(&f.bench, "bench", defaultBench, "virtual bench `FILE`, or the name of a shipped one; the gyro of its first slot is drawn")
	c.Flags().StringVar(&f.part, "part", "", "part `NUMBER`; a virtual bench knows it")
	c.Flags().StringArrayVar(&f.set, "set", nil, "`NAME=VALUE`: another value for a parameter of the procedure")
	c.Flags().IntVar(&f.gyros, "gyros", 40, "how many gyros")
	c.Flags().Uint64Var(&f.seed, "seed", 1, "seed of the first; the others follow")
	c.Flags().BoolVar(&f.json, "json", false, "print one JSON object instead")
	return c
}

func rehearse(cmd *cobra.Command, name string, f rehearseFlags) error {
	if f.gyros < 1 {
		return fmt.Errorf("--gyros %d: at least one was expected", f.gyros)
	}
	loaded, benchFile, problems, err := loadBench(f.bench)
	if err != nil {
		return err
	}
	if len(problems) > 0 {
		return refuse(cmd, f.json, problems, benchFile)
	}
	if !loaded.Description.Virtual {
		return fmt.Errorf("bench %s is a real one; a rehearsal needs a virtual one, whose truth is known", f.bench)
	}
	slot := loaded.Description.Slots[0].ID
	if f.part == "" {
		f.part = loaded.Gyros[slot].Part
	}
	plan, problems, files, err := planFor(name, f.part, f.set, loaded.Description)
	if err != nil {
		return err
	}
	if len(problems) > 0 {
		return refuse(cmd, f.json, problems, append(files, benchFile)...)
	}
	report, err := rehearsal.Rehearse(cmd.Context(), rehearsal.Config{Plan: plan, Slot: slot, Gyros: f.gyros, Seed: f.seed,
		Open: func(ctx context.Context, seed uint64) (*rehearsal.Bench, error) {
			o, err := bench.Open(ctx, loaded, seed)
			if err != nil {
				return nil, err
			}
			return &rehearsal.Bench{Bench: o.Bench, World: o.World, Close: o.Close}, nil
		},
		Done: func(trials int) { fmt.Fprintf(cmd.ErrOrStderr(), "\r%d of %d", trials, f.gyros) }})
	fmt.Fprintln(cmd.ErrOrStderr())
	if err != nil {
		return exit{exitStopped, err}
	}
	if f.json {
		err = printJSON(cmd, report)
	} else {
		err = report.Write(cmd.OutOrStdout())
	}
	if err == nil && (report.Trials < f.gyros || len(report.Failures) > 0) {
		err = exit{exitStopped, fmt.Errorf("%d of %d gyros were rehearsed", report.Trials, f.gyros)}
	}
	return err
}
