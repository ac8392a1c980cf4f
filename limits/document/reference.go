package document

import (
	"fmt"
	"strings"
)

// Reference is a table as a Markdown page part: the keys, what stands behind each, whether it is required, and its
// line of doc; then the tables behind its keys, each once.
func Reference(t *Table) string {
	var b strings.Builder
	written := map[*Table]bool{}
	var write func(t *Table)
	write = func(t *Table) {
		if written[t] {
			return
		}
		written[t] = true
		if b.Len() > 0 {
			b.WriteString("\n")
		}
		fmt.Fprintf(&b, "**%s** - %s\n\n| key | value | required | meaning |\n| --- | --- | --- | --- |\n", t.Name, t.Doc)
		for _, k := range t.Keys {
			required := ""
			if k.Required {
				required = "yes"
			}
			fmt.Fprintf(&b, "| `%s` | %s | %s | %s |\n", k.Name, k.value(), required, strings.ReplaceAll(k.Doc, "|", "\\|"))
		}
		for _, k := range t.Keys {
			for _, inner := range []*Table{k.Of, k.Free} {
				if inner != nil {
					write(inner)
				}
			}
		}
	}
	write(t)
	return b.String()
}

// value says in words what stands behind a key.
func (k *Key) value() string {
	switch {
	case k.Kind == Choice:
		return strings.Join(k.Choices, ", ")
	case k.Free != nil:
		return "names, each a " + k.Free.Name
	case k.Kind == MapOf:
		return k.Of.Name
	case k.Kind == ListOf:
		return "list of " + k.Of.Name
	case k.Dimension != nil:
		return k.Dimension.String()
	}
	return k.Kind.String()
}
