package spec

import (
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"

	"github.com/hashicorp/hcl/v2"
	"github.com/hashicorp/hcl/v2/hclsyntax"
	"github.com/zclconf/go-cty/cty"

	"batten/spec/expr"
)

// reader collects mistakes while the spec is read.
type reader struct {
	study    *Study
	mistakes Mistakes
	consts   map[string]cty.Value
	broken   map[string]bool // rows whose columns cannot be known: what uses them is not reported

	badReadings map[string][]string // of a curve: readings that could not be read
}

func (r *reader) fail(at hcl.Range, found, expected string, a ...any) {
	r.mistakes.List = append(r.mistakes.List, Mistake{at, found, fmt.Sprintf(expected, a...)})
}

func (r *reader) failAll(d hcl.Diagnostics) {
	for _, x := range d {
		at := hcl.Range{Filename: r.study.File, Start: hcl.InitialPos, End: hcl.InitialPos}
		if x.Subject != nil {
			at = *x.Subject
		}
		r.fail(at, x.Summary, "%s", x.Detail)
	}
}

// block is one block's arguments and blocks, with what has been asked for.
type block struct {
	r     *reader
	what  string // "curve", "the study block" ...
	at    hcl.Range
	attrs hclsyntax.Attributes
	kids  hclsyntax.Blocks
	known []string
}

func (r *reader) open(b *hclsyntax.Block) *block {
	return &block{r: r, what: b.Type, at: b.TypeRange, attrs: b.Body.Attributes, kids: b.Body.Blocks}
}

// finish reports arguments and blocks that nobody asked for.
func (b *block) finish(blocks ...string) {
	for _, a := range b.attrs {
		if !slices.Contains(b.known, a.Name) {
			b.r.fail(a.NameRange, fmt.Sprintf("unknown argument %q in %s", a.Name, b.what), "expected one of %s%s",
				strings.Join(sorted(append(b.known, blocks...)), ", "), expr.Suggest(a.Name, slices.Clone(append(b.known, blocks...))))
		}
	}
	for _, k := range b.kids {
		if !slices.Contains(blocks, k.Type) {
			expected := "no blocks here"
			if len(blocks) > 0 {
				expected = "one of the blocks " + strings.Join(sorted(blocks), ", ")
			}
			if slices.Contains(b.known, k.Type) {
				expected = fmt.Sprintf("%q as an argument: %s = ...", k.Type, k.Type)
			}
			b.r.fail(k.TypeRange, fmt.Sprintf("unknown block %q in %s", k.Type, b.what), "expected %s%s", expected, expr.Suggest(k.Type, slices.Clone(blocks)))
		}
	}
}

func sorted(s []string) []string {
	s = slices.Clone(s)
	sort.Strings(s)
	return slices.Compact(s)
}

// take returns an argument; nil where it is not given.
func (b *block) take(name string, required bool) *hclsyntax.Attribute {
	b.known = append(b.known, name)
	a := b.attrs[name]
	if a == nil && required {
		b.r.fail(b.at, fmt.Sprintf("%s without %q", b.what, name), "expected %s = ... inside", name)
	}
	return a
}

// value evaluates an argument that must be constant.
func (r *reader) value(e hclsyntax.Expression, what string) (cty.Value, bool) {
	if call, ok := e.(*hclsyntax.FunctionCallExpr); ok {
		r.fail(e.Range(), fmt.Sprintf("%s() where a constant belongs", call.Name), "expected %s", what)
		return cty.NilVal, false
	}
	v, diags := e.Value(&hcl.EvalContext{Variables: r.consts})
	if diags.HasErrors() {
		for _, t := range e.Variables() {
			if _, ok := r.consts[t.RootName()]; !ok {
				var names []string
				for n := range r.consts {
					names = append(names, n)
				}
				r.fail(t.SourceRange(), fmt.Sprintf("unknown name %q", t.RootName()), "expected %s; names of constants come from a let block%s", what, expr.Suggest(t.RootName(), names))
				return cty.NilVal, false
			}
		}
		r.fail(e.Range(), diags[0].Summary, "expected %s", what)
		return cty.NilVal, false
	}
	if v.IsNull() || !v.IsWhollyKnown() {
		r.fail(e.Range(), "null", "expected %s", what)
		return cty.NilVal, false
	}
	return v, true
}

func (b *block) text(name string, required bool) string {
	a := b.take(name, required)
	if a == nil {
		return ""
	}
	s, _ := b.r.textOf(a.Expr, "text in quotes")
	if required && strings.TrimSpace(s) == "" && !b.r.failedAt(a.Expr.Range()) {
		b.r.fail(a.Expr.Range(), fmt.Sprintf("an empty %s", name), "expected some text")
	}
	return s
}

func (r *reader) failedAt(at hcl.Range) bool {
	for _, m := range r.mistakes.List {
		if m.Range == at || at.ContainsPos(m.Range.Start) && m.Range.Start.Byte >= at.Start.Byte {
			return true
		}
	}
	return false
}

func (r *reader) textOf(e hclsyntax.Expression, what string) (string, bool) {
	v, ok := r.value(e, what)
	if !ok {
		return "", false
	}
	if v.Type() != cty.String {
		r.fail(e.Range(), describe(v), "expected %s", what)
		return "", false
	}
	return v.AsString(), true
}

func describe(v cty.Value) string {
	switch {
	case v.Type() == cty.String:
		return fmt.Sprintf("the text %q", v.AsString())
	case v.Type() == cty.Number:
		return "the number " + v.AsBigFloat().Text('g', 10)
	case v.Type() == cty.Bool:
		if v.True() {
			return "true"
		}
		return "false"
	case v.Type().IsTupleType() || v.Type().IsListType():
		return "a list"
	}
	return "an object"
}

func (b *block) flag(name string) bool {
	a := b.take(name, false)
	if a == nil {
		return false
	}
	v, ok := b.r.value(a.Expr, "true or false")
	if !ok {
		return false
	}
	if v.Type() != cty.Bool {
		b.r.fail(a.Expr.Range(), describe(v), "expected true or false")
		return false
	}
	return v.True()
}

// number reads a number held to a range; ok is false where it is not given or
// wrong.
func (b *block) number(name string, required bool, lo, hi float64, what string) (v float64, ok bool) {
	a := b.take(name, required)
	if a == nil {
		return 0, false
	}
	v, ok = b.r.numberOf(a.Expr, what)
	if ok && !(v >= lo && v <= hi) {
		b.r.fail(a.Expr.Range(), fmt.Sprintf("%s = %g", name, v), "expected %s", what)
		return 0, false
	}
	return v, ok
}

func (r *reader) numberOf(e hclsyntax.Expression, what string) (float64, bool) {
	v, ok := r.value(e, what)
	if !ok {
		return 0, false
	}
	if v.Type() != cty.Number {
		r.fail(e.Range(), describe(v), "expected %s", what)
		return 0, false
	}
	f, _ := v.AsBigFloat().Float64()
	if math.IsInf(f, 0) {
		r.fail(e.Range(), "a number beyond 1e308", "expected %s", what)
		return 0, false
	}
	return f, true
}

// whole reads a whole number.
func (b *block) whole(name string, required bool, lo, hi float64, what string) (int, bool) {
	v, ok := b.number(name, required, lo, hi, what)
	if ok && v != math.Trunc(v) {
		b.r.fail(b.attrs[name].Expr.Range(), fmt.Sprintf("%s = %g", name, v), "expected %s", what)
		return 0, false
	}
	return int(v), ok
}

// place reads a place on an x axis: a number, or an ISO date where the axis is
// one.
func (r *reader) place(e hclsyntax.Expression, date bool) (float64, bool) {
	if !date {
		return r.numberOf(e, "a number, as the along column is")
	}
	s, ok := r.textOf(e, "an ISO date in quotes, as the along column is a date")
	if !ok {
		return 0, false
	}
	d, ok := expr.ParseDate(s)
	if !ok {
		r.fail(e.Range(), fmt.Sprintf("the text %q", s), "expected an ISO date such as \"2026-03-01\"")
	}
	return d, ok
}

// word reads a bare name.
func (b *block) word(name string, required bool, what string) Name {
	a := b.take(name, required)
	if a == nil {
		return Name{}
	}
	n, _ := b.r.wordOf(a.Expr, what)
	return n
}

func (r *reader) wordOf(e hclsyntax.Expression, what string) (Name, bool) {
	if t, ok := e.(*hclsyntax.ScopeTraversalExpr); ok && len(t.Traversal) == 1 {
		return Name{t.Traversal.RootName(), t.SrcRange}, true
	}
	if t, ok := e.(*hclsyntax.TemplateExpr); ok && t.IsStringLiteral() {
		v, _ := t.Value(nil)
		r.fail(e.Range(), fmt.Sprintf("the text %q", v.AsString()), "expected %s as a bare word, without quotes", what)
		return Name{Range: e.Range()}, false
	}
	r.fail(e.Range(), "something that is no bare word", "expected %s", what)
	return Name{Range: e.Range()}, false
}

// words reads a list of bare names.
func (b *block) words(name string, required bool, what string) []Name {
	a := b.take(name, required)
	if a == nil {
		return nil
	}
	t, ok := a.Expr.(*hclsyntax.TupleConsExpr)
	if !ok {
		if n, ok := b.r.wordOf(a.Expr, "a list of "+what+" such as [a, b]"); ok {
			return []Name{n}
		}
		return nil
	}
	var out []Name
	for _, e := range t.Exprs {
		if n, ok := b.r.wordOf(e, what); ok {
			out = append(out, n)
		}
	}
	return out
}

// texts reads a list of texts.
func (b *block) texts(name string, required bool, what string) (out []string, at []hcl.Range) {
	a := b.take(name, required)
	if a == nil {
		return nil, nil
	}
	exprs := []hclsyntax.Expression{a.Expr}
	if t, ok := a.Expr.(*hclsyntax.TupleConsExpr); ok {
		exprs = t.Exprs
	}
	for _, e := range exprs {
		if s, ok := b.r.textOf(e, what); ok {
			out, at = append(out, s), append(at, e.Range())
		}
	}
	return out, at
}

// program compiles an argument over columns.
func (b *block) program(name string, required bool, columns map[string]expr.Kind, want expr.Kind) *expr.Program {
	return b.programOver("column", name, required, columns, want)
}

// programOver compiles an argument over things of another noun than columns.
func (b *block) programOver(noun, name string, required bool, columns map[string]expr.Kind, want expr.Kind) *expr.Program {
	a := b.take(name, required)
	if a == nil {
		return nil
	}
	p, diags := expr.Compile(a.Expr, expr.Schema{Columns: columns, Constants: b.r.consts, Noun: noun})
	b.r.failAll(diags)
	if p != nil && want != 0 && p.Kind() != want {
		b.r.fail(a.Expr.Range(), p.Kind().String(), "expected %s", want)
		return nil
	}
	return p
}

// source returns an argument's expression as it is written, on one line.
func (b *block) source(name string) string {
	a := b.attrs[name]
	if a == nil {
		return ""
	}
	return strings.Join(strings.Fields(string(a.Expr.Range().SliceBytes(b.r.study.Text))), " ")
}

// one returns the only block of a type, nil where there is none.
func (b *block) one(typ string) *block {
	var out *block
	for _, k := range b.kids {
		if k.Type != typ {
			continue
		}
		if out != nil {
			b.r.fail(k.TypeRange, fmt.Sprintf("a second %s block", typ), "expected one; the first stands at line %d", out.at.Start.Line)
			continue
		}
		if len(k.Labels) > 0 {
			b.r.fail(k.LabelRanges[0], fmt.Sprintf("%s with a name", typ), "expected %s { ... }", typ)
		}
		out = b.r.open(k)
	}
	return out
}

// named returns the blocks of a type with their single label.
func (b *block) named(typ string) (out []*block, names []Name) {
	seen := map[string]Name{}
	for _, k := range b.kids {
		if k.Type != typ {
			continue
		}
		n, ok := b.r.label(k)
		if !ok {
			continue
		}
		if first, dup := seen[n.Text]; dup {
			b.r.fail(n.Range, fmt.Sprintf("a second %s %q", typ, n.Text), "expected another name; the first stands at line %d", first.Range.Start.Line)
			continue
		}
		seen[n.Text] = n
		out, names = append(out, b.r.open(k)), append(names, n)
	}
	return out, names
}

// label returns a block's one name.
func (r *reader) label(k *hclsyntax.Block) (Name, bool) {
	if len(k.Labels) != 1 {
		r.fail(k.TypeRange, fmt.Sprintf("%s with %d names", k.Type, len(k.Labels)), "expected one name in quotes: %s \"name\" { ... }", k.Type)
		return Name{}, false
	}
	if n := k.Labels[0]; strings.TrimSpace(n) == "" || len(n) > 200 || strings.ContainsFunc(n, func(c rune) bool { return c < ' ' || c == 0x7f }) {
		r.fail(k.LabelRanges[0], fmt.Sprintf("the name %.40q", n), "expected a name of 1 to 200 printable characters")
		return Name{}, false
	}
	return Name{k.Labels[0], k.LabelRanges[0]}, true
}

// identifier holds a name to what can be written bare.
func (r *reader) identifier(n Name, what string) {
	if !hclsyntax.ValidIdentifier(n.Text) || slices.Contains([]string{"true", "false", "null"}, n.Text) {
		r.fail(n.Range, fmt.Sprintf("the %s name %q", what, n.Text), "expected letters, digits and _, not starting with a digit, for it is referred to by its bare name")
	}
}
