package runner

import (
	"math"
	"slices"

	"batten/spec"
	"batten/spec/expr"
)

// studyName is how messages and records name the study as a whole.
const studyName = "study"

// judgeWhole holds contrasts, inputs and the study to the guards on them,
// after all fits have been judged. It returns the results of all guards in
// the order of the spec, and says what was refused.
func (r *Run) judgeWhole() (all []GuardRecord, refused []string, err error) {
	next := map[string]int{} // of a curve's results
	for _, g := range r.Study.Guards {
		var rec GuardRecord
		var why []string
		switch g.Kind {
		case spec.OnCurve:
			rec = r.curves[g.On].guards[next[g.On]]
			next[g.On]++
		case spec.OnContrast:
			rec, why, err = r.judgeContrast(g, r.Study.ContrastByName(g.On))
		case spec.OnInput:
			rec, why = judgeOne(g, "input "+g.On, r.inputNumber)
		case spec.OnStudy:
			rec, why = judgeOne(g, studyName, r.studyNumber)
		}
		if err != nil {
			return nil, nil, err
		}
		all = append(all, rec)
		if g.Otherwise == spec.Refuse {
			refused = append(refused, why...)
		}
	}
	return all, refused, nil
}

// judgeOne holds one thing to a guard.
func judgeOne(g *spec.Guard, name string, number func(g *spec.Guard, quantity string) float64) (rec GuardRecord, why []string) {
	rec = newGuardRecord(g)
	rec.Judged = 1
	quantity := func(n string) *expr.Column {
		return &expr.Column{Kind: expr.Number, Num: []float64{number(g, n)}}
	}
	if t := g.Require.Eval(quantity, 1).Truth[0]; t != expr.True {
		why = append(why, name+": "+rec.fail(g, name, quantity, 0, t))
	}
	return rec, why
}

func (r *Run) inputNumber(g *spec.Guard, name string) float64 {
	files := r.files[g.On]
	if name == "files" {
		return float64(len(files))
	}
	rows := 0
	for _, f := range files {
		rows += f.Rows
	}
	return float64(rows)
}

// studyNumber adds up over all curves: a row that two curves read counts
// twice. Shares are of the rows read; NaN where there are none.
func (r *Run) studyNumber(_ *spec.Guard, name string) float64 {
	read, used, dropped, aside, fits, skipped := 0, 0, 0, 0, 0, 0
	for _, c := range r.Study.Curves {
		cf := r.curves[c.Name.Text]
		read += cf.count.Read
		used += cf.used()
		for _, d := range cf.count.Dropped {
			dropped += d.N
		}
		for _, a := range cf.aside {
			aside += a.N
		}
		n := cf.counts()
		fits += n.Computed + n.Reused
		skipped += n.Skipped
	}
	switch name {
	case "rows_read":
		return float64(read)
	case "rows_used":
		return float64(used)
	case "share_dropped":
		return float64(dropped) / float64(read)
	case "share_set_aside":
		return float64(aside) / float64(read)
	case "fits":
		return float64(fits)
	}
	return float64(skipped)
}

// used counts the rows that a curve's groups hold, whether or not a fit came
// of them.
func (cf *curveFits) used() int {
	n := cf.count.Read - cf.zero
	for _, d := range cf.count.Dropped {
		n -= d.N
	}
	for _, a := range cf.aside {
		n -= a.N
	}
	return n
}

// judgeContrast holds every pair of a contrast to a guard. Pairs that could
// not be formed are not judged: the report lists them.
func (r *Run) judgeContrast(g *spec.Guard, c *spec.Contrast) (rec GuardRecord, why []string, err error) {
	rec = newGuardRecord(g)
	cf := r.curves[c.Of]
	pairs, _, err := cf.test(r.Study, c)
	if err != nil {
		return rec, nil, err
	}
	rec.Judged = len(pairs)
	var rest []spec.Column
	for _, b := range cf.def.By {
		if b.Name.Text != c.Across {
			rest = append(rest, b)
		}
	}
	number := func(of func(*tested) float64) *expr.Column {
		col := &expr.Column{Kind: expr.Number, Num: make([]float64, len(pairs))}
		for i := range pairs {
			if col.Num[i] = of(&pairs[i]); !finite(col.Num[i]) {
				col.Num[i] = math.NaN()
			}
		}
		return col
	}
	quantity := func(name string) *expr.Column {
		switch name {
		case "p_none":
			return number(func(p *tested) float64 { return p.None.P })
		case "p_parallel":
			return number(func(p *tested) float64 { return p.Same.P })
		case "p_none_holm":
			return number(func(p *tested) float64 { return p.holmNone })
		case "p_parallel_holm":
			return number(func(p *tested) float64 { return p.holmSame })
		case "largest":
			return number(func(p *tested) float64 { return p.None.Largest })
		}
		for k, b := range rest {
			if b.Name.Text == name {
				return byColumn(b.Kind, len(pairs), func(i int) value { return pairs[i].values[k] })
			}
		}
		return nil
	}
	shown := func(name string) *expr.Column {
		if slices.ContainsFunc(rest, func(b spec.Column) bool { return b.Name.Text == name }) {
			return nil
		}
		return quantity(name)
	}
	for i, t := range g.Require.Eval(quantity, len(pairs)).Truth {
		if t == expr.True {
			continue
		}
		name := fitName(c.Name.Text, pairs[i].label)
		why = append(why, name+": "+rec.fail(g, name, shown, i, t))
	}
	return rec, why, nil
}
