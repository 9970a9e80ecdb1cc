package spline

import (
	"fmt"
	"math"
	"os"
	"sort"
	"testing"

	"pgregory.net/rapid"
)

// hard is a group drawn over everything that an engine may stumble on.
type hard struct {
	x, y, w []float64
	share   float64 // of the way from 2 + 1e-6 to n - 1e-6 edf, on a scale that favours the ends
}

// drawHard draws x even, random or in clusters (gap ratios to 1e8), set off by up
// to 1e9 and scaled by 1e-12 to 1e12; weights over up to eight orders of
// magnitude; any edf.
func drawHard(t *rapid.T, n int) hard {
	shape := rapid.SampledFrom([]string{"even", "random", "pairs", "gaps"}).Draw(t, "x")
	unit := rapid.Float64Range(0, 1)
	spread := rapid.SampledFrom([]float64{0, 1, 8}).Draw(t, "orders of weights")
	scale := math.Pow(10, float64(rapid.IntRange(-12, 12).Draw(t, "scale")))
	offset := rapid.SampledFrom([]float64{0, 0, 1e9}).Draw(t, "offset")
	seed := rapid.Uint64().Draw(t, "seed")
	next := func() float64 { // cheap and long, unlike n draws
		seed += 0x9e3779b97f4a7c15
		z := seed
		z = (z ^ z>>30) * 0xbf58476d1ce4e5b9
		z = (z ^ z>>27) * 0x94d049bb133111eb
		return float64((z^z>>31)>>11) / (1 << 53)
	}
	c := hard{share: unit.Draw(t, "edf")}
	at := 0.0
	for i := range n {
		switch shape {
		case "even":
			at = float64(i)
		case "random":
			at += 0.02 + next()
		case "pairs":
			at = float64(i/2) + 1e-7*float64(i%2)*(1+next())
		case "gaps":
			at += math.Pow(10, -8*next())
		}
		x := at
		if offset > 0 { // keep the gaps that doubles can show there
			x = offset + math.Round(at*1e4)/1e4 + 2e-4*float64(i)
		}
		c.x = append(c.x, x*scale)
		c.y = append(c.y, 1e6+3*math.Sin(6*float64(i)/float64(n))+0.5*(next()-0.5))
		c.w = append(c.w, math.Pow(10, spread*(next()-0.5)))
	}
	return c
}

// lambdaFor finds a lambda whose edf lies the given share of the way.
func lambdaFor(ws *Workspace, d *Data, share float64) float64 {
	m := float64(len(d.X))
	t := 2*share - 1 // -1: 2 + 1e-6; 1: n - 1e-6
	r := d.X[len(d.X)-1] - d.X[0]
	mid := math.Log(d.SumW) + 3*math.Log(r)
	a, b := mid-150, mid+60
	far := math.Pow(10, -6*math.Abs(t)) * (m - 2) / 2
	below := func(u float64) bool {
		c := ws.Scores(d, math.Exp(u))
		if t > 0 {
			return m-c.EDF > 0 && c.NEDF > far
		}
		return c.EDF-2 < far
	}
	for range 60 {
		if u := 0.5 * (a + b); below(u) {
			b = u
		} else {
			a = u
		}
	}
	return math.Exp(0.5 * (a + b))
}

// against compares a fit with the banded form in 512 bits.
func against(t fataler, d *Data, lambda float64, e worst, tol float64) {
	t.Helper()
	var ws Workspace
	f := ws.Fit(d, lambda)
	want := band(2, d.X, d.Y, d.W, lambda)
	name := fmt.Sprintf("n %d, lambda %g, edf %g", d.N, lambda, want.edf)
	base := tol
	check := func(what string, got, want, scale float64) {
		tol := base
		if what == "LOOCV" || what == "g''" {
			// near interpolation a row left out of a tight pair is predicted
			// along the next pair's slope, a million times the data away, and
			// the bend between pairs is the difference of such slopes
			tol *= 10
		}
		off := math.Abs(got-want) / scale
		if got == want {
			off = 0
		}
		e[what] = math.Max(e[what], off)
		if !(off <= tol) {
			t.Fatalf("%s: %s = %.17g, want %.17g (off by %.2g)", name, what, got, want, off)
		}
	}
	check("edf", f.EDF, want.edf, want.edf)
	check("n-edf", f.NEDF, want.rest, want.rest)
	check("RSS", f.RSS, want.rss, want.rss)
	gcv := float64(d.N) * want.rss / (want.rest * want.rest)
	check("GCV", f.GCV(1), gcv, gcv)
	check("LOOCV", f.LOOCV, want.loo, want.loo)
	// Data that are straight to some digits have a g” that is that much more
	// sensitive to the rounding of y: to sixteen units of it, of alternating
	// sign, it may answer.
	most, alternate := largest(want.bend), make([]float64, len(d.X))
	for i, y := range d.Y {
		alternate[i] = float64(1-2*(i%2)) * (y - d.Y[0])
	}
	most = math.Max(most, 16*0x1p-53/tol*largest(band(2, d.X, alternate, d.W, lambda).bend))
	spread := 0.0
	for _, y := range d.Y {
		spread = math.Max(spread, math.Abs(y-d.Y[0]))
	}
	for i := range d.X {
		check("leverage", f.Leverage[i], want.lev[i], want.lev[i])
		check("fit", f.Gap[i], want.gap[i], spread)
		if i > 0 && i < len(d.X)-1 {
			check("g''", f.Curvature[i], want.bend[i-1], most)
		}
	}
}

func largest(v []float64) (m float64) {
	for _, x := range v {
		m = math.Max(m, math.Abs(x))
	}
	return m
}

type fataler interface {
	Helper()
	Fatalf(format string, args ...any)
}

// TestAccuracy draws hard groups of up to 150 rows. Where BATTEN_SLOW is set it
// also fits 1e4, 1e5 and 1e6 rows and prints the table of DEVELOPERS.md.
func TestAccuracy(t *testing.T) {
	e := worst{}
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.IntRange(3, 150).Draw(t, "n")
		c := drawHard(t, n)
		d, err := Collapse(c.x, c.y, c.w)
		if err != nil {
			t.Skip(err)
		}
		var ws Workspace
		against(t, d, lambdaFor(&ws, d, c.share), e, 1e-12)
	})
	table(t, "n to 150, everything drawn", e)
	if os.Getenv("BATTEN_SLOW") == "" {
		return
	}
	for _, n := range []int{10_000, 100_000, 1_000_000} {
		tol := 1e-12
		if n > 100_000 {
			tol = 1e-11
		}
		e := worst{}
		for trial, share := range []float64{0.02, 0.3, 0.5, 0.7, 0.98} {
			if n == 1_000_000 && trial%2 == 1 {
				continue
			}
			gen := rapid.Custom(func(t *rapid.T) hard { return drawHard(t, n) })
			c := gen.Example(trial)
			d, err := Collapse(c.x, c.y, c.w)
			if err != nil {
				t.Logf("n %d: %v", n, err)
				continue
			}
			var ws Workspace
			against(t, d, lambdaFor(&ws, d, share), e, tol)
		}
		table(t, fmt.Sprintf("n = %d", n), e)
	}
}

func table(t *testing.T, what string, e worst) {
	var names []string
	for k := range e {
		names = append(names, k)
	}
	sort.Strings(names)
	s := what + ":"
	for _, k := range names {
		s += fmt.Sprintf(" %s %.0e,", k, e[k])
	}
	t.Log(s)
}
