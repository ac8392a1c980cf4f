package source

import (
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
)

// TestRender: the line and a mark under just what is wrong, by position, notes below.
func TestRender(t *testing.T) {
	f := NewFile("bias.yaml", []byte("figures:\r\n  bias: 3\n  naïve: µ\tx\nlast"))
	var l List
	l.Addf(f.Span(len(f.Text)-4, len(f.Text)), "b", "", "at the end")
	l.Add(Diagnostic{Span: f.Span(11, 15), Code: "a", Message: `unknown figure "bais"`, Help: `did you mean "bias"?`, Related: []Note{{f.Span(0, 7), "first defined here"}}})
	at := strings.Index(string(f.Text), "µ")
	l.Addf(f.Span(at, at+2), "c", "", "a sign")
	var b strings.Builder
	l.Render(&b, f)
	want := `bias.yaml:2:3: unknown figure "bais"
    2 |   bias: 3
      |   ^^^^ did you mean "bias"?
   bias.yaml:1:1: first defined here
bias.yaml:3:10: a sign
    3 |   naïve: µ x
      |          ^
bias.yaml:4:1: at the end
    4 | last
      | ^^^^
`
	if d := cmp.Diff(want, b.String()); d != "" {
		t.Error(d)
	}
	j := l.MarshalFor(f)
	if len(j) != 3 || j[0].Line != 2 || j[0].Column != 3 || j[0].EndColumn != 7 || j[0].Code != "a" {
		t.Errorf("%+v", j)
	}
}

func TestTwentyAFile(t *testing.T) {
	f := NewFile("x", []byte("abc"))
	var l List
	for range 23 {
		l.Addf(f.Span(0, 1), "a", "", "wrong")
	}
	var b strings.Builder
	l.Render(&b, f)
	if n := strings.Count(b.String(), "wrong"); n != 20 || !strings.HasSuffix(b.String(), "x: and 3 more\n") {
		t.Errorf("%d shown: %s", n, b.String())
	}
}

// TestPositionsInvert: every offset at the start of a character has a line and column that lead back to it.
func TestPositionsInvert(t *testing.T) {
	f := NewFile("x", []byte("aé\n\nµ日本\nend\n"))
	for at := range string(f.Text) {
		line, column := f.Position(at)
		if back := f.Offset(line, column); back != at {
			t.Errorf("offset %d is %d:%d, which is offset %d", at, line, column, back)
		}
	}
	if line, column := f.Position(1 << 20); line != 5 || column != 1 {
		t.Errorf("beyond the end: %d:%d", line, column)
	}
}

func TestSuggest(t *testing.T) {
	known := []string{"bias", "scale-factor", "arw"}
	for given, want := range map[string]string{"bais": "bias", "bia": "bias", "scalefactor": "scale-factor", "zzzz": "", "": ""} {
		if got, ok := Suggest(given, known); got != want || ok != (want != "") {
			t.Errorf("%q: %q", given, got)
		}
	}
}
