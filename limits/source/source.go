package source

import (
	"bytes"
	"sort"
	"unicode/utf8"
)

// Span is a stretch of a file, in bytes of its LF-normalised text; End is exclusive.
type Span struct {
	File       string
	Start, End int
}

// File is a text with its lines. CR LF and lone CR count as LF.
type File struct {
	Name  string
	Text  []byte
	lines []int // where each line starts
}

// NewFile normalises line ends and finds the lines.
func NewFile(name string, raw []byte) *File {
	text := raw
	if bytes.IndexByte(raw, '\r') >= 0 {
		text = bytes.ReplaceAll(raw, []byte("\r\n"), []byte("\n"))
		text = bytes.ReplaceAll(text, []byte("\r"), []byte("\n"))
	}
	f := &File{Name: name, Text: text, lines: []int{0}}
	for i, c := range text {
		if c == '\n' {
			f.lines = append(f.lines, i+1)
		}
	}
	return f
}

// Position gives line and column of an offset, both from 1, the column in characters.
func (f *File) Position(offset int) (line, column int) {
	offset = min(max(offset, 0), len(f.Text))
	line = sort.SearchInts(f.lines, offset+1)
	return line, utf8.RuneCount(f.Text[f.lines[line-1]:offset]) + 1
}

// Offset gives the byte offset of a line and column, both from 1, clamped to the file.
func (f *File) Offset(line, column int) int {
	if line < 1 {
		return 0
	}
	if line > len(f.lines) {
		return len(f.Text)
	}
	at := f.lines[line-1]
	for ; column > 1 && at < len(f.Text) && f.Text[at] != '\n'; column-- {
		_, size := utf8.DecodeRune(f.Text[at:])
		at += size
	}
	return at
}

// Line is the text of a line, from 1, without its end.
func (f *File) Line(line int) string {
	if line < 1 || line > len(f.lines) {
		return ""
	}
	start, end := f.lines[line-1], len(f.Text)
	if line < len(f.lines) {
		end = f.lines[line] - 1
	}
	return string(f.Text[start:end])
}

// Span is a span of this file.
func (f *File) Span(start, end int) Span { return Span{f.Name, start, end} }
