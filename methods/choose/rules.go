package choose

import (
	"math"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// AICC returns the corrected Akaike criterion of n rows,
//
//	AICc(lambda) = ln(RSS/n) + 1 + 2 (edf + 1) / (n - edf - 2)
//
// +Inf where edf reaches n - 2. Source: Hurvich, Simonoff and Tsai (1998),
// JRSSB 60:271.
func AICC(n int, rss, edf float64) float64 {
	left := float64(n) - edf - 2
	if left <= 0 {
		return math.Inf(1)
	}
	return elementary.Log(rss/float64(n)) + 1 + float64(2*(edf+1))/left
}

// Risk returns the unbiased estimate of the mean squared error of the curve at
// the data, for a known sigma (of a reading of weight 1):
//
//	RSS/n + 2 sigma^2 edf / n - sigma^2
//
// Source: Mallows (1973), Technometrics 15:661; Craven and Wahba (1979),
// Numer. Math. 31:377, equation 1.8.
func Risk(n int, rss, edf, sigma float64) float64 {
	s2 := float64(sigma * sigma)
	return rss/float64(n) + float64(float64(2*s2)*edf)/float64(n) - s2
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
	case AICc:
		return AICC(c.N, c.RSS, c.EDF)
	case KnownSigma:
		return Risk(c.N, c.RSS, c.EDF, s.rule.Sigma)
	case ResidualTarget:
		return c.RSS / float64(c.N)
	case KFold:
		score, _ := s.crossValidate(c.Lambda)
		return score
	}
	return c.GCV(1)
}

// logarithmic tells whether the rule's score is a log of what scores by the
// others' measure, and what one unit of that log counts.
func (s *search) logarithmic() (unit float64, ok bool) {
	switch s.rule.Name {
	case REML:
		return float64(s.d.N - s.d.Null()), true
	case AICc:
		return 1, true
	}
	return 0, false
}

// within tells whether a score lies within the given share above the best. A
// log likelihood, or AICc, counts by the deviance it stands for.
func (s *search) within(share, best, other float64) bool {
	if other == best {
		return true
	}
	if unit, ok := s.logarithmic(); ok {
		return other-best <= float64(share*unit)
	}
	return other <= best+float64(share*math.Abs(best))
}

// target finds the smoothest curve whose RSS does not exceed n sigma^2.
// Source: Reinsch (1967), Numer. Math. 10:177.
func (s *search) target() (*Evidence, error) {
	goal := float64(float64(s.d.N) * float64(s.rule.Sigma*s.rule.Sigma))
	if err := s.walk(); err != nil {
		return nil, err
	}
	l := s.lattice // from rough to smooth: RSS rises
	e := &Evidence{Rule: s.rule.Name}
	var chosen point
	line := s.atLambda(math.Inf(1))
	switch k := firstAbove(l, goal); {
	case line.RSS <= goal && s.rule.DFAtLeast == 0:
		chosen = line
		s.lattice = append(s.lattice, line)
	case k == 0: // even the roughest lies farther from the data
		chosen = l[0]
		chosen.end = rough
		e.Flags = append(e.Flags, TargetUnreached)
	case k == len(l):
		chosen = l[len(l)-1]
		if s.rule.DFAtLeast == 0 { // between the range's smooth end and the line
			chosen = s.settle(goal, chosen, point{u: chosen.u + 40})
			s.lattice = append(s.lattice, chosen)
		}
	default:
		chosen = s.settle(goal, l[k-1], l[k])
		s.lattice = append(s.lattice, chosen)
	}
	s.record(e)
	e.Chosen = chosen.Candidate
	e.Minima = []Minimum{{Candidate: chosen.Candidate, End: chosen.end.String(), Chosen: true}}
	e.Flags = append(e.Flags, s.endFlags(chosen.Candidate, chosen.end)...)
	return e, nil
}

func firstAbove(l []point, goal float64) int {
	for k := range l {
		if l[k].RSS > goal {
			return k
		}
	}
	return len(l)
}

// settle finds, between a and b, the log lambda at which RSS is goal: from the
// side below it, so that RSS never exceeds it.
func (s *search) settle(goal float64, a, b point) point {
	lo, hi := a.u, b.u
	best := a
	f := func(rss float64) float64 { return elementary.Log(rss / goal) }
	flo := f(a.RSS)
	fhi := f(s.atLambda(elementary.Exp(hi)).RSS)
	last := 0
	for range 200 {
		u := (float64(lo*fhi) - float64(hi*flo)) / (fhi - flo)
		if !(u > lo && u < hi) {
			u = 0.5 * (lo + hi)
		}
		p := s.at(u)
		v := f(p.RSS)
		if p.RSS <= goal {
			lo, flo, best = u, v, p
			if math.Abs(v) < 1e-13 {
				break
			}
			if last == -1 {
				fhi *= 0.5
			}
			last = -1
		} else {
			hi, fhi = u, v
			if last == 1 {
				flo *= 0.5
			}
			last = 1
		}
		if hi-lo < 1e-14*(1+math.Abs(lo)) {
			break
		}
	}
	return best
}
