package main

import (
	"github.com/spf13/cobra"

	"proofrate/results"
	"proofrate/results/report"
)

func historyCommand() *cobra.Command {
	var dir string
	var asJSON bool
	var f results.Filter
	c := &cobra.Command{
		Use:   "history",
		Short: "runs and trials, newest first",
		Args:  cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			ledger, err := results.ReadLedger(dir)
			if err != nil {
				return err
			}
			defer ledger.Close()
			rows, err := ledger.History(cmd.Context(), f)
			if err != nil {
				return err
			}
			if asJSON {
				return printJSON(cmd, rows)
			}
			return report.History(cmd.OutOrStdout(), rows)
		},
	}
	c.Flags().StringVar(&dir, "ledger", "ledger", "ledger `FOLDER`")
	c.Flags().StringVar(&f.Serial, "serial", "", "only this `SERIAL`; * stands for any characters")
	c.Flags().StringVar(&f.Part, "part", "", "only this part `NUMBER`")
	c.Flags().StringVar(&f.Procedure, "procedure", "", "only this procedure")
	c.Flags().StringVar(&f.Verdict, "verdict", "", "only accept, reject, undecided, void or open")
	c.Flags().StringVar(&f.Operator, "operator", "", "only this operator's")
	c.Flags().IntVar(&f.Newest, "newest", 50, "at most so `MANY`")
	c.Flags().BoolVar(&asJSON, "json", false, "print a JSON list instead")
	return c
}
