package runner

import (
	"context"
	"fmt"
	"io"
	"path/filepath"
	"runtime"
	"sort"
	"strings"

	"github.com/agext/levenshtein"

	"batten/methods/reading"
	"batten/reports"
	"batten/runner/ledger"
	"batten/runner/store"
	"batten/runner/table"
	"batten/spec"
)

// Recorded is a recorded run opened again, from its record and the store
// alone: the data are not read and need not be there.
type Recorded struct {
	Study  *spec.Study // the spec as it was run
	Record *Record
	store  *store.Store
	state  *ledger.State
}

// Reopen opens a recorded run; "" means the last one. dir is the study's
// folder, file its spec.
func Reopen(s *spec.Study, run string) (*Recorded, error) {
	rec, err := findRecord(s.Dir, run)
	if err != nil {
		return nil, err
	}
	then, err := spec.Parse(s.File, s.Dir, []byte(rec.Spec.Text))
	if err != nil {
		return nil, fmt.Errorf("the spec in the record of run %s cannot be read by this version: %w", rec.Run, err)
	}
	st, err := store.Open(filepath.Join(s.Dir, ".batten"))
	if err != nil {
		return nil, err
	}
	state, err := ledger.ReadState(ledgerDir(s))
	if err != nil {
		return nil, err
	}
	return &Recorded{Study: then, Record: rec, store: st, state: state}, nil
}

func findRecord(dir, run string) (*Record, error) {
	if run == "" {
		rec, err := lastRecord(dir)
		if err == nil && rec == nil {
			err = usagef("no run of this study is recorded here; run it first: batten run %s", dir)
		}
		return rec, err
	}
	ids, err := listRuns(dir)
	if err != nil {
		return nil, err
	}
	var found []string
	for _, id := range ids {
		if n, _ := runNumber(id); id == run || fmt.Sprint(n) == run || strings.HasPrefix(id, run) {
			found = append(found, id)
		}
	}
	switch len(found) {
	case 1:
		return readRecord(dir, found[0])
	case 0:
		return nil, usagef("no run %q is recorded; recorded are: %s", run, strings.Join(ids, ", "))
	}
	return nil, usagef("run %q could be any of %s; name one of them whole", run, strings.Join(found, ", "))
}

// curve opens a curve's fits from the store, judged by the guards as they
// were.
func (r *Recorded) curve(name string) (*curveFits, error) {
	c := r.Study.CurveByName(name)
	if c == nil {
		var all []string
		for _, c := range r.Study.Curves {
			all = append(all, c.Name.Text)
		}
		return nil, usagef("the recorded run %s has no curve %q; it has: %s%s", r.Record.Run, name, strings.Join(all, ", "), nearest(name, all))
	}
	for _, cr := range r.Record.Curves {
		if cr.Name != name {
			continue
		}
		b, ok := r.store.Object(cr.Object)
		if !ok {
			return nil, fmt.Errorf("the fits of run %s are no longer in the store; run the study again: batten run %s", r.Record.Run, r.Study.Dir)
		}
		cf, err := openCurve(r.store, c, r.Study.Seed, cr.Object, b)
		if err != nil {
			return nil, fmt.Errorf("the fits of run %s cannot be read (%w); run the study again: batten run %s", r.Record.Run, err, r.Study.Dir)
		}
		if err := judge(context.Background(), r.Study, cf, runtime.GOMAXPROCS(0)); err != nil {
			return nil, err
		}
		return cf, nil
	}
	return nil, fmt.Errorf("the record of run %s lacks curve %q", r.Record.Run, name)
}

func nearest(name string, all []string) string {
	best, at := 3, ""
	for _, a := range all {
		if d := levenshtein.Distance(name, a, nil); d < best {
			best, at = d, a
		}
	}
	if at == "" {
		return ""
	}
	return fmt.Sprintf("; did you mean %q?", at)
}

// Match is a condition col=value of a command line.
type Match struct{ Column, Value string }

// pick finds the fits that the conditions name.
func (cf *curveFits) pick(match []Match) ([]int, error) {
	for _, m := range match {
		found := false
		for _, b := range cf.by {
			found = found || b == m.Column
		}
		if !found {
			return nil, usagef("curve %q is not grouped by %q; it is grouped by: %s%s", cf.def.Name.Text, m.Column,
				strings.Join(cf.by, ", "), nearest(m.Column, cf.by))
		}
	}
	var out []int
	for i, f := range cf.fits {
		ok := true
		for _, m := range match {
			for k, b := range cf.by {
				if b == m.Column && f.Group[k] != m.Value {
					ok = false
				}
			}
		}
		if ok {
			out = append(out, i)
		}
	}
	if len(out) == 0 {
		var asked []string
		for _, m := range match {
			asked = append(asked, m.Column+"="+m.Value)
		}
		return nil, usagef("curve %q has no group with %s; its groups are: %s", cf.def.Name.Text, strings.Join(asked, ", "), cf.someGroups(12))
	}
	return out, nil
}

func (cf *curveFits) someGroups(most int) string {
	var s []string
	for i, f := range cf.fits {
		if i == most {
			s = append(s, fmt.Sprintf("... (%d in all)", len(cf.fits)))
			break
		}
		s = append(s, label(cf.by, f.Group))
	}
	return strings.Join(s, " | ")
}

// Answer is why one curve is as it is.
type Answer struct {
	Fit        reports.Fit
	Curve      reports.Curve // definition and row counts; no fits
	Skipped    string        // why there is no fit, or ""
	Run        string
	Finished   string
	Record     reports.Record
	Candidates int
	Accepted   *ledger.Entry // the accepted fit, or nil
	Ledger     string
	History    History     // of the rule's text
	Lines      []FileLines // of the fit's rows
	LinesNote  string      // why Lines is not known, or ""
	Order      int
	trace      func(io.Writer) error
	Matches    []string // the groups that match, where there is more than one
}

// Why answers for one fit. Where the conditions leave several, the answer
// names them.
func (r *Recorded) Why(ctx context.Context, curve string, match []Match) (*Answer, error) {
	cf, err := r.curve(curve)
	if err != nil {
		return nil, err
	}
	at, err := cf.pick(match)
	if err != nil {
		return nil, err
	}
	a := &Answer{Run: r.Record.Run, Finished: r.Record.Finished}
	run := &Run{Study: r.Study, Record: r.Record, state: r.state, curves: map[string]*curveFits{curve: cf}}
	a.Record = run.provenance()
	a.Ledger = run.Ledger()
	if len(at) > 1 {
		for _, i := range at {
			a.Matches = append(a.Matches, label(cf.by, cf.fits[i].Group))
		}
		return a, nil
	}
	i := at[0]
	f := cf.fits[i]
	one := &curveFits{def: cf.def, digest: cf.digest, count: cf.count, aside: cf.aside, zero: cf.zero, by: cf.by, seed: cf.seed,
		fits: cf.fits[i : i+1], values: cf.values[i : i+1], verdict: cf.verdict[i : i+1], guards: cf.guards}
	run.curves[curve] = one
	run.opt.fill()
	doc, err := run.curveDocument(ctx, cf.def, false)
	if err != nil {
		return nil, err
	}
	a.Curve = *doc
	if len(doc.Fits) == 1 {
		a.Fit = doc.Fits[0]
	} else {
		a.Fit = reports.Fit{Name: fitName(curve, label(cf.by, f.Group)), Group: f.Group, N: f.N, Distinct: f.Distinct, Rule: f.Rule, Exception: f.Exception}
		a.Skipped = cf.verdict[i].Why
	}
	a.Candidates = len(f.candidates())
	a.Order = cf.def.Order
	a.History = ruleHistory(ctx, r.Study, curve, f.Exception, r.Record.Inputs)
	a.Lines, a.LinesNote = r.fitLines(ctx, cf, f.Group)
	a.trace = func(w io.Writer) error {
		x := &exporter{cf: one, what: spec.ExportEvidence, safe: true}
		if err := table.Header(w, append(append([]string(nil), one.by...), x.columns()...)); err != nil {
			return err
		}
		return x.write(ctx, w, 1)
	}
	old, err := ledger.ReadCurve(ledgerDir(r.Study), curve)
	if err != nil {
		return nil, err
	}
	if old != nil {
		for k := range old.Entries {
			if label(old.By, old.Entries[k].Group) == label(cf.by, f.Group) {
				a.Accepted = &old.Entries[k]
				if r.state != nil {
					a.Ledger = fitLine(r.state, curve, fitName(curve, label(cf.by, f.Group)))
				}
			}
		}
	}
	return a, nil
}

// Reading is a curve's values at some x.
type Values struct {
	Fit    string
	Group  []string
	Points []reading.Point
}

// Read takes values off the fits that the conditions name.
func (r *Recorded) Read(curve string, match []Match, xs []float64) ([]Values, *spec.Curve, error) {
	cf, err := r.curve(curve)
	if err != nil {
		return nil, nil, err
	}
	at, err := cf.pick(match)
	if err != nil {
		return nil, nil, err
	}
	sorted := append([]float64(nil), xs...)
	sort.Float64s(sorted)
	ft := &fitter{}
	var out []Values
	for _, i := range at {
		f := cf.fits[i]
		name := fitName(curve, label(cf.by, f.Group))
		if !cf.verdict[i].fits() {
			if len(at) == 1 {
				return nil, nil, usagef("there is no curve for %s: %s", name, cf.verdict[i].Why)
			}
			continue
		}
		fit, err := ft.open(f)
		if err != nil {
			return nil, nil, err
		}
		b, err := band(cf, i, fit)
		if err != nil {
			return nil, nil, err
		}
		out = append(out, Values{name, f.Group, append([]reading.Point(nil), reading.Tabulate(fit, b, sorted, nil)...)})
	}
	return out, cf.def, nil
}

// Trace writes the fit's evidence as the evidence export does: every candidate
// with its scores.
func (a *Answer) Trace(w io.Writer) error { return a.trace(w) }
