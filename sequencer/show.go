package main

import (
	"github.com/spf13/cobra"

	"proofrate/results"
	"proofrate/results/report"
)

func showCommand() *cobra.Command {
	var dir string
	var asJSON bool
	c := &cobra.Command{
		Use:   "show [RUN]",
		Short: "one run with its figures and verdicts",
		Long: `show prints a run of the ledger as it was judged. RUN is its id, the beginning of one, or nothing for the
newest run.`,
		Args: cobra.MaximumNArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error {
			run := "latest"
			if len(args) > 0 {
				run = args[0]
			}
			ledger, err := results.ReadLedger(dir)
			if err != nil {
				return err
			}
			defer ledger.Close()
			told, err := ledger.Show(cmd.Context(), run)
			if err != nil {
				return err
			}
			if asJSON {
				return printJSON(cmd, told)
			}
			return report.Run(cmd.OutOrStdout(), told, report.Place{Ledger: dir})
		},
	}
	c.Flags().StringVar(&dir, "ledger", "ledger", "ledger `FOLDER`")
	c.Flags().BoolVar(&asJSON, "json", false, "print one JSON object instead")
	return c
}
