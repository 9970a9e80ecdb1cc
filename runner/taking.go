package runner

import (
	"context"
	"fmt"
	"slices"
	"strings"

	"batten/runner/ledger"
	"batten/spec"
)

// taking makes the ledger anew from a run and the ledger before: fits that are
// accepted from the run, the others as they stand.
type taking struct {
	r       *Recorded
	only    []*request // none: everything is taken
	workers int
	state   *ledger.State
	curves  map[string]*ledger.Accepted // the files to be written
	entry   ledger.Acceptance           // what this acceptance takes

	refused          []string        // fits that are asked for and that a guard refused
	refusedElsewhere map[string]bool // refusals, in the record's words, of fits that are not
	notes            []string        // why a request has no curve
}

// all goes through the run's curves, then through those that only the ledger
// has.
func (t *taking) all(ctx context.Context) error {
	for _, p := range t.only {
		t.entry.Only = append(t.entry.Only, p.text)
	}
	for _, c := range t.r.Study.Curves {
		if err := t.curve(ctx, c); err != nil {
			return err
		}
	}
	if err := t.gone(); err != nil {
		return err
	}
	if len(t.only) > 0 {
		for _, text := range t.r.Record.Refused {
			if !t.refusedElsewhere[text] && !slices.Contains(t.refused, text) {
				t.refused = append(t.refused, text) // not of one fit alone
			}
		}
	}
	if len(t.refused) > 0 {
		return &RefusedError{Run: t.r.Record.Run, Refused: t.refused}
	}
	for _, p := range t.only {
		if p.hits == 0 {
			return t.nothing(p)
		}
	}
	return nil
}

// nothing says why a request took nothing.
func (t *taking) nothing(p *request) error {
	var all []string
	for _, c := range t.r.Study.Curves {
		all = append(all, c.Name.Text)
	}
	if t.r.Study.CurveByName(p.curve) == nil {
		return usagef("--only %q: run %s has no curve %q; it has: %s%s", p.text, t.r.Record.Run, p.curve, strings.Join(all, ", "), nearest(p.curve, all))
	}
	for _, n := range t.notes {
		if text, ok := strings.CutPrefix(n, p.text+"\x00"); ok {
			return usagef("--only %q: there is no curve for %s", p.text, text)
		}
	}
	cf, err := t.r.curve(p.curve)
	if err != nil {
		return err
	}
	if _, err := cf.pick(p.match); err != nil {
		return usagef("--only %q: %v", p.text, err)
	}
	return usagef("--only %q: curve %q has no fits", p.text, p.curve)
}

// curve takes one curve's fits.
func (t *taking) curve(ctx context.Context, c *spec.Curve) error {
	name := c.Name.Text
	cf, err := t.r.curve(name)
	if err != nil {
		return err
	}
	old, err := ledger.ReadCurve(ledgerDir(t.r.Study), name)
	if err != nil {
		return err
	}
	was := t.header(name)
	moves, err := moved(ctx, cf, old, t.workers)
	if err != nil {
		return err
	}
	header := ledger.CurveHeader{Name: name, Along: c.Along.Name.Text, Unit: c.Along.Unit,
		Response: c.Response.Name.Text, RespUnit: c.Response.Unit, By: append([]string{}, cf.by...)}
	whole, chosen, err := t.choose(cf, old)
	if err != nil {
		return err
	}
	for _, m := range moves {
		switch {
		case whole || chosen[m.Fit]:
			if t.r.state.Last() != nil {
				t.entry.Moved++
			}
			if slices.Contains(m.What, "gone") && len(t.only) > 0 {
				t.entry.Gone = append(t.entry.Gone, m.Fit)
			}
		case len(t.only) > 0:
			t.entry.Pending = append(t.entry.Pending, m.Fit)
		}
	}
	if len(chosen) == 0 && !whole { // the curve stays as it is on record
		if was != nil {
			t.state.Curves = append(t.state.Curves, *was)
		}
		return nil
	}
	var want func(string) bool
	if !whole {
		if was != nil {
			if err := alike(was, &header); err != nil {
				return err
			}
		}
		want = func(fit string) bool { return chosen[fit] }
	}
	taken, err := entries(ctx, cf, want, t.workers)
	if err != nil {
		return err
	}
	t.entry.Fits += len(taken)
	all := taken
	if !whole {
		var kept []ledger.Entry
		for i := 0; old != nil && i < len(old.Entries); i++ {
			if e := old.Entries[i]; !chosen[fitName(name, label(old.By, e.Group))] {
				kept = append(kept, e)
			}
		}
		for _, e := range taken {
			t.entry.Took = append(t.entry.Took, fitName(name, label(cf.by, e.Group)))
		}
		all = mergeGroups(c, taken, kept)
	} else if len(t.only) > 0 {
		t.entry.Took = append(t.entry.Took, name)
	}
	if len(all) == 0 && !whole && was == nil {
		return nil
	}
	t.state.Curves = append(t.state.Curves, header)
	t.curves[name] = &ledger.Accepted{By: cf.by, Entries: all}
	return nil
}

// header is a curve's header on record.
func (t *taking) header(name string) *ledger.CurveHeader {
	if t.r.state == nil {
		return nil
	}
	for i := range t.r.state.Curves {
		if t.r.state.Curves[i].Name == name {
			return &t.r.state.Curves[i]
		}
	}
	return nil
}

// choose finds what the requests take of a curve: all of it, or the fits named,
// of the run and of the ledger.
func (t *taking) choose(cf *curveFits, old *ledger.Accepted) (whole bool, chosen map[string]bool, err error) {
	name := cf.def.Name.Text
	whole, chosen = len(t.only) == 0, map[string]bool{}
	for _, p := range t.only {
		if p.curve != name {
			continue
		}
		if len(p.match) == 0 {
			whole = true
			p.hits++
		}
		for _, m := range p.match {
			if !slices.Contains(cf.by, m.Column) {
				by := "it has one fit alone"
				if len(cf.by) > 0 {
					by = "it is grouped by: " + strings.Join(cf.by, ", ") + nearest(m.Column, cf.by)
				}
				return false, nil, usagef("--only %q: curve %q is not grouped by %q; %s", p.text, name, m.Column, by)
			}
		}
	}
	for i, f := range cf.fits {
		fit := fitName(name, label(cf.by, f.Group))
		v := cf.verdict[i]
		picked := whole
		for _, p := range t.only {
			if p.curve != name || !p.takes(cf.by, f.Group) {
				continue
			}
			picked = true
			if v.fits() {
				chosen[fit] = true
				p.hits++
			} else {
				t.notes = append(t.notes, p.text+"\x00"+fit+": "+v.Why)
			}
		}
		if v.Outcome == spec.Refuse {
			if text := fit + ": " + v.Why; picked {
				t.refused = append(t.refused, text)
			} else {
				t.refusedElsewhere[text] = true
			}
		}
	}
	if old != nil {
		for _, e := range old.Entries {
			for _, p := range t.only {
				if p.curve == name && p.takes(old.By, e.Group) {
					chosen[fitName(name, label(old.By, e.Group))] = true
					p.hits++
				}
			}
		}
	}
	return whole, chosen, nil
}

// alike makes sure that new lines can stand beside old ones.
func alike(was, now *ledger.CurveHeader) error {
	say := func(what, a, b string) error {
		return usagef("curve %q has another %s than on record (%s, was %s), so its fits cannot stand beside the accepted ones: accept the curve whole, --only %s", now.Name, what, b, a, now.Name)
	}
	axis := func(name, unit string) string {
		if unit == "" {
			return name
		}
		return fmt.Sprintf("%s (%s)", name, unit)
	}
	if a, b := strings.Join(was.By, ", "), strings.Join(now.By, ", "); a != b {
		return say("grouping", a, b)
	}
	if a, b := axis(was.Along, was.Unit), axis(now.Along, now.Unit); a != b {
		return say("x axis", a, b)
	}
	if a, b := axis(was.Response, was.RespUnit), axis(now.Response, now.RespUnit); a != b {
		return say("response", a, b)
	}
	return nil
}

// gone deals with the curves that the spec no longer has: they leave the
// ledger where they are accepted as gone.
func (t *taking) gone() error {
	if t.r.state == nil {
		return nil
	}
	for _, h := range t.r.state.Curves {
		if t.r.Study.CurveByName(h.Name) != nil {
			continue
		}
		moves, err := movedAway(t.r.Study, h.Name)
		if err != nil {
			return err
		}
		leaves := len(t.only) == 0
		for _, p := range t.only {
			if p.curve != h.Name {
				continue
			}
			if len(p.match) > 0 {
				return usagef("--only %q: the spec no longer has curve %q; it leaves the ledger whole: --only %s", p.text, h.Name, h.Name)
			}
			leaves = true
			p.hits++
		}
		if leaves {
			t.entry.Moved += len(moves)
		} else {
			t.state.Curves = append(t.state.Curves, h)
		}
		for _, m := range moves {
			switch {
			case !leaves:
				t.entry.Pending = append(t.entry.Pending, m.Fit)
			case len(t.only) > 0:
				t.entry.Gone = append(t.entry.Gone, m.Fit)
			}
		}
	}
	return nil
}
