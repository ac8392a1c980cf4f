package main

import (
	"fmt"
	"os"
	"slices"
	"strings"
	"text/tabwriter"

	"github.com/spf13/cobra"

	"proofrate/limits/quantity"
	"proofrate/results/recording"
	"proofrate/results/reduce"
)

// reduceFlags are what `reduce` takes.
type reduceFlags struct {
	rate, unit, column, earth, curve, tau string
	figures                               []string
	json                                  bool
}

func reduceCommand() *cobra.Command {
	var f reduceFlags
	c := &cobra.Command{
		Use:   "reduce FILE.csv --sample-rate RATE",
		Short: "figures from a recording of rates made elsewhere",
		Long: `reduce reads a CSV file with a column of rates taken at rest, evenly in time, and prints the figures that such a
recording gives. --curve allan prints the overlapping Allan deviation, in the unit of the file.`,
		Args: cobra.ExactArgs(1),
		RunE: func(cmd *cobra.Command, args []string) error { return reduceFile(cmd, args[0], f) },
	}
	c.Flags().StringVar(&f.rate, "sample-rate", "", "samples a second, such as 100Hz")
	c.Flags().StringVar(&f.unit, "unit", "deg/s", "unit of the numbers")
	c.Flags().StringVar(&f.column, "column", "", "`HEADING` of the column, where there are several")
	c.Flags().StringVar(&f.earth, "earth-rate", "", "Earth's `RATE` on the input axis, removed from the bias")
	c.Flags().StringArrayVar(&f.figures, "figure", nil, "only this `FIGURE`; may be given several times")
	c.Flags().StringVar(&f.tau, "tau", "", "averaging `TIME` of allan-deviation")
	c.Flags().StringVar(&f.curve, "curve", "", "print a curve too: allan")
	c.Flags().BoolVar(&f.json, "json", false, "print one JSON object instead")
	if err := c.MarkFlagRequired("sample-rate"); err != nil {
		panic(err) // the flag stands three lines above
	}
	return c
}

func reduceFile(cmd *cobra.Command, name string, f reduceFlags) error {
	rate, err := quantity.ParseAs(f.rate, quantity.Frequency)
	if err == nil && rate.Number <= 0 {
		err = fmt.Errorf("%s: more than zero was expected", f.rate)
	}
	if err != nil {
		return fmt.Errorf("--sample-rate: %w", err)
	}
	unit, err := quantity.ParseUnit(f.unit)
	if err != nil {
		return fmt.Errorf("--unit: %w", err)
	}
	if f.curve != "" && f.curve != "allan" {
		return fmt.Errorf("--curve %s: there is one curve, allan", f.curve)
	}
	in, err := loose(f)
	if err != nil {
		return err
	}
	methods, err := looseFigures(f.figures, unit)
	if err != nil {
		return err
	}
	file, err := os.Open(name)
	if err != nil {
		return err
	}
	defer file.Close()
	r, err := recording.ReadCSV(name, file, recording.CSVOptions{Column: f.column, Unit: unit, SampleInterval: 1 / rate.SI()})
	if err != nil {
		return err
	}
	in.Recordings = []*recording.Recording{r}
	out := reduced{Figures: []looseFigure{}}
	for _, m := range methods {
		got, err := m.Reduce(cmd.Context(), in).To(looseUnit(m, unit))
		if err != nil {
			return err
		}
		out.Figures = append(out.Figures, looseFigureOf(m.Name, got))
	}
	if f.curve != "" {
		for _, p := range reduce.AllanCurve(r, curvePoints(r.Len())) {
			out.Curve = append(out.Curve, curvePoint{p.Tau, p.Deviation, p.Low, p.High, p.N})
		}
	}
	if f.json {
		return printJSON(cmd, out)
	}
	return out.print(cmd, name, unit)
}

// loose is what is known of a recording that no bench made: an input axis without Earth rate, or with the rate given.
func loose(f reduceFlags) (reduce.Input, error) {
	in := reduce.Input{Gyro: reduce.Gyro{Output: "rate", Polarity: 1}, Options: reduce.Options{Measurand: "population"}, Seed: 1}
	if f.earth != "" {
		v, err := quantity.ParseAs(f.earth, quantity.AngularRate)
		if err != nil {
			return in, fmt.Errorf("--earth-rate: %w", err)
		}
		in.Bench.EarthRate = v.SI()
	}
	if f.tau != "" {
		v, err := quantity.ParseAs(f.tau, quantity.Time)
		if err != nil {
			return in, fmt.Errorf("--tau: %w", err)
		}
		in.Options.Tau = v.SI()
	}
	return in, nil
}

// looseNames are the figures that one recording at rest gives.
var looseNames = []string{"bias", "angle-random-walk", "bias-instability", "rate-random-walk", "allan-deviation"}

// looseFigures finds the methods that were asked for. Numbers that are no rates give the curve only.
func looseFigures(names []string, unit quantity.Unit) ([]reduce.Method, error) {
	if unit.Dimension() != quantity.AngularRate {
		if len(names) > 0 {
			return nil, fmt.Errorf("--figure: figures are of rates; %s is %s: give --unit deg/s or such", unit, unit.Dimension())
		}
		return nil, nil
	}
	asked := names
	if len(names) == 0 {
		asked = looseNames[:4]
	}
	var list []reduce.Method
	for _, name := range asked {
		m, ok := reduce.Find(name)
		if !ok || !slices.Contains(looseNames, name) {
			return nil, fmt.Errorf("--figure %s: one recording at rest does not give it; it gives %s", name, strings.Join(looseNames, ", "))
		}
		list = append(list, m)
	}
	return list, nil
}

// looseUnit is the trade's unit of a figure.
func looseUnit(m reduce.Method, unit quantity.Unit) quantity.Unit {
	switch m.Unit.Dimension() {
	case quantity.AngleRandomWalk:
		return quantity.MustUnit("deg/sqrt(h)")
	case quantity.RateRandomWalk:
		return quantity.MustUnit("deg/h/sqrt(h)")
	case quantity.AngularRate:
		if m.Name == "bias" || m.Name == "allan-deviation" {
			return unit
		}
		return quantity.MustUnit("deg/h")
	}
	return m.Unit
}

// curvePoints: short recordings show every averaging time, long ones twenty a decade.
func curvePoints(samples int) int {
	if samples <= 2000 {
		return 0
	}
	return 20
}

// reduced is the command's answer.
type reduced struct {
	Figures []looseFigure `json:"figures"`
	Curve   []curvePoint  `json:"curve,omitempty"`
}

type looseFigure struct {
	Name   string         `json:"name"`
	Labels map[string]any `json:"labels"`
	Value  *float64       `json:"value"`
	Unit   string         `json:"unit"`
	U      *float64       `json:"u"`
	DoF    *float64       `json:"dof"`
	Low    *float64       `json:"low"`
	High   *float64       `json:"high"`
	Reason string         `json:"reason"`

	measured quantity.Measured
}

type curvePoint struct {
	Tau  float64 `json:"tau"`
	Adev float64 `json:"adev"`
	Low  float64 `json:"low"`
	High float64 `json:"high"`
	N    int     `json:"n"`
}

func looseFigureOf(name string, m quantity.Measured) looseFigure {
	return looseFigure{name, map[string]any{}, finite(m.Value), m.Unit.String(), finite(m.U), finite(m.DoF), finite(m.Low), finite(m.High), m.Void, m}
}

// print writes for people: figures with the digits that u supports, the curve with seven.
func (r reduced) print(cmd *cobra.Command, name string, unit quantity.Unit) error {
	table := tabwriter.NewWriter(cmd.OutOrStdout(), 0, 0, 2, ' ', 0)
	if len(r.Figures) > 0 {
		fmt.Fprintf(table, "figure\tvalue\tu\t95 %% interval\tunit\n")
	}
	for _, f := range r.Figures {
		m := f.measured
		if m.Void != "" {
			fmt.Fprintf(table, "%s\tvoid\t\t%s\n", f.Name, m.Void)
			continue
		}
		value, u := quantity.Format(m.Value, m.U), quantity.Format(m.U, m.U)
		if m.Upper {
			value, u = "at most "+quantity.Format(m.High, m.U), "-"
		}
		fmt.Fprintf(table, "%s\t%s\t%s\t%s to %s\t%s\n", f.Name, value, u, quantity.Format(m.Low, m.U), quantity.Format(m.High, m.U), m.Unit)
	}
	if len(r.Curve) > 0 {
		if len(r.Figures) > 0 {
			fmt.Fprintln(table)
		}
		fmt.Fprintf(table, "tau in s\tAllan deviation in %s\t95 %% interval\tdifferences\n", unit)
		for _, p := range r.Curve {
			fmt.Fprintf(table, "%.6g\t%.6e\t%.3e to %.3e\t%d\n", p.Tau, p.Adev, p.Low, p.High, p.N)
		}
	}
	return table.Flush()
}
