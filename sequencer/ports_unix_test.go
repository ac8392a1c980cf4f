//go:build unix

package main

import (
	"bytes"
	"encoding/json"
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"proofrate/results"
)

// TestPortsGiveTheSameFigures drives a procedure over pseudo-terminals and TCP, through the real serial driver, against
// the virtual bench offered by another process, and compares with the run in memory of the same seed.
//
// A busy machine may not keep the pace: an answer is late, or frames are lost on a line that nobody empties, and the run
// says so. Then the bench is offered again at a slower pace; the figures of a run that came through must agree.
func TestPortsGiveTheSameFigures(t *testing.T) {
	program := filepath.Join(t.TempDir(), "proofrate")
	if text, err := exec.Command("go", "build", "-o", program, ".").CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, text)
	}
	inMemory, err := portsRun(t, program, "--seed", "5")
	if err != nil {
		t.Fatal(err)
	}
	for _, pace := range []string{"10", "5", "2"} {
		file, end := offered(t, program, pace)
		overPorts, err := portsRun(t, program, "--bench", file)
		end()
		if err == nil {
			agree(t, overPorts, inMemory)
			return
		}
		t.Logf("at pace %s: %v", pace, err)
	}
	t.Error("no run over ports came through")
}

// offered starts the virtual bench in a process of its own and gives its bench file and what ends it, which it must do
// without complaint.
func offered(t *testing.T, program, pace string) (file string, end func()) {
	t.Helper()
	file = filepath.Join(t.TempDir(), "ports.yaml")
	var said bytes.Buffer
	server := exec.Command(program, "virtual", "--pace", pace, "--seed", "5", "--to", file)
	server.Stderr = &said
	if err := server.Start(); err != nil {
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() { ended <- server.Wait() }()
	for i := 0; ; i++ {
		if text, err := os.ReadFile(file); err == nil && strings.Contains(string(text), "pace: "+pace) {
			break
		}
		if i == 1000 {
			server.Process.Kill()
			t.Fatalf("no bench file was written: %s", said.String())
		}
		time.Sleep(10 * time.Millisecond)
	}
	return file, func() {
		if err := server.Process.Signal(os.Interrupt); err != nil {
			t.Error(err)
		}
		select {
		case err := <-ended:
			if err != nil {
				t.Errorf("virtual ended with %v: %s", err, said.String())
			}
		case <-time.After(20 * time.Second):
			server.Process.Kill()
			t.Error("virtual did not end on Ctrl-C")
		}
	}
}

// portsRun carries out the procedure on the gyro of slot B and gives its figures.
func portsRun(t *testing.T, program string, args ...string) ([]results.FigureReport, error) {
	t.Helper()
	dir := t.TempDir()
	c := exec.Command(program, append([]string{"run", "../testdata/procedures/ports-optical.yaml", "--json", "--part", "OG-250", "--gyro", "B=7",
		"--ledger", filepath.Join(dir, "ledger")}, args...)...)
	var out, said bytes.Buffer
	c.Env, c.Stdout, c.Stderr = append(os.Environ(), "XDG_CONFIG_HOME="+filepath.Join(dir, "config")), &out, &said
	if err := c.Run(); err != nil {
		return nil, fmt.Errorf("%w: %s %s", err, said.String(), out.String())
	}
	var report results.RunReport
	if err := json.Unmarshal(out.Bytes(), &report); err != nil {
		return nil, err
	}
	return report.Trials[0].Figures, nil
}
