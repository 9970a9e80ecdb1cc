package reading

import (
	"math"
	"math/rand/v2"
	"testing"

	"batten/methods/spline"
)

func ordered(t *testing.T, order, n int, seed uint64, lambda float64) *spline.Fit {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 21))
	d := &spline.Data{Penalty: order}
	x, y := make([]float64, n), make([]float64, n)
	for i := range x {
		x[i] = (float64(i) + 0.8*rng.Float64()) / float64(n) * 10
		y[i] = 3*math.Sin(x[i]) + 0.5*rng.NormFloat64()
	}
	if err := d.Reset(x, y, nil); err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	return ws.Fit(d, lambda)
}

// TestPlacesOfEveryOrder: crossings, extremes and the steepest place against a
// fine scan of the curve.
func TestPlacesOfEveryOrder(t *testing.T) {
	for order, lambda := range map[int]float64{1: 0.4, 2: 0.05, 3: 0.01} {
		for seed := range uint64(20) {
			f := ordered(t, order, 40, seed, lambda)
			lo, hi := f.Knots[0], f.Knots[len(f.Knots)-1]
			const fine = 40_000
			crossings, best, at, steep := 0, math.Inf(-1), 0.0, 0.0
			last := 0.0
			for k := range fine + 1 {
				x := lo + (hi-lo)*float64(k)/fine
				v, s, _ := f.At(x)
				if k > 0 && (v-0.5)*(last-0.5) < 0 {
					crossings++
				}
				last = v
				if v > best {
					best, at = v, x
				}
				steep = max(steep, math.Abs(s))
			}
			got := Take(f, 0.95, Ask{Kind: Crossing, At: 0.5, All: true})
			if len(got) != crossings && !(crossings == 0 && got[0].Note == None) {
				t.Errorf("order %d, seed %d: %d crossings, a scan finds %d", order, seed, len(got), crossings)
			}
			for _, c := range got {
				if v, _, _ := f.At(c.Value); crossings > 0 && math.Abs(v-0.5) > 1e-9 {
					t.Errorf("order %d, seed %d: the curve is %g at a crossing of 0.5", order, seed, v)
				}
			}
			m := Take(f, 0.95, Ask{Kind: Maximum, Grid: grid(lo, hi, 101), Group: "g"})
			if m[0].Value < best-1e-12 || m[0].Value > best+1e-4 || math.Abs(m[1].Value-at) > 2e-2 {
				t.Errorf("order %d, seed %d: maximum %g at %g, a scan finds %g at %g", order, seed, m[0].Value, m[1].Value, best, at)
			}
			if !(m[1].Lower <= m[1].Value && m[1].Value <= m[1].Upper) {
				t.Errorf("order %d, seed %d: place %+v", order, seed, m[1])
			}
			if order == 1 {
				continue
			}
			s := Take(f, 0.95, Ask{Kind: Steepest, Grid: grid(lo, hi, 101), Group: "g"})
			if v := math.Abs(s[0].Value); v < steep-1e-9 || v > steep*(1+1e-4) {
				t.Errorf("order %d, seed %d: steepest %g, a scan finds %g", order, seed, v, steep)
			}
		}
	}
	b := Take(ordered(t, 3, 60, 1, 0.01), 0.95, Ask{Kind: Bend, At: 4})[0]
	if !(b.Lower < b.Value && b.Value < b.Upper) || math.IsInf(b.Upper, 0) {
		t.Errorf("curvature %+v", b)
	}
}

// TestBandOfOrderOne: the simultaneous band of a curve without slope comes from
// draws: the same again for the same seed and group, and wider than pointwise.
func TestBandOfOrderOne(t *testing.T) {
	f := ordered(t, 1, 50, 3, 0.4)
	xs := grid(1, 9, 31)
	b := Band{Level: 0.95, Simultaneous: true, Seed: 5, Group: "g"}
	p, s, again := Tabulate(f, Band{Level: 0.95}, xs, nil), Tabulate(f, b, xs, nil), Tabulate(f, b, xs, nil)
	for i := range xs {
		ratio := (s[i].Upper - s[i].Value) / (p[i].Upper - p[i].Value)
		if ratio < 1.3 || ratio > 2.2 || s[i] != again[i] {
			t.Fatalf("simultaneous over pointwise %g", ratio)
		}
	}
	c := Difference(f, ordered(t, 1, 50, 4, 0.4), b, xs)
	if !(c.None.P > 0 && c.None.P <= 1 && c.Same.P > 0 && c.Same.P <= 1) {
		t.Errorf("tests %+v %+v", c.None, c.Same)
	}
}
