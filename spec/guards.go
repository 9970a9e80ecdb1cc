package spec

import (
	"fmt"
	"maps"
	"slices"

	"batten/spec/expr"
)

// What a guard's condition may name. On a curve, beside FitNumbers and
// FitFlags, the by columns and the readings (Curve.ReadingQuantities); on a
// contrast, beside PairNumbers, the by columns that remain.
var (
	FitNumbers   = []string{"n", "distinct", "edf", "lambda", "rss", "sigma", "gcv", "loocv", "reml", "aicc", "score"}
	FitFlags     = []string{"at_bound", "straight_line", "constant", "parabola", "target_unreached", "several_minima", "autocorrelated", "high_leverage", "few_distinct", "extrapolated"}
	PairNumbers  = []string{"p_none", "p_parallel", "p_none_holm", "p_parallel_holm", "largest"}
	StudyNumbers = []string{"rows_read", "rows_used", "share_dropped", "share_set_aside", "fits", "skipped"}
	InputNumbers = []string{"rows_read", "files"}
)

// ReadingQuantity is a number of a reading that a guard may name.
type ReadingQuantity struct {
	Name    string // release_day, release_day_lower, release_day_upper, peak_at ...
	Kind    expr.Kind
	Reading int  // which of Curve.Readings
	Place   bool // of an extreme: its place, not its height
	End     End
}

// End says which number of a reading is meant.
type End int

const (
	Itself End = iota // the value
	LowerEnd
	UpperEnd
)

// ReadingQuantities lists what guards may name of the curve's readings: NAME,
// NAME_lower and NAME_upper, of an extreme also NAME_at with its ends. A
// stretch (surely) has ends alone. Places on a date axis are dates.
func (c *Curve) ReadingQuantities() []ReadingQuantity {
	var out []ReadingQuantity
	for i := range c.Readings {
		q := &c.Readings[i]
		place := expr.Number
		if c.Along.Kind == expr.Date {
			place = expr.Date
		}
		add := func(name string, kind expr.Kind, isPlace bool) {
			if q.Kind != Surely {
				out = append(out, ReadingQuantity{name, kind, i, isPlace, Itself})
			}
			out = append(out, ReadingQuantity{name + "_lower", kind, i, isPlace, LowerEnd},
				ReadingQuantity{name + "_upper", kind, i, isPlace, UpperEnd})
		}
		switch q.Kind {
		case Crossing, Surely:
			add(q.Name.Text, place, false)
		case Maximum, Minimum, Steepest:
			add(q.Name.Text, expr.Number, false)
			add(q.Name.Text+"_at", place, true)
		default:
			add(q.Name.Text, expr.Number, false)
		}
	}
	return out
}

// quantities collects what a condition may name, and where each name is from.
type quantities struct {
	kinds map[string]expr.Kind
	from  map[string][]string
}

func (q *quantities) add(name string, kind expr.Kind, from string) {
	q.kinds[name] = kind
	q.from[name] = append(q.from[name], from)
}

func (q *quantities) numbers(names []string, of string) {
	for _, n := range names {
		q.add(n, expr.Number, fmt.Sprintf("%s of %s", n, of))
	}
}

func (r *reader) guard(b *block, name Name, kinds map[string]string) {
	g := &Guard{Name: name}
	r.study.Guards = append(r.study.Guards, g)
	on := b.word("on", true, "a curve, a contrast, an input or study")
	g.On = on.Text
	q := &quantities{map[string]expr.Kind{}, map[string][]string{}}
	known := r.guarded(g, on, kinds, q)
	if a := b.attrs["require"]; a != nil && (!known || r.namesBadReading(g, b)) {
		b.take("require", true) // what it names cannot be told
	} else {
		g.Require = b.programOver("quantity", "require", true, q.kinds, expr.Bool)
		r.ambiguous(b, q)
	}
	g.Source = b.source("require")
	if g.Require != nil && g.Kind == OnCurve {
		g.BeforeFit = true
		for _, u := range g.Require.Uses() {
			byColumn := slices.ContainsFunc(r.study.CurveByName(g.On).By, func(c Column) bool { return c.Name.Text == u })
			if u != "n" && u != "distinct" && !byColumn {
				g.BeforeFit = false
			}
		}
	}
	o := b.word("otherwise", true, "warn, skip or refuse")
	g.Otherwise = o.Text
	switch {
	case o.Text == "":
	case o.Text != Warn && o.Text != Skip && o.Text != Refuse:
		r.fail(o.Range, fmt.Sprintf("otherwise %q", o.Text), "expected warn, skip or refuse%s", expr.Suggest(o.Text, []string{Warn, Skip, Refuse}))
	case o.Text == Skip && known && g.Kind != OnCurve:
		r.fail(o.Range, fmt.Sprintf("skip for a guard on %s", describeOn(g)), "expected warn or refuse: only the fits of a curve can be skipped")
	}
	g.Reason = b.text("reason", false)
	b.finish()
}

func describeOn(g *Guard) string {
	if g.Kind == OnStudy {
		return "the study"
	}
	return article(g.Kind) + " " + g.Kind
}

// guarded finds what a guard stands on and the quantities it has. It is false
// where they cannot be known.
func (r *reader) guarded(g *Guard, on Name, kinds map[string]string, q *quantities) bool {
	if on.Text == "" {
		return false
	}
	byColumns := func(c *Curve, but string) {
		for _, by := range c.By {
			if by.Name.Text != but {
				q.add(by.Name.Text, by.Kind, fmt.Sprintf("the by column %q", by.Name.Text))
			}
		}
	}
	s := r.study
	switch {
	case on.Text == OnStudy && kinds[OnStudy] != "":
		r.fail(on.Range, fmt.Sprintf("study, which is the study as a whole and %s %s of that name", article(kinds[OnStudy]), kinds[OnStudy]), "expected another name for the %s", kinds[OnStudy])
		return false
	case on.Text == OnStudy:
		g.Kind = OnStudy
		q.numbers(StudyNumbers, "the study")
	case s.CurveByName(on.Text) != nil:
		g.Kind = OnCurve
		c := s.CurveByName(on.Text)
		q.numbers(FitNumbers, "the fit")
		for _, n := range FitFlags {
			q.add(n, expr.Bool, "the flag "+n)
		}
		byColumns(c, "")
		for _, x := range c.ReadingQuantities() {
			q.add(x.Name, x.Kind, fmt.Sprintf("the reading %q", c.Readings[x.Reading].Name.Text))
		}
	case s.ContrastByName(on.Text) != nil:
		g.Kind = OnContrast
		c := s.ContrastByName(on.Text)
		q.numbers(PairNumbers, "the pair")
		of := s.CurveByName(c.Of)
		if of == nil {
			return false
		}
		byColumns(of, c.Across)
	case s.InputByName(on.Text) != nil:
		g.Kind = OnInput
		q.numbers(InputNumbers, "the input")
		if !r.isRead(on.Text) {
			r.fail(on.Range, fmt.Sprintf("the input %q, which no curve is made from", on.Text), "expected an input whose rows are read")
		}
	default:
		all := maps.Clone(kinds)
		all[OnStudy] = "study"
		r.wrongKind(on, all, "a curve, a contrast, an input or study", OnCurve, OnContrast, OnInput, OnStudy)
		return false
	}
	return true
}

// isRead tells whether some curve is made from the input. Where a curve's
// source is not known, it may be.
func (r *reader) isRead(input string) bool {
	for _, c := range r.study.Curves {
		from := c.From
		for range len(r.study.Rows) + 1 {
			if x := r.study.RowsByName(from); x != nil {
				from = x.From
			}
		}
		if from == input || r.study.InputByName(from) == nil {
			return true
		}
	}
	return false
}

// namesBadReading tells whether a condition names a reading that has been
// reported already.
func (r *reader) namesBadReading(g *Guard, b *block) bool {
	if g.Kind != OnCurve {
		return false
	}
	for _, t := range b.attrs["require"].Expr.Variables() {
		for _, bad := range r.badReadings[g.On] {
			if slices.Contains([]string{bad, bad + "_lower", bad + "_upper", bad + "_at", bad + "_at_lower", bad + "_at_upper"}, t.RootName()) {
				return true
			}
		}
	}
	return false
}

// ambiguous reports names in a condition that stand for two things.
func (r *reader) ambiguous(b *block, q *quantities) {
	a := b.attrs["require"]
	if a == nil {
		return
	}
	done := map[string]bool{}
	for _, t := range a.Expr.Variables() {
		n := t.RootName()
		from := slices.Clone(q.from[n])
		if _, constant := r.consts[n]; constant && len(from) > 0 {
			from = append(from, fmt.Sprintf("the constant %q", n))
		}
		if len(from) < 2 || done[n] {
			continue
		}
		done[n] = true
		r.fail(t.SourceRange(), fmt.Sprintf("%q, which is %s and %s", n, from[0], from[1]), "expected a name that stands for one thing; rename one of the two")
	}
}
