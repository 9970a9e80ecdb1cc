package spline

import (
	"math"
	"math/big"
	"math/rand/v2"
	"testing"
)

// TestOrder3Maps: the nine elementary maps of a step give exactly the
// transition and the covariance of a twice integrated Wiener process over a
// unit gap.
func TestOrder3Maps(t *testing.T) {
	r := func(a, b int64) *big.Rat { return big.NewRat(a, b) }
	f, q := [3][3]*big.Rat{}, [3][3]*big.Rat{}
	for i := range 3 {
		for j := range 3 {
			f[i][j], q[i][j] = r(0, 1), r(0, 1)
		}
		f[i][i] = r(1, 1)
	}
	mulAdd := func(a, s, b *big.Rat) *big.Rat {
		return new(big.Rat).Add(a, new(big.Rat).Mul(s, b))
	}
	// row i += s * row j, and for the covariance the column too
	add := func(i, j int, s *big.Rat) {
		for k := range 3 {
			f[i][k] = mulAdd(f[i][k], s, f[j][k])
			q[i][k] = mulAdd(q[i][k], s, q[j][k])
		}
		for k := range 3 {
			q[k][i] = mulAdd(q[k][i], s, q[k][j])
		}
	}
	for _, m := range [3][3]*big.Rat{{r(1, 5), r(1, 4), r(5, 9)}, {r(1, 5), r(1, 2), r(1, 3)}, {r(3, 5), r(1, 4), r(1, 9)}} {
		add(0, 1, m[0])
		add(1, 2, m[1])
		q[2][2] = new(big.Rat).Add(q[2][2], m[2])
	}
	wantF := [3][3]*big.Rat{{r(1, 1), r(1, 1), r(1, 2)}, {r(0, 1), r(1, 1), r(1, 1)}, {r(0, 1), r(0, 1), r(1, 1)}}
	wantQ := [3][3]*big.Rat{{r(1, 20), r(1, 8), r(1, 6)}, {r(1, 8), r(1, 3), r(1, 2)}, {r(1, 6), r(1, 2), r(1, 1)}}
	for i := range 3 {
		for j := range 3 {
			if f[i][j].Cmp(wantF[i][j]) != 0 || q[i][j].Cmp(wantQ[i][j]) != 0 {
				t.Errorf("entry %d,%d: transition %v, want %v; covariance %v, want %v", i, j, f[i][j], wantF[i][j], q[i][j], wantQ[i][j])
			}
		}
	}
}

// TestNISTPontius compares the parabola with certified values of the NIST
// Statistical Reference Datasets, linear regression, Pontius (load cell
// calibration, 40 rows).
func TestNISTPontius(t *testing.T) {
	y := []float64{
		.11019, .21956, .32949, .43899, .54803, .65694, .76562, .87487, .98292, 1.09146,
		1.20001, 1.30822, 1.41599, 1.52399, 1.63194, 1.73947, 1.84646, 1.95392, 2.06128, 2.16844,
		.11052, .22018, .32939, .43886, .54798, .65739, .76596, .87474, .98300, 1.09150,
		1.20004, 1.30818, 1.41613, 1.52408, 1.63159, 1.73965, 1.84696, 1.95445, 2.06177, 2.16829,
	}
	x := make([]float64, len(y))
	for i := range x {
		x[i] = 150000 * float64(i%20+1)
	}
	d := collapseOrder(3, x, y, nil)
	var f curve3
	fit3(&f, &memory3{}, d, math.Inf(1))
	p := f.posterior(0)
	near(t, "edf", f.EDF, 3, 1e-14, 3)
	near(t, "B0", p.Value, 0.673565789473684e-03, 2e-12, 0.673565789473684e-03)
	near(t, "B1", p.Slope, 0.732059160401003e-06, 1e-13, 0.732059160401003e-06)
	near(t, "B2", p.Second/2, -0.316081871345029e-14, 1e-12, 0.316081871345029e-14)
	near(t, "residual standard deviation", f.Sigma(), 0.205177424076185e-03, 1e-12, 0.205177424076185e-03)
	near(t, "sd of B0", f.Sigma()*math.Sqrt(p.VarValue), 0.107938612033077e-03, 1e-12, 0.107938612033077e-03)
	near(t, "sd of B1", f.Sigma()*math.Sqrt(p.VarSlope), 0.157817399981659e-09, 1e-12, 0.157817399981659e-09)
	near(t, "sd of B2", f.Sigma()*math.Sqrt(p.VarSecond)/2, 0.486652849992036e-16, 1e-12, 0.486652849992036e-16)
}

// TestNISTNumAcc compares the constant with certified values of the NIST
// Statistical Reference Datasets, univariate, NumAcc1 to NumAcc4, which follow
// from how the data are made.
func TestNISTNumAcc(t *testing.T) {
	for _, c := range []struct {
		first, a, b, mean, sd float64
		pairs                 int
	}{
		{10000001, 10000003, 10000002, 10000002, 1, 1},
		{1.2, 1.1, 1.3, 1.2, 0.1, 500},
		{1000000.2, 1000000.1, 1000000.3, 1000000.2, 0.1, 500},
		{10000000.2, 10000000.1, 10000000.3, 10000000.2, 0.1, 500},
	} {
		y := []float64{c.first}
		for range c.pairs {
			y = append(y, c.a, c.b)
		}
		x := make([]float64, len(y))
		for i := range x {
			x[i] = float64(i * i)
		}
		d := collapseOrder(1, x, y, nil)
		var f curve1
		fit1(&f, &memory1{}, d, math.Inf(1))
		near(t, "edf", f.EDF, 1, 1e-14, 1)
		near(t, "mean", f.Value[0], c.mean, 1e-15, c.mean)
		// the data themselves are rounded: 10000000.1 is off by 4e-10
		near(t, "standard deviation", f.Sigma(), c.sd, 1e-14+2e-16*c.mean/c.sd, c.sd)
	}
}

// TestOrderLong compares long fits with the banded form in 512 bits.
func TestOrderLong(t *testing.T) {
	t.Parallel()
	sizes := []int{1000, 5000}
	if testing.Short() {
		sizes = sizes[:1]
	}
	for _, m := range []int{1, 3} {
		e := worst{}
		for _, n := range sizes {
			rng := rand.New(rand.NewPCG(uint64(n), uint64(m)))
			x, y, w := make([]float64, n), make([]float64, n), make([]float64, n)
			at := 0.0
			for i := range x {
				at += 0.1 + rng.Float64()
				x[i], w[i] = at, 0.5+rng.Float64()
				y[i] = math.Sin(6*float64(i)/float64(n)) + 0.3*rng.NormFloat64()
			}
			whole := math.Pow(at, float64(2*m-1)) * float64(n)
			for _, lambda := range []float64{0.01, 30, 1e-9 * whole, 1e-3 * whole, 10 * whole} {
				d := collapseOrder(m, x, y, w)
				got := evaluateOrder(m, d, lambda)
				want := band(m, x, y, w, lambda)
				const tol = 1e-11
				e.check(t, "", "edf", got.EDF, want.edf, want.edf, tol)
				e.check(t, "", "n-edf", got.NEDF, want.rest, want.rest, tol)
				e.check(t, "", "rss", got.RSS, want.rss, want.rss, tol)
				e.check(t, "", "loocv", got.LOOCV, want.loo, want.loo, tol)
				e.check(t, "", "roughness", got.Roughness, want.rough, want.rough, tol)
				if m == 1 {
					continue
				}
				var f curve3
				fit3(&f, &memory3{}, d, lambda)
				for i := range want.gap {
					e.check(t, "", "gap", f.Gap[i], want.gap[i], 1, tol)
					e.check(t, "", "leverage", f.Leverage[i], want.lev[i], want.lev[i], tol)
				}
				t.Logf("order %d, n %d: edf %.6g", m, n, got.EDF)
			}
		}
		t.Logf("order %d, worst relative errors: %v", m, e)
	}
}

// TestOrderBand: the two oracles agree with each other.
func TestOrderBand(t *testing.T) {
	for _, m := range []int{1, 2, 3} {
		x := []float64{0, 0.5, 1.25, 1.2501, 3, 4, 4.5, 7}
		y := []float64{1, 2, 0, 3, 1, -1, 2, 5}
		w := []float64{1, 2, 1, 0.5, 1, 1e3, 1, 1}
		a, b := newSaddle(m, x, y, w, 0.3).truth(), band(m, x, y, w, 0.3)
		near(t, "edf", b.edf, a.edf, 1e-15, a.edf)
		near(t, "rss", b.rss, a.rss, 1e-15, a.rss)
		near(t, "loocv", b.loo, a.loo, 1e-15, a.loo)
		near(t, "roughness", b.rough, a.rough, 1e-15, a.rough)
	}
}

// TestOrderInvariants: leverages are proportions that sum to edf; edf and n-edf
// sum to n; a tiny lambda interpolates; a large one gives the polynomial; DREML
// is REML's derivative; x times a power of two changes no bit; x mirrored
// changes only rounding; nothing is allocated in a search.
func TestOrderInvariants(t *testing.T) {
	for seed := range uint64(20) {
		x, y, w := sample(8+int(seed)*3, seed)
		for _, m := range []int{1, 3} {
			d := collapseOrder(m, x, y, w)
			if len(d.X) <= m {
				continue
			}
			twice, mirror := make([]float64, len(x)), make([]float64, len(x))
			for i := range x {
				twice[i], mirror[i] = 2*x[i], -x[i]
			}
			d2 := collapseOrder(m, twice, y, w)
			dm := collapseOrder(m, mirror, y, w)
			var w1 memory1
			var w3 memory3
			var f1 curve1
			var f3 curve3
			fit := func(d *Data, lambda float64) (value, leverage []float64) {
				if m == 1 {
					fit1(&f1, &w1, d, lambda)
					return f1.Value, f1.Leverage
				}
				fit3(&f3, &w3, d, lambda)
				return f3.Value, f3.Leverage
			}
			run := func(d *Data, lambda float64, reml bool) Criteria {
				if m == 1 {
					return evaluate1(&w1, d, lambda, reml)
				}
				return evaluate3(&w3, d, lambda, reml)
			}
			for _, lambda := range []float64{1e-14, 1e-3, 1, 1e4, 1e14} {
				c := run(d, lambda, true)
				_, lev := fit(d, lambda)
				sum := 0.0
				for _, l := range lev {
					if l < 0 || l > 1 {
						t.Fatalf("leverage %g", l)
					}
					sum += l
				}
				near(t, "sum of leverages", sum, c.EDF, 1e-13, c.EDF)
				near(t, "edf and n - edf", c.EDF+c.NEDF, float64(d.N), 1e-13, float64(d.N))
				s := run(d, lambda, false)
				if s.EDF != c.EDF || s.RSS != c.RSS || s.LOOCV != c.LOOCV || s.NEDF != c.NEDF {
					t.Fatal("the scores differ with and without REML")
				}
				const e = 1e-4
				num := (run(d, lambda*(1+e), true).REML - run(d, lambda/(1+e), true).REML) / (2 * math.Log1p(e))
				near(t, "DREML", c.DREML, num, 1e-4, math.Abs(c.DREML)+1e-3)
				c2 := run(d2, lambda*math.Pow(2, float64(2*m-1)), true)
				if c2.EDF != c.EDF || c2.RSS != c.RSS || c2.LOOCV != c.LOOCV {
					t.Fatal("doubled x gives other bits")
				}
				cm := run(dm, lambda, true)
				near(t, "mirrored edf", cm.EDF, c.EDF, 1e-14, c.EDF)
				near(t, "mirrored rss", cm.RSS, c.RSS, 1e-11, c.RSS)
				near(t, "mirrored REML", cm.REML, c.REML, 1e-11, math.Abs(c.REML)+1)
			}
			v, _ := fit(d, 1e-16)
			for j := range d.X {
				near(t, "interpolation", v[j], d.Y[j], 1e-6, 1)
			}
			a, _ := fit(d, 1e17)
			a = append([]float64(nil), a...)
			b, _ := fit(d, math.Inf(1))
			for j := range d.X {
				near(t, "the polynomial", a[j], b[j], 1e-7, 1)
			}
			c := run(d, math.Inf(1), true)
			near(t, "edf of the polynomial", c.EDF, float64(m), 1e-14, 1)
			if c.Roughness != 0 || math.IsNaN(c.REML) || c.DREML != -(c.EDF-float64(m)) {
				t.Fatalf("at the polynomial: %+v", c)
			}
			if n := testing.AllocsPerRun(10, func() { run(d, 3, true) }); n != 0 {
				t.Fatalf("%g allocations a criterion", n)
			}
		}
	}
}
