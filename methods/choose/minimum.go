package choose

import (
	"math"

	"batten/methods/elementary"
)

// minima finds and refines every local minimum on the lattice.
func (s *search) minima() []point {
	l := s.lattice
	var out []point
	for k := range l {
		left := k == 0 || l[k].Score < l[k-1].Score
		right := k == len(l)-1 || l[k].Score <= l[k+1].Score
		// of equals the last, the smoothest, stands for all
		if k < len(l)-1 && l[k].Score == l[k+1].Score {
			continue
		}
		if k > 0 && !left && l[k].Score == l[k-1].Score {
			left = true
		}
		if !left || !right {
			continue
		}
		if k == 0 || k == len(l)-1 {
			out = append(out, s.endMinimum(k))
			continue
		}
		out = append(out, s.refine(l[k-1], l[k], l[k+1]))
	}
	return out
}

// endMinimum settles a minimum at an end of the range: a dip may stand just
// inside it, however shallow.
func (s *search) endMinimum(k int) point {
	l := s.lattice
	inner := 1
	if k > 0 {
		inner = k - 1
	}
	mid := s.at(0.5 * (l[k].u + l[inner].u))
	step := 0.02
	if k > 0 {
		step = -step
	}
	low, next := s.at(l[k].u+step), mid // is there a dip right behind the bound?
	if mid.Score < low.Score {
		low, next = mid, l[inner]
	}
	if low.Score < l[k].Score {
		if k == 0 {
			return s.refine(l[k], low, next)
		}
		return s.refine(next, low, l[k])
	}
	// the bound itself: settle its place
	df := s.hi
	if k > 0 {
		df = s.lo
	}
	if end := l[k]; math.Abs(end.EDF-df) <= loosely*df && len(l) > 2 {
		lo, hi := end.u-0.01, end.u+0.01
		p := s.at(s.root(df, lo, s.edf(lo), hi, s.edf(hi), nearly))
		p.end = end.end
		s.lattice[k] = p
		return p
	}
	return l[k]
}

// refine settles the minimum that p brackets within (a, b).
func (s *search) refine(left, p, right point) point {
	a, b := left.u, right.u
	if s.rule.Name == REML {
		return s.refineREML(a, p, b)
	}
	best := p
	// A parabolic step or two first, for the bracket may be lopsided.
	fa, fb := left.Score, right.Score
	u, fu := p.u, p.Score
	for range 2 {
		v := vertex(a, fa, u, fu, b, fb)
		if !(v > a && v < b) {
			break
		}
		if math.Abs(v-u) < 1.5*fine {
			u = v
			break
		}
		fv := s.score(v)
		switch {
		case fv <= fu && v > u:
			a, fa, u, fu = u, fu, v, fv
		case fv <= fu:
			b, fb, u, fu = u, fu, v, fv
		case v > u:
			b, fb = v, fv
		default:
			a, fa = v, fv
		}
	}
	for range 3 {
		root, inside := s.polish(u)
		u = root
		if inside {
			break
		}
	}
	if u > a-spacing && u < b+spacing {
		if q := s.at(u); q.Score <= best.Score+float64(1e-12*math.Abs(best.Score)) {
			best = q
		}
	}
	return best
}

// vertex of the parabola through three points.
func vertex(a, fa, u, fu, b, fb float64) float64 {
	p, q := float64((u-a)*(fu-fb)), float64((u-b)*(fu-fa))
	den := p - q
	if den == 0 {
		return math.NaN()
	}
	return u - 0.5*(float64((u-a)*p)-float64((u-b)*q))/den
}

// polish returns the stationary point of the polynomial through nine evenly
// spaced scores about u, and whether it lies among them.
func (s *search) polish(u float64) (root float64, inside bool) {
	const n = 2*stencil + 1
	var c [n]float64 // Newton's forward differences over k!
	for k := range n {
		c[k] = s.score(u + float64(float64(k-stencil)*fine))
	}
	base := c[stencil]
	if base != 0 && !math.IsInf(base, 0) {
		for k := range c {
			c[k] /= math.Abs(base)
		}
	}
	for k := 1; k < n; k++ {
		for i := n - 1; i >= k; i-- {
			c[i] = (c[i] - c[i-1]) / float64(k)
		}
	}
	// derivative of the Newton form at t (in steps from the first point)
	slope := func(t float64) float64 {
		p, dp := c[n-1], 0.0
		for k := n - 2; k >= 0; k-- {
			dp = p + float64(dp*(t-float64(k)))
			p = c[k] + float64(p*(t-float64(k)))
		}
		return dp
	}
	lo, hi := 0.0, float64(n-1)
	flo, fhi := slope(lo), slope(hi)
	if !(flo < 0 && fhi > 0) {
		// the minimum lies outside: go to where the slope points
		switch {
		case flo >= 0 && fhi > 0:
			return u - stencil*fine, false
		case fhi <= 0 && flo < 0:
			return u + stencil*fine, false
		}
		return u, true
	}
	for range 60 {
		t := (float64(lo*fhi) - float64(hi*flo)) / (fhi - flo)
		if mid := 0.5 * (lo + hi); !(t > lo && t < hi) || hi-lo > 4 {
			t = mid
		}
		ft := slope(t)
		if ft == 0 || hi-lo < 1e-13 {
			lo, hi = t, t
			break
		}
		if ft < 0 {
			if lo == t {
				break
			}
			lo, flo = t, ft
			fhi *= 0.5
		} else {
			hi, fhi = t, ft
			flo *= 0.5
		}
	}
	t := float64(0.5 * (lo + hi))
	return u + float64((t-stencil)*fine), true
}

// refineREML finds the root of the derivative, which comes with the criterion.
func (s *search) refineREML(a float64, p point, b float64) point {
	slope := func(u float64) float64 {
		c := s.ws.Criteria(s.d, elementary.Exp(u))
		return c.DREML
	}
	lo, hi, flo, fhi := a, b, slope(a), slope(b)
	if !(flo < 0 && fhi > 0) {
		return p
	}
	last := 0
	for range 80 {
		u := (float64(lo*fhi) - float64(hi*flo)) / (fhi - flo)
		if !(u > lo && u < hi) {
			u = 0.5 * (lo + hi)
		}
		f := slope(u)
		if f == 0 || hi-lo <= 1e-11 || math.Abs(f) < 1e-13*math.Abs(float64(s.d.N)) {
			lo, hi = u, u
			break
		}
		if f < 0 {
			lo, flo = u, f
			if last == -1 {
				fhi *= 0.5
			}
			last = -1
		} else {
			hi, fhi = u, f
			if last == 1 {
				flo *= 0.5
			}
			last = 1
		}
	}
	return s.at(0.5 * (lo + hi))
}

// best is the lowest of the minima, the smoother of equals.
func (s *search) best(found []point) point {
	best := found[0]
	for _, p := range found[1:] {
		if p.Score < best.Score || sameScore(p.Score, best.Score) && p.u > best.u {
			best = p
		}
	}
	return best
}

// sameScore tells whether two scores differ by rounding alone.
func sameScore(a, b float64) bool {
	return math.Abs(a-b) <= 1e-12*max(math.Abs(a), math.Abs(b))
}
