package report

import (
	"bytes"
	"testing"

	"github.com/google/go-cmp/cmp"

	"proofrate/results"
)

func p(x float64) *float64 { return &x }

// TestRun holds the page against what it should say, read and kept by hand.
func TestRun(t *testing.T) {
	judged := func(verdict, place string, margin, probability float64, reason string) results.JudgementReport {
		j := results.JudgementReport{Clause: "3.2.7", Require: "sf_linearity at most 100 ppm", Rule: "guarded", Verdict: verdict, Place: place, Unit: "ppm", Reason: reason}
		if verdict != "void" {
			j.Margin, j.UMargin, j.Probability = p(margin), p(3.04), p(probability)
		}
		return j
	}
	r := &results.RunReport{Run: "0193", Outcome: "completed", Sealed: true, Seal: "abcd", Procedure: results.ReportProcedure{Name: "short", Revision: "A"}, Specification: "LS-0417",
		Bench: "bench-1", Station: "hall-1", Number: 7, Operator: "N. Operator", Started: "2026-03-04T05:06:07.8Z", BenchSeconds: 3725.4, WallSeconds: 1.25,
		Trials: []results.TrialReport{
			{Slot: "A", Part: "OG-9", Serial: "100", Verdict: "accept", Judgements: []results.JudgementReport{judged("accept", "", 40, 1, "with sf_linearity = 60.0 ppm, u 3.0 ppm")}},
			{Slot: "B", Part: "OG-9", Serial: "101", Verdict: "reject", Judgements: []results.JudgementReport{
				judged("accept", "temperature 23 degC", 40, 1, "with sf_linearity = 60.0 ppm, u 3.0 ppm"),
				judged("reject", "temperature -40 degC", -78.2, 0, "with sf_linearity = 178.2 ppm, u 3.0 ppm"),
				judged("undecided", "temperature 71 degC", 1, 0.62, "with sf_linearity = 99.0 ppm, u 3.0 ppm")}},
			{Slot: "C", Part: "OG-9", Serial: "102", Verdict: "void", Reason: "the gyro went silent", Judgements: []results.JudgementReport{
				judged("void", "", 0, 0, `sf_linearity is void: the recording "sweep" was not made`)}},
		}}
	var b bytes.Buffer
	if err := Run(&b, r, Place{Ledger: "ledger"}); err != nil {
		t.Fatal(err)
	}
	want := `run 0193
short revision A to LS-0417 on bench bench-1, operator N. Operator, started 2026-03-04 05:06:07 UTC
completed; bench time 1:02:05, wall time 1.2 s

  slot A    OG-9 100          ACCEPT
  slot B    OG-9 101          REJECT     clause 3.2.7
  slot C    OG-9 102          VOID       the gyro went silent

slot A  OG-9 100  ACCEPT
  clause  requirement                   found, worst of n                   n  margin    verdict
  3.2.7   sf_linearity at most 100 ppm  sf_linearity = 60.0 ppm, u 3.0 ppm  1  40.0 ppm  accept

slot B  OG-9 101  REJECT
  clause  requirement                   found, worst of n                    n  margin     verdict
  3.2.7   sf_linearity at most 100 ppm  sf_linearity = 178.2 ppm, u 3.0 ppm  3  -78.2 ppm  reject
  REJECT by clause 3.2.7 in 1 of 3, worst at temperature -40 degC: sf_linearity = 178.2 ppm, u 3.0 ppm; required is sf_linearity at most 100 ppm; conforms with a probability below 0.001
  UNDECIDED by clause 3.2.7 in 1 of 3, worst at temperature 71 degC: sf_linearity = 99.0 ppm, u 3.0 ppm; required is sf_linearity at most 100 ppm; conforms with a probability of 0.620

slot C  OG-9 102  VOID
  clause  requirement                   found, worst of n  n  margin  verdict
  3.2.7   sf_linearity at most 100 ppm  -                  1  -       void
  VOID by clause 3.2.7: sf_linearity is void: the recording "sweep" was not made

evidence: entry 7 of station hall-1 in ledger/ledger.db, sealed abcd
          recordings in ledger/recordings/0193
`
	if d := cmp.Diff(want, b.String()); d != "" {
		t.Error(d)
	}
}

func TestHistory(t *testing.T) {
	var b bytes.Buffer
	if err := History(&b, []results.Row{{Run: "0193", Started: "2026-03-04T05:06:07Z", Procedure: "short", Revision: "A", Slot: "B", Part: "OG-9", Serial: "101", Operator: "N. Operator", Verdict: "reject", Outcome: "completed"}}); err != nil {
		t.Fatal(err)
	}
	want := `run   started               procedure  slot  part  serial  operator     verdict  run ended
0193  2026-03-04T05:06:07Z  short A    B     OG-9  101     N. Operator  reject   completed
`
	if d := cmp.Diff(want, b.String()); d != "" {
		t.Error(d)
	}
	b.Reset()
	if err := History(&b, nil); err != nil || b.String() != "no trial fits\n" {
		t.Errorf("%q, %v", b.String(), err)
	}
}
