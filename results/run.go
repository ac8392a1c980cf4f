package results

import (
	"bufio"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"time"

	"github.com/gofrs/flock"
	"github.com/google/uuid"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/procedures"
	"proofrate/results/recording"
)

// RunStart is what is known before a run begins.
type RunStart struct {
	Started     time.Time // wall time
	Plan        *procedures.Plan
	Description *instruments.Description
	Identities  []instruments.Identified
	Operator    string
	Seed        uint64
	Build       BuildIdentity
	Trials      []TrialStart
}

// TrialStart says which gyro sits where.
type TrialStart struct {
	Slot         instruments.SlotID
	Part, Serial string
}

// RunEnd is what a run came to.
type RunEnd struct {
	Outcome, Reason           string // completed, stopped, bench-failed
	BenchSeconds, WallSeconds float64
	Trials                    []TrialEnd
}

// TrialEnd is what a trial came to.
type TrialEnd struct {
	Slot       instruments.SlotID
	Evaluation *procedures.Evaluation
	Reason     string
}

// BrokenOff is the outcome of a run whose process died.
const (
	BrokenOff    = "broken-off"
	brokenReason = "the program ended during the run"
)

// Sealed says where a run stands in the chain.
type Sealed struct {
	Number int
	Digest string
}

// OpenRun is a run that is being carried out. Its process holds the lock in the run's folder.
type OpenRun struct {
	ledger    *Ledger
	id        string
	evidence  runEvidence
	documents map[string][]byte
	folder    string // of its recordings, below recordings/
	lock      *flock.Flock
	events    *os.File
	sinks     []openSink
}

type openSink struct {
	slot   instruments.SlotID
	file   string
	writer *recording.Writer
}

// Files in a run's folder beside the recordings.
const (
	lockFile   = "open"
	eventsFile = "events.jsonl"
)

func (l *Ledger) recordings(parts ...string) string {
	return filepath.Join(append([]string{l.dir, "recordings"}, parts...)...)
}

// Begin opens a run: its row stands before its first recording.
func (l *Ledger) Begin(start RunStart) (*OpenRun, error) {
	id, err := uuid.NewV7()
	if err != nil {
		return nil, err
	}
	r := &OpenRun{ledger: l, id: id.String(), folder: id.String(), documents: documents(start)}
	r.evidence = evidenceOf(start, r.id)
	if err := os.MkdirAll(l.recordings(r.folder), 0o755); err != nil {
		return nil, fmt.Errorf("begin run: %w", err)
	}
	r.lock = flock.New(l.recordings(r.folder, lockFile))
	if held, err := r.lock.TryLock(); err != nil || !held {
		return nil, fmt.Errorf("begin run: the lock of its folder: %w", errors.Join(err, errors.New("it is held already")))
	}
	text, err := json.Marshal(r.evidence)
	if err != nil {
		return nil, err
	}
	if r.events, err = os.Create(l.recordings(r.folder, eventsFile)); err != nil {
		return nil, err
	}
	err = l.transaction(func(tx *sql.Tx) error {
		for digest, text := range r.documents {
			if _, err := tx.Exec("INSERT INTO documents (digest, text) VALUES (?,?) ON CONFLICT DO NOTHING", digest, text); err != nil {
				return err
			}
		}
		_, err := tx.Exec("INSERT INTO open_runs (run, start) VALUES (?,?)", r.id, string(text))
		return err
	})
	if err != nil {
		return nil, fmt.Errorf("begin run: %w", explained(err))
	}
	return r, nil
}

// documents are the texts that a run depends on, by digest.
func documents(start RunStart) map[string][]byte {
	texts := map[string][]byte{start.Plan.Digest: start.Plan.Text, start.Description.Digest: start.Description.Text}
	for _, i := range start.Description.Instruments {
		texts[i.ProfileDigest] = i.ProfileText
	}
	return texts
}

// ID is the run's (UUIDv7).
func (r *OpenRun) ID() string { return r.id }

// Note adds an event. It is in the operating system's hands at once, so that it survives the program.
func (r *OpenRun) Note(e Event) error {
	r.evidence.Events = append(r.evidence.Events, e)
	line, err := json.Marshal(e)
	if err != nil {
		return err
	}
	_, err = r.events.Write(append(line, '\n'))
	return err
}

// Sink makes a trial's recording file.
func (r *OpenRun) Sink(slot instruments.SlotID) (recording.Sink, error) {
	i := slices.IndexFunc(r.evidence.Trials, func(t trialEvidence) bool { return t.Slot == string(slot) })
	if i < 0 {
		return nil, fmt.Errorf("slot %s has no trial in this run", slot)
	}
	t := r.evidence.Trials[i]
	file := r.folder + "/" + fileName(t.Slot) + ".rec"
	w, err := recording.Create(r.ledger.recordings(filepath.FromSlash(file)), recording.FileHead{Slot: t.Slot, Part: t.Part, Serial: t.Serial})
	if err != nil {
		return nil, err
	}
	r.sinks = append(r.sinks, openSink{slot, file, w})
	return w, nil
}

// Seal closes the recordings and adds the run's entry to the chain.
func (r *OpenRun) Seal(end RunEnd) (Sealed, error) {
	e := &r.evidence
	e.Outcome, e.Reason, e.BenchSeconds, e.WallSeconds = end.Outcome, end.Reason, end.BenchSeconds, end.WallSeconds
	var failures []error
	for _, s := range r.sinks {
		seal, err := s.writer.Close()
		failures = append(failures, err)
		for i := range e.Trials {
			if e.Trials[i].Slot == string(s.slot) {
				e.Trials[i].stored(s.file, seal)
			}
		}
	}
	for _, t := range end.Trials {
		for i := range e.Trials {
			if e.Trials[i].Slot == string(t.Slot) {
				e.Trials[i].Reason = t.Reason
				if t.Evaluation != nil {
					e.Trials[i].evaluated(t.Evaluation)
				}
			}
		}
	}
	sealed, err := r.ledger.sealRun(e)
	failures = append(failures, err, r.events.Close())
	if err == nil {
		os.Remove(r.ledger.recordings(r.folder, eventsFile)) // they stand in the entry now
	}
	failures = append(failures, r.lock.Unlock())
	os.Remove(r.ledger.recordings(r.folder, lockFile))
	return sealed, errors.Join(failures...)
}

// sealRun makes the entry and its index in one transaction.
func (l *Ledger) sealRun(e *runEvidence) (Sealed, error) {
	l.seal.Lock()
	defer l.seal.Unlock()
	for i := range e.Trials {
		if e.Trials[i].Verdict == "" || e.Trials[i].Verdict == limits.Unset.String() {
			e.Trials[i].Verdict = limits.Void.String()
		}
		if e.Trials[i].Recording.Sections == nil {
			e.Trials[i].Recording.Sections = []sectionEvidence{}
		}
	}
	var made entry
	err := l.transaction(func(tx *sql.Tx) error {
		var err error
		if made, err = l.append(tx, e.Station, "run", e.Started, e); err != nil {
			return err
		}
		if err := index(tx, made); err != nil {
			return err
		}
		_, err = tx.Exec("DELETE FROM open_runs WHERE run = ?", e.Run)
		return err
	})
	if err != nil {
		return Sealed{}, explained(err)
	}
	return Sealed{made.number, made.digest}, nil
}

// sealBroken seals the runs whose process has died: their lock is free. What their recordings hold is kept whole; their
// trials are void.
func (l *Ledger) sealBroken() error {
	rows, err := l.write.Query("SELECT run, start FROM open_runs ORDER BY run")
	if err != nil {
		return err
	}
	starts := map[string]string{}
	var order []string
	for rows.Next() {
		var run, start string
		if err := rows.Scan(&run, &start); err != nil {
			return errors.Join(err, rows.Close())
		}
		starts[run], order = start, append(order, run)
	}
	if err := errors.Join(rows.Err(), rows.Close()); err != nil {
		return err
	}
	for _, run := range order {
		lock := flock.New(l.recordings(run, lockFile))
		if err := os.MkdirAll(l.recordings(run), 0o755); err != nil {
			return err
		}
		held, err := lock.TryLock()
		if err != nil {
			return err
		}
		if !held {
			continue // it is being carried out
		}
		err = l.sealOneBroken(starts[run])
		if err = errors.Join(err, lock.Unlock()); err != nil {
			return fmt.Errorf("seal run %s as broken off: %w", run, err)
		}
		os.Remove(l.recordings(run, lockFile))
		os.Remove(l.recordings(run, eventsFile))
	}
	return nil
}

func (l *Ledger) sealOneBroken(start string) error {
	var e runEvidence
	if err := json.Unmarshal([]byte(start), &e); err != nil {
		return err
	}
	e.Outcome, e.Reason = BrokenOff, brokenReason
	e.Events = readEvents(l.recordings(e.Run, eventsFile))
	if n := len(e.Events); n > 0 {
		e.BenchSeconds = e.Events[n-1].At
	}
	for i := range e.Trials {
		t := &e.Trials[i]
		t.Reason = e.Reason
		file := e.Run + "/" + fileName(t.Slot) + ".rec"
		found, err := recording.Open(l.recordings(filepath.FromSlash(file)))
		if err != nil {
			continue // the trial's first recording had not begun
		}
		info, err := os.Stat(l.recordings(filepath.FromSlash(file)))
		if err != nil {
			return err
		}
		seal := recording.Seal{SHA256: found.SHA256, Bytes: info.Size()}
		for _, r := range found.Recordings {
			seal.Sections = append(seal.Sections, recording.SectionSeal{Name: r.Name, Labels: r.Labels, SHA256: r.Digest, Samples: r.Len()})
		}
		t.stored(file, seal)
	}
	_, err := l.sealRun(&e)
	return err
}

// readEvents reads what was noted; a last line that was cut off is left out.
func readEvents(path string) []Event {
	events := []Event{}
	file, err := os.Open(path)
	if err != nil {
		return events
	}
	defer file.Close()
	for lines := bufio.NewScanner(file); lines.Scan(); {
		var e Event
		if json.Unmarshal(lines.Bytes(), &e) != nil {
			break
		}
		events = append(events, e)
	}
	return events
}
