package main

import (
	"fmt"
	"time"

	"github.com/spf13/cobra"

	"proofrate/instruments/bench"
	"proofrate/instruments/profile"
	yaml "proofrate/limits/document"
	"proofrate/limits/source"
	"proofrate/procedures"
)

func checkCommand() *cobra.Command {
	var benchName, part string
	var set []string
	var asJSON bool
	c := &cobra.Command{
		Use:   "check FILE...",
		Short: "check procedures, bench files and profiles; no hardware is touched",
		Long: `check reads procedures, bench files and profiles, each a file or the name of a shipped one, and reports every
mistake with its place. With --bench a procedure is also held against what that bench can do.`,
		Args: cobra.MinimumNArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			parameters, err := assignments("set", set)
			if err != nil {
				return err
			}
			var all source.List
			var files []*source.File
			for _, name := range args {
				found, file, err := checkOne(cmd, name, benchName, procedures.Options{Part: part, Parameters: parameters}, asJSON)
				if err != nil {
					return err
				}
				all, files = append(all, found...), append(files, file...)
			}
			if len(all) > 0 {
				return refuse(cmd, asJSON, all, files...)
			}
			if asJSON {
				return printJSON(cmd, map[string]any{"diagnostics": []any{}})
			}
			return nil
		},
	}
	c.Flags().StringVar(&benchName, "bench", "", "hold procedures against this bench `FILE` or shipped bench too")
	c.Flags().StringVar(&part, "part", "", "part `NUMBER` to plan a procedure for")
	c.Flags().StringArrayVar(&set, "set", nil, "`NAME=VALUE`: another value for a parameter of the procedure")
	c.Flags().BoolVar(&asJSON, "json", false, "print the findings as one JSON object")
	return c
}

// firstKey is the first key of a document: bench, profile or procedure. What is no document has none.
func firstKey(name string, text []byte) string {
	_, root, _ := yaml.Read(name, text)
	if root == nil || len(root.Entries()) == 0 {
		return ""
	}
	return root.Entries()[0].Key.Text()
}

// checkOne tells the kind of a document by its first key and has its reader report what is wrong.
func checkOne(cmd *cobra.Command, name, benchName string, o procedures.Options, quiet bool) (source.List, []*source.File, error) {
	shipped := func(name string) ([]byte, bool) {
		for _, from := range []func(string) ([]byte, bool){procedures.Shipped, bench.Shipped, profile.Shipped} {
			if text, ok := from(name); ok {
				return text, true
			}
		}
		return nil, false
	}
	names := append(append(procedures.ShippedNames(), bench.ShippedNames()...), profile.ShippedNames()...)
	text, err := document("document", name, shipped, names)
	if err != nil {
		return nil, nil, err
	}
	say := func(format string, args ...any) {
		if !quiet {
			fmt.Fprintf(cmd.OutOrStdout(), format+"\n", args...)
		}
	}
	switch firstKey(name, text) {
	case "bench", "station":
		loaded, file, problems, err := loadBench(name)
		if err != nil || len(problems) > 0 {
			return problems, []*source.File{file}, err
		}
		say("%s: bench %s, %d slots, sound", name, loaded.Description.Name, len(loaded.Description.Slots))
		return nil, nil, nil
	case "profile":
		p, file, problems := profile.Load(name, text)
		if len(problems) > 0 {
			return problems, []*source.File{file}, nil
		}
		say("%s: profile %s, sound", name, p.Name)
		return nil, nil, nil
	}
	procedure, file, problems := procedures.Load(name, text)
	files := []*source.File{file}
	if len(problems) > 0 {
		return problems, files, nil
	}
	plan, problems := procedure.Plan(o)
	if len(problems) > 0 {
		return problems, files, nil
	}
	if benchName == "" {
		say("%s: procedure %s revision %s, %d steps, sound", name, plan.Name, plan.Revision, len(plan.Steps))
		return nil, nil, nil
	}
	loaded, benchFile, problems, err := loadBench(benchName)
	files = append(files, benchFile)
	if err != nil || len(problems) > 0 {
		return problems, files, err
	}
	if problems = plan.CheckBench(loaded.Description); len(problems) > 0 {
		return problems, files, nil
	}
	var whole time.Duration
	for _, d := range plan.Estimate(loaded.Description) {
		whole += d
	}
	say("%s: procedure %s revision %s, %d steps, sound; bench %s can carry it out in about %s of bench time",
		name, plan.Name, plan.Revision, len(plan.Steps), loaded.Description.Name, clock(whole))
	return nil, nil, nil
}
