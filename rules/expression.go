package rules

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"github.com/expr-lang/expr/ast"
	"github.com/expr-lang/expr/file"
	"github.com/expr-lang/expr/parser"

	"throatwatch/monitor/unit"
)

// maxExpression bounds an expression, bytes, so that no rule file can make the
// parser work for long.
const maxExpression = 2000

// An expression is compiled to closures over the slots of a frame. The argument
// e is the deadband by which thresholds are moved: 0 while the alarm is down.
type (
	numberFunc func(f *Frame) float64 // NaN = unknown
	boolFunc   func(f *Frame, e float64) Tri
	textFunc   func(f *Frame) string // "" = unknown
)

// value is a compiled node: one function, the one of its type.
type value struct {
	typ    Type
	number numberFunc
	truth  boolFunc
	text   textFunc
	name   int     // slot, when isName
	isName bool    //
	fixed  bool    // a number or text that is written down
	n      float64 // the number
	s      string  // the text

	measure   measure
	written   *written // unit of a number that has not met another yet
	bounded   bool     // the number lies between low and high
	low, high float64
	need      []need // of a condition: what it needs to be true
}

// need is something without which a condition cannot be true.
type need struct {
	slot      int
	text      string  // of a text: what it has to be
	low, high float64 // of a number: where it has to lie
	open      bool    // and not at the ends
}

// compiled is an expression that can be judged.
type compiled struct {
	truth   boolFunc
	reads   []int     // slots, in the order of the expression
	orders  bool      // has an ordering comparison, to which a deadband applies
	subject int       // slot of the number that is compared first, -1 when there is none
	falling bool      // the rule becomes true as the subject falls
	ordered []measure // what the ordering comparisons compare
	need    []need
}

// exprFault is what stops a compilation.
type exprFault struct {
	offset  int
	message string
	hint    string
}

// compiler compiles one expression.
type compiler struct {
	src   string
	names []Name
	index index
	units map[int]written // by the character at which the number begins
	out   compiled
}

// compileExpression parses an expression, refuses every construct that is not
// listed here, and compiles it:
//
//	names, dotted names, numbers, numbers with a unit, "texts", true, false, parentheses
//	+ - * /   < <= > >= == !=   and or not (&& || !)   condition ? a : b
//	abs(x)  min(x, y …)  max(x, y …)  known(name)
//
// An operand that is unknown makes the result unknown. Exceptions are those of
// Kleene's logic: false and x is false, true or x is true; and known(name) is
// always known. A quotient by zero and what overflows is unknown.
func compileExpression(src string, names []Name, ix index) (compiled, *exprFault) {
	out, v, at, fault := compileValue(src, names, ix)
	switch {
	case fault != nil:
		return out, fault
	case v.typ != Bool:
		return out, &exprFault{at, "the expression gives " + v.typ.String() + ", wanted is true or false", "compare it with a limit, as in x > 5"}
	}
	out.truth, out.need = v.truth, v.need
	return out, nil
}

// compileValue compiles an expression of any type, which begins at byte at.
func compileValue(src string, names []Name, ix index) (out compiled, v value, at int, fault *exprFault) {
	c := &compiler{src: src, names: names, index: ix, out: compiled{subject: -1}}
	switch {
	case strings.TrimSpace(src) == "":
		return c.out, v, 0, &exprFault{0, "no expression", `write a condition, such as choke_armed and choke_state != "choked"`}
	case len(src) > maxExpression:
		return c.out, v, 0, &exprFault{maxExpression, fmt.Sprintf("expression longer than %d bytes", maxExpression), "split it into several rules"}
	}
	plain, units, fault := takeUnits(src)
	if fault != nil {
		return c.out, v, 0, fault
	}
	c.units = units
	tree, err := parser.Parse(plain)
	if err != nil {
		at, message := 0, err.Error()
		if fe, ok := errors.AsType[*file.Error](err); ok {
			at, message = c.byteOffset(fe.From), plainSyntax(fe.Message)
		}
		return c.out, v, 0, &exprFault{at, message, "comparisons are joined by and, or, not; texts stand in double quotes"}
	}
	v, fault = c.node(tree.Node, 1)
	return c.out, v, c.start(tree.Node), fault
}

// plainSyntax turns the parser's name of a token into words.
func plainSyntax(message string) string {
	const marker = "unexpected token "
	_, token, found := strings.Cut(message, marker)
	if !found {
		return message
	}
	if token == "EOF" {
		return "the expression ends too early"
	}
	if _, quoted, ok := strings.Cut(token, "("); ok {
		token = strings.TrimSuffix(quoted, ")")
	}
	return "did not expect " + token + " here"
}

// byteOffset gives the byte at which the n-th character begins.
func (c *compiler) byteOffset(n int) int {
	for i := range c.src {
		if n == 0 {
			return i
		}
		n--
	}
	return len(c.src)
}

// start gives the byte at which a node begins.
func (c *compiler) start(n ast.Node) int {
	switch n := n.(type) {
	case *ast.BinaryNode:
		return c.start(n.Left)
	case *ast.MemberNode:
		return c.start(n.Node)
	case *ast.ConditionalNode:
		return c.start(n.Cond)
	case *ast.CallNode:
		return c.start(n.Callee)
	case *ast.ChainNode:
		return c.start(n.Node)
	case *ast.SequenceNode:
		return c.start(n.Nodes[0])
	case nil:
		return 0
	}
	return c.byteOffset(n.Location().From)
}

func (c *compiler) fault(n ast.Node, hint, format string, args ...any) (value, *exprFault) {
	return value{}, &exprFault{c.start(n), fmt.Sprintf(format, args...), hint}
}

const allowed = "use names, numbers, texts, + - * /, comparisons, and or not, a ? b : c, abs, min, max and known"

// node compiles a node. sign is +1 where a true node makes the rule true, −1
// where it makes it false, 0 where that depends; a deadband follows it.
func (c *compiler) node(n ast.Node, sign float64) (value, *exprFault) {
	switch n := n.(type) {
	case *ast.IntegerNode:
		return c.numberNode(n, float64(n.Value)), nil
	case *ast.FloatNode:
		return c.numberNode(n, n.Value), nil
	case *ast.StringNode:
		s := n.Value
		return value{typ: Text, fixed: true, s: s, text: func(*Frame) string { return s }}, nil
	case *ast.BoolNode:
		t := TriOf(n.Value)
		return value{typ: Bool, truth: func(*Frame, float64) Tri { return t }}, nil
	case *ast.IdentifierNode, *ast.MemberNode:
		return c.nameNode(n)
	case *ast.UnaryNode:
		return c.unary(n, sign)
	case *ast.BinaryNode:
		return c.binary(n, sign)
	case *ast.ConditionalNode:
		if !n.Ternary {
			return c.fault(n, "write condition ? a : b", "if is not allowed in a rule")
		}
		return c.conditional(n, sign)
	case *ast.BuiltinNode:
		return c.call(n, n.Name, n.Arguments)
	case *ast.CallNode:
		if id, ok := n.Callee.(*ast.IdentifierNode); ok {
			return c.call(n, id.Value, n.Arguments)
		}
	}
	return c.fault(n, allowed, "this construct is not allowed in a rule")
}

// numberNode gives a number that is written down, with its unit.
func (c *compiler) numberNode(n ast.Node, number float64) value {
	v := fixedNumber(number)
	if u, ok := c.units[n.Location().From]; ok {
		v.written = &u
	}
	return v
}

func fixedNumber(n float64) (v value) {
	v.set(n)
	return v
}

// dotted gives the name that a node spells.
func dotted(n ast.Node) (string, bool) {
	switch n := n.(type) {
	case *ast.IdentifierNode:
		return n.Value, true
	case *ast.MemberNode:
		head, ok := dotted(n.Node)
		tail, isText := n.Property.(*ast.StringNode)
		if ok && isText && !n.Optional && !n.Method {
			return head + "." + tail.Value, true
		}
	}
	return "", false
}

// slot finds the name that a node spells.
func (c *compiler) slot(n ast.Node) (int, *exprFault) {
	name, ok := dotted(n)
	if !ok {
		_, fault := c.fault(n, "a name is written with dots, as in channel.p_oil", "this is not a name")
		return 0, fault
	}
	slot, ok := c.index[name]
	if !ok {
		all := make([]string, len(c.names))
		for i := range c.names {
			all[i] = c.names[i].Name
		}
		_, fault := c.fault(n, nearest(name, all), "unknown name %q", name)
		return 0, fault
	}
	c.out.reads = append(c.out.reads, slot)
	return slot, nil
}

func (c *compiler) nameNode(n ast.Node) (value, *exprFault) {
	slot, fault := c.slot(n)
	if fault != nil {
		return value{}, fault
	}
	name := &c.names[slot]
	v := value{typ: name.Type, name: slot, isName: true}
	switch v.typ {
	case Number:
		v.measure = name.measure()
		v.bounded, v.low, v.high = name.Low < name.High, name.Low, name.High
		v.number = func(f *Frame) float64 { return f.Numbers[slot] }
	case Bool:
		v.truth = func(f *Frame, _ float64) Tri { return f.Bools[slot] }
	case Text:
		v.text = func(f *Frame) string { return textAt(f, slot) }
	}
	return v, nil
}

// textAt reads a text; a state that is called unknown is not known.
func textAt(f *Frame, slot int) string {
	if s := f.Texts[slot]; s != "unknown" {
		return s
	}
	return ""
}

func (c *compiler) unary(n *ast.UnaryNode, sign float64) (value, *exprFault) {
	switch n.Operator {
	case "not", "!":
		v, fault := c.want(n.Node, Bool, -sign, n.Operator)
		if fault != nil {
			return value{}, fault
		}
		a := v.truth
		return value{typ: Bool, truth: func(f *Frame, e float64) Tri { return -a(f, e) }}, nil
	case "-", "+":
		v, fault := c.want(n.Node, Number, 0, n.Operator)
		if fault != nil || n.Operator == "+" {
			return v, fault
		}
		if v.fixed {
			w := v.written
			v = fixedNumber(-v.n)
			v.written = w
			return v, nil
		}
		a, m := v.number, v.measure
		v = value{typ: Number, number: func(f *Frame) float64 { return -a(f) }, bounded: v.bounded, low: -v.high, high: -v.low}
		if m.dimension != unit.Temperature {
			v.measure = m
		}
		return v, nil
	}
	return c.fault(n, allowed, "operator %s is not allowed in a rule", n.Operator)
}

// want compiles a node that must be of a type.
func (c *compiler) want(n ast.Node, t Type, sign float64, by string) (value, *exprFault) {
	v, fault := c.node(n, sign)
	if fault == nil && v.typ != t {
		return c.fault(n, allowed, "%s takes %s, this is %s", by, t, v.typ)
	}
	return v, fault
}

func (c *compiler) binary(n *ast.BinaryNode, sign float64) (value, *exprFault) {
	switch n.Operator {
	case "and", "&&", "or", "||":
		l, fault := c.want(n.Left, Bool, sign, n.Operator)
		if fault != nil {
			return value{}, fault
		}
		r, fault := c.want(n.Right, Bool, sign, n.Operator)
		if fault != nil {
			return value{}, fault
		}
		if n.Operator == "or" || n.Operator == "||" {
			return value{typ: Bool, truth: or(l.truth, r.truth)}, nil
		}
		if fault := c.contradiction(n.Right, l.need, r.need); fault != nil {
			return value{}, fault
		}
		return value{typ: Bool, truth: and(l.truth, r.truth), need: append(slices.Clip(l.need), r.need...)}, nil
	case "+", "-", "*", "/", "<", "<=", ">", ">=":
		l, fault := c.want(n.Left, Number, 0, n.Operator)
		if fault != nil {
			return value{}, fault
		}
		r, fault := c.want(n.Right, Number, 0, n.Operator)
		if fault != nil {
			return value{}, fault
		}
		lo, ro := operand{&l, n.Left}, operand{&r, n.Right}
		switch n.Operator {
		case "+", "-":
			return c.sum(n.Operator, lo, ro)
		case "*", "/":
			return c.product(n.Operator, lo, ro)
		}
		_, fault = c.meet(lo, ro)
		if fault == nil {
			fault = c.reach(lo, ro)
		}
		if fault != nil {
			return value{}, fault
		}
		m := l.measure
		if m.plain() {
			m = r.measure
		}
		c.out.ordered = append(c.out.ordered, m)
		v := value{typ: Bool, need: needs(n.Operator, &l, &r)}
		if orEqual := len(n.Operator) == 2; n.Operator[0] == '<' {
			c.watch(l, r, sign >= 0)
			v.truth = less(l, r, orEqual, sign)
		} else {
			c.watch(l, r, sign < 0)
			v.truth = less(r, l, orEqual, sign)
		}
		return v, nil
	case "==", "!=":
		return c.equality(n)
	}
	return c.fault(n, allowed, "operator %s is not allowed in a rule", n.Operator)
}

// watch notes what the first ordering comparison is about: its left side, or its
// right side if only that is a name. falling tells that the rule becomes true as
// the left side falls.
func (c *compiler) watch(l, r value, falling bool) {
	if !c.out.orders {
		c.out.falling = falling
	}
	c.out.orders = true
	switch {
	case c.out.subject >= 0:
	case l.isName:
		c.out.subject, c.out.falling = l.name, falling
	case r.isName:
		c.out.subject, c.out.falling = r.name, !falling
	}
}

// less gives l < r, or l ≤ r. The deadband e moves the threshold to the side on
// which the rule stays true.
func less(l, r value, orEqual bool, sign float64) boolFunc {
	if l.isName && r.fixed {
		slot, limit := l.name, r.n
		return func(f *Frame, e float64) Tri { return below(f.Numbers[slot], limit+sign*e, orEqual) }
	}
	if l.fixed && r.isName {
		slot, limit := r.name, l.n
		return func(f *Frame, e float64) Tri { return below(limit-sign*e, f.Numbers[slot], orEqual) }
	}
	a, b := l.number, r.number
	return func(f *Frame, e float64) Tri { return below(a(f), b(f)+sign*e, orEqual) }
}

func below(a, b float64, orEqual bool) Tri {
	switch {
	case a-a != 0 || b-b != 0: // NaN or infinite
		return Unknown
	case a < b || orEqual && a == b:
		return True
	}
	return False
}

func and(a, b boolFunc) boolFunc {
	return func(f *Frame, e float64) Tri {
		x := a(f, e)
		if x == False {
			return False
		}
		return min(x, b(f, e))
	}
}

func or(a, b boolFunc) boolFunc {
	return func(f *Frame, e float64) Tri {
		x := a(f, e)
		if x == True {
			return True
		}
		return max(x, b(f, e))
	}
}

func arithmetic(op string, a, b numberFunc) value {
	v := value{typ: Number}
	switch op {
	case "+":
		v.number = func(f *Frame) float64 { return a(f) + b(f) }
	case "-":
		v.number = func(f *Frame) float64 { return a(f) - b(f) }
	case "*":
		v.number = func(f *Frame) float64 { return a(f) * b(f) }
	case "/":
		v.number = func(f *Frame) float64 { return a(f) / b(f) }
	}
	return v
}

// equality compares two numbers, truth values or texts for being the same. A
// text that is written down must be one that the name can have: a misspelt state
// would be false for ever.
func (c *compiler) equality(n *ast.BinaryNode) (value, *exprFault) {
	l, fault := c.node(n.Left, 0)
	if fault != nil {
		return value{}, fault
	}
	r, fault := c.node(n.Right, 0)
	if fault != nil {
		return value{}, fault
	}
	if l.typ != r.typ {
		return c.fault(n, "compare like with like; texts stand in double quotes", "%s compares %s with %s", n.Operator, l.typ, r.typ)
	}
	want := TriOf(n.Operator == "==")
	switch l.typ {
	case Number:
		lo, ro := operand{&l, n.Left}, operand{&r, n.Right}
		_, fault := c.meet(lo, ro)
		if fault == nil {
			fault = c.reach(lo, ro)
		}
		if fault != nil {
			return value{}, fault
		}
		a, b := l.number, r.number
		return value{typ: Bool, need: needs(n.Operator, &l, &r), truth: func(f *Frame, _ float64) Tri {
			x, y := a(f), b(f)
			if x-x != 0 || y-y != 0 {
				return Unknown
			}
			return TriOf(x == y) * want
		}}, nil
	case Bool:
		a, b := l.truth, r.truth
		return value{typ: Bool, truth: func(f *Frame, e float64) Tri { return a(f, e) * b(f, e) * want }}, nil
	case Text:
		if fault := c.canBe(n.Right, r, l); fault != nil {
			return value{}, fault
		}
		if fault := c.canBe(n.Left, l, r); fault != nil {
			return value{}, fault
		}
	}
	a, b := l.text, r.text
	return value{typ: Bool, need: needs(n.Operator, &l, &r), truth: func(f *Frame, _ float64) Tri {
		x, y := a(f), b(f)
		if x == "" || y == "" {
			return Unknown
		}
		return TriOf(x == y) * want
	}}, nil
}

// canBe checks that the name can have the text that is written down.
func (c *compiler) canBe(at ast.Node, written, name value) *exprFault {
	if !written.fixed || !name.isName || c.names[name.name].Values == nil {
		return nil
	}
	who := &c.names[name.name]
	if slices.Contains(who.Values, written.s) {
		return nil
	}
	hint := nearest(written.s, who.Values)
	if written.s == "unknown" {
		hint = "use not known(" + who.Name + ")"
	}
	_, fault := c.fault(at, hint, "%s is never %q", who.Name, written.s)
	return fault
}

func (c *compiler) conditional(n *ast.ConditionalNode, sign float64) (value, *exprFault) {
	cond, fault := c.want(n.Cond, Bool, 0, "?")
	if fault != nil {
		return value{}, fault
	}
	l, fault := c.node(n.Exp1, sign)
	if fault != nil {
		return value{}, fault
	}
	r, fault := c.want(n.Exp2, l.typ, sign, "the other side of ?")
	if fault != nil {
		return value{}, fault
	}
	which := cond.truth
	v := value{typ: l.typ}
	switch l.typ {
	case Number:
		if v.measure, fault = c.meet(operand{&l, n.Exp1}, operand{&r, n.Exp2}); fault != nil {
			return value{}, fault
		}
		a, b := l.number, r.number
		v.number = func(f *Frame) float64 {
			switch which(f, 0) {
			case True:
				return a(f)
			case False:
				return b(f)
			case Unknown:
			}
			return math.NaN()
		}
	case Bool:
		a, b := l.truth, r.truth
		v.truth = func(f *Frame, e float64) Tri {
			switch which(f, 0) {
			case True:
				return a(f, e)
			case False:
				return b(f, e)
			case Unknown:
			}
			return Unknown
		}
	case Text:
		a, b := l.text, r.text
		v.text = func(f *Frame) string {
			switch which(f, 0) {
			case True:
				return a(f)
			case False:
				return b(f)
			case Unknown:
			}
			return ""
		}
	}
	return v, nil
}

func (c *compiler) call(n ast.Node, name string, args []ast.Node) (value, *exprFault) {
	if len(args) > 0 && c.start(args[0]) < c.start(n) {
		return c.fault(n, "write it as a call, as in abs(x)", "a pipe is not allowed in a rule")
	}
	switch name {
	case "known":
		if len(args) != 1 {
			return c.fault(n, "as in known(choke_margin_percent)", "known takes one name")
		}
		slot, fault := c.slot(args[0])
		if fault != nil {
			return value{}, fault
		}
		return value{typ: Bool, truth: known(c.names[slot].Type, slot)}, nil
	case "abs", "min", "max":
		if name == "abs" && len(args) != 1 {
			return c.fault(n, "as in abs(x)", "abs takes one number")
		}
		if name != "abs" && len(args) < 2 {
			return c.fault(n, "as in "+name+"(x, y)", "%s takes two numbers or more", name)
		}
		return c.function(name, args)
	}
	return c.fault(n, allowed, "function %s is not allowed in a rule", name)
}

// function compiles abs, min or max. The arguments of min and max measure the same.
func (c *compiler) function(name string, args []ast.Node) (value, *exprFault) {
	all := make([]value, len(args))
	for i, arg := range args {
		var fault *exprFault
		if all[i], fault = c.want(arg, Number, 0, name); fault != nil {
			return value{}, fault
		}
	}
	first := max(0, slices.IndexFunc(all, func(v value) bool { return v.written == nil && !v.measure.plain() }))
	measured := true
	for i := range all {
		if i == first {
			continue
		}
		m, fault := c.meet(operand{&all[first], args[first]}, operand{&all[i], args[i]})
		if fault != nil {
			return value{}, fault
		}
		measured = measured && !m.plain()
	}
	var m measure
	if measured {
		m = all[first].measure
	}
	of := make([]numberFunc, len(all))
	for i := range all {
		of[i] = all[i].number
	}
	return value{typ: Number, number: function(name, of), measure: m}, nil
}

func known(t Type, slot int) boolFunc {
	switch t {
	case Number:
		return func(f *Frame, _ float64) Tri { return TriOf(f.Numbers[slot]-f.Numbers[slot] == 0) }
	case Bool:
		return func(f *Frame, _ float64) Tri { return TriOf(f.Bools[slot] != Unknown) }
	case Text:
	}
	return func(f *Frame, _ float64) Tri { return TriOf(textAt(f, slot) != "") }
}

// function gives abs, min or max; the built-in min and max of Go give NaN when
// an argument is NaN, as is needed here.
func function(name string, of []numberFunc) numberFunc {
	first := of[0]
	switch name {
	case "abs":
		return func(f *Frame) float64 { return math.Abs(first(f)) }
	case "min":
		return func(f *Frame) float64 {
			v := first(f)
			for _, next := range of[1:] {
				v = min(v, next(f))
			}
			return v
		}
	}
	return func(f *Frame) float64 {
		v := first(f)
		for _, next := range of[1:] {
			v = max(v, next(f))
		}
		return v
	}
}
