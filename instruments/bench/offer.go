package bench

import (
	"bytes"
	"cmp"
	"fmt"
	"slices"

	"proofrate/limits/source"
)

// edit puts text in the place of a span of the bench file.
type edit struct {
	span source.Span
	text string
}

// OnPorts is the bench file by which another program reaches this virtual bench where it is offered on ports: links
// are by endpoint ("table" at "serial:/dev/pts/3"), and pace is how many of the bench's seconds pass in one of the
// wall. All else, comments included, stays as the author wrote it.
func (l *Loaded) OnPorts(links map[string]string, pace float64) ([]byte, error) {
	if l.world == nil {
		return nil, fmt.Errorf("bench %s has no virtual world that could be offered", l.Description.Name)
	}
	edits := []edit{
		{wholeLines(l.file.Text, l.worldSpan), fmt.Sprintf("pace: %g", pace)},
	}
	for _, i := range l.instruments {
		to, ok := links[i.link.place]
		if !ok {
			return nil, fmt.Errorf("instrument %s: nothing is offered for %s", i.name, i.link)
		}
		edits = append(edits, edit{i.linkSpan, to})
	}
	slices.SortFunc(edits, func(a, b edit) int { return cmp.Compare(a.span.Start, b.span.Start) })
	var text bytes.Buffer
	at := 0
	for _, e := range edits {
		text.Write(l.file.Text[at:e.span.Start])
		text.WriteString(e.text)
		at = e.span.End
	}
	text.Write(l.file.Text[at:])
	if _, _, wrong := Load(l.file.Name, text.Bytes(), l.profileText); len(wrong) > 0 {
		return nil, fmt.Errorf("the file as edited is no bench: %w", wrong.Err())
	}
	return text.Bytes(), nil
}

// wholeLines lengthens the span of a map to the end of its last line: a map in braces ends with their closing, and a
// comment may follow.
func wholeLines(text []byte, span source.Span) source.Span {
	for {
		if n := bytes.IndexByte(text[span.End:], '\n'); n >= 0 {
			span.End += n
		} else {
			span.End = len(text)
		}
		rest := bytes.TrimLeft(text[span.End:], " \n")
		if len(rest) == 0 || rest[0] != '}' {
			return span
		}
		span.End = len(text) - len(rest)
	}
}

// profileText gives the profiles of this bench as they were read.
func (l *Loaded) profileText(name string) ([]byte, error) {
	for _, i := range l.Description.Instruments {
		if i.Profile == name {
			return i.ProfileText, nil
		}
	}
	return nil, fmt.Errorf("no instrument has the profile %s", name)
}
