package profile

import (
	"math"
	"slices"
	"strings"

	"proofrate/limits/document"
	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

const deviceMost = 247 // Modbus over serial line V1.02, 2.2

// places are the keys of an access that say where it is, with the function that reads there.
var places = []struct {
	key      string
	function byte
	bit      bool
	writable bool
}{{"holding", readHolding, false, true}, {"input", readInput, false, false}, {"coil", readCoils, true, true}, {"discrete", readDiscretes, true, false}}

// registers reads what a profile of the family registers says.
func (r *reader) registers() speech {
	m := r.m.Map("registers")
	b := &modbus{device: byte(r.between(m, "device", 1, deviceMost)), tcp: m.Text("framing") == "tcp", lowFirst: m.Text("word-order") == "low-first",
		multiple: m.Text("write") == "multiple", writes: map[string][]write{}, accesses: map[string]access{}}
	for _, e := range r.entries(r.m, "identify") {
		a, _ := r.access(e.Key.Span, document.Decode(e.Value, &accessTable, r.problems))
		if !slices.Contains(identityFields, e.Key.Text()) {
			r.add(e.Key.Span, "unknown-key", source.DidYouMean(e.Key.Text(), identityFields), "an identity has no %q", e.Key.Text())
			continue
		}
		b.identity = append(b.identity, identityAccess{e.Key.Text(), a})
	}
	for _, e := range r.entries(r.m, "actions") {
		a := r.actionOf(e.Key)
		list := r.writes(a, e)
		if a != nil && len(list) > 0 {
			b.writes[a.name] = list
		}
	}
	for _, e := range r.entries(r.m, "readings") {
		m := document.Decode(e.Value, &accessTable, r.problems)
		unit, _ := r.readingOf(e.Key, m)
		if m.Span != (source.Span{}) && !m.Stands("unit") {
			r.add(e.Key.Span, "missing-key", "", "the reading %s needs the key \"unit\"", e.Key.Text())
		}
		a, _ := r.access(e.Key.Span, m)
		a.unit = unit
		b.accesses[e.Key.Text()] = a
	}
	return b
}

// access reads where a number is and how it is held.
func (r *reader) access(at source.Span, m document.Map) (a access, writable bool) {
	a = access{as: numberKinds[m.Text("as")], scaling: r.scaling(m)}
	var stated []string
	for _, p := range places {
		if !m.Stands(p.key) {
			continue
		}
		stated = append(stated, p.key)
		a.function, a.address, writable = p.function, uint16(r.between(m, p.key, 0, math.MaxUint16)), p.writable
		if !p.bit && !m.Stands("as") {
			r.add(m.KeySpan(p.key), "missing-key", "int16, uint16, int32, uint32 or float32", "a register needs the key \"as\"")
		}
		if p.bit && m.Stands("as") {
			r.add(m.KeySpan("as"), "wrong-access", "leave it out", "a %s is one bit", p.key)
		}
	}
	if len(stated) != 1 {
		r.add(at, "wrong-access", "", "an access has one place, of holding, input, coil or discrete; here stand %d", len(stated))
	}
	return a, writable
}

// writes reads the accesses of an action: each value that it carries is written, in a unit that fits.
func (r *reader) writes(of *action, e document.Entry) []write {
	if e.Value.Form != document.Sequence || len(e.Value.Items()) == 0 {
		r.add(e.Value.Span, "wrong-form", "", "the action %s: a list of accesses was expected, this is %s", e.Key.Text(), e.Value.Form)
		return nil
	}
	var list []write
	written := map[string]bool{}
	for _, item := range e.Value.Items() {
		m := document.Decode(item, &accessTable, r.problems)
		a, writable := r.access(item.Span, m)
		w := write{access: a, value: m.Text("value"), constant: float64(m.Int("constant"))}
		written[w.value] = true
		if a.function != 0 && !writable {
			r.add(item.Span, "wrong-access", "a holding register or a coil can be written", "an input cannot be written")
		}
		if m.Stands("value") == m.Stands("constant") {
			r.add(item.Span, "wrong-access", "", "an action writes one of its values or a constant")
		}
		if low, high := a.limits(); m.Has("constant") && (w.constant < low || w.constant > high) {
			r.add(m.ValueSpan("constant"), "wrong-value", "", "constant: %.0f to %.0f fit there", low, high)
		}
		if of != nil && m.Has("value") {
			r.written(of, m, &w)
		}
		list = append(list, w)
	}
	if of == nil {
		return nil
	}
	for _, v := range of.values {
		if !v.optional && !written[v.name] {
			r.add(e.Key.Span, "unsent-value", "", "the action %s does not write its %s", of.name, v.name)
		}
	}
	return list
}

// limits is what fits there.
func (a *access) limits() (low, high float64) {
	if a.as.bytes == 0 {
		return 0, 1
	}
	return a.as.holds()
}

// written checks the value of an action that an access writes.
func (r *reader) written(of *action, m document.Map, w *write) {
	v := of.value(w.value)
	switch {
	case v == nil:
		help := source.DidYouMean(w.value, of.valueNames())
		if len(of.values) == 0 {
			help = "write a constant"
		}
		r.add(m.ValueSpan("value"), "unknown-value", help, "the action %s carries no %q", of.name, w.value)
	case w.as.bytes == 0 && m.Stands("coil"):
		r.add(m.KeySpan("value"), "wrong-access", "write a constant", "a coil holds no %s", w.value)
	case !m.Stands("unit"):
		r.add(m.KeySpan("value"), "missing-unit", "units that fit: "+unitsOf(v.dimension), "a value is written in a unit")
	case m.Has("unit"):
		unit, err := quantity.ParseUnit(strings.TrimSpace(m.Text("unit")))
		switch {
		case err != nil:
			r.add(m.ValueSpan("unit"), "wrong-unit", "", "unit of %s: %v", w.value, err)
		case unit.Dimension() != v.dimension:
			r.add(m.ValueSpan("unit"), "wrong-unit", "units that fit: "+unitsOf(v.dimension), "%s is a unit of %s, and %s is of %s", unit, unit.Dimension(), w.value, v.dimension)
		}
		w.unit = unit
	}
}
