package choose

import (
	"math"
	"testing"

	"batten/methods/spline"
	"batten/testdata/reference"
)

// TestReferenceOptima compares chosen lambdas with 96-digit optima.
func TestReferenceOptima(t *testing.T) {
	var ws spline.Workspace
	worst := map[string]float64{}
	n := 0
	for _, name := range reference.Names {
		for _, s := range reference.Load(t, name) {
			d, err := spline.Collapse(s.X, s.Y, s.W)
			if err != nil {
				t.Fatal(err)
			}
			for _, r := range []struct {
				rule string
				want reference.Optimum
			}{{GCV, s.Optima.GCV}, {LOOCV, s.Optima.LOOCV}, {REML, s.Optima.REML}} {
				n++
				e, err := Lambda(&ws, d, Rule{Name: r.rule})
				if err != nil {
					t.Errorf("%s %s: %v", s.Name, r.rule, err)
					continue
				}
				dl := math.Abs(e.Chosen.Lambda/r.want.Lambda - 1)
				worst[r.rule] = math.Max(worst[r.rule], dl)
				// At an end the place is the bound itself, settled to 1e-9 in edf.
				tol := 1e-7
				if r.want.Where != "interior" {
					tol = 1e-6
				}
				if dl > tol {
					t.Errorf("%s %s: lambda = %.12g, want %.12g (%s; off by %.2g)", s.Name, r.rule, e.Chosen.Lambda, r.want.Lambda, r.want.Where, dl)
				}
				got := e.Chosen.Score
				scale := math.Abs(r.want.Value)
				if r.rule == REML {
					got, scale = e.Chosen.REML, scale+float64(s.N)
				}
				if r.rule != REML && math.Abs(got-r.want.Value) > 1e-9*scale {
					t.Errorf("%s %s: score = %.14g, want %.14g", s.Name, r.rule, got, r.want.Value)
				}
				if interior := r.want.Where == "interior"; interior {
					others := 0
					for _, m := range e.Minima {
						if m.End == "" && !m.Chosen {
							others++
						}
					}
					if others < len(r.want.Others) {
						t.Errorf("%s %s: %d other minima found, the reference has %d", s.Name, r.rule, others, len(r.want.Others))
					}
				}
			}
		}
	}
	t.Logf("%d choices; worst relative error of lambda: %v", n, worst)
	if n < 150 {
		t.Errorf("only %d choices were compared", n)
	}
}
