package rehearsal

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"runtime"
	"sort"
	"strings"
	"sync"
	"text/tabwriter"

	"proofrate/limits"
	"proofrate/limits/quantity"
)

// Report is what a rehearsal came to.
type Report struct {
	Trials       int            `json:"trials"`
	BenchSeconds float64        `json:"bench_seconds"` // of one trial, the mean
	Figures      []FigureReport `json:"figures"`
	Limits       []LimitReport  `json:"limits"`
	Verdicts     map[string]int `json:"verdicts"` // of the trials
	Failures     []string       `json:"failures"` // trials that could not be carried out
}

// FigureReport compares one figure element with the truth over all trials.
type FigureReport struct {
	Name      string `json:"name"`
	Place     string `json:"labels"`
	Unit      string `json:"unit"`
	Measured  int    `json:"measured"` // trials in which it was not void
	Void      int    `json:"void"`
	MeanError number `json:"mean_error"` // measured less true
	SDError   number `json:"sd_error"`
	MeanU     number `json:"mean_u"`
	Ratio     number `json:"u_over_sd"` // NaN where the error does not scatter
	Covered   int    `json:"covered"`   // stated 95 % intervals that hold the truth
	Beyond    int    `json:"beyond"`    // errors beyond the element's own 1 - 1e-6 interval
	Bounds    int    `json:"bounds"`    // trials in which it was a one-sided bound
}

// number is one that may not exist: NaN here, null in JSON.
type number float64

// MarshalJSON writes null for NaN.
func (n number) MarshalJSON() ([]byte, error) {
	if math.IsNaN(float64(n)) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(n))
}

// LimitReport counts the verdicts of one clause.
type LimitReport struct {
	Clause    string `json:"clause"`
	Accept    int    `json:"accept"`
	Undecided int    `json:"undecided"`
	Void      int    `json:"void"`
	Reject    int    `json:"reject"`
}

// Rehearse carries out the trials, as many side by side as there are processors. Cancelled, it reports what it has.
func Rehearse(ctx context.Context, c Config) (*Report, error) {
	trials := make([]*trial, c.Gyros)
	failures := make([]error, c.Gyros)
	next := make(chan int)
	var workers sync.WaitGroup
	var counted sync.Mutex
	done := 0
	for range min(runtime.GOMAXPROCS(0), c.Gyros) {
		workers.Go(func() {
			for i := range next {
				t, err := c.carryOut(ctx, c.Seed+uint64(i))
				if err != nil {
					failures[i] = err
					continue
				}
				trials[i] = &t
				if c.Done != nil {
					counted.Lock()
					done++
					c.Done(done)
					counted.Unlock()
				}
			}
		})
	}
	for i := range c.Gyros {
		if ctx.Err() != nil {
			break
		}
		next <- i
	}
	close(next)
	workers.Wait()
	r := &Report{}
	for i := range trials {
		switch {
		case trials[i] != nil:
		case failures[i] != nil && ctx.Err() == nil:
			r.Failures = append(r.Failures, failures[i].Error())
		}
	}
	r.gather(trials)
	if r.Trials == 0 {
		return r, errors.Join(append(failures, errors.New("no trial was carried out"))...)
	}
	return r, nil
}

// tally adds up one figure element.
type tally struct {
	FigureReport
	errors []float64
	us     []float64
}

// interval of the test for errors that no claimed uncertainty could explain.
const nearlySure = 1 - 1e-6

func (r *Report) gather(trials []*trial) {
	tallies := map[string]*tally{}
	var order []string
	clauses := map[string]map[limits.Verdict]int{}
	r.Verdicts = map[string]int{}
	for _, t := range trials {
		if t == nil {
			continue
		}
		r.Trials++
		r.BenchSeconds += t.bench
		r.Verdicts[t.evaluation.Verdict.String()]++
		t.verdicts(clauses)
		for i, f := range t.evaluation.Figures {
			key := f.Name + "|" + f.Labels.String()
			one := tallies[key]
			if one == nil {
				one = &tally{FigureReport: FigureReport{Name: f.Name, Place: f.Labels.String(), Unit: f.Measured.Unit.String()}}
				tallies[key] = one
				order = append(order, key)
			}
			one.add(f.Measured, t.truths[i])
		}
	}
	if r.Trials > 0 {
		r.BenchSeconds /= float64(r.Trials)
	}
	for _, key := range order {
		r.Figures = append(r.Figures, tallies[key].report())
	}
	for clause, n := range clauses {
		r.Limits = append(r.Limits, LimitReport{clause, n[limits.Accept], n[limits.Undecided], n[limits.Void], n[limits.Reject]})
	}
	sort.Slice(r.Limits, func(i, j int) bool { return r.Limits[i].Clause < r.Limits[j].Clause })
}

func (t *tally) add(m quantity.Measured, is truth) {
	if m.Void != "" || is.reason != "" {
		t.Void++
		return
	}
	t.Measured++
	t.errors = append(t.errors, m.Value-is.value)
	t.us = append(t.us, m.U)
	slack := 1e-12 * math.Abs(is.value) // a figure without uncertainty is exact to rounding
	if is.value >= m.Low-slack && is.value <= m.High+slack {
		t.Covered++
	}
	if low, high := m.Interval(nearlySure); is.value < low-slack || is.value > high+slack {
		t.Beyond++
	}
	if m.Family == quantity.Bound {
		t.Bounds++
	}
}

func (t *tally) report() FigureReport {
	f := t.FigureReport
	n := float64(len(t.errors))
	if n == 0 {
		none := number(math.NaN())
		f.MeanError, f.SDError, f.MeanU, f.Ratio = none, none, none, none
		return f
	}
	var mean, square, u float64
	for i := range t.errors {
		mean += t.errors[i] / n
		u += t.us[i] / n
	}
	for _, e := range t.errors {
		square += (e - mean) * (e - mean)
	}
	sd := math.Sqrt(square / math.Max(n-1, 1))
	f.MeanError, f.SDError, f.MeanU, f.Ratio = number(mean), number(sd), number(u), number(math.NaN())
	if sd > 0 {
		f.Ratio = number(u / sd)
	}
	return f
}

// Write prints the report for people.
func (r *Report) Write(w io.Writer) error {
	fmt.Fprintf(w, "%d trials, each a gyro and a bench of its own; bench time of one %.0f min\n", r.Trials, r.BenchSeconds/60)
	var verdicts []string
	for _, v := range []string{"accept", "undecided", "void", "reject"} {
		if n := r.Verdicts[v]; n > 0 {
			verdicts = append(verdicts, fmt.Sprintf("%d %s", n, v))
		}
	}
	fmt.Fprintf(w, "verdicts: %s\n\n", strings.Join(verdicts, ", "))
	table := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(table, "figure\tat\tunit\tmean error\tsd of error\tmean u\tu/sd\t95 % held\tvoid\tbound")
	for _, f := range r.Figures {
		fmt.Fprintf(table, "%s\t%s\t%s\t%s\t%s\t%s\t%s\t%d of %d\t%d\t%d\n", f.Name, f.Place, f.Unit, shown(f.MeanError, f.SDError/3),
			shown(f.SDError, f.SDError), shown(f.MeanU, f.MeanU), ratioText(float64(f.Ratio)), f.Covered, f.Measured, f.Void, f.Bounds)
	}
	fmt.Fprintln(table, "\nclause\taccept\tundecided\tvoid\treject")
	for _, l := range r.Limits {
		fmt.Fprintf(table, "%s\t%d\t%d\t%d\t%d\n", l.Clause, l.Accept, l.Undecided, l.Void, l.Reject)
	}
	if err := table.Flush(); err != nil {
		return err
	}
	for _, f := range r.Failures {
		fmt.Fprintln(w, "not carried out: "+f)
	}
	return nil
}

func shown(x, u number) string { return quantity.Format(float64(x), float64(u)) }

func ratioText(x float64) string {
	if math.IsNaN(x) {
		return "-"
	}
	return fmt.Sprintf("%.2f", x)
}
