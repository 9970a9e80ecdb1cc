package reading

import (
	"math"
	"testing"

	"batten/methods/spline"
	"batten/testdata/reference"
)

// TestReferencePlaces compares crossings and maxima with 96-digit values.
func TestReferencePlaces(t *testing.T) {
	var ws spline.Workspace
	crossings, maxima := 0, 0
	for _, name := range reference.Names {
		for _, s := range reference.Load(t, name) {
			d, err := spline.Collapse(s.X, s.Y, s.W)
			if err != nil {
				t.Fatal(err)
			}
			span := d.X[len(d.X)-1] - d.X[0]
			for _, c := range s.Cases {
				f := ws.Fit(d, c.Lambda)
				if c.Crossings != nil {
					got := Crossings(&f.Curve, c.Crossings.Level)
					if len(got) != c.Crossings.Count {
						t.Errorf("%s lambda %g: %d crossings of %g, want %d", s.Name, c.Lambda, len(got), c.Crossings.Level, c.Crossings.Count)
						continue
					}
					for k, want := range c.Crossings.X {
						crossings++
						// a flat crossing moves by the curve's rounding over its slope
						_, slope, _ := f.At(want)
						tol := 1e-12*span + 1e-11*math.Abs(c.Crossings.Level)/math.Max(math.Abs(slope), 1e-6)
						if math.Abs(got[k].X-want) > tol {
							t.Errorf("%s lambda %g: crossing %d at %.15g, want %.15g", s.Name, c.Lambda, k, got[k].X, want)
						}
					}
				}
				if c.Max != nil {
					maxima++
					r := Take(f, 0.95, Ask{Kind: Maximum})
					if math.Abs(r[0].Value-c.Max.G) > 1e-11*(math.Abs(c.Max.G)+1) || math.Abs(r[0].At-c.Max.X) > 1e-6*span {
						t.Errorf("%s lambda %g: maximum %.15g at %.10g, want %.15g at %.10g", s.Name, c.Lambda, r[0].Value, r[0].At, c.Max.G, c.Max.X)
					}
					if (r[0].Note == AtEnd) == c.Max.Interior {
						t.Errorf("%s lambda %g: note %q, interior %v", s.Name, c.Lambda, r[0].Note, c.Max.Interior)
					}
				}
			}
		}
	}
	t.Logf("%d crossings, %d maxima", crossings, maxima)
	if crossings < 100 || maxima < 100 {
		t.Error("too few places were compared")
	}
}
