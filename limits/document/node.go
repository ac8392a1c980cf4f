package document

import (
	"errors"
	"fmt"
	"strings"
	"unicode/utf8"

	"github.com/goccy/go-yaml"
	"github.com/goccy/go-yaml/ast"
	"github.com/goccy/go-yaml/parser"
	"github.com/goccy/go-yaml/token"

	"proofrate/limits/source"
)

// Form is the shape of a node.
type Form uint8

const (
	FormUnset Form = iota
	Scalar
	Mapping
	Sequence
	Absent // a key with nothing behind it
)

func (f Form) String() string {
	return [...]string{"unset", "a value", "a map of keys", "a list", "nothing"}[f]
}

// Node is a piece of a document.
type Node struct {
	Form    Form
	Span    source.Span
	Quoted  bool // a scalar in quotes
	text    string
	items   []*Node
	entries []Entry
}

// Entry is a key and its value.
type Entry struct{ Key, Value *Node }

// Text is a scalar's text as it stands in the document, quotes taken off.
func (n *Node) Text() string { return n.text }

// Items are a list's.
func (n *Node) Items() []*Node { return n.items }

// Entries are a map's, in the order of the document.
func (n *Node) Entries() []Entry { return n.entries }

// Value is a map's value by key, or nil.
func (n *Node) Value(key string) *Node {
	for _, e := range n.entries {
		if e.Key.text == key {
			return e.Value
		}
	}
	return nil
}

// Read parses a document. The node is nil if nothing could be made of the text.
func Read(name string, raw []byte) (file *source.File, root *Node, problems source.List) {
	if len(raw) > bytesMax { // do not even look for lines
		file = source.NewFile(name, nil)
		problems.Addf(file.Span(0, 0), "too-large", "", "the document has %d bytes, at most %d are read", len(raw), bytesMax)
		return file, nil, problems
	}
	file = source.NewFile(name, raw)
	if !bound(file, &problems) {
		return file, nil, problems
	}
	r := reader{file: file, problems: &problems}
	defer func() { // odd input has made the parser panic before
		if fault := recover(); fault != nil {
			root = nil
			problems.Addf(file.Span(0, 0), "syntax", "simplify the document", "the YAML parser gave up: %v", fault)
		}
	}()
	tree, err := parser.ParseBytes(file.Text, 0, parser.AllowDuplicateMapKey())
	if err != nil {
		r.syntax(err)
		return file, nil, problems
	}
	root = r.document(tree)
	if len(problems) > 0 {
		problems.Sort()
	}
	return file, root, problems
}

type reader struct {
	file     *source.File
	problems *source.List
}

func (r *reader) add(span source.Span, code, help, format string, args ...any) {
	r.problems.Addf(span, code, help, format, args...)
}

func (r *reader) syntax(err error) {
	var broken *yaml.SyntaxError
	if errors.As(err, &broken) && broken.Token != nil {
		r.add(r.point(broken.Token), "syntax", "", "this is not well-formed YAML: %s", broken.Message)
		return
	}
	r.add(r.file.Span(0, 0), "syntax", "", "this is not well-formed YAML: %s", strings.SplitN(err.Error(), "\n", 2)[0])
}

// point is the span of a token. Offsets of the parser count characters, so line and column are what is used.
func (r *reader) point(t *token.Token) source.Span {
	if t == nil || t.Position == nil {
		return r.file.Span(0, 0)
	}
	start := r.file.Offset(t.Position.Line, t.Position.Column)
	return r.file.Span(start, r.end(start, t))
}

// end finds where a token's text ends on its line.
func (r *reader) end(start int, t *token.Token) int {
	text := r.file.Text
	switch t.Type {
	case token.DoubleQuoteType, token.SingleQuoteType:
		quote := byte('"')
		if t.Type == token.SingleQuoteType {
			quote = '\''
		}
		for at := start + 1; at < len(text); at++ {
			if text[at] == '\\' && quote == '"' {
				at++
			} else if text[at] == quote {
				return at + 1
			}
		}
		return len(text)
	}
	end := start + len(t.Value)
	if end > len(text) || string(text[start:end]) != t.Value { // folded over lines: mark the first
		end = start
		for end < len(text) && text[end] != '\n' {
			end++
		}
	}
	return max(end, min(start+1, len(text)))
}

func (r *reader) document(tree *ast.File) *Node {
	var bodies []ast.Node
	for _, d := range tree.Docs {
		if d.Body != nil {
			if _, comment := d.Body.(*ast.CommentGroupNode); !comment {
				bodies = append(bodies, d.Body)
			}
		}
	}
	if len(bodies) == 0 {
		r.add(r.file.Span(0, 0), "empty", "", "the document is empty")
		return nil
	}
	if len(bodies) > 1 {
		r.add(r.point(first(bodies[1])), "second-document", "put it into a file of its own", "a second document begins here")
	}
	return r.node(bodies[0], 0)
}

// first is the token that a body begins with: the parser names the colon for a map.
func first(body ast.Node) *token.Token {
	switch n := body.(type) {
	case *ast.MappingNode:
		if len(n.Values) > 0 {
			return n.Values[0].Key.GetToken()
		}
	case *ast.MappingValueNode:
		return n.Key.GetToken()
	}
	return body.GetToken()
}

// node turns a parsed node into ours and refuses what our documents do not have.
func (r *reader) node(n ast.Node, depth int) *Node {
	if depth > depthMax {
		r.add(r.point(n.GetToken()), "too-deep", "", "nested more than %d deep", depthMax)
		return &Node{Form: Absent, Span: r.point(n.GetToken())}
	}
	switch n := n.(type) {
	case *ast.MappingNode:
		return r.mapping(n.GetToken(), n.Values, depth)
	case *ast.MappingValueNode:
		return r.mapping(n.GetToken(), []*ast.MappingValueNode{n}, depth)
	case *ast.SequenceNode:
		list := &Node{Form: Sequence, Span: r.point(n.GetToken())}
		for _, item := range n.Values {
			list.items = append(list.items, r.node(item, depth+1))
		}
		list.Span = r.around(list.Span, list.items...)
		return list
	case *ast.NullNode:
		if n.Token != nil && n.Token.Type == token.NullType && n.Token.Value != "" && !implicit(r.file, n.Token) {
			return r.scalar(n.Token) // the word null stands there: it is text like any other
		}
		return &Node{Form: Absent, Span: r.absent(n.Token)}
	case *ast.LiteralNode:
		return r.block(n)
	case *ast.AnchorNode:
		r.add(r.point(n.Start), "anchor", "write the value out where it is used", "anchors are not read in our documents")
	case *ast.AliasNode:
		r.add(r.point(n.Start), "alias", "write the value out; a text that starts with * needs quotes", "aliases are not read in our documents")
	case *ast.TagNode:
		r.add(r.point(n.Start), "tag", "leave it away; a text that starts with ! needs quotes", "tags are not read in our documents")
	case *ast.MergeKeyNode:
		r.add(r.point(n.Token), "merge", "write the keys out", "merge keys are not read in our documents")
	case *ast.StringNode:
		return r.scalar(n.Token)
	case ast.ScalarNode:
		return r.scalar(n.GetToken())
	default:
		r.add(r.point(n.GetToken()), "syntax", "", "a %s is not read in our documents", strings.ToLower(n.Type().String()))
	}
	return &Node{Form: Absent, Span: r.point(n.GetToken())}
}

// implicit tells a null that the parser made up from the word.
func implicit(f *source.File, t *token.Token) bool {
	at := f.Offset(t.Position.Line, t.Position.Column)
	return !strings.HasPrefix(string(f.Text[at:]), t.Value)
}

func (r *reader) absent(t *token.Token) source.Span {
	if t == nil || t.Position == nil {
		return r.file.Span(len(r.file.Text), len(r.file.Text))
	}
	at := r.file.Offset(t.Position.Line, t.Position.Column)
	return r.file.Span(at, at)
}

func (r *reader) scalar(t *token.Token) *Node {
	quoted := t.Type == token.DoubleQuoteType || t.Type == token.SingleQuoteType
	n := &Node{Form: Scalar, Span: r.point(t), Quoted: quoted, text: t.Value}
	if !quoted {
		n.text = strings.Join(strings.Fields(t.Value), " ")
	}
	return n
}

// block is a text behind | or >. The parser gives its lines no usable place, so it is placed at its mark.
func (r *reader) block(n *ast.LiteralNode) *Node {
	text := ""
	if n.Value != nil {
		text = n.Value.Value
	}
	return &Node{Form: Scalar, Span: r.point(n.Start), Quoted: true, text: text}
}

func (r *reader) mapping(at *token.Token, values []*ast.MappingValueNode, depth int) *Node {
	m := &Node{Form: Mapping, Span: r.point(at)}
	seen := map[string]source.Span{}
	var all []*Node
	for _, v := range values {
		key := r.key(v.Key)
		if key == nil {
			continue
		}
		if first, twice := seen[key.text]; twice {
			r.problems.Add(source.Diagnostic{Span: key.Span, Code: "duplicate-key", Message: fmt.Sprintf("key %q stands here twice", key.text),
				Help: "keep one of them", Related: []source.Note{{Span: first, Message: "first here"}}})
			continue
		}
		seen[key.text] = key.Span
		value := &Node{Form: Absent, Span: r.file.Span(key.Span.End, key.Span.End)}
		if v.Value != nil {
			value = r.node(v.Value, depth+1)
			if value.Form == Absent {
				value.Span = r.file.Span(key.Span.End, key.Span.End)
			}
		}
		m.entries = append(m.entries, Entry{key, value})
		all = append(all, key, value)
	}
	m.Span = r.around(m.Span, all...)
	return m
}

func (r *reader) key(k ast.MapKeyNode) *Node {
	switch k := k.(type) {
	case *ast.MergeKeyNode:
		r.add(r.point(k.Token), "merge", "write the keys out", "merge keys are not read in our documents")
		return nil
	case *ast.MappingKeyNode:
		r.add(r.point(k.Start), "syntax", "write `name: value`", "a key marked with ? is not read in our documents")
		return nil
	}
	switch n := k.(type) {
	case *ast.StringNode:
		return r.scalar(n.Token)
	case ast.ScalarNode:
		return r.scalar(n.GetToken())
	case ast.Node:
		r.node(n, 0)
	}
	return nil
}

// around is the span of a whole: of its parts, or of its own token where it has none.
func (r *reader) around(own source.Span, parts ...*Node) source.Span {
	if len(parts) == 0 {
		return own
	}
	span := parts[0].Span
	for _, p := range parts {
		span.Start, span.End = min(span.Start, p.Span.Start), max(span.End, p.Span.End)
	}
	for span.End > span.Start && !utf8.RuneStart(r.file.Text[span.End-1]) && span.End < len(r.file.Text) && !utf8.RuneStart(r.file.Text[span.End]) {
		span.End++
	}
	return span
}
