package diagnose

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"batten/methods/spline"
)

// fitted draws a group with errors that follow e_i = rho e_(i-1) + noise about
// a smooth curve, and fits it with about the edf that the curve needs.
func fitted(t *testing.T, n int, rho float64, seed uint64) *spline.Fit {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 21))
	x, y := make([]float64, n), make([]float64, n)
	e := 0.0
	for i := range x {
		e = rho*e + math.Sqrt(1-rho*rho)*rng.NormFloat64()
		x[i] = float64(i)
		y[i] = 3*math.Sin(4*float64(i)/float64(n)) + 0.5*e
	}
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	return ws.Fit(d, 2e-4*math.Pow(float64(n), 4))
}

// TestAutocorrelated: dependent errors are flagged, independent ones seldom.
func TestAutocorrelated(t *testing.T) {
	count := func(rho float64) (n int) {
		for seed := range uint64(200) {
			if r := Residuals(fitted(t, 80, rho, seed)); slices.Contains(r.Flags, Autocorrelated) {
				n++
			}
		}
		return n
	}
	if n := count(0); n > 12 {
		t.Errorf("%d of 200 groups with independent errors are flagged", n)
	}
	if n := count(0.6); n < 150 {
		t.Errorf("only %d of 200 groups with serially dependent errors are flagged", n)
	}
}

// TestLeverageAndDistinct: a row far off is flagged, few x are.
func TestLeverageAndDistinct(t *testing.T) {
	x, y := make([]float64, 30), make([]float64, 30)
	for i := range x {
		x[i], y[i] = float64(i)/10, float64(i%3)
	}
	x[29] = 40
	d, err := spline.Collapse(x, y, nil)
	if err != nil {
		t.Fatal(err)
	}
	var ws spline.Workspace
	r := Residuals(ws.Fit(d, 1))
	if !slices.Contains(r.Flags, HighLeverage) || r.MaxLeverage < 0.9 {
		t.Errorf("%+v", r)
	}
	if d, err = spline.Collapse(x[:5], y[:5], nil); err != nil {
		t.Fatal(err)
	}
	if r = Residuals(ws.Fit(d, 1)); !slices.Contains(r.Flags, FewDistinct) {
		t.Errorf("%+v", r)
	}
	if r = Residuals(fitted(t, 80, 0, 1)); slices.Contains(r.Flags, HighLeverage) || slices.Contains(r.Flags, FewDistinct) {
		t.Errorf("an ordinary group: %+v", r)
	}
}
