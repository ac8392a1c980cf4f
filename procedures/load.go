package procedures

import (
	"crypto/sha256"
	"embed"
	"encoding/hex"
	"path"
	"regexp"
	"strings"

	"proofrate/limits/document"
	"proofrate/limits/source"
)

// Procedure is a loaded document.
type Procedure struct {
	Name   string
	Digest string
	text   []byte
	file   *source.File
	root   document.Map
}

// Load reads a procedure and reports every mistake that needs no bench, in one pass: of the document, and of its plans
// as it stands and for each variant. Parameters that are set for a run are for Plan.
//
// The procedure is nil only if the text could not be read as a document at all.
func Load(name string, text []byte) (*Procedure, *source.File, source.List) {
	file, root, problems := document.Read(name, text)
	if root == nil {
		return nil, file, problems
	}
	p := &Procedure{text: text, file: file, Digest: digest(text)}
	p.root = document.Decode(root, &procedureTable, &problems)
	p.Name = p.root.Text("procedure")
	for _, pattern := range p.root.Words("applies-to") {
		if !patternPattern.MatchString(pattern) {
			problems.Addf(p.root.ValueSpan("applies-to"), "wrong-value", "write part numbers, with * for any characters", "applies-to: %q is no pattern", pattern)
		}
	}
	var found findings
	found.report(problems)
	steps := 0
	for _, part := range append([]string{""}, p.variants()...) {
		w := p.plan(Options{Part: part})
		found.report(w.list)
		if steps += w.unrolled; steps > stepsOfAllMax {
			found.add(p.root.KeySpan("variants"), "too-many-steps", "", "the variants make more than %d steps between them", stepsOfAllMax)
			break
		}
	}
	found.list.Sort()
	return p, file, found.list
}

// patternPattern: letters and digits, signs that part numbers have, and *.
var patternPattern = regexp.MustCompile(`^[\pL\pN*_./+-]+$`)

// variants are the part numbers that have a variant.
func (p *Procedure) variants() []string {
	var parts []string
	if n := p.root.Node("variants"); n != nil {
		for _, e := range n.Entries() {
			parts = append(parts, e.Key.Text())
		}
	}
	return parts
}

// findings gathers diagnostics, each mistake once however often a loop or a variant comes by it.
type findings struct {
	list  source.List
	known map[finding]bool
}

type finding struct {
	span    source.Span
	message string
}

func (f *findings) report(list source.List) {
	if f.known == nil {
		f.known = map[finding]bool{}
	}
	for _, d := range list {
		if key := (finding{d.Span, d.Message}); !f.known[key] {
			f.known[key] = true
			f.list = append(f.list, d)
		}
	}
}

func (f *findings) add(span source.Span, code, help, format string, args ...any) {
	var one source.List
	one.Addf(span, code, help, format, args...)
	f.report(one)
}

func digest(text []byte) string {
	sum := sha256.Sum256(text)
	return "sha256:" + hex.EncodeToString(sum[:])
}

// applies says whether the procedure is for a part.
func (p *Procedure) applies(part string) bool {
	for _, pattern := range p.root.Words("applies-to") {
		if matches(pattern, part) {
			return true
		}
	}
	return false
}

// matches: * stands for any characters.
func matches(pattern, part string) bool {
	parts := strings.Split(pattern, "*")
	for i := range parts {
		parts[i] = regexp.QuoteMeta(parts[i])
	}
	ok, err := regexp.MatchString("^"+strings.Join(parts, ".*")+"$", part)
	return err == nil && ok
}

//go:embed shipped/*.yaml
var shipped embed.FS

// Shipped gives a shipped procedure by its name.
func Shipped(name string) ([]byte, bool) {
	text, err := shipped.ReadFile(path.Join("shipped", name+".yaml"))
	return text, err == nil
}

// ShippedNames are the names of the shipped procedures.
func ShippedNames() []string {
	entries, err := shipped.ReadDir("shipped")
	if err != nil {
		panic("procedures: the embedded folder is missing: " + err.Error())
	}
	names := make([]string, len(entries))
	for i, e := range entries {
		names[i] = strings.TrimSuffix(e.Name(), ".yaml")
	}
	return names
}
