package procedures

import (
	"fmt"
	"os"
	"regexp"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"proofrate/instruments"
	"proofrate/limits/document"
	"proofrate/results/reduce"
)

// TestReadmeTables: the tables of README.md are those that read the documents.
func TestReadmeTables(t *testing.T) {
	was, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	is := between(t, string(was), "readings", readingsTable())
	is = between(t, is, "catalogue", catalogueTable())
	is = between(t, is, "keys", keyTables())
	if *update {
		if err := os.WriteFile("README.md", []byte(is), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	if diff := cmp.Diff(string(was), is); diff != "" {
		t.Errorf("README.md is out of date; run with -update (-is +want):\n%s", diff)
	}
}

func between(t *testing.T, text, name, part string) string {
	begin, end := "<!-- "+name+" -->\n", "<!-- end -->"
	before, rest, ok := strings.Cut(text, begin)
	_, after, ok2 := strings.Cut(rest, end)
	if !ok || !ok2 {
		t.Fatalf("README.md has no place for %s", name)
	}
	return before + begin + "\n" + part + "\n" + end + after
}

func readingsTable() string {
	var b strings.Builder
	b.WriteString("| reading | unit | of | meaning |\n| --- | --- | --- | --- |\n")
	for _, k := range instruments.ReadingKinds {
		of := "slot"
		if k.Bench {
			of = "bench"
		}
		fmt.Fprintf(&b, "| `%s` | %s | %s | %s |\n", k.Name, k.Unit, of, k.Doc)
	}
	b.WriteString("| `NAME.value` | its profile's | slot | a meter's reading |\n")
	return b.String()
}

func catalogueTable() string {
	var b strings.Builder
	b.WriteString("| method | unit of | options | of gyros with | meaning | source |\n| --- | --- | --- | --- | --- | --- |\n")
	for _, m := range reduce.Catalogue() {
		options := slices.Clone(m.Options)
		if slices.Contains(m.Needs, "over") {
			options = append(options, "over")
		}
		output := "any output"
		if m.Output != "" {
			output = m.Output + " output"
		}
		fmt.Fprintf(&b, "| `%s` | %s | %s | %s | %s | %s |\n", m.Name, m.Unit.Dimension(), strings.Join(options, ", "), output, m.Doc, m.Source)
	}
	return b.String()
}

func keyTables() string {
	tables := []*document.Table{&procedureTable, &variantTable, &boundTable}
	for _, a := range actions {
		tables = append(tables, a.table)
	}
	tables = append(tables, &turnsTable)
	parts := make([]string, len(tables))
	for i, table := range tables {
		parts[i] = document.Reference(table)
	}
	return strings.Join(parts, "\n")
}

// TestReadmeExample: the example loads, for the parts that it names.
func TestReadmeExample(t *testing.T) {
	text, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	example := regexp.MustCompile("(?s)```yaml\n(.*?)```").FindSubmatch(text)
	if example == nil {
		t.Fatal("README.md has no example")
	}
	for _, part := range []string{"", "OG-12", "OG-15"} {
		if got := diagnostics(t, example[1], Options{Part: part}); got != "" {
			t.Errorf("part %q: %s", part, got)
		}
	}
	if got := diagnostics(t, example[1], Options{Part: "OG-13"}); !strings.Contains(got, "has no variant") {
		t.Errorf("part OG-13: %s", got)
	}
}

// TestTables: every key of the language says what it means, and the tables can read what they describe.
func TestTables(t *testing.T) {
	for _, table := range []*document.Table{&procedureTable, &gyroTable, &needsTable, &guardTable, &figureTable, &limitTable, &variantTable, &boundTable, &turnsTable} {
		for _, k := range table.Keys {
			if k.Doc == "" || k.Kind == document.Unset {
				t.Errorf("%s: key %s has no doc or no kind", table.Name, k.Name)
			}
		}
	}
	for _, a := range actions {
		if a.table.Keys[0].Name != a.name || !a.table.Keys[0].Required {
			t.Errorf("step %s: its first key is %s", a.name, a.table.Keys[0].Name)
		}
	}
}
