package document

import (
	"fmt"
	"math"
	"regexp"
	"strconv"
	"strings"

	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// Decode holds a map against its table: every key that is unknown, missing or of the wrong kind is reported, and what
// is sound is decoded. A nil node decodes to an empty map without further complaint.
func Decode(n *Node, t *Table, problems *source.List) Map {
	m := Map{table: t, values: map[string]decoded{}}
	if n == nil {
		return m
	}
	m.Span = n.Span
	if n.Form != Mapping {
		problems.Addf(n.Span, "wrong-form", "keys known here: "+strings.Join(t.Names(), ", "), "a %s is a map of keys, this is %s", t.Name, n.Form)
		return m
	}
	for _, e := range n.entries {
		key := t.key(e.Key.text)
		if key == nil {
			problems.Addf(e.Key.Span, "unknown-key", source.DidYouMean(e.Key.text, t.Names()), "a %s has no key %q", t.Name, e.Key.text)
			continue
		}
		m.values[key.Name] = decoded{e.Key, e.Value, key.decode(e.Value, problems)}
	}
	for _, key := range t.Keys {
		if _, there := m.values[key.Name]; key.Required && !there {
			problems.Addf(head(n), "missing-key", key.Doc, "a %s needs the key %q", t.Name, key.Name)
		}
	}
	return m
}

// head is where a map begins: its first key, so that a mark is not as long as the map.
func head(n *Node) source.Span {
	if len(n.entries) > 0 {
		return n.entries[0].Key.Span
	}
	return n.Span
}

var namePattern = regexp.MustCompile(`^[A-Za-z][A-Za-z0-9_-]*$`)

// decode gives what the key's kind makes of a node, or nil with a diagnostic.
func (k *Key) decode(n *Node, problems *source.List) any {
	refuse := func(format string, args ...any) any {
		problems.Addf(n.Span, "wrong-value", k.Doc, "%s: %s", k.Name, fmt.Sprintf(format, args...))
		return nil
	}
	if n.Form == Absent && k.Kind != Any {
		return refuse("a %s was expected, nothing stands there", k.Kind)
	}
	switch k.Kind {
	case Any:
		return n
	case MapOf:
		if k.Free != nil {
			return k.free(n, problems)
		}
		if n.Form != Mapping {
			return refuse("a map of keys was expected, this is %s", n.Form)
		}
		return Decode(n, k.Of, problems)
	case ListOf:
		if n.Form != Sequence {
			return refuse("a list was expected, this is %s", n.Form)
		}
		list := make([]Map, 0, len(n.items))
		for _, item := range n.items {
			list = append(list, Decode(item, k.Of, problems))
		}
		return list
	case Words:
		return k.words(n, problems)
	}
	if n.Form != Scalar {
		return refuse("a %s was expected, this is %s", k.Kind, n.Form)
	}
	got, err := k.scalar(n)
	if err != nil {
		return refuse("%v", err)
	}
	return got
}

// scalar decodes the kinds that are one value.
func (k *Key) scalar(n *Node) (any, error) {
	switch k.Kind {
	case Text, Expression:
		if n.text == "" {
			return nil, fmt.Errorf("a %s was expected, it is empty", k.Kind)
		}
		return n.text, nil
	case Name:
		if !namePattern.MatchString(n.text) {
			return nil, fmt.Errorf("%q is no name; a name is letters, digits, - and _, a letter first", n.text)
		}
		return n.text, nil
	case Choice:
		for _, c := range k.Choices {
			if c == n.text {
				return n.text, nil
			}
		}
		help := "one of " + strings.Join(k.Choices, ", ") + " was expected"
		if near, ok := source.Suggest(n.text, k.Choices); ok {
			help = fmt.Sprintf("did you mean %q?", near)
		}
		return nil, fmt.Errorf("%q is none of the choices; %s", n.text, help)
	case Integer:
		i, err := strconv.Atoi(n.text)
		if err != nil {
			return nil, fmt.Errorf("%q is no whole number", n.text)
		}
		return i, nil
	case Number:
		x, err := strconv.ParseFloat(n.text, 64)
		if err != nil || math.IsInf(x, 0) || math.IsNaN(x) || strings.ContainsAny(n.text, "xX_") {
			return nil, fmt.Errorf("%q is no number", n.text)
		}
		return x, nil
	case Bool:
		switch n.text {
		case "yes":
			return true, nil
		case "no":
			return false, nil
		}
		return nil, fmt.Errorf("%q is neither yes nor no", n.text)
	case Quantity:
		if k.Dimension != nil {
			return fine(quantity.ParseAs(n.text, *k.Dimension))
		}
		return fine(quantity.Parse(n.text))
	case Quantities:
		list, err := quantity.ParseList(n.text)
		if err == nil && k.Dimension != nil && list[0].Dimension() != *k.Dimension {
			err = &quantity.UnitError{Text: n.text, Got: list[0].Unit, Want: *k.Dimension, Fits: k.Dimension.Units()}
		}
		return fine(list, err)
	}
	panic(fmt.Sprintf("document: key %q has no kind", k.Name))
}

func fine[T any](got T, err error) (any, error) {
	if err != nil {
		return nil, err
	}
	return got, nil
}

// words reads a list of scalars, or the words of one scalar.
func (k *Key) words(n *Node, problems *source.List) any {
	if n.Form == Scalar {
		if n.Quoted {
			return []string{n.text}
		}
		return strings.Fields(n.text)
	}
	if n.Form != Sequence {
		problems.Addf(n.Span, "wrong-value", k.Doc, "%s: words were expected, this is %s", k.Name, n.Form)
		return nil
	}
	words := make([]string, 0, len(n.items))
	for _, item := range n.items {
		if item.Form != Scalar || item.text == "" {
			problems.Addf(item.Span, "wrong-value", k.Doc, "%s: a word was expected, this is %s", k.Name, item.Form)
			return nil
		}
		words = append(words, item.text)
	}
	return words
}

// free decodes a map whose keys are the author's names.
func (k *Key) free(n *Node, problems *source.List) any {
	if n.Form != Mapping {
		problems.Addf(n.Span, "wrong-value", k.Doc, "%s: a map of names was expected, this is %s", k.Name, n.Form)
		return nil
	}
	list := make([]Named, 0, len(n.entries))
	for _, e := range n.entries {
		if !namePattern.MatchString(e.Key.text) {
			problems.Addf(e.Key.Span, "wrong-name", "a name is letters, digits, - and _, a letter first", "%s: %q is no name", k.Name, e.Key.text)
			continue
		}
		list = append(list, Named{e.Key.text, e.Key.Span, Decode(e.Value, k.Free, problems)})
	}
	return list
}
