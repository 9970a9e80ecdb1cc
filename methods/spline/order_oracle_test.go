package spline

import (
	"math"
	"math/big"
)

// saddle is the penalised curve of order m by another road, in 512 bits: the
// posterior of a Gaussian process with covariance K/lambda and a diffuse
// polynomial, row by row, by a dense saddle system.
//
//	[K/lambda + diag(1/w)  X] [a]   [y]
//	[X'                    0] [b] = [0],   K(s,t) = (-1)^m |s-t|^(2m-1) / (2 (2m-1)!)
//
// Source: Wahba (1990), Spline Models for Observational Data, chapter 1.
type saddle struct {
	m       int
	x, y, w []float64
	lam     *big.Float
	inv     [][]*big.Float
	sol     []*big.Float // a, b
	logdet  float64      // log det(A'VA)
}

func zeros(n int) []*big.Float {
	out := make([]*big.Float, n)
	for i := range out {
		out[i] = bf(0)
	}
	return out
}

// kernelBig is the derivative of K by s, k times.
func kernelBig(m, k int, s, t *big.Float) *big.Float {
	d := sub2(s, t)
	out := bf(1)
	p := 2*m - 1
	fact := int64(2)
	for i := 2; i <= p; i++ {
		fact *= int64(i)
	}
	sign := d.Sign()
	d.Abs(d)
	for i := 0; i < k; i++ {
		out = mul2(out, bf(float64(p-i)))
	}
	for i := 0; i < p-k; i++ {
		out = mul2(out, d)
	}
	if k%2 == 1 && sign < 0 {
		out.Neg(out)
	}
	if m%2 == 1 {
		out.Neg(out)
	}
	return quo2(out, bf(float64(fact)))
}

// power is the k-th derivative of s^e.
func power(e, k int, s *big.Float) *big.Float {
	if k > e {
		return bf(0)
	}
	out := bf(1)
	for i := 0; i < k; i++ {
		out = mul2(out, bf(float64(e-i)))
	}
	for i := 0; i < e-k; i++ {
		out = mul2(out, s)
	}
	return out
}

// gaussJordan inverts a in place, pivoting by rows, and returns log |det a|.
func gaussJordan(a [][]*big.Float) ([][]*big.Float, float64) {
	n := len(a)
	inv := make([][]*big.Float, n)
	for i := range inv {
		inv[i] = zeros(n)
		inv[i][i] = bf(1)
	}
	logdet := 0.0
	tmp := bf(0)
	for c := range n {
		best := c
		for r := c; r < n; r++ {
			if new(big.Float).Abs(a[r][c]).Cmp(new(big.Float).Abs(a[best][c])) > 0 {
				best = r
			}
		}
		a[c], a[best] = a[best], a[c]
		inv[c], inv[best] = inv[best], inv[c]
		logdet += logBig(new(big.Float).Abs(a[c][c]))
		p := quo2(bf(1), a[c][c])
		for k := range n {
			a[c][k].Mul(a[c][k], p)
			inv[c][k].Mul(inv[c][k], p)
		}
		for r := range n {
			if r == c || a[r][c].Sign() == 0 {
				continue
			}
			f := bf(0).Set(a[r][c])
			for k := range n {
				if k >= c {
					a[r][k].Sub(a[r][k], tmp.Mul(f, a[c][k]))
				}
				if inv[c][k].Sign() != 0 {
					inv[r][k].Sub(inv[r][k], tmp.Mul(f, inv[c][k]))
				}
			}
		}
	}
	return inv, logdet
}

func logBig(v *big.Float) float64 {
	m := new(big.Float)
	e := v.MantExp(m)
	return math.Log(f64(m)) + float64(e)*math.Ln2
}

// newSaddle places x at its first value, which is exact in 512 bits.
func newSaddle(m int, x, y, w []float64, lambda float64) *saddle {
	n := len(x)
	s := &saddle{m: m, x: x, y: y, w: w, lam: bf(lambda)}
	a := make([][]*big.Float, n+m)
	for i := range a {
		a[i] = zeros(n + m)
	}
	for i := range n {
		for j := range n {
			a[i][j] = quo2(kernelBig(m, 0, s.place(x[i]), s.place(x[j])), s.lam)
		}
		a[i][i] = add2(a[i][i], quo2(bf(1), bf(w[i])))
		for e := range m {
			v := power(e, 0, s.place(x[i]))
			a[i][n+e], a[n+e][i] = v, bf(0).Set(v)
		}
	}
	xx := make([][]*big.Float, m)
	for e := range m {
		xx[e] = zeros(m)
		for g := range m {
			for i := range n {
				xx[e][g] = add2(xx[e][g], mul2(a[i][n+e], a[i][n+g]))
			}
		}
	}
	inv, logdet := gaussJordan(a)
	_, logxx := gaussJordan(xx)
	s.inv, s.logdet = inv, logdet-logxx
	s.sol = zeros(n + m)
	for i := range s.sol {
		for j := range n {
			s.sol[i] = add2(s.sol[i], mul2(inv[i][j], bf(y[j])))
		}
	}
	return s
}

func (s *saddle) place(x float64) *big.Float { return sub2(bf(x), bf(s.x[0])) }

// functional is the row of covariances of the k-th derivative at x with the
// data and the polynomial.
func (s *saddle) functional(x float64, k int) []*big.Float {
	out := zeros(len(s.sol))
	n := len(s.x)
	for j := range s.x {
		out[j] = quo2(kernelBig(s.m, k, s.place(x), s.place(s.x[j])), s.lam)
	}
	for e := range s.m {
		out[n+e] = power(e, k, s.place(x))
	}
	return out
}

func dotBig(a, b []*big.Float) *big.Float {
	sum := bf(0)
	for i := range a {
		sum = add2(sum, mul2(a[i], b[i]))
	}
	return sum
}

// mean is the k-th derivative of the curve at x.
func (s *saddle) mean(x float64, k int) float64 { return f64(dotBig(s.functional(x, k), s.sol)) }

// cov is the posterior covariance of the k-th and the l-th derivative at x,
// over sigma^2. The kernel's own part vanishes for derivatives below order m.
func (s *saddle) cov(x float64, k, l int) float64 {
	a, b := s.functional(x, k), s.functional(x, l)
	sum := bf(0)
	for i := range a {
		sum = add2(sum, mul2(a[i], dotBig(s.inv[i], b)))
	}
	return -f64(sum)
}

// truthM is what the saddle says of the whole fit.
type truthM struct {
	gap, lev        []float64 // y - g and S_ii by row
	edf, rest       float64
	rss, loo, rough float64
	reml            float64
	lambdaTimesPen  float64   // lambda * roughness
	bend            []float64 // band, order 2: g” at the inner knots
}

func (s *saddle) truth() truthM {
	n := len(s.x)
	t := truthM{gap: make([]float64, n), lev: make([]float64, n)}
	edf, rest, rss, loo, pen := bf(0), bf(0), bf(0), bf(0), bf(0)
	for i := range s.x {
		w := bf(s.w[i])
		r := quo2(s.sol[i], w)
		out := quo2(s.inv[i][i], w) // 1 - S_ii
		in := sub2(bf(1), out)
		t.gap[i], t.lev[i] = f64(r), f64(in)
		edf, rest = add2(edf, in), add2(rest, out)
		rss = add2(rss, mul2(w, mul2(r, r)))
		e := quo2(r, out)
		loo = add2(loo, mul2(w, mul2(e, e)))
		pen = add2(pen, mul2(s.sol[i], bf(s.y[i]))) // RSS + lambda * roughness
	}
	dev := pen
	pen = sub2(pen, rss)
	t.edf, t.rest, t.rss, t.loo = f64(edf), f64(rest), f64(rss), f64(quo2(loo, bf(float64(n))))
	t.rough = f64(quo2(pen, s.lam))
	t.lambdaTimesPen = f64(pen)
	nu := float64(n - s.m)
	t.reml = nu*(1+math.Log(2*math.Pi/nu)+logBig(dev)) + s.logdet
	return t
}

// band is the penalised curve of order m on distinct x by the banded form, in
// 512 bits: g^(m) is a sum of B-splines M_j of degree m-1 with coefficients
// gamma, (R + lambda Q'W^-1 Q) gamma = Q'y, with Q'g the divided differences
// and R the B-splines' Gram matrix. Source: Reinsch (1967, 1971), Numer. Math.
// 10:177 and 16:451; leverages by Hutchinson and de Hoog (1985), Numer. Math.
// 47:99.
func band(m int, x, y, w []float64, lambda float64) truthM {
	n, k := len(x), len(x)-m
	lam := bf(lambda)
	fact := bf(1)
	for i := 2; i <= m; i++ {
		fact = mul2(fact, bf(float64(i)))
	}
	at := make([]*big.Float, n)
	for i := range at {
		at[i] = sub2(bf(x[i]), bf(x[0]))
	}
	q := make([][]*big.Float, k)
	for j := range q {
		q[j] = make([]*big.Float, m+1)
		for a := range q[j] {
			v := fact
			for b := range q[j] {
				if b != a {
					v = quo2(v, sub2(at[j+a], at[j+b]))
				}
			}
			q[j][a] = v
		}
	}
	// M_j(t) = m!/(m-1)! sum_a (x_(j+a) - t)_+^(m-1) / prod, that is q/(m-1)!
	lower := quo2(fact, bf(float64(m)))
	spline := func(j, gap int, t *big.Float) *big.Float {
		sum := bf(0)
		for a := range q[j] {
			if j+a > gap {
				d := sub2(at[j+a], t)
				p := q[j][a]
				for range m - 1 {
					p = mul2(p, d)
				}
				sum = add2(sum, p)
			}
		}
		sum = quo2(sum, lower)
		if m%2 == 1 {
			return sum
		}
		return sum.Neg(sum)
	}
	boole := []float64{7, 32, 12, 32, 7}
	c := make([][]*big.Float, k) // c[j][o] = B[j][j+o]
	vals := make(map[[2]int][]*big.Float)
	for j := range k {
		for g := j; g < j+m; g++ {
			var v []*big.Float
			for p := range boole {
				v = append(v, spline(j, g, add2(at[g], mul2(bf(float64(p)/4), sub2(at[g+1], at[g])))))
			}
			vals[[2]int{j, g}] = v
		}
	}
	r := make([][]*big.Float, k)
	for j := range k {
		c[j], r[j] = zeros(m+1), zeros(m+1)
		for o := 0; o <= m && j+o < k; o++ {
			for g := j + o; g < j+m; g++ {
				sum := bf(0)
				for p, b := range boole {
					sum = add2(sum, mul2(bf(b), mul2(vals[[2]int{j, g}][p], vals[[2]int{j + o, g}][p])))
				}
				r[j][o] = add2(r[j][o], quo2(mul2(sum, sub2(at[g+1], at[g])), bf(90)))
			}
			c[j][o] = bf(0).Set(r[j][o])
			for a := o; a <= m; a++ {
				c[j][o] = add2(c[j][o], quo2(mul2(lam, mul2(q[j][a], q[j+o][a-o])), bf(w[j+a])))
			}
		}
	}
	// LDL'
	d, l := zeros(k), make([][]*big.Float, k) // l[j][o] = L[j+o][j]
	for j := range k {
		l[j] = zeros(m + 1)
		d[j] = c[j][0]
		for b := 1; b <= m && b <= j; b++ {
			d[j] = sub2(d[j], mul2(d[j-b], mul2(l[j-b][b], l[j-b][b])))
		}
		for o := 1; o <= m && j+o < k; o++ {
			v := c[j][o]
			for b := 1; b+o <= m && b <= j; b++ {
				v = sub2(v, mul2(d[j-b], mul2(l[j-b][b], l[j-b][b+o])))
			}
			l[j][o] = quo2(v, d[j])
		}
	}
	gam := zeros(k)
	for j := range k {
		for a := range q[j] {
			gam[j] = add2(gam[j], mul2(q[j][a], bf(y[j+a])))
		}
		for b := 1; b <= m && b <= j; b++ {
			gam[j] = sub2(gam[j], mul2(l[j-b][b], gam[j-b]))
		}
	}
	for j := k - 1; j >= 0; j-- {
		gam[j] = quo2(gam[j], d[j])
		for o := 1; o <= m && j+o < k; o++ {
			gam[j] = sub2(gam[j], mul2(l[j][o], gam[j+o]))
		}
	}
	v := make([][]*big.Float, k) // v[j][o] = B^-1[j][j+o]
	elem := func(i, j int) *big.Float { return v[min(i, j)][max(i, j)-min(i, j)] }
	for j := k - 1; j >= 0; j-- {
		v[j] = zeros(m + 1)
		for o := m; o >= 0; o-- {
			if j+o >= k {
				continue
			}
			s := bf(0)
			if o == 0 {
				s = quo2(bf(1), d[j])
			}
			for b := 1; b <= m && j+b < k; b++ {
				s = sub2(s, mul2(l[j][b], elem(j+b, j+o)))
			}
			v[j][o] = s
		}
	}
	t := truthM{gap: make([]float64, n), lev: make([]float64, n)}
	edf, rest, rss, loo := bf(0), bf(0), bf(0), bf(0)
	for i := range n {
		qg, s := bf(0), bf(0)
		lo, hi := max(0, i-m), min(i, k-1)
		for a := lo; a <= hi; a++ {
			qg = add2(qg, mul2(q[a][i-a], gam[a]))
			for b := lo; b <= hi; b++ {
				s = add2(s, mul2(mul2(q[a][i-a], q[b][i-b]), elem(a, b)))
			}
		}
		lw := quo2(lam, bf(w[i]))
		e, out := mul2(lw, qg), mul2(lw, s)
		t.gap[i], t.lev[i] = f64(e), f64(sub2(bf(1), out))
		edf, rest = add2(edf, sub2(bf(1), out)), add2(rest, out)
		rss = add2(rss, mul2(bf(w[i]), mul2(e, e)))
		e = quo2(e, out)
		loo = add2(loo, mul2(bf(w[i]), mul2(e, e)))
	}
	pen := bf(0)
	for j := range k {
		for o := 0; o <= m && j+o < k; o++ {
			p := mul2(r[j][o], mul2(gam[j], gam[j+o]))
			pen = add2(pen, p)
			if o > 0 {
				pen = add2(pen, p)
			}
		}
	}
	t.edf, t.rest, t.rss, t.loo = f64(edf), f64(rest), f64(rss), f64(quo2(loo, bf(float64(n))))
	t.rough = f64(pen)
	for j := range k {
		if m == 2 { // the hat of area 1 about knot j+1 has the height 2/(x_(j+2) - x_j)
			t.bend = append(t.bend, f64(quo2(mul2(bf(2), gam[j]), sub2(at[j+2], at[j]))))
		}
	}
	return t
}
