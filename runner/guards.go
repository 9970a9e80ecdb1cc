package runner

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"batten/methods/choose"
	"batten/methods/reading"
	"batten/spec"
	"batten/spec/expr"
)

// verdict is what the guards say of one fit.
type verdict struct {
	Outcome string   // "", spec.Skip or spec.Refuse; "none" where no fit could be made
	Why     string   // of an outcome
	Guard   string   // that decided
	Warned  []string // guards that warn
	Untold  []string // those of Warned whose condition is missing
}

// noFit is the outcome of a group whose data cannot carry a curve.
const noFit = "none"

// fits tells whether the fit stands.
func (v verdict) fits() bool { return v.Outcome == "" }

// GuardRecord is how one guard went.
type GuardRecord struct {
	Guard     string         `json:"guard"`
	On        string         `json:"on"`
	Kind      string         `json:"kind"` // of On: curve, contrast, input, study
	Require   string         `json:"require"`
	Otherwise string         `json:"otherwise"`
	Reason    string         `json:"reason,omitempty"`
	Outcome   string         `json:"outcome"` // Held; else what Otherwise says
	Judged    int            `json:"judged"`  // fits, pairs; 1 for an input or the study
	Failed    []GuardFailure `json:"failed,omitempty"`
}

// Held is the outcome of a guard whose condition holds throughout.
const Held = "held"

// GuardFailure is something for which a guard's condition does not hold.
type GuardFailure struct {
	Of      string `json:"of"`              // a fit's or pair's name, an input's name, "study"
	Found   string `json:"found,omitempty"` // the quantities that the condition names
	Missing bool   `json:"missing,omitempty"`
}

func newGuardRecord(g *spec.Guard) GuardRecord {
	return GuardRecord{Guard: g.Name.Text, On: g.On, Kind: g.Kind, Require: g.Source, Otherwise: g.Otherwise, Reason: g.Reason, Outcome: Held}
}

// fail notes that the condition does not hold for row i, and says why.
func (rec *GuardRecord) fail(g *spec.Guard, of string, quantity func(string) *expr.Column, i int, t uint8) (why string) {
	f := GuardFailure{Of: of, Missing: t == expr.Unknown}
	var found []string
	for _, u := range g.Require.Uses() {
		if c := quantity(u); c != nil {
			found = append(found, foundText(u, c, i))
		}
	}
	f.Found = strings.Join(found, ", ")
	rec.Failed = append(rec.Failed, f)
	rec.Outcome = g.Otherwise
	what := "does not hold"
	if f.Missing {
		what = "has no value, which counts as not holding"
	}
	why = fmt.Sprintf("guard %q: %s %s", g.Name.Text, g.Source, what)
	if f.Found != "" {
		why += " (" + f.Found + ")"
	}
	if g.Reason != "" {
		why += ": " + g.Reason
	}
	return why
}

// foundText writes a quantity as messages show it. All are numbers, dates or
// truth values: no text of the data is in them.
func foundText(name string, c *expr.Column, i int) string {
	switch {
	case c.Missing(i):
		return name + " is missing"
	case c.Kind == expr.Number:
		return name + " = " + strconv.FormatFloat(c.Num[i], 'g', 6, 64)
	}
	return name + " = " + cellText(c, i)
}

// judge holds every fit of a curve to the guards on it. A condition that is
// missing (a quantity that does not exist) does not hold.
func judge(ctx context.Context, s *spec.Study, cf *curveFits, workers int) error {
	cf.verdict = make([]verdict, len(cf.fits))
	cf.guards = nil
	for i, f := range cf.fits {
		if f.Failed != "" {
			cf.verdict[i] = verdict{Outcome: noFit, Why: f.Failed}
		}
	}
	readings, err := cf.guardReadings(ctx, s, workers)
	if err != nil {
		return err
	}
	quantity := cf.quantities(readings)
	shown := func(name string) *expr.Column { // the by columns stand in the fit's name
		if slices.Contains(cf.by, name) {
			return nil
		}
		return quantity(name)
	}
	for _, g := range s.Guards {
		if g.Kind != spec.OnCurve || g.On != cf.def.Name.Text {
			continue
		}
		rec := newGuardRecord(g)
		held := g.Require.Eval(quantity, len(cf.fits))
		for i, t := range held.Truth {
			v := &cf.verdict[i]
			if v.Guard != "" || (v.Outcome == noFit && !g.BeforeFit) {
				continue
			}
			rec.Judged++
			if t == expr.True {
				continue
			}
			why := rec.fail(g, fitName(g.On, label(cf.by, cf.fits[i].Group)), shown, i, t)
			if g.Otherwise != spec.Warn {
				*v = verdict{Outcome: g.Otherwise, Guard: g.Name.Text, Why: why}
				continue
			}
			if v.Outcome == "" {
				v.Warned = append(v.Warned, g.Name.Text)
				if t == expr.Unknown {
					v.Untold = append(v.Untold, g.Name.Text)
				}
			}
		}
		cf.guards = append(cf.guards, rec)
	}
	return nil
}

// guardReadings takes the readings that guards on the curve name, as columns
// with one row a fit.
func (cf *curveFits) guardReadings(ctx context.Context, s *spec.Study, workers int) (map[string]*expr.Column, error) {
	used := map[string]bool{}
	for _, g := range s.Guards {
		if g.Kind == spec.OnCurve && g.On == cf.def.Name.Text {
			for _, u := range g.Require.Uses() {
				used[u] = true
			}
		}
	}
	var want []spec.ReadingQuantity
	out := map[string]*expr.Column{}
	for _, q := range cf.def.ReadingQuantities() {
		if !used[q.Name] {
			continue
		}
		c := &expr.Column{Kind: q.Kind, Num: make([]float64, len(cf.fits))}
		for i := range c.Num {
			c.Num[i] = math.NaN()
		}
		out[q.Name] = c
		want = append(want, q)
	}
	if len(want) == 0 {
		return out, nil
	}
	return out, eachFit(ctx, cf, workers, func(ft *fitter, i int) error {
		fit, err := ft.open(cf.fits[i])
		if err != nil {
			return err
		}
		var taken []reading.Result
		last := -1
		for _, q := range want {
			if q.Reading != last {
				last = q.Reading
				if taken, err = takeReading(cf, i, fit, &cf.def.Readings[last]); err != nil {
					return err
				}
			}
			out[q.Name].Num[i] = readingNumber(taken, q)
		}
		return nil
	})
}

// readingNumber is the number that a guard names, NaN where there is none or
// the interval is open there. Of several results the first counts.
func readingNumber(taken []reading.Result, q spec.ReadingQuantity) float64 {
	for _, r := range taken {
		if q.Place != strings.HasSuffix(r.Kind, "_at") {
			continue
		}
		v := [...]float64{spec.Itself: r.Value, spec.LowerEnd: r.Lower, spec.UpperEnd: r.Upper}[q.End]
		if !finite(v) {
			return math.NaN()
		}
		return v
	}
	return math.NaN()
}

// quantities offers the fits of a curve as columns, one row a fit.
func (cf *curveFits) quantities(readings map[string]*expr.Column) func(string) *expr.Column {
	number := func(of func(*storedFit) float64) *expr.Column {
		c := &expr.Column{Kind: expr.Number, Num: make([]float64, len(cf.fits))}
		for i, f := range cf.fits {
			c.Num[i] = of(f)
			if math.IsInf(c.Num[i], 0) {
				c.Num[i] = math.NaN()
			}
		}
		return c
	}
	fitted := func(of func(*storedFit) float64) *expr.Column {
		return number(func(f *storedFit) float64 {
			if f.Failed != "" {
				return math.NaN()
			}
			return of(f)
		})
	}
	return func(name string) *expr.Column {
		switch name {
		case "n":
			return number(func(f *storedFit) float64 { return float64(f.N) })
		case "distinct":
			return number(func(f *storedFit) float64 { return float64(f.Distinct) })
		case "edf":
			return fitted(func(f *storedFit) float64 { return f.EDF })
		case "lambda":
			return fitted(func(f *storedFit) float64 { return f.Lambda })
		case "rss":
			return fitted(func(f *storedFit) float64 { return f.RSS })
		case "sigma":
			return fitted(func(f *storedFit) float64 { return f.Sigma })
		case "gcv":
			return fitted(func(f *storedFit) float64 { return f.GCV })
		case "loocv":
			return fitted(func(f *storedFit) float64 { return f.LOOCV })
		case "reml":
			return fitted(func(f *storedFit) float64 { return f.REML })
		case "aicc":
			return fitted(func(f *storedFit) float64 { return choose.AICC(f.N, f.RSS, f.EDF) })
		case "score":
			return fitted(func(f *storedFit) float64 { return f.Score })
		}
		if c := readings[name]; c != nil {
			return c
		}
		for k, b := range cf.def.By {
			if b.Name.Text == name {
				return byColumn(b.Kind, len(cf.fits), func(i int) value { return cf.values[i][k] })
			}
		}
		c := &expr.Column{Kind: expr.Bool, Truth: make([]uint8, len(cf.fits))}
		for i, f := range cf.fits {
			switch {
			case f.Failed != "":
				c.Truth[i] = expr.Unknown
			case slices.Contains(f.Flags, name), name == "extrapolated" && extrapolates(cf.def, f):
				c.Truth[i] = expr.True
			}
		}
		return c
	}
}

// byColumn makes a column of n groups' values.
func byColumn(kind expr.Kind, n int, of func(i int) value) *expr.Column {
	c := &expr.Column{Kind: kind}
	code := map[string]uint32{}
	for i := range n {
		v := of(i)
		switch v.kind {
		case expr.Text:
			n, ok := code[v.text]
			if !ok {
				n = uint32(len(c.Dict))
				code[v.text] = n
				c.Dict = append(c.Dict, v.text)
			}
			c.Code = append(c.Code, n)
		case expr.Bool:
			c.Truth = append(c.Truth, column(v).Truth[0])
		default:
			c.Num = append(c.Num, v.num)
		}
	}
	return c
}
