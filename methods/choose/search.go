package choose

import (
	"cmp"
	"fmt"
	"math"
	"slices"
	"sync"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// Of the search. Criteria are smooth in log lambda: sums of logistic curves,
// whose nearest singularities lie at a distance of pi off the real axis. A
// lattice of spacing 1 with a look between its points and behind the bounds
// missed no minimum of 9,000 simulated choices that a grid of 501 points finds
// (TestNoBetterOnAFineGrid, at 3,000 seeds), and a polynomial through eight
// points 0.06 apart has its stationary point to about 1e-9.
const (
	spacing  = 1.0
	stencil  = 8 // points of the polynomial
	fine     = 0.06
	farthest = 600 // steps of the walk, each way
	lanes    = spline.Lanes
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
	scored  int // held-out rows that are scored
	fit     spline.Fit

	walked []point   // all that the walk tried
	line   float64   // RSS of the curve without roughness; NaN: not known yet
	lambda []float64 // of a batch
	out    []spline.Criteria
}

// point is a candidate with its place.
type point struct {
	u float64 // log lambda
	Candidate
	end end
}

// end tells which end of the range a point is.
type end int8

const (
	inner end = iota
	rough
	smooth
)

func (e end) String() string { return [...]string{"", "rough", "smooth"}[e] }

// pool keeps the memory of searches: many small groups are fitted in a row.
var pool = sync.Pool{New: func() any { return &search{} }}

func newSearch(ws *spline.Workspace, d *spline.Data, r Rule) *search {
	s := pool.Get().(*search)
	*s = search{ws: ws, d: d, rule: r, inflate: r.Inflate, line: math.NaN(),
		lattice: s.lattice[:0], walked: s.walked[:0], lambda: s.lambda[:0], out: s.out[:0], fit: s.fit}
	if s.inflate == 0 {
		s.inflate = 1
	}
	return s
}

// done gives the search's memory back. Nothing of it may be in use.
func (s *search) done() {
	s.ws, s.d, s.rule, s.folds = nil, nil, Rule{}, nil
	pool.Put(s)
}

// criteria evaluates everything at several log lambdas.
func (s *search) criteria(us []float64) []spline.Criteria {
	s.lambda, s.out = s.lambda[:0], s.out[:0]
	for _, u := range us {
		s.lambda = append(s.lambda, elementary.Exp(u)) // +Inf of +Inf
		s.out = append(s.out, spline.Criteria{})
	}
	s.ws.CriteriaAt(s.d, s.lambda, s.out)
	return s.out
}

// scores evaluates the rule's score alone.
func (s *search) scores(us []float64, into []float64) {
	switch s.rule.Name {
	case KFold:
		for i, u := range us {
			into[i], _ = s.crossValidate(elementary.Exp(u))
		}
	case REML:
		for i, c := range s.criteria(us) {
			into[i] = c.REML
		}
	default:
		s.lambda, s.out = s.lambda[:0], s.out[:0]
		for _, u := range us {
			s.lambda = append(s.lambda, elementary.Exp(u))
			s.out = append(s.out, spline.Criteria{})
		}
		s.ws.ScoresAt(s.d, s.lambda, s.out)
		for i := range us {
			into[i] = s.pick(&s.out[i])
		}
	}
}

func (s *search) candidate(c *spline.Criteria) Candidate {
	return Candidate{Lambda: c.Lambda, EDF: c.EDF, RSS: c.RSS, GCV: c.GCV(1), LOOCV: c.LOOCV, REML: c.REML, Score: s.pick(c)}
}

// points appends candidates at several places to out.
func (s *search) points(out []point, us ...float64) []point {
	for i, c := range s.criteria(us) {
		out = append(out, point{u: us[i], Candidate: s.candidate(&c)})
	}
	return out
}

func (s *search) at(u float64) point {
	c := s.ws.Criteria(s.d, elementary.Exp(u))
	return point{u: u, Candidate: s.candidate(&c)}
}

// atLambda is a candidate at lambda itself, which may be +Inf.
func (s *search) atLambda(lambda float64) point {
	c := s.ws.Criteria(s.d, lambda)
	return point{u: elementary.Log(lambda), Candidate: s.candidate(&c)}
}

// bounds settles the range of edf that is searched.
func (s *search) bounds() error {
	m, null := float64(len(s.d.X)), float64(s.d.Null())
	s.lo, s.hi = null+leastAbove, float64(MostShare*m)
	if s.rule.DFAtLeast > 0 {
		s.lo = max(null+1e-6, s.rule.DFAtLeast)
	}
	if s.rule.DFAtMost > 0 {
		s.hi = min(s.rule.DFAtMost, m-float64(1e-6*m))
	}
	if s.inflate > 1 {
		// beyond n/inflate the inflated score means nothing
		s.hi = min(s.hi, 0.99*float64(s.d.N)/s.inflate)
	}
	if s.rule.Name == AICc { // it means nothing from n - 2
		s.hi = min(s.hi, 0.99*float64(s.d.N-2))
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
	order := s.d.Null()
	wave := 2 * order // powers of (pi 5) and of the range
	return elementary.Log(s.d.SumW) + float64(float64(wave-1)*elementary.Log(r)) - float64(float64(wave)*elementary.Log(5*math.Pi))
}

// walk fills the lattice from the rough bound of edf to the smooth one.
func (s *search) walk() error {
	if err := s.bounds(); err != nil {
		return err
	}
	u0 := s.middle()
	var us [lanes]float64
	batch := func(all []point, from float64) []point { // the next steps away from the middle
		for i := range us {
			us[i] = u0 + float64((from+float64(i))*spacing)
		}
		return s.points(all, us[:]...)
	}
	all := batch(s.walked[:0], -1)
	last := func() *point { return &all[len(all)-1] }
	for k := lanes - 1.0; last().EDF > s.lo && k < farthest; k += lanes {
		all = batch(all, k)
	}
	high := len(all)
	for k, least := -1.0-lanes, all[0].EDF; least < s.hi && -k < farthest; k -= lanes {
		all = batch(all, k)
		least = all[len(all)-lanes].EDF
	}
	s.walked = all
	s.lattice = s.lattice[:0] // in order: the batches down come last first
	for k := len(all) - lanes; k >= high; k -= lanes {
		s.lattice = append(s.lattice, all[k:k+lanes]...)
	}
	s.lattice = append(s.lattice, all[:high]...)
	s.walked, s.lattice = s.lattice, s.walked
	all = s.walked
	ends := s.ends(all)
	s.lattice = append(s.lattice[:0], ends[0])
	for _, p := range all {
		if p.EDF > s.lo && p.EDF < s.hi {
			s.lattice = append(s.lattice, p)
		}
	}
	s.lattice = append(s.lattice, ends[1])
	return nil
}

// ends finds the places where edf is at the bounds of the range.
func (s *search) ends(all []point) [2]point {
	bounds := [2]float64{s.hi, s.lo}
	us := [3]float64{0, 0, math.Inf(1)} // and the curve without roughness, for perfect
	for i, df := range bounds {
		us[i] = s.reach(all, df)
	}
	var out [3]point
	s.points(out[:0], us[:]...)
	s.line = out[2].RSS
	for i, df := range bounds {
		if math.Abs(out[i].EDF-df) > loosely*df {
			out[i] = s.bound(all, df)
		}
		out[i].end = []end{rough, smooth}[i]
	}
	return [2]point{out[0], out[1]}
}

// reach places edf = df by the polynomial through the points about it.
func (s *search) reach(all []point, df float64) float64 {
	for k := 0; k+1 < len(all); k++ {
		if !(all[k].EDF >= df && all[k+1].EDF <= df) {
			continue
		}
		j := min(max(k-1, 0), len(all)-4)
		var b [4]float64
		for i := range b {
			b[i] = s.bend(all[j+i].EDF, df)
		}
		u := 0.0
		for i := range b {
			part := all[j+i].u
			for h := range b {
				if h != i {
					part *= b[h] / (b[h] - b[i])
				}
			}
			u += part
		}
		if u >= all[k].u && u <= all[k+1].u {
			return u
		}
		return all[k].u
	}
	return all[0].u
}

// bound finds the place where edf is df, between two points of the walk.
func (s *search) bound(all []point, df float64) point {
	for k := 0; k+1 < len(all); k++ {
		if a, b := &all[k], &all[k+1]; a.EDF >= df && b.EDF <= df {
			return s.at(s.root(df, a.u, a.EDF, b.u, b.EDF, loosely))
		}
	}
	// the walk ended before it: the data's range of edf ends here
	if all[0].EDF < df {
		return all[0]
	}
	return all[len(all)-1]
}

// bend is a function of edf that is nearly straight in log lambda, and 0 at
// df.
func (s *search) bend(edf, df float64) float64 {
	m, null := float64(len(s.d.X)), float64(s.d.Null())
	return elementary.Log((edf - null) / (df - null) * ((m - df) / (m - edf)))
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
// eb, by regula falsi with the Illinois weights on bend.
func (s *search) root(df, a, ea, b, eb, tol float64) float64 {
	f := func(e float64) float64 { return s.bend(e, df) }
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

// adopt takes another search's lattice, with this rule's scores, as far as its
// range of edf goes. It reports whether anything is left.
func (s *search) adopt(lattice []point) bool {
	if s.bounds() != nil {
		return false
	}
	s.lattice = s.lattice[:0]
	for _, p := range lattice {
		if p.end == inner && (p.EDF > s.hi || p.EDF < s.lo) || p.EDF > float64(s.d.N)-2.5 && s.rule.Name == AICc {
			continue
		}
		switch s.rule.Name {
		case GCV:
			p.Score = p.GCV
		case LOOCV:
			p.Score = p.LOOCV
		case REML:
			p.Score = p.REML
		case AICc:
			p.Score = AICC(s.d.N, p.RSS, p.EDF)
		}
		s.lattice = append(s.lattice, p)
	}
	return len(s.lattice) > 0
}

func pointsOf(c []Candidate) []point {
	out := make([]point, len(c))
	for i := range c {
		// candidates are in order of edf, the lattice runs from rough to smooth
		k := len(c) - 1 - i
		out[k] = point{u: elementary.Log(c[i].Lambda), Candidate: c[i]}
	}
	if len(out) > 0 {
		out[0].end, out[len(out)-1].end = rough, smooth
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
	slices.SortFunc(s.lattice, func(a, b point) int { return cmp.Compare(a.u, b.u) })
}
