package reading

import (
	"math"
	"slices"
	"testing"

	"batten/methods/elementary"
	"batten/methods/spline"
)

func grid(lo, hi float64, n int) []float64 {
	out := make([]float64, n)
	for i := range out {
		out[i] = lo + (hi-lo)*float64(i)/float64(n-1)
	}
	return out
}

// TestTubeAgainstDraws: the critical value is that of the largest of many
// curves drawn from the posterior, or a little above it (the formula is an upper
// bound), for smooth and rough curves, within the data and beyond them.
func TestTubeAgainstDraws(t *testing.T) {
	for seed := range uint64(4) {
		f := hump(t, 30+20*int(seed), seed)
		for _, stretch := range [][2]float64{{0.2, 9.8}, {3, 5}, {-4, 13}} {
			r := newRuler(f, 0.95)
			kappa := length(f.Knots, stretch[0], stretch[1], func(x float64) float64 {
				m := f.Posterior(x)
				return speed(&m)
			})
			got := critical(kappa, 1e9, 0.95) // sigma known, as in the draws
			xs := grid(stretch[0], stretch[1], 600)
			se := make([]float64, len(xs))
			for i, x := range xs {
				m := f.Posterior(x)
				se[i] = math.Sqrt(m.VarValue)
			}
			var tops []float64
			for rep := range 4 {
				r.paths("test", int64(rep), "", xs, func(value, _ []float64) {
					top := 0.0
					for i, v := range value {
						top = max(top, math.Abs(v)/se[i])
					}
					tops = append(tops, top)
				})
			}
			slices.Sort(tops)
			want := quantile(tops, 0.95)
			t.Logf("seed %d, stretch %v: kappa %.3f, tube %.4f, draws %.4f", seed, stretch, kappa, got, want)
			if got < want-0.04 || got > want+0.06 {
				t.Errorf("seed %d, stretch %v: tube %.4f, draws %.4f", seed, stretch, got, want)
			}
		}
	}
}

// TestLength: the path's length does not depend on how it is cut: against
// Simpson's rule with many points.
func TestLength(t *testing.T) {
	f := hump(t, 40, 3)
	rate := func(x float64) float64 {
		m := f.Posterior(x)
		return speed(&m)
	}
	for _, s := range [][2]float64{{0.3, 9.1}, {-6, 14}, {-6, -2}, {11, 20}, {4, 4.01}, {-1, 5}, {5, 12}} {
		cuts := slices.Clone(f.Knots)
		want := 0.0
		ends := []float64{s[0]}
		for _, c := range cuts {
			if c > s[0] && c < s[1] {
				ends = append(ends, c)
			}
		}
		ends = append(ends, s[1])
		for i := 0; i+1 < len(ends); i++ {
			const n = 400
			a, h := ends[i], (ends[i+1]-ends[i])/n
			for k := range n {
				want += h / 6 * (rate(a+float64(k)*h) + 4*rate(a+(float64(k)+0.5)*h) + rate(a+float64(k+1)*h))
			}
		}
		close(t, "length", length(f.Knots, s[0], s[1], rate), want, 2e-3*want)
	}
}

// TestSimultaneous: the band is wider than the pointwise one by one factor, the
// same at every x.
func TestSimultaneous(t *testing.T) {
	f := hump(t, 50, 1)
	xs := grid(0.5, 9.5, 41)
	p, s := Tabulate(f, Band{Level: 0.9}, xs, nil), Tabulate(f, Band{Level: 0.9, Simultaneous: true}, xs, nil)
	factor := (s[0].Upper - s[0].Value) / (p[0].Upper - p[0].Value)
	if factor < 1.2 || factor > 2.5 {
		t.Errorf("factor %g", factor)
	}
	for i := range xs {
		close(t, "factor", (s[i].Upper-s[i].Value)/(p[i].Upper-p[i].Value), factor, 1e-9)
		close(t, "value", s[i].Value, p[i].Value, 0)
	}
	if c, q := critical(0, 12, 0.95), elementary.StudentQuantile(0.975, 12); math.Abs(c-q) > 1e-9 {
		t.Errorf("over a stretch of no length %g, Student's quantile is %g", c, q)
	}
}

// TestHolm: the worked example of Holm's method with p = 0.01, 0.04, 0.03,
// 0.005 (common teaching example; R's p.adjust gives the same, from memory).
func TestHolm(t *testing.T) {
	nan := math.NaN()
	got := Holm([]float64{0.01, 0.04, nan, 0.03, 0.005})
	for i, want := range []float64{0.03, 0.06, nan, 0.06, 0.02} {
		if math.Abs(got[i]-want) > 1e-15 || math.IsNaN(want) != math.IsNaN(got[i]) {
			t.Errorf("adjusted %v", got)
		}
	}
}

// TestMeanAndChange: against the area, and against two values far apart.
func TestMeanAndChange(t *testing.T) {
	f := hump(t, 40, 2)
	area, mean := Take(f, 0.95, Ask{Kind: Area, From: 2, To: 6})[0], Take(f, 0.95, Ask{Kind: Mean, From: 2, To: 6})[0]
	close(t, "mean", mean.Value, area.Value/4, 1e-12)
	close(t, "lower", mean.Lower, area.Lower/4, 1e-12)
	ch, a, b := Take(f, 0.95, Ask{Kind: Change, From: 2, To: 7})[0], Take(f, 0.95, Ask{Kind: Value, At: 2})[0], Take(f, 0.95, Ask{Kind: Value, At: 7})[0]
	close(t, "change", ch.Value, b.Value-a.Value, 1e-12)
	wide := math.Hypot(b.Upper-b.Value, a.Upper-a.Value)
	if got := ch.Upper - ch.Value; math.Abs(got/wide-1) > 0.1 {
		t.Errorf("half-width of a change over a distance %g, of independent values %g", got, wide)
	}
	near := Take(f, 0.95, Ask{Kind: Change, From: 2, To: 2.001})[0]
	if got := (near.Upper - near.Lower) / 2; got > 0.01*wide {
		t.Errorf("half-width of a change over almost nothing: %g", got)
	}
}

// TestSurely: a clear hump surely rises before its top and falls after it, and
// says nothing of a flat line.
func TestSurely(t *testing.T) {
	f := hump(t, 80, 6)
	ask := Ask{Kind: Surely, Direction: "rising", Grid: grid(0, 10, 101), Group: "g"}
	up := Take(f, 0.95, ask)
	ask.Direction = "falling"
	down := Take(f, 0.95, ask)
	top := Take(f, 0.95, Ask{Kind: Maximum})[1]
	if len(up) == 0 || len(down) == 0 || up[0].Note == None || down[0].Note == None {
		t.Fatalf("rising %+v, falling %+v", up, down)
	}
	if up[len(up)-1].Upper > top.Upper || down[0].Lower < top.Lower {
		t.Errorf("rising %+v, falling %+v, top %+v", up, down, top)
	}
	var x, y []float64
	normal := elementary.Normals("flat", 1, "")
	for i := range 40 {
		x, y = append(x, float64(i)/4), append(y, normal())
	}
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	ask.Grid = grid(0, 9, 50)
	if r := Take(ws.Fit(d, 50), 0.95, ask); r[0].Note != None {
		t.Errorf("noise surely falls: %+v", r)
	}
}
