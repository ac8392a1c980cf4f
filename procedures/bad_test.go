package procedures

import (
	"bytes"
	"flag"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/rogpeppe/go-internal/txtar"

	"proofrate/limits/source"
)

var update = flag.Bool("update", false, "write what was found into the golden files")

// TestBad holds every mistake against its exact diagnostics: testdata/bad has one document with one mistake a file.
// A line "part NUMBER" or "set NAME=VALUE" behind the first says for what the document is planned.
func TestBad(t *testing.T) {
	files, err := filepath.Glob("testdata/bad/*.txtar")
	if err != nil || len(files) < 40 {
		t.Fatalf("%d cases, error %v; at least 40 were expected", len(files), err)
	}
	for _, name := range files {
		t.Run(strings.TrimSuffix(filepath.Base(name), ".txtar"), func(t *testing.T) {
			archive, err := txtar.ParseFile(name)
			if err != nil || len(archive.Files) != 2 {
				t.Fatalf("%d files, error %v; procedure.yaml and want were expected", len(archive.Files), err)
			}
			got := diagnostics(t, archive.Files[0].Data, options(t, string(archive.Comment)))
			if got == "" {
				t.Error("nothing was found")
			}
			if *update {
				archive.Files[1].Data = []byte(got)
				if err := os.WriteFile(name, txtar.Format(archive), 0o644); err != nil {
					t.Fatal(err)
				}
			}
			if diff := cmp.Diff(got, string(archive.Files[1].Data)); diff != "" {
				t.Errorf("diagnostics (-got +want):\n%s", diff)
			}
		})
	}
}

// TestBase: what the cases are made of is sound, so that each mistake stands alone.
func TestBase(t *testing.T) {
	text, err := os.ReadFile("testdata/base.yaml")
	if err != nil {
		t.Fatal(err)
	}
	if got := diagnostics(t, text, Options{Part: "OG-12"}); got != "" {
		t.Error(got)
	}
}

func options(t *testing.T, comment string) Options {
	o := Options{Parameters: map[string]string{}}
	for _, line := range strings.Split(strings.TrimSpace(comment), "\n")[1:] {
		word, rest, _ := strings.Cut(line, " ")
		switch word {
		case "part":
			o.Part = rest
		case "set":
			name, value, _ := strings.Cut(rest, "=")
			o.Parameters[name] = value
		default:
			t.Fatalf("%q is neither part nor set", line)
		}
	}
	return o
}

// diagnostics are what check would print.
func diagnostics(t *testing.T, text []byte, o Options) string {
	t.Helper()
	p, file, problems := Load("procedure.yaml", text)
	if len(problems) == 0 {
		_, problems = p.Plan(o)
	}
	within(t, file, problems)
	var b bytes.Buffer
	problems.Render(&b, file)
	return b.String()
}

// within checks that every span lies in the file.
func within(t *testing.T, file *source.File, problems source.List) {
	t.Helper()
	for _, d := range problems {
		if s := d.Span; s.File != file.Name || s.Start < 0 || s.End < s.Start || s.End > len(file.Text) {
			t.Errorf("%s: span %v is not in the file of %d bytes", d.Message, s, len(file.Text))
		}
		if d.Code == "" || d.Message == "" {
			t.Errorf("a diagnostic without code or message: %+v", d)
		}
	}
}
