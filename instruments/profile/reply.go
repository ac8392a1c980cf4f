package profile

import (
	"math"
	"regexp"
	"slices"
	"strconv"
	"strings"
)

// reply is how an answer is read: by a form, or by a regular expression where a form does not do.
type reply struct {
	form    form
	pattern *regexp.Regexp
	names   []string // of the captures, in their order
}

func (r *reply) stated() bool { return r.form != nil || r.pattern != nil }

// match holds an answer against the reply and appends what the captures hold.
func (r *reply) match(line string, captured []string) ([]string, bool) {
	if r.pattern == nil {
		return r.form.match(line, captured)
	}
	found := r.pattern.FindStringSubmatchIndex(line)
	if found == nil {
		return captured, false
	}
	for i, name := range r.pattern.SubexpNames() {
		if name == "" {
			continue
		}
		if found[2*i] < 0 { // an alternative that was not taken
			captured = append(captured, "")
			continue
		}
		captured = append(captured, line[found[2*i]:found[2*i+1]])
	}
	return captured, true
}

// index is which capture has the name; -1: none.
func (r *reply) index(name string) int { return slices.Index(r.names, name) }

// noValue is the smallest of the numbers by which SCPI-99 (volume 1, 7.2.1.4 and 7.2.1.5) says infinity and "not a
// number".
const noValue = 9.9e37

// parseNumber reads a number as instruments write it: the forms NR1, NR2 and NR3 of IEEE Std 488.2, spaces around it.
// What stands for no value is none.
func parseNumber(text string) (float64, bool) {
	text = strings.TrimSpace(text)
	for i := range len(text) {
		if c := text[i]; (c < '0' || c > '9') && c != '+' && c != '-' && c != '.' && c != 'e' && c != 'E' {
			return 0, false // ParseFloat knows more forms, "inf" among them
		}
	}
	x, err := strconv.ParseFloat(text, 64)
	return x, err == nil && math.Abs(x) < noValue
}
