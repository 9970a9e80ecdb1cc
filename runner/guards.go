package runner

import (
	"fmt"
	"math"
	"slices"

	"batten/methods/choose"
	"batten/spec"
	"batten/spec/expr"
)

// verdict is what the guards say of one fit.
type verdict struct {
	Outcome string   // "", spec.Skip or spec.Refuse; "none" where no fit could be made
	Why     string   // of an outcome
	Guard   string   // that decided
	Warned  []string // guards that warn
}

// noFit is the outcome of a group whose data cannot carry a curve.
const noFit = "none"

// fits tells whether the fit stands.
func (v verdict) fits() bool { return v.Outcome == "" }

// judge holds every fit of a curve to the study's guards. A condition that is
// missing (a fit quantity that does not exist) does not hold.
func judge(s *spec.Study, cf *curveFits) {
	cf.verdict = make([]verdict, len(cf.fits))
	for i, f := range cf.fits {
		if f.Failed != "" {
			cf.verdict[i] = verdict{Outcome: noFit, Why: f.Failed}
		}
	}
	for _, g := range s.Guards {
		if g.On != cf.def.Name.Text {
			continue
		}
		if g.Readings && cf.taken == nil {
			cf.takeReadings()
		}
		held := g.Require.Eval(cf.quantities(), len(cf.fits))
		for i, t := range held.Truth {
			v := &cf.verdict[i]
			if t == expr.True || v.Guard != "" || (v.Outcome == noFit && !g.BeforeFit) {
				continue
			}
			if g.Otherwise == spec.Warn {
				if v.Outcome == "" {
					v.Warned = append(v.Warned, g.Name.Text)
				}
				continue
			}
			why := fmt.Sprintf("guard %q: %s does not hold", g.Name.Text, g.Source)
			if g.Reason != "" {
				why += ": " + g.Reason
			}
			*v = verdict{Outcome: g.Otherwise, Guard: g.Name.Text, Why: why}
		}
	}
}

// quantities offers the fits of a curve as columns, one row a fit.
func (cf *curveFits) quantities() func(string) *expr.Column {
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
		for k, b := range cf.def.By {
			if b.Name.Text == name {
				return cf.byColumn(k)
			}
		}
		if c, ok := cf.taken[name]; ok {
			return c
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

// byColumn returns the k-th by column, one row a fit.
func (cf *curveFits) byColumn(k int) *expr.Column {
	c := &expr.Column{Kind: cf.def.By[k].Kind}
	code := map[string]uint32{}
	for _, vs := range cf.values {
		v := vs[k]
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
