package main

import (
	"errors"
	"fmt"
	"strings"
	"text/tabwriter"

	"github.com/spf13/cobra"

	"proofrate/instruments"
	"proofrate/instruments/bench"
)

func probeCommand() *cobra.Command {
	var name string
	var asJSON bool
	c := &cobra.Command{
		Use:   "probe",
		Short: "ask every instrument on a bench who it is and what it reads",
		Long:  `probe opens every link of a bench, identifies the instruments and asks for each reading once. Nothing moves.`,
		Args:  cobra.NoArgs,
		RunE:  func(cmd *cobra.Command, _ []string) error { return probe(cmd, name, asJSON) },
	}
	c.Flags().StringVar(&name, "bench", defaultBench, "bench `FILE`, or the name of a shipped one")
	c.Flags().BoolVar(&asJSON, "json", false, "print one JSON object instead")
	return c
}

// probed is what one instrument said.
type probed struct {
	Instrument string       `json:"instrument"`
	Maker      string       `json:"maker"`
	Model      string       `json:"model"`
	Serial     string       `json:"serial"`
	Firmware   string       `json:"firmware"`
	Readings   []probedRead `json:"readings"`
}

type probedRead struct {
	Name  string   `json:"name"`
	Slot  string   `json:"slot"`
	Value *float64 `json:"value"`
	Unit  string   `json:"unit"`
	Error string   `json:"error"`
}

func probe(cmd *cobra.Command, name string, asJSON bool) error {
	loaded, file, problems, err := loadBench(name)
	if err != nil {
		return err
	}
	if len(problems) > 0 {
		return refuse(cmd, asJSON, problems, file)
	}
	opened, err := bench.Open(cmd.Context(), loaded, 1)
	if err != nil {
		return exit{exitStopped, err}
	}
	defer opened.Close()
	list := ask(cmd, opened.Bench)
	failed := 0
	for _, p := range list {
		for _, r := range p.Readings {
			if r.Error != "" {
				failed++
			}
		}
	}
	if asJSON {
		err = printJSON(cmd, map[string]any{"bench": loaded.Description.Name, "instruments": list})
	} else {
		err = printProbed(cmd, list)
	}
	if failed > 0 {
		err = errors.Join(err, exit{exitStopped, fmt.Errorf("%d readings failed", failed)})
	}
	return err
}

// ask goes over the bench in the order of its file.
func ask(cmd *cobra.Command, b *instruments.Bench) []probed {
	var list []probed
	find := func(name string) *probed {
		for i := range list {
			if list[i].Instrument == name {
				return &list[i]
			}
		}
		list = append(list, probed{Instrument: name, Readings: []probedRead{}})
		return &list[len(list)-1]
	}
	for _, id := range b.Identities {
		p := find(id.Name)
		p.Maker, p.Model, p.Serial, p.Firmware = id.Identity.Maker, id.Identity.Model, id.Identity.Serial, id.Identity.Firmware
	}
	read := func(name, slot string, from instruments.Reader) {
		p := find(name)
		for _, reading := range from.Readings() {
			got := probedRead{Name: reading, Slot: slot}
			if r, err := instruments.Read(cmd.Context(), from, reading); err != nil {
				got.Error = err.Error()
			} else {
				got.Value, got.Unit = finite(r.Value.Number), r.Value.Unit.String()
			}
			p.Readings = append(p.Readings, got)
		}
	}
	if b.Table != nil {
		read(b.Description.Table.Instrument, "", b.Table)
	}
	if b.Chamber != nil {
		read(b.Description.Chamber.Instrument, "", b.Chamber)
	}
	for i, s := range b.Slots {
		read(b.Description.Slots[i].Supply, string(s.ID), s.Supply)
	}
	return list
}

func printProbed(cmd *cobra.Command, list []probed) error {
	table := tabwriter.NewWriter(cmd.OutOrStdout(), 0, 0, 2, ' ', 0)
	fmt.Fprintln(table, "instrument\tidentity\treading\tslot\tvalue")
	for _, p := range list {
		identity := strings.Join(strings.Fields(strings.Join([]string{p.Maker, p.Model, p.Serial, p.Firmware}, " ")), " ")
		for i, r := range p.Readings {
			value := r.Error
			if r.Value != nil {
				value = fmt.Sprintf("%.6g %s", *r.Value, r.Unit)
			}
			name := p.Instrument
			if i > 0 {
				name, identity = "", ""
			}
			fmt.Fprintf(table, "%s\t%s\t%s\t%s\t%s\n", name, identity, r.Name, r.Slot, value)
		}
	}
	return table.Flush()
}
