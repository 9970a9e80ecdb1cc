package spec

import (
	"fmt"

	"github.com/hashicorp/hcl/v2/hclsyntax"

	"batten/spec/expr"
)

// sigma reads the known standard deviation of a row: a number, of a row of
// weight 1, or a column, which then settles the weights.
func (r *reader) sigma(b *block, c *Curve, cols []Column, out *Rule) {
	a := b.take("sigma", true)
	if a == nil {
		return
	}
	t, bare := a.Expr.(*hclsyntax.ScopeTraversalExpr)
	if _, constant := r.consts[rootName(t)]; !bare || constant {
		v, ok := r.numberOf(a.Expr, "a standard deviation as a number above 0, or a column of them")
		if ok && !(v > 0) {
			r.fail(a.Expr.Range(), fmt.Sprintf("sigma = %g", v), "expected more than 0")
		}
		out.Sigma = v
		return
	}
	n, ok := r.wordOf(a.Expr, "a number or a column")
	if !ok {
		return
	}
	x := r.column(n, cols)
	if x == nil {
		return
	}
	switch {
	case x.Kind != expr.Number:
		r.fail(n.Range, fmt.Sprintf("the column %q is %s", n.Text, x.Kind), "expected number")
	case c.Weight != nil:
		r.fail(n.Range, fmt.Sprintf("sigma = %s beside a weight", n.Text), "expected one of them: with a column of standard deviations every row weighs 1/sigma^2")
	case c.Sigma != nil && c.Sigma.Name.Text != n.Text:
		r.fail(n.Range, fmt.Sprintf("a second column of sigma, %q beside %q", n.Text, c.Sigma.Name.Text), "expected the same one in all rules of a curve, for it settles the weights")
	default:
		col := *x
		col.Name.Range = n.Range
		c.Sigma = &col
	}
	out.Sigma = 1
}

func rootName(t *hclsyntax.ScopeTraversalExpr) string {
	if t == nil {
		return ""
	}
	return t.Traversal.RootName()
}

// shared reads what the groups share: true stands for lambda.
func (r *reader) shared(b *block) string {
	a := b.take("shared", false)
	if a == nil {
		return ""
	}
	if l, ok := a.Expr.(*hclsyntax.LiteralValueExpr); ok {
		switch describe(l.Val) {
		case "true":
			return SharedLambda
		case "false":
			return ""
		}
	}
	n, ok := r.wordOf(a.Expr, "true, lambda or edf")
	if ok && n.Text != SharedLambda && n.Text != SharedEDF {
		r.fail(n.Range, fmt.Sprintf("shared = %s", n.Text), "expected true, lambda or edf%s", expr.Suggest(n.Text, []string{SharedLambda, SharedEDF}))
	}
	return n.Text
}
