package reading

import (
	"math"

	"batten/methods/spline"
)

// Cross is a place where a curve passes a level.
type Cross struct {
	X      float64
	Rising bool
}

// Crossings returns where the curve passes level between its first and its
// last knot, in x order. A touch without passing is none.
func Crossings(c *spline.Curve, level float64) []Cross {
	var out []Cross
	cuts := turning(c) // between two of them the curve is monotone
	below := 0         // sign of the last value that was off the level
	var since float64  // where it was
	for _, x := range cuts {
		v, _, _ := c.At(x)
		s := sign(v - level)
		if s == 0 {
			continue
		}
		if below != 0 && s != below {
			out = append(out, Cross{X: root(c, level, since, x), Rising: s > 0})
		}
		below, since = s, x
	}
	return out
}

func sign(v float64) int {
	switch {
	case v > 0:
		return 1
	case v < 0:
		return -1
	}
	return 0
}

// root settles the place between a and b, where the curve lies on different
// sides of the level, by bisection to the last bit.
func root(c *spline.Curve, level, a, b float64) float64 {
	va, _, _ := c.At(a)
	sa := sign(va - level)
	for range 200 {
		mid := a + float64(0.5*(b-a))
		if mid <= a || mid >= b {
			break
		}
		v, _, _ := c.At(mid)
		switch sign(v - level) {
		case 0:
			return mid
		case sa:
			a = mid
		default:
			b = mid
		}
	}
	// the nearer of the two neighbours
	va, _, _ = c.At(a)
	vb, _, _ := c.At(b)
	if math.Abs(va-level) <= math.Abs(vb-level) {
		return a
	}
	return b
}

// turning returns the knots and, between them, the places where the slope is
// zero, in x order.
func turning(c *spline.Curve) []float64 {
	switch c.Order {
	case 1:
		return c.Knots
	case 3:
		return zeros(inflections(c), func(x float64) float64 {
			_, s, _ := c.At(x)
			return s
		})
	}
	var out []float64
	for j := 0; j+1 < len(c.Knots); j++ {
		out = append(out, c.Knots[j])
		h := c.Knots[j+1] - c.Knots[j]
		_, s0, _ := c.Piece(j, c.Knots[j])
		c0, c1 := c.Curvature[j], c.Curvature[j+1]
		// slope(u) = s0 + c0 u + (c1-c0)/(2h) u^2
		a, b := (c1-c0)/(2*h), c0
		u1, u2 := quadratic(a, b, s0)
		for _, u := range [2]float64{u1, u2} {
			if u > 0 && u < h {
				if x := c.Knots[j] + u; x > out[len(out)-1] && x < c.Knots[j+1] {
					out = append(out, x)
				}
			}
		}
	}
	return append(out, c.Knots[len(c.Knots)-1])
}

// quadratic returns the real roots of a u^2 + b u + c in order, NaN for none.
func quadratic(a, b, c float64) (lo, hi float64) {
	nan := math.NaN()
	if a == 0 {
		if b == 0 {
			return nan, nan
		}
		return -c / b, nan
	}
	disc := float64(b*b) - float64(4*float64(a*c))
	if disc < 0 {
		return nan, nan
	}
	q := -0.5 * (b + math.Copysign(math.Sqrt(disc), b))
	u, v := q/a, nan
	if q != 0 {
		v = c / q
	}
	if v < u {
		return v, u
	}
	return u, v
}

// inflections returns the knots and, between them, the places where the
// second derivative is zero: the slope's extremes are among them.
func inflections(c *spline.Curve) []float64 {
	switch c.Order {
	case 1:
		return c.Knots
	case 3:
		return zeros(kinks(c), func(x float64) float64 {
			_, _, k := c.At(x)
			return k
		})
	}
	var out []float64
	for j := 0; j+1 < len(c.Knots); j++ {
		out = append(out, c.Knots[j])
		c0, c1 := c.Curvature[j], c.Curvature[j+1]
		if c0 < 0 && c1 > 0 || c0 > 0 && c1 < 0 {
			if x := c.Knots[j] + float64((c.Knots[j+1]-c.Knots[j])*(c0/(c0-c1))); x > c.Knots[j] && x < c.Knots[j+1] {
				out = append(out, x)
			}
		}
	}
	return append(out, c.Knots[len(c.Knots)-1])
}

// kinks returns the knots of a curve of order 3 and, between them, the places
// where the third derivative, a parabola, is zero.
func kinks(c *spline.Curve) []float64 {
	var out []float64
	for j := 0; j+1 < len(c.Knots); j++ {
		out = append(out, c.Knots[j])
		h := c.Knots[j+1] - c.Knots[j]
		u1, u2 := quadratic((c.Fourth[j+1]-c.Fourth[j])/(2*h), c.Fourth[j], c.Third[j])
		for _, u := range [2]float64{u1, u2} {
			if u > 0 && u < h {
				if x := c.Knots[j] + u; x > out[len(out)-1] && x < c.Knots[j+1] {
					out = append(out, x)
				}
			}
		}
	}
	return append(out, c.Knots[len(c.Knots)-1])
}

// zeros adds to cuts, between two of which f is monotone, the places where f is
// zero.
func zeros(cuts []float64, f func(x float64) float64) []float64 {
	out := []float64{cuts[0]}
	for k := 1; k < len(cuts); k++ {
		a, b := cuts[k-1], cuts[k]
		if sa, sb := sign(f(a)), sign(f(b)); sa*sb < 0 {
			for range 200 {
				mid := a + float64(0.5*(b-a))
				if mid <= a || mid >= b {
					break
				}
				if sign(f(mid)) == sa {
					a = mid
				} else {
					b = mid
				}
			}
			if b < cuts[k] {
				out = append(out, b)
			}
		}
		out = append(out, cuts[k])
	}
	return out
}
