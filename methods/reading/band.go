// Package reading takes numbers off a fitted curve: the curve with its band on
// a grid, values, slopes, crossings, extremes, areas, and the difference of
// two curves, each with its interval.
//
// Places are found on the piecewise cubic itself, not on a grid. Intervals
// are pointwise, from the posterior of the fit with Student's t on n - edf
// degrees of freedom. The package chooses nothing and knows no units.
package reading

import (
	"math"
	"slices"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// Version is raised when a reading's bytes change.
const Version = 1

// Band says which interval stands about a curve.
type Band struct {
	Level        float64 // such as 0.95
	Simultaneous bool    // over the whole of [From, To] at once
	From, To     float64 // equal: the stretch of the places asked for
	NewReading   bool    // for a new reading instead of the curve
	Weight       float64 // of the new reading; 0: the mean weight of the rows

	Seed  int64  // of draws from the posterior
	Group string // what draws depend on, beside the seed
}

// Point is a curve at one x with its interval.
type Point struct {
	X, Value, SE, Lower, Upper, Slope float64
	Extrapolated                      bool // outside the range of the data
}

// ruler measures intervals of one fit.
type ruler struct {
	f            *spline.Fit
	level        float64
	sigma, width float64 // width: t quantile times sigma
	lo, hi       float64 // the observed range
}

func newRuler(f *spline.Fit, level float64) ruler {
	r := ruler{f: f, level: level, sigma: scale(f), lo: f.Knots[0], hi: f.Knots[len(f.Knots)-1]}
	if r.sigma > 0 {
		r.width = float64(elementary.StudentQuantile(0.5*(1+level), f.NEDF) * r.sigma)
	}
	return r
}

// scale is sigma; 0 where the residuals are 0, whatever is left of n - edf.
func scale(f *spline.Fit) float64 {
	if f.RSS == 0 {
		return 0
	}
	return f.Sigma()
}

// half is the half-width of an interval whose variance over sigma^2 is v.
func (r *ruler) half(v float64) float64 {
	if r.width == 0 {
		return 0
	}
	return float64(r.width * math.Sqrt(v))
}

// beyond tells whether x lies outside the observed range.
func (r *ruler) beyond(x float64) bool { return x < r.lo || x > r.hi }

// Tabulate appends the curve and its band at xs to out.
//
// The variance is sigma^2 S_ii/w_i at a data x, larger between data and
// growing beyond the ends; NewReading adds sigma^2 over the weight. SE is its
// root and the band's half-width Student's t quantile with n - edf degrees of
// freedom times SE; of a simultaneous band it is the critical value of the tube
// formula times SE. Source: Wahba (1983), JRSSB 45:133.
func Tabulate(f *spline.Fit, b Band, xs []float64, out []Point) []Point {
	r := newRuler(f, b.Level)
	extra := 0.0
	if b.NewReading {
		w := b.Weight
		if w == 0 {
			w = f.Data.SumW / float64(f.Data.N)
		}
		extra = 1 / w
	}
	if b.Simultaneous && r.sigma > 0 && len(xs) > 0 {
		lo, hi := b.From, b.To
		if lo == hi {
			lo, hi = slices.Min(xs), slices.Max(xs)
		}
		r.width = float64(r.simultaneous(lo, hi, &b) * r.sigma)
	}
	for _, x := range xs {
		m := f.Posterior(x)
		v := m.VarValue + extra
		h := r.half(v)
		out = append(out, Point{X: x, Value: m.Value, SE: float64(r.sigma * math.Sqrt(v)),
			Lower: m.Value - h, Upper: m.Value + h, Slope: m.Slope, Extrapolated: r.beyond(x)})
	}
	return out
}

// Contrast is the difference of two curves, a - b, over the stretch that both
// cover.
type Contrast struct {
	Grid []Point
	Sure [][2]float64 // stretches of the grid where the simultaneous band excludes 0
	None Test         // of no difference: a = b throughout
	Same Test         // of parallel curves: a - b constant
}

// Test is a test about a difference of curves. P is NaN where it cannot be
// made.
type Test struct {
	Largest float64 // the largest |difference| in units of its standard error
	P       float64
}

// Difference tabulates a - b at xs with its band, and tests whether it is
// nothing, or constant.
//
// The groups are independent, so variances add; the degrees of freedom of
// Student's t are those of Welch (1947), Biometrika 34:28, and Satterthwaite
// (1946), Biometrics Bull. 2:110, taken at each x, and the smallest of them for
// what holds over all xs. Both tests take the largest difference over its
// standard error: of a - b with the tube formula over the stretch of xs, so
// that the test of no difference rejects just where the simultaneous band
// excludes 0 somewhere; of a - b less its mean over xs with draws from the
// posterior.
func Difference(a, b *spline.Fit, band Band, xs []float64) Contrast {
	ra, rb := newRuler(a, band.Level), newRuler(b, band.Level)
	nan := math.NaN()
	out := Contrast{None: Test{nan, nan}, Same: Test{nan, nan}}
	if len(xs) == 0 {
		return out
	}
	sa, sb := float64(ra.sigma*ra.sigma), float64(rb.sigma*rb.sigma)
	df := make([]float64, len(xs))
	largest, least := 0.0, math.Inf(1)
	for i, x := range xs {
		ma, mb := a.Posterior(x), b.Posterior(x)
		va, vb := float64(sa*ma.VarValue), float64(sb*mb.VarValue)
		v := va + vb
		d := ma.Value - mb.Value
		if v > 0 {
			df[i] = float64(v*v) / (float64(va*va)/a.NEDF + float64(vb*vb)/b.NEDF)
			largest = max(largest, math.Abs(d)/math.Sqrt(v))
			least = min(least, df[i])
		}
		out.Grid = append(out.Grid, Point{X: x, Value: d, SE: math.Sqrt(v),
			Slope: ma.Slope - mb.Slope, Extrapolated: ra.beyond(x) || rb.beyond(x)})
	}
	lo, hi := slices.Min(xs), slices.Max(xs)
	simultaneous := 0.0
	if !math.IsInf(least, 1) && hi > lo {
		kappa := length(union(a.Knots, b.Knots), lo, hi, func(x float64) float64 {
			ma, mb := a.Posterior(x), b.Posterior(x)
			va, vb := float64(sa*ma.VarValue), float64(sb*mb.VarValue)
			// the slope's variance where the difference is known
			apart := ma.Cov/ma.VarValue - mb.Cov/mb.VarValue
			v := va + vb
			if v == 0 {
				return 0
			}
			given := float64(sa*ma.SlopeGiven) + float64(sb*mb.SlopeGiven)
			if va > 0 && vb > 0 {
				given += float64(float64(va*vb/v*apart) * apart)
			}
			return math.Sqrt(given / v)
		})
		if math.IsInf(kappa, 1) { // order 1: no formula, but draws
			d := drawPair(&ra, &rb, out.Grid, xs, &band, false)
			out.None = Test{largest, d.beyond(largest, least)}
			simultaneous = widen(quantile(d.tops, band.Level), least)
		} else {
			out.None = Test{largest, tube(largest, kappa, least)}
			simultaneous = critical(kappa, least, band.Level)
		}
		d := drawPair(&ra, &rb, out.Grid, xs, &band, true)
		out.Same = Test{d.seen, d.beyond(d.seen, least)}
	}
	for i := range out.Grid {
		p := &out.Grid[i]
		h := 0.0
		switch {
		case p.SE == 0:
		case band.Simultaneous && simultaneous > 0:
			h = float64(simultaneous * p.SE)
		default:
			h = float64(elementary.StudentQuantile(0.5*(1+band.Level), df[i]) * p.SE)
		}
		p.Lower, p.Upper = p.Value-h, p.Value+h
	}
	out.Sure = apart(out.Grid, simultaneous)
	return out
}

// apart lists the stretches of the grid on which a difference lies more than c
// standard errors to one side of 0.
func apart(grid []Point, c float64) [][2]float64 {
	var out [][2]float64
	last := 0
	for _, p := range grid {
		side := 0
		if math.Abs(p.Value) > float64(c*p.SE) {
			side = sign(p.Value)
		}
		switch {
		case side == 0:
		case side == last:
			out[len(out)-1][1] = p.X
		default:
			out = append(out, [2]float64{p.X, p.X})
		}
		last = side
	}
	return out
}

// pairDraws are draws of the difference of two curves.
type pairDraws struct {
	seen float64   // the largest difference in units of its standard error
	tops []float64 // that of each draw, sorted
}

// drawPair draws differences at xs, less their mean over xs where centered.
func drawPair(ra, rb *ruler, grid []Point, xs []float64, b *Band, centered bool) pairDraws {
	n := len(xs)
	pa, pb := ra.f.NewPath(xs), rb.f.NewPath(xs)
	normal := elementary.Normals("pair", b.Seed, b.Group)
	va, vb, slope := make([]float64, n), make([]float64, n), make([]float64, n)
	center := func(v []float64) {
		if !centered {
			return
		}
		mean := 0.0
		for _, q := range v {
			mean += q
		}
		mean /= float64(n)
		for i := range v {
			v[i] -= mean
		}
	}
	draws := make([][]float64, Draws)
	sd := make([]float64, n)
	for k := range draws {
		pa.Draw(normal, va, slope)
		pb.Draw(normal, vb, slope)
		d := make([]float64, n)
		for i := range d {
			d[i] = float64(ra.sigma*va[i]) - float64(rb.sigma*vb[i])
		}
		center(d)
		for i, v := range d {
			sd[i] += float64(v * v)
		}
		draws[k] = d
	}
	seen := make([]float64, n)
	for i := range seen {
		seen[i] = grid[i].Value
		sd[i] = math.Sqrt(sd[i] / Draws)
	}
	center(seen)
	out := pairDraws{seen: top(seen, sd)}
	for _, d := range draws {
		out.tops = append(out.tops, top(d, sd))
	}
	slices.Sort(out.tops)
	return out
}

// beyond is the p-value of a largest difference: the share of draws, itself
// among them, that reach what has its tail probability where sigma is known.
func (d *pairDraws) beyond(largest, df float64) float64 {
	z := elementary.StudentToNormal(largest, df)
	at, _ := slices.BinarySearch(d.tops, z)
	return float64(len(d.tops)-at+1) / float64(len(d.tops)+1)
}

// union merges two increasing lists.
func union(a, b []float64) []float64 {
	out := append(append([]float64(nil), a...), b...)
	slices.Sort(out)
	return slices.Compact(out)
}

// Holm adjusts p-values for their number by Holm's step-down method; NaN stays
// and does not count. Source: Holm (1979), Scand. J. Stat. 6:65.
func Holm(p []float64) []float64 {
	var order []int
	for i, v := range p {
		if !math.IsNaN(v) {
			order = append(order, i)
		}
	}
	slices.SortStableFunc(order, func(i, j int) int {
		switch {
		case p[i] < p[j]:
			return -1
		case p[i] > p[j]:
			return 1
		}
		return 0
	})
	out := append([]float64(nil), p...)
	least := 0.0
	for k, i := range order {
		least = max(least, min(1, float64(float64(len(order)-k)*p[i])))
		out[i] = least
	}
	return out
}
