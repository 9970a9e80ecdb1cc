package spline

import (
	"math"
	"testing"

	"batten/testdata/reference"
)

// close holds got to want within tol, relative to scale.
func near(t *testing.T, what string, got, want, tol, scale float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tol*math.Max(math.Abs(scale), 1e-300)) {
		t.Errorf("%s = %.16g, want %.16g (off by %.2g, allowed %.2g)", what, got, want, math.Abs(got-want)/math.Abs(scale), tol)
	}
}

// TestReference compares fits at given lambda with the 96-digit values of
// testdata/reference (printed to 15 digits, all trusted).
func TestReference(t *testing.T) {
	const tol = 2e-12
	n := 0
	for _, name := range reference.Names {
		for _, s := range reference.Load(t, name) {
			d, err := Collapse(s.X, s.Y, s.W)
			if err != nil {
				t.Fatalf("%s: %v", s.Name, err)
			}
			size := 0.0
			for _, y := range s.Y {
				size = math.Max(size, math.Abs(y))
			}
			var ws Workspace
			for _, c := range s.Cases {
				n++
				f := ws.Fit(d, c.Lambda)
				at := s.Name
				near(t, at+" edf", f.EDF, c.EDF, tol, c.EDF)
				near(t, at+" n-edf", f.NEDF, float64(s.N)-c.EDF, tol, c.EDF)
				near(t, at+" rss", f.RSS, c.RSS, tol, c.RSS)
				near(t, at+" roughness", f.Roughness, c.Roughness, tol, c.Roughness)
				near(t, at+" gcv", f.GCV(1), c.GCV, tol, c.GCV)
				near(t, at+" loocv", f.LOOCV, c.LOOCV, tol, c.LOOCV)
				near(t, at+" reml", f.REML, c.REML, tol, math.Abs(c.REML)+float64(s.N))
				near(t, at+" sigma2", f.Sigma()*f.Sigma(), c.Sigma2, tol, c.Sigma2)
				lev := map[int]float64{}
				for k, row := range d.Order {
					lev[s.Row[row]] = f.RowLeverage(k)
				}
				for _, l := range c.Leverage {
					near(t, at+" leverage", lev[l.Row], l.H, tol, l.H)
				}
				slope := 0.0
				for _, p := range c.Fit {
					slope = math.Max(slope, math.Abs(p.DG))
				}
				for _, p := range c.Fit {
					g, dg, _ := f.At(p.X)
					near(t, at+" g", g, p.G, tol, size+math.Abs(p.G))
					near(t, at+" g'", dg, p.DG, 10*tol, slope)
				}
				const z = 1.959963984540054
				for _, p := range c.HalfWidth {
					v := f.Posterior(p.X).VarValue
					near(t, at+" half-width", z*f.Sigma()*math.Sqrt(v), p.HW, tol, p.HW)
				}
			}
			line := ws.Fit(d, math.Inf(1))
			g0, slope, _ := line.At(0)
			reach := size / (d.X[len(d.X)-1] - d.X[0]) // what a slope can be known against
			near(t, s.Name+" line's slope", slope, s.LineLimit.Slope, 1e-12, math.Max(math.Abs(s.LineLimit.Slope), reach))
			near(t, s.Name+" line's intercept", g0, s.LineLimit.Intercept, 1e-12, math.Abs(s.LineLimit.Intercept)+size)
			near(t, s.Name+" line's rss", line.RSS, s.LineLimit.RSS, 1e-11, s.LineLimit.RSS)
		}
	}
	t.Logf("%d cases", n)
	if n < 200 {
		t.Errorf("only %d cases were compared", n)
	}
}
