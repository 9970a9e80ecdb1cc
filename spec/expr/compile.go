package expr

import (
	"fmt"
	"math"
	"regexp"
	"sort"
	"strconv"
	"strings"

	"github.com/hashicorp/hcl/v2"
	"github.com/hashicorp/hcl/v2/hclsyntax"
	"github.com/zclconf/go-cty/cty"
)

// Schema is what an expression may name.
type Schema struct {
	Columns   map[string]Kind
	Constants map[string]cty.Value // `let` names: numbers, text, truth values
	Noun      string               // what the columns are called in messages; "" is column
}

// Program is a compiled expression. It may be run by many goroutines.
type Program struct {
	root node
	uses []string
}

// Kind is the type of the program's value.
func (p *Program) Kind() Kind { return p.root.kind }

// Uses lists the columns that the program reads, sorted.
func (p *Program) Uses() []string { return p.uses }

// Key is the program's meaning as text: constants put in, fully
// parenthesised, free of white space, comments and the names of constants.
func (p *Program) Key() string {
	var b strings.Builder
	p.root.write(&b)
	return b.String()
}

func (k Kind) String() string {
	switch k {
	case Number:
		return "a number"
	case Text:
		return "text"
	case Bool:
		return "a condition"
	case Date:
		return "a date"
	}
	return "nothing"
}

// node is one operation. A constant has op "const" and its value in num, text
// or num (1 true, 0 false).
type node struct {
	kind Kind
	op   string
	name string // of a column or function
	num  float64
	text string
	re   *regexp.Regexp
	args []node
}

func (n *node) constant() bool { return n.op == "const" }

func (n *node) write(b *strings.Builder) {
	switch n.op {
	case "const":
		switch n.kind {
		case Text:
			b.WriteString(strconv.Quote(n.text))
		case Bool:
			b.WriteString(strconv.FormatBool(n.num == 1))
		case Date:
			b.WriteString("date(" + strconv.FormatFloat(n.num, 'g', -1, 64) + ")")
		default:
			b.WriteString(strconv.FormatFloat(n.num, 'g', -1, 64))
		}
		return
	case "column":
		b.WriteString("[" + n.name + "]")
		return
	}
	b.WriteString("(" + n.op)
	for i := range n.args {
		b.WriteByte(' ')
		n.args[i].write(b)
	}
	b.WriteByte(')')
}

// Limits on what a spec may make the compiler do.
const (
	maxDepth = 200
	maxNodes = 10_000
)

// Compile checks e against the schema and compiles it. Every mistake is
// reported, with its place.
func Compile(e hclsyntax.Expression, s Schema) (*Program, hcl.Diagnostics) {
	c := &compiler{schema: s, uses: map[string]bool{}}
	root, ok := c.expr(e, 0)
	if len(c.diags) > 0 || !ok {
		return nil, c.diags
	}
	p := &Program{root: root}
	for u := range c.uses {
		p.uses = append(p.uses, u)
	}
	sort.Strings(p.uses)
	return p, nil
}

type compiler struct {
	schema Schema
	uses   map[string]bool
	diags  hcl.Diagnostics
	nodes  int
}

func (c *compiler) fail(r hcl.Range, found, do string, a ...any) (node, bool) {
	c.diags = append(c.diags, &hcl.Diagnostic{Severity: hcl.DiagError, Summary: found, Detail: fmt.Sprintf(do, a...), Subject: r.Ptr()})
	return node{}, false
}

func (c *compiler) expr(e hclsyntax.Expression, depth int) (node, bool) {
	c.nodes++
	if depth > maxDepth || c.nodes > maxNodes {
		if c.nodes > maxNodes+1 || len(c.diags) > 0 {
			return node{}, false
		}
		return c.fail(e.Range(), "an expression too deep or too long", "expected at most %d levels and %d parts; split it over several added columns", maxDepth, maxNodes)
	}
	switch e := e.(type) {
	case *hclsyntax.ParenthesesExpr:
		return c.expr(e.Expression, depth+1)
	case *hclsyntax.LiteralValueExpr:
		return c.value(e.Val, e.SrcRange)
	case *hclsyntax.TemplateExpr:
		if !e.IsStringLiteral() {
			if len(e.Parts) == 0 {
				return node{kind: Text, op: "const"}, true
			}
			return c.fail(e.SrcRange, "text with ${...} in it", "expected plain text; expressions cannot be put into text")
		}
		v, _ := e.Value(nil)
		return c.value(v, e.SrcRange)
	case *hclsyntax.TemplateWrapExpr:
		return c.fail(e.SrcRange, "text with ${...} in it", "expected plain text; write the name without quotes and ${}")
	case *hclsyntax.ScopeTraversalExpr:
		return c.name(e)
	case *hclsyntax.UnaryOpExpr:
		return c.unary(e, depth)
	case *hclsyntax.BinaryOpExpr:
		return c.binary(e, depth)
	case *hclsyntax.ConditionalExpr:
		return c.conditional(e, depth)
	case *hclsyntax.FunctionCallExpr:
		return c.call(e, depth)
	}
	return c.fail(e.Range(), "something that is no expression over columns", "expected columns, constants, operators, functions and ... ? ... : ...")
}

func (c *compiler) value(v cty.Value, r hcl.Range) (node, bool) {
	if v.IsNull() || !v.IsKnown() {
		return c.fail(r, "null", "expected a value; use present(x) to ask whether a cell has one")
	}
	switch v.Type() {
	case cty.Number:
		f, _ := v.AsBigFloat().Float64()
		if math.IsInf(f, 0) {
			return c.fail(r, "a number beyond 1e308", "expected a number that a double can hold")
		}
		return node{kind: Number, op: "const", num: f}, true
	case cty.String:
		return node{kind: Text, op: "const", text: v.AsString()}, true
	case cty.Bool:
		n := node{kind: Bool, op: "const"}
		if v.True() {
			n.num = 1
		}
		return n, true
	}
	return c.fail(r, "a list", "expected a number, text or true and false")
}

func (c *compiler) name(e *hclsyntax.ScopeTraversalExpr) (node, bool) {
	name := e.Traversal.RootName()
	if len(e.Traversal) > 1 {
		return c.fail(e.SrcRange, fmt.Sprintf("%q with more behind it", name), "expected a column's bare name")
	}
	if k, ok := c.schema.Columns[name]; ok {
		c.uses[name] = true
		return node{kind: k, op: "column", name: name}, true
	}
	if v, ok := c.schema.Constants[name]; ok {
		return c.value(v, e.SrcRange)
	}
	var all []string
	for n := range c.schema.Columns {
		all = append(all, n)
	}
	for n := range c.schema.Constants {
		all = append(all, n)
	}
	noun := c.schema.Noun
	if noun == "" {
		noun = "column"
	}
	return c.fail(e.SrcRange, fmt.Sprintf("unknown %s %q", noun, name), "expected one of %s%s", list(all), Suggest(name, all))
}

func (c *compiler) unary(e *hclsyntax.UnaryOpExpr, depth int) (node, bool) {
	x, ok := c.expr(e.Val, depth+1)
	if !ok {
		return x, false
	}
	if e.Op == hclsyntax.OpNegate {
		if x.kind != Number {
			return c.fail(e.SrcRange, "minus "+x.kind.String(), "expected a number after -")
		}
		return fold(node{kind: Number, op: "neg", args: []node{x}}), true
	}
	if x.kind != Bool {
		return c.fail(e.SrcRange, "! before "+x.kind.String(), "expected a condition after !")
	}
	return fold(node{kind: Bool, op: "not", args: []node{x}}), true
}

var operators = map[*hclsyntax.Operation]string{
	hclsyntax.OpAdd: "+", hclsyntax.OpSubtract: "-", hclsyntax.OpMultiply: "*", hclsyntax.OpDivide: "/", hclsyntax.OpModulo: "%",
	hclsyntax.OpEqual: "==", hclsyntax.OpNotEqual: "!=", hclsyntax.OpLessThan: "<", hclsyntax.OpLessThanOrEqual: "<=",
	hclsyntax.OpGreaterThan: ">", hclsyntax.OpGreaterThanOrEqual: ">=", hclsyntax.OpLogicalAnd: "&&", hclsyntax.OpLogicalOr: "||",
}

func (c *compiler) binary(e *hclsyntax.BinaryOpExpr, depth int) (node, bool) {
	a, okA := c.expr(e.LHS, depth+1)
	b, okB := c.expr(e.RHS, depth+1)
	if !okA || !okB {
		return node{}, false
	}
	op := operators[e.Op]
	wrong := func(expected string) (node, bool) {
		return c.fail(e.SrcRange, fmt.Sprintf("%s %s %s", a.kind, op, b.kind), "expected %s", expected)
	}
	out := node{op: op, args: []node{a, b}}
	switch op {
	case "&&", "||":
		if a.kind != Bool || b.kind != Bool {
			return wrong("a condition on both sides of " + op)
		}
		out.kind = Bool
	case "==", "!=", "<", "<=", ">", ">=":
		out.kind = Bool
		if ok := c.dates(&out, e); !ok {
			return node{}, false
		}
		a, b = out.args[0], out.args[1]
		if a.kind != b.kind {
			return wrong("the same type on both sides of " + op)
		}
		if op != "==" && op != "!=" && a.kind == Bool {
			return wrong("numbers, dates or text; conditions have no order")
		}
	default:
		switch {
		case a.kind == Number && b.kind == Number:
			out.kind = Number
		case op == "-" && a.kind == Date && b.kind == Date:
			out.kind = Number
		case (op == "+" || op == "-") && a.kind == Date && b.kind == Number:
			out.kind = Date
		case op == "+" && a.kind == Number && b.kind == Date:
			out.kind = Date
		default:
			return wrong("numbers on both sides of " + op + " (or a date and a number of days)")
		}
	}
	return fold(out), true
}

// dates turns ISO text beside a date into a date.
func (c *compiler) dates(n *node, e *hclsyntax.BinaryOpExpr) bool {
	for i := range n.args {
		a, other := &n.args[i], &n.args[1-i]
		if other.kind != Date || a.kind != Text || !a.constant() {
			continue
		}
		d, ok := ParseDate(a.text)
		if !ok {
			r := e.LHS.Range()
			if i == 1 {
				r = e.RHS.Range()
			}
			c.fail(r, fmt.Sprintf("%q beside a date", a.text), "expected an ISO date such as \"2026-03-01\"")
			return false
		}
		*a = node{kind: Date, op: "const", num: d}
	}
	return true
}

func (c *compiler) conditional(e *hclsyntax.ConditionalExpr, depth int) (node, bool) {
	q, ok1 := c.expr(e.Condition, depth+1)
	a, ok2 := c.expr(e.TrueResult, depth+1)
	b, ok3 := c.expr(e.FalseResult, depth+1)
	if !ok1 || !ok2 || !ok3 {
		return node{}, false
	}
	if q.kind != Bool {
		return c.fail(e.Condition.Range(), q.kind.String()+" before ?", "expected a condition")
	}
	if a.kind != b.kind {
		return c.fail(e.SrcRange, fmt.Sprintf("%s or %s", a.kind, b.kind), "expected the same type on both sides of :")
	}
	return fold(node{kind: a.kind, op: "?", args: []node{q, a, b}}), true
}

// function is a signature: kinds of the arguments, of the value.
type function struct {
	args  []Kind
	more  bool // the last may be repeated
	least int
	out   Kind
}

var functions = map[string]function{
	"log": {args: []Kind{Number}, out: Number}, "log10": {args: []Kind{Number}, out: Number},
	"exp": {args: []Kind{Number}, out: Number}, "sqrt": {args: []Kind{Number}, out: Number},
	"abs": {args: []Kind{Number}, out: Number},
	"min": {args: []Kind{Number, Number}, more: true, out: Number}, "max": {args: []Kind{Number, Number}, more: true, out: Number},
	"round": {args: []Kind{Number, Number}, least: 1, out: Number},
	"lower": {args: []Kind{Text}, out: Text}, "upper": {args: []Kind{Text}, out: Text}, "trim": {args: []Kind{Text}, out: Text},
	"matches": {args: []Kind{Text, Text}, out: Bool},
	"year":    {args: []Kind{Date}, out: Number}, "month": {args: []Kind{Date}, out: Number},
	"days_since": {args: []Kind{Date, Date}, out: Number},
	"present":    {args: []Kind{0}, out: Bool},
}

func (c *compiler) call(e *hclsyntax.FunctionCallExpr, depth int) (node, bool) {
	f, ok := functions[e.Name]
	if !ok {
		var all []string
		for n := range functions {
			all = append(all, n)
		}
		return c.fail(e.NameRange, fmt.Sprintf("unknown function %q", e.Name), "expected one of %s%s", list(all), Suggest(e.Name, all))
	}
	out := node{kind: f.out, op: e.Name, name: e.Name}
	good := true
	for i, a := range e.Args {
		n, ok := c.expr(a, depth+1)
		if !ok {
			good = false
			continue
		}
		want := f.args[min(i, len(f.args)-1)]
		if want == Date && n.kind == Text && n.constant() {
			d, ok := ParseDate(n.text)
			if !ok {
				_, good = c.fail(a.Range(), fmt.Sprintf("%q where a date belongs", n.text), "expected an ISO date such as \"2026-03-01\"")
				continue
			}
			n = node{kind: Date, op: "const", num: d}
		}
		if want != 0 && n.kind != want {
			_, good = c.fail(a.Range(), fmt.Sprintf("%s in %s()", n.kind, e.Name), "expected %s", want)
			continue
		}
		out.args = append(out.args, n)
	}
	least := len(f.args)
	if f.least > 0 {
		least = f.least
	}
	if len(e.Args) < least || len(e.Args) > len(f.args) && !f.more {
		return c.fail(e.Range(), fmt.Sprintf("%s() with %d arguments", e.Name, len(e.Args)), "expected %s", arity(f, least))
	}
	if !good {
		return node{}, false
	}
	if e.Name == "matches" {
		pat := out.args[1]
		if !pat.constant() {
			return c.fail(e.Args[1].Range(), "a pattern that is a column", "expected the regular expression as text in quotes")
		}
		re, err := regexp.Compile(pat.text)
		if err != nil {
			return c.fail(e.Args[1].Range(), fmt.Sprintf("the regular expression %q", pat.text), "expected RE2 syntax: %v", err)
		}
		out.re = re
	}
	if e.Name == "round" && len(out.args) == 2 && !out.args[1].constant() {
		return c.fail(e.Args[1].Range(), "a number of decimals that is a column", "expected a whole number from 0 to 15")
	}
	return fold(out), true
}

func arity(f function, least int) string {
	switch {
	case f.more:
		return fmt.Sprintf("%d or more", least)
	case least < len(f.args):
		return fmt.Sprintf("%d or %d", least, len(f.args))
	}
	return strconv.Itoa(least)
}

// fold evaluates an operation on constants.
func fold(n node) node {
	for i := range n.args {
		if !n.args[i].constant() {
			return n
		}
	}
	if n.op == "matches" || n.op == "present" {
		return n
	}
	p := Program{root: n}
	c := p.Eval(nil, 1)
	if c.Missing(0) {
		return n // such as log(-1): it stays, and is missing in every row
	}
	out := node{kind: n.kind, op: "const"}
	switch n.kind {
	case Text:
		out.text = c.Dict[c.Code[0]]
	case Bool:
		out.num = float64(c.Truth[0])
	default:
		out.num = c.Num[0]
	}
	return out
}
