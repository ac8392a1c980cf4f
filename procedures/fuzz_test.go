package procedures

import (
	"os"
	"path/filepath"
	"testing"

	"github.com/rogpeppe/go-internal/txtar"
)

// FuzzLoad: whatever the text, there is no panic, every diagnostic's span lies in the file, and a document without a
// mistake has a plan.
func FuzzLoad(f *testing.F) {
	files, err := filepath.Glob("testdata/bad/*.txtar")
	if err != nil {
		f.Fatal(err)
	}
	for _, name := range files {
		archive, err := txtar.ParseFile(name)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(archive.Files[0].Data)
	}
	for _, name := range []string{"testdata/base.yaml", "shipped/fibre-optic-rate.yaml"} {
		text, err := os.ReadFile(name)
		if err != nil {
			f.Fatal(err)
		}
		f.Add(text)
	}
	f.Add([]byte(withVariants))
	f.Fuzz(func(t *testing.T, text []byte) {
		if len(text) > 64<<10 {
			t.Skip()
		}
		p, file, problems := Load("procedure.yaml", text)
		within(t, file, problems)
		if len(problems) > 0 {
			return
		}
		made, problems := p.Plan(Options{})
		if len(problems) > 0 || made == nil {
			t.Fatalf("Load found nothing, Plan %v", problems)
		}
		made.CheckBench(bench())
		made.Estimate(bench())
	})
}
