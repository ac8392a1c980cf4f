// Package document reads the project's YAML documents strictly, by tables of keys.
//
// A Node is a piece of the text: a map, a list or a scalar, with its span. A Table says which keys a map may have:
// name, kind, dimension, whether required, one line of doc. Decode holds a map against its table and reports every
// mistake in one pass; loader, suggestions and reference pages all come from the same tables.
//
// Invariants: the text is bounded before a parser sees it; values are the tokens' own text, never what YAML would make
// of them, so that a serial number 0012 stays 0012; tags, anchors, aliases, merges and second documents are refused;
// whatever the input, the answer is a list of diagnostics and no panic, and every span lies in the file.
//
//	file, root, problems := document.Read("bias.yaml", text)
//	m := document.Decode(root, &table, &problems)
//	rate, ok := m.Quantity("rate")
package document
