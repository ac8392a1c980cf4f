package profile

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"proofrate/limits/quantity"
)

// form is a text with captures in braces: {name}, or {name +.3f deg/s} for a value to send. "{{" stands for a brace.
type form []part

// part of a form: literal text, or a capture.
type part struct {
	literal  string
	name     string        // of a capture
	format   byte          // of a value to send: 'f' or 'e'; 0: none
	digits   int           // after the point
	signed   bool          // a plus sign is written
	unit     quantity.Unit // in which it is sent
	hasUnit  bool
	from, to int // where the capture stands in the form's text, braces included
}

// formError says what is wrong in a form's text, and where.
type formError struct {
	from, to int
	message  string
}

// parseForm reads a form's text.
func parseForm(text string) (form, *formError) {
	var f form
	var literal strings.Builder
	flush := func() {
		if literal.Len() > 0 {
			f = append(f, part{literal: literal.String()})
			literal.Reset()
		}
	}
	for i := 0; i < len(text); i++ {
		switch c := text[i]; {
		case strings.HasPrefix(text[i:], "{{"):
			literal.WriteByte('{')
			i++
		case c == '{':
			length := strings.IndexByte(text[i:], '}')
			if length < 0 {
				return nil, &formError{i, len(text), "a } is missing"}
			}
			flush()
			if len(f) > 0 && f[len(f)-1].name != "" {
				return nil, &formError{i, i + length + 1, "two captures side by side cannot be told apart"}
			}
			p, err := parseCapture(text[i+1 : i+length])
			if err != nil {
				return nil, &formError{i, i + length + 1, err.Error()}
			}
			p.from, p.to = i, i+length+1
			f = append(f, p)
			i += length
		case c < ' ' || c > '~':
			return nil, &formError{i, i + 1, "a line is of printable ASCII characters"}
		default:
			literal.WriteByte(c)
		}
	}
	flush()
	return f, nil
}

// parseCapture reads what stands between the braces.
func parseCapture(text string) (part, error) {
	name, rest, formatted := strings.Cut(strings.TrimSpace(text), " ")
	p := part{name: name}
	if name == "" {
		return p, fmt.Errorf("a capture has a name")
	}
	if !formatted {
		return p, nil
	}
	format, unit, hasUnit := strings.Cut(strings.TrimSpace(rest), " ")
	figures := strings.TrimPrefix(format, "+")
	p.signed = figures != format
	if len(figures) != 3 || figures[0] != '.' || figures[1] < '0' || figures[1] > '9' || figures[2] != 'f' && figures[2] != 'e' {
		return p, fmt.Errorf("format %q: expected .3f or .3e and such, with + before it where a plus sign is sent", format)
	}
	p.digits, p.format = int(figures[1]-'0'), figures[2]
	if hasUnit {
		var err error
		if p.unit, err = quantity.ParseUnit(unit); err != nil {
			return p, err
		}
		p.hasUnit = true
	}
	return p, nil
}

// values are what a form is filled with.
type values map[string]quantity.Value

// fill appends the line to send. The values are known to fit.
func (f form) fill(to []byte, v values, channel int) []byte {
	for i := range f {
		p := &f[i]
		switch p.name {
		case "":
			to = append(to, p.literal...)
		case "channel":
			to = strconv.AppendInt(to, int64(channel), 10)
		default:
			x := v[p.name].As(p.unit)
			if x == 0 {
				x = 0 // no minus sign
			}
			if p.signed && !math.Signbit(x) {
				to = append(to, '+')
			}
			to = strconv.AppendFloat(to, x, p.format, p.digits, 64)
		}
	}
	return to
}

// match holds a line against the form and appends the captured texts. A capture reaches to the next literal, or to the
// end, and holds a character at least.
func (f form) match(line string, captured []string) ([]string, bool) {
	for i := range f {
		p := &f[i]
		if p.name == "" {
			var found bool
			if line, found = strings.CutPrefix(line, p.literal); !found {
				return captured, false
			}
			continue
		}
		end := len(line)
		if i+1 < len(f) {
			end = strings.Index(line, f[i+1].literal)
		}
		if end < 1 {
			return captured, false
		}
		captured = append(captured, line[:end])
		line = line[end:]
	}
	return captured, line == ""
}
