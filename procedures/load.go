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

// Load reads a procedure and holds it against the language. What depends on part and parameters is found by Plan.
func Load(name string, text []byte) (*Procedure, *source.File, source.List) {
	file, root, problems := document.Read(name, text)
	if root == nil {
		return nil, file, problems
	}
	p := &Procedure{text: text, file: file, Digest: digest(text)}
	p.root = document.Decode(root, &procedureTable, &problems)
	p.Name = p.root.Text("procedure")
	for _, pattern := range p.root.Words("applies-to") {
		if strings.Trim(pattern, "*") == "" && pattern != "*" || strings.ContainsAny(pattern, "?[]\\") {
			problems.Addf(p.root.ValueSpan("applies-to"), "wrong-value", "write part numbers, with * for any characters", "applies-to: %q is no pattern", pattern)
		}
	}
	return p, file, problems
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
