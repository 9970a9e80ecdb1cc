package spline

import (
	"math"
	"sort"
)

// Curve is a natural spline of degree 2 Order - 1, by what is needed to
// evaluate it anywhere.
//
// Order 1: straight between the values at the knots, constant beyond them.
//
// Order 2: between knots the cubic that values and second derivatives give,
// beyond them straight:
//
//	g(t) = (v g_j + u g_(j+1))/h - u v/6 [(1 + v/h) c_j + (1 + u/h) c_(j+1)]
//
// for t between knots j and j+1, u = t - x_j, v = x_(j+1) - t, h = u + v.
//
// Order 3: between knots the quintic that values, slopes and second derivatives
// at its ends give, beyond them the parabola of the end.
type Curve struct {
	Order     int       // of the penalty; 0 stands for 2
	Knots     []float64 // increasing
	Value     []float64 // g at the knots, in the unit of y
	Curvature []float64 // g'' at the knots: orders 2 (0 at both ends) and 3
	Slope     []float64 // g' at the knots: order 3

	Third, Fourth []float64 // third and fourth derivatives at the knots: order 3
}

// At returns value, slope and second derivative at x.
func (c *Curve) At(x float64) (value, slope, curvature float64) {
	m := len(c.Knots)
	switch {
	case c.Order == 3:
		value, slope, curvature, _ = c.at3(x)
		return value, slope, curvature
	case c.Order == 1 && x <= c.Knots[0]:
		return c.Value[0], 0, 0
	case c.Order == 1 && x >= c.Knots[m-1]:
		return c.Value[m-1], 0, 0
	}
	if x <= c.Knots[0] {
		_, slope, _ = c.Piece(0, c.Knots[0])
		return c.Value[0] + float64(slope*(x-c.Knots[0])), slope, 0
	}
	if x >= c.Knots[m-1] {
		_, slope, _ = c.Piece(m-2, c.Knots[m-1])
		return c.Value[m-1] + float64(slope*(x-c.Knots[m-1])), slope, 0
	}
	return c.Piece(c.Interval(x), x)
}

// Interval returns j with Knots[j] <= x < Knots[j+1], held within the pieces.
func (c *Curve) Interval(x float64) int {
	j := sort.SearchFloat64s(c.Knots, x) // first knot >= x
	if j == len(c.Knots) || c.Knots[j] != x {
		j--
	}
	return max(0, min(j, len(c.Knots)-2))
}

// Piece evaluates the polynomial between knots j and j+1, also outside them.
func (c *Curve) Piece(j int, x float64) (value, slope, curvature float64) {
	x0, x1 := c.Knots[j], c.Knots[j+1]
	switch c.Order {
	case 1:
		p, o := (x-x0)/(x1-x0), (x1-x)/(x1-x0)
		return float64(o*c.Value[j]) + float64(p*c.Value[j+1]), (c.Value[j+1] - c.Value[j]) / (x1 - x0), 0
	case 3:
		value, slope, curvature, _ = c.piece3(j, x)
		return value, slope, curvature
	}
	g0, g1, c0, c1 := c.Value[j], c.Value[j+1], c.Curvature[j], c.Curvature[j+1]
	h, u, v := x1-x0, x-x0, x1-x
	p, o := u/h, v/h
	value = float64(o*g0) + float64(p*g1) - float64(float64(u*v)/6*(float64((1+o)*c0)+float64((1+p)*c1)))
	slope = (g1-g0)/h - float64((h/6-float64(float64(u*p)/2))*c1) + float64((h/6-float64(float64(v*o)/2))*c0)
	curvature = float64(o*c0) + float64(p*c1)
	return value, slope, curvature
}

// Fit is a fitted curve with what its leverages and bands need. It refers to
// the Data it was made from, which must stay as it is while it is in use.
type Fit struct {
	Curve
	Criteria
	Data     *Data
	Leverage []float64 // S_jj of each knot: d g(x_j) / d (mean response at x_j)
	Gap      []float64 // mean response less g at each knot, free of cancellation
	info     []float64 // precision of g at the knot from all other readings
	doubt    []float64 // size of the terms that a curvature is the sum of
	forward  []state
	backward []state
	one      *curve1 // order 1
	three    *curve3 // order 3
}

// Fit computes everything at lambda (> 0, or +Inf for the weighted straight
// line; of other orders the constant, the parabola).
func (ws *Workspace) Fit(d *Data, lambda float64) *Fit {
	f := &Fit{}
	ws.FitInto(f, d, lambda)
	return f
}

// FitInto is Fit into the memory of f.
func (ws *Workspace) FitInto(f *Fit, d *Data, lambda float64) {
	switch d.Null() {
	case 1:
		if f.one == nil {
			f.one = &curve1{}
		}
		fit1(f.one, &ws.one, d, lambda)
		f.Criteria, f.Data = f.one.Criteria, d
		f.Curve = Curve{Order: 1, Knots: f.one.Knots, Value: f.one.Value}
		f.Leverage, f.Gap, f.info = f.one.Leverage, f.one.Gap, f.one.info
		return
	case 3:
		if f.three == nil {
			f.three = &curve3{}
		}
		fit3(f.three, &ws.three, d, lambda)
		f.Criteria, f.Data, f.Curve = f.three.Criteria, d, f.three.Curve
		f.Leverage, f.Gap, f.info = f.three.Leverage, f.three.Gap, f.three.info
		return
	}
	if f.Order == 1 || f.Order == 3 { // the memory of another order's fit
		*f = Fit{}
	}
	m := len(d.X)
	f.Criteria = ws.evaluate(d, lambda, true)
	f.Data = d
	f.Knots = append(f.Knots[:0], d.X...)
	// the fit keeps the filters' states; the workspace goes on with the fit's old memory
	f.forward, ws.forward = ws.forward[:m], f.forward
	f.backward, ws.backward = ws.backward[:m], f.backward
	f.Value, f.Curvature = grow(f.Value, m), grow(f.Curvature, m)
	f.Leverage, f.Gap, f.info = grow(f.Leverage, m), grow(f.Gap, m), grow(f.info, m)
	f.doubt = grow(f.doubt, m)
	q := 1 / lambda
	y, w := d.yc, d.W
	for i := range f.Knots {
		j, n, kap, a, b := combine(&f.forward[i], &f.backward[i], i == 0 || i == m-1)
		rest := j / (w[i] + j)
		r := float64(rest * (y[i] - n/j))
		g := y[i] - r
		f.Gap[i] = r
		f.info[i] = j
		f.Leverage[i] = w[i] / (w[i] + j)
		f.Value[i] = g + d.line(i)
		pull := float64(kap * q)
		f.Curvature[i] = -float64(pull * (a + float64(b*g)))
		f.doubt[i] = float64(pull * (math.Abs(f.forward[i].alpha) + math.Abs(f.backward[i].alpha) + math.Abs(float64(b*g))))
	}
	f.Curvature[0], f.Curvature[m-1] = 0, 0
	if q > 0 {
		f.moments(q)
	}
}

// moments mends the curvature where the filters' accounts of the slope cancel
// to little, as they do near the straight line. The Euler equation gives it from
// the residuals of either side, whose relative accuracy is full:
//
//	lambda g”(x_i) = sum_(j<i) w_j r_j (x_i - x_j) = sum_(j>i) w_j r_j (x_j - x_i)
//
// Of the three the one is taken whose terms are smallest.
func (f *Fit) moments(q float64) {
	m, w := len(f.Knots), f.Data.W
	side := func(first, step int) {
		var force, moment, sizeF, size float64
		for i := first; i+step > 0 && i+step < m-1; i += step {
			v := float64(w[i] * f.Gap[i])
			force += v
			sizeF += math.Abs(v)
			h := math.Abs(f.Knots[i+step] - f.Knots[i])
			moment += float64(force * h)
			size += float64(sizeF * h)
			if k := i + step; float64(size*q) < f.doubt[k] {
				f.Curvature[k], f.doubt[k] = float64(moment*q), float64(size*q)
			}
		}
	}
	side(0, 1)
	side(m-1, -1)
}

func grow[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n)
	}
	return s[:n]
}

// RowLeverage returns S_ii of row k of Data: d ghat_i / d y_i.
func (f *Fit) RowLeverage(k int) float64 {
	j := f.Data.Knot[k]
	return float64(f.Data.RowW[k]/f.Data.W[j]) * f.Leverage[j]
}

// RowResidual returns y - g of row k of Data.
func (f *Fit) RowResidual(k int) float64 {
	j := f.Data.Knot[k]
	return f.Data.RowY[k] - f.Data.Y[j] + f.Gap[j]
}

// RowLeftOut returns what the curve fitted without row k, at the same lambda,
// predicts for it.
func (f *Fit) RowLeftOut(k int) float64 {
	d := f.Data
	j := d.Knot[k]
	tot := d.W[j] + f.info[j]
	e := float64(f.RowResidual(k)*tot) / (d.W[j] - d.RowW[k] + f.info[j])
	return d.RowY[k] - e
}

// Moments are the posterior of value and slope at one x: means in the unit of
// y (and y over x), variances over sigma^2. SlopeGiven is the variance of the
// slope where the value is known.
//
// Curvature and its variance belong to order 3: of order 2 the posterior has no
// second derivative, of order 1 no slope, and their variances are infinite.
type Moments struct {
	Value, Slope, Curvature          float64
	VarValue, VarSlope, VarCurvature float64
	Cov, SlopeGiven                  float64
}

// Posterior returns value and slope at any x with their variances, from the
// posterior of g as an integrated Wiener process with a diffuse start: at a
// data x the variance of g is S_ii/w_i, larger between data, and it grows
// beyond the ends. Multiply variances by Sigma()^2.
// Source: Wahba (1978), JRSSB 40:364; Wahba (1983), JRSSB 45:133.
func (f *Fit) Posterior(x float64) Moments {
	var out Moments
	switch f.Order {
	case 1:
		out.Value, out.Slope, _ = f.At(x)
		_, out.VarValue = f.one.posterior(x)
		out.VarSlope, out.VarCurvature, out.SlopeGiven = math.Inf(1), math.Inf(1), math.Inf(1)
		return out
	case 3:
		m := f.three.posterior(x)
		return Moments{m.Value, m.Slope, m.Second, m.VarValue, m.VarSlope, m.VarSecond, m.Cov,
			max(0, m.VarSlope-float64(m.Cov*m.Cov)/m.VarValue)}
	}
	out.Value, out.Slope, out.Curvature = f.At(x)
	out.VarCurvature = math.Inf(1)
	d, m := f.Data, len(f.Knots)
	q := 1 / f.Lambda
	one := func(s state) { // one filter alone knows of x
		out.VarValue = 1 / s.lam
		out.VarSlope = s.c + float64(float64(s.b*s.b)/s.lam)
		out.SlopeGiven = s.c
		out.Cov = s.b / s.lam
	}
	switch {
	case x < f.Knots[0]:
		s, _ := f.backward[0].step(f.Knots[0]-x, d.W[0], d.yc[0], q)
		one(s)
		out.Cov = -out.Cov
		return out
	case x > f.Knots[m-1]:
		s, _ := f.forward[m-1].step(x-f.Knots[m-1], d.W[m-1], d.yc[m-1], q)
		one(s)
		return out
	}
	i := f.Interval(x)
	if x == f.Knots[i+1] {
		i++
	}
	if x == f.Knots[i] {
		f.atKnot(i, &out)
		return out
	}
	u, v := x-f.Knots[i], f.Knots[i+1]-x
	fw := start(u, d.W[i], d.yc[i], q)
	if i > 0 {
		fw, _ = f.forward[i].step(u, d.W[i], d.yc[i], q)
	}
	bw := start(v, d.W[i+1], d.yc[i+1], q)
	if i+1 < m-1 {
		bw, _ = f.backward[i+1].step(v, d.W[i+1], d.yc[i+1], q)
	}
	j, _, kap, _, _ := combine(&fw, &bw, false)
	both(&fw, &bw, kap, 1/j, &out)
	return out
}

// atKnot gives the variances at knot i, its own reading included.
func (f *Fit) atKnot(i int, out *Moments) {
	v := 1 / (f.Data.W[i] + f.info[i])
	fw, bw := &f.forward[i], &f.backward[i]
	switch i {
	case 0:
		out.VarValue, out.VarSlope, out.Cov = v, bw.c+float64(float64(bw.b*bw.b)*v), -float64(bw.b*v)
		out.SlopeGiven = bw.c
	case len(f.Knots) - 1:
		out.VarValue, out.VarSlope, out.Cov = v, fw.c+float64(float64(fw.b*fw.b)*v), float64(fw.b*v)
		out.SlopeGiven = fw.c
	default:
		both(fw, bw, 1/(fw.c+bw.c), v, out)
	}
}

// both gives the variances where two filters meet: v is that of the value.
func both(fw, bw *state, kap, v float64, out *Moments) {
	beta := float64((float64(bw.c*fw.b) - float64(fw.c*bw.b)) * kap)
	out.VarValue = v
	out.SlopeGiven = float64(float64(fw.c*bw.c) * kap)
	out.VarSlope = out.SlopeGiven + float64(float64(beta*beta)*v)
	out.Cov = float64(beta * v)
}
