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

	"batten/methods/elementary"
	"batten/methods/spline"
)

// Version is raised when a reading's bytes change.
const Version = 1

// Band says which interval stands about a curve.
type Band struct {
	Level      float64 // such as 0.95
	NewReading bool    // for a new reading instead of the curve
	Weight     float64 // of the new reading; 0: the mean weight of the rows
}

// Point is a curve at one x with its interval.
type Point struct {
	X, Value, SE, Lower, Upper, Slope float64
	Extrapolated                      bool // outside the range of the data
}

// ruler measures intervals of one fit.
type ruler struct {
	f            *spline.Fit
	sigma, width float64 // width: t quantile times sigma
	lo, hi       float64 // the observed range
}

func newRuler(f *spline.Fit, level float64) ruler {
	r := ruler{f: f, sigma: scale(f), lo: f.Knots[0], hi: f.Knots[len(f.Knots)-1]}
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
// freedom times SE. Source: Wahba (1983), JRSSB 45:133.
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
	for _, x := range xs {
		m := f.Posterior(x)
		v := m.VarValue + extra
		h := r.half(v)
		out = append(out, Point{X: x, Value: m.Value, SE: float64(r.sigma * math.Sqrt(v)),
			Lower: m.Value - h, Upper: m.Value + h, Slope: m.Slope, Extrapolated: r.beyond(x)})
	}
	return out
}

// Difference tabulates a - b at xs. The groups are independent, so variances
// add; the degrees of freedom of Student's t are those of Welch (1947),
// Biometrika 34:28, and Satterthwaite (1946), Biometrics Bull. 2:110, taken at
// each x.
func Difference(a, b *spline.Fit, level float64, xs []float64) []Point {
	ra, rb := newRuler(a, level), newRuler(b, level)
	out := make([]Point, 0, len(xs))
	for _, x := range xs {
		ma, mb := a.Posterior(x), b.Posterior(x)
		va := float64(float64(ra.sigma*ra.sigma) * ma.VarValue)
		vb := float64(float64(rb.sigma*rb.sigma) * mb.VarValue)
		v := va + vb
		d := ma.Value - mb.Value
		h := 0.0
		if v > 0 {
			df := float64(v*v) / (float64(va*va)/a.NEDF + float64(vb*vb)/b.NEDF)
			h = float64(elementary.StudentQuantile(0.5*(1+level), df) * math.Sqrt(v))
		}
		out = append(out, Point{X: x, Value: d, SE: math.Sqrt(v), Lower: d - h, Upper: d + h,
			Slope: ma.Slope - mb.Slope, Extrapolated: ra.beyond(x) || rb.beyond(x)})
	}
	return out
}
