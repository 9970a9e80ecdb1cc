package spline

import (
	"math"
	"math/big"
	"math/rand/v2"
	"sort"
	"testing"

	"pgregory.net/rapid"
)

// truth is the smoothing spline in 512-bit arithmetic by another road: the
// banded form of Reinsch (1967), Numer. Math. 10:177, with the leverages of
// Hutchinson and de Hoog (1985), Numer. Math. 47:99. In double precision that
// form loses most of its digits; in 512 bits it has digits to lose.
type truth struct {
	g, c, lev      []float64 // values, second derivatives, leverages
	edf, rest      float64   // tr S, tr (I - S)
	rss, loo, reml float64   // reml: without what lambda does not enter
}

func bf(v float64) *big.Float  { return new(big.Float).SetPrec(512).SetFloat64(v) }
func f64(v *big.Float) float64 { f, _ := v.Float64(); return f }
func mul2(a, b *big.Float) *big.Float {
	return new(big.Float).SetPrec(512).Mul(a, b)
}
func add2(a, b *big.Float) *big.Float { return new(big.Float).SetPrec(512).Add(a, b) }
func sub2(a, b *big.Float) *big.Float { return new(big.Float).SetPrec(512).Sub(a, b) }
func quo2(a, b *big.Float) *big.Float { return new(big.Float).SetPrec(512).Quo(a, b) }

func solveTruth(x, y, w []float64, lambda float64) truth {
	n, k := len(x), len(x)-2
	lam := bf(lambda)
	h := make([]*big.Float, n-1)
	for i := range h {
		h[i] = sub2(bf(x[i+1]), bf(x[i]))
	}
	one := bf(1)
	// column j of Q touches rows j, j+1, j+2
	q := make([][3]*big.Float, k)
	for j := range q {
		a, b := quo2(one, h[j]), quo2(one, h[j+1])
		q[j] = [3]*big.Float{a, sub2(new(big.Float).SetPrec(512).Neg(a), b), b}
	}
	// B = R + lambda Q' W^-1 Q, bandwidth 2
	d := make([][3]*big.Float, k) // B[j][j], B[j][j+1], B[j][j+2]
	for j := range d {
		for o := 0; o < 3; o++ {
			d[j][o] = bf(0)
			if j+o >= k {
				continue
			}
			for t := o; t < 3; t++ {
				d[j][o] = add2(d[j][o], quo2(mul2(lam, mul2(q[j][t], q[j+o][t-o])), bf(w[j+t])))
			}
		}
		d[j][0] = add2(d[j][0], quo2(add2(h[j], h[j+1]), bf(3)))
		if j+1 < k {
			d[j][1] = add2(d[j][1], quo2(h[j+1], bf(6)))
		}
	}
	// LDL': D[j], L[j+1][j] = l1[j], L[j+2][j] = l2[j]
	D, l1, l2 := make([]*big.Float, k), make([]*big.Float, k), make([]*big.Float, k)
	for j := range D {
		D[j] = d[j][0]
		e1, e2 := d[j][1], d[j][2]
		if j >= 1 {
			D[j] = sub2(D[j], mul2(D[j-1], mul2(l1[j-1], l1[j-1])))
			e1 = sub2(e1, mul2(D[j-1], mul2(l1[j-1], l2[j-1])))
		}
		if j >= 2 {
			D[j] = sub2(D[j], mul2(D[j-2], mul2(l2[j-2], l2[j-2])))
		}
		l1[j], l2[j] = quo2(e1, D[j]), quo2(e2, D[j])
	}
	// gamma = B^-1 Q'y
	gam := make([]*big.Float, k)
	for j := range gam {
		gam[j] = bf(0)
		for t := 0; t < 3; t++ {
			gam[j] = add2(gam[j], mul2(q[j][t], bf(y[j+t])))
		}
		if j >= 1 {
			gam[j] = sub2(gam[j], mul2(l1[j-1], gam[j-1]))
		}
		if j >= 2 {
			gam[j] = sub2(gam[j], mul2(l2[j-2], gam[j-2]))
		}
	}
	for j := k - 1; j >= 0; j-- {
		gam[j] = quo2(gam[j], D[j])
		if j+1 < k {
			gam[j] = sub2(gam[j], mul2(l1[j], gam[j+1]))
		}
		if j+2 < k {
			gam[j] = sub2(gam[j], mul2(l2[j], gam[j+2]))
		}
	}
	// central band of B^-1
	v0, v1, v2 := make([]*big.Float, k+2), make([]*big.Float, k+2), make([]*big.Float, k+2)
	for j := range v0 {
		v0[j], v1[j], v2[j] = bf(0), bf(0), bf(0)
	}
	for j := k - 1; j >= 0; j-- {
		a, b := l1[j], l2[j]
		if j+1 >= k {
			a = bf(0)
		}
		if j+2 >= k {
			b = bf(0)
		}
		v1[j] = new(big.Float).SetPrec(512).Neg(add2(mul2(a, v0[j+1]), mul2(b, v1[j+1])))
		v2[j] = new(big.Float).SetPrec(512).Neg(add2(mul2(a, v1[j+1]), mul2(b, v0[j+2])))
		v0[j] = sub2(sub2(quo2(one, D[j]), mul2(a, v1[j])), mul2(b, v2[j]))
	}
	inv := func(i, j int) *big.Float {
		if i > j {
			i, j = j, i
		}
		switch j - i {
		case 0:
			return v0[i]
		case 1:
			return v1[i]
		}
		return v2[i]
	}
	t := truth{g: make([]float64, n), c: make([]float64, n), lev: make([]float64, n)}
	edf, rest, rss, loo, pen := bf(0), bf(0), bf(0), bf(0), bf(0)
	for i := range x {
		qg, m := bf(0), bf(0)
		for a := max(0, i-2); a <= min(i, k-1); a++ {
			qg = add2(qg, mul2(q[a][i-a], gam[a]))
			for b := max(0, i-2); b <= min(i, k-1); b++ {
				m = add2(m, mul2(mul2(q[a][i-a], q[b][i-b]), inv(a, b)))
			}
		}
		lw := quo2(lam, bf(w[i]))
		r := mul2(lw, qg)
		out := mul2(lw, m) // 1 - S_ii
		t.g[i] = f64(sub2(bf(y[i]), r))
		t.lev[i] = f64(sub2(one, out))
		edf, rest = add2(edf, sub2(one, out)), add2(rest, out)
		rss = add2(rss, mul2(bf(w[i]), mul2(r, r)))
		e := quo2(r, out)
		loo = add2(loo, mul2(bf(w[i]), mul2(e, e)))
		pen = add2(pen, mul2(bf(y[i]), qg)) // y' Q gamma = RSS/lambda + roughness
		if i > 0 && i < n-1 {
			t.c[i] = f64(gam[i-1])
		}
	}
	t.edf, t.rest, t.rss, t.loo = f64(edf), f64(rest), f64(rss), f64(quo2(loo, bf(float64(n))))
	// (n-2) log(RSS + lambda P) + log det B - (n-2) log lambda + const
	dev := f64(mul2(lam, pen))
	logdet := 0.0
	for j := range D {
		m := new(big.Float)
		e := D[j].MantExp(m)
		logdet += math.Log(f64(m)) + float64(e)*math.Ln2
	}
	t.reml = float64(n-2)*math.Log(dev) + logdet - float64(n-2)*math.Log(lambda)
	return t
}

// hardCase draws x, y, w and lambda over wide ranges.
type hardCase struct {
	x, y, w []float64
	lambda  float64
}

func drawCase(t *rapid.T) hardCase {
	rng := rand.New(rand.NewPCG(rapid.Uint64().Draw(t, "seed"), 7))
	n := rapid.IntRange(3, 200).Draw(t, "n")
	shape := rapid.SampledFrom([]string{"even", "random", "clustered", "offset", "scaled"}).Draw(t, "x")
	weights := rapid.SampledFrom([]string{"one", "some", "wide"}).Draw(t, "w")
	c := hardCase{x: make([]float64, n), y: make([]float64, n), w: make([]float64, n)}
	for i := range c.x {
		switch shape {
		case "even":
			c.x[i] = float64(i)
		case "clustered":
			c.x[i] = math.Floor(float64(i)/4) + 1e-7*rng.Float64()
		case "offset":
			c.x[i] = 1e9 + math.Floor(1000*rng.Float64())/8
		case "scaled":
			c.x[i] = 1e-9 * rng.Float64()
		default:
			c.x[i] = 10 * rng.Float64()
		}
		switch weights {
		case "one":
			c.w[i] = 1
		case "some":
			c.w[i] = 0.2 + 2*rng.Float64()
		default:
			c.w[i] = math.Pow(10, 8*rng.Float64()-4)
		}
	}
	sort.Float64s(c.x)
	m := 1
	for i := 1; i < n; i++ {
		if c.x[i] > c.x[m-1] {
			c.x[m] = c.x[i]
			m++
		}
	}
	if m < 3 {
		c.x, m = append(c.x[:0], 1, 2, 4), 3
	}
	c.x, c.y, c.w = c.x[:m], c.y[:m], c.w[:m]
	r := c.x[m-1] - c.x[0]
	sw := 0.0
	for i := range c.y {
		c.y[i] = 3*math.Sin(5*(c.x[i]-c.x[0])/r) + 0.4*rng.NormFloat64()
		sw += c.w[i]
	}
	c.lambda = sw * r * r * r * math.Pow(10, rapid.Float64Range(-12, 4).Draw(t, "log lambda"))
	return c
}

// TestOracle compares with 512-bit fits over random x (even, random, in
// clusters, far from 0, tiny), weights over 8 orders, lambda over 16.
func TestOracle(t *testing.T) {
	const tol = 1e-11
	worst := map[string]float64{}
	rapid.Check(t, func(rt *rapid.T) {
		c := drawCase(rt)
		d, err := Collapse(c.x, c.y, c.w)
		if err != nil {
			rt.Fatal(err)
		}
		var ws Workspace
		f := ws.Fit(d, c.lambda)
		want := solveTruth(c.x, c.y, c.w, c.lambda)
		size, bend := 0.0, 0.0
		for i := range want.g {
			size, bend = math.Max(size, math.Abs(c.y[i])), math.Max(bend, math.Abs(want.c[i]))
		}
		edf := want.edf
		check := func(what string, got, want, scale float64) {
			e := math.Abs(got-want) / scale
			worst[what] = math.Max(worst[what], e)
			if !(e <= tol) {
				rt.Fatalf("%s = %.17g, want %.17g (off by %.2g) with n = %d, lambda = %g, edf = %g", what, got, want, e, len(c.x), c.lambda, edf)
			}
		}
		for i := range want.g {
			check("g", f.Value[i], want.g[i], size)
			check("leverage", f.Leverage[i], want.lev[i], want.lev[i])
			if bend > 0 {
				check("g''", f.Curvature[i], want.c[i], bend)
			}
		}
		check("edf", f.EDF, want.edf, want.edf)
		check("n - edf", f.NEDF, want.rest, want.rest)
		check("rss", f.RSS, want.rss, want.rss)
		check("gcv", f.GCV(1), float64(d.N)*want.rss/(want.rest*want.rest), float64(d.N)*want.rss/(want.rest*want.rest))
		check("loocv", f.LOOCV, want.loo, want.loo)
		// REML up to a constant: the difference from another lambda
		l2 := c.lambda * 37
		diff := ws.Criteria(d, l2).REML - f.REML
		wantDiff := solveTruth(c.x, c.y, c.w, l2).reml - want.reml
		check("reml difference", diff, wantDiff, math.Abs(want.reml)+float64(d.N))
	})
	t.Logf("worst relative errors: %v", worst)
}
