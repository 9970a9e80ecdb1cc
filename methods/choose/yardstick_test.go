package choose

import (
	"fmt"
	"math"
	"testing"

	"batten/methods/spline"
)

// textbook computes GCV at one lambda as textbooks do: Reinsch's band form with
// fresh memory each time, LDL' of (R + lambda Q'W^-1 Q), and the inverse's
// central bands for the leverages.
// Source: Green and Silverman (1994), Nonparametric Regression and Generalized
// Linear Models, sections 2.3.3 and 3.2.2; Hutchinson and de Hoog (1985).
func textbook(x, y, w []float64, lambda float64) (gcv, edf float64) {
	n := len(x)
	k := n - 2
	h := make([]float64, n-1)
	for i := range h {
		h[i] = x[i+1] - x[i]
	}
	q := make([][3]float64, k)
	for j := range q {
		q[j] = [3]float64{1 / h[j], -1/h[j] - 1/h[j+1], 1 / h[j+1]}
	}
	b0, b1, b2 := make([]float64, k), make([]float64, k), make([]float64, k)
	rhs := make([]float64, k)
	for j := range k {
		b0[j] = (h[j]+h[j+1])/3 + lambda*(q[j][0]*q[j][0]/w[j]+q[j][1]*q[j][1]/w[j+1]+q[j][2]*q[j][2]/w[j+2])
		if j+1 < k {
			b1[j] = h[j+1]/6 + lambda*(q[j][1]*q[j+1][0]/w[j+1]+q[j][2]*q[j+1][1]/w[j+2])
		}
		if j+2 < k {
			b2[j] = lambda * q[j][2] * q[j+2][0] / w[j+2]
		}
		rhs[j] = q[j][0]*y[j] + q[j][1]*y[j+1] + q[j][2]*y[j+2]
	}
	d, l1, l2 := make([]float64, k), make([]float64, k), make([]float64, k)
	for j := range k {
		d[j] = b0[j]
		off := b1[j]
		if j > 0 {
			d[j] -= l1[j-1] * l1[j-1] * d[j-1]
			off -= l1[j-1] * l2[j-1] * d[j-1]
			rhs[j] -= l1[j-1] * rhs[j-1]
		}
		if j > 1 {
			d[j] -= l2[j-2] * l2[j-2] * d[j-2]
			rhs[j] -= l2[j-2] * rhs[j-2]
		}
		l1[j], l2[j] = off/d[j], b2[j]/d[j]
	}
	g := make([]float64, k)
	for j := k - 1; j >= 0; j-- {
		g[j] = rhs[j] / d[j]
		if j+1 < k {
			g[j] -= l1[j] * g[j+1]
		}
		if j+2 < k {
			g[j] -= l2[j] * g[j+2]
		}
	}
	v0, v1, v2 := make([]float64, k+2), make([]float64, k+2), make([]float64, k+2)
	for j := k - 1; j >= 0; j-- {
		v1[j] = -l1[j]*v0[j+1] - l2[j]*v1[j+1]
		v2[j] = -l1[j]*v1[j+1] - l2[j]*v0[j+2]
		v0[j] = 1/d[j] - l1[j]*v1[j] - l2[j]*v2[j]
	}
	rss, trace := 0.0, 0.0
	for i := range n {
		var s, r float64
		at := func(j int) float64 {
			if j < 0 || j >= k {
				return 0
			}
			return q[j][i-j]
		}
		c0, c1, c2 := at(i-2), at(i-1), at(i)
		if i >= 2 && i-2 < k {
			s += c0*c0*v0[i-2] + 2*c0*c1*v1[i-2] + 2*c0*c2*v2[i-2]
			r += c0 * g[i-2]
		}
		if i >= 1 && i-1 < k {
			s += c1*c1*v0[i-1] + 2*c1*c2*v1[i-1]
			r += c1 * g[i-1]
		}
		if i < k {
			s += c2 * c2 * v0[i]
			r += c2 * g[i]
		}
		r *= lambda / w[i]
		rss += w[i] * r * r
		trace += lambda / w[i] * s
	}
	return float64(n) * rss / (trace * trace), float64(n) - trace
}

// yardstick is a textbook's choice: the best of 30 lambdas.
func yardstick(x, y, w []float64) float64 {
	best, at := math.Inf(1), 0.0
	r := x[len(x)-1] - x[0]
	for k := range 30 {
		lambda := r * r * r * math.Pow(10, -7+9*float64(k)/29)
		if g, _ := textbook(x, y, w, lambda); g < best {
			best, at = g, lambda
		}
	}
	return at
}

// TestYardstick: what the speeds are compared with is right.
func TestYardstick(t *testing.T) {
	x, y := noisy(50, 3)
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	for _, lambda := range []float64{0.01, 1, 50} {
		gcv, edf := textbook(d.X, d.Y, d.W, lambda)
		c := ws.Scores(d, lambda)
		near(t, "edf", edf, c.EDF, 1e-9)
		near(t, "gcv", gcv, c.GCV(1), 1e-9)
	}
}

// BenchmarkYardstick times the textbook's choice beside ours, on the same data
// in the same minute.
func BenchmarkYardstick(b *testing.B) {
	for _, n := range []int{50, 200} {
		x, y := noisy(n, 3)
		d, err := spline.Collapse(x, y, nil)
		if err != nil {
			b.Fatal(err)
		}
		var ws spline.Workspace
		b.Run(fmt.Sprintf("textbook/n=%d", n), func(b *testing.B) {
			for b.Loop() {
				yardstick(d.X, d.Y, d.W)
			}
			b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "fits/s")
		})
		b.Run(fmt.Sprintf("batten/n=%d", n), func(b *testing.B) {
			for b.Loop() {
				if _, err := Lambda(&ws, d, Rule{Name: GCV}); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(b.N)/b.Elapsed().Seconds(), "fits/s")
		})
	}
}
