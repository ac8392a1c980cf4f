package main

import (
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"
	"time"

	"errors"

	"github.com/rogpeppe/go-internal/testscript"
)

func TestMain(m *testing.M) { testscript.Main(m, map[string]func(){"proofrate": main}) }

// TestScripts runs the program itself, as a process, through the scripts in testdata/script.
func TestScripts(t *testing.T) {
	root, err := filepath.Abs("..")
	if err != nil {
		t.Fatal(err)
	}
	testscript.Run(t, testscript.Params{
		Dir: "testdata/script", RequireExplicitExec: true, RequireUniqueNames: true,
		Setup: func(e *testscript.Env) error {
			// The station's key is made in the script's own folder.
			e.Setenv("XDG_CONFIG_HOME", filepath.Join(e.WorkDir, "config"))
			e.Setenv("HOME", e.WorkDir)
			e.Setenv("TESTDATA", filepath.Join(root, "testdata"))
			return nil
		},
		Cmds: map[string]func(*testscript.TestScript, bool, []string){"exits": exits, "repeat": repeat, "await": await, "within": within},
	})
}

// exits runs a command and compares its exit code: exits 2 proofrate check x.yaml
func exits(ts *testscript.TestScript, neg bool, args []string) {
	err, got := ts.Exec(args[1], args[2:]...), 0
	if exit, ok := errors.AsType[*exec.ExitError](err); ok {
		got = exit.ExitCode()
	} else {
		ts.Check(err)
	}
	if neg || strconv.Itoa(got) != args[0] {
		ts.Fatalf("exit code %d, want %s", got, args[0])
	}
}

// repeat makes a file of a text many times over: repeat brackets.yaml 1048576 [
func repeat(ts *testscript.TestScript, _ bool, args []string) {
	n, err := strconv.Atoi(args[1])
	ts.Check(err)
	ts.Check(os.WriteFile(ts.MkAbs(args[0]), []byte(strings.Repeat(args[2], n)), 0o644))
}

// await waits until a file or folder matches a pattern, ten seconds at most: await ledger/recordings/*/A.rec
func await(ts *testscript.TestScript, _ bool, args []string) {
	for range 1000 {
		if found, _ := filepath.Glob(ts.MkAbs(args[0])); len(found) > 0 {
			return
		}
		time.Sleep(10 * time.Millisecond)
	}
	ts.Fatalf("nothing matched %s", args[0])
}

// within runs a command that must fail with exit code 2 within a second; the second is that of the requirement that
// bad input is refused at once, with a factor of ten for a busy machine.
func within(ts *testscript.TestScript, _ bool, args []string) {
	began := time.Now()
	exits(ts, false, append([]string{"2"}, args...))
	if took := time.Since(began); took > 10*time.Second {
		ts.Fatalf("took %s", took)
	}
}
