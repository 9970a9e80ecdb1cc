package spec

import (
	"fmt"
	"slices"
	"strings"

	"batten/spec/expr"
)

// OnStudy is what a guard stands on that is held to the study as a whole.
const OnStudy = "study"

// What guards may name on what is no curve.
var (
	ContrastNumbers = []string{"p_none", "p_none_holm", "p_parallel", "p_parallel_holm", "largest"}
	StudyNumbers    = []string{"rows_read", "rows_used", "share_dropped", "share_set_aside", "fits", "skipped"}
	InputNumbers    = []string{"rows_read", "files"}
)

// ReadingColumns lists what a guard may name of a curve's readings: the value
// under the reading's name, its interval as NAME_lower and NAME_upper; of an
// extreme also its place, NAME_at.
func ReadingColumns(c *Curve) map[string]expr.Kind {
	out := map[string]expr.Kind{}
	add := func(name string, k expr.Kind) { out[name], out[name+"_lower"], out[name+"_upper"] = k, k, k }
	for _, q := range c.Readings {
		switch q.Kind {
		case Crossing:
			add(q.Name.Text, c.Along.Kind)
		case Surely:
			out[q.Name.Text+"_lower"], out[q.Name.Text+"_upper"] = c.Along.Kind, c.Along.Kind
		case Maximum, Minimum, Steepest:
			add(q.Name.Text, expr.Number)
			add(q.Name.Text+"_at", c.Along.Kind)
		default:
			add(q.Name.Text, expr.Number)
		}
	}
	return out
}

// guard reads a guard: on a curve, a contrast, an input, or the study.
func (r *reader) guard(b *block, name Name, kinds map[string]string) {
	g := &Guard{Name: name}
	r.study.Guards = append(r.study.Guards, g)
	on := b.word("on", true, "a curve, a contrast, an input or study")
	g.On = on.Text
	cols := map[string]expr.Kind{}
	numbers := func(names []string) {
		for _, n := range names {
			cols[n] = expr.Number
		}
	}
	outcomes := []string{Warn, Skip, Refuse}
	c, x := r.study.CurveByName(on.Text), r.study.ContrastByName(on.Text)
	known := true
	switch {
	case c != nil:
		for n, k := range ReadingColumns(c) {
			cols[n] = k
		}
		for n, k := range schema(c.By) {
			cols[n] = k
		}
		numbers(FitNumbers)
		for _, n := range FitFlags {
			cols[n] = expr.Bool
		}
	case x != nil:
		if of := r.study.CurveByName(x.Of); of != nil {
			for _, col := range of.By {
				if col.Name.Text != x.Across {
					cols[col.Name.Text] = col.Kind
				}
			}
		}
		numbers(ContrastNumbers)
		outcomes = []string{Warn, Refuse}
	case r.study.InputByName(on.Text) != nil:
		numbers(InputNumbers)
		outcomes = []string{Warn, Refuse}
	case on.Text == OnStudy:
		numbers(StudyNumbers)
		outcomes = []string{Warn, Refuse}
	case on.Text != "":
		known = false
		r.wrongKind(on, kinds, "a curve, a contrast, an input or study", "curve", "contrast", "input")
	}
	if known {
		g.Require = b.program("require", true, cols, expr.Bool)
	} else {
		b.take("require", true) // its names cannot be known
	}
	g.Source = b.source("require")
	if g.Require != nil && c != nil {
		g.BeforeFit = true
		for _, u := range g.Require.Uses() {
			if u != "n" && u != "distinct" && !slices.ContainsFunc(c.By, func(k Column) bool { return k.Name.Text == u }) {
				g.BeforeFit = false
			}
			if _, ok := ReadingColumns(c)[u]; ok {
				g.Readings = true
			}
		}
	}
	o := b.word("otherwise", true, strings.Join(outcomes, ", "))
	g.Otherwise = o.Text
	switch {
	case o.Text == "" || slices.Contains(outcomes, o.Text):
	case o.Text == Skip:
		r.fail(o.Range, "skip on something that is no curve", "expected warn or refuse: only fits can be skipped")
	default:
		r.fail(o.Range, fmt.Sprintf("otherwise %q", o.Text), "expected %s%s", strings.Join(outcomes, ", "), expr.Suggest(o.Text, slices.Clone(outcomes)))
	}
	g.Reason = b.text("reason", false)
	b.finish()
}
