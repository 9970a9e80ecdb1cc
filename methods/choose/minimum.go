package choose

import "math"

// minima finds and refines every local minimum on the lattice. With few, those
// are left out that cannot be the lowest.
func (s *search) minima(few bool) []point {
	l := s.lattice
	lowest := math.Inf(1)
	for k := range l {
		lowest = min(lowest, l[k].Score)
	}
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
		if !left || !right || few && !s.within(0.03, lowest, l[k].Score) {
			continue
		}
		if k == 0 || k == len(l)-1 {
			out = append(out, s.endMinimum(k))
			continue
		}
		out = append(out, s.refine(l[k-1], l[k], l[k+1], s.guess(k)))
	}
	return out
}

// guess places the minimum near lattice point k by the polynomial through the
// five points about it.
func (s *search) guess(k int) float64 {
	l := s.lattice
	from := min(max(k-2, 0), len(l)-5)
	if from < 0 {
		return l[k].u
	}
	var x, c [5]float64
	for i := range x {
		x[i], c[i] = l[from+i].u-l[k].u, l[from+i].Score
	}
	for j := 1; j < len(x); j++ { // Newton's divided differences
		for i := len(x) - 1; i >= j; i-- {
			c[i] = (c[i] - c[i-1]) / (x[i] - x[i-j])
		}
	}
	a, b := l[k-1].u-l[k].u, l[k+1].u-l[k].u
	best, at := math.Inf(1), 0.0
	const parts = 32
	for i := 1; i < parts; i++ {
		u := a + float64((b-a)*float64(i)/parts)
		p := c[4]
		for j := 3; j >= 0; j-- {
			p = c[j] + float64(p*(u-x[j]))
		}
		if p < best {
			best, at = p, u
		}
	}
	if !(best <= l[k].Score) {
		at = 0
	}
	return l[k].u + at
}

// endMinimum settles a minimum at an end of the range: a dip may stand just
// inside it, however shallow.
func (s *search) endMinimum(k int) point {
	l := s.lattice
	inside := 1
	if k > 0 {
		inside = k - 1
	}
	step := 0.02
	if k > 0 {
		step = -step
	}
	var two [2]point
	s.points(two[:0], 0.5*(l[k].u+l[inside].u), l[k].u+step)
	mid := two[0]
	low, next := two[1], mid // is there a dip right behind the bound?
	if mid.Score < low.Score {
		low, next = mid, l[inside]
	}
	if low.Score < l[k].Score {
		if k == 0 {
			return s.refine(l[k], low, next, low.u)
		}
		return s.refine(next, low, l[k], low.u)
	}
	// the bound itself: settle its place
	df := s.hi
	if k > 0 {
		df = s.lo
	}
	if end := l[k]; math.Abs(end.EDF-df) <= loosely*df && len(l) > 2 {
		var four [4]point // about it, for a polynomial as in reach
		s.points(four[:0], end.u-0.006, end.u-0.002, end.u+0.002, end.u+0.006)
		p := s.at(s.reach(four[:], df))
		if math.Abs(p.EDF-df) > nearly*df {
			lo, hi := end.u-0.01, end.u+0.01
			p = s.at(s.root(df, lo, s.edf(lo), hi, s.edf(hi), nearly))
		}
		p.end = end.end
		s.lattice[k] = p
		return p
	}
	return l[k]
}

// refine settles the minimum that p brackets between left and right, looking
// first at u.
func (s *search) refine(left, p, right point, u float64) point {
	a, b := left.u, right.u
	tried := [2]float64{math.NaN(), math.NaN()}
	for range 12 {
		root, inside := s.polish(u)
		if inside {
			u = root
			break
		}
		if root <= a || root >= b || root == tried[0] || root == tried[1] {
			break // off the bracket, or to and fro: the lattice point stands
		}
		tried[0], tried[1] = tried[1], u
		u = root
	}
	if u > a-spacing && u < b+spacing {
		if q := s.at(u); q.Score <= p.Score+float64(1e-12*math.Abs(p.Score)) {
			return q
		}
	}
	return p
}

// polish returns the stationary point of the polynomial through evenly spaced
// scores about u, and whether it lies among them; else where to look next. Of
// REML the derivative is known and its root taken.
func (s *search) polish(u float64) (root float64, inside bool) {
	at, c := stencilAt(u), [stencil]float64{}
	known := s.rule.Name == REML
	if known {
		for k, v := range s.criteria(at[:]) {
			c[k] = v.DREML
		}
	} else {
		s.scores(at[:], c[:])
	}
	shift, inside := stationary(&c, known)
	return u + shift, inside
}

// stencilAt are the polynomial's places about u.
func stencilAt(u float64) (at [stencil]float64) {
	for k := range at {
		at[k] = u + float64((float64(k)-0.5*(stencil-1))*fine)
	}
	return at
}

// stationary finds the minimum of the polynomial through the scores of a
// stencil, or the root of that through their derivatives, as a distance from
// the middle; outside, it returns how far to go on.
func stationary(c *[stencil]float64, derivatives bool) (shift float64, inside bool) {
	const n, middle = stencil, 0.5 * (stencil - 1)
	scale := 0.0
	for _, v := range c {
		scale = max(scale, math.Abs(v))
	}
	if scale != 0 && !math.IsInf(scale, 0) {
		for k := range c {
			c[k] /= scale
		}
	}
	for k := 1; k < n; k++ { // Newton's forward differences over k!
		for i := n - 1; i >= k; i-- {
			c[i] = (c[i] - c[i-1]) / float64(k)
		}
	}
	// the derivative at t, in steps from the first point
	slope := func(t float64) float64 {
		p, dp := c[n-1], 0.0
		for k := n - 2; k >= 0; k-- {
			dp = p + float64(dp*(t-float64(k)))
			p = c[k] + float64(p*(t-float64(k)))
		}
		if derivatives {
			return p
		}
		return dp
	}
	lo, hi := 0.0, float64(n-1)
	flo, fhi := slope(lo), slope(hi)
	if !(flo < 0 && fhi > 0) {
		// the minimum lies outside: go to where the slope points
		switch {
		case flo >= 0 && fhi > 0:
			return -float64((n - 2) * fine), false
		case fhi <= 0 && flo < 0:
			return float64((n - 2) * fine), false
		}
		return 0, true
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
	return float64((float64(0.5*(lo+hi)) - middle) * fine), true
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
