//go:build unix

package main

import (
	"bytes"
	"encoding/json"
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
func TestPortsGiveTheSameFigures(t *testing.T) {
	dir := t.TempDir()
	program := filepath.Join(dir, "proofrate")
	if text, err := exec.Command("go", "build", "-o", program, ".").CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, text)
	}
	env := append(os.Environ(), "XDG_CONFIG_HOME="+filepath.Join(dir, "config"))
	file := filepath.Join(dir, "ports.yaml")
	var said bytes.Buffer
	server := exec.Command(program, "virtual", "--pace", "25", "--seed", "5", "--to", file)
	server.Env, server.Stderr = env, &said
	if err := server.Start(); err != nil {
		t.Fatal(err)
	}
	ended := make(chan error, 1)
	go func() { ended <- server.Wait() }()
	for i := 0; ; i++ {
		if text, err := os.ReadFile(file); err == nil && strings.Contains(string(text), "pace: 25") {
			break
		}
		if i == 1000 {
			server.Process.Kill()
			t.Fatalf("no bench file was written: %s", said.String())
		}
		time.Sleep(10 * time.Millisecond)
	}
	run := func(args ...string) []results.FigureReport {
		c := exec.Command(program, append([]string{"run", tiny, "--json", "--part", "OG-250", "--gyro", "B=7"}, args...)...)
		var out, progress bytes.Buffer
		c.Env, c.Stdout, c.Stderr = env, &out, &progress
		if err := c.Run(); err != nil {
			t.Fatalf("%v: %s", err, progress.String())
		}
		var report results.RunReport
		if err := json.Unmarshal(out.Bytes(), &report); err != nil {
			t.Fatal(err)
		}
		return report.Trials[0].Figures
	}
	overPorts := run("--bench", file, "--ledger", filepath.Join(dir, "a"))
	inMemory := run("--seed", "5", "--ledger", filepath.Join(dir, "b"))
	agree(t, overPorts, inMemory)

	if err := server.Process.Signal(os.Interrupt); err != nil {
		t.Fatal(err)
	}
	select {
	case err := <-ended:
		if err != nil {
			t.Errorf("virtual ended with %v: %s", err, said.String())
		}
	case <-time.After(10 * time.Second):
		server.Process.Kill()
		t.Error("virtual did not end on Ctrl-C")
	}
}
