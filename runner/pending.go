package runner

import (
	"fmt"
	"math"
	"slices"
	"strconv"

	"batten/runner/ledger"
	"batten/spec"
	"batten/spec/expr"
)

// pendingFits are the fits that the acceptance in force left as they were
// although they differed: their old record stands.
func pendingFits(s *ledger.State) map[string]bool {
	out := map[string]bool{}
	if last := s.Last(); last != nil {
		for _, f := range last.Pending {
			out[f] = true
		}
	}
	return out
}

// acceptedLine says in one line who accepted, when and why.
func acceptedLine(a *ledger.Acceptance) string {
	how := "accepted"
	if len(a.Only) > 0 {
		how = "accepted in part"
	}
	return fmt.Sprintf("%s %s by %s: %s", how, day(a), a.Who, a.Why)
}

func day(a *ledger.Acceptance) string { return a.When[:min(10, len(a.When))] }

// fitLine says of one fit on record who accepted it, and whether it is pending.
func fitLine(s *ledger.State, curve, fit string) string {
	a, last := s.Took(curve, fit), s.Last()
	if a == nil {
		a = last
	}
	line := acceptedLine(a)
	if pendingFits(s)[fit] {
		line += fmt.Sprintf("; pending: the acceptance of %s by %s left it as it was", day(last), last.Who)
	}
	return line
}

// markPending marks the fits that differ because they were left out.
func markPending(s *ledger.State, moves []Move) {
	left := pendingFits(s)
	for i := range moves {
		moves[i].Pending = left[moves[i].Fit]
	}
}

// words say what a move is, for people.
func (m *Move) words() []string {
	if !m.Pending {
		return m.What
	}
	return append(slices.Clone(m.What), "pending")
}

// movedAway lists the accepted fits of a curve that the spec no longer has.
func movedAway(s *spec.Study, curve string) ([]Move, error) {
	old, err := ledger.ReadCurve(ledgerDir(s), curve)
	if err != nil || old == nil {
		return nil, err
	}
	var out []Move
	for _, e := range old.Entries {
		out = append(out, Move{Fit: fitName(curve, label(old.By, e.Group)), What: []string{"gone"}, OldEDF: ptr(e.EDF)})
	}
	return out, nil
}

// groupValues reads a group's values from the ledger's text, to be ordered
// like those of a run. Text that is no value of its column's kind comes last.
func groupValues(c *spec.Curve, group []string) []value {
	out := make([]value, len(group))
	for k, t := range group {
		v := value{text: t, kind: c.By[k].Kind}
		ok := true
		switch v.kind {
		case expr.Number:
			var err error
			v.num, err = strconv.ParseFloat(t, 64)
			ok = err == nil
		case expr.Date:
			v.num, ok = expr.ParseDate(t)
		}
		if !ok || math.IsNaN(v.num) {
			v.num = math.Inf(1)
		}
		out[k] = v
	}
	return out
}
