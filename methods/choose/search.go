package choose

import (
	"fmt"
	"math"
	"slices"
	"sort"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// Of the search. Criteria are smooth in log lambda: sums of logistic curves,
// whose nearest singularities lie at a distance of pi off the real axis. A
// lattice of spacing 1 with a look between its points and behind the bounds
// missed no minimum of 9,000 simulated choices that a grid of 501 points finds
// (TestNoBetterOnAFineGrid, at 3,000 seeds), and a polynomial through nine
// points 0.05 apart has its root to about 1e-9.
const (
	spacing  = 1.0
	stencil  = 4 // points on each side
	fine     = 0.05
	farthest = 600 // steps of the walk, each way
)

// search is one rule at work on one group.
type search struct {
	ws      *spline.Workspace
	d       *spline.Data
	rule    Rule
	inflate float64
	lattice []point // in order of log lambda: from rough to smooth
	lo, hi  float64 // bounds of edf
	folds   []fold
	foldOf  []int32
}

// point is a candidate with its place.
type point struct {
	u float64 // log lambda
	Candidate
	end string
}

func newSearch(ws *spline.Workspace, d *spline.Data, r Rule) *search {
	s := &search{ws: ws, d: d, rule: r, inflate: r.Inflate}
	if s.inflate == 0 {
		s.inflate = 1
	}
	return s
}

// candidate evaluates everything at lambda.
func (s *search) candidate(lambda float64) Candidate {
	c := s.ws.Criteria(s.d, lambda)
	out := Candidate{Lambda: lambda, EDF: c.EDF, RSS: c.RSS, GCV: c.GCV(1), LOOCV: c.LOOCV, REML: c.REML}
	out.Score = s.pick(&c)
	return out
}

// pick returns the rule's own score.
func (s *search) pick(c *spline.Criteria) float64 {
	switch s.rule.Name {
	case GCV:
		return c.GCV(s.inflate)
	case LOOCV:
		return c.LOOCV
	case REML:
		return c.REML
	case KFold:
		score, _ := s.crossValidate(c.Lambda)
		return score
	}
	return c.GCV(1)
}

// score evaluates the rule's score alone.
func (s *search) score(u float64) float64 {
	lambda := elementary.Exp(u)
	switch s.rule.Name {
	case GCV, LOOCV:
		c := s.ws.Scores(s.d, lambda)
		return s.pick(&c)
	case KFold:
		score, _ := s.crossValidate(lambda)
		return score
	}
	c := s.ws.Criteria(s.d, lambda)
	return s.pick(&c)
}

func (s *search) at(u float64) point { return point{u: u, Candidate: s.candidate(elementary.Exp(u))} }

// bounds settles the range of edf that is searched.
func (s *search) bounds() error {
	m := float64(len(s.d.X))
	s.lo, s.hi = LeastDF, float64(MostShare*m)
	if s.rule.DFAtLeast > 0 {
		s.lo = max(2+1e-6, s.rule.DFAtLeast)
	}
	if s.rule.DFAtMost > 0 {
		s.hi = min(s.rule.DFAtMost, m-float64(1e-6*m))
	}
	if s.inflate > 1 {
		// beyond n/inflate the inflated score means nothing
		s.hi = min(s.hi, 0.99*float64(s.d.N)/s.inflate)
	}
	if !(s.hi > s.lo) {
		return RangeError{fmt.Sprintf("no edf is left to search between %.4g and %.4g with %d distinct x", s.lo, s.hi, len(s.d.X))}
	}
	return nil
}

// middle is a log lambda that gives an edf of about 5: the number of
// half-waves over the range that such a lambda lets pass.
func (s *search) middle() float64 {
	x := s.d.X
	r := x[len(x)-1] - x[0]
	const k4 = 97.40909103400244 * 625 // (pi * 5)^4
	return elementary.Log(s.d.SumW) + float64(3*elementary.Log(r)) - elementary.Log(k4)
}

// walk fills the lattice from the rough bound of edf to the smooth one.
func (s *search) walk() error {
	if err := s.bounds(); err != nil {
		return err
	}
	u0 := s.middle()
	start := s.at(u0)
	up, down := []point{}, []point{}
	inside := func(p point) bool { return p.EDF > s.lo && p.EDF < s.hi }
	for k, p := 1, start; p.EDF > s.lo && k < farthest; k++ {
		p = s.at(u0 + float64(float64(k)*spacing))
		up = append(up, p)
	}
	for k, p := 1, start; p.EDF < s.hi && k < farthest; k++ {
		p = s.at(u0 - float64(float64(k)*spacing))
		down = append(down, p)
	}
	slices.Reverse(down)
	all := append(append(down, start), up...)
	s.lattice = s.lattice[:0]
	for _, p := range all {
		if inside(p) {
			s.lattice = append(s.lattice, p)
		}
	}
	rough := s.bound(all, s.hi)
	rough.end = "rough"
	smooth := s.bound(all, s.lo)
	smooth.end = "smooth"
	s.lattice = append(append([]point{rough}, s.lattice...), smooth)
	return nil
}

// bound finds the place where edf is df, between two points of the walk.
func (s *search) bound(all []point, df float64) point {
	for k := 0; k+1 < len(all); k++ {
		if all[k].EDF >= df && all[k+1].EDF <= df {
			return s.at(s.root(df, all[k].u, all[k].EDF, all[k+1].u, all[k+1].EDF, loosely))
		}
	}
	// the walk ended before it: the data's range of edf ends here
	if all[0].EDF < df {
		return all[0]
	}
	return all[len(all)-1]
}

// How closely root settles edf, relative.
const (
	loosely = 1e-4 // a bound that is not taken
	nearly  = 1e-10
	exactly = 1e-14
)

// solve finds lambda with the given edf.
func (s *search) solve(df, tol float64) float64 {
	u := s.middle()
	e := s.edf(u)
	step := spacing
	if e < df {
		step = -spacing
	}
	for range farthest {
		next := u + step
		en := s.edf(next)
		if (en-df)*(e-df) <= 0 {
			if step > 0 {
				return elementary.Exp(s.root(df, u, e, next, en, tol))
			}
			return elementary.Exp(s.root(df, next, en, u, e, tol))
		}
		u, e = next, en
		step *= 1.5
	}
	return elementary.Exp(u)
}

func (s *search) edf(u float64) float64 {
	c := s.ws.Scores(s.d, elementary.Exp(u))
	return c.EDF
}

// root finds log lambda with edf = df in [a, b], where edf falls from ea to
// eb, by regula falsi with the Illinois weights on log((edf-2)/(m-edf)), which
// is nearly straight in log lambda.
func (s *search) root(df, a, ea, b, eb, tol float64) float64 {
	m := float64(len(s.d.X))
	f := func(e float64) float64 {
		return elementary.Log((e - 2) / (df - 2) * ((m - df) / (m - e)))
	}
	if ea == df {
		return a
	}
	if eb == df {
		return b
	}
	fa, fb := f(ea), f(eb)
	u, last := a, 0
	for range 80 {
		u = (float64(a*fb) - float64(b*fa)) / (fb - fa)
		if !(u > a && u < b) {
			u = 0.5 * (a + b)
		}
		e := s.edf(u)
		if math.Abs(e-df) <= tol*df || b-a <= 1e-15*(1+math.Abs(a)) {
			return u
		}
		if fu := f(e); fu > 0 {
			a, fa = u, fu
			if last == 1 {
				fb *= 0.5
			}
			last = 1
		} else {
			b, fb = u, fu
			if last == -1 {
				fa *= 0.5
			}
			last = -1
		}
	}
	return u
}

// adopt takes another search's lattice, with this rule's scores.
func (s *search) adopt(lattice []point) {
	s.lattice = append([]point(nil), lattice...)
	for i := range s.lattice {
		p := &s.lattice[i]
		switch s.rule.Name {
		case GCV:
			p.Score = p.GCV
		case LOOCV:
			p.Score = p.LOOCV
		case REML:
			p.Score = p.REML
		}
	}
}

func pointsOf(c []Candidate) []point {
	out := make([]point, len(c))
	for i := range c {
		// candidates are in order of edf, the lattice runs from rough to smooth
		k := len(c) - 1 - i
		out[k] = point{u: elementary.Log(c[i].Lambda), Candidate: c[i]}
	}
	if len(out) > 0 {
		out[0].end, out[len(out)-1].end = "rough", "smooth"
	}
	return out
}

// look puts points between lattice points where a polynomial through six of
// them says that a minimum may hide.
func (s *search) look() {
	l := s.lattice
	var found []point
	for k := 2; k+3 < len(l); k++ {
		if math.Abs(l[k+3].u-l[k-2].u-5*spacing) > 1e-6 {
			continue // an end or an extra point: not evenly spaced
		}
		v := func(i int) float64 { return l[k+i].Score }
		mid := (float64(3*(v(-2)+v(3))) - float64(25*(v(-1)+v(2))) + float64(150*(v(0)+v(1)))) / 256
		least := min(v(0), v(1))
		depth := max(math.Abs(v(0)-v(1)), 1e-4*math.Abs(least))
		neighbour := v(0) <= v(-1) && v(0) <= v(1) || v(1) <= v(0) && v(1) <= v(2)
		if !neighbour && mid < least+float64(0.05*depth) {
			found = append(found, s.at(0.5*(l[k].u+l[k+1].u)))
		}
	}
	if len(found) == 0 {
		return
	}
	s.lattice = append(s.lattice, found...)
	sort.Slice(s.lattice, func(i, j int) bool { return s.lattice[i].u < s.lattice[j].u })
}

// automatic minimises the rule's criterion over the range of edf.
func (s *search) automatic() (*Evidence, error) {
	if err := s.walk(); err != nil {
		return nil, err
	}
	s.look()
	e := &Evidence{Rule: s.rule.Name, Folds: s.foldOf}
	found := s.minima()
	if s.perfectLine() {
		// Every curve fits to rounding: the criteria are noise, and of equals
		// the smoothest is taken.
		found = []point{s.lattice[len(s.lattice)-1]}
	}
	best := s.best(found)
	// The candidates are the lattice and the refined minima.
	for _, p := range found {
		if p.end == "" {
			s.lattice = append(s.lattice, p)
		}
	}
	sort.SliceStable(s.lattice, func(i, j int) bool { return s.lattice[i].u > s.lattice[j].u })
	for k, p := range s.lattice {
		if k > 0 && p.u == s.lattice[k-1].u {
			continue
		}
		e.Candidates = append(e.Candidates, p.Candidate)
	}
	sort.SliceStable(found, func(i, j int) bool {
		if found[i].u == best.u || found[j].u == best.u {
			return found[i].u == best.u && found[j].u != best.u
		}
		return found[i].Score < found[j].Score
	})
	e.Chosen = best.Candidate
	end := best.end
	if s.rule.Name == KFold && s.rule.OneSE {
		if c, ok := s.oneSE(best.Candidate, e.Candidates); ok {
			e.Chosen, end = c, ""
		}
	}
	for _, p := range found {
		e.Minima = append(e.Minima, Minimum{Candidate: p.Candidate, End: p.end, Chosen: p.Lambda == e.Chosen.Lambda})
	}
	switch {
	case e.Chosen.EDF <= LeastDF+1e-3:
		e.Flags = append(e.Flags, StraightLine)
	case end != "":
		e.Flags = append(e.Flags, AtBound)
	}
	if len(found) > 1 && s.close(found[0].Score, found[1].Score) {
		e.Flags = append(e.Flags, SeveralMinima)
	}
	return e, nil
}

// close tells whether two minima score within 1% of each other. REML is a log
// likelihood, where 1% of the profiled deviance counts.
func (s *search) close(best, other float64) bool {
	if s.rule.Name == REML {
		return other-best <= float64(0.01*float64(s.d.N-2))
	}
	return other <= float64(1.01*best)
}

// perfectLine tells whether a straight line fits the data to rounding.
func (s *search) perfectLine() bool {
	scale := 0.0
	for i, y := range s.d.Y {
		scale += float64(float64(s.d.W[i]*y) * y)
	}
	c := s.ws.Scores(s.d, math.Inf(1))
	return c.RSS <= 1e-28*scale
}
