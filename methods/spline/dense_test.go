package spline

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// dense is the posterior of an integrated Wiener process with a diffuse line,
// by a dense saddle system: an oracle that shares nothing with the filters.
//
//	[K/lambda + diag(1/w)  T] [a]   [y]
//	[T'                    0] [d] = [0],   K(s,t) = |s-t|^3/12
//
// Source: Wahba (1990), Spline Models for Observational Data, chapter 1.
type dense struct {
	x   []float64
	lam float64
	inv mat.Dense
	n   int
}

func kernel3(s, t float64) float64 { d := math.Abs(s - t); return d * d * d / 12 }

func newDense(x, w []float64, lam float64) *dense {
	n := len(x)
	a := mat.NewDense(n+2, n+2, nil)
	for i := range n {
		for j := range n {
			a.Set(i, j, kernel3(x[i], x[j])/lam)
		}
		a.Set(i, i, a.At(i, i)+1/w[i])
		a.Set(i, n, 1)
		a.Set(n, i, 1)
		a.Set(i, n+1, x[i])
		a.Set(n+1, i, x[i])
	}
	d := &dense{x: x, lam: lam, n: n}
	if err := d.inv.Inverse(a); err != nil {
		panic(err)
	}
	return d
}

// functional is the covariance with the data and the line, and with itself,
// of a sum of weighted evaluations.
func (d *dense) variance(at, wt []float64) float64 {
	k := mat.NewVecDense(d.n+2, nil)
	self := 0.0
	for i := range at {
		for j := range d.x {
			k.SetVec(j, k.AtVec(j)+wt[i]*kernel3(at[i], d.x[j])/d.lam)
		}
		k.SetVec(d.n, k.AtVec(d.n)+wt[i])
		k.SetVec(d.n+1, k.AtVec(d.n+1)+wt[i]*at[i])
		for j := range at {
			self += wt[i] * wt[j] * kernel3(at[i], at[j]) / d.lam
		}
	}
	var v mat.VecDense
	v.MulVec(&d.inv, k)
	return self - mat.Dot(k, &v)
}

// gauss spreads [a, b], cut at the knots, into nodes of Gauss's 3-point rule
// on 60 pieces each.
func gauss(a, b float64, knots []float64) (at, wt []float64) {
	cuts := []float64{a}
	for _, k := range knots {
		if k > a && k < b {
			cuts = append(cuts, k)
		}
	}
	cuts = append(cuts, b)
	r := math.Sqrt(0.6)
	for c := 0; c+1 < len(cuts); c++ {
		const pieces = 60
		h := (cuts[c+1] - cuts[c]) / pieces
		for p := range pieces {
			mid := cuts[c] + (float64(p)+0.5)*h
			at = append(at, mid-r*h/2, mid, mid+r*h/2)
			wt = append(wt, 5*h/18, 8*h/18, 5*h/18)
		}
	}
	return at, wt
}

// TestPosteriorDense compares variances of value, slope (by differences, good
// to about 1%) and area, anywhere,
// with the dense oracle.
func TestPosteriorDense(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	for trial := range 12 {
		n := 4 + trial
		x, y, w := make([]float64, n), make([]float64, n), make([]float64, n)
		for i := range x {
			x[i] = float64(i) + 0.7*rng.Float64()
			y[i] = math.Sin(x[i]) + 0.3*rng.NormFloat64()
			w[i] = 0.3 + rng.Float64()
		}
		d, err := Collapse(x, y, w)
		if err != nil {
			t.Fatal(err)
		}
		lam := math.Exp(6*rng.Float64() - 4)
		var ws Workspace
		f := ws.Fit(d, lam)
		o := newDense(x, w, lam)
		for _, at := range []float64{x[0] - 1.3, x[0], x[1], 0.3*x[1] + 0.7*x[2], x[n-1] - 0.1, x[n-1], x[n-1] + 2} {
			m := f.Posterior(at)
			near(t, "variance of the value", m.VarValue, o.variance([]float64{at}, []float64{1}), 1e-7, m.VarValue)
			const h = 1e-3
			num := o.variance([]float64{at + h, at - h}, []float64{0.5 / h, -0.5 / h})
			near(t, "variance of the slope", m.VarSlope, num, 1e-2, m.VarSlope)
			cov := (o.variance([]float64{at, at + h, at - h}, []float64{1, 0.5 / h, -0.5 / h}) - num - m.VarValue) / 2
			near(t, "covariance", m.Cov, cov, 1e-2, math.Sqrt(m.VarSlope*m.VarValue))
		}
		for _, ab := range [][2]float64{{x[0], x[n-1]}, {x[0] + 0.2, x[2] + 0.1}, {x[1] + 0.05, x[1] + 0.15}, {x[0] - 2, x[0] - 1},
			{x[0] - 1, x[1]}, {x[n-2] + 0.1, x[n-1] + 3}, {x[n-1] + 1, x[n-1] + 2}, {x[0] - 1, x[n-1] + 1}} {
			v, variance := f.Area(ab[0], ab[1])
			at, wt := gauss(ab[0], ab[1], x)
			want := 0.0
			for i := range at {
				g, _, _ := f.At(at[i])
				want += wt[i] * g
			}
			near(t, "area", v, want, 1e-10, math.Abs(v)+ab[1]-ab[0])
			near(t, "variance of the area", variance, o.variance(at, wt), 1e-6, variance)
		}
	}
}
