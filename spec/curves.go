package spec

import (
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"

	"github.com/hashicorp/hcl/v2/hclsyntax"

	"batten/spec/expr"
)

// maxPoints bounds a grid that a spec asks for.
const maxPoints = 100_000

// curve reads a curve block.
func (r *reader) curve(b *block, name Name, kinds map[string]string) {
	c := &Curve{Name: name, Range: b.at, Band: Band{Level: 0.95}, Grid: Grid{Points: 101}}
	r.study.Curves = append(r.study.Curves, c)
	from := b.word("from", true, "the name of an input or of rows")
	c.From = from.Text
	cols := r.tableColumns(from, kinds)
	pick := func(n Name, kinds ...expr.Kind) (out Column) {
		x := r.column(n, cols)
		if x == nil {
			return Column{Name: n, Kind: expr.Number}
		}
		if !slices.Contains(kinds, x.Kind) {
			var want []string
			for _, k := range kinds {
				want = append(want, k.String())
			}
			r.fail(n.Range, fmt.Sprintf("the column %q is %s", n.Text, x.Kind), "expected %s", strings.Join(want, " or "))
		}
		out = *x
		out.Name.Range = n.Range
		return out
	}
	c.Response = pick(b.word("response", true, "a column"), expr.Number)
	c.Along = pick(b.word("along", true, "a column"), expr.Number, expr.Date)
	for _, n := range b.words("by", false, "columns") {
		col := pick(n, expr.Text, expr.Number, expr.Date, expr.Bool)
		if col.Kind != expr.Text && (n.Text == c.Along.Name.Text || n.Text == c.Response.Name.Text) {
			r.fail(n.Range, fmt.Sprintf("grouping by %q, which the curve already uses", n.Text), "expected another column")
		}
		for _, o := range c.By {
			if o.Name.Text == n.Text {
				r.fail(n.Range, fmt.Sprintf("the column %q twice in by", n.Text), "expected each once")
			}
		}
		c.By = append(c.By, col)
	}
	if n := b.word("weight", false, "a column"); n.Text != "" {
		w := pick(n, expr.Number)
		c.Weight = &w
	}
	if c.Response.Name.Text != "" && c.Response.Name.Text == c.Along.Name.Text {
		r.fail(c.Along.Name.Range, fmt.Sprintf("%q along itself", c.Along.Name.Text), "expected another column for the x axis")
	}
	c.Order = 2
	if v, ok := b.whole("order", false, 1, 3, "an order of 1, 2 or 3: the penalty's derivative"); ok {
		c.Order = v
	}
	r.smoothness(b, c, cols)
	date := c.Along.Kind == expr.Date
	if k := b.one("band"); k != nil {
		r.band(k, &c.Band)
	}
	if k := b.one("grid"); k != nil {
		r.grid(k, &c.Grid, date)
	}
	readings, names := b.named("reading")
	for i, k := range readings {
		r.identifier(names[i], "reading")
		if q, ok := r.reading(k, names[i], date); ok && r.suits(k, &q, c.Order) {
			c.Readings = append(c.Readings, q)
		} else {
			r.badReadings[name.Text] = append(r.badReadings[name.Text], names[i].Text)
		}
	}
	c.Tolerance = Tolerance{HalfWidths: 0.25}
	if k := b.one("tolerance"); k != nil {
		c.Tolerance = r.tolerance(k, c.Readings)
	}
	b.finish("smoothness", "band", "grid", "reading", "tolerance")
}

// smoothness reads a curve's rule and its exceptions.
func (r *reader) smoothness(b *block, c *Curve, cols []Column) {
	groupCols := schema(c.By)
	groupCols["n"], groupCols["distinct"] = expr.Number, expr.Number
	seen := map[string]bool{}
	main := false
	for _, k := range b.kids {
		if k.Type != "smoothness" {
			continue
		}
		s := r.open(k)
		only := s.attrs["only"]
		var name Name
		switch {
		case len(k.Labels) > 1:
			r.label(k)
		case len(k.Labels) == 1:
			name, _ = r.label(k)
			if only == nil {
				r.fail(name.Range, fmt.Sprintf("the exception %q without only", name.Text), "expected only = condition over the by columns, or no name for the rule of all groups")
			}
			if seen[name.Text] {
				r.fail(name.Range, fmt.Sprintf("a second exception %q", name.Text), "expected another name")
			}
			seen[name.Text] = true
		case only != nil:
			r.fail(s.at, "an exception without a name", "expected smoothness \"name\" { only = ... }, so that the record can name it")
		}
		rule := r.rule(s, c, cols)
		if only != nil || len(k.Labels) > 0 {
			e := Exception{Name: name, Rule: rule}
			e.Only = s.program("only", false, groupCols, expr.Bool)
			e.Source = s.source("only")
			e.Reason = s.text("reason", true)
			s.finish()
			if e.Only != nil {
				c.Exceptions = append(c.Exceptions, e)
			}
			continue
		}
		s.take("only", false)
		s.text("reason", false)
		s.finish()
		if main {
			r.fail(s.at, "a second rule for all groups", "expected one smoothness block without only; the others are exceptions with only and reason")
		}
		main = true
		c.Rule = rule
	}
	if !main {
		r.fail(b.at, fmt.Sprintf("the curve %q without a smoothness rule", c.Name.Text), "expected smoothness { rule = gcv }, or another rule")
	}
}

// nullSpace names what a penalty of each order leaves free.
var nullSpace = map[int]string{1: "a constant", 2: "a straight line", 3: "a parabola"}

var ruleNames = []string{FixedDF, FixedLambda, GCV, LOOCV, KFold, REML, AICc, KnownSigma, ResidualTarget}

// settings are the arguments that belong to each rule.
var settings = map[string][]string{
	FixedDF:     {"df"},
	FixedLambda: {"lambda"},
	GCV:         {"inflate", "shared", "df_at_least", "df_at_most"},
	LOOCV:       {"one_se", "shared", "df_at_least", "df_at_most"},
	KFold:       {"folds", "block", "stretches", "gap", "one_se", "shared", "df_at_least", "df_at_most"},
	REML:        {"shared", "df_at_least", "df_at_most"},
	AICc:        {"shared", "df_at_least", "df_at_most"},

	KnownSigma:     {"sigma", "shared", "df_at_least", "df_at_most"},
	ResidualTarget: {"sigma", "df_at_least", "df_at_most"},
}

func (r *reader) rule(b *block, c *Curve, cols []Column) Rule {
	out := Rule{Inflate: 1, Range: b.at}
	n := b.word("rule", true, "a rule: "+strings.Join(ruleNames, ", "))
	out.Name = n.Text
	belongs, known := settings[n.Text]
	if n.Text != "" && !known {
		r.fail(n.Range, fmt.Sprintf("unknown rule %q", n.Text), "expected one of %s%s", strings.Join(ruleNames, ", "), expr.Suggest(n.Text, slices.Clone(ruleNames)))
	}
	for _, a := range inOrder(b.attrs) {
		for _, args := range settings {
			if known && slices.Contains(args, a.Name) && !slices.Contains(belongs, a.Name) {
				r.fail(a.NameRange, fmt.Sprintf("%q with the rule %s", a.Name, n.Text), "expected only %s here", strings.Join(belongs, ", "))
				break
			}
		}
	}
	if known && slices.Contains(belongs, "sigma") {
		r.sigma(b, c, cols, &out)
	} else {
		b.take("sigma", false)
	}
	out.Shared = r.shared(b)
	if out.Stretches = b.flag("stretches"); out.Stretches && b.attrs["block"] != nil {
		r.fail(b.attrs["stretches"].NameRange, "stretches beside block", "expected one of them: folds are stretches of neighbours in x, or whole block values")
	}
	out.Gap, _ = b.number("gap", false, 0, math.MaxFloat64, "a distance along x of 0 or more")
	inf := math.MaxFloat64
	least := float64(c.Order)
	out.DF, _ = b.number("df", n.Text == FixedDF, least, inf, fmt.Sprintf("degrees of freedom of %d (%s) or more", c.Order, nullSpace[c.Order]))
	out.Lambda, _ = b.number("lambda", n.Text == FixedLambda, 5e-324, inf, "a lambda above 0")
	if v, ok := b.number("inflate", false, 1, 10, "a factor from 1 to 10"); ok {
		out.Inflate = v
	}
	out.Folds, _ = b.whole("folds", false, 2, 1e6, "a whole number of folds, 2 or more")
	if w := b.word("block", false, "a column"); w.Text != "" {
		if x := r.column(w, cols); x != nil {
			blockCol := *x
			blockCol.Name.Range = w.Range
			out.Block = &blockCol
		}
	}
	if out.OneSE = b.flag("one_se"); out.OneSE && out.Shared != "" {
		r.fail(b.attrs["one_se"].NameRange, "one_se beside shared", "expected one of them")
	}
	more := fmt.Sprintf("degrees of freedom of %d or more", c.Order)
	out.DFAtLeast, _ = b.number("df_at_least", false, least, inf, more)
	out.DFAtMost, _ = b.number("df_at_most", false, least, inf, more)
	if low := max(out.DFAtLeast, least+0.01); out.DFAtMost > 0 && out.DFAtMost <= low {
		r.fail(b.attrs["df_at_most"].Expr.Range(), fmt.Sprintf("df_at_most = %g", out.DFAtMost), "expected more than df_at_least (%g where it is not given)", low)
	}
	return out
}

func (r *reader) band(b *block, out *Band) {
	if v, ok := b.number("level", false, 0, 1, "a level between 0 and 1, such as 0.95"); ok {
		if v < 0.5 || v > 0.9999 {
			r.fail(b.attrs["level"].Expr.Range(), fmt.Sprintf("level = %g", v), "expected a level from 0.5 to 0.9999, such as 0.95")
		}
		out.Level = v
	}
	kind := b.word("kind", false, "pointwise or simultaneous")
	switch kind.Text {
	case "", "pointwise":
	case "simultaneous":
		out.Simultaneous = true
	default:
		r.fail(kind.Range, fmt.Sprintf("unknown kind of band %q", kind.Text), "expected pointwise or simultaneous%s", expr.Suggest(kind.Text, []string{"pointwise", "simultaneous"}))
	}
	switch k := b.word("for", false, "curve or new_reading"); k.Text {
	case "", "curve":
	case "new_reading":
		out.NewReading = true
	default:
		r.fail(k.Range, fmt.Sprintf("a band for %q", k.Text), "expected curve or new_reading%s", expr.Suggest(k.Text, []string{"curve", "new_reading"}))
	}
	if out.Simultaneous && out.NewReading {
		r.fail(kind.Range, "a simultaneous band for new readings", "expected kind = pointwise with for = new_reading: new readings scatter one by one")
	}
	out.Weight, _ = b.number("weight", false, 5e-324, math.MaxFloat64, "a weight above 0")
	if a := b.attrs["weight"]; a != nil && !out.NewReading {
		r.fail(a.NameRange, "a weight for a band of the curve", "expected it only with for = new_reading")
	}
	b.finish()
}

func (r *reader) grid(b *block, out *Grid, date bool) {
	given := 0
	if v, ok := b.whole("points", false, 2, maxPoints, fmt.Sprintf("a whole number of points from 2 to %d", maxPoints)); ok {
		out.Points = v
	}
	if v, ok := b.number("step", false, 5e-324, math.MaxFloat64, "a step above 0"); ok {
		out.Step, out.Points = v, 0
	}
	if a := b.take("at", false); a != nil {
		t, ok := a.Expr.(*hclsyntax.TupleConsExpr)
		if !ok || len(t.Exprs) == 0 {
			r.fail(a.Expr.Range(), "at that is no list", "expected places such as at = [0, 30, 60]")
		} else {
			for _, e := range t.Exprs {
				if v, ok := r.place(e, date); ok {
					out.At = append(out.At, v)
				}
			}
			if len(out.At) > maxPoints {
				r.fail(a.Expr.Range(), fmt.Sprintf("%d places", len(out.At)), "expected at most %d", maxPoints)
			}
			sort.Float64s(out.At)
			out.At = slices.Compact(out.At)
			out.Points = 0
		}
	}
	for _, n := range []string{"points", "step", "at"} {
		if b.attrs[n] != nil {
			given++
		}
	}
	if given > 1 {
		r.fail(b.at, fmt.Sprintf("a grid with %d ways to place its points", given), "expected one of points, step, at")
	}
	end := func(name string) *float64 {
		a := b.take(name, false)
		if a == nil {
			return nil
		}
		if b.attrs["at"] != nil {
			r.fail(a.NameRange, fmt.Sprintf("%q beside at", name), "expected it with points or step only")
		}
		v, ok := r.place(a.Expr, date)
		if !ok {
			return nil
		}
		return &v
	}
	out.From, out.To = end("from"), end("to")
	if out.From != nil && out.To != nil && *out.To <= *out.From {
		r.fail(b.attrs["to"].Expr.Range(), "a grid that ends before it starts", "expected to above from")
	}
	b.finish()
}

// askers are the arguments that say what a reading is.
var askers = []string{"value_at", "slope_at", "curvature_at", "crosses", "maximum", "minimum", "steepest", "area", "mean", "change", "surely"}

// reading reads one reading block.
func (r *reader) reading(b *block, name Name, date bool) (Reading, bool) {
	q := Reading{Name: name}
	var what []string
	for _, n := range askers {
		if b.take(n, false) != nil {
			what = append(what, n)
		}
	}
	if len(what) != 1 {
		r.fail(b.at, fmt.Sprintf("the reading %q asks for %s", name.Text, oneOf(what)), "expected one of %s", strings.Join(askers, ", "))
		b.finish("")
		return q, false
	}
	e := b.attrs[what[0]].Expr
	ok := true
	yes := func(kind string) {
		q.Kind = kind
		v, good := r.value(e, "true")
		if ok = good; ok && (describe(v) != "true") {
			r.fail(e.Range(), describe(v), "expected %s = true", what[0])
			ok = false
		}
	}
	switch what[0] {
	case "value_at":
		q.Kind = ValueAt
		q.At, ok = r.place(e, date)
	case "slope_at":
		q.Kind = SlopeAt
		q.At, ok = r.place(e, date)
	case "curvature_at":
		q.Kind = BendAt
		q.At, ok = r.place(e, date)
	case "crosses":
		q.Kind = Crossing
		q.At, ok = r.numberOf(e, "the level as a number")
	case "maximum":
		yes(Maximum)
	case "minimum":
		yes(Minimum)
	case "steepest":
		yes(Steepest)
	case "area", "mean", "change":
		q.Kind = map[string]string{"area": Area, "mean": Mean, "change": Change}[what[0]]
		t, isList := e.(*hclsyntax.TupleConsExpr)
		if !isList || len(t.Exprs) != 2 {
			r.fail(e.Range(), article(what[0])+" "+what[0]+" that is no stretch", "expected %s = [from, to]", what[0])
			ok = false
			break
		}
		var ok1, ok2 bool
		q.From, ok1 = r.place(t.Exprs[0], date)
		q.To, ok2 = r.place(t.Exprs[1], date)
		if ok = ok1 && ok2; ok && q.To <= q.From {
			r.fail(e.Range(), article(what[0])+" "+what[0]+" that ends before it starts", "expected %s = [from, to] with to above from", what[0])
			ok = false
		}
	case "surely":
		q.Kind = Surely
		var n Name
		if n, ok = r.wordOf(e, "rising or falling"); ok && n.Text != "rising" && n.Text != "falling" {
			r.fail(n.Range, "surely "+n.Text, "expected rising or falling%s", expr.Suggest(n.Text, []string{"rising", "falling"}))
			ok = false
		}
		q.Direction = n.Text
	}
	if d := b.word("direction", false, "rising or falling"); d.Text != "" {
		if d.Text != "rising" && d.Text != "falling" {
			r.fail(d.Range, fmt.Sprintf("the direction %q", d.Text), "expected rising or falling%s", expr.Suggest(d.Text, []string{"rising", "falling"}))
		}
		if q.Kind != Crossing && q.Kind != Steepest {
			r.fail(d.Range, "a direction with "+what[0], "expected it with crosses or steepest only")
		}
		if q.Kind != Surely {
			q.Direction = d.Text
		}
	}
	if q.All = b.flag("all"); q.All && q.Kind != Crossing {
		r.fail(b.attrs["all"].NameRange, "all with "+what[0], "expected it with crosses only")
	}
	b.finish()
	return q, ok
}

// suits tells whether curves of this order have what a reading asks for.
func (r *reader) suits(b *block, q *Reading, order int) bool {
	switch {
	case order == 1 && (q.Kind == SlopeAt || q.Kind == Steepest || q.Kind == Surely):
		r.fail(b.at, fmt.Sprintf("a slope of a curve of order 1, in the reading %q", q.Name.Text), "expected order = 2 or 3 for slopes: with order 1 the slope has no interval")
	case order < 3 && q.Kind == BendAt:
		r.fail(b.at, fmt.Sprintf("a curvature of a curve of order %d, in the reading %q", order, q.Name.Text), "expected order = 3: with a lower order the curvature has no interval")
	default:
		return true
	}
	return false
}

func oneOf(what []string) string {
	if len(what) == 0 {
		return "nothing"
	}
	return strings.Join(what, " and ")
}
