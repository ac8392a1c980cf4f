package report

import (
	"fmt"
	"io"
	"math"
	"path/filepath"
	"slices"
	"strings"
	"text/tabwriter"
	"time"

	"proofrate/limits/quantity"
	"proofrate/results"
)

// Place says where the evidence lies.
type Place struct{ Ledger string }

// rank orders verdicts from good to bad.
var rank = map[string]int{"accept": 1, "undecided": 2, "void": 3, "reject": 4}

// Run writes a run: a line a gyro, then for each gyro its limits, the worst element of each, and why it was not
// accepted, then where the evidence is.
func Run(w io.Writer, r *results.RunReport, at Place) error {
	p := &page{w: w}
	p.linef("run %s", r.Run)
	p.linef("%s revision %s%s on bench %s, operator %s, started %s", r.Procedure.Name, r.Procedure.Revision, of(r.Specification), r.Bench, r.Operator, seconds(r.Started))
	ended := strings.ReplaceAll(r.Outcome, "-", " ")
	if r.Reason != "" {
		ended += ": " + r.Reason
	}
	p.linef("%s; bench time %s, wall time %.1f s", ended, hours(r.BenchSeconds), r.WallSeconds)
	p.linef("")
	for _, t := range r.Trials {
		p.linef("  slot %-4s %s %-12s %-10s %s", t.Slot, t.Part, t.Serial, strings.ToUpper(t.Verdict), summary(t))
	}
	for _, t := range r.Trials {
		p.linef("")
		p.trial(t)
	}
	p.linef("")
	if r.Sealed {
		p.linef("evidence: entry %d of station %s in %s, sealed %s", r.Number, r.Station, filepath.Join(at.Ledger, "ledger.db"), r.Seal)
		p.linef("          recordings in %s", filepath.Join(at.Ledger, "recordings", r.Run))
	}
	return p.err
}

func of(specification string) string {
	if specification == "" {
		return ""
	}
	return " to " + specification
}

// seconds cuts a time of the wall to its seconds.
func seconds(started string) string {
	t, err := time.Parse(time.RFC3339Nano, started)
	if err != nil {
		return started
	}
	return t.UTC().Format("2006-01-02 15:04:05 UTC")
}

func hours(s float64) string {
	t := int(math.Round(s))
	return fmt.Sprintf("%d:%02d:%02d", t/3600, t/60%60, t%60)
}

// page writes lines until one fails.
type page struct {
	w   io.Writer
	err error
}

func (p *page) linef(format string, args ...any) {
	if p.err == nil {
		_, p.err = fmt.Fprintln(p.w, strings.TrimRight(fmt.Sprintf(format, args...), " "))
	}
}

// summary says in a few words why a trial is not accepted.
func summary(t results.TrialReport) string {
	if t.Reason != "" {
		return t.Reason
	}
	var clauses []string
	for _, j := range t.Judgements {
		if j.Verdict == t.Verdict && j.Verdict != "accept" {
			if what := "clause " + j.Clause; !slices.Contains(clauses, what) {
				clauses = append(clauses, what)
			}
		}
	}
	return strings.Join(clauses, ", ")
}

// trial writes a gyro's limits, of each the element that came out worst, and why those that are not met are not.
func (p *page) trial(t results.TrialReport) {
	p.linef("slot %s  %s %s  %s", t.Slot, t.Part, t.Serial, strings.ToUpper(t.Verdict))
	if len(t.Judgements) == 0 {
		p.linef("  nothing was judged%s", map[bool]string{true: "", false: ": " + t.Reason}[t.Reason == ""])
		return
	}
	var b strings.Builder
	table := tabwriter.NewWriter(&b, 0, 0, 2, ' ', 0)
	fmt.Fprintln(table, "  clause\trequirement\tfound, worst of n\tn\tmargin\tverdict")
	for _, limit := range byLimit(t.Judgements) {
		worst := limit[0]
		for _, j := range limit[1:] {
			if rank[j.Verdict] > rank[worst.Verdict] || j.Verdict == worst.Verdict && less(j, worst) {
				worst = j
			}
		}
		fmt.Fprintf(table, "  %s\t%s\t%s\t%d\t%s\t%s\n", worst.Clause, worst.Require, shown(worst), len(limit), margin(worst), worst.Verdict)
	}
	table.Flush()
	for _, line := range strings.Split(strings.TrimRight(b.String(), "\n"), "\n") {
		p.linef("%s", line)
	}
	for _, limit := range byLimit(t.Judgements) {
		p.why(limit)
	}
}

// why says of a limit that is not met what was found where it came out worst, and in how many elements; of one that was
// not measured the reason of the first.
func (p *page) why(limit []results.JudgementReport) {
	for _, verdict := range []string{"reject", "undecided", "void"} {
		var worst *results.JudgementReport
		n := 0
		for i, j := range limit {
			if j.Verdict != verdict {
				continue
			}
			if n++; worst == nil || less(j, *worst) {
				worst = &limit[i]
			}
		}
		if worst == nil {
			continue
		}
		many := ""
		if len(limit) > 1 {
			many = fmt.Sprintf(" in %d of %d, %s", n, len(limit), map[bool]string{true: "first", false: "worst"}[verdict == "void"])
		}
		if verdict == "void" {
			p.linef("  VOID by clause %s%s%s: %s", worst.Clause, many, where(worst.Place), found(*worst))
			continue
		}
		p.linef("  %s by clause %s%s%s: %s; required is %s%s", strings.ToUpper(verdict), worst.Clause, many, where(worst.Place), found(*worst), worst.Require, odds(*worst))
	}
}

// found is the figures that a judgement rests on, or why it is void.
func found(j results.JudgementReport) string { return strings.TrimPrefix(j.Reason, "with ") }

// shown is found, short enough for a column: the reason of what is void stands below the table.
func shown(j results.JudgementReport) string {
	if j.Verdict == "void" {
		return "-"
	}
	return found(j)
}

func margin(j results.JudgementReport) string {
	if j.Margin == nil || j.UMargin == nil || *j.UMargin == 0 {
		return "-"
	}
	return withUnit(quantity.Format(*j.Margin, *j.UMargin), j.Unit)
}

func withUnit(number, unit string) string {
	if unit == "1" {
		return number
	}
	return number + " " + unit
}

func where(place string) string {
	if place == "" {
		return ""
	}
	return " at " + place
}

// odds says how sure a verdict is.
func odds(j results.JudgementReport) string {
	switch p := j.Probability; {
	case p == nil || j.Rule == "simple":
		return ""
	case *p < 0.001:
		return "; conforms with a probability below 0.001"
	case *p > 0.999:
		return "; conforms with a probability above 0.999"
	default:
		return fmt.Sprintf("; conforms with a probability of %.3f", *p)
	}
}

func less(a, b results.JudgementReport) bool {
	return a.Margin != nil && b.Margin != nil && *a.Margin < *b.Margin
}

// byLimit groups judgements of one limit, which follow one another.
func byLimit(list []results.JudgementReport) [][]results.JudgementReport {
	var groups [][]results.JudgementReport
	for i, j := range list {
		if i > 0 && list[i-1].Clause == j.Clause && list[i-1].Require == j.Require {
			groups[len(groups)-1] = append(groups[len(groups)-1], j)
			continue
		}
		groups = append(groups, []results.JudgementReport{j})
	}
	return groups
}

// History writes a line a trial.
func History(w io.Writer, rows []results.Row) error {
	if len(rows) == 0 {
		_, err := fmt.Fprintln(w, "no trial fits")
		return err
	}
	table := tabwriter.NewWriter(w, 0, 0, 2, ' ', 0)
	fmt.Fprintln(table, "run\tstarted\tprocedure\tslot\tpart\tserial\toperator\tverdict\trun ended")
	for _, r := range rows {
		fmt.Fprintf(table, "%s\t%s\t%s %s\t%s\t%s\t%s\t%s\t%s\t%s\n", r.Run, r.Started, r.Procedure, r.Revision, r.Slot, r.Part, r.Serial, r.Operator, r.Verdict, r.Outcome)
	}
	return table.Flush()
}
