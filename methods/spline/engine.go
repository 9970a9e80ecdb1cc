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
	return state{b: 1 / h, alpha: -y / h, c: 1/float64(float64(w*h)*h) + float64(q*h)/3}
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
	den = float64(u1*u1) + float64(float64(dh*h)*(s.c+qh/3))
	r := 1 / den
	next.lam = float64(d * r)
	next.b = float64((float64(s.b*u1) + float64(dh*(s.c+0.5*qh))) * r)
	qd := float64(float64(float64(qh*h)*h) * d)
	next.c = float64((s.c + float64(qh*(u1+float64(u*u)/3)) + float64(qd*(s.c/3+qh/12))) * r)
	next.zeta = float64((float64(u1*z) + float64(dh*s.alpha)) * r)
	next.alpha = float64((float64((u1-qd/6)*s.alpha) - float64((float64(h*s.c)+float64(float64(qh*h)*(0.5+u/6)))*z)) * r)
	return next, den
}

// Workspace is the memory of fits. The zero value is ready; it grows as it is
// used and must not be shared between goroutines.
type Workspace struct {
	forward []state
	fit     Fit
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

// evaluate runs the forward filter, then the backward one, combining the two
// at every knot as it goes.
func (ws *Workspace) evaluate(d *Data, lambda float64, reml bool) Criteria {
	m := len(d.X)
	if m < MinDistinct {
		panic("spline: fewer than 3 distinct x")
	}
	if cap(ws.forward) < m {
		ws.forward = make([]state, m+m/4)
	}
	fw := ws.forward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	q := 1 / lambda
	var det logProduct
	s := start(x[1]-x[0], w[0], y[0], q)
	for i := 1; ; i++ {
		fw[i] = s
		if i == m-1 {
			break
		}
		var den float64
		s, den = s.step(x[i+1]-x[i], w[i], y[i], q)
		if reml {
			det.times(den)
		}
	}
	fw[0] = state{}

	out := Criteria{Lambda: lambda, N: d.N}
	var sum, part sums
	back := state{}
	var gammaNext float64 // g'' at the knot to the right
	for i := m - 1; i >= 0; i-- {
		f := &fw[i]
		j, n, kap, a, b := combine(f, &back, i == 0 || i == m-1)
		tot := w[i] + j
		inv := 1 / tot
		e := y[i] - n/j // leave-one-out residual of the knot's mean
		rest := float64(j * inv)
		part.edf += float64(w[i] * inv)
		part.rest += rest
		r := float64(rest * e)
		part.rss += float64(float64(w[i]*r) * r)
		if !d.tied {
			part.loo += float64(float64(w[i]*e) * e)
		} else {
			lo, hi := d.First[i], d.First[i+1]
			for k := lo; k < hi; k++ {
				wk := d.RowW[k]
				ek := float64((d.RowY[k]-d.Y[i]+r)*tot) / (w[i] - wk + j)
				part.loo += float64(float64(wk*ek) * ek)
			}
		}
		if reml {
			gamma := -float64(float64(kap*(a+float64(b*(y[i]-r)))) * q)
			if i < m-1 {
				h := x[i+1] - x[i]
				part.rough += float64(h / 3 * (float64(gamma*gamma) + float64(gamma*gammaNext) + float64(gammaNext*gammaNext)))
			}
			gammaNext = gamma
		}
		if i&(block-1) == 0 {
			sum.add(&part)
			part = sums{}
		}
		switch {
		case i == m-1:
			back = start(x[i]-x[i-1], w[i], y[i], q)
		case i > 0:
			back, _ = back.step(x[i]-x[i-1], w[i], y[i], q)
		}
	}
	out.EDF = sum.edf
	out.NEDF = sum.rest + float64(d.N-m)
	out.RSS = sum.rss + d.PureError
	out.LOOCV = sum.loo / float64(d.N)
	out.Roughness = sum.rough
	if reml {
		det.times(fw[m-1].lam + w[m-1])
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

// sums are the partial sums of one block.
type sums struct{ edf, rest, rss, loo, rough float64 }

func (s *sums) add(p *sums) {
	s.edf += p.edf
	s.rest += p.rest
	s.rss += p.rss
	s.loo += p.loo
	s.rough += p.rough
}

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
