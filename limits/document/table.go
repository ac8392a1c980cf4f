package document

import (
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// Kind is what may stand behind a key.
type Kind uint8

const (
	Unset      Kind = iota
	Text            // any scalar
	Name            // a name: letters, digits, - and _ , a letter first
	Integer         // a whole number
	Number          // a number without a unit
	Bool            // yes or no
	Quantity        // a number with its unit
	Quantities      // numbers and then their unit
	Words           // names or texts: a list, or parted by spaces
	MapOf           // a map of keys, by the table Of
	ListOf          // a list of maps, by the table Of
	Choice          // one of Choices
	Any             // whatever: the reader of the key looks at the node
	Expression      // an expression over figures or readings
)

func (k Kind) String() string {
	return [...]string{"unset", "text", "name", "whole number", "number", "yes or no", "quantity", "quantities", "words", "map", "list", "choice", "value", "expression"}[k]
}

// Key is one row of a table.
type Key struct {
	Name      string
	Kind      Kind
	Dimension *quantity.Dimension // of a quantity; nil: any
	Required  bool
	Choices   []string
	Doc       string // one line
	Of        *Table // of MapOf and ListOf
	Free      *Table // of MapOf: the keys are the author's names and each value is decoded by this table
}

// Table says which keys a map has.
type Table struct {
	Name string // "step", for messages: "a step has no key ..."
	Doc  string
	Keys []Key
}

// Names are the names of the table's keys.
func (t *Table) Names() []string {
	names := make([]string, len(t.Keys))
	for i, k := range t.Keys {
		names[i] = k.Name
	}
	return names
}

func (t *Table) key(name string) *Key {
	for i := range t.Keys {
		if t.Keys[i].Name == name {
			return &t.Keys[i]
		}
	}
	return nil
}

// Dim is for tables: a key's dimension.
func Dim(d quantity.Dimension) *quantity.Dimension { return &d }

// Map is a decoded map. Its accessors give the zero value for a key that is absent or was refused; Has tells.
type Map struct {
	Span   source.Span
	table  *Table
	values map[string]decoded
}

type decoded struct {
	key, value *Node
	got        any // what the key's kind makes of it; nil: refused
}

// Named is one entry of a map with free names.
type Named struct {
	Name string
	Span source.Span // of the name
	Map  Map
}

// Has says whether the key stands there and was sound.
func (m Map) Has(key string) bool { return m.values[key].got != nil }

// Stands says whether the key stands there, sound or not.
func (m Map) Stands(key string) bool { return m.values[key].key != nil }

// Node is the raw value behind a key, or nil.
func (m Map) Node(key string) *Node { return m.values[key].value }

// KeySpan is where the key stands; of an absent one, where the map stands.
func (m Map) KeySpan(key string) source.Span {
	if d := m.values[key]; d.key != nil {
		return d.key.Span
	}
	return m.Span
}

// ValueSpan is where the key's value stands; of an absent one, where the map stands.
func (m Map) ValueSpan(key string) source.Span {
	if d := m.values[key]; d.value != nil {
		return d.value.Span
	}
	return m.Span
}

func get[T any](m Map, key string) T {
	got, _ := m.values[key].got.(T)
	return got
}

func (m Map) Text(key string) string                 { return get[string](m, key) }
func (m Map) Int(key string) int                     { return get[int](m, key) }
func (m Map) Number(key string) float64              { return get[float64](m, key) }
func (m Map) Bool(key string) bool                   { return get[bool](m, key) }
func (m Map) Quantity(key string) quantity.Value     { return get[quantity.Value](m, key) }
func (m Map) Quantities(key string) []quantity.Value { return get[[]quantity.Value](m, key) }
func (m Map) Words(key string) []string              { return get[[]string](m, key) }
func (m Map) Map(key string) Map                     { return get[Map](m, key) }
func (m Map) List(key string) []Map                  { return get[[]Map](m, key) }
func (m Map) Free(key string) []Named                { return get[[]Named](m, key) }
