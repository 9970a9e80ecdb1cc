package spline

// curve3 is a fitted curve of order 3. It refers to the Data it was made from.
type curve3 struct {
	Criteria
	Curve
	Data     *Data
	Leverage []float64 // S_jj of each knot
	Gap      []float64 // mean response less g at each knot, free of cancellation
	info     []float64 // precision of g at the knot from all other readings
	forward  []state3
	backward []state3
}

// fit3 computes everything at lambda into the memory of f.
func fit3(f *curve3, ws *memory3, d *Data, lambda float64) {
	m := len(d.X)
	f.Criteria = evaluate3(ws, d, lambda, true)
	f.Data, f.Order = d, 3
	f.Knots = append(f.Knots[:0], d.X...)
	f.forward = append(f.forward[:0], ws.forward[:m]...)
	f.backward = append(f.backward[:0], ws.backward[:m]...)
	f.Value, f.Slope, f.Curvature = grow(f.Value, m), grow(f.Slope, m), grow(f.Curvature, m)
	f.Third, f.Fourth = grow(f.Third, m), grow(f.Fourth, m)
	f.Leverage, f.Gap, f.info = grow(f.Leverage, m), grow(f.Gap, m), grow(f.info, m)
	q := 1 / lambda
	y, w := d.yc, d.W
	var o meeting
	for i := range f.Knots {
		kf, kg := known(i), known(m-1-i)
		o.meet(&f.forward[i], &f.backward[i], kf, kg)
		r := float64(o.j / (w[i] + o.j) * (y[i] - o.n/o.j))
		g := y[i] - r
		f.Gap[i] = r
		f.info[i] = o.j
		f.Leverage[i] = w[i] / (w[i] + o.j)
		f.Value[i] = g + d.line(i)
		f.Slope[i], f.Curvature[i] = o.lower(g, kf, kg)
		f.Slope[i] += d.tilt
		f.Third[i], f.Fourth[i] = o.higher(g, q)
	}
	f.end(0, 1)
	f.end(m-1, m-2)
}

// end fills the end knot i from its neighbour k, which is known from two sides:
// the third derivative is a parabola between them with its vertex, 0, at i.
func (f *curve3) end(i, k int) {
	h := f.Knots[i] - f.Knots[k]
	hg := float64(h * f.Third[k])
	f.Curvature[i] = f.Curvature[k] + hg/3
	f.Slope[i] = f.Slope[k] + float64(h*(f.Curvature[k]+float64(0.25*hg)))
	f.Third[i], f.Fourth[i] = 0, 0
}

// lower returns g' and g^(2) at the value g, from the side that knows each
// better.
func (o *meeting) lower(g float64, kf, kg knows) (slope, second float64) {
	p0, p1, p2 := o.pulls(g)
	rs := o.f.r + o.g.r
	pull := p2 - p1
	side := func(s *state3, p, pull float64) (slope, second float64) {
		by := -float64(s.c * (p0 + float64(rs*p)))
		slope = s.a1 + float64(s.b1*g) + by
		second = s.a2 + float64(s.r*s.a1) + float64(s.b2*g) + float64(s.r*by) + float64(s.e*pull)
		return slope, second
	}
	if kg != all {
		return side(o.f, p1, pull)
	}
	bs, b2 := side(o.g, p2, -pull)
	bs = -bs
	if kf != all {
		return bs, b2
	}
	fs, f2 := side(o.f, p1, pull)
	slope, second = fs, f2
	if o.g.c < o.f.c {
		slope = bs
	}
	if o.g.e+float64(float64(o.g.r*o.g.r)*o.g.c) < o.f.e+float64(float64(o.f.r*o.f.r)*o.f.c) {
		second = b2
	}
	return slope, second
}

// at3 returns g, g', g^(2) and g^(3) of a curve of order 3 at x.
func (f *Curve) at3(x float64) (value, slope, second, third float64) {
	m := len(f.Knots)
	switch {
	case x <= f.Knots[0]:
		return f.beyond3(0, x)
	case x >= f.Knots[m-1]:
		return f.beyond3(m-1, x)
	}
	return f.piece3(interval(f.Knots, x), x)
}

func (f *Curve) beyond3(i int, x float64) (value, slope, second, third float64) {
	u := x - f.Knots[i]
	second = f.Curvature[i]
	slope = f.Slope[i] + float64(u*second)
	value = f.Value[i] + float64(u*(f.Slope[i]+float64(float64(0.5*u)*second)))
	return value, slope, second, 0
}

// piece3 evaluates the quintic between knots j and j+1. With u = x - x_j,
// v = x_(j+1) - x, p = u/h, o = v/h the value is Hermite's form
//
//	o^3 [(1+3p+6p^2) g + (1+3p) u g' + u^2/2 g^(2)]_j
//	+ p^3 [(1+3o+6o^2) g - (1+3o) v g' + v^2/2 g^(2)]_(j+1)
//
// and each derivative, which must not be a quotient of differences, Lidstone's,
// from its own values at the knots and those two and four orders higher:
//
//	f = o f_j + p f_(j+1) - u v/6 [(1+o) f^(2)_j + (1+p) f^(2)_(j+1)]
//	    + u v h^2/360 [(1+o)(7-3o^2) f^(4)_j + (1+p)(7-3p^2) f^(4)_(j+1)]
//
// Source: Lidstone (1929), Proc. Edinb. Math. Soc. (2) 2:16.
func (f *Curve) piece3(j int, x float64) (value, slope, second, third float64) {
	x0, x1 := f.Knots[j], f.Knots[j+1]
	h, u, v := x1-x0, x-x0, x1-x
	p, o := u/h, v/h
	hermite := func(i int, u, p, o float64) float64 {
		p3 := float64(3 * p)
		in := float64((1+p3+float64(float64(2*p)*p3))*f.Value[i]) + float64(u*(float64((1+p3)*f.Slope[i])+float64(float64(0.5*u)*f.Curvature[i])))
		return float64(float64(float64(o*o)*o) * in)
	}
	value = hermite(j, u, p, o) + hermite(j+1, -v, o, p)

	uv := float64(u * v)
	w0, w1 := float64(uv*(1+o))/6, float64(uv*(1+p))/6
	o2, p2 := float64(3*float64(o*o)), float64(3*float64(p*p))
	fourth := float64(float64(h*h)*(float64(w0*(7-o2))+float64(w1*(7-p2)))) / 60
	fifth := (f.Fourth[j+1] - f.Fourth[j]) / h
	mix := func(a []float64) float64 { return float64(o*a[j]) + float64(p*a[j+1]) }
	sag := func(a []float64) float64 { return float64(w0*a[j]) + float64(w1*a[j+1]) }
	slope = mix(f.Slope) - sag(f.Third) + float64(fourth*fifth)
	second = mix(f.Curvature) - sag(f.Fourth)
	third = mix(f.Third) - float64(float64(0.5*uv)*fifth)
	return value, slope, second, third
}

// moments3 are the posterior of g, g' and g^(2) at one x: means, and variances
// and covariances over sigma^2.
type moments3 struct {
	Value, Slope, Second           float64
	VarValue, VarSlope, VarSecond  float64
	Cov                            float64 // of g and g'
	CovValueSecond, CovSlopeSecond float64
}

// posterior returns g, g' and g^(2) at any x with their variances, from the
// posterior of g as a twice integrated Wiener process with a diffuse start.
// Source: Wahba (1978), JRSSB 40:364.
func (f *curve3) posterior(x float64) moments3 {
	var out moments3
	out.Value, out.Slope, out.Second, _ = f.at3(x)
	d, m := f.Data, len(f.Knots)
	q := 1 / f.Lambda
	var s, b state3
	switch {
	case x < f.Knots[0]:
		f.backward[0].step(&s, f.Knots[0]-x, d.W[0], d.yc[0], q)
		out.alone(&s, 1/s.lam, -1)
		return out
	case x > f.Knots[m-1]:
		f.forward[m-1].step(&s, x-f.Knots[m-1], d.W[m-1], d.yc[m-1], q)
		out.alone(&s, 1/s.lam, 1)
		return out
	}
	i := interval(f.Knots, x)
	if x == f.Knots[i+1] {
		i++
	}
	var o meeting
	switch {
	case x != f.Knots[i]:
		s = reach(f.forward, i, x-f.Knots[i], d.W[i], d.yc[i], q, known(i))
		b = reach(f.backward, i+1, f.Knots[i+1]-x, d.W[i+1], d.yc[i+1], q, known(m-2-i))
		o.meet(&s, &b, known(i+1), known(m-1-i))
		out.both(&o, 1/o.j, known(i+1), known(m-1-i))
	case i == 0:
		out.alone(&f.backward[0], 1/(d.W[0]+f.info[0]), -1)
	case i == m-1:
		out.alone(&f.forward[i], 1/(d.W[i]+f.info[i]), 1)
	default:
		o.meet(&f.forward[i], &f.backward[i], known(i), known(m-1-i))
		out.both(&o, 1/(d.W[i]+f.info[i]), known(i), known(m-1-i))
	}
	return out
}

// reach goes on by h from knot i, whatever is known there.
func reach(states []state3, i int, h, w, y, q float64, k knows) (s state3) {
	switch k {
	case nothing:
		return second(h, w, y, q)
	case relation:
		return states[i].third(h, w, y, q)
	}
	states[i].step(&s, h, w, y, q)
	return s
}

// alone gives the variances where one filter knows all: v is that of g, sign
// the direction the filter goes in.
func (out *moments3) alone(s *state3, v, sign float64) {
	out.VarValue = v
	out.VarSlope = s.c + float64(float64(s.b1*s.b1)*v)
	out.VarSecond = s.e + float64(float64(s.r*s.r)*s.c) + float64(float64(s.b2*s.b2)*v)
	out.Cov = float64(sign * float64(s.b1*v))
	out.CovValueSecond = float64(s.b2 * v)
	out.CovSlopeSecond = float64(sign * (float64(s.r*s.c) + float64(float64(s.b1*s.b2)*v)))
}

// both gives the variances where two filters meet: v is that of g. Given g,
// the slope has mean ... + by1 g and variance c; given both, g^(2) has mean
// ... + r g' - k g and variance e.
func (out *moments3) both(o *meeting, v float64, kf, kg knows) {
	f, g := o.f, o.g
	es := f.e + g.e
	rs := f.r + g.r
	var shared float64 // f.c g.c / (its share of the cost), finite where one c is not
	switch {
	case kf == all && kg == all:
		shared = float64(f.c * o.k1)
	case kf == relation:
		shared = float64(g.c * o.k2)
	default:
		shared = float64(f.c * o.k1)
	}
	c := float64(es * shared)
	by1 := float64(es*(float64(o.k1*f.b1)-float64(o.k2*g.b1))) + float64(float64(rs*shared)*(f.k-g.k))
	r := (float64(g.e*f.r) - float64(f.e*g.r)) / es
	k := (float64(g.e*f.k) + float64(f.e*g.k)) / es
	e := float64(f.e * (g.e / es))
	by2 := float64(r*by1) - k
	out.VarValue = v
	out.VarSlope = c + float64(float64(by1*by1)*v)
	out.VarSecond = e + float64(float64(r*r)*c) + float64(float64(by2*by2)*v)
	out.Cov = float64(by1 * v)
	out.CovValueSecond = float64(by2 * v)
	out.CovSlopeSecond = float64(r*c) + float64(float64(by1*by2)*v)
}
