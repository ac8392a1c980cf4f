package document

import (
	"bytes"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"proofrate/limits/quantity"
)

var inner = Table{Name: "limit", Doc: "a bound", Keys: []Key{{Name: "clause", Kind: Text, Required: true, Doc: "its clause"}, {Name: "bound", Kind: Quantity, Dimension: Dim(quantity.AngularRate), Doc: "how much"}}}

var outer = Table{Name: "paper", Doc: "a test", Keys: []Key{
	{Name: "name", Kind: Name, Required: true, Doc: "its name"}, {Name: "text", Kind: Text, Doc: "any text"}, {Name: "count", Kind: Integer, Doc: "how many"},
	{Name: "share", Kind: Number, Doc: "a part"}, {Name: "fit", Kind: Bool, Doc: "yes or no"}, {Name: "rate", Kind: Quantity, Dimension: Dim(quantity.AngularRate), Doc: "a rate"},
	{Name: "temperatures", Kind: Quantities, Dimension: Dim(quantity.Temperature), Doc: "some"}, {Name: "words", Kind: Words, Doc: "some words"},
	{Name: "family", Kind: Choice, Choices: []string{"optical", "vibratory"}, Doc: "which"}, {Name: "limits", Kind: ListOf, Of: &inner, Doc: "some"},
	{Name: "one", Kind: MapOf, Of: &inner, Doc: "one"}, {Name: "figures", Kind: MapOf, Free: &inner, Doc: "by name"}, {Name: "any", Kind: Any, Doc: "whatever"}}}

func decodedFrom(text string) (Map, string) {
	file, root, problems := Read("paper.yaml", []byte(text))
	m := Decode(root, &outer, &problems)
	var b strings.Builder
	problems.Render(&b, file)
	return m, b.String()
}

func TestDecode(t *testing.T) {
	m, wrong := decodedFrom(`name: first   # a comment
text: "it's: 0012"
count: 12
share: 1.5e-3
fit: yes
rate: 30 deg/s
temperatures: 23 -40 71 degC
words: [OG-*, "a b"]
family: optical
limits:
  - clause: 3.2.1
    bound: 2 deg/h
  - {clause: '7'}
one: {clause: 1e3}
figures: {bias: {clause: a}, arw: {clause: b}}
any: {turns: 1, at-least: dwell}
`)
	if wrong != "" {
		t.Fatal(wrong)
	}
	if m.Text("name") != "first" || m.Text("text") != "it's: 0012" || m.Int("count") != 12 || m.Number("share") != 0.0015 || !m.Bool("fit") ||
		m.Quantity("rate").SI() <= 0 || len(m.Quantities("temperatures")) != 3 || m.Words("words")[1] != "a b" || m.Text("family") != "optical" {
		t.Errorf("%+v", m)
	}
	if l := m.List("limits"); len(l) != 2 || l[0].Text("clause") != "3.2.1" || l[1].Has("bound") || m.Map("one").Text("clause") != "1e3" {
		t.Errorf("%+v", l)
	}
	if f := m.Free("figures"); len(f) != 2 || f[0].Name != "bias" || f[1].Map.Text("clause") != "b" || m.Node("any").Value("at-least").Text() != "dwell" {
		t.Errorf("%+v", f)
	}
}

// TestOwnText: a scalar is what stands there, not what YAML would make of it.
func TestOwnText(t *testing.T) {
	for _, text := range []string{"0012", "0x1F", "1.50", "null", "~", "yes", "1e3", "0o17", "+3", "-0", ".5", "2026-12-01", "on", "1_000"} {
		m, wrong := decodedFrom("name: x\ntext: " + text + "\n")
		if wrong != "" || m.Text("text") != text {
			t.Errorf("%s came through as %q %s", text, m.Text("text"), wrong)
		}
	}
}

// TestRefused: what is said of documents that are wrong, read and kept by hand.
func TestRefused(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"unknown key", "name: x\nfamly: optical\n", "paper.yaml:2:1: a paper has no key \"famly\"\n    2 | famly: optical\n      | ^^^^^ did you mean \"family\"?\n"},
		{"missing key", "text: x\n", "paper.yaml:1:1: a paper needs the key \"name\"\n    1 | text: x\n      | ^^^^ its name\n"},
		{"duplicate", "name: x\nname: y\n", "paper.yaml:2:1: key \"name\" stands here twice\n    2 | name: y\n      | ^^^^ keep one of them\n   paper.yaml:1:1: first here\n"},
		{"wrong dimension", "name: x\nrate: 5 V\n", "paper.yaml:2:7: rate: \"5 V\" is in V (a voltage), an angular rate was expected; units that fit: deg/s, deg/h, rad/s\n    2 | rate: 5 V\n      |       ^^^ a rate\n"},
		{"not whole", "name: x\ncount: 1.9\n", "paper.yaml:2:8: count: \"1.9\" is no whole number\n    2 | count: 1.9\n      |        ^^^ how many\n"},
		{"no choice", "name: x\nfamily: optial\n", "paper.yaml:2:9: family: \"optial\" is none of the choices; did you mean \"optical\"?\n    2 | family: optial\n      |         ^^^^^^ which\n"},
		{"nothing", "name:\ntext: x\n", "paper.yaml:1:5: name: a name was expected, nothing stands there\n    1 | name:\n      |     ^ its name\n"},
		{"no map", "name: x\none: 5\n", "paper.yaml:2:6: one: a map of keys was expected, this is a value\n    2 | one: 5\n      |      ^ one\n"},
		{"no list", "name: x\nlimits: {clause: 1}\n", "paper.yaml:2:10: limits: a list was expected, this is a map of keys\n    2 | limits: {clause: 1}\n      |          ^^^^^^^^^ some\n"},
		{"merge", "name: x\n<<: {text: y}\n", "paper.yaml:2:1: merge keys are not read in our documents\n    2 | <<: {text: y}\n      | ^^ write the keys out\n"},
		{"second document", "name: x\n---\nname: y\n", "paper.yaml:3:1: a second document begins here\n    3 | name: y\n      | ^^^^ put it into a file of its own\n"},
		{"syntax", "name: a: b\n", "paper.yaml:1:7: this is not well-formed YAML: mapping value is not allowed in this context\n    1 | name: a: b\n      |       ^\n"},
		{"crlf", "name: x\r\n\r\nfamly: y\r\n", "paper.yaml:3:1: a paper has no key \"famly\"\n    3 | famly: y\n      | ^^^^^ did you mean \"family\"?\n"},
		{"empty", " \n", "paper.yaml:1:1: the document is empty\n    1 |  \n      | ^\n"},
		{"a list", "- name: x\n", "paper.yaml:1:3: a paper is a map of keys, this is a list\n    1 | - name: x\n      |   ^^^^^^^ keys known here: name, text, count, share, fit, rate, temperatures, words, family, limits, one, figures, any\n"},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, got := decodedFrom(c.text)
			if d := cmp.Diff(c.want, got); d != "" {
				t.Error(d)
			}
		})
	}
	if _, wrong := decodedFrom("name: &a x\n"); !strings.Contains(wrong, "anchors are not read") {
		t.Errorf("an anchor: %s", wrong)
	}
	if _, wrong := decodedFrom("name: *x\n"); !strings.Contains(wrong, "alias") {
		t.Errorf("an alias: %s", wrong)
	}
	if _, wrong := decodedFrom("name: !!str x\n"); !strings.Contains(wrong, "tags are not read") {
		t.Errorf("a tag: %s", wrong)
	}
}

// TestBounded: hostile texts are refused at once. The bound of time is generous; without the scan of our own the
// parser took 20 s and more for some.
func TestBounded(t *testing.T) {
	for name, text := range map[string][]byte{
		"brackets": bytes.Repeat([]byte("["), 1<<20), "brackets on lines": bytes.Repeat([]byte("[\n"), 1<<19), "dashes": bytes.Repeat([]byte("- "), 1<<19),
		"maps": bytes.Repeat([]byte("{a: "), 1<<18), "indents": bytes.Repeat([]byte("a:\n "), 1<<18), "lists": bytes.Repeat([]byte("a: [1, 2]\n"), 1<<16),
		"questions": bytes.Repeat([]byte("? "), 1<<19), "tags": bytes.Repeat([]byte("!"), 1<<19), "quotes": bytes.Repeat([]byte("\"a"), 1<<19),
		"too much": bytes.Repeat([]byte("a"), 1<<20+1), "binary": {0, 1, 2}, "not UTF-8": {0xff}, "lines": bytes.Repeat([]byte("a\n"), 1<<19), "anchors": bytes.Repeat([]byte("&a "), 1<<18),
	} {
		began := time.Now()
		_, root, problems := Read("x", text)
		if len(problems) == 0 {
			t.Errorf("%s was read: %v", name, root != nil)
		}
		if took := time.Since(began); took > 5*time.Second {
			t.Errorf("%s took %s", name, took)
		}
	}
}

func TestReference(t *testing.T) {
	want := "**limit** - a bound\n\n| key | value | required | meaning |\n| --- | --- | --- | --- |\n| `clause` | text | yes | its clause |\n| `bound` | angular rate |  | how much |\n"
	if d := cmp.Diff(want, Reference(&inner)); d != "" {
		t.Error(d)
	}
}

// FuzzRead: whatever the text, no panic, and every span lies in the file.
func FuzzRead(f *testing.F) {
	for _, text := range []string{"name: x\n", "a: [1, {b: 'c'}]\n", "text: |\n  x\n", "? a\n: b\n", "a: &x 1\nb: *x\n", "\"a\": \"\\u00e9\"\n", "a: >-\n  b\n\n  c\n# d", "- - - x\n", "é: µ\n"} {
		f.Add([]byte(text))
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		if len(text) > 1<<14 {
			return
		}
		file, root, problems := Read("x", text)
		Decode(root, &outer, &problems)
		for _, p := range problems {
			if p.Span.Start < 0 || p.Span.End < p.Span.Start || p.Span.End > len(file.Text) {
				t.Fatalf("%q: %s at %+v of %d bytes", text, p.Message, p.Span, len(file.Text))
			}
		}
		var inside func(n *Node)
		inside = func(n *Node) {
			if n.Span.Start < 0 || n.Span.End < n.Span.Start || n.Span.End > len(file.Text) {
				t.Fatalf("%q: a node at %+v of %d bytes", text, n.Span, len(file.Text))
			}
			for _, i := range n.Items() {
				inside(i)
			}
			for _, e := range n.Entries() {
				inside(e.Key)
				inside(e.Value)
			}
		}
		if root != nil {
			inside(root)
		}
	})
}
