package spline

// The penalised curve of order 3: it minimises
//
//	sum_i w_i (y_i - g(x_i))^2 + lambda * integral g'''(t)^2 dt,
//
// is a quintic between knots and a parabola beyond the ends. As lambda grows it
// becomes the weighted parabola. It is the posterior mean of a twice integrated
// Wiener process with a diffuse start, filtered from both ends.
//
// The filter's step over a gap is made of nine elementary maps with positive
// parameters, and the state is held in parameters that stay positive under
// each, so that variances need no subtraction. In the order in which they act,
// with h the gap and noise of variance q = 1/lambda a unit of x,
//
//	g += h/5 g'    g' += h/4 g''    g'' += noise of variance 5/9 q h
//	g += h/5 g'    g' += h/2 g''    g'' += noise of variance 1/3 q h
//	g += 3h/5 g'   g' += h/4 g''    g'' += noise of variance 1/9 q h
//
// give together the transition and the covariance of the process over h: the
// three entries of the one and the six of the other determine the nine. That
// such maps exist is the factorisation of totally positive elements of the
// symplectic group (Lusztig 1994, Total positivity in reductive groups, Progr.
// Math. 123:531); that such parameters keep relative accuracy is known from
// totally nonnegative matrices (Koev 2005, SIAM J. Matrix Anal. Appl. 27:1).

// state3 is what one filter knows before it meets a knot's reading, over
// sigma^2. Derivatives point away from where the filter came from.
//
//	g has precision lam and lam*mean = zeta
//	g' given g has mean a1 + b1 g and variance c
//	g'' given g, g' has mean a2 + r g' - k g and variance e
//	g'' given g has mean a2 + r a1 + b2 g and variance e + r^2 c
//
// b2 = r b1 - k is kept beside the others, for it must not be formed so. All
// but zeta, a1 and a2 are positive.
type state3 struct{ lam, zeta, b1, b2, c, r, k, e, a1, a2 float64 }

// second is the state at distance h from a first knot with weight w and
// response y, before which nothing is known. Nothing is known of g' given g:
// its c is infinite, stands as 0 here and must not be used.
func second(h, w, y, q float64) state3 {
	h2 := float64(h * h)
	return state3{
		r:  2 / h,
		k:  2 / h2,
		e:  float64(4/h2*(1/w))/h2 + float64(float64(q*h)*0.2),
		a2: float64(2*y) / h2,
	}
}

// third takes in a reading y of weight w at the second knot, where s is the
// state, and goes on by h: all is known but g.
func (s state3) third(h, w, y, q float64) state3 {
	t := float64(0.2 * h)
	s.b1, s.b2 = 1/t, s.r/t
	s.c = 1 / float64(float64(w*t)*t)
	s.a1 = -y / t
	s.r += float64(t * s.k)
	qh := float64(q * h)
	s.bend(float64(0.25*h), float64(qh*(5.0/9)))
	s.b1, s.b2, s.c, s.a1, s.r = s.free(float64(0.2 * h))
	s.bend(float64(0.5*h), float64(qh*(1.0/3)))
	s.b1, s.b2, s.c, s.a1, s.r = s.free(float64(0.6 * h))
	s.bend(float64(0.25*h), float64(qh*(1.0/9)))
	return s
}

// free is the map g += t g' where nothing is known of g.
func (s *state3) free(t float64) (b1, b2, c, a1, r float64) {
	u := 1 + float64(t*s.b1)
	return s.b1 / u, s.b2 / u, s.c / float64(u*u), s.a1 / u, s.r + float64(t*s.k)
}

// bend is the map g' += t g^(2), then g^(2) += noise of variance v.
func (s *state3) bend(t, v float64) {
	tr := 1 + float64(t*s.r)
	te := float64(t * s.e)
	tc := float64(tr * s.c)
	c := float64(tr*tc) + float64(t*te)
	j := 1 / c
	s.r = float64((float64(tc*s.r) + te) * j)
	s.k = float64((float64(tc*s.k) + float64(te*s.b1)) * j)
	s.b1 += float64(t * s.b2)
	s.a1, s.a2 = float64(tr*s.a1)+float64(t*s.a2), float64((float64(tc*s.a2)-float64(te*s.a1))*j)
	s.e = float64(float64(s.c*j)*s.e) + v
	s.c = c
}

// step takes in a reading y of weight w and goes on by h. den is the factor of
// the determinant that the step contributes.
func (s *state3) step(next *state3, h, w, y, q float64) (den float64) {
	d := s.lam + w
	z := s.zeta + float64(w*y)
	b1, b2, c, r, k, e, a1, a2 := s.b1, s.b2, s.c, s.r, s.k, s.e, s.a1, s.a2
	qh := float64(q * h)
	t, o, v := float64(0.2*h), float64(0.25*h), float64(qh*(5.0/9))
	den = 1
	for round := 0; ; round++ {
		// g += t g'
		u := 1 + float64(t*b1)
		dt := float64(d * t)
		dc := float64(dt * c)
		den1 := float64(u*u) + float64(t*dc)
		i := 1 / den1
		den = float64(den * den1)
		b1 = float64((float64(u*b1) + dc) * i)
		b2 = float64((float64(u*b2) + float64(dc*r)) * i)
		z, a1 = float64((float64(u*z)+float64(dt*a1))*i), float64((float64(u*a1)-float64(float64(t*c)*z))*i)
		d = float64(d * i)
		c = float64(c * i)
		r += float64(t * k)
		// g' += o g'', then g'' += noise
		tr := 1 + float64(o*r)
		te := float64(o * e)
		tc := float64(tr * c)
		nc := float64(tr*tc) + float64(o*te)
		j := 1 / nc
		r = float64((float64(tc*r) + te) * j)
		k = float64((float64(tc*k) + float64(te*b1)) * j)
		b1 += float64(o * b2)
		a1, a2 = float64(tr*a1)+float64(o*a2), float64((float64(tc*a2)-float64(te*a1))*j)
		e = float64(float64(c*j)*e) + v
		c = nc
		if round == 0 {
			o, v = float64(0.5*h), float64(qh*third)
			continue
		}
		if round == 2 {
			break
		}
		t, o, v = float64(0.6*h), float64(0.25*h), float64(qh*(1.0/9))
	}
	next.lam, next.zeta = d, z
	next.b1, next.b2, next.c, next.r, next.k, next.e, next.a1, next.a2 = b1, b2, c, r, k, e, a1, a2
	return den
}

// memory3 is the memory of fits of order 3. The zero value is ready; it must
// not be shared between goroutines.
type memory3 struct{ forward, backward []state3 }

func (ws *memory3) filter(d *Data, q float64, wantDet bool) (det logProduct) {
	m := len(d.X)
	if cap(ws.forward) < m {
		ws.forward, ws.backward = make([]state3, m+m/4), make([]state3, m+m/4)
	}
	fw, bw := ws.forward[:m], ws.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	fw[0], bw[m-1] = state3{}, state3{}
	fw[1] = second(x[1]-x[0], w[0], y[0], q)
	bw[m-2] = second(x[m-1]-x[m-2], w[m-1], y[m-1], q)
	fw[2] = fw[1].third(x[2]-x[1], w[1], y[1], q)
	bw[m-3] = bw[m-2].third(x[m-2]-x[m-3], w[m-2], y[m-2], q)
	p := 1.0
	for i := 2; i < m-1; i++ {
		den := fw[i].step(&fw[i+1], x[i+1]-x[i], w[i], y[i], q)
		k := m - 1 - i
		bw[k].step(&bw[k-1], x[k]-x[k-1], w[k], y[k], q)
		if wantDet {
			if !(den < 1e100) {
				det.times(den)
			} else if p = float64(p * den); p > 1e100 {
				det.times(p)
				p = 1
			}
		}
	}
	if wantDet {
		det.times(p)
		det.times(fw[m-1].lam + w[m-1])
	}
	return det
}

// meeting is what both filters know together at one x, the reading there left
// out: g has precision j and j*mean = n. With
//
//	e0 = f.a1 + g.a1 + t0 g,  e1, e2 likewise,
//
// how far the two are apart in g' and, on either side's g', in g^(2), the cost of
// disagreeing is k0 e0^2 + k1 e1^2 + k2 e2^2.
type meeting struct {
	f, g       *state3
	j, n       float64
	k0, k1, k2 float64
	t0, t1, t2 float64
	s0, s1, s2 float64
}

// knows says how much of a filter's state stands.
type knows int

const (
	nothing  knows = iota // before or at its first knot
	relation              // one relation of g' and g'': c is infinite
	all
)

// known is what the forward filter knows after meeting n knots.
func known(n int) knows { return knows(min(n, 2)) }

// meet joins a forward state with a backward one.
func (o *meeting) meet(f, g *state3, kf, kg knows) {
	o.f, o.g = f, g
	es := f.e + g.e
	rs := f.r + g.r
	o.k0, o.k1, o.k2 = 0, 0, 0
	switch {
	case kf == all && kg == all:
		inv := 1 / (float64(es*(f.c+g.c)) + float64(float64(rs*rs)*float64(f.c*g.c)))
		o.k0, o.k1, o.k2 = float64(es*inv), float64(g.c*inv), float64(f.c*inv)
	case kf == relation && kg == all:
		o.k2 = 1 / (es + float64(float64(rs*rs)*g.c))
	case kf == all && kg == relation:
		o.k1 = 1 / (es + float64(float64(rs*rs)*f.c))
	case kf == nothing && kg == nothing || kf == relation && kg != nothing || kf != nothing && kg == relation:
		panic("spline: too few knots meet")
	}
	o.t0 = f.b1 + g.b1
	o.t1 = f.b2 + float64(g.r*f.b1) + g.k
	o.t2 = g.b2 + float64(f.r*g.b1) + f.k
	apart := f.a2 - g.a2
	o.s0 = f.a1 + g.a1
	o.s1 = float64(rs*f.a1) + apart
	o.s2 = float64(rs*g.a1) - apart
	p0, p1, p2 := float64(o.k0*o.t0), float64(o.k1*o.t1), float64(o.k2*o.t2)
	o.j = f.lam + g.lam + (float64(p0*o.t0) + float64(p1*o.t1) + float64(p2*o.t2))
	o.n = f.zeta + g.zeta - (float64(p0*o.s0) + float64(p1*o.s1) + float64(p2*o.s2))
}

// pulls returns k0 e0, k1 e1 and k2 e2 at the value g.
func (o *meeting) pulls(g float64) (p0, p1, p2 float64) {
	return float64(o.k0 * (o.s0 + float64(o.t0*g))), float64(o.k1 * (o.s1 + float64(o.t1*g))), float64(o.k2 * (o.s2 + float64(o.t2*g)))
}

// higher returns g^(3) and g^(4) at the value g: they are q times the pull on
// g^(2) and on -g'.
func (o *meeting) higher(g, q float64) (third, fourth float64) {
	p0, p1, p2 := o.pulls(g)
	return float64((p2 - p1) * q), float64((p0 + float64(o.g.r*p1) + float64(o.f.r*p2)) * q)
}

// evaluate3 returns the criteria of order 3 at lambda (> 0, or +Inf for the
// weighted parabola). d needs 4 distinct x and must serve this order alone, for
// it keeps the constant of REML. Roughness is the integral of g^(3) squared; it
// and REML are filled where reml is set.
func evaluate3(ws *memory3, d *Data, lambda float64, reml bool) Criteria {
	m := len(d.X)
	if m < 4 {
		panic("spline: fewer than 4 distinct x")
	}
	q := 1 / lambda
	det := ws.filter(d, q, reml)
	fw, bw := ws.forward[:m], ws.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	out := Criteria{Lambda: lambda, N: d.N}
	var sum sums
	var o meeting
	var g3, g4 float64 // g''' and g'''' at the knot to the left
	for lo := 0; lo < m; lo += block {
		hi := min(lo+block, m)
		var part sums
		for i := lo; i < hi; i++ {
			o.meet(&fw[i], &bw[i], known(i), known(m-1-i))
			r := part.knot(d, i, y[i], w[i], o.j, o.n)
			if reml {
				to3, to4 := o.higher(y[i]-r, q)
				if i > 0 {
					h := x[i] - x[i-1]
					bend := float64((to4-g4)*h) / 12
					mean := float64(0.5*(g3+to3)) - bend
					diff := float64(0.5 * (to3 - g3))
					part.rough += float64(h * (float64(mean*mean) + float64(diff*diff)/3 + float64(bend*bend)/5))
				}
				g3, g4 = to3, to4
			}
		}
		sum.add(&part)
	}
	sum.into(&out, d)
	if reml {
		if !d.haveREML {
			d.haveREML = true
			d.reml = constant3(d)
		}
		restrict(d, &out, &det, 3)
	}
	return out
}

// constant3 is the part of log det(A'VA) that lambda does not enter. The first
// three readings only place the curve, so det V det(X'V^-1 X) for X = [1 x x^2]
// is the squared Vandermonde determinant of their x times the product of the
// other readings' predictive variances, D/(lam w), which the filter's product
// gives but for the weights. det(X'X) is the same with a weight of 1 for every
// row and no noise; the Vandermonde determinant leaves the quotient.
func constant3(d *Data) float64 {
	m := len(d.X)
	var weights, line logProduct
	for _, w := range d.RowW {
		weights.times(w)
	}
	rows := func(j int) float64 { return float64(d.First[j+1] - d.First[j]) }
	x := d.X
	s := second(x[1]-x[0], rows(0), 0, 0)
	s = s.third(x[2]-x[1], rows(1), 0, 0)
	for i := 2; i < m-1; i++ {
		line.times(s.step(&s, x[i+1]-x[i], rows(i), 0, 0))
	}
	line.times(s.lam + rows(m-1))
	line.times(rows(0))
	line.times(rows(1))
	var first logProduct
	first.times(d.W[0])
	first.times(d.W[1])
	return first.log() - weights.log() - line.log()
}
