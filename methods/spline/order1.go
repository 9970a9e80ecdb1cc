package spline

import (
	"math"

	"batten/methods/elementary"
)

// The penalised curve of order 1: it minimises
//
//	sum_i w_i (y_i - g(x_i))^2 + lambda * integral g'(t)^2 dt,
//
// is straight between knots and constant beyond the ends. As lambda grows it
// becomes the weighted mean. It is the posterior mean of a Wiener process with
// a diffuse start, filtered from both ends without subtractions.

// state1 is what one filter knows of g before it meets a knot's reading, over
// sigma^2: precision lam, and zeta = lam times the mean.
type state1 struct{ lam, zeta float64 }

// step takes in a reading y of weight w and goes on by h. den is the factor of
// the determinant that the step contributes.
func (s state1) step(h, w, y, q float64) (next state1, den float64) {
	d := s.lam + w
	den = 1 + float64(d*float64(q*h))
	return state1{d / den, (s.zeta + float64(w*y)) / den}, den
}

// memory1 is the memory of fits of order 1. The zero value is ready; it must
// not be shared between goroutines.
type memory1 struct{ forward, backward []state1 }

func (ws *memory1) filter(d *Data, q float64, wantDet bool) (det logProduct) {
	m := len(d.X)
	if cap(ws.forward) < m {
		ws.forward, ws.backward = make([]state1, m+m/4), make([]state1, m+m/4)
	}
	fw, bw := ws.forward[:m], ws.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	fw[0], bw[m-1] = state1{}, state1{}
	var f, g state1
	p := 1.0
	for i := 0; i < m-1; i++ {
		var den float64
		f, den = f.step(x[i+1]-x[i], w[i], y[i], q)
		fw[i+1] = f
		if wantDet {
			if !(den < 1e100) {
				det.times(den)
			} else if p = float64(p * den); p > 1e100 {
				det.times(p)
				p = 1
			}
		}
		k := m - 1 - i
		g, _ = g.step(x[k]-x[k-1], w[k], y[k], q)
		bw[k-1] = g
	}
	if wantDet {
		det.times(p)
		det.times(f.lam + w[m-1])
	}
	return det
}

// evaluate1 returns the criteria of order 1 at lambda (> 0, or +Inf for the
// weighted mean). d needs 2 distinct x and must serve this order alone, for it
// keeps the constant of REML. Roughness is the integral of g'^2; it and REML are filled
// where reml is set.
func evaluate1(ws *memory1, d *Data, lambda float64, reml bool) Criteria {
	m := len(d.X)
	if m < 2 {
		panic("spline: fewer than 2 distinct x")
	}
	q := 1 / lambda
	det := ws.filter(d, q, reml)
	fw, bw := ws.forward[:m], ws.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	out := Criteria{Lambda: lambda, N: d.N}
	var sum sums
	for lo := 0; lo < m; lo += block {
		hi := min(lo+block, m)
		var part sums
		for i := lo; i < hi; i++ {
			j, n := fw[i].lam+bw[i].lam, fw[i].zeta+bw[i].zeta
			part.knot(d, i, y[i], w[i], j, n)
			if reml && i > 0 {
				s := slope1(&fw[i], &bw[i], w[i], y[i], q)
				part.rough += float64(float64((x[i]-x[i-1])*s) * s)
			}
		}
		sum.add(&part)
	}
	sum.into(&out, d)
	if reml {
		if !d.haveREML {
			d.haveREML = true
			d.reml = constant1(d)
		}
		restrict(d, &out, &det, 1)
	}
	return out
}

// slope1 is g' on the gap that ends at a knot with the given reading: q times
// the pull that what lies left of the gap's end and what lies right of it exert
// on each other there.
func slope1(f, g *state1, w, y, q float64) float64 {
	d := g.lam + w
	z := g.zeta + float64(w*y)
	return float64((float64(f.lam*z)-float64(d*f.zeta))/(f.lam+d)) * q
}

// knot adds what knot i gives: all other readings know g there with precision
// j and j*mean = n. It returns the mean response less g.
func (s *sums) knot(d *Data, i int, y, w, j, n float64) float64 {
	tot := w + j
	inv := 1 / tot
	e := y - n/j // leave-one-out residual of the knot's mean
	rest := float64(j * inv)
	s.edf += float64(w * inv)
	s.rest += rest
	r := float64(rest * e)
	s.rss += float64(float64(w*r) * r)
	if !d.tied {
		s.loo += float64(float64(w*e) * e)
		return r
	}
	for k := d.First[i]; k < d.First[i+1]; k++ {
		wk := d.RowW[k]
		ek := float64((d.RowY[k]-d.Y[i]+r)*tot) / (w - wk + j)
		if wk > 0.5*w {
			ek = d.leftOut(i, k, j, n)
		}
		s.loo += float64(float64(wk*ek) * ek)
	}
	return r
}

// leftOut returns the leave-one-out residual of row k at knot i, whose weight
// is so much of the knot's that W - w would lose digits: from the other rows
// there, and what all other readings know.
func (d *Data) leftOut(i int, k int32, j, n float64) float64 {
	for o := d.First[i]; o < d.First[i+1]; o++ {
		if o != k {
			j += d.RowW[o]
			n += float64(d.RowW[o] * d.level(d.RowY[o], i))
		}
	}
	return d.level(d.RowY[k], i) - n/j
}

func (s *sums) add(o *sums) {
	s.edf += o.edf
	s.rest += o.rest
	s.rss += o.rss
	s.loo += o.loo
	s.rough += o.rough
}

func (s *sums) into(c *Criteria, d *Data) {
	c.EDF = s.edf
	c.NEDF = s.rest + float64(d.N-len(d.X))
	c.RSS = s.rss + d.PureError
	c.LOOCV = s.loo / float64(d.N)
	c.Roughness = s.rough
}

// restrict fills REML and DREML for a penalty that leaves order parameters
// free:
//
//	-2 log L_R = (n-m)(1 + log(2 pi D/(n-m))) + log det(A'VA)
//	D = RSS + lambda * roughness,  V = diag(1/w) + K/lambda
//	K_ij = (-1)^m |x_i - x_j|^(2m-1) / (2 (2m-1)!)
//
// with m the order and A an orthonormal basis of what is orthogonal to the
// polynomials of degree m-1. det is the filter's determinant, d.reml the rest.
// Source: as for order 2, see restricted.
func restrict(d *Data, c *Criteria, det *logProduct, order int) {
	nu := float64(d.N - order)
	pen := 0.0
	if !math.IsInf(c.Lambda, 1) {
		pen = float64(c.Lambda * c.Roughness)
	}
	dev := c.RSS + pen
	c.REML = float64(nu*(1+elementary.Log(float64(2*math.Pi*dev)/nu))) + det.log() + d.reml
	if dev > 0 {
		c.DREML = float64(nu*pen)/dev - (c.EDF - float64(order))
	}
}

// constant1 is the part of log det(A'VA) that lambda does not enter. The first
// reading only places the curve, so the determinant of V times that of 1'V^-1 1
// is the product of the other readings' predictive variances, D/(lam w), which
// the filter's product gives but for the weights; 1'1 = n.
func constant1(d *Data) float64 {
	var weights logProduct
	for _, w := range d.RowW {
		weights.times(w)
	}
	return -weights.log() - elementary.Log(float64(d.N))
}

// curve1 is a fitted curve of order 1. It refers to the Data it was made from.
type curve1 struct {
	Criteria
	Data     *Data
	Knots    []float64
	Value    []float64 // g at the knots
	Leverage []float64 // S_jj of each knot
	Gap      []float64 // mean response less g at each knot, free of cancellation
	info     []float64 // precision of g at the knot from all other readings
	forward  []state1
	backward []state1
}

// fit1 computes everything at lambda into the memory of f.
func fit1(f *curve1, ws *memory1, d *Data, lambda float64) {
	m := len(d.X)
	f.Criteria = evaluate1(ws, d, lambda, true)
	f.Data = d
	f.Knots = append(f.Knots[:0], d.X...)
	f.forward = append(f.forward[:0], ws.forward[:m]...)
	f.backward = append(f.backward[:0], ws.backward[:m]...)
	f.Value, f.Leverage = grow(f.Value, m), grow(f.Leverage, m)
	f.Gap, f.info = grow(f.Gap, m), grow(f.info, m)
	y, w := d.yc, d.W
	for i := range f.Knots {
		j := f.forward[i].lam + f.backward[i].lam
		n := f.forward[i].zeta + f.backward[i].zeta
		r := float64(j / (w[i] + j) * (y[i] - n/j))
		f.Gap[i] = r
		f.info[i] = j
		f.Leverage[i] = w[i] / (w[i] + j)
		f.Value[i] = y[i] - r + d.line(i)
	}
}

// at returns g and its slope at x; at a knot the slope is that of the gap to
// the right, beyond the ends it is 0.
func (f *curve1) at(x float64) (value, slope float64) {
	m := len(f.Knots)
	switch {
	case x < f.Knots[0]:
		return f.Value[0], 0
	case x >= f.Knots[m-1]:
		return f.Value[m-1], 0
	}
	i := interval(f.Knots, x)
	u, v := x-f.Knots[i], f.Knots[i+1]-x
	h := u + v
	slope = slope1(&f.forward[i+1], &f.backward[i+1], f.Data.W[i+1], f.Data.yc[i+1], 1/f.Lambda)
	return float64(v/h*f.Value[i]) + float64(u/h*f.Value[i+1]), slope
}

// interval returns j with knots[j] <= x < knots[j+1], held within the pieces.
func interval(knots []float64, x float64) int {
	c := Curve{Knots: knots}
	return c.Interval(x)
}

// posterior returns g at any x and its variance over sigma^2, from the
// posterior of g as a Wiener process with a diffuse start: at a data x it is
// S_ii/w_i, and beyond the ends it grows by distance/lambda. g' has no
// variance: the process has no derivative.
// Source: Wahba (1978), JRSSB 40:364.
func (f *curve1) posterior(x float64) (value, variance float64) {
	value, _ = f.at(x)
	d, m := f.Data, len(f.Knots)
	q := 1 / f.Lambda
	switch {
	case x < f.Knots[0]:
		s, _ := f.backward[0].step(f.Knots[0]-x, d.W[0], d.yc[0], q)
		return value, 1 / s.lam
	case x > f.Knots[m-1]:
		s, _ := f.forward[m-1].step(x-f.Knots[m-1], d.W[m-1], d.yc[m-1], q)
		return value, 1 / s.lam
	}
	i := interval(f.Knots, x)
	if x == f.Knots[i+1] {
		i++
	}
	if x == f.Knots[i] {
		return value, 1 / (d.W[i] + f.info[i])
	}
	a, _ := f.forward[i].step(x-f.Knots[i], d.W[i], d.yc[i], q)
	b, _ := f.backward[i+1].step(f.Knots[i+1]-x, d.W[i+1], d.yc[i+1], q)
	return value, 1 / (a.lam + b.lam)
}
