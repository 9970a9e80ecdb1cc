package runner

import (
	"context"
	"fmt"
	"math"
	"slices"
	"sort"
	"strings"
	"sync"

	"batten/runner/ledger"
	"batten/spec"
)

// Comparison says which fits differ between two runs, or between the ledger
// and a run, how far, and why.
type Comparison struct {
	From, To string
	Moves    []Movement // what matters most first
	Within   int        // fits that differ by less than the tolerance
	Same     int        // fits that do not differ at all
	Notes    []string   // what could not be told apart, and why
}

// Movement is one fit that differs.
type Movement struct {
	Curve, Fit       string
	Group            []string
	What             []string // new, gone, shifted, edf changed, rule changed, NAME moved, pending
	Why              string   // of a fit that is gone
	Shift            float64  // the largest, in half-widths of the old band
	By               float64  // there, new less old, in the response's unit
	At               float64  // place of it
	AtText, Unit     string
	Parts            []Part // of By; nil where the old rows are not known
	OldEDF, NewEDF   float64
	OldLambda        float64
	NewLambda        float64
	OldRule, NewRule string
	Rows             RowChange
	Readings         []ReadingChange
	Beyond           bool // beyond the curve's tolerance
}

// Causes of a movement, in the order in which they are told apart: each part
// is what the curve moves by when the cause is let in after those before it.
const (
	Program    = "program"    // the old rows at the old lambda, fitted by this version
	Data       = "data"       // the new files' rows, the spec as it was, the old lambda
	Smoothness = "smoothness" // lambda chosen anew by the rule as it was
	Spec       = "spec"       // drops, weights, order, rule
)

// Part is the share of one cause in a movement.
type Part struct {
	Cause      string
	By         float64 // in the response's unit
	HalfWidths float64 // of the old band
}

// RowChange counts rows by their x, y and weight. A row that is gone and one
// that is new at the same x are one edited row.
type RowChange struct{ Old, New, Added, Removed, Edited int }

// ReadingChange is a reading before and after.
type ReadingChange struct {
	Name, Unit string
	IsDate     bool // its values are days
	Old, New   ledger.Value
	Moved      bool // beyond the curve's tolerance
}

// Compare compares the ledger with a recorded run where from is "", else run
// from with run to. to "" is the last run.
func Compare(ctx context.Context, s *spec.Study, from, to string, opt Options) (*Comparison, error) {
	opt.fill()
	now, err := Reopen(s, to)
	if err != nil {
		return nil, err
	}
	k := &comparer{now: now, opt: opt, out: &Comparison{To: "run " + now.Record.Run}, frames: map[string]map[string]*oldRows{}}
	if from != "" {
		if k.then, err = Reopen(s, from); err != nil {
			return nil, err
		}
		k.out.From = "run " + k.then.Record.Run
	} else {
		last := now.state.Last()
		if last == nil {
			return nil, usagef("nothing has been accepted yet, so there is no ledger to compare with; name two runs, or accept one: batten accept %s --reason TEXT", s.File)
		}
		k.out.From = fmt.Sprintf("the ledger (accepted %s by %s: %s)", last.When[:min(10, len(last.When))], last.Who, last.Why)
		k.openAccepted(s)
	}
	for _, c := range now.Study.Curves {
		if err := k.curve(ctx, c); err != nil {
			return nil, err
		}
	}
	if err := k.goneCurves(); err != nil {
		return nil, err
	}
	if k.then == nil {
		left := pendingFits(now.state)
		for i := range k.out.Moves {
			if m := &k.out.Moves[i]; left[m.Fit] {
				m.What = append(m.What, "pending")
			}
		}
	}
	sort.SliceStable(k.out.Moves, func(i, j int) bool { return matters(&k.out.Moves[i]) > matters(&k.out.Moves[j]) })
	return k.out, nil
}

// matters orders movements: fits that come or go first, then by shift.
func matters(m *Movement) float64 {
	switch {
	case slices.Contains(m.What, "gone"):
		return math.Inf(1)
	case slices.Contains(m.What, "new"):
		return math.MaxFloat64
	case math.IsNaN(m.Shift):
		return 0
	}
	v := m.Shift
	if m.Beyond {
		v += 1e6
	}
	return v
}

// comparer is a comparison at work.
type comparer struct {
	now, then *Recorded // then is nil where the ledger is compared
	accepted  []*Recorded
	opt       Options
	out       *Comparison
	frames    map[string]map[string]*oldRows // of curves whose rows the spec changed, by group
	reading   sync.Mutex                     // guards frames
	mu        sync.Mutex                     // guards the notes
}

// oldRows are a group's rows in the new files under the spec as it was.
type oldRows struct{ x, y, w []float64 }

// openAccepted opens the runs that the ledger's fits come from, newest first,
// as far as their records are still here.
func (k *comparer) openAccepted(s *spec.Study) {
	seen := map[string]bool{}
	for i := len(k.now.state.Accepted) - 1; i >= 0; i-- {
		run := k.now.state.Accepted[i].Run
		if seen[run] {
			continue
		}
		seen[run] = true
		if r, err := Reopen(s, run); err == nil {
			k.accepted = append(k.accepted, r)
		}
	}
}

func (k *comparer) note(format string, a ...any) {
	k.mu.Lock()
	defer k.mu.Unlock()
	if n := fmt.Sprintf(format, a...); !slices.Contains(k.out.Notes, n) {
		k.out.Notes = append(k.out.Notes, n)
	}
}

// before is an old fit: from a run's store, from the ledger, or both.
type before struct {
	fit   *storedFit
	cf    *curveFits // of fit
	run   *Recorded
	entry *ledger.Entry
}

// olds finds the old fits of a curve by their group's label.
func (k *comparer) olds(c *spec.Curve) (map[string]*before, []string, error) {
	out := map[string]*before{}
	name := c.Name.Text
	take := func(r *Recorded, keep func(label string, f *storedFit) bool) error {
		if r.Study.CurveByName(name) == nil {
			return nil
		}
		cf, err := r.curve(name)
		if err != nil {
			return err
		}
		for i, f := range cf.fits {
			if l := label(cf.by, f.Group); cf.verdict[i].fits() && keep(l, f) {
				if out[l] == nil {
					out[l] = &before{}
				}
				out[l].fit, out[l].cf, out[l].run = f, cf, r
			}
		}
		return nil
	}
	if k.then != nil {
		if err := take(k.then, func(string, *storedFit) bool { return true }); err != nil {
			return nil, nil, err
		}
		if d := k.then.Study.CurveByName(name); d != nil {
			return out, byNames(d), nil
		}
		return out, nil, nil
	}
	old, err := ledger.ReadCurve(ledgerDir(k.now.Study), name)
	if err != nil || old == nil {
		return out, nil, err
	}
	for i := range old.Entries {
		e := &old.Entries[i]
		out[label(old.By, e.Group)] = &before{entry: e}
	}
	for _, r := range k.accepted {
		// an object that is no longer there costs the split, not the answer
		_ = take(r, func(l string, f *storedFit) bool {
			b := out[l]
			return b != nil && b.fit == nil && b.entry != nil && strings.HasPrefix(f.Key, b.entry.Key)
		})
	}
	return out, old.By, nil
}

// curve compares one curve's fits.
func (k *comparer) curve(ctx context.Context, c *spec.Curve) error {
	cf, err := k.now.curve(c.Name.Text)
	if err != nil {
		return err
	}
	olds, by, err := k.olds(c)
	if err != nil {
		return err
	}
	if by != nil && !slices.Equal(by, cf.by) {
		k.note("curve %q was grouped by %s and is by %s: none of its fits can be compared", c.Name.Text, strings.Join(by, ", "), strings.Join(cf.by, ", "))
		olds = map[string]*before{}
	}
	moves := make([]*Movement, len(cf.fits))
	var lost int
	err = eachFit(ctx, cf, k.opt.Workers, func(ft *fitter, i int) error {
		f := cf.fits[i]
		m := &Movement{Curve: c.Name.Text, Group: f.Group, Fit: fitName(c.Name.Text, label(cf.by, f.Group)), Unit: c.Response.Unit,
			OldEDF: math.NaN(), NewEDF: f.EDF, OldLambda: math.NaN(), NewLambda: f.Lambda, Shift: math.NaN(), By: math.NaN(), At: math.NaN()}
		moves[i] = m
		b := olds[label(cf.by, f.Group)]
		if b == nil {
			m.What, m.Beyond, m.Rows = []string{"new"}, true, RowChange{New: f.N, Added: f.N}
			return nil
		}
		return k.fit(ft, cf, i, b, m)
	})
	if err != nil {
		return err
	}
	have := map[string]int{}
	for i, f := range cf.fits {
		have[label(cf.by, f.Group)] = i
	}
	for i, m := range moves {
		switch {
		case m == nil:
		case len(m.What) == 0 && m.Rows == (RowChange{Old: m.Rows.Old, New: m.Rows.New}) && !(m.Shift > 0):
			k.out.Same++
		case len(m.What) == 0:
			k.out.Within++
		default:
			k.out.Moves = append(k.out.Moves, *m)
		}
		if b := olds[label(cf.by, cf.fits[i].Group)]; m != nil && b != nil && b.fit == nil {
			lost++
		}
	}
	if lost > 0 {
		k.note("the rows of %s of curve %q as they were accepted are no longer in the store: how far they moved is known, why is not", plural(lost, "fit", "fits"), c.Name.Text)
	}
	var gone []string
	for l := range olds {
		if i, ok := have[l]; !ok || !cf.verdict[i].fits() {
			gone = append(gone, l)
		}
	}
	sort.Strings(gone)
	for _, l := range gone {
		m := Movement{Curve: c.Name.Text, Fit: fitName(c.Name.Text, l), What: []string{"gone"}, Beyond: true, Why: "its group has no rows now",
			NewEDF: math.NaN(), NewLambda: math.NaN(), Shift: math.NaN(), By: math.NaN(), At: math.NaN()}
		m.OldEDF, m.OldLambda, m.Rows.Old = olds[l].numbers()
		if i, ok := have[l]; ok {
			m.Why, m.Group, m.Rows.New = cf.verdict[i].Why, cf.fits[i].Group, cf.fits[i].N
		} else {
			m.Rows.Removed = m.Rows.Old
		}
		k.out.Moves = append(k.out.Moves, m)
	}
	return nil
}

func (b *before) numbers() (edf, lambda float64, rows int) {
	if b.fit != nil {
		return b.fit.EDF, b.fit.Lambda, b.fit.N
	}
	return b.entry.EDF, b.entry.Lambda, b.entry.N
}

// goneCurves lists the fits of curves that the spec no longer has.
func (k *comparer) goneCurves() error {
	var names []string
	if k.then != nil {
		for _, c := range k.then.Study.Curves {
			names = append(names, c.Name.Text)
		}
	} else {
		for _, h := range k.now.state.Curves {
			names = append(names, h.Name)
		}
	}
	for _, name := range names {
		if k.now.Study.CurveByName(name) != nil {
			continue
		}
		c := &spec.Curve{Name: spec.Name{Text: name}}
		olds, _, err := k.olds(c)
		if err != nil {
			return err
		}
		var labels []string
		for l := range olds {
			labels = append(labels, l)
		}
		sort.Strings(labels)
		for _, l := range labels {
			m := Movement{Curve: name, Fit: fitName(name, l), What: []string{"gone"}, Beyond: true, Why: "the spec no longer has this curve",
				NewEDF: math.NaN(), NewLambda: math.NaN(), Shift: math.NaN(), By: math.NaN(), At: math.NaN()}
			m.OldEDF, m.OldLambda, m.Rows.Old = olds[l].numbers()
			k.out.Moves = append(k.out.Moves, m)
		}
	}
	return nil
}
