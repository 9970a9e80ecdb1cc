package runner

import (
	"context"
	"fmt"
	"math"
	"os"
	"strings"

	"batten/methods/reading"
	"batten/methods/spline"
	"batten/reports"
	"batten/runner/table"
	"batten/spec"
	"batten/spec/expr"
)

// detailLimit is how many fits a document carries in full: points, grid and
// evidence. Beyond it a report says what it leaves out; exports hold all.
const detailLimit = 200

// briefLimit is how many fits a brief document takes readings from.
const briefLimit = 400

// Document fills a report's input: the curves and contrasts of show, or all
// of the study where show is empty. A brief one, for the terminal, has no fit
// in full, and readings only where the fits are few.
func (r *Run) Document(ctx context.Context, title string, show []string, brief bool) (*reports.Document, error) {
	s := r.Study
	d := &reports.Document{Title: title, Study: s.Title, Owner: s.Owner, Dated: r.Record.Dated}
	d.Summary = reports.Summary{
		Total: r.Record.Counts.Total, Fitted: r.Record.Counts.Computed + r.Record.Counts.Reused,
		Skipped: r.Record.Counts.Skipped, Refused: r.Record.Counts.Refused, Ledger: r.Record.Ledger,
	}
	shown := map[string]bool{}
	for _, n := range show {
		shown[n] = true
	}
	for _, c := range s.Curves {
		if len(show) > 0 && !shown[c.Name.Text] {
			continue
		}
		doc, err := r.curveDocument(ctx, c, brief)
		if err != nil {
			return nil, err
		}
		d.Curves = append(d.Curves, *doc)
	}
	for _, c := range s.Contrasts {
		if brief {
			break
		}
		if len(show) > 0 && !shown[c.Name.Text] {
			continue
		}
		doc, err := r.contrastDocument(c)
		if err != nil {
			return nil, err
		}
		d.Contrasts = append(d.Contrasts, *doc)
	}
	for _, g := range r.Record.Guards {
		if g.Kind == spec.OnCurve {
			continue
		}
		x := reports.Guard{Name: g.Guard, On: g.Kind + " " + g.On, Require: g.Require, Otherwise: g.Otherwise, Reason: g.Reason, Judged: g.Judged}
		if g.Kind == spec.OnStudy {
			x.On = "the study"
		}
		for _, f := range g.Failed {
			of := f.Of
			if g.Kind != spec.OnContrast {
				of = "" // On says it
			}
			x.Failed = append(x.Failed, failureText(of, f))
		}
		d.Guards = append(d.Guards, x)
	}
	for _, m := range r.Record.Moved {
		d.Summary.Moved = append(d.Summary.Moved, reports.Move{
			Fit: m.Fit, What: strings.Join(m.words(), ", "), Pending: m.Pending, Shift: val(m.Shift), At: val(m.At), AtText: m.AtText,
			OldEDF: val(m.OldEDF), NewEDF: val(m.NewEDF)})
	}
	d.Record = r.provenance()
	return d, nil
}

// dated is the day a report bears: that of SOURCE_DATE_EPOCH, or none. A
// report with the day of its making in it could not come out the same twice.
func dated() string {
	t, ok := sourceDate(os.Getenv("SOURCE_DATE_EPOCH"))
	if !ok {
		return ""
	}
	return t.Format("2006-01-02")
}

func val(p *float64) float64 {
	if p == nil {
		return math.NaN()
	}
	return *p
}

func (r *Run) provenance() reports.Record {
	rec := r.Record
	out := reports.Record{
		Program: rec.Program, Go: rec.Go, Seed: rec.Seed, Run: fmt.Sprintf("%.12s", r.results()), Methods: rec.Methods,
		Spec: reports.File{Path: rec.Spec.Path, SHA256: rec.Spec.SHA256, Bytes: int64(len(rec.Spec.Text))},
	}
	for _, in := range rec.Inputs {
		for _, f := range in.Files {
			out.Inputs = append(out.Inputs, reports.File{Path: f.Path, SHA256: f.SHA256, Bytes: f.Bytes, Rows: f.Rows})
		}
	}
	return out
}

func bandKind(b *spec.Band) string {
	if b.Simultaneous {
		return "simultaneous"
	}
	return "pointwise"
}

func axis(c *spec.Column) reports.Axis {
	return reports.Axis{Name: c.Name.Text, Unit: c.Unit, Date: c.Kind == expr.Date}
}

func (r *Run) curveDocument(ctx context.Context, c *spec.Curve, brief bool) (*reports.Curve, error) {
	cf := r.curves[c.Name.Text]
	out := &reports.Curve{
		Name: c.Name.Text, X: axis(&c.Along), Y: axis(&c.Response), By: cf.by, Rule: ruleText(&c.Rule),
		Level: c.Band.Level, BandFor: "the curve", BandKind: bandKind(&c.Band), Order: c.Order,
		Rows: reports.RowCount{Read: cf.count.Read, ZeroWeight: cf.zero},
	}
	if c.Band.NewReading {
		out.BandFor = "a new reading"
	}
	if c.Weight != nil {
		out.Weight = c.Weight.Name.Text
	}
	for _, d := range cf.count.Dropped {
		out.Rows.Dropped = append(out.Rows.Dropped, reports.Count{Label: d.Label, Reason: d.Reason, N: d.N})
	}
	for _, a := range cf.aside {
		out.Rows.SetAside = append(out.Rows.SetAside, reports.Count{Label: a.Column, Reason: a.Column + " is missing", N: a.N})
	}
	out.Rows.Used = cf.used()
	for _, rd := range c.Readings {
		out.Readings = append(out.Readings, rd.Name.Text)
	}
	r.rules(cf, out)

	place := make([]int, len(cf.fits)) // of the standing fits among themselves
	n := 0
	for i, f := range cf.fits {
		v := cf.verdict[i]
		if v.fits() {
			place[i] = n
			n++
			continue
		}
		out.Skipped = append(out.Skipped, reports.Skipped{Group: label(cf.by, f.Group), N: f.N, Distinct: f.Distinct,
			Why: v.Why, Refused: v.Outcome == spec.Refuse})
	}
	out.Fits = make([]reports.Fit, n)
	full := make([]bool, len(cf.fits))
	want := wants{readings: len(cf.fits) <= briefLimit || !brief}
	if !brief {
		full = r.detailed(cf)
	}
	err := eachFit(ctx, cf, r.opt.Workers, func(ft *fitter, i int) error {
		want := wants{grid: full[i], readings: want.readings}
		doc, err := fitDocument(ft, cf, i, want)
		if err == nil {
			out.Fits[place[i]] = *doc
		}
		return err
	})
	return out, err
}

// detailed chooses the fits that are shown in full: all of a small study, else
// the flagged ones first.
func (r *Run) detailed(cf *curveFits) []bool {
	full := make([]bool, len(cf.fits))
	n := 0
	for pass := range 2 {
		for i, f := range cf.fits {
			flagged := len(flagsOf(cf.def, f, cf.verdict[i])) > 0
			if n < detailLimit && !full[i] && cf.verdict[i].fits() && (pass == 1 || flagged) {
				full[i] = true
				n++
			}
		}
	}
	return full
}

// rules lists the curve's exceptions and guards with the groups they met.
func (r *Run) rules(cf *curveFits, out *reports.Curve) {
	for _, e := range cf.def.Exceptions {
		x := reports.Exception{Name: e.Name.Text, Only: e.Source, Rule: ruleText(&e.Rule), Reason: e.Reason}
		for i, f := range cf.fits {
			if f.Exception == e.Name.Text && cf.verdict[i].fits() {
				x.Fits = append(x.Fits, label(cf.by, f.Group))
			}
		}
		out.Exceptions = append(out.Exceptions, x)
	}
	labels := map[string]string{}
	for _, f := range cf.fits {
		l := label(cf.by, f.Group)
		labels[fitName(cf.def.Name.Text, l)] = l
	}
	for _, g := range cf.guards {
		x := reports.Guard{Name: g.Guard, On: g.On, Require: g.Require, Otherwise: g.Otherwise, Reason: g.Reason, Judged: g.Judged}
		for _, f := range g.Failed {
			if l, ok := labels[f.Of]; ok {
				x.Failed = append(x.Failed, failureText(l, f))
			}
		}
		out.Guards = append(out.Guards, x)
	}
}

// failureText names what a guard's condition does not hold for, and what was
// found there.
func failureText(of string, f GuardFailure) string {
	found := f.Found
	if f.Missing {
		found = strings.TrimPrefix(found+"; a missing value counts as not holding", "; ")
	}
	switch {
	case found == "":
		return of
	case of == "":
		return found
	}
	return of + " (" + found + ")"
}

// ruleText writes a rule in the words of the spec.
func ruleText(r *spec.Rule) string {
	s := r.Name
	num := func(name string, v float64) {
		if v != 0 {
			s += ", " + name + " = " + table.FormatNumber(v)
		}
	}
	num("df", r.DF)
	num("lambda", r.Lambda)
	if r.Inflate != 1 {
		num("inflate", r.Inflate)
	}
	num("folds", float64(r.Folds))
	if r.Block != nil {
		s += ", block = " + r.Block.Name.Text
	}
	if r.Stretches {
		s += ", stretches = true"
	}
	num("gap", r.Gap)
	num("sigma", r.Sigma)
	if r.Shared != "" {
		s += ", shared = " + r.Shared
	}
	if r.OneSE {
		s += ", one_se = true"
	}
	num("df_at_least", r.DFAtLeast)
	num("df_at_most", r.DFAtMost)
	return s
}

// fitDocument fills one fit; points and evidence only where the grid is
// wanted too.
func fitDocument(ft *fitter, cf *curveFits, i int, want wants) (*reports.Fit, error) {
	c, f := cf.def, cf.fits[i]
	d, err := ft.derive(cf, i, want)
	if err != nil {
		return nil, err
	}
	out := &reports.Fit{
		Name: fitName(c.Name.Text, label(cf.by, f.Group)), Group: f.Group, N: f.N, Distinct: f.Distinct,
		Rule: f.Rule, Exception: f.Exception, Lambda: f.Lambda, EDF: f.EDF, RSS: f.RSS, Sigma: f.Sigma,
		GCV: f.GCV, LOOCV: f.LOOCV, REML: f.REML, Score: f.Score,
	}
	for _, q := range d.readings {
		out.Readings = append(out.Readings, reports.Reading{
			Name: q.def.Name.Text, Kind: q.Kind, At: q.At, Value: q.Value, Lower: q.Lower, Upper: q.Upper,
			Unit: unitOf(c, q.Kind), ValueIsX: isPlace(q.Kind), AtIsX: !isPlace(q.Kind) && q.Kind != spec.Area && q.Kind != spec.Mean && q.Kind != spec.Change, Note: q.Note})
	}
	for _, name := range d.flags {
		out.Flags = append(out.Flags, reports.Flag{Name: name, Text: flagText(name, cf.verdict[i])})
	}
	if !want.grid {
		return out, nil
	}
	out.Points = points(d.fit)
	for _, p := range d.grid {
		out.Grid = append(out.Grid, gridPoint(p))
	}
	out.Evidence = evidence(f)
	base := append([]reading.Point(nil), tabulate(d.fit, c, places(d.fit.Knots[0], d.fit.Knots[len(d.fit.Knots)-1]))...)
	for _, o := range f.Others {
		out.Evidence.Others = append(out.Evidence.Others, reports.Other{
			Rule: o.Rule, Lambda: o.Lambda, EDF: o.EDF, Shift: ft.shift(base, o.Lambda)})
	}
	return out, nil
}

// shift is how far the curve would move at another lambda: the largest
// difference in half-widths of the band in force. It uses the rows that the
// worker holds.
func (ft *fitter) shift(base []reading.Point, lambda float64) float64 {
	other := ft.ws.Fit(&ft.data, lambda)
	worst := 0.0
	for _, p := range base {
		v, _, _ := other.At(p.X)
		if diff := math.Abs(v - p.Value); diff > 0 {
			worst = max(worst, diff/halfWidth(p))
		}
	}
	return worst
}

// tabulate gives the curve and its own pointwise band at xs.
func tabulate(f *spline.Fit, c *spec.Curve, xs []float64) []reading.Point {
	return reading.Tabulate(f, reading.Band{Level: c.Band.Level}, xs, nil)
}

func points(f *spline.Fit) []reports.Point {
	d := f.Data
	out := make([]reports.Point, d.N)
	for k := range out {
		fitted := f.Value[d.Knot[k]]
		out[k] = reports.Point{X: d.RowX[k], Y: d.RowY[k], Weight: d.RowW[k], Fitted: fitted,
			Residual: d.RowY[k] - fitted, Leverage: f.RowLeverage(k)}
	}
	return out
}

func gridPoint(p reading.Point) reports.GridPoint {
	return reports.GridPoint{X: p.X, Fit: p.Value, SE: p.SE, Lower: p.Lower, Upper: p.Upper, Slope: p.Slope, Extrapolated: p.Extrapolated}
}

// evidence writes a choice as reports show it.
func evidence(f *storedFit) reports.Evidence {
	e := reports.Evidence{Criterion: criterion(f.Rule), Why: whyText(f)}
	for _, c := range f.candidates() {
		e.Candidates = append(e.Candidates, reports.Candidate{Lambda: c.Lambda, EDF: c.EDF, RSS: c.RSS, GCV: c.GCV, LOOCV: c.LOOCV, REML: c.REML, Score: c.Score})
	}
	for _, m := range f.Minima {
		e.Minima = append(e.Minima, reports.Minimum{Lambda: m.Lambda, EDF: m.EDF, Score: m.Score, AtEnd: m.End != "", Chosen: m.Chosen})
	}
	return e
}

func criterion(rule string) string {
	switch rule {
	case spec.GCV:
		return "GCV"
	case spec.LOOCV:
		return "LOOCV"
	case spec.KFold:
		return "cross-validation"
	case spec.REML:
		return "REML"
	case spec.AICc:
		return "AICc"
	case spec.KnownSigma:
		return "unbiased risk"
	case spec.ResidualTarget:
		return "RSS / n"
	}
	return ""
}

// placeText writes a place on the x axis for people.
func placeText(c *spec.Column, x float64) string {
	if c.Kind == expr.Date {
		return expr.FormatDate(math.Round(x))
	}
	s := fmt.Sprintf("%.4g", x)
	if c.Unit != "" {
		s += " " + c.Unit
	}
	return s
}

func (r *Run) contrastDocument(c *spec.Contrast) (*reports.Contrast, error) {
	cf := r.curves[c.Of]
	out := &reports.Contrast{Name: c.Name.Text, Of: c.Of, Across: c.Across, Minus: c.Minus,
		X: axis(&cf.def.Along), Y: axis(&cf.def.Response), Level: cf.def.Band.Level, BandKind: bandKind(&cf.def.Band)}
	pairs, missing, err := cf.test(r.Study, c)
	if err != nil {
		return nil, err
	}
	out.Missing = missing
	for _, p := range pairs {
		doc := reports.Pair{Group: p.label, SurelyNot: p.Sure,
			None: reports.Test{P: p.None.P, Adjusted: p.holmNone}, Same: reports.Test{P: p.Same.P, Adjusted: p.holmSame}}
		for _, g := range p.Grid {
			doc.Grid = append(doc.Grid, gridPoint(g))
		}
		out.Pairs = append(out.Pairs, doc)
	}
	return out, nil
}
