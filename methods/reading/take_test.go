package reading

import (
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"batten/methods/elementary"
	"batten/methods/spline"
)

// hump is a seeded group that rises and falls, fitted at a fixed lambda. It
// calls no function whose bits differ between processors.
func hump(t testing.TB, n int, seed uint64) *spline.Fit {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 5))
	x, y := make([]float64, n), make([]float64, n)
	for i := range x {
		x[i] = 10 * float64(i) / float64(n-1)
		u := x[i] - 5
		y[i] = 30 - float64(u*u) + float64(2*(rng.Float64()-0.5))
	}
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	return ws.Fit(d, 0.8)
}

func close(t *testing.T, what string, got, want, tol float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol) {
		t.Errorf("%s = %.15g, want %.15g", what, got, want)
	}
}

// TestIntervals: each interval is what its definition says, checked at its
// ends against the fit's posterior.
func TestIntervals(t *testing.T) {
	f := hump(t, 40, 1)
	q := elementary.StudentQuantile(0.975, f.NEDF) * f.Sigma()
	m := f.Posterior(3.3)
	v := Take(f, 0.95, Ask{Kind: Value, At: 3.3})[0]
	close(t, "value", v.Value, m.Value, 0)
	close(t, "upper", v.Upper, m.Value+q*math.Sqrt(m.VarValue), 1e-12)
	s := Take(f, 0.95, Ask{Kind: Slope, At: 3.3})[0]
	close(t, "slope", s.Value, m.Slope, 0)
	close(t, "lower", s.Lower, m.Slope-q*math.Sqrt(m.VarSlope), 1e-12)

	both := Take(f, 0.95, Ask{Kind: Crossing, At: 20, All: true})
	if len(both) != 2 {
		t.Fatalf("%d crossings", len(both))
	}
	for _, c := range both {
		g, _, _ := f.At(c.Value)
		close(t, "the curve at a crossing", g, 20, 1e-10)
		for _, end := range []float64{c.Lower, c.Upper} {
			m := f.Posterior(end)
			close(t, "band and level at the interval's end", math.Abs(m.Value-20), q*math.Sqrt(m.VarValue), 1e-9)
		}
		if !(c.Lower < c.Value && c.Value < c.Upper) {
			t.Errorf("%+v", c)
		}
	}
	if r := Take(f, 0.95, Ask{Kind: Crossing, At: 20, Direction: "falling"}); len(r) != 1 || r[0].Value != both[1].Value {
		t.Errorf("falling: %+v", r)
	}
	if r := Take(f, 0.95, Ask{Kind: Crossing, At: 20}); len(r) != 1 || r[0].Value != both[0].Value {
		t.Errorf("first: %+v", r)
	}
	if r := Take(f, 0.95, Ask{Kind: Crossing, At: 99})[0]; !math.IsNaN(r.Value) || r.Note != None {
		t.Errorf("none: %+v", r)
	}
	peak := Take(f, 0.95, Ask{Kind: Maximum})
	_, slope, bend := f.At(peak[1].Value)
	close(t, "slope at the peak", slope, 0, 1e-9)
	if bend >= 0 || peak[0].Note != "" || peak[0].At != peak[1].Value {
		t.Errorf("peak: %+v", peak)
	}
	for _, end := range []float64{peak[1].Lower, peak[1].Upper} {
		m := f.Posterior(end)
		close(t, "slope's band at the interval's end", math.Abs(m.Slope), q*math.Sqrt(m.VarSlope), 1e-9)
	}
	low := Take(f, 0.95, Ask{Kind: Minimum})
	if low[0].Note != AtEnd || !math.IsInf(low[1].Lower, 0) && !math.IsInf(low[1].Upper, 0) {
		t.Errorf("minimum: %+v", low)
	}
	steep := Take(f, 0.95, Ask{Kind: Steepest, Direction: "falling"})
	for x := 0.0; x <= 10; x += 0.01 {
		if _, s, _ := f.At(x); s < steep[0].Value-1e-9 {
			t.Fatalf("at %g the curve falls faster (%g) than the steepest fall %+v", x, s, steep[0])
		}
	}
	// the area is additive, and its interval is symmetric
	a, b, c := Take(f, 0.95, Ask{Kind: Area, From: 0, To: 4})[0], Take(f, 0.95, Ask{Kind: Area, From: 4, To: 9})[0], Take(f, 0.95, Ask{Kind: Area, From: 0, To: 9})[0]
	close(t, "areas add", a.Value+b.Value, c.Value, 1e-10)
	close(t, "symmetric", c.Upper-c.Value, c.Value-c.Lower, 1e-10)
	if r := Take(f, 0.95, Ask{Kind: Value, At: 12})[0]; !r.Extrapolated || r.Note == "" || r.Upper-r.Lower <= v.Upper-v.Lower {
		t.Errorf("beyond the data: %+v", r)
	}
}

// TestOpenEnds: where the data end before the interval does, it is open.
func TestOpenEnds(t *testing.T) {
	f := hump(t, 40, 2)
	g, _, _ := f.At(9.97)
	r := Take(f, 0.95, Ask{Kind: Crossing, At: g, Direction: "falling"})[0]
	if !math.IsInf(r.Upper, 1) || math.IsInf(r.Lower, 0) || !strings.HasPrefix(r.Note, "open above") {
		t.Errorf("%+v", r)
	}
}

// TestBand: a new reading has sigma^2 over its weight more.
func TestBand(t *testing.T) {
	f := hump(t, 40, 3)
	xs := []float64{-1, 0, 2.2, 10, 11}
	curve := Tabulate(f, Band{Level: 0.9}, xs, nil)
	next := Tabulate(f, Band{Level: 0.9, NewReading: true, Weight: 4}, xs, nil)
	s2 := f.Sigma() * f.Sigma()
	for i := range xs {
		close(t, "variance", next[i].SE*next[i].SE, curve[i].SE*curve[i].SE+s2/4, 1e-12)
		if curve[i].Extrapolated != (xs[i] < 0 || xs[i] > 10) {
			t.Errorf("%+v", curve[i])
		}
	}
}

// TestExactData: a perfect line has no scatter; nothing is NaN.
func TestExactData(t *testing.T) {
	x := []float64{0, 1, 2, 3, 4, 5}
	y := []float64{1, 3, 5, 7, 9, 11}
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	f := ws.Fit(d, math.Inf(1))
	for _, a := range []Ask{{Kind: Value, At: 2}, {Kind: Slope, At: 2}, {Kind: Crossing, At: 6}, {Kind: Maximum}, {Kind: Area, From: 0, To: 5}, {Kind: Steepest}} {
		for _, r := range Take(f, 0.95, a) {
			if math.IsNaN(r.Value) || r.Kind != "steepest_at" && (math.IsNaN(r.Lower) || math.IsNaN(r.Upper)) {
				t.Errorf("%+v", r)
			}
		}
	}
	close(t, "crossing", Take(f, 0.95, Ask{Kind: Crossing, At: 6})[0].Value, 2.5, 1e-12)
	close(t, "area", Take(f, 0.95, Ask{Kind: Area, From: 0, To: 5})[0].Value, 30, 1e-10)
}

// TestDifference: variances add, and the sign turns with the order.
func TestDifference(t *testing.T) {
	a, b := hump(t, 40, 4), hump(t, 25, 5)
	xs := []float64{1, 4, 9}
	d, e := Difference(a, b, Band{Level: 0.95, Seed: 1, Group: "g"}, xs).Grid, Difference(b, a, Band{Level: 0.95, Seed: 1, Group: "g"}, xs).Grid
	pa, pb := Tabulate(a, Band{Level: 0.95}, xs, nil), Tabulate(b, Band{Level: 0.95}, xs, nil)
	for i := range xs {
		close(t, "difference", d[i].Value, pa[i].Value-pb[i].Value, 1e-12)
		close(t, "se", d[i].SE, math.Hypot(pa[i].SE, pb[i].SE), 1e-12)
		close(t, "other order", d[i].Lower, -e[i].Upper, 1e-12)
		// Welch's quantile lies between those of the normal and of the fewer df
		q := (d[i].Upper - d[i].Value) / d[i].SE
		if q < 1.9599 || q > elementary.StudentQuantile(0.975, min(a.NEDF, b.NEDF))+1e-9 {
			t.Errorf("quantile %g", q)
		}
	}
}

// TestKnownBytes holds readings to known bits. It runs on other processors
// too.
func TestKnownBytes(t *testing.T) {
	h := sha256.New()
	put := func(v ...float64) {
		for _, x := range v {
			_ = binary.Write(h, binary.LittleEndian, x)
		}
	}
	for seed := range uint64(6) {
		f := hump(t, 20+7*int(seed), seed)
		for _, p := range Tabulate(f, Band{Level: 0.95}, []float64{-1, 0, 0.3, 5, 9.99, 12}, nil) {
			put(p.Value, p.SE, p.Lower, p.Upper, p.Slope)
		}
		for _, a := range []Ask{{Kind: Value, At: 2}, {Kind: Slope, At: 2}, {Kind: Crossing, At: 20, All: true}, {Kind: Maximum}, {Kind: Minimum},
			{Kind: Area, From: -1, To: 7}, {Kind: Steepest, Grid: grid(0, 10, 21), Seed: 3, Group: "g"}, {Kind: Mean, From: 1, To: 3},
			{Kind: Change, From: 1, To: 3}, {Kind: Surely, Direction: "rising", Grid: grid(0, 10, 21), Seed: 3, Group: "g"}} {
			for _, r := range Take(f, 0.95, a) {
				put(r.At, r.Value, r.Lower, r.Upper)
			}
		}
		c := Difference(f, hump(t, 31, seed+50), Band{Level: 0.9, Simultaneous: true, Seed: 4, Group: "g"}, grid(1, 9, 15))
		put(c.None.P, c.None.Largest, c.Same.P, c.Same.Largest, c.Grid[3].Lower)
	}
	const want, version = "6ae251bfbc44647f5a90634da6c69c95", 1
	got := hex.EncodeToString(h.Sum(nil))[:32]
	switch {
	case got != want && Version == version:
		t.Errorf("the bits of readings changed (%s, expected %s): raise Version, and then this test's", got, want)
	case Version != version:
		t.Errorf("Version is %d, this test knows %d: set both, and want to %s", Version, version, got)
	}
}
