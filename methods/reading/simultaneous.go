package reading

import (
	"math"
	"slices"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// Draws is how many curves are drawn from the posterior where a quantile is
// taken from draws.
const Draws = 1999

// speed is the standard deviation of the derivative of g's deviation over its
// own standard deviation: what the tube formula integrates.
func speed(m *spline.Moments) float64 {
	return math.Sqrt(m.SlopeGiven / m.VarValue)
}

// gauss4 is Gauss's rule with four points on [0, 1].
var gauss4 = [4][2]float64{
	{0.069431844202973712388, 0.17392742256872692869}, {0.33000947820757186760, 0.32607257743127307131},
	{0.66999052179242813240, 0.32607257743127307131}, {0.93056815579702628761, 0.17392742256872692869},
}

// length integrates rate over [lo, hi], piece by piece between the cuts.
func length(cuts []float64, lo, hi float64, rate func(x float64) float64) float64 {
	sum := 0.0
	piece := func(a, b float64) {
		if !(b > a) {
			return
		}
		part := 0.0
		for _, g := range gauss4 {
			part += float64(g[1] * rate(a+float64((b-a)*g[0])))
		}
		sum += float64((b - a) * part)
	}
	at := lo
	first, last := cuts[0], cuts[len(cuts)-1]
	for w := first - lo; at < min(first, hi) && w > 0; w /= 2 { // beyond the data, ever shorter pieces
		to := min(at+float64(0.5*w), hi)
		if w < 0.02*(first-lo) {
			to = min(first, hi)
		}
		piece(at, to)
		at = to
	}
	for _, c := range cuts {
		if c > at && c < hi {
			piece(at, c)
			at = c
		}
	}
	if at = max(at, lo); at < hi && hi > last && at >= last {
		for w := 0.02 * (hi - last); at < hi; w *= 2 {
			to := min(at+w, hi)
			piece(at, to)
			at = to
		}
		return sum
	}
	piece(at, hi)
	return sum
}

// tube is the probability that the largest of |Z|/s over a stretch exceeds c,
// for a Gaussian process with unit variance whose path has the given length,
// and s^2 with df degrees of freedom:
//
//	kappa/pi (1 + c^2/df)^(-df/2) + P(|t_df| > c)
//
// An upper bound, close where it is small. Source: Sun and Loader (1994), Ann.
// Stat. 22:1328, equation 3.4; for penalised curves Krivobokova, Kneib and
// Claeskens (2010), JASA 105:852.
func tube(c, kappa, df float64) float64 {
	e := elementary.Exp(-float64(0.5 * float64(df*elementary.Log(1+float64(c*c)/df))))
	if df > 1e8 {
		e = elementary.Exp(-float64(0.5 * float64(c*c)))
	}
	return min(1, float64(kappa/math.Pi*e)+float64(2*elementary.StudentTail(c, df)))
}

// critical is the c at which tube is 1 - level.
func critical(kappa, df, level float64) float64 {
	lo, hi := 0.0, 4.0
	for tube(hi, kappa, df) > 1-level && hi < 1e12 {
		hi *= 2
	}
	for range 200 {
		mid := 0.5 * (lo + hi)
		if mid == lo || mid == hi {
			break
		}
		if tube(mid, kappa, df) > 1-level {
			lo = mid
		} else {
			hi = mid
		}
	}
	return hi
}

// simultaneous is the critical value of a band that holds the curve over the
// whole of [lo, hi] at once.
//
// Paths of order 1 are nowhere differentiable, which the formula needs: there
// it is the quantile of the largest of Draws draws at 257 places.
func (r *ruler) simultaneous(lo, hi float64, b *Band) float64 {
	level := b.Level
	if !(hi > lo) {
		return elementary.StudentQuantile(0.5*(1+level), r.f.NEDF)
	}
	if r.f.Order == 1 {
		xs := make([]float64, 257)
		se := make([]float64, len(xs))
		for i := range xs {
			xs[i] = lo + float64((hi-lo)*(float64(i)/256))
			m := r.f.Posterior(xs[i])
			se[i] = math.Sqrt(m.VarValue)
		}
		var tops []float64
		r.paths("band", b.Seed, b.Group, xs, func(value, _ []float64) { tops = append(tops, top(value, se)) })
		slices.Sort(tops)
		return widen(quantile(tops, level), r.f.NEDF)
	}
	kappa := length(r.f.Knots, lo, hi, func(x float64) float64 {
		m := r.f.Posterior(x)
		return speed(&m)
	})
	return critical(kappa, r.f.NEDF, level)
}

// paths draws curves at xs and calls each with the deviations of value and
// slope over sigma.
func (r *ruler) paths(what string, seed int64, group string, xs []float64, each func(value, slope []float64)) {
	p := r.f.NewPath(xs)
	normal := elementary.Normals(what, seed, group)
	value, slope := make([]float64, len(xs)), make([]float64, len(xs))
	for range Draws {
		p.Draw(normal, value, slope)
		each(value, slope)
	}
}

// top is the largest deviation in units of its standard error.
func top(v, se []float64) float64 {
	t := 0.0
	for i, q := range v {
		if se[i] > 0 {
			t = max(t, math.Abs(q)/se[i])
		}
	}
	return t
}

// quantile returns the smallest of sorted values that at least the given share
// does not exceed.
func quantile(sorted []float64, share float64) float64 {
	k := int(math.Ceil(share*float64(len(sorted)+1))) - 1
	return sorted[max(0, min(k, len(sorted)-1))]
}

// widen turns a critical value of standard normals into one of Student's t with
// the same tail.
func widen(z, df float64) float64 {
	return elementary.StudentQuantile(1-elementary.StudentTail(z, math.Inf(1)), df)
}

// inside keeps the places of a grid that lie within the observed range.
func (r *ruler) inside(grid []float64) []float64 {
	var out []float64
	for _, x := range grid {
		if !r.beyond(x) {
			out = append(out, x)
		}
	}
	return out
}

// surely finds the stretches of the grid on which the slope's simultaneous
// band excludes 0: the curve surely rises, or falls.
func (r *ruler) surely(a Ask) []Result {
	kind := Surely + "_" + a.Direction
	xs := r.inside(a.Grid)
	nan := math.NaN()
	none := []Result{{Kind: kind, At: nan, Value: nan, Lower: nan, Upper: nan, Note: None}}
	if len(xs) < 2 || r.width == 0 {
		return none
	}
	mean := make([]float64, len(xs))
	se := make([]float64, len(xs))
	for i, x := range xs {
		m := r.f.Posterior(x)
		mean[i], se[i] = m.Slope, math.Sqrt(m.VarSlope)
	}
	var tops []float64
	r.paths("slopes", a.Seed, a.Group, xs, func(_, slope []float64) {
		tops = append(tops, top(slope, se))
	})
	slices.Sort(tops)
	c := float64(widen(quantile(tops, r.level), r.f.NEDF) * r.sigma)
	var out []Result
	open := false
	for i := range xs {
		s := mean[i]
		if a.Direction == "falling" {
			s = -s
		}
		switch sure := s > float64(c*se[i]); {
		case !sure:
			open = false
		case open:
			out[len(out)-1].Upper = xs[i]
		default:
			out = append(out, Result{Kind: kind, At: nan, Value: nan, Lower: xs[i], Upper: xs[i], Note: "the slope's simultaneous band excludes 0 here"})
			open = true
		}
	}
	if out == nil {
		return none
	}
	return out
}

// placeByDraws gives the place of an extreme its interval: the middle share of
// where the largest score lies in curves drawn from the posterior, on the grid.
func (r *ruler) placeByDraws(a Ask, what string, score func(value, slope float64) float64) (lower, upper float64, ok bool) {
	xs := r.inside(a.Grid)
	if len(xs) < 3 || r.width == 0 {
		return 0, 0, false
	}
	value, slope := make([]float64, len(xs)), make([]float64, len(xs))
	for i, x := range xs {
		value[i], slope[i], _ = r.f.At(x)
	}
	var places []float64
	r.paths(what, a.Seed, a.Group, xs, func(v, s []float64) {
		best, at := math.Inf(-1), 0
		for i := range xs {
			if q := score(value[i]+float64(r.sigma*v[i]), slope[i]+float64(r.sigma*s[i])); q > best {
				best, at = q, i
			}
		}
		places = append(places, xs[at])
	})
	slices.Sort(places)
	tail := float64(0.5 * (1 - r.level))
	return quantile(places, tail), quantile(places, 1-tail), true
}
