package results

import (
	"database/sql"
	"encoding/json"
	"time"
)

// index derives the tables from an entry's text. It is the only writer of them, so that verify can derive them anew.
func index(tx *sql.Tx, made entry) error {
	if made.kind != "run" {
		return nil
	}
	var e runEvidence
	if err := json.Unmarshal([]byte(made.text), &e); err != nil {
		return err
	}
	started, err := time.Parse(time.RFC3339Nano, e.Started)
	if err != nil {
		return err
	}
	w := rowWriter{tx: tx}
	w.row("runs", e.Run, made.station, made.number, started.UnixNano(), e.Procedure.Name, e.Procedure.Revision, e.Procedure.Specification,
		e.Procedure.Digest, e.Bench.Name, e.Bench.Digest, e.Operator, seedText(e.Seed), e.Build.Version, e.Build.Go, e.Build.Architecture,
		e.Outcome, e.Reason, e.BenchSeconds, e.WallSeconds)
	for _, p := range e.Parameters {
		w.row("parameters", e.Run, p.Name, p.Value, p.Overridden)
	}
	for _, i := range e.Instruments {
		w.row("instruments", e.Run, i.Name, i.Profile, i.ProfileDigest, i.Maker, i.Model, i.Serial, i.Firmware)
	}
	for _, t := range e.Trials {
		w.row("trial_index", e.Run, t.Slot, t.Part, t.Serial, t.Verdict, t.Reason, t.Recording.File, t.Recording.SHA256, t.Recording.Bytes)
		for n, s := range t.Recording.Sections {
			w.row("recordings", e.Run, t.Slot, n, s.Name, labelText(s.Labels), s.Samples, s.SHA256)
		}
		for n, f := range t.Figures {
			budget, err := json.Marshal(f.Budget)
			if err != nil {
				return err
			}
			w.row("figures", e.Run, t.Slot, n, f.Name, labelText(f.Labels), f.Method, f.Value, f.Unit, f.U, f.DoF, f.Low, f.High, f.Family, string(budget), f.Reason)
		}
		for n, j := range t.Judgements {
			w.row("judgements", e.Run, t.Slot, n, j.Clause, j.Require, j.Rule, labelText(j.Labels), j.Verdict, j.Margin, j.UMargin, j.Unit, j.Probability, j.Draws, j.Reason)
		}
	}
	for n, v := range e.Events {
		w.row("events", e.Run, n, v.At, v.Kind, string(v.Slot), v.Step, v.Text)
	}
	return w.err
}

func seedText(seed uint64) string {
	text, _ := json.Marshal(seed)
	return string(text)
}

// rowWriter inserts whole rows; the first failure stays.
type rowWriter struct {
	tx       *sql.Tx
	prepared map[string]*sql.Stmt
	err      error
}

func (w *rowWriter) row(table string, values ...any) {
	if w.err != nil {
		return
	}
	if w.prepared == nil {
		w.prepared = map[string]*sql.Stmt{}
	}
	statement := w.prepared[table]
	if statement == nil {
		marks := ""
		for i := range values {
			if i > 0 {
				marks += ","
			}
			marks += "?"
		}
		if statement, w.err = w.tx.Prepare("INSERT INTO " + table + " VALUES (" + marks + ")"); w.err != nil {
			return
		}
		w.prepared[table] = statement
	}
	_, w.err = statement.Exec(values...)
}
