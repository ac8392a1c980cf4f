package limits

import (
	"errors"
	"fmt"
	"math"
	"sort"
	"strings"
	"unicode/utf8"

	"github.com/expr-lang/expr/ast"
	"github.com/expr-lang/expr/file"
	"github.com/expr-lang/expr/parser"

	"proofrate/limits/quantity"
	"proofrate/limits/source"
)

// Bounds of an expression, held by a scan of our own: expr's parser overflows the stack on parentheses.
const (
	expressionBytesMax = 4096
	expressionDepthMax = 64
)

// FigureType is what the compiler knows of a figure.
type FigureType struct {
	Unit   quantity.Unit
	Labels []string // the labels that index its elements; none for a single figure
}

// Place is where an expression stands: the span's start is the expression's first byte.
type Place struct {
	Span source.Span
	Text string // as it stands in the document
}

// Limit is a compiled requirement.
type Limit struct {
	text string
	root *node
}

// Formula is a compiled expression whose value is a figure.
type Formula struct {
	text string
	root *node
}

// Figures are the figures that the limit names.
func (l *Limit) Figures() []string { return l.root.figures(nil) }

// Figures are the figures that the formula names.
func (f *Formula) Figures() []string { return f.root.figures(nil) }

// String is the expression.
func (l *Limit) String() string { return l.text }

// Labels are the names of the labels over which the limit is judged; none if it is judged once.
func (l *Limit) Labels() []string { return split(l.root.labels) }

// Labels are the names of the labels over which the formula's figure is a series.
func (f *Formula) Labels() []string { return split(f.root.labels) }

const labelSeparator = "\x1f"

func split(labels string) []string {
	if labels == "" {
		return nil
	}
	return strings.Split(labels, labelSeparator)
}

// Compile reads a requirement. Every mistake is reported at its place.
func Compile(at Place, figures map[string]FigureType) (*Limit, source.List) {
	root, problems := compile(at, figures)
	if root != nil && !root.truth {
		problems.Addf(at.Span, "no-requirement", "compare it, as in "+clip(at.Text)+" <= 1", "a requirement is true or false; this is a number")
	}
	if len(problems) > 0 {
		return nil, problems
	}
	return &Limit{at.Text, root}, nil
}

// CompileFormula reads a figure's formula.
func CompileFormula(at Place, figures map[string]FigureType) (*Formula, source.List) {
	root, problems := compile(at, figures)
	if root != nil && root.truth {
		problems.Addf(at.Span, "no-number", "leave the comparison to a limit", "a formula is a number; this is true or false")
	}
	if len(problems) > 0 {
		return nil, problems
	}
	return &Formula{at.Text, root}, nil
}

// Between makes the limit low <= figure <= high of a structured requirement; an infinite bound is none. The bounds are
// in the figure's unit.
func Between(figure string, of FigureType, low, high float64, text string) *Limit {
	f := func() *node {
		return &node{op: opFigure, figure: figure, labels: strings.Join(of.Labels, labelSeparator), unit: of.Unit}
	}
	compare := func(o op, bound float64) *node {
		n := f()
		return &node{op: o, truth: true, labels: n.labels, args: []*node{n, {op: opNumber, number: bound}}, unit: of.Unit}
	}
	var root *node
	if !math.IsInf(low, -1) {
		root = compare(opGreaterEqual, low)
	}
	if !math.IsInf(high, 1) {
		upper := compare(opLessEqual, high)
		if root == nil {
			root = upper
		} else {
			root = &node{op: opAnd, truth: true, labels: upper.labels, args: []*node{root, upper}}
		}
	}
	return &Limit{text, root}
}

func clip(text string) string {
	if utf8.RuneCountInString(text) > 30 {
		return "..."
	}
	return text
}

// compile bounds, parses and walks.
func compile(at Place, figures map[string]FigureType) (*node, source.List) {
	tree, problems := parse(at)
	if tree == nil {
		return nil, problems
	}
	c := compiler{at: at, figures: figures}
	root := c.walk(tree.Node)
	if len(c.problems) > 0 {
		c.problems.Sort()
		return nil, c.problems
	}
	return root, nil
}

// parse bounds the text and gives it to expr's parser.
func parse(at Place) (tree *parser.Tree, problems source.List) {
	refuse := func(span source.Span, code, message string) (*parser.Tree, source.List) {
		problems.Add(source.Diagnostic{Span: span, Code: code, Message: message})
		return nil, problems
	}
	if len(at.Text) > expressionBytesMax {
		return refuse(at.Span, "too-large", fmt.Sprintf("an expression has at most %d bytes, this one %d", expressionBytesMax, len(at.Text)))
	}
	depth, operators := 0, 0
	for i := range len(at.Text) {
		switch at.Text[i] {
		case '(', '[', '{', '?':
			depth++
		case ')', ']', '}':
			depth--
		case '!', '-', '+':
			operators++
		}
		if depth > expressionDepthMax || operators > 2*expressionDepthMax {
			return refuse(at.Span, "too-deep", fmt.Sprintf("an expression is nested at most %d deep", expressionDepthMax))
		}
	}
	tree, err := parser.Parse(at.Text)
	if err == nil {
		return tree, nil
	}
	span, message := at.Span, err.Error()
	if broken, ok := errors.AsType[*file.Error](err); ok {
		span, message = at.span(broken.From, broken.To), broken.Message
	}
	return refuse(span, "expression", "the expression cannot be read: "+message)
}

// span turns runes of the expression into a span of the file.
func (p Place) span(from, to int) source.Span {
	start, end, n := -1, -1, 0
	for i := range p.Text {
		if n == from {
			start = i
		}
		if n == to {
			end = i
		}
		n++
	}
	if start < 0 {
		start = max(0, len(p.Text)-1)
	}
	if end < 0 {
		end = len(p.Text)
	}
	s := p.Span
	s.Start, s.End = p.Span.Start+start, min(p.Span.Start+max(end, start+1), max(p.Span.End, p.Span.Start+1))
	return s
}

type compiler struct {
	at       Place
	figures  map[string]FigureType
	problems source.List
}

func (c *compiler) refuse(n ast.Node, to int, code, help, format string, args ...any) *node {
	from := n.Location().From
	c.problems.Addf(c.at.span(from, max(to, from+1)), code, help, format, args...)
	return nil
}

// walk turns expr's tree into ours and refuses every construct that limits do not have. It goes on after a mistake, so
// that all unknown names are reported in one pass.
func (c *compiler) walk(n ast.Node) *node {
	switch n := n.(type) {
	case *ast.IntegerNode:
		from := n.Location().From
		return &node{op: opNumber, number: float64(n.Value), from: from, to: c.digits(from)}
	case *ast.FloatNode:
		from := n.Location().From
		if math.IsInf(n.Value, 0) || math.IsNaN(n.Value) {
			return c.refuse(n, c.digits(from), "expression", "", "this number is beyond what can be computed with")
		}
		return &node{op: opNumber, number: n.Value, from: from, to: c.digits(from)}
	case *ast.IdentifierNode:
		return c.figure(n)
	case *ast.UnaryNode:
		return c.unary(n)
	case *ast.BinaryNode:
		return c.binary(n)
	case *ast.BuiltinNode:
		return c.call(n, n.Name, n.Arguments)
	case *ast.CallNode:
		if callee, ok := n.Callee.(*ast.IdentifierNode); ok {
			return c.call(n.Callee, callee.Value, n.Arguments)
		}
	case *ast.BoolNode:
		return c.refuse(n, n.Location().To, "expression", "", "true and false are no figures; a requirement compares figures")
	}
	kind := strings.ToLower(strings.TrimSuffix(strings.TrimPrefix(fmt.Sprintf("%T", n), "*ast."), "Node"))
	return c.refuse(n, n.Location().To, "not-in-limits", "limits have numbers, figures, + - * /, comparisons, and, or, not, and "+known(functions),
		"a limit has no such construct (%s)", kind)
}

// digits finds where a number ends.
func (c *compiler) digits(from int) int {
	text := []rune(c.at.Text)
	to := from
	for to < len(text) && (text[to] >= '0' && text[to] <= '9' || strings.ContainsRune("._eExXabcdfABCDF", text[to])) {
		to++
	}
	return to
}

func known[T any](table map[string]T) string {
	names := make([]string, 0, len(table))
	for name := range table {
		names = append(names, name)
	}
	sort.Strings(names)
	return strings.Join(names, ", ")
}

func (c *compiler) figure(n *ast.IdentifierNode) *node {
	from := n.Location().From
	to := from + utf8.RuneCountInString(n.Value)
	f, ok := c.figures[n.Value]
	if !ok {
		names := make([]string, 0, len(c.figures))
		for name := range c.figures {
			names = append(names, name)
		}
		sort.Strings(names)
		return c.refuse(n, to, "unknown-figure", source.DidYouMean(n.Value, names), "unknown figure %q", n.Value)
	}
	return &node{op: opFigure, figure: n.Value, labels: strings.Join(f.Labels, labelSeparator), unit: f.Unit, from: from, to: to}
}

func (c *compiler) unary(n *ast.UnaryNode) *node {
	o, ok := unaries[n.Operator]
	arg := c.walk(n.Node)
	if n.Operator == "+" {
		return arg
	}
	if !ok {
		return c.refuse(n, n.Location().To, "not-in-limits", "", "a limit has no operator %q", n.Operator)
	}
	if arg == nil {
		return nil
	}
	if arg.truth != (o == opNot) {
		return c.mixed(n, n.Operator, o == opNot)
	}
	if o == opNegate && arg.op == opNumber {
		return &node{op: opNumber, number: -arg.number, from: n.Location().From, to: arg.to}
	}
	return &node{op: o, args: []*node{arg}, labels: arg.labels, truth: arg.truth, unit: arg.unit, from: n.Location().From, to: arg.to}
}

// mixed reports a truth where a number belongs, or the other way round.
func (c *compiler) mixed(n ast.Node, operator string, logical bool) *node {
	to := n.Location().From + utf8.RuneCountInString(operator)
	if logical {
		return c.refuse(n, to, "expression", "compare each side, as in bias <= 2 or bias >= 3", "%q joins what is true or false; one side is a number", operator)
	}
	return c.refuse(n, to, "expression", "", "%q works on numbers; one side is true or false", operator)
}

func (c *compiler) binary(n *ast.BinaryNode) *node {
	o, ok := binaries[n.Operator]
	a, b := c.walk(n.Left), c.walk(n.Right)
	if !ok {
		return c.refuse(n, n.Location().From+utf8.RuneCountInString(n.Operator), "not-in-limits", "", "a limit has no operator %q", n.Operator)
	}
	if a == nil || b == nil {
		return nil
	}
	if a.truth != o.logical() || b.truth != o.logical() {
		return c.mixed(n, n.Operator, o.logical())
	}
	labels, ok := c.joined(n, n.Operator, a, b)
	if !ok {
		return nil
	}
	unit := a.unit
	if unit == (quantity.Unit{}) {
		unit = b.unit
	}
	return &node{op: o, args: []*node{a, b}, labels: labels, truth: o.comparison() || o.logical(), unit: unit, from: a.from, to: b.to}
}

// joined gives the labels of two sides: two series need equal ones.
func (c *compiler) joined(n ast.Node, operator string, a, b *node) (string, bool) {
	switch {
	case a.labels == b.labels || b.labels == "":
		return a.labels, true
	case a.labels == "":
		return b.labels, true
	}
	c.refuse(n, n.Location().From+utf8.RuneCountInString(operator), "unequal-labels", "aggregate one of them, as in max(...)",
		"one side is a series over %s, the other over %s", strings.Join(split(a.labels), " "), strings.Join(split(b.labels), " "))
	return "", false
}

func (c *compiler) call(n ast.Node, name string, arguments []ast.Node) *node {
	from := n.Location().From
	to := from + utf8.RuneCountInString(name)
	o, ok := functions[name]
	args := make([]*node, len(arguments))
	sound := true
	for i, a := range arguments {
		args[i] = c.walk(a)
		sound = sound && args[i] != nil
	}
	if !ok {
		names := strings.Split(known(functions), ", ")
		return c.refuse(n, to, "unknown-function", source.DidYouMean(name, names), "a limit has no function %q", name)
	}
	if !sound {
		return nil
	}
	if len(args) == 0 || o == opAbs && len(args) != 1 {
		return c.refuse(n, to, "expression", "", "%s takes %s, it has %d", name, map[bool]string{true: "one number", false: "a series or several numbers"}[o == opAbs], len(args))
	}
	result := &node{op: o, args: args, unit: args[0].unit, from: from, to: args[len(args)-1].to + 1}
	for _, a := range args {
		if a.truth {
			return c.refuse(n, to, "expression", "", "%s works on numbers; this is true or false", name)
		}
	}
	if o == opAbs {
		result.labels = args[0].labels
	}
	return result
}
