package runner

import (
	"context"
	"fmt"
	"math"
	"runtime"

	"batten/spec"
	"batten/spec/expr"
)

// GuardResult is what came of a guard on a contrast, an input or the study.
type GuardResult struct {
	Guard   string   `json:"guard"`
	On      string   `json:"on"`
	Require string   `json:"require"`
	Outcome string   `json:"outcome"` // held, warn, refuse
	Reason  string   `json:"reason,omitempty"`
	Failed  []string `json:"failed,omitempty"` // pairs of a contrast; what was found
}

// Held is the outcome of a guard whose condition holds.
const Held = "held"

// takeReadings takes every reading of every fit for the guards that name them.
// Of several results under one name the first counts; what is not there is
// missing.
func (cf *curveFits) takeReadings() {
	cf.taken = map[string]*expr.Column{}
	for name, k := range spec.ReadingColumns(cf.def) {
		c := &expr.Column{Kind: k, Num: make([]float64, len(cf.fits))}
		for i := range c.Num {
			c.Num[i] = math.NaN()
		}
		cf.taken[name] = c
	}
	put := func(name string, i int, v float64) {
		if c, ok := cf.taken[name]; ok && finite(v) {
			c.Num[i] = v
		}
	}
	// A fit that cannot be opened again, or a grid that cannot be laid, leaves
	// the readings missing: such a condition does not hold.
	_ = eachFit(context.Background(), cf, runtime.GOMAXPROCS(0), func(ft *fitter, i int) error {
		d, err := ft.derive(cf, i, wants{readings: true})
		if err != nil {
			return nil
		}
		for _, v := range readingValues(d.readings) {
			put(v.Name, i, v.Value)
			put(v.Name+"_lower", i, v.Lower)
			put(v.Name+"_upper", i, v.Upper)
		}
		return nil
	})
}

// judgeWhole holds contrasts, inputs and the study to their guards, after the
// fits.
func (r *Run) judgeWhole() error {
	for _, g := range r.Study.Guards {
		if r.Study.CurveByName(g.On) != nil {
			continue
		}
		res := GuardResult{Guard: g.Name.Text, On: g.On, Require: g.Source, Outcome: Held, Reason: g.Reason}
		var err error
		switch c := r.Study.ContrastByName(g.On); {
		case c != nil:
			res.Failed, err = r.contrastFails(c, g)
		case g.On == spec.OnStudy && r.Study.InputByName(g.On) == nil:
			res.Failed = wholeFails(g, r.studyNumbers())
		default:
			res.Failed = wholeFails(g, r.inputNumbers(g.On))
		}
		if err != nil {
			return err
		}
		if len(res.Failed) > 0 {
			res.Outcome = g.Otherwise
		}
		r.Record.Guards = append(r.Record.Guards, res)
		if res.Outcome == spec.Refuse {
			for _, f := range res.Failed {
				why := fmt.Sprintf("%s: guard %q: %s does not hold: %s", g.On, g.Name.Text, g.Source, f)
				if g.Reason != "" {
					why += ": " + g.Reason
				}
				r.Record.Refused = append(r.Record.Refused, why)
			}
		}
	}
	return nil
}

// contrastFails lists the pairs for which a guard does not hold.
func (r *Run) contrastFails(c *spec.Contrast, g *spec.Guard) ([]string, error) {
	cf := r.curves[c.Of]
	pairs, _, err := cf.test(r.Study, c)
	if err != nil {
		return nil, err
	}
	number := func(of func(*tested) float64) *expr.Column {
		col := &expr.Column{Kind: expr.Number}
		for i := range pairs {
			col.Num = append(col.Num, of(&pairs[i]))
		}
		return col
	}
	held := g.Require.Eval(func(name string) *expr.Column {
		switch name {
		case "p_none":
			return number(func(p *tested) float64 { return p.None.P })
		case "p_none_holm":
			return number(func(p *tested) float64 { return p.holmNone })
		case "p_parallel":
			return number(func(p *tested) float64 { return p.Same.P })
		case "p_parallel_holm":
			return number(func(p *tested) float64 { return p.holmSame })
		case "largest":
			return number(func(p *tested) float64 { return p.None.Largest })
		}
		sub := &curveFits{def: &spec.Curve{}}
		for _, b := range cf.def.By {
			if b.Name.Text != c.Across {
				sub.def.By = append(sub.def.By, b)
			}
		}
		for i := range pairs {
			sub.values = append(sub.values, pairs[i].values)
		}
		for k, b := range sub.def.By {
			if b.Name.Text == name {
				return sub.byColumn(k)
			}
		}
		panic("unchecked column " + name + " in a guard")
	}, len(pairs))
	var out []string
	for i, t := range held.Truth {
		if t != expr.True {
			name := pairs[i].label
			if name == "" {
				name = c.Name.Text
			}
			out = append(out, name)
		}
	}
	return out, nil
}

// wholeFails tells what was found where a guard on single numbers does not hold.
func wholeFails(g *spec.Guard, numbers map[string]float64) []string {
	held := g.Require.Eval(func(name string) *expr.Column { return oneNumber(numbers[name]) }, 1)
	if held.Truth[0] == expr.True {
		return nil
	}
	found := ""
	for _, u := range g.Require.Uses() {
		if v, ok := numbers[u]; ok {
			if found != "" {
				found += ", "
			}
			found += fmt.Sprintf("%s is %.6g", u, v)
		}
	}
	return []string{found}
}

// studyNumbers sums up all curves.
func (r *Run) studyNumbers() map[string]float64 {
	var read, dropped, aside, zero float64
	for _, c := range r.Record.Curves {
		read += float64(c.Read)
		zero += float64(c.ZeroWeight)
		for _, d := range c.Dropped {
			dropped += float64(d.N)
		}
		for _, a := range c.SetAside {
			aside += float64(a.N)
		}
	}
	share := func(v float64) float64 {
		if read == 0 {
			return 0
		}
		return v / read
	}
	n := r.Record.Counts
	return map[string]float64{"rows_read": read, "rows_used": read - dropped - aside - zero, "share_dropped": share(dropped),
		"share_set_aside": share(aside), "fits": float64(n.Total - n.Skipped - n.Refused), "skipped": float64(n.Skipped)}
}

func (r *Run) inputNumbers(name string) map[string]float64 {
	for _, in := range r.Record.Inputs {
		if in.Name == name {
			return map[string]float64{"rows_read": float64(in.Rows), "files": float64(len(in.Files))}
		}
	}
	return nil
}
