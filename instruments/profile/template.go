package profile

import (
	"fmt"
	"math"
	"strconv"
	"strings"

	"proofrate/limits/quantity"
)

// part of a template: literal text, or a capture.
type part struct {
	literal string
	name    string        // of a capture
	format  byte          // of a value to send: 'f' or 'e' or 'd'
	digits  int           // after the point
	signed  bool          // a plus sign is written
	unit    quantity.Unit // in which it is sent
	hasUnit bool
}

// template is a text with captures in braces: {name}, or {name +.3f deg/s} for a value to send.
type template []part

// parseTemplate reads one. "{{" stands for a brace.
func parseTemplate(text string) (template, error) {
	var t template
	literal := ""
	for i := 0; i < len(text); i++ {
		switch {
		case strings.HasPrefix(text[i:], "{{"):
			literal += "{"
			i++
		case text[i] == '{':
			end := strings.IndexByte(text[i:], '}')
			if end < 0 {
				return nil, fmt.Errorf("%q: a } is missing", text)
			}
			if literal != "" {
				t, literal = append(t, part{literal: literal}), ""
			} else if len(t) > 0 {
				return nil, fmt.Errorf("%q: two captures side by side cannot be told apart", text)
			}
			p, err := parseCapture(text[i+1 : i+end])
			if err != nil {
				return nil, fmt.Errorf("%q: %w", text, err)
			}
			t = append(t, p)
			i += end
		case text[i] < ' ' || text[i] > '~':
			return nil, fmt.Errorf("%q: printable ASCII was expected", text)
		default:
			literal += text[i : i+1]
		}
	}
	if literal != "" {
		t = append(t, part{literal: literal})
	}
	return t, nil
}

// parseCapture reads what stands between the braces.
func parseCapture(text string) (part, error) {
	name, rest, formatted := strings.Cut(strings.TrimSpace(text), " ")
	p := part{name: name, digits: 0, format: 0}
	if name == "" {
		return p, fmt.Errorf("a capture without a name")
	}
	if !formatted {
		return p, nil
	}
	format, unit, hasUnit := strings.Cut(strings.TrimSpace(rest), " ")
	if p.signed = strings.HasPrefix(format, "+"); p.signed {
		format = format[1:]
	}
	if n := len(format); n == 3 && format[0] == '.' && format[1] >= '0' && format[1] <= '9' && (format[2] == 'f' || format[2] == 'e') {
		p.digits, p.format = int(format[1]-'0'), format[2]
	} else {
		return p, fmt.Errorf("format %q: expected .3f or .3e and such, with + before it to write a plus sign", format)
	}
	if hasUnit {
		var err error
		if p.unit, err = quantity.ParseUnit(unit); err != nil {
			return p, err
		}
		p.hasUnit = true
	}
	return p, nil
}

// captures are the names of a template's captures.
func (t template) captures() []string {
	var names []string
	for _, p := range t {
		if p.name != "" {
			names = append(names, p.name)
		}
	}
	return names
}

// values are what a template is filled with.
type values map[string]quantity.Value

// fill writes the line.
func (t template) fill(to []byte, v values, channel int) []byte {
	for _, p := range t {
		switch {
		case p.name == "":
			to = append(to, p.literal...)
		case p.name == "channel":
			to = strconv.AppendInt(to, int64(channel), 10)
		default:
			x := v[p.name].As(p.unit)
			if p.signed && !math.Signbit(x) {
				to = append(to, '+')
			}
			to = strconv.AppendFloat(to, x, p.format, p.digits, 64)
		}
	}
	return to
}

// match holds a line against the template and gives the captured texts in the order of the captures. A capture reaches
// to the next literal, or to the end.
func (t template) match(line string, captured []string) ([]string, bool) {
	captured = captured[:0]
	for i, p := range t {
		if p.name == "" {
			if !strings.HasPrefix(line, p.literal) {
				return nil, false
			}
			line = line[len(p.literal):]
			continue
		}
		end := len(line)
		if i+1 < len(t) {
			if end = strings.Index(line, t[i+1].literal); end < 0 {
				return nil, false
			}
		}
		if end == 0 {
			return nil, false
		}
		captured = append(captured, line[:end])
		line = line[end:]
	}
	return captured, line == ""
}

// parseNumber reads a number as instruments write it: NR1, NR2 and NR3 of IEEE 488.2.
func parseNumber(text string) (float64, bool) {
	text = strings.TrimSpace(text)
	if text == "" || strings.ContainsAny(text, "xXpP_nNiI") {
		return 0, false
	}
	x, err := strconv.ParseFloat(text, 64)
	return x, err == nil && !math.IsInf(x, 0)
}
