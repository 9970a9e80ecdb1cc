// Package spline fits the natural cubic smoothing spline to one group: the
// curve g that minimises
//
//	sum_i w_i (y_i - g(x_i))^2 + lambda * integral g''(t)^2 dt
//
// over the original x, with a knot at every distinct x, straight beyond the
// ends.
//
// Steps: Collapse sorts rows and collapses ties; Workspace.Criteria gives edf,
// RSS and the scores at one lambda; Workspace.Fit gives the curve, its
// leverages and what bands need; Fit.Posterior and Fit.Area read it off. It
// chooses no lambda, reads no files and knows no groups.
//
// The engine is the two-filter form of the state-space smoother: g is an
// integrated Wiener process with a diffuse start, filtered from both ends in a
// form without subtractions, so that edf, n - edf, leverages and leave-one-out
// residuals keep machine accuracy from interpolation to the straight line.
// Sources: Wahba (1978), JRSSB 40:364; Wecker and Ansley (1983), JASA 78:81;
// Ansley and Kohn (1985), Ann. Stat. 13:1286; Fraser and Potter (1969), IEEE
// Trans. Automat. Contr. 14:387.
//
// Every product that feeds a sum is written float64(a*b), so that no compiler
// fuses it: the same bits on every processor.
package spline

import (
	"math"

	"batten/methods/elementary"
)

// Version is raised when a fit's bytes change; caches depend on it.
const Version = 1

// state is what one filter knows before it meets a knot's reading, over
// sigma^2: g has precision lam and lam*mean = zeta; the slope given g has mean
// alpha + b g and variance c. The slope points away from where the filter came
// from.
type state struct{ lam, zeta, b, alpha, c float64 }

// start is the state at distance h from a first knot with weight w and
// response y, before which nothing is known.
func start(h, w, y, q float64) state {
	return state{b: 1 / h, alpha: -y / h, c: 1/float64(float64(w*h)*h) + float64(float64(q*h)*third)}
}

// step takes in a reading y of weight w and goes on by h. den is the factor of
// the determinant that the step contributes.
func (s state) step(h, w, y, q float64) (next state, den float64) {
	d := s.lam + w
	z := s.zeta + float64(w*y)
	u := float64(h * s.b)
	u1 := 1 + u
	qh := float64(q * h)
	dh := float64(d * h)
	den = float64(u1*u1) + float64(float64(dh*h)*(s.c+float64(qh*third)))
	r := 1 / den
	next.lam = float64(d * r)
	next.b = float64((float64(s.b*u1) + float64(dh*(s.c+float64(qh*0.5)))) * r)
	qd := float64(float64(float64(qh*h)*h) * d)
	next.c = float64((s.c + float64(qh*(u1+float64(float64(u*u)*third))) + float64(qd*(float64(s.c*third)+float64(qh*twelfth)))) * r)
	next.zeta = float64((float64(u1*z) + float64(dh*s.alpha)) * r)
	next.alpha = float64((float64((u1-float64(qd*sixth))*s.alpha) - float64((float64(h*s.c)+float64(float64(qh*h)*(0.5+float64(u*sixth))))*z)) * r)
	return next, den
}

const (
	third   = 1.0 / 3
	sixth   = 1.0 / 6
	twelfth = 1.0 / 12
)

// Workspace is the memory of fits. The zero value is ready; it grows as it is
// used and must not be shared between goroutines.
type Workspace struct {
	forward, backward []state
	lanes             lanes   // of Scores4 and Criteria4
	one               memory1 // order 1
	three             memory3 // order 3
}

// Criteria is what one lambda gives: the scores a rule may minimise.
type Criteria struct {
	Lambda float64
	N      int
	EDF    float64 // tr S(lambda)
	NEDF   float64 // n - edf, summed apart: exact where edf nears n
	RSS    float64 // sum w r^2 over all rows, the spread within ties included
	LOOCV  float64 // (1/n) sum w (r/(1-S_ii))^2, one row left out

	// Roughness is the integral of g''^2. REML is -2 log of the restricted
	// likelihood, sigma profiled out, constants included; DREML is its
	// derivative by log lambda. Only Criteria and Fit fill them.
	Roughness, REML, DREML float64
}

// GCV returns the generalised cross-validation score
//
//	GCV(lambda) = n RSS / (n - c edf)^2
//
// with c = inflate (1 for plain GCV). It is +Inf where c edf reaches n.
// Source: Craven and Wahba (1979), Numer. Math. 31:377; c by Kim and Gu
// (2004), JRSSB 66:337.
func (c *Criteria) GCV(inflate float64) float64 {
	left := c.NEDF
	if inflate != 1 {
		left -= float64((inflate - 1) * c.EDF)
	}
	if left <= 0 {
		return math.Inf(1)
	}
	return float64(float64(c.N)*c.RSS) / float64(left*left)
}

// Sigma returns the residual standard deviation, sqrt(RSS / (n - edf)), of a
// reading of weight 1.
func (c *Criteria) Sigma() float64 { return math.Sqrt(c.RSS / c.NEDF) }

// block is the length of partial sums: rounding of edf stays near 1e-13 at a
// million points.
const block = 128

// Scores returns EDF, NEDF, RSS and LOOCV at lambda (> 0 or +Inf): the fast
// path of a search. It allocates nothing once the workspace has grown.
func (ws *Workspace) Scores(d *Data, lambda float64) Criteria {
	return ws.evaluate(d, lambda, false)
}

// Criteria returns all criteria at lambda, REML included.
func (ws *Workspace) Criteria(d *Data, lambda float64) Criteria {
	return ws.evaluate(d, lambda, true)
}

// filter runs both filters over the knots into ws.forward and ws.backward,
// in one loop: neither waits for the other, so the processor works on both.
// It returns the product of the forward determinant's factors where it is
// wanted. The body is state.step written out on plain variables, which the
// compiler keeps in registers.
func (ws *Workspace) filter(d *Data, q float64, wantDet bool) (det logProduct) {
	m := len(d.X)
	if cap(ws.forward) < m || cap(ws.backward) < m {
		room := m + min(m/4, 4096)
		ws.forward, ws.backward = make([]state, room), make([]state, room)
	}
	fw, bw := ws.forward[:m], ws.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	fw[0], bw[m-1] = state{}, state{}
	f := start(x[1]-x[0], w[0], y[0], q)
	g := start(x[m-1]-x[m-2], w[m-1], y[m-1], q)
	fw[1], bw[m-2] = f, g
	fl, fz, fb, fa, fc := f.lam, f.zeta, f.b, f.alpha, f.c
	gl, gz, gb, ga, gc := g.lam, g.zeta, g.b, g.alpha, g.c
	xf, xg := x[1], x[m-2]
	p := 1.0
	for i := 1; i < m-1; i++ {
		// forward over the gap behind knot i
		to := x[i+1]
		h := to - xf
		xf = to
		dd := fl + w[i]
		z := fz + float64(w[i]*y[i])
		u := float64(h * fb)
		u1 := 1 + u
		qh := float64(q * h)
		dh := float64(dd * h)
		den := float64(u1*u1) + float64(float64(dh*h)*(fc+float64(qh*third)))
		r := 1 / den
		qd := float64(float64(float64(qh*h)*h) * dd)
		nb := float64((float64(fb*u1) + float64(dh*(fc+float64(qh*0.5)))) * r)
		nc := float64((fc + float64(qh*(u1+float64(float64(u*u)*third))) + float64(qd*(float64(fc*third)+float64(qh*twelfth)))) * r)
		nz := float64((float64(u1*z) + float64(dh*fa)) * r)
		na := float64((float64((u1-float64(qd*sixth))*fa) - float64((float64(h*fc)+float64(float64(qh*h)*(0.5+float64(u*sixth))))*z)) * r)
		fl, fz, fb, fa, fc = float64(dd*r), nz, nb, na, nc
		s := &fw[i+1]
		s.lam, s.zeta, s.b, s.alpha, s.c = fl, fz, fb, fa, fc
		if wantDet {
			if den < 1e100 {
				if p = float64(p * den); p > 1e100 {
					det.times(p)
					p = 1
				}
			} else {
				det.times(den)
			}
		}

		// backward over the gap before knot k
		k := m - 1 - i
		to = x[k-1]
		h = xg - to
		xg = to
		dd = gl + w[k]
		z = gz + float64(w[k]*y[k])
		u = float64(h * gb)
		u1 = 1 + u
		qh = float64(q * h)
		dh = float64(dd * h)
		r = 1 / (float64(u1*u1) + float64(float64(dh*h)*(gc+float64(qh*third))))
		qd = float64(float64(float64(qh*h)*h) * dd)
		nb = float64((float64(gb*u1) + float64(dh*(gc+float64(qh*0.5)))) * r)
		nc = float64((gc + float64(qh*(u1+float64(float64(u*u)*third))) + float64(qd*(float64(gc*third)+float64(qh*twelfth)))) * r)
		nz = float64((float64(u1*z) + float64(dh*ga)) * r)
		na = float64((float64((u1-float64(qd*sixth))*ga) - float64((float64(h*gc)+float64(float64(qh*h)*(0.5+float64(u*sixth))))*z)) * r)
		gl, gz, gb, ga, gc = float64(dd*r), nz, nb, na, nc
		s = &bw[k-1]
		s.lam, s.zeta, s.b, s.alpha, s.c = gl, gz, gb, ga, gc
	}
	if wantDet {
		det.times(p)
		det.times(fl + w[m-1])
	}
	return det
}

// evaluate runs the filters and combines them at every knot.
func (ws *Workspace) evaluate(d *Data, lambda float64, reml bool) Criteria {
	switch d.Null() {
	case 1:
		return evaluate1(&ws.one, d, lambda, reml)
	case 3:
		return evaluate3(&ws.three, d, lambda, reml)
	}
	m := len(d.X)
	if m < MinDistinct(2) {
		panic("spline: fewer than 3 distinct x")
	}
	q := 1 / lambda
	det := ws.filter(d, q, reml)
	fw, bw := ws.forward[:m], ws.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	out := Criteria{Lambda: lambda, N: d.N}
	var sum sums
	var gammaLast float64 // g'' at the knot to the left
	for lo := 0; lo < m; lo += block {
		hi := min(lo+block, m)
		var edf, restSum, rss, loo, rough float64
		for i := lo; i < hi; i++ {
			f, g := &fw[i], &bw[i]
			b := f.b + g.b
			a := f.alpha + g.alpha
			kap := 0.0
			if i > 0 && i < m-1 {
				kap = 1 / (f.c + g.c)
			}
			kb := float64(kap * b)
			j := f.lam + g.lam + float64(kb*b)
			n := f.zeta + g.zeta - float64(kb*a)
			wi := w[i]
			tot := wi + j
			inv := 1 / tot
			e := y[i] - n/j // leave-one-out residual of the knot's mean
			rest := float64(j * inv)
			edf += float64(wi * inv)
			restSum += rest
			r := float64(rest * e)
			rss += float64(float64(wi*r) * r)
			if !d.tied {
				loo += float64(float64(wi*e) * e)
			} else {
				for k := d.First[i]; k < d.First[i+1]; k++ {
					wk := d.RowW[k]
					ek := float64((d.RowY[k]-d.Y[i]+r)*tot) / (wi - wk + j)
					loo += float64(float64(wk*ek) * ek)
				}
			}
			if reml {
				gamma := -float64(float64(kap*(a+float64(b*(y[i]-r)))) * q)
				if i > 0 {
					h := x[i] - x[i-1]
					rough += float64(float64(h*third) * (float64(gamma*gamma) + float64(gamma*gammaLast) + float64(gammaLast*gammaLast)))
				}
				gammaLast = gamma
			}
		}
		sum.edf += edf
		sum.rest += restSum
		sum.rss += rss
		sum.loo += loo
		sum.rough += rough
	}
	out.EDF = sum.edf
	out.NEDF = sum.rest + float64(d.N-m)
	out.RSS = sum.rss + d.PureError
	out.LOOCV = sum.loo / float64(d.N)
	out.Roughness = sum.rough
	if reml {
		ws.restricted(d, &out, &det)
	}
	return out
}

// combine joins what both filters know at a knot, its own reading left out: g
// has precision j and j*mean = n; kap, a and b give g” = -kap (a + b g) q.
func combine(f, back *state, end bool) (j, n, kap, a, b float64) {
	b = f.b + back.b
	a = f.alpha + back.alpha
	if !end {
		kap = 1 / (f.c + back.c)
	}
	kb := float64(kap * b)
	j = f.lam + back.lam + float64(kb*b)
	n = f.zeta + back.zeta - float64(kb*a)
	return j, n, kap, a, b
}

// sums are what criteria are made of.
type sums struct{ edf, rest, rss, loo, rough float64 }

// logProduct is the logarithm of a long product: one Log at the end.
type logProduct struct {
	p   float64
	exp int
}

func (l *logProduct) times(v float64) {
	if l.p == 0 {
		l.p = 1
	}
	if v > 1e100 || v < 1e-100 {
		f, e := math.Frexp(v)
		v = f
		l.exp += e
	}
	l.p *= v
	if l.p > 1e150 || l.p < 1e-150 {
		f, e := math.Frexp(l.p)
		l.p = f
		l.exp += e
	}
}

func (l *logProduct) log() float64 {
	const ln2 = 0.693147180559945309417232121458
	if l.p == 0 {
		return 0
	}
	return elementary.Log(l.p) + float64(float64(l.exp)*ln2)
}

// restricted fills REML and DREML:
//
//	-2 log L_R = (n-2)(1 + log(2 pi D/(n-2))) + log det(A'VA)
//	D = RSS + lambda * roughness,  V = diag(1/w) + |x_i - x_j|^3 / (12 lambda)
//
// with A an orthonormal basis of what is orthogonal to the straight lines.
// Source: Wahba (1985), Ann. Stat. 13:1378; Patterson and Thompson (1971),
// Biometrika 58:545.
func (ws *Workspace) restricted(d *Data, c *Criteria, det *logProduct) {
	if !d.haveREML {
		d.haveREML = true
		d.reml = ws.constant(d)
	}
	nu := float64(d.N - 2)
	pen := 0.0
	if !math.IsInf(c.Lambda, 1) {
		pen = float64(c.Lambda * c.Roughness)
	}
	dev := c.RSS + pen
	c.REML = float64(nu*(1+elementary.Log(float64(2*math.Pi*dev)/nu))) + det.log() + d.reml
	if dev > 0 {
		c.DREML = float64(nu*pen)/dev - (c.EDF - 2)
	}
}

// constant is the part of log det(A'VA) that lambda does not enter, from its
// value at the straight line: det(A' W^-1 A) = det(X'WX) / (det(X'X) prod w).
func (ws *Workspace) constant(d *Data) float64 {
	m := len(d.X)
	var weights logProduct
	for _, w := range d.RowW {
		weights.times(w)
	}
	var line logProduct // the filter's determinant at lambda = +Inf
	s := start(d.X[1]-d.X[0], d.W[0], 0, 0)
	for i := 1; i < m-1; i++ {
		var den float64
		s, den = s.step(d.X[i+1]-d.X[i], d.W[i], 0, 0)
		line.times(den)
	}
	line.times(s.lam + d.W[m-1])
	return moments(d.RowX, d.RowW) - moments(d.RowX, nil) - weights.log() - line.log()
}

// moments is log det(X'WX) for X = [1 x]: log(sum w) + log(sum w (x - mean)^2).
func moments(x, w []float64) float64 {
	weight := func(i int) float64 {
		if w == nil {
			return 1
		}
		return w[i]
	}
	sw, sx := 0.0, 0.0
	for i, v := range x {
		sw += weight(i)
		sx += float64(weight(i) * (v - x[0]))
	}
	mean := sx / sw
	ss := 0.0
	for i, v := range x {
		u := v - x[0] - mean
		ss += float64(float64(weight(i)*u) * u)
	}
	return elementary.Log(sw) + elementary.Log(ss)
}
