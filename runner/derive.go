package runner

import (
	"math"
	"slices"

	"batten/methods/reading"
	"batten/methods/spline"
	"batten/spec"
)

// derived is what is taken from a fit when it is shown or written: the curve
// on its grid, readings, flags.
type derived struct {
	fit      *spline.Fit
	grid     []reading.Point
	readings []namedReading
	flags    []string
}

// namedReading is one result of a reading.
type namedReading struct {
	def *spec.Reading
	reading.Result
}

// wants says which parts of derived are needed.
type wants struct{ grid, readings bool }

// derive opens a stored fit and takes from it what is wanted. The result
// stands until the worker's next fit.
func (ft *fitter) derive(cf *curveFits, k int, want wants) (*derived, error) {
	c, f, v := cf.def, cf.fits[k], cf.verdict[k]
	fit, err := ft.open(f)
	if err != nil {
		return nil, err
	}
	d := &derived{fit: fit, flags: flagsOf(c, f, v)}
	if want.grid {
		xs, err := gridOf(&c.Grid, fit.Knots[0], fit.Knots[len(fit.Knots)-1])
		if err != nil {
			return nil, err
		}
		b, err := band(cf, k, fit)
		if err != nil {
			return nil, err
		}
		d.grid = reading.Tabulate(fit, b, xs, nil)
	}
	if want.readings {
		for i := range c.Readings {
			taken, err := takeReading(cf, k, fit, &c.Readings[i])
			if err != nil {
				return nil, err
			}
			for _, res := range taken {
				d.readings = append(d.readings, namedReading{&c.Readings[i], res})
			}
		}
	}
	return d, nil
}

// takeReading takes one reading from fit k of a curve.
func takeReading(cf *curveFits, k int, fit *spline.Fit, r *spec.Reading) (taken []reading.Result, err error) {
	c := cf.def
	a := reading.Ask{Kind: r.Kind, At: r.At, Direction: r.Direction, All: r.All, From: r.From, To: r.To}
	if r.Kind == spec.Surely || r.Kind == spec.Steepest || c.Order == 1 && (r.Kind == spec.Maximum || r.Kind == spec.Minimum) {
		if a.Grid, err = gridOf(&c.Grid, fit.Knots[0], fit.Knots[len(fit.Knots)-1]); err != nil {
			return nil, err
		}
		a.Seed, a.Group = cf.seed, fitName(c.Name.Text, label(byNames(c), cf.fits[k].Group))
	}
	return reading.Take(fit, c.Band.Level, a), nil
}

// flagsOf lists a fit's flags: those of its choice and residuals, whether
// anything is asked of it beyond its data, and the guards that warn.
func flagsOf(c *spec.Curve, f *storedFit, v verdict) []string {
	out := append([]string(nil), f.Flags...)
	if extrapolates(c, f) {
		out = append(out, "extrapolated")
	}
	for _, g := range v.Warned {
		out = append(out, "guard "+g)
	}
	return out
}

// extrapolates tells whether the curve's grid or a reading leaves the range
// that the fit's data cover.
func extrapolates(c *spec.Curve, f *storedFit) bool {
	if len(f.Knots) == 0 {
		return false
	}
	lo, hi := f.Knots[0], f.Knots[len(f.Knots)-1]
	if gridBeyond(&c.Grid, lo, hi) {
		return true
	}
	for i := range c.Readings {
		if beyond(&c.Readings[i], lo, hi) {
			return true
		}
	}
	return false
}

// gridBeyond tells whether the grid leaves the observed range.
func gridBeyond(g *spec.Grid, lo, hi float64) bool {
	if n := len(g.At); n > 0 {
		return g.At[0] < lo || g.At[n-1] > hi
	}
	return g.From != nil && *g.From < lo || g.To != nil && *g.To > hi
}

// beyond tells whether a reading asks for a place outside the observed range.
func beyond(r *spec.Reading, lo, hi float64) bool {
	switch r.Kind {
	case spec.ValueAt, spec.SlopeAt, spec.BendAt:
		return r.At < lo || r.At > hi
	case spec.Area, spec.Mean, spec.Change:
		return r.From < lo || r.To > hi
	}
	return false
}

// band is the interval that stands about a fit's curve. A simultaneous one
// holds over the stretch of the fit's grid.
func band(cf *curveFits, i int, fit *spline.Fit) (reading.Band, error) {
	c := cf.def
	b := reading.Band{Seed: cf.seed, Group: fitName(c.Name.Text, label(cf.by, cf.fits[i].Group)), Level: c.Band.Level, Simultaneous: c.Band.Simultaneous, NewReading: c.Band.NewReading, Weight: c.Band.Weight}
	if b.Simultaneous {
		xs, err := gridOf(&c.Grid, fit.Knots[0], fit.Knots[len(fit.Knots)-1])
		if err != nil {
			return b, err
		}
		if len(xs) > 0 {
			b.From, b.To = xs[0], xs[len(xs)-1]
		}
	}
	return b, nil
}

// isPlace tells whether a reading's value is a place on the x axis.
func isPlace(kind string) bool {
	return slices.Contains([]string{spec.Crossing, "maximum_at", "minimum_at", "steepest_at", "surely_rising", "surely_falling"}, kind)
}

// unitOf returns a reading's unit from those of the axes.
func unitOf(c *spec.Curve, kind string) string {
	x, y := c.Along.Unit, c.Response.Unit
	switch {
	case isPlace(kind):
		return x
	case kind == spec.SlopeAt || kind == spec.Steepest:
		return compound(y, "/", x)
	case kind == spec.BendAt:
		return compound(compound(y, "/", x), "/", x)
	case kind == spec.Area:
		return compound(y, " ", x)
	}
	return y
}

func compound(a, op, b string) string {
	switch {
	case a == "" && b == "":
		return ""
	case b == "":
		return a
	case a == "":
		a = "1"
	}
	return a + op + b
}

// halfWidth is half the band's width; NaN where there is none.
func halfWidth(p reading.Point) float64 { return float64(0.5 * (p.Upper - p.Lower)) }

// checkpoints is how many evenly spaced places of a curve the ledger keeps.
const checkpoints = 33

// places returns the ledger's places on [lo, hi].
func places(lo, hi float64) []float64 {
	out := make([]float64, checkpoints)
	for i := range out {
		out[i] = lo + float64((hi-lo)*float64(float64(i)/(checkpoints-1)))
	}
	out[checkpoints-1] = hi
	return out
}

// finite tells whether v is an ordinary number.
func finite(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }
