package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"time"

	"github.com/spf13/cobra"

	"proofrate/instruments/bench"
	"proofrate/instruments/virtual"
)

func virtualCommand() *cobra.Command {
	var benchName, to string
	var pace float64
	var seed uint64
	c := &cobra.Command{
		Use:   "virtual",
		Short: "offer the virtual bench on pseudo-terminals and TCP ports",
		Long: `virtual offers the instruments of a virtual bench on pseudo-terminals and loopback TCP ports, as a real bench's
controllers stand on serial ports and the network, and writes a bench file that reaches them. It goes on until Ctrl-C.

With --pace 60 a minute of bench time passes in a second; above some 100 the answers of a real port become slow in
bench time, and guards will say so.`,
		Args: cobra.NoArgs,
		RunE: func(cmd *cobra.Command, _ []string) error {
			if !(pace > 0 && pace <= 1000) {
				return fmt.Errorf("--pace %g: more than 0 and at most 1000 was expected", pace)
			}
			return offer(cmd, benchName, to, pace, seed)
		},
	}
	c.Flags().StringVar(&benchName, "bench", defaultBench, "virtual bench `FILE`, or the name of a shipped one")
	c.Flags().Float64Var(&pace, "pace", 1, "bench seconds a second")
	c.Flags().StringVar(&to, "to", "", "write the bench file to `FILE` instead of printing it")
	c.Flags().Uint64Var(&seed, "seed", 1, "seed of the virtual bench")
	return c
}

func offer(cmd *cobra.Command, name, to string, pace float64, seed uint64) (err error) {
	loaded, file, problems, err := loadBench(name)
	if err != nil {
		return err
	}
	if len(problems) > 0 {
		return refuse(cmd, false, problems, file)
	}
	world, err := bench.World(loaded, seed)
	if err != nil {
		return err
	}
	server, err := virtual.Offer(world)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, server.Close()) }()
	links := map[string]string{}
	for _, e := range server.Endpoints() {
		links[e.Name] = e.Address
	}
	text, err := loaded.OnPorts(links, pace)
	if err != nil {
		return err
	}
	if to == "" {
		fmt.Fprintf(cmd.OutOrStdout(), "%s", text)
	} else if err := os.WriteFile(to, text, 0o644); err != nil {
		return err
	}
	for _, e := range server.Endpoints() {
		fmt.Fprintf(cmd.ErrOrStderr(), "%-10s %s\n", e.Name, e.Address)
	}
	fmt.Fprintf(cmd.ErrOrStderr(), "offered at pace %g since %s; Ctrl-C ends it\n", pace, time.Now().Format(time.TimeOnly))
	err = server.Run(cmd.Context(), pace)
	if context.Cause(cmd.Context()) != nil {
		return nil // ended as it was asked to
	}
	return err
}
