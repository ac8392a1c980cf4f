package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"os/user"
	"runtime"
	"runtime/debug"
	"slices"
	"strings"

	"github.com/spf13/cobra"

	"proofrate/instruments"
	"proofrate/instruments/bench"
	"proofrate/instruments/link"
	"proofrate/limits"
	"proofrate/limits/source"
	"proofrate/procedures"
	"proofrate/results"
	"proofrate/results/report"
	"proofrate/sequencer/engine"
)

// runFlags are what `run` takes.
type runFlags struct {
	bench, part, operator, ledger string
	gyros, set                    []string
	seed                          uint64
	json                          bool
}

func runCommand() *cobra.Command {
	var f runFlags
	c := &cobra.Command{
		Use:   "run PROCEDURE",
		Short: "carry out a procedure on a bench",
		Long: `run carries out a procedure, a shipped one or a file, on a bench, judges every gyro and seals the result.

Without --bench it uses the built-in virtual bench, which needs no hardware. Ctrl-C stops the run: the bench is made
safe and the run stands in the ledger as stopped. A software stop is no emergency stop.

Exit codes: 0 all accepted; 1 a trial was rejected, undecided or void; 2 the inputs are wrong and nothing was touched;
3 the bench failed or the run was stopped, the bench was made safe; 4 the bench could not be confirmed safe.`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error { return run(cmd, args[0], f) },
	}
	c.Flags().StringVar(&f.bench, "bench", defaultBench, "bench `FILE`, or the name of a shipped one")
	c.Flags().StringArrayVar(&f.gyros, "gyro", nil, "`SLOT=SERIAL`, once a gyro; a virtual bench knows its own")
	c.Flags().StringVar(&f.part, "part", "", "part `NUMBER` of the gyros; a virtual bench knows it")
	c.Flags().StringVar(&f.operator, "operator", "", "`NAME` of who runs the acceptance (default: the user logged in)")
	c.Flags().StringVar(&f.ledger, "ledger", "ledger", "ledger `FOLDER`")
	c.Flags().Uint64Var(&f.seed, "seed", 1, "seed of the virtual bench and of the propagation of uncertainty")
	c.Flags().StringArrayVar(&f.set, "set", nil, "`NAME=VALUE`: another value for a parameter of the procedure")
	c.Flags().BoolVar(&f.json, "json", false, "print one JSON object instead")
	return c
}

func run(cmd *cobra.Command, name string, f runFlags) error {
	ctx, stderr := cmd.Context(), cmd.ErrOrStderr()
	loaded, benchFile, problems, err := loadBench(f.bench)
	if err != nil {
		return err
	}
	if len(problems) > 0 {
		return refuse(cmd, f.json, problems, benchFile)
	}
	trials, err := seated(loaded, f)
	if err != nil {
		return err
	}
	plan, problems, files, err := planFor(name, trials[0].Part, f.set, loaded.Description)
	if err != nil {
		return err
	}
	if len(problems) > 0 {
		return refuse(cmd, f.json, problems, append(files, benchFile)...)
	}

	ledger, err := openLedger(f.ledger)
	if err != nil {
		return err
	}
	defer ledger.Close()
	if !loaded.Description.Virtual {
		fmt.Fprint(stderr, caution)
	}
	opened, err := bench.Open(ctx, loaded, f.seed)
	if err != nil {
		return exit{exitInput, fmt.Errorf("bench %s: %w", f.bench, err)}
	}
	defer opened.Close()

	wall := link.WallClock()
	start := results.RunStart{Started: wall.Now().UTC(), Plan: plan, Description: loaded.Description, Identities: opened.Identities,
		Operator: operatorName(f.operator), Seed: f.seed, Build: build()}
	for _, t := range trials {
		start.Trials = append(start.Trials, results.TrialStart{Slot: t.Slot, Part: t.Part, Serial: t.Serial})
	}
	record, err := ledger.Begin(start)
	if err != nil {
		return err
	}
	e := engine.New(engine.Config{Plan: plan, Bench: opened.Bench, Trials: trials, Recorder: record,
		Operator: terminalOperator(cmd), Seed: f.seed})
	outcome, failure := watched(ctx, e, stderr, wall)

	end := results.RunEnd{Outcome: outcome.Ended, Reason: outcome.Reason, BenchSeconds: outcome.BenchSeconds,
		WallSeconds: wall.Now().Sub(start.Started).Seconds()}
	for _, t := range outcome.Trials {
		end.Trials = append(end.Trials, results.TrialEnd{Slot: t.Slot, Evaluation: t.Evaluation, Reason: t.Reason})
	}
	if _, err := record.Seal(end); err != nil {
		failure = errors.Join(failure, fmt.Errorf("seal run %s: %w", record.ID(), err))
	}
	if failure != nil {
		return verdictOf(outcome, failure)
	}
	told, err := ledger.Show(context.WithoutCancel(ctx), record.ID())
	if err != nil {
		return err
	}
	if f.json {
		err = printJSON(cmd, told)
	} else {
		err = report.Run(cmd.OutOrStdout(), told, report.Place{Ledger: f.ledger})
	}
	return errors.Join(err, verdictOf(outcome, nil))
}

// caution is shown before a real bench first moves.
const caution = `CAUTION: this bench will move, heat and cool.
  Stopping this program is no emergency stop; that one is hard-wired (ISO 13850). Know where it is.
  Guards and doors are interlocked in hardware. Stay clear of the table; a chamber burns, hot and cold.
  A rotor runs on after its supply is cut; do not look into a light source or an open fibre end.
  Only trained people run the bench. Local codes and the makers' instructions come first.
`

// endings say how a run ended that was not completed.
var endings = map[string]string{engine.Stopped: "the run was stopped", engine.BenchFailed: "the bench failed"}

// verdictOf gives the outcome its exit code.
func verdictOf(o engine.Outcome, failure error) error {
	switch {
	case len(o.Unsafe) > 0:
		return exit{exitUnsafe, errors.Join(failure, fmt.Errorf("THE BENCH COULD NOT BE CONFIRMED SAFE:\n  %s\nKeep away from the table, use the emergency stop, "+
			"isolate the supplies by hand, and do not open the chamber", strings.ToUpper(strings.Join(o.Unsafe, "\n  "))))}
	case failure != nil, o.Ended != engine.Completed:
		if failure == nil {
			failure = fmt.Errorf("%s: %s; the bench was made safe", endings[o.Ended], o.Reason)
		}
		return exit{exitStopped, failure}
	}
	for _, t := range o.Trials {
		if t.Evaluation == nil || t.Evaluation.Verdict != limits.Accept {
			return exit{code: exitNotAccepted}
		}
	}
	return nil
}

// planFor loads, plans and checks a procedure against a bench, all problems in one list.
func planFor(name, part string, set []string, d *instruments.Description) (*procedures.Plan, source.List, []*source.File, error) {
	parameters, err := assignments("set", set)
	if err != nil {
		return nil, nil, nil, err
	}
	procedure, file, problems, err := loadProcedure(name)
	files := []*source.File{file}
	if err != nil || len(problems) > 0 {
		return nil, problems, files, err
	}
	plan, problems := procedure.Plan(procedures.Options{Part: part, Parameters: parameters})
	if len(problems) > 0 {
		return nil, problems, files, nil
	}
	return plan, plan.CheckBench(d), files, nil
}

// seated says which gyro sits where: as given, or as the virtual bench has them.
func seated(l *bench.Loaded, f runFlags) ([]engine.Trial, error) {
	serials, err := assignments("gyro", f.gyros)
	if err != nil {
		return nil, err
	}
	var trials []engine.Trial
	var slots []string
	for _, s := range l.Description.Slots {
		slots = append(slots, string(s.ID))
		own := l.Gyros[s.ID]
		trial := engine.Trial{Slot: s.ID, Part: f.part, Serial: serials[string(s.ID)]}
		if trial.Part == "" {
			trial.Part = own.Part
		}
		if len(serials) == 0 {
			trial.Serial = own.Serial
		}
		if trial.Serial != "" {
			trials = append(trials, trial)
		}
	}
	for slot := range serials {
		if !slices.Contains(slots, slot) {
			return nil, fmt.Errorf("--gyro %s=%s: bench %s has no slot %q; its slots are %s", slot, serials[slot], f.bench, slot, strings.Join(slots, ", "))
		}
	}
	switch {
	case len(trials) == 0:
		return nil, fmt.Errorf("no gyro is named; say which sits where, such as --gyro %s=SERIAL (slots of this bench: %s)", slots[0], strings.Join(slots, ", "))
	case trials[0].Part == "":
		return nil, fmt.Errorf("the gyros' part number is not given; add --part NUMBER")
	}
	return trials, nil
}

func openLedger(dir string) (*results.Ledger, error) {
	keys, err := keyFolder()
	if err != nil {
		return nil, err
	}
	return results.OpenLedger(dir, keys)
}

func operatorName(given string) string {
	if given != "" {
		return given
	}
	if u, err := user.Current(); err == nil && u.Username != "" {
		return u.Username
	}
	return os.Getenv("USER")
}

// build says what program made the figures: bit for bit is promised for equal identity.
func build() results.BuildIdentity {
	id := results.BuildIdentity{Version: "unversioned", Go: runtime.Version(), Architecture: runtime.GOOS + "/" + runtime.GOARCH}
	if info, ok := debug.ReadBuildInfo(); ok {
		if info.Main.Version != "" {
			id.Version = info.Main.Version
		}
		for _, s := range info.Settings {
			if s.Key == "vcs.revision" {
				id.Version = s.Value
			}
		}
	}
	return id
}
