package results

import (
	"bytes"
	"context"
	"crypto/ed25519"
	"crypto/sha256"
	"database/sql"
	"encoding/base64"
	"encoding/hex"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"proofrate/instruments"
	"proofrate/limits"
	"proofrate/limits/quantity"
	"proofrate/procedures"
	"proofrate/results/recording"
)

var degPerH = quantity.MustUnit("deg/h")

// started is a run's start, on a plan and a bench made by hand.
func started(serials ...string) RunStart {
	s := RunStart{Started: time.Date(2026, 3, 4, 5, 6, 7, 8, time.UTC), Operator: "N. Operator", Seed: 1<<63 + 7,
		Build: BuildIdentity{"v1", "go1", "any"},
		Plan: &procedures.Plan{Name: "short", Title: "A short one", Revision: "B", Specification: "LS-0417", Digest: "sha256:" + sha256Hex([]byte("steps")), Text: []byte("steps"),
			Parameters: []procedures.Parameter{{Name: "dwell", Value: quantity.Of(20, quantity.MustUnit("s")), Overridden: true}}},
		Description: &instruments.Description{Station: "hall-1", Name: "bench-1", Text: []byte("bench"), Digest: "sha256:" + sha256Hex([]byte("bench")),
			Instruments: []instruments.InstrumentDescription{{Name: "T1", Profile: "table", ProfileText: []byte("profile"), ProfileDigest: "sha256:" + sha256Hex([]byte("profile")),
				Calibrations: []instruments.Calibration{{Reading: "table.rate", Certificate: "7", K: 2}}}}},
		Identities: []instruments.Identified{{Name: "T1", Identity: instruments.Identity{Maker: "M", Model: "T", Serial: "9", Firmware: "1"}}},
	}
	for i, serial := range serials {
		s.Trials = append(s.Trials, TrialStart{instruments.SlotID(string(rune('A' + i))), "OG-9", serial})
	}
	return s
}

// evaluation has an accepted, a void and a rejected limit.
func evaluation(verdict limits.Verdict) *procedures.Evaluation {
	labels := recording.Labels{{Name: "temperature", Value: quantity.Of(23, quantity.MustUnit("degC")), Visit: 2}}
	bias := quantity.T(0.5, degPerH, []quantity.Line{{Name: "white noise", U: 0.01, Sensitivity: 1, Contribution: 0.01, DoF: math.Inf(1)}})
	return &procedures.Evaluation{Verdict: verdict,
		Figures: []procedures.FigureElement{{Name: "bias", Labels: labels, Measured: bias, Method: "bias"}, {Name: "gone", Measured: quantity.Voided(degPerH, "not made")}},
		Judgements: []procedures.Judgement{{Clause: "3.1", Require: "bias <= 2", Rule: "guarded", Labels: labels,
			Judgement: limits.Judgement{Verdict: limits.Accept, Margin: 1.5, UMargin: 0.01, Unit: degPerH, Probability: 1, Reason: "with bias"}},
			{Clause: "3.2", Require: "gone <= 2", Rule: "guarded",
				Judgement: limits.Judgement{Verdict: verdict, Margin: math.NaN(), UMargin: math.NaN(), Probability: math.NaN(), Reason: "not made"}}}}
}

// carriedOut makes a sealed run with a small recording in each slot.
func carriedOut(t testing.TB, l *Ledger, serials ...string) *OpenRun {
	t.Helper()
	r, err := l.Begin(started(serials...))
	if err != nil {
		t.Fatal(err)
	}
	end := RunEnd{Outcome: "completed", BenchSeconds: 100, WallSeconds: 1}
	for i := range serials {
		slot := instruments.SlotID(string(rune('A' + i)))
		record(t, r, slot)
		end.Trials = append(end.Trials, TrialEnd{Slot: slot, Evaluation: evaluation(limits.Void)})
	}
	if err := r.Note(Event{At: 3, Kind: "step", Step: "step 1", Text: "begins"}); err != nil {
		t.Fatal(err)
	}
	if _, err := r.Seal(end); err != nil {
		t.Fatal(err)
	}
	return r
}

func record(t testing.TB, r *OpenRun, slot instruments.SlotID) {
	t.Helper()
	sink, err := r.Sink(slot)
	if err != nil {
		t.Fatal(err)
	}
	id, err := sink.Begin(recording.Section{Name: "rest", SampleInterval: 0.01, Channels: []recording.Channel{{Name: "rate", Count: quantity.Of(1, degPerH)}}})
	if err != nil {
		t.Fatal(err)
	}
	if err := sink.Append(id, [][]int64{{5, 6, -7, 1 << 40}}, nil); err != nil {
		t.Fatal(err)
	}
	if err := sink.End(id, recording.Quality{Complete: true}); err != nil {
		t.Fatal(err)
	}
}

func opened(t testing.TB) (*Ledger, string) {
	t.Helper()
	dir := filepath.Join(t.TempDir(), "a ledger? 100%#")
	l, err := OpenLedger(dir, filepath.Join(t.TempDir(), "keys"))
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { l.Close() })
	return l, dir
}

func sound(t *testing.T, l *Ledger) {
	t.Helper()
	findings, err := l.Verify(context.Background())
	if err != nil || len(findings) > 0 {
		t.Fatalf("a sound ledger: %v, %v", findings, err)
	}
}

func TestRunIsSealedAndTold(t *testing.T) {
	l, _ := opened(t)
	r := carriedOut(t, l, "100", "101")
	carriedOut(t, l, "100")
	sound(t, l)
	ctx := context.Background()

	told, err := l.Show(ctx, r.ID())
	if err != nil {
		t.Fatal(err)
	}
	if !told.Sealed || told.Outcome != "completed" || len(told.Trials) != 2 || told.Number != 2 {
		t.Errorf("%+v", told)
	}
	f := told.Trials[0].Figures
	if *f[0].Value != 0.5 || f[0].DoF != nil || f[0].Labels["temperature"] != "23 degC" || f[0].Labels["temperature visit"] != 2 {
		t.Errorf("figure %+v", f[0])
	}
	if f[1].Value != nil || f[1].U != nil || f[1].Reason != "not made" {
		t.Errorf("void figure %+v", f[1])
	}
	for _, c := range []struct {
		filter Filter
		want   int
	}{{Filter{}, 3}, {Filter{Serial: "100"}, 2}, {Filter{Serial: "10*"}, 3}, {Filter{Serial: "10?"}, 0}, {Filter{Verdict: "accept"}, 0}, {Filter{Verdict: "void", Newest: 2}, 2},
		{Filter{Procedure: "short", Operator: "N. Operator", Part: "OG-*"}, 3}, {Filter{Since: time.Date(2027, 1, 1, 0, 0, 0, 0, time.UTC)}, 0}} {
		rows, err := l.History(ctx, c.filter)
		if err != nil || len(rows) != c.want {
			t.Errorf("%+v: %d rows, expected %d, %v", c.filter, len(rows), c.want, err)
		}
	}
	if _, err := l.Show(ctx, "0"); err == nil || !strings.Contains(err.Error(), "several runs") {
		t.Errorf("an ambiguous beginning: %v", err)
	}
}

// TestReportIsTheAgreedObject: the members of `run --json` and of `history --json`.
func TestReportIsTheAgreedObject(t *testing.T) {
	l, _ := opened(t)
	r := carriedOut(t, l, "100")
	told, err := l.Show(context.Background(), r.ID())
	if err != nil {
		t.Fatal(err)
	}
	members := func(v any) string {
		p, err := json.Marshal(v)
		if err != nil {
			t.Fatal(err)
		}
		d := json.NewDecoder(bytes.NewReader(p))
		var names []string
		for depth := 0; ; {
			token, err := d.Token()
			if err != nil {
				return strings.Join(names, " ")
			}
			switch token := token.(type) {
			case json.Delim:
				if token == '{' || token == '[' {
					depth++
				} else {
					depth--
				}
			case string:
				if depth == 1 {
					names = append(names, token)
					var skip json.RawMessage
					if err := d.Decode(&skip); err != nil {
						t.Fatal(err)
					}
				}
			}
		}
	}
	rows, _ := l.History(context.Background(), Filter{})
	for _, c := range []struct {
		v    any
		want string
	}{
		{told, "run outcome sealed seal procedure bench_seconds wall_seconds trials"},
		{told.Procedure, "name revision digest"},
		{told.Trials[0], "slot part serial verdict figures judgements"},
		{told.Trials[0].Figures[0], "name labels value unit u dof low high reason"},
		{told.Trials[0].Judgements[0], "clause require rule labels verdict margin u_margin unit probability reason"},
		{rows[0], "run started procedure revision slot part serial operator verdict"},
	} {
		if got := members(c.v); got != c.want {
			t.Errorf("%T has %q, agreed is %q", c.v, got, c.want)
		}
	}
}

// TestVerifierFromSEAL is a verifier written from SEAL.md alone, on plain SQL and the standard library.
func TestVerifierFromSEAL(t *testing.T) {
	l, dir := opened(t)
	carriedOut(t, l, "100", "101")
	carriedOut(t, l, "102")
	rows, err := l.read.Query("SELECT station, number, kind, text, before, digest, key, signature FROM entries ORDER BY station, number")
	if err != nil {
		t.Fatal(err)
	}
	defer rows.Close()
	before, number, files := strings.Repeat("0", 64), 0, 0
	keys := map[string][]byte{}
	for rows.Next() {
		var station, kind, text, b, digest, key, signature string
		var n int
		if err := rows.Scan(&station, &n, &kind, &text, &b, &digest, &key, &signature); err != nil {
			t.Fatal(err)
		}
		number++
		raw, _ := hex.DecodeString(b)
		sum := sha256.Sum256(append(raw, text...))
		if n != number || b != before || hex.EncodeToString(sum[:]) != digest {
			t.Errorf("entry %d does not chain", n)
		}
		before = digest
		var object map[string]any
		if err := json.Unmarshal([]byte(text), &object); err != nil || object["kind"] != kind || object["station"] != station {
			t.Errorf("entry %d: %v", n, err)
		}
		if kind == "key" {
			public, _ := base64.StdEncoding.DecodeString(object["public"].(string))
			print := sha256.Sum256(public)
			keys[hex.EncodeToString(print[:])] = public
		}
		sealed, _ := base64.StdEncoding.DecodeString(signature)
		if !ed25519.Verify(keys[key], sum[:], sealed) {
			t.Errorf("entry %d: the signature does not fit", n)
		}
		if kind != "run" {
			continue
		}
		for _, trial := range object["trials"].([]any) {
			want := trial.(map[string]any)["recording"].(map[string]any)
			p, err := os.ReadFile(filepath.Join(dir, "recordings", want["file"].(string)))
			sum := sha256.Sum256(p)
			if err != nil || hex.EncodeToString(sum[:]) != want["sha256"] || float64(len(p)) != want["bytes"] {
				t.Errorf("recording %v: %v", want["file"], err)
			}
			files++
		}
	}
	if number != 3 || files != 3 {
		t.Errorf("%d entries and %d files were verified", number, files)
	}
}

// TestCourtesy: the ledger's own connection refuses change.
func TestCourtesy(t *testing.T) {
	l, _ := opened(t)
	carriedOut(t, l, "100")
	for _, do := range []string{"DELETE FROM figures", "UPDATE runs SET operator = 'x'", "INSERT OR REPLACE INTO entries SELECT * FROM entries LIMIT 1", "UPDATE OR REPLACE entries SET number = 1 WHERE number = 2"} {
		if _, err := l.write.Exec(do); err == nil || !strings.Contains(err.Error(), "keeps what it has") {
			t.Errorf("%s: %v", do, err)
		}
	}
	if _, err := l.read.Exec("DELETE FROM figures"); err == nil {
		t.Error("a reader wrote")
	}
	sound(t, l)
}

// TestBrokenOff: a run whose process has died is sealed at the next opening, its recordings whole as far as they go; a
// run whose process lives is left alone.
func TestBrokenOff(t *testing.T) {
	dir, keys := filepath.Join(t.TempDir(), "ledger"), filepath.Join(t.TempDir(), "keys")
	l, err := OpenLedger(dir, keys)
	if err != nil {
		t.Fatal(err)
	}
	r, err := l.Begin(started("100"))
	if err != nil {
		t.Fatal(err)
	}
	record(t, r, "A")
	r.Note(Event{At: 42, Kind: "step", Text: "begins"})

	again, err := OpenLedger(dir, keys)
	if err != nil {
		t.Fatal(err)
	}
	if rows, _ := again.History(context.Background(), Filter{}); len(rows) != 1 || rows[0].Verdict != "open" {
		t.Errorf("while it goes on: %+v", rows)
	}
	again.Close()

	r.lock.Unlock() // as when the process dies
	if rows, _ := l.History(context.Background(), Filter{}); len(rows) != 1 || rows[0].Verdict != "void" || rows[0].Outcome != BrokenOff {
		t.Errorf("after its process has died: %+v", rows)
	}
	again, err = OpenLedger(dir, keys)
	if err != nil {
		t.Fatal(err)
	}
	defer again.Close()
	told, err := again.Show(context.Background(), r.ID())
	if err != nil || told.Outcome != "broken-off" || !told.Sealed || told.BenchSeconds != 42 || told.Trials[0].Verdict != "void" {
		t.Fatalf("%+v, %v", told, err)
	}
	sound(t, again)
	l.Close()
}

// TestManyOpenAtOnce: of several programs that make a ledger and run at once, all succeed and the chain is whole.
func TestManyOpenAtOnce(t *testing.T) {
	dir, keys := filepath.Join(t.TempDir(), "ledger"), filepath.Join(t.TempDir(), "keys")
	failures := make(chan error, 8)
	for i := range cap(failures) {
		go func() {
			l, err := OpenLedger(dir, keys)
			if err == nil {
				var r *OpenRun
				if r, err = l.Begin(started(fmt.Sprint(i))); err == nil {
					_, err = r.Seal(RunEnd{Outcome: "completed"})
				}
				l.Close()
			}
			failures <- err
		}()
	}
	for range cap(failures) {
		if err := <-failures; err != nil {
			t.Error(err)
		}
	}
	l, err := ReadLedger(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	sound(t, l)
	if rows, _ := l.History(context.Background(), Filter{}); len(rows) != cap(failures) {
		t.Errorf("%d trials", len(rows))
	}
}

// TestForeignDatabases are refused and left as they are.
func TestForeignDatabases(t *testing.T) {
	for name, make := range map[string]func(path string) error{
		"text": func(path string) error {
			return os.WriteFile(path, []byte("hello, this is no database at all......"), 0o644)
		},
		"folder": func(path string) error { return os.Mkdir(path, 0o755) },
		"other": func(path string) error {
			db, err := sql.Open("sqlite3", path)
			if err == nil {
				_, err = db.Exec("CREATE TABLE mine (x)")
				db.Close()
			}
			return err
		},
		"newer": func(path string) error {
			db, err := sql.Open("sqlite3", path)
			if err == nil {
				_, err = db.Exec(fmt.Sprintf("PRAGMA application_id = %d; PRAGMA user_version = 99", applicationID))
				db.Close()
			}
			return err
		},
	} {
		dir := t.TempDir()
		if err := make(filepath.Join(dir, "ledger.db")); err != nil {
			t.Fatal(err)
		}
		l, err := OpenLedger(dir, t.TempDir())
		if err == nil {
			l.Close()
			t.Errorf("%s was opened", name)
		} else if !strings.Contains(err.Error(), "ledger") {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// TestPragmasHoldOnEveryConnection: what the address asks for is what each connection has.
func TestPragmasHoldOnEveryConnection(t *testing.T) {
	l, _ := opened(t)
	for range 3 {
		conn, err := l.read.Conn(context.Background())
		if err != nil {
			t.Fatal(err)
		}
		defer conn.Close()
		for pragma, want := range map[string]int{"foreign_keys": 1, "query_only": 1, "busy_timeout": 10000} {
			var got int
			if err := conn.QueryRowContext(context.Background(), "PRAGMA "+pragma).Scan(&got); err != nil || got != want {
				t.Errorf("%s is %d, %v", pragma, got, err)
			}
		}
	}
	for pragma, want := range map[string]int{"foreign_keys": 1, "synchronous": 2, "recursive_triggers": 1} {
		var got int
		if err := l.write.QueryRow("PRAGMA " + pragma).Scan(&got); err != nil || got != want {
			t.Errorf("writer: %s is %d, %v", pragma, got, err)
		}
	}
}

// TestViewsAreAsDocumented: README.md names every view's columns.
func TestViewsAreAsDocumented(t *testing.T) {
	l, _ := opened(t)
	carriedOut(t, l, "100")
	text, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	for view, want := range map[string]int{"trials": 1, "figures_by_trial": 2, "judgements_by_trial": 2} {
		rows, err := dump(l.read.Query("SELECT * FROM " + view))
		if err != nil || len(rows) != want {
			t.Errorf("%s: %d rows, %v", view, len(rows), err)
		}
		found, err := l.read.Query("SELECT * FROM " + view)
		if err != nil {
			t.Fatal(err)
		}
		columns, err := found.Columns()
		found.Close()
		if err != nil {
			t.Fatal(err)
		}
		if !strings.Contains(string(text), "| `"+view+"` |") || !strings.Contains(string(text), "| "+strings.Join(columns, ", ")+" |") {
			t.Errorf("README.md does not say that %s has the columns %s", view, strings.Join(columns, ", "))
		}
	}
}

// TestNonFiniteIsRefused: SQLite would store NaN as NULL in silence.
func TestNonFiniteIsRefused(t *testing.T) {
	l, _ := opened(t)
	r, err := l.Begin(started("100"))
	if err != nil {
		t.Fatal(err)
	}
	if _, err := r.Seal(RunEnd{Outcome: "completed", BenchSeconds: math.NaN()}); err == nil {
		t.Error("a run of NaN seconds was sealed")
	}
}

// TestKeyIsKeptPrivately: outside the ledger, for its owner only, and the same for the next run.
func TestKeyIsKeptPrivately(t *testing.T) {
	l, dir := opened(t)
	carriedOut(t, l, "1")
	carriedOut(t, l, "2")
	info, err := os.Stat(filepath.Join(l.keyDir, "hall-1.ed25519"))
	if err != nil || info.Mode().Perm() != 0o600 || strings.HasPrefix(l.keyDir, dir) {
		t.Errorf("%v, %v", info, err)
	}
	var keys int
	if err := l.read.QueryRow("SELECT count(DISTINCT key) FROM entries").Scan(&keys); err != nil || keys != 1 {
		t.Errorf("%d keys, %v", keys, err)
	}
}
