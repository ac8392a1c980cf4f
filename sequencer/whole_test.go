package main

import (
	"bytes"
	"context"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
	"time"

	"proofrate/results"
)

// proof is what a run leaves behind that must not depend on when and where it was made.
type proof struct {
	figures    string            // figures and judgements of all trials, as JSON
	recordings map[string][]byte // slot -> file
}

// ran carries out a procedure and gathers the proof.
func ran(t testing.TB, args ...string) proof {
	t.Helper()
	dir := t.TempDir()
	t.Setenv("XDG_CONFIG_HOME", t.TempDir())
	var out, progress bytes.Buffer
	if code := proofrate(append([]string{"run", "--json", "--ledger", dir}, args...), &out, &progress); code > exitNotAccepted {
		t.Fatalf("exit code %d: %s", code, progress.String())
	}
	var report results.RunReport
	if err := json.Unmarshal(out.Bytes(), &report); err != nil {
		t.Fatal(err)
	}
	told, err := json.Marshal(report.Trials)
	if err != nil {
		t.Fatal(err)
	}
	p := proof{figures: string(told), recordings: map[string][]byte{}}
	files, err := filepath.Glob(filepath.Join(dir, "recordings", "*", "*.rec"))
	if err != nil || len(files) == 0 {
		t.Fatalf("%d recordings, %v", len(files), err)
	}
	for _, file := range files {
		if p.recordings[filepath.Base(file)], err = os.ReadFile(file); err != nil {
			t.Fatal(err)
		}
	}
	return p
}

func (p proof) same(q proof) bool {
	if p.figures != q.figures || len(p.recordings) != len(q.recordings) {
		return false
	}
	for slot, file := range p.recordings {
		if !bytes.Equal(file, q.recordings[slot]) {
			return false
		}
	}
	return true
}

const tiny = "../testdata/procedures/tiny-optical.yaml"

// TestEqualSeedsEqualBytes: the same seed gives the same recordings, byte for byte, and the same figures, on one, two
// and seven processors; another seed gives others.
func TestEqualSeedsEqualBytes(t *testing.T) {
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(0))
	var first proof
	for i, processors := range []int{1, 2, 7} {
		runtime.GOMAXPROCS(processors)
		got := ran(t, tiny, "--seed", "1")
		if i == 0 {
			first = got
		} else if !got.same(first) {
			t.Errorf("on %d processors another proof came about", processors)
		}
	}
	other := ran(t, tiny, "--seed", "2")
	if other.figures == first.figures {
		t.Error("another seed gave the same figures")
	}
	for slot := range first.recordings {
		if bytes.Equal(first.recordings[slot], other.recordings[slot]) {
			t.Errorf("another seed gave the same recording %s", slot)
		}
	}
}

// TestWholeLedgerVerifies: what a run leaves is sound, and one byte of a recording changed is not.
func TestWholeLedgerVerifies(t *testing.T) {
	dir := t.TempDir()
	t.Setenv("XDG_CONFIG_HOME", t.TempDir())
	var out bytes.Buffer
	proofrate([]string{"run", tiny, "--ledger", dir}, &out, &out)
	ledger, err := results.ReadLedger(dir)
	if err != nil {
		t.Fatal(err)
	}
	defer ledger.Close()
	if findings, err := ledger.Verify(context.Background()); err != nil || len(findings) > 0 {
		t.Fatal(findings, err)
	}
	files, _ := filepath.Glob(filepath.Join(dir, "recordings", "*", "B.rec"))
	text, err := os.ReadFile(files[0])
	if err != nil {
		t.Fatal(err)
	}
	text[len(text)/2] ^= 4
	if err := os.WriteFile(files[0], text, 0o644); err != nil {
		t.Fatal(err)
	}
	findings, err := ledger.Verify(context.Background())
	if err != nil || len(findings) != 1 || !strings.Contains(findings[0].Where, "B.rec") {
		t.Error(findings, err)
	}
}

// agree compares figures of two runs of the same virtual bench: each element within three combined uncertainties. A
// figure without uncertainty must be equal.
func agree(t *testing.T, a, b []results.FigureReport) {
	t.Helper()
	if len(a) != len(b) || len(a) == 0 {
		t.Fatalf("%d and %d figures", len(a), len(b))
	}
	for i := range a {
		if a[i].Value == nil || b[i].Value == nil {
			t.Errorf("%s is void: %s %s", a[i].Name, a[i].Reason, b[i].Reason)
			continue
		}
		if apart := math.Abs(*a[i].Value - *b[i].Value); apart > 3*math.Hypot(*a[i].U, *b[i].U) {
			t.Errorf("%s: %g and %g, u %g and %g", a[i].Name, *a[i].Value, *b[i].Value, *a[i].U, *b[i].U)
		}
	}
}

// BenchmarkWholeAcceptance carries out the shipped procedure unshortened: four gyros, through bytes, ledger on disk.
func BenchmarkWholeAcceptance(b *testing.B) {
	b.Setenv("XDG_CONFIG_HOME", b.TempDir())
	for b.Loop() {
		began := time.Now()
		var out, progress bytes.Buffer
		if code := proofrate([]string{"run", "fibre-optic-rate", "--json", "--ledger", b.TempDir()}, &out, &progress); code != exitNotAccepted {
			b.Fatalf("exit code %d: %s", code, progress.String())
		}
		var report results.RunReport
		if err := json.Unmarshal(out.Bytes(), &report); err != nil {
			b.Fatal(err)
		}
		b.ReportMetric(report.BenchSeconds/3600, "bench-hours")
		b.ReportMetric(report.BenchSeconds/time.Since(began).Seconds(), "bench-s/wall-s")
	}
}
