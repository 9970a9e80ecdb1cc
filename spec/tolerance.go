package spec

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"github.com/hashicorp/hcl/v2/hclsyntax"

	"batten/spec/expr"
)

// tolerance reads from where on a fit counts as moved.
func (r *reader) tolerance(b *block, readings []Reading) Tolerance {
	out := Tolerance{Given: true}
	most := math.MaxFloat64
	out.HalfWidths, _ = b.number("half_widths", false, 5e-324, most, "a share of the old band's half-width above 0")
	out.Response, _ = b.number("response", false, 5e-324, most, "a distance in the response's unit above 0")
	var names []string
	for _, q := range readings {
		names = append(names, q.Name.Text)
		if q.Kind == Maximum || q.Kind == Minimum || q.Kind == Steepest {
			names = append(names, q.Name.Text+"_at")
		}
	}
	if a := b.take("readings", false); a != nil {
		o, ok := a.Expr.(*hclsyntax.ObjectConsExpr)
		if !ok {
			r.fail(a.Expr.Range(), "readings that are no list of limits", "expected readings = { release_day = 2 }")
		} else {
			for _, item := range o.Items {
				key := item.KeyExpr
				if k, ok := key.(*hclsyntax.ObjectConsKeyExpr); ok {
					key = k.Wrapped
				}
				n, ok := r.wordOf(key, "a reading of this curve")
				if !ok {
					continue
				}
				if !slices.Contains(names, n.Text) {
					r.fail(n.Range, fmt.Sprintf("unknown reading %q", n.Text), "expected one of %s%s", strings.Join(names, ", "), expr.Suggest(n.Text, slices.Clone(names)))
					continue
				}
				v, ok := r.numberOf(item.ValueExpr, "the largest change that does not count")
				if ok && !(v > 0) {
					r.fail(item.ValueExpr.Range(), fmt.Sprintf("%s = %g", n.Text, v), "expected a limit above 0")
					ok = false
				}
				if ok {
					out.Readings = append(out.Readings, ReadingTolerance{n.Text, v})
				}
			}
		}
	}
	if out.HalfWidths == 0 && out.Response == 0 && len(out.Readings) == 0 && len(b.attrs) == 0 {
		r.fail(b.at, "a tolerance that says nothing", "expected half_widths, response or readings inside")
	}
	b.finish()
	return out
}
