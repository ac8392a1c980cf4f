package document

import (
	"bytes"
	"fmt"
	"unicode/utf8"

	"proofrate/limits/source"
)

// Bounds of a document, held by a scan of our own: the YAML parser needs 20 s for 64 KiB of brackets.
const (
	bytesMax = 1 << 20
	depthMax = 64
	marksMax = 10_000 // the parser's time grows with the square of them: 40 s at 300,000
)

// bound says why a text is not given to the parser.
func bound(f *source.File, problems *source.List) bool {
	refuse := func(at int, code, message, help string) bool {
		problems.Add(source.Diagnostic{Span: f.Span(at, min(at+1, len(f.Text))), Code: code, Message: message, Help: help})
		return false
	}
	text := f.Text
	switch {
	case len(text) > bytesMax:
		return refuse(0, "too-large", fmt.Sprintf("the document has %d bytes, at most %d are read", len(text), bytesMax), "")
	case bytes.IndexByte(text, 0) >= 0:
		return refuse(bytes.IndexByte(text, 0), "binary", "a NUL byte: this is no text file", "expected a YAML document in UTF-8")
	case !utf8.Valid(text):
		return refuse(invalidAt(text), "not-utf8", "a byte that is no UTF-8", "save the document as UTF-8")
	case len(bytes.TrimSpace(text)) == 0:
		return refuse(0, "empty", "the document is empty", "")
	}
	if at, deep := tooDeep(text); deep {
		return refuse(at, "too-deep", fmt.Sprintf("nested more than %d deep", depthMax), "")
	}
	if n := marks(text); n > marksMax {
		return refuse(0, "too-large", fmt.Sprintf("the document has about %d keys, list items and lines, at most %d are read", n, marksMax), "split it")
	}
	return true
}

// marks counts what a parser makes parts of.
func marks(text []byte) (n int) {
	for _, c := range text {
		switch c {
		case '\n', ':', ',', '[', '{':
			n++
		}
	}
	return n
}

func invalidAt(text []byte) int {
	for at := 0; at < len(text); {
		r, size := utf8.DecodeRune(text[at:])
		if r == utf8.RuneError && size == 1 {
			return at
		}
		at += size
	}
	return 0
}

// tooDeep counts what can nest: brackets of flow style outside quotes and comments, list marks on one line, and
// indents of block style. It counts rather too much than too little: closing brackets in plain text count too.
func tooDeep(text []byte) (int, bool) {
	flow := 0
	var indents []int
	for at := 0; at < len(text); {
		end := at + bytes.IndexByte(text[at:], '\n')
		if end < at {
			end = len(text)
		}
		line := text[at:end]
		indent := 0
		for indent < len(line) && (line[indent] == ' ' || line[indent] == '-' && flow == 0 && (indent+1 == len(line) || line[indent+1] == ' ')) {
			if line[indent] == '-' {
				for len(indents) > 0 && indents[len(indents)-1] >= indent {
					indents = indents[:len(indents)-1]
				}
				if indents = append(indents, indent); len(indents) > depthMax {
					return at + indent, true
				}
			}
			indent++
		}
		if flow == 0 && indent < len(line) && line[indent] != '#' {
			for len(indents) > 0 && indents[len(indents)-1] >= indent {
				indents = indents[:len(indents)-1]
			}
			if indents = append(indents, indent); len(indents) > depthMax {
				return at + indent, true
			}
		}
		var deepest int
		if flow, deepest = brackets(line[indent:], flow); deepest >= 0 {
			return at + indent + deepest, true
		}
		at = end + 1
	}
	return 0, false
}

// brackets follows the flow depth through a line; the second result is where it became too deep, or -1.
func brackets(line []byte, depth int) (int, int) {
	var quote byte
	for i, c := range line {
		switch {
		case quote != 0:
			if c == quote && !(quote == '"' && i > 0 && line[i-1] == '\\') {
				quote = 0
			}
		case c == '#' && (i == 0 || line[i-1] == ' '):
			return depth, -1
		case (c == '"' || c == '\'') && (i == 0 || bytes.IndexByte([]byte(" [{,:"), line[i-1]) >= 0):
			quote = c
		case c == '[' || c == '{':
			if depth++; depth > depthMax {
				return depth, i
			}
		case c == ']' || c == '}':
			depth = max(0, depth-1)
		}
	}
	return depth, -1
}
