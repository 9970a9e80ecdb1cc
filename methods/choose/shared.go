package choose

import (
	"math"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// What several groups may share.
const (
	SharedLambda = "lambda"
	SharedEDF    = "edf"
)

// Reach returns the range over which a rule may search one group: of log
// lambda, or of edf.
func Reach(ws *spline.Workspace, d *spline.Data, r Rule, what string) (lo, hi float64, err error) {
	s := newSearch(ws, d, r)
	defer s.done()
	if err := s.prepare(); err != nil {
		return 0, 0, err
	}
	if what == SharedEDF {
		return s.lo, s.hi, nil
	}
	return elementary.Log(s.solve(s.hi, loosely)), elementary.Log(s.solve(s.lo, loosely)), nil
}

// Terms are a group's terms of the summed score at several places: log lambdas
// or edfs. A score that is a mean over rows counts as often as it has rows, a
// log likelihood once.
func Terms(ws *spline.Workspace, d *spline.Data, r Rule, what string, at, into []float64) error {
	s := newSearch(ws, d, r)
	defer s.done()
	if err := s.prepare(); err != nil {
		return err
	}
	us := at
	if what == SharedEDF {
		us = make([]float64, len(at))
		for i, df := range at {
			us[i] = elementary.Log(s.solve(df, exactly))
		}
	}
	s.scores(us, into)
	if r.Name != REML {
		for i := range into {
			into[i] = float64(into[i] * float64(d.N))
		}
	}
	return nil
}

// prepare draws the folds and settles the bounds.
func (s *search) prepare() error {
	if s.rule.Name == KFold {
		if err := s.drawFolds(); err != nil {
			return err
		}
	}
	return s.bounds()
}

// Share returns the place between lo and hi at which a summed score is
// smallest, the smoother of equals. sum takes places (log lambdas, or edfs) and
// returns the sum of the groups' terms at each.
func Share(what string, lo, hi float64, sum func(at []float64) ([]float64, error)) (float64, error) {
	// edf is walked in log(edf - 1): about as even as log lambda
	place := func(v float64) float64 { return v }
	if what == SharedEDF {
		place = func(v float64) float64 { return 1 + elementary.Exp(v) }
		lo, hi = elementary.Log(lo-1), elementary.Log(hi-1)
	}
	smoother := func(a, b float64) bool { return (a > b) == (what == SharedLambda) }
	eval := func(vs []float64) ([]float64, error) {
		at := make([]float64, len(vs))
		for i, v := range vs {
			at[i] = place(v)
		}
		return sum(at)
	}
	n := max(8, int(math.Ceil((hi-lo)/0.5)))
	vs := make([]float64, n+1)
	for i := range vs {
		vs[i] = lo + float64((hi-lo)*(float64(i)/float64(n)))
	}
	vs[n] = hi
	scores, err := eval(vs)
	if err != nil {
		return 0, err
	}
	best, score := vs[0], math.Inf(1)
	consider := func(v, f float64) {
		if f < score && !sameScore(f, score) || sameScore(f, score) && smoother(v, best) {
			best, score = v, f
		}
	}
	for i, v := range vs {
		consider(v, scores[i])
	}
	for i := 1; i < n; i++ {
		if scores[i] > scores[i-1] || scores[i] > scores[i+1] {
			continue
		}
		v := vs[i]
		for range 4 {
			at := stencilAt(v)
			c, err := eval(at[:])
			if err != nil {
				return 0, err
			}
			shift, inside := stationary((*[stencil]float64)(c), false)
			v = min(max(v+shift, vs[i-1]), vs[i+1])
			if inside {
				break
			}
		}
		f, err := eval([]float64{v})
		if err != nil {
			return 0, err
		}
		consider(v, f[0])
	}
	return place(best), nil
}

// follow records a lambda, or an edf, that the group shares with others, among
// the evidence of its own rule.
func (s *search) follow() (*Evidence, error) {
	e := &Evidence{Rule: s.rule.Name}
	if own, err := s.automatic(); err == nil {
		e = own
	} else if !CausedByData(err) {
		return nil, err
	}
	lambda := s.rule.Shared
	if s.rule.Follow == SharedEDF {
		if s.rule.Shared >= float64(len(s.d.X)) {
			return nil, RangeError{"the shared edf is not below this group's distinct x"}
		}
		lambda = s.solve(s.rule.Shared, exactly)
	} else {
		lambda = elementary.Exp(lambda)
	}
	e.Chosen = s.atLambda(lambda).Candidate
	for i := range e.Minima {
		e.Minima[i].Chosen = false
	}
	e.Candidates = insert(e.Candidates, e.Chosen)
	e.Flags = s.endFlags(e.Chosen, inner)
	return e, nil
}

// insert puts a candidate among others that stand in order of edf.
func insert(all []Candidate, c Candidate) []Candidate {
	var out []Candidate
	done := false
	for _, o := range all {
		if !done && c.Lambda >= o.Lambda {
			if done = true; c.Lambda != o.Lambda {
				out = append(out, c)
			}
		}
		out = append(out, o)
	}
	if !done {
		out = append(out, c)
	}
	return out
}
