package spline

import (
	"fmt"
	"math"
	"math/rand/v2"
	"sort"
	"testing"
)

// orderCase draws rows and a lambda that reaches the wanted edf.
type orderCase struct {
	name    string
	x, y, w []float64
	lambda  float64
}

func drawOrder(m int, rng *rand.Rand) orderCase {
	n := m + 1 + rng.IntN(60-m)
	shape, weights := rng.IntN(5), rng.IntN(3)
	cluster := 1e-4
	if m == 1 {
		cluster = 1e-8
	}
	var c orderCase
	for i := range n {
		var x float64
		switch shape {
		case 0:
			x = float64(i)
		case 1:
			x = 10 * rng.Float64()
		case 2:
			x = math.Floor(float64(i)/4) + cluster*(float64(i%4)+0.5*rng.Float64())
		case 3: // ties
			x = math.Floor(float64(n) / 2 * rng.Float64())
		case 4: // gaps over all sizes
			if i > 0 {
				x = c.x[i-1] + math.Pow(cluster, rng.Float64())
			}
		}
		w := 1.0
		switch weights {
		case 1:
			w = 0.2 + 2*rng.Float64()
		case 2:
			w = math.Pow(10, 6*rng.Float64()-3)
		}
		c.x, c.w = append(c.x, x), append(c.w, w)
	}
	lo, hi := c.x[0], c.x[0]
	for _, x := range c.x {
		lo, hi = math.Min(lo, x), math.Max(hi, x)
	}
	for i := range n {
		c.y = append(c.y, 3*math.Sin(5*(c.x[i]-lo)/(hi-lo))+0.4*rng.NormFloat64())
	}
	distinct := append([]float64(nil), c.x...)
	sort.Float64s(distinct)
	k := 1
	for i := 1; i < n; i++ {
		if distinct[i] > distinct[i-1] {
			k++
		}
	}
	if k < m+1 {
		return drawOrder(m, rng)
	}
	// edf from m+1e-4 to (distinct x)-1e-3, in between evenly or at the ends
	top, bottom := float64(k)-1e-3, float64(m)+1e-4
	u := rng.Float64()
	want := bottom + u*(top-bottom)
	switch rng.IntN(4) {
	case 0:
		want = float64(m) + math.Pow(10, -4*u)
	case 1:
		want = float64(k) - math.Pow(10, -3*u)
	}
	d := collapseOrder(m, c.x, c.y, c.w)
	a, b := -80.0, 80.0
	for range 60 {
		mid := (a + b) / 2
		if evaluateOrder(m, d, math.Exp(mid)).EDF > want {
			a = mid
		} else {
			b = mid
		}
	}
	c.lambda = math.Exp((a + b) / 2)
	c.name = fmt.Sprintf("order %d, n %d, distinct %d, x %d, w %d, lambda %g, edf %g", m, n, k, shape, weights, c.lambda, want)
	return c
}

// collapseOrder is Collapse for a curve of order m, which needs m+1 distinct x.
func collapseOrder(m int, x, y, w []float64) *Data {
	d := &Data{Penalty: m}
	if err := d.Reset(x, y, w); err != nil {
		panic(err)
	}
	return d
}

func evaluateOrder(m int, d *Data, lambda float64) Criteria {
	if m == 1 {
		return evaluate1(&memory1{}, d, lambda, true)
	}
	return evaluate3(&memory3{}, d, lambda, true)
}

// worst keeps the worst relative error of each quantity.
type worst map[string]float64

func (e worst) check(t *testing.T, name, what string, got, want, scale, tol float64) {
	t.Helper()
	off := math.Abs(got-want) / scale
	if got == want {
		off = 0
	}
	if !(off <= e[what]) {
		e[what] = off
	}
	if !(off <= tol) {
		t.Errorf("%s: %s = %.17g, want %.17g (off by %.2g)", name, what, got, want, off)
	}
}

// TestOrderOracle compares with dense fits in 512 bits, row by row: x even,
// random, in clusters (gap ratios to 1e4, for order 1 to 1e8) and tied, weights
// over six orders of magnitude, edf from order+1e-4 to distinct x less 1e-3.
func TestOrderOracle(t *testing.T) {
	t.Parallel()
	trials := 20
	if testing.Short() {
		trials = 6
	}
	for _, m := range []int{1, 3} {
		const tol = 1e-11
		e := worst{}
		rng := rand.New(rand.NewPCG(uint64(m), 31))
		for range trials {
			c := drawOrder(m, rng)
			d := collapseOrder(m, c.x, c.y, c.w)
			s := newSaddle(m, d.RowX, d.RowY, d.RowW, c.lambda)
			want := s.truth()
			got := evaluateOrder(m, d, c.lambda)
			size := 0.0
			for _, y := range c.y {
				size = math.Max(size, math.Abs(y))
			}
			e.check(t, c.name, "edf", got.EDF, want.edf, want.edf, tol)
			e.check(t, c.name, "n-edf", got.NEDF, want.rest, want.rest, tol)
			e.check(t, c.name, "rss", got.RSS, want.rss, want.rss, tol)
			gcv := float64(d.N) * want.rss / (want.rest * want.rest)
			e.check(t, c.name, "gcv", got.GCV(1), gcv, gcv, tol)
			e.check(t, c.name, "loocv", got.LOOCV, want.loo, want.loo, tol)
			e.check(t, c.name, "roughness", got.Roughness, want.rough, want.rough, tol)
			e.check(t, c.name, "reml", got.REML, want.reml, math.Abs(want.reml)+float64(d.N), tol)
			dreml := float64(d.N-m)*want.lambdaTimesPen/(want.rss+want.lambdaTimesPen) - (want.edf - float64(m))
			e.check(t, c.name, "dreml", got.DREML, dreml, float64(d.N), tol)
			var places []float64
			k := len(d.X)
			places = append(places, d.X...)
			for i := range k - 1 {
				u := rng.Float64()
				places = append(places, d.X[i]+u*(d.X[i+1]-d.X[i]))
			}
			span := d.X[k-1] - d.X[0]
			places = append(places, d.X[0]-0.2*span, d.X[0]-1e-3*span, d.X[k-1]+1e-3*span, d.X[k-1]+0.3*span)
			if m == 1 {
				order1Places(t, c, d, s, &want, size, places, e)
			} else {
				order3Places(t, c, d, s, &want, size, places, e)
			}
			if t.Failed() {
				break
			}
		}
		t.Logf("order %d, worst relative errors:", m)
		var names []string
		for k := range e {
			names = append(names, k)
		}
		sort.Strings(names)
		for _, k := range names {
			t.Logf("  %-24s %.1e", k, e[k])
		}
	}
}

func order1Places(t *testing.T, c orderCase, d *Data, s *saddle, want *truthM, size float64, places []float64, e worst) {
	var f curve1
	fit1(&f, &memory1{}, d, c.lambda)
	for row, k := range d.Knot {
		e.check(t, c.name, "leverage", d.RowW[row]/d.W[k]*f.Leverage[k], want.lev[row], want.lev[row], 1e-11)
		e.check(t, c.name, "gap", d.RowY[row]-d.Y[k]+f.Gap[k], want.gap[row], size, 1e-11)
	}
	for _, x := range places {
		v, variance := f.posterior(x)
		e.check(t, c.name, "g", v, s.mean(x, 0), size, 1e-11)
		e.check(t, c.name, "var g", variance, s.cov(x, 0, 0), variance, 1e-11)
	}
}

func order3Places(t *testing.T, c orderCase, d *Data, s *saddle, want *truthM, size float64, places []float64, e worst) {
	var f curve3
	fit3(&f, &memory3{}, d, c.lambda)
	for row, k := range d.Knot {
		e.check(t, c.name, "leverage", d.RowW[row]/d.W[k]*f.Leverage[k], want.lev[row], want.lev[row], 1e-11)
		e.check(t, c.name, "gap", d.RowY[row]-d.Y[k]+f.Gap[k], want.gap[row], size, 1e-11)
	}
	var mean [4][]float64
	var most [4]float64
	for _, x := range places {
		for k := range mean {
			mean[k] = append(mean[k], s.mean(x, k))
			most[k] = math.Max(most[k], math.Abs(mean[k][len(mean[k])-1]))
		}
	}
	for i, x := range places {
		p := f.posterior(x)
		_, _, _, third := f.at3(x)
		e.check(t, c.name, "g", p.Value, mean[0][i], most[0], 1e-11)
		e.check(t, c.name, "g'", p.Slope, mean[1][i], most[1], 1e-11)
		e.check(t, c.name, "g''", p.Second, mean[2][i], most[2], 1e-11)
		e.check(t, c.name, "g'''", third, mean[3][i], most[3], 1e-11)
		v0, v1, v2 := s.cov(x, 0, 0), s.cov(x, 1, 1), s.cov(x, 2, 2)
		e.check(t, c.name, "var g", p.VarValue, v0, v0, 1e-11)
		e.check(t, c.name, "var g'", p.VarSlope, v1, v1, 1e-11)
		e.check(t, c.name, "var g''", p.VarSecond, v2, v2, 1e-11)
		e.check(t, c.name, "cov g g'", p.Cov, s.cov(x, 0, 1), math.Sqrt(v0*v1), 1e-11)
		e.check(t, c.name, "cov g g''", p.CovValueSecond, s.cov(x, 0, 2), math.Sqrt(v0*v2), 1e-11)
		e.check(t, c.name, "cov g' g''", p.CovSlopeSecond, s.cov(x, 1, 2), math.Sqrt(v1*v2), 1e-11)
	}
}
