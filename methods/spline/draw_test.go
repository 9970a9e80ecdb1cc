package spline

import (
	"math"
	"math/rand/v2"
	"testing"
)

// law returns the linear map from normal deviates to a path: rows for values,
// then for slopes.
func law(p *Path, n int) [][]float64 {
	value, slope := make([]float64, n), make([]float64, n)
	used := 0
	p.Draw(func() float64 { used++; return 0 }, value, slope)
	rows := make([][]float64, 2*n)
	for i := range rows {
		rows[i] = make([]float64, used)
	}
	for z := range used {
		k := 0
		p.Draw(func() float64 {
			k++
			if k == z+1 {
				return 1
			}
			return 0
		}, value, slope)
		for i := range n {
			rows[i][z], rows[n+i][z] = value[i], slope[i]
		}
	}
	return rows
}

func dot(a, b []float64) (s float64) {
	for i := range a {
		s += a[i] * b[i]
	}
	return s
}

// TestPathLaw: draws have the posterior's variances at knots, between them and
// beyond the ends, and the variance of the integral over a stretch that Area
// gives by other means.
func TestPathLaw(t *testing.T) {
	var ws Workspace
	rng := rand.New(rand.NewPCG(9, 1))
	for trial := range 90 {
		order := 1 + trial/30
		n := 5 + rng.IntN(30)
		var x, y, w []float64
		for i := range n {
			x = append(x, float64(i)+0.9*rng.Float64())
			y = append(y, math.Cos(float64(i)/4)+0.2*rng.NormFloat64())
			w = append(w, math.Exp(3*rng.NormFloat64()))
		}
		d := &Data{Penalty: order}
		if err := d.Reset(x, y, w); err != nil {
			t.Fatal(err)
		}
		f := ws.Fit(d, math.Exp(12*rng.Float64()-4))
		xs := []float64{x[0] - 3, x[0] - 0.5, x[0], 0.5 * (x[0] + x[1]), x[2], x[2] + 0.01}
		for k := 0; k <= 40; k++ { // a stretch, finely
			xs = append(xs, x[2]+0.02+(x[n-2]-x[2])*float64(k)/40)
		}
		xs = append(xs, x[n-1], x[n-1]+2)
		if trial%3 == 0 {
			xs = xs[4:]
		}
		l := law(f.NewPath(xs), len(xs))
		for i, at := range xs {
			m := f.Posterior(at)
			for _, q := range []struct {
				what      string
				got, want float64
			}{{"value", dot(l[i], l[i]), m.VarValue}, {"slope", dot(l[len(xs)+i], l[len(xs)+i]), m.VarSlope},
				{"covariance", dot(l[i], l[len(xs)+i]), m.Cov}} {
				if order == 1 && q.what != "value" {
					continue
				}
				// order 3 solves 3 by 3 systems on the way, whose condition shows
				tol := []float64{1e-9, 1e-9, 1e-6}[order-1]
				if math.Abs(q.got-q.want) > tol*math.Abs(q.want)+10*tol*math.Sqrt(m.VarValue*m.VarSlope) {
					t.Fatalf("trial %d, x = %g: variance of the %s %.14g, want %.14g", trial, at, q.what, q.got, q.want)
				}
			}
		}
		for _, ij := range [][2]int{{0, 5}, {2, 3}, {7, 30}, {len(xs) - 1, 4}} {
			i, j := ij[0], ij[1]
			diff := make([]float64, len(l[0]))
			for z := range diff {
				diff[z] = l[j][z] - l[i][z]
			}
			v, got := f.Change(xs[i], xs[j])
			vi, _, _ := f.At(xs[i])
			vj, _, _ := f.At(xs[j])
			if want := dot(diff, diff); math.Abs(got-want) > []float64{1e-8, 1e-8, 1e-5}[order-1]*want || v != vj-vi && v != -(vi-vj) {
				t.Errorf("trial %d: change %g (variance %.12g), want %g (%.12g)", trial, v, got, vj-vi, want)
			}
		}
		if order == 1 {
			wiener(t, f, x[2], x[n-2])
			continue
		}
		// the integral over a stretch, by the corrected trapezoidal rule
		lo, hi := len(xs)-2-41, len(xs)-3
		h := xs[lo+1] - xs[lo]
		sum := make([]float64, len(l[0]))
		for i := lo; i <= hi; i++ {
			c := h
			if i == lo || i == hi {
				c = h / 2
			}
			for z := range sum {
				sum[z] += c * l[i][z]
				if i == lo {
					sum[z] += h * h / 12 * l[len(xs)+i][z]
				}
				if i == hi {
					sum[z] -= h * h / 12 * l[len(xs)+i][z]
				}
			}
		}
		_, want := f.Area(xs[lo], xs[hi])
		if got := dot(sum, sum); math.Abs(got-want) > 2e-3*want {
			t.Errorf("trial %d: variance of the area %.6g, want %.6g", trial, got, want)
		}
	}
}

// wiener holds the area of order 1 to the sum over many small stretches: the
// covariances come from draws' law.
func wiener(t *testing.T, f *Fit, lo, hi float64) {
	t.Helper()
	const n = 400
	xs := make([]float64, n+1)
	for i := range xs {
		xs[i] = lo + (hi-lo)*float64(i)/n
	}
	xs[n] = hi
	l := law(f.NewPath(xs), len(xs))
	h := (hi - lo) / n
	sum := make([]float64, len(l[0]))
	for i := range xs {
		c := h
		if i == 0 || i == n {
			c = h / 2
		}
		for z := range sum {
			sum[z] += c * l[i][z]
		}
	}
	v, want := f.Area(lo, hi)
	if got := dot(sum, sum); math.Abs(got-want) > 2e-3*want {
		t.Errorf("order 1: variance of the area %.6g, of the sum %.6g", want, got)
	}
	byRule := 0.0
	for i := range n {
		a, _, _ := f.At(xs[i])
		b, _, _ := f.At(xs[i+1])
		byRule += 0.5 * h * (a + b)
	}
	if math.Abs(v-byRule) > 1e-3*(1+math.Abs(v)) {
		t.Errorf("order 1: area %g, by the trapezoidal rule %g", v, byRule)
	}
}
