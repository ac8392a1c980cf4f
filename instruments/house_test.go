package instruments_test

import (
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"io/fs"
	"maps"
	"os"
	"path"
	"path/filepath"
	"slices"
	"strings"
	"testing"
)

const module = "proofrate"

// arrows says which packages of the module each may import. An arrow to a package allows all that lies under it; a
// package that is not listed has no place in the house yet.
var arrows = map[string][]string{
	"limits/quantity":             {},
	"limits/source":               {},
	"limits/document":             {"limits/quantity", "limits/source"},
	"limits":                      {"limits/quantity", "limits/source"},
	"instruments":                 {"limits/quantity"},
	"instruments/instrumentstest": {"instruments/link"},
	"instruments/link":            {"instruments"},
	"instruments/profile":         {"instruments/link", "limits/document"},
	"instruments/virtual":         {"instruments/link", "limits/document"},
	"instruments/bench":           {"instruments/profile", "instruments/virtual"},
	"results/recording":           {"limits/quantity"},
	"results/reduce":              {"limits/quantity", "results/recording"},
	"procedures":                  {"limits/document", "limits", "results/reduce", "results/recording", "instruments"},
	"results":                     {"procedures", "results/recording"},
	"results/report":              {"results"},
	"sequencer/engine":            {"instruments", "procedures", "results/recording", "results"},
	"sequencer/minder":            {"instruments/bench", "results"},
	"sequencer/rehearsal":         {"sequencer/engine", "instruments/virtual"},
	"sequencer/console":           {"sequencer/engine", "sequencer/rehearsal", "results/report", "instruments/bench"},
	"sequencer": {"sequencer/engine", "sequencer/minder", "sequencer/rehearsal", "sequencer/console",
		"instruments/bench", "results/report"},
}

// sourceFile is one Go file of the module.
type sourceFile struct {
	path string // from the module's root
	dir  string // "instruments/link"
	test bool
	tree *ast.File
}

func moduleFiles(t *testing.T) (*token.FileSet, []sourceFile) {
	t.Helper()
	root := ".."
	set := token.NewFileSet()
	var files []sourceFile
	err := filepath.WalkDir(root, func(name string, entry fs.DirEntry, err error) error {
		if err != nil {
			return err
		}
		if entry.IsDir() {
			if base := entry.Name(); base == "testdata" || strings.HasPrefix(base, ".") && base != ".." {
				return filepath.SkipDir
			}
			return nil
		}
		if !strings.HasSuffix(name, ".go") {
			return nil
		}
		relative, err := filepath.Rel(root, name)
		if err != nil {
			return err
		}
		relative = filepath.ToSlash(relative)
		text, err := os.ReadFile(name)
		if err != nil {
			return err
		}
		tree, err := parser.ParseFile(set, relative, text, parser.SkipObjectResolution)
		if err != nil {
			return err
		}
		files = append(files, sourceFile{relative, path.Dir(relative), strings.HasSuffix(relative, "_test.go"), tree})
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	if len(files) < 20 {
		t.Fatalf("only %d Go files found from %s", len(files), root)
	}
	return set, files
}

// TestArrowsNeverPointUp holds every import of the module against the table of who imports whom.
func TestArrowsNeverPointUp(t *testing.T) {
	_, files := moduleFiles(t)
	for _, finding := range importFindings(files, arrows) {
		t.Error(finding)
	}
}

func importFindings(files []sourceFile, arrows map[string][]string) []string {
	var findings []string
	for _, file := range files {
		if file.test {
			continue // tests look at everything
		}
		may, known := reach(arrows, file.dir)
		if !known {
			findings = append(findings, fmt.Sprintf("%s: package %s has no place in the house: put its arrows in the table of house_test.go", file.path, file.dir))
			continue
		}
		for _, spec := range file.tree.Imports {
			name, ours := strings.CutPrefix(strings.Trim(spec.Path.Value, `"`), module+"/")
			if ours && !may[name] {
				findings = append(findings, fmt.Sprintf("%s: %s must not import %s", file.path, file.dir, name))
			}
		}
	}
	return findings
}

// reach is all that lies under a package in the table.
func reach(arrows map[string][]string, dir string) (map[string]bool, bool) {
	direct, known := arrows[dir]
	all := map[string]bool{}
	for _, under := range direct {
		all[under] = true
		deeper, _ := reach(arrows, under)
		maps.Copy(all, deeper)
	}
	return all, known
}

// wallTime is what reads or waits for the wall's time.
var wallTime = map[string][]string{
	"time":    {"Now", "Sleep", "After", "Tick", "NewTimer", "NewTicker", "AfterFunc", "Since", "Until"},
	"context": {"WithTimeout", "WithDeadline", "WithTimeoutCause", "WithDeadlineCause"},
}

// TestTimeComesFromTheClock: only links, the program's main package and tests know the wall's time.
func TestTimeComesFromTheClock(t *testing.T) {
	set, files := moduleFiles(t)
	for _, file := range files {
		if file.test || file.dir == "instruments/link" || file.dir == "sequencer" {
			continue
		}
		for _, finding := range timeFindings(set, file.tree) {
			t.Error(finding)
		}
	}
}

func timeFindings(set *token.FileSet, tree *ast.File) []string {
	names := map[string]string{} // as imported here -> package
	for _, spec := range tree.Imports {
		imported := strings.Trim(spec.Path.Value, `"`)
		if wallTime[imported] == nil {
			continue
		}
		name := imported
		if spec.Name != nil {
			name = spec.Name.Name
		}
		names[name] = imported
	}
	var findings []string
	if imported, dotted := names["."]; dotted {
		findings = append(findings, fmt.Sprintf("%s: imports %s with a dot, which hides its calls", set.Position(tree.Pos()).Filename, imported))
	}
	ast.Inspect(tree, func(n ast.Node) bool {
		selector, ok := n.(*ast.SelectorExpr)
		if !ok {
			return true
		}
		name, ok := selector.X.(*ast.Ident)
		if ok && slices.Contains(wallTime[names[name.Name]], selector.Sel.Name) {
			findings = append(findings, fmt.Sprintf("%s: %s.%s: time comes from the Clock", set.Position(n.Pos()), name.Name, selector.Sel.Name))
		}
		return true
	})
	return findings
}

// TestTruthStaysHidden: only rehearsal, and tests, see what the virtual bench knows of its gyros.
func TestTruthStaysHidden(t *testing.T) {
	set, files := moduleFiles(t)
	for _, file := range files {
		if file.test || file.dir == "instruments/virtual" || file.dir == "sequencer/rehearsal" {
			continue
		}
		for _, finding := range truthFindings(set, file.tree) {
			t.Error(finding)
		}
	}
}

func truthFindings(set *token.FileSet, tree *ast.File) []string {
	var findings []string
	ast.Inspect(tree, func(n ast.Node) bool {
		if selector, ok := n.(*ast.SelectorExpr); ok && selector.Sel.Name == "Truth" {
			findings = append(findings, fmt.Sprintf("%s: the truth of a virtual gyro is for rehearsal and tests", set.Position(n.Pos())))
		}
		return true
	})
	return findings
}

// TestHouseRulesAreFelt gives each rule a file that breaks it.
func TestHouseRulesAreFelt(t *testing.T) {
	parse := func(dir, text string) (*token.FileSet, sourceFile) {
		set := token.NewFileSet()
		tree, err := parser.ParseFile(set, dir+"/x.go", text, 0)
		if err != nil {
			t.Fatal(err)
		}
		return set, sourceFile{dir + "/x.go", dir, false, tree}
	}
	cases := []struct {
		name, dir, text, want string
	}{
		{"up", "limits", `package limits; import _ "proofrate/results/reduce"`, "limits must not import results/reduce"},
		{"down twice", "instruments/bench", `package bench; import _ "proofrate/limits/quantity"`, ""},
		{"sideways", "sequencer/engine", `package engine; import _ "proofrate/instruments/link"`, "sequencer/engine must not import instruments/link"},
		{"unknown", "results/attic", `package attic`, "has no place in the house"},
		{"now", "limits", `package limits; import "time"; var t = time.Now()`, "limits/x.go:1:40: time.Now: time"},
		{"renamed", "limits", `package limits; import wall "time"; var f = wall.AfterFunc`, "wall.AfterFunc: time"},
		{"dotted", "limits", `package limits; import . "time"; var t = Now()`, "imports time with a dot"},
		{"deadline", "limits", `package limits; import "context"; var f = context.WithTimeout`, "context.WithTimeout: time"},
		{"duration", "limits", `package limits; import "time"; const d = time.Second`, ""},
		{"truth", "sequencer/engine", `package engine; func f(w interface{ Truth() int }) int { return w.Truth() }`, "the truth of a virtual gyro"},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			set, file := parse(c.dir, c.text)
			got := strings.Join(slices.Concat(importFindings([]sourceFile{file}, arrows), timeFindings(set, file.tree), truthFindings(set, file.tree)), "\n")
			if (got == "") != (c.want == "") || !strings.Contains(got, c.want) {
				t.Errorf("found %q, want %q", got, c.want)
			}
		})
	}
}
