package results

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"strings"
	"time"

	"github.com/gofrs/flock"

	"proofrate/limits"
)

// Filter narrows a history. Empty fields do not.
type Filter struct {
	Serial, Part string // * stands for any characters
	Procedure    string
	Verdict      string // of the trial, or "open"
	Operator     string
	Since        time.Time
	Newest       int // at most so many; 0: all
}

// Row is one trial of a history.
type Row struct {
	Run       string `json:"run"`
	Started   string `json:"started"` // RFC 3339, UTC
	Procedure string `json:"procedure"`
	Revision  string `json:"revision"`
	Slot      string `json:"slot"`
	Part      string `json:"part"`
	Serial    string `json:"serial"`
	Operator  string `json:"operator"`
	Verdict   string `json:"verdict"` // "open" while the run goes on
	Outcome   string `json:"-"`
}

// History lists trials, the newest run first.
func (l *Ledger) History(ctx context.Context, f Filter) ([]Row, error) {
	rows := []Row{}
	open, err := l.open(ctx)
	if err != nil {
		return nil, err
	}
	for _, e := range open {
		for _, t := range e.Trials {
			row := Row{e.Run, toSecond(e.Started), e.Procedure.Name, e.Procedure.Revision, t.Slot, t.Part, t.Serial, e.Operator, "open", e.Outcome}
			if e.Outcome == BrokenOff {
				row.Verdict = limits.Void.String()
			}
			if f.takes(row) {
				rows = append(rows, row)
			}
		}
	}
	conditions, args := []string{"1"}, []any{}
	where := func(condition string, arg any) { conditions, args = append(conditions, condition), append(args, arg) }
	for column, pattern := range map[string]string{"t.serial": f.Serial, "t.part": f.Part} {
		if pattern != "" {
			where(column+" GLOB ?", globbed(pattern))
		}
	}
	for column, value := range map[string]string{"r.procedure": f.Procedure, "t.verdict": f.Verdict, "r.operator": f.Operator} {
		if value != "" {
			where(column+" = ?", value)
		}
	}
	if !f.Since.IsZero() {
		where("r.started >= ?", f.Since.UnixNano())
	}
	limit := -1
	if f.Newest > 0 {
		limit = max(f.Newest-len(rows), 0)
	}
	found, err := l.read.QueryContext(ctx, `SELECT r.run, r.started, r.procedure, r.revision, t.slot, t.part, t.serial, r.operator, t.verdict, r.outcome
		FROM runs r JOIN trial_index t USING (run) WHERE `+strings.Join(conditions, " AND ")+` ORDER BY r.started DESC, t.slot LIMIT ?`, append(args, limit)...)
	if err != nil {
		return nil, explained(err)
	}
	defer found.Close()
	for found.Next() {
		var r Row
		var started int64
		if err := found.Scan(&r.Run, &started, &r.Procedure, &r.Revision, &r.Slot, &r.Part, &r.Serial, &r.Operator, &r.Verdict, &r.Outcome); err != nil {
			return nil, err
		}
		r.Started = time.Unix(0, started).UTC().Format(time.RFC3339)
		rows = append(rows, r)
	}
	return rows, explained(found.Err())
}

// toSecond cuts a time of the wall to its seconds.
func toSecond(started string) string {
	t, err := time.Parse(time.RFC3339Nano, started)
	if err != nil {
		return started
	}
	return t.UTC().Format(time.RFC3339)
}

// globbed keeps only * of SQLite's patterns.
func globbed(pattern string) string {
	return strings.NewReplacer("[", "[[]", "?", "[?]").Replace(pattern)
}

// takes holds a row of an open run against the filter.
func (f Filter) takes(r Row) bool {
	for _, pair := range [][2]string{{f.Procedure, r.Procedure}, {f.Verdict, r.Verdict}, {f.Operator, r.Operator}} {
		if pair[0] != "" && pair[0] != pair[1] {
			return false
		}
	}
	for _, pair := range [][2]string{{f.Serial, r.Serial}, {f.Part, r.Part}} {
		if pair[0] != "" && !globs(pair[0], pair[1]) {
			return false
		}
	}
	started, err := time.Parse(time.RFC3339Nano, r.Started)
	return err != nil || f.Since.IsZero() || !started.Before(f.Since)
}

// globs: * stands for any characters.
func globs(pattern, text string) bool {
	parts := strings.Split(pattern, "*")
	if !strings.HasPrefix(text, parts[0]) {
		return false
	}
	text = text[len(parts[0]):]
	for i, part := range parts[1:] {
		if i == len(parts)-2 {
			return strings.HasSuffix(text, part)
		}
		at := strings.Index(text, part)
		if at < 0 {
			return false
		}
		text = text[at+len(part):]
	}
	return text == ""
}

// open gives the runs that are not sealed, the newest first, each as "open", or as broken off if its process has died
// and nobody has sealed it yet.
func (l *Ledger) open(ctx context.Context) ([]runEvidence, error) {
	rows, err := l.read.QueryContext(ctx, "SELECT start FROM open_runs ORDER BY run DESC")
	if err != nil {
		return nil, explained(err)
	}
	defer rows.Close()
	var list []runEvidence
	for rows.Next() {
		var text string
		if err := rows.Scan(&text); err != nil {
			return nil, err
		}
		var e runEvidence
		if err := json.Unmarshal([]byte(text), &e); err != nil {
			return nil, err
		}
		e.Outcome = "open"
		lock := flock.New(l.recordings(e.Run, lockFile))
		if free, err := lock.TryRLock(); err == nil && free {
			e.Outcome, e.Reason = BrokenOff, brokenReason
			if err := lock.Unlock(); err != nil {
				return nil, err
			}
		}
		list = append(list, e)
	}
	return list, rows.Err()
}

// RunReport is a run as people and programs are told of it.
type RunReport struct {
	Run          string          `json:"run"`
	Outcome      string          `json:"outcome"`
	Sealed       bool            `json:"sealed"`
	Seal         string          `json:"seal"` // digest of its entry
	Procedure    ReportProcedure `json:"procedure"`
	BenchSeconds float64         `json:"bench_seconds"`
	WallSeconds  float64         `json:"wall_seconds"`
	Trials       []TrialReport   `json:"trials"`

	Started, Operator, Bench, Station, Reason, Specification string `json:"-"`
	Number                                                   int    `json:"-"`
}

// ReportProcedure names what was carried out.
type ReportProcedure struct {
	Name     string `json:"name"`
	Revision string `json:"revision"`
	Digest   string `json:"digest"`
}

// TrialReport is one gyro's part.
type TrialReport struct {
	Slot       string            `json:"slot"`
	Part       string            `json:"part"`
	Serial     string            `json:"serial"`
	Verdict    string            `json:"verdict"`
	Figures    []FigureReport    `json:"figures"`
	Judgements []JudgementReport `json:"judgements"`
	Reason     string            `json:"-"`
	Recording  string            `json:"-"`
}

// FigureReport is one element of a figure.
type FigureReport struct {
	Name   string         `json:"name"`
	Labels map[string]any `json:"labels"`
	Value  *float64       `json:"value"`
	Unit   string         `json:"unit"`
	U      *float64       `json:"u"`
	DoF    *float64       `json:"dof"`
	Low    *float64       `json:"low"`
	High   *float64       `json:"high"`
	Reason string         `json:"reason"`

	Place string `json:"-"` // the labels in words
}

// JudgementReport is what a limit came to for one element.
type JudgementReport struct {
	Clause      string         `json:"clause"`
	Require     string         `json:"require"`
	Rule        string         `json:"rule"`
	Labels      map[string]any `json:"labels"`
	Verdict     string         `json:"verdict"`
	Margin      *float64       `json:"margin"`
	UMargin     *float64       `json:"u_margin"`
	Unit        string         `json:"unit"`
	Probability *float64       `json:"probability"`
	Reason      string         `json:"reason"`

	Place string `json:"-"`
}

// Show gives one run: by its id, by the beginning of one that no other shares, or "latest".
func (l *Ledger) Show(ctx context.Context, run string) (*RunReport, error) {
	query, args := "SELECT station, number, digest, text FROM entries JOIN runs USING (station, number) WHERE run GLOB ? ORDER BY started DESC LIMIT 2", []any{globbed(run) + "*"}
	if run == "latest" {
		query, args = "SELECT station, number, digest, text FROM entries JOIN runs USING (station, number) ORDER BY started DESC LIMIT 1", nil
	}
	rows, err := l.read.QueryContext(ctx, query, args...)
	if err != nil {
		return nil, explained(err)
	}
	defer rows.Close()
	var reports []*RunReport
	for rows.Next() {
		var station, digest, text string
		var number int
		if err := rows.Scan(&station, &number, &digest, &text); err != nil {
			return nil, err
		}
		var e runEvidence
		if err := json.Unmarshal([]byte(text), &e); err != nil {
			return nil, err
		}
		r := e.report()
		r.Sealed, r.Seal, r.Number = true, digest, number
		reports = append(reports, r)
	}
	if err := rows.Err(); err != nil {
		return nil, explained(err)
	}
	if len(reports) < 2 {
		open, err := l.open(ctx)
		if err != nil {
			return nil, err
		}
		for _, e := range open {
			if strings.HasPrefix(e.Run, run) {
				reports = append(reports, e.report())
			}
		}
	}
	switch {
	case len(reports) == 0 && run == "latest":
		return nil, errors.New("the ledger holds no sealed run yet")
	case len(reports) == 0:
		return nil, fmt.Errorf("the ledger holds no run %q; see proofrate history", run)
	case len(reports) > 1:
		return nil, fmt.Errorf("several runs begin with %q; give more of the id", run)
	}
	return reports[0], nil
}

// report turns evidence into a report.
func (e *runEvidence) report() *RunReport {
	r := &RunReport{Run: e.Run, Outcome: e.Outcome, Procedure: ReportProcedure{e.Procedure.Name, e.Procedure.Revision, e.Procedure.Digest},
		BenchSeconds: e.BenchSeconds, WallSeconds: e.WallSeconds, Trials: []TrialReport{}, Started: e.Started, Operator: e.Operator,
		Bench: e.Bench.Name, Station: e.Station, Reason: e.Reason, Specification: e.Procedure.Specification}
	for _, t := range e.Trials {
		one := TrialReport{Slot: t.Slot, Part: t.Part, Serial: t.Serial, Verdict: t.Verdict, Reason: t.Reason, Recording: t.Recording.File,
			Figures: []FigureReport{}, Judgements: []JudgementReport{}}
		for _, f := range t.Figures {
			labels, place := told(f.Labels)
			one.Figures = append(one.Figures, FigureReport{f.Name, labels, f.Value, f.Unit, f.U, f.DoF, f.Low, f.High, f.Reason, place})
		}
		for _, j := range t.Judgements {
			labels, place := told(j.Labels)
			one.Judgements = append(one.Judgements, JudgementReport{j.Clause, j.Require, j.Rule, labels, j.Verdict, j.Margin, j.UMargin, j.Unit, j.Probability, j.Reason, place})
		}
		r.Trials = append(r.Trials, one)
	}
	return r
}
