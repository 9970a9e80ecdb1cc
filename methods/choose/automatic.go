package choose

import (
	"cmp"
	"math"
	"slices"
)

// automatic minimises the rule's criterion over the range of edf.
func (s *search) automatic() (*Evidence, error) {
	if err := s.walk(); err != nil {
		return nil, err
	}
	s.look()
	e := &Evidence{Rule: s.rule.Name, Folds: s.foldOf}
	found := s.minima(false)
	if s.perfect() {
		// Every curve fits to rounding: the criteria are noise, and of equals
		// the smoothest is taken.
		found = []point{s.lattice[len(s.lattice)-1]}
	}
	best := s.best(found)
	// The candidates are the lattice and the refined minima.
	for _, p := range found {
		if p.end == inner {
			s.lattice = append(s.lattice, p)
		}
	}
	s.record(e)
	slices.SortStableFunc(found, func(a, b point) int {
		if first := cmp.Compare(b2i(b.u == best.u), b2i(a.u == best.u)); first != 0 {
			return first
		}
		return cmp.Compare(a.Score, b.Score)
	})
	e.Chosen = best.Candidate
	at := best.end
	if s.rule.OneSE {
		if c, ok := s.oneSE(best.Candidate, e.Candidates); ok {
			e.Chosen, at = c, inner
		}
	}
	for _, p := range found {
		e.Minima = append(e.Minima, Minimum{Candidate: p.Candidate, End: p.end.String(), Chosen: p.Lambda == e.Chosen.Lambda})
	}
	e.Flags = append(e.Flags, s.endFlags(e.Chosen, at)...)
	if len(found) > 1 && s.within(0.01, found[0].Score, found[1].Score) {
		e.Flags = append(e.Flags, SeveralMinima)
	}
	return e, nil
}

// record lists the lattice as candidates, in order of edf.
func (s *search) record(e *Evidence) {
	slices.Reverse(s.lattice) // nearly in order then
	slices.SortStableFunc(s.lattice, func(a, b point) int { return cmp.Compare(b.u, a.u) })
	e.Candidates = make([]Candidate, 0, len(s.lattice))
	for k, p := range s.lattice {
		if k > 0 && p.u == s.lattice[k-1].u {
			continue
		}
		e.Candidates = append(e.Candidates, p.Candidate)
	}
}

// endFlags says of a choice whether it is the null space, or an end of the
// range.
func (s *search) endFlags(c Candidate, at end) []string {
	switch {
	case c.EDF <= float64(s.d.Null())+leastAbove+1e-3:
		return []string{[]string{Constant, StraightLine, Parabola}[s.d.Null()-1]}
	case at != inner:
		return []string{AtBound}
	}
	return nil
}

// perfect tells whether a curve without roughness fits the data to rounding.
func (s *search) perfect() bool {
	scale := 0.0
	for i, y := range s.d.Y {
		scale += float64(float64(s.d.W[i]*y) * y)
	}
	if math.IsNaN(s.line) {
		c := s.ws.Scores(s.d, math.Inf(1))
		s.line = c.RSS
	}
	return s.line <= 1e-28*scale
}

func b2i(b bool) int {
	if b {
		return 1
	}
	return 0
}
