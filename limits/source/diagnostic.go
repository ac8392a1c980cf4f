package source

import (
	"fmt"
	"io"
	"sort"
	"strings"
	"unicode/utf8"

	"github.com/agext/levenshtein"
)

// Note is a place that a diagnostic refers to.
type Note struct {
	Span    Span
	Message string
}

// Diagnostic is one mistake.
type Diagnostic struct {
	Span    Span   // tight around just what is wrong
	Code    string // stable, for tests and tools: "unknown-figure"
	Message string // what is wrong, in the words of the trade
	Help    string // what to do; may be empty
	Related []Note
}

// List is what is wrong with some documents. A List that is not empty is an error.
type List []Diagnostic

// shownMax is how many diagnostics of one file are shown.
const shownMax = 20

// Add appends a diagnostic.
func (l *List) Add(d Diagnostic) { *l = append(*l, d) }

// Addf appends a diagnostic with a formatted message.
func (l *List) Addf(span Span, code, help, format string, args ...any) {
	l.Add(Diagnostic{Span: span, Code: code, Message: fmt.Sprintf(format, args...), Help: help})
}

// Sort orders by file and position; equal positions keep their order.
func (l List) Sort() {
	sort.SliceStable(l, func(i, j int) bool {
		a, b := l[i].Span, l[j].Span
		if a.File != b.File {
			return a.File < b.File
		}
		return a.Start < b.Start
	})
}

// Err is the list as an error, nil when it is empty.
func (l List) Err() error {
	if len(l) == 0 {
		return nil
	}
	return l
}

func (l List) Error() string {
	texts := make([]string, 0, len(l))
	for _, d := range l {
		text := d.Span.File + ": " + d.Message
		if d.Help != "" {
			text += "; " + d.Help
		}
		texts = append(texts, text)
	}
	return strings.Join(texts, "\n")
}

// find gives the file of a span among files.
func find(name string, files []*File) *File {
	for _, f := range files {
		if f != nil && f.Name == name {
			return f
		}
	}
	return nil
}

// Render prints the diagnostics by position, each with its line and a mark under what is wrong, at most twenty a file.
func (l List) Render(w io.Writer, files ...*File) {
	sorted := append(List(nil), l...)
	sorted.Sort()
	shown := map[string]int{}
	for _, d := range sorted {
		if shown[d.Span.File]++; shown[d.Span.File] <= shownMax {
			d.render(w, files)
		}
	}
	told := map[string]bool{}
	for _, d := range sorted {
		if more := shown[d.Span.File] - shownMax; more > 0 && !told[d.Span.File] {
			fmt.Fprintf(w, "%s: and %d more\n", d.Span.File, more)
			told[d.Span.File] = true
		}
	}
}

func (d Diagnostic) render(w io.Writer, files []*File) {
	f := find(d.Span.File, files)
	if f == nil {
		fmt.Fprintf(w, "%s: %s\n", d.Span.File, d.Message)
		if d.Help != "" {
			fmt.Fprintf(w, "    %s\n", d.Help)
		}
		return
	}
	line, column := f.Position(d.Span.Start)
	fmt.Fprintf(w, "%s:%d:%d: %s\n", f.Name, line, column, d.Message)
	snippet(w, f, d.Span, d.Help)
	for _, n := range d.Related {
		if g := find(n.Span.File, files); g != nil {
			line, column := g.Position(n.Span.Start)
			fmt.Fprintf(w, "   %s:%d:%d: %s\n", g.Name, line, column, n.Message)
		}
	}
}

// lineShownMax is how many characters of a line are shown.
const lineShownMax = 160

// snippet prints the line and the mark. Tabs count one column and are shown as a space.
func snippet(w io.Writer, f *File, span Span, help string) {
	line, column := f.Position(span.Start)
	text := []rune(strings.ReplaceAll(f.Line(line), "\t", " "))
	width := 1
	if endLine, _ := f.Position(span.End); endLine == line && span.End > span.Start {
		width = utf8.RuneCount(f.Text[span.Start:span.End])
	} else if span.End > span.Start {
		width = max(1, len(text)-column+1)
	}
	if column-1+width > lineShownMax { // a long line is shown from near the mistake
		from := max(0, min(column-1-20, len(text)))
		text, column = text[from:], column-from
		width = min(width, lineShownMax)
	}
	text = text[:min(len(text), lineShownMax)]
	fmt.Fprintf(w, "%5d | %s\n", line, string(text))
	mark := strings.Repeat(" ", column-1) + strings.Repeat("^", width)
	if help != "" {
		mark += " " + help
	}
	fmt.Fprintf(w, "      | %s\n", mark)
}

// JSONDiagnostic is a diagnostic for tools.
type JSONDiagnostic struct {
	File      string `json:"file"`
	Line      int    `json:"line"`
	Column    int    `json:"column"`
	EndLine   int    `json:"end_line"`
	EndColumn int    `json:"end_column"`
	Code      string `json:"code"`
	Message   string `json:"message"`
	Help      string `json:"help"`
}

// MarshalFor gives the diagnostics, by position, as JSON has them. Of a file that is not given, line and column are 0.
func (l List) MarshalFor(files ...*File) []JSONDiagnostic {
	sorted := append(List(nil), l...)
	sorted.Sort()
	list := make([]JSONDiagnostic, 0, len(sorted))
	for _, d := range sorted {
		j := JSONDiagnostic{File: d.Span.File, Code: d.Code, Message: d.Message, Help: d.Help}
		if f := find(d.Span.File, files); f != nil {
			j.Line, j.Column = f.Position(d.Span.Start)
			j.EndLine, j.EndColumn = f.Position(d.Span.End)
		}
		list = append(list, j)
	}
	return list
}

// Suggest gives the known name that is nearest to the given one, within 1 + len/4 edits.
func Suggest(given string, known []string) (string, bool) {
	best, distance := "", 2+len(given)/4
	for _, name := range known {
		if d := levenshtein.Distance(given, name, nil); d < distance {
			best, distance = name, d
		}
	}
	return best, best != ""
}

// DidYouMean is the help for a misspelt name: the nearest known one, or the choices if they are few, or nothing.
func DidYouMean(given string, known []string) string {
	if near, ok := Suggest(given, known); ok {
		return fmt.Sprintf("did you mean %q?", near)
	}
	if len(known) > 0 && len(known) <= 8 {
		return "known here: " + strings.Join(known, ", ")
	}
	return ""
}
