package limits

import (
	"errors"
	"fmt"
	"math"
	"sort"
	"strings"
	"sync"
	"unicode/utf8"

	"github.com/expr-lang/expr"
	"github.com/expr-lang/expr/ast"
	"github.com/expr-lang/expr/file"
	"github.com/expr-lang/expr/vm"

	"proofrate/limits/source"
)

// Guard is a compiled condition over readings, each named as in supply.current. It runs on expr's machine. Several
// goroutines may use it at once: a program may be shared, a machine and its environment may not.
type Guard struct {
	text     string
	readings []reading
	names    []string
	program  *vm.Program
	idle     sync.Pool // of *guardMachine
}

// reading is a name taken apart: supply.current.
type reading struct{ name, part, of string }

// guardMachine is one machine with an environment to fill.
type guardMachine struct {
	machine vm.VM
	parts   map[string]map[string]float64
	env     map[string]any
}

func (g *Guard) newMachine() any {
	m := &guardMachine{parts: map[string]map[string]float64{}, env: map[string]any{}}
	m.machine.MemoryBudget = guardMemoryMax
	for _, r := range g.readings {
		if m.parts[r.part] == nil {
			m.parts[r.part] = map[string]float64{}
			m.env[r.part] = m.parts[r.part]
		}
		m.parts[r.part][r.of] = 0
	}
	return m
}

// Bounds of a guard's machine.
const (
	guardNodesMax  = 200
	guardMemoryMax = 1000
)

// CompileGuard reads a guard. known are the readings that there are.
func CompileGuard(at Place, known []string) (*Guard, source.List) {
	tree, problems := parse(at)
	if tree == nil {
		return nil, problems
	}
	w := guardWalker{at: at, known: known}
	w.walk(tree.Node)
	if len(w.problems) > 0 {
		w.problems.Sort()
		return nil, w.problems
	}
	g := &Guard{text: at.Text, names: w.named}
	g.idle.New = g.newMachine
	for _, name := range w.named {
		part, of, _ := strings.Cut(name, ".")
		g.readings = append(g.readings, reading{name, part, of})
	}
	env := g.newMachine().(*guardMachine).env
	program, err := expr.Compile(at.Text, expr.Env(env), expr.AsBool(), expr.WarnOnAny(), expr.DisableAllBuiltins(), expr.EnableBuiltin("abs"),
		expr.EnableBuiltin("min"), expr.EnableBuiltin("max"), expr.MaxNodes(guardNodesMax))
	if err != nil {
		span, message := at.Span, err.Error()
		if broken, ok := errors.AsType[*file.Error](err); ok {
			span, message = at.span(broken.From, broken.To), broken.Message
		}
		problems.Addf(span, "expression", "a guard is a comparison of readings, as in supply.current < 1.5", "the guard cannot be used: %s", message)
		return nil, problems
	}
	g.program = program
	return g, nil
}

// Readings are the readings that the guard names, sorted.
func (g *Guard) Readings() []string { return g.names }

// String is the condition.
func (g *Guard) String() string { return g.text }

// Holds tells whether the condition holds. A reading that is absent or not finite breaks the guard, whatever the
// condition says of it: to expr, not (NaN > 1) is true.
func (g *Guard) Holds(readings map[string]float64) (bool, error) {
	m := g.idle.Get().(*guardMachine)
	defer g.idle.Put(m)
	for _, r := range g.readings {
		x, ok := readings[r.name]
		if !ok || math.IsNaN(x) || math.IsInf(x, 0) {
			return false, nil
		}
		m.parts[r.part][r.of] = x
	}
	got, err := m.machine.Run(g.program, m.env)
	if err != nil {
		return false, fmt.Errorf("guard %q: %w", g.text, err)
	}
	holds, ok := got.(bool)
	if !ok {
		return false, fmt.Errorf("guard %q gives %T, not true or false", g.text, got)
	}
	return holds, nil
}

// guardWalker finds the readings and refuses what guards do not have.
type guardWalker struct {
	at       Place
	known    []string
	named    []string
	problems source.List
}

func (w *guardWalker) walk(n ast.Node) {
	switch n := n.(type) {
	case *ast.IntegerNode, *ast.FloatNode:
	case *ast.UnaryNode:
		w.walk(n.Node)
	case *ast.BinaryNode:
		if _, ok := binaries[n.Operator]; !ok {
			w.refuse(n, n.Operator, "a guard has no operator %q", n.Operator)
		}
		w.walk(n.Left)
		w.walk(n.Right)
	case *ast.BuiltinNode:
		if n.Name != "abs" && n.Name != "min" && n.Name != "max" {
			w.refuse(n, n.Name, "a guard has no function %q", n.Name)
		}
		for _, a := range n.Arguments {
			w.walk(a)
		}
	case *ast.MemberNode:
		part, okPart := n.Node.(*ast.IdentifierNode)
		reading, okReading := n.Property.(*ast.StringNode)
		if !okPart || !okReading {
			w.refuse(n, "x", "a guard has numbers and readings such as supply.current")
			return
		}
		w.reading(part.Location().From, part.Value+"."+reading.Value)
	case *ast.ChainNode:
		w.walk(n.Node)
	case *ast.IdentifierNode:
		w.reading(n.Location().From, n.Value)
	default:
		w.refuse(n, "x", "a guard has numbers, readings, + - * /, comparisons, and, or, not; this is none of them")
	}
}

func (w *guardWalker) refuse(n ast.Node, text, format string, args ...any) {
	from := n.Location().From
	w.problems.Addf(w.at.span(from, from+utf8.RuneCountInString(text)), "not-in-guards", "", format, args...)
}

func (w *guardWalker) reading(from int, name string) {
	for _, known := range w.known {
		if known == name {
			for _, already := range w.named {
				if already == name {
					return
				}
			}
			w.named = append(w.named, name)
			sort.Strings(w.named)
			return
		}
	}
	span := w.at.span(from, from+utf8.RuneCountInString(name))
	w.problems.Addf(span, "unknown-reading", source.DidYouMean(name, w.known), "unknown reading %q", name)
}
