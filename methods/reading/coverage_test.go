package reading_test

import (
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"sort"
	"strings"
	"sync"
	"testing"

	"batten/methods/choose"
	"batten/methods/reading"
	"batten/methods/spline"
)

// truth is a curve on [0, 1] of range about 1, with a level that it crosses
// and, where peak is set, one interior maximum.
type truth struct {
	name  string
	f     func(x float64) float64
	level float64
	peak  bool
}

var truths = []truth{
	{"line", func(x float64) float64 { return x }, 0.4, false},
	{"parabola", func(x float64) float64 { return 4 * x * (1 - x) }, 0.5, true},
	{"one wave", func(x float64) float64 { return 0.5 + 0.5*math.Sin(2*math.Pi*x) }, 0.7, true},
	{"two waves", func(x float64) float64 { return 0.5 + 0.5*math.Sin(4*math.Pi*x+0.5) }, 0.6, false},
	{"decay", func(x float64) float64 { return math.Exp(-4 * x) }, 0.3, false},
	{"step", func(x float64) float64 { return 1 / (1 + math.Exp(-20*(x-0.5))) }, 0.5, false},
	{"bump", func(x float64) float64 { return math.Exp(-60 * (x - 0.4) * (x - 0.4)) }, 0.5, true},
	{"lopsided", func(x float64) float64 { return 2.7 * 5 * x * math.Exp(-5*x) / 1.0 }, 0.6, true},
	{"chirp", func(x float64) float64 { return 0.5 + 0.5*math.Sin(2*math.Pi*2*x*x*1.5) }, 0.5, false},
	{"kink", func(x float64) float64 { return 1 - 2*math.Abs(x-0.5) }, 0.6, true},
}

// counts of one cell: how many were held, of how many.
type counts struct{ point, all, cross, place, height [2]int }

func (c *counts) add(o *counts) {
	for i, p := range []*[2]int{&c.point, &c.all, &c.cross, &c.place, &c.height} {
		q := []*[2]int{&o.point, &o.all, &o.cross, &o.place, &o.height}[i]
		p[0] += q[0]
		p[1] += q[1]
	}
}

func percent(c [2]int) string {
	if c[1] == 0 {
		return "    "
	}
	return fmt.Sprintf("%4.1f", 100*float64(c[0])/float64(c[1]))
}

func tally(c *[2]int, held bool) {
	c[1]++
	if held {
		c[0]++
	}
}

// cell simulates one truth at one noise level and n.
func cell(tr truth, noise float64, n, reps int, rule string, seed uint64) *counts {
	rng := rand.New(rand.NewPCG(seed, uint64(n)))
	var ws spline.Workspace
	out := &counts{}
	grid := make([]float64, 101)
	// the truth's crossings and its peak, finely
	var crossings []float64
	peak := 0.0
	const fine = 200_000
	for k := 1; k <= fine; k++ {
		a, b := float64(k-1)/fine, float64(k)/fine
		if (tr.f(a)-tr.level)*(tr.f(b)-tr.level) < 0 {
			crossings = append(crossings, 0.5*(a+b))
		}
		if tr.f(b) > tr.f(peak) {
			peak = b
		}
	}
	for range reps {
		x, y := make([]float64, n), make([]float64, n)
		for i := range x {
			x[i] = rng.Float64()
		}
		sort.Float64s(x)
		for i := range x {
			y[i] = tr.f(x[i]) + noise*rng.NormFloat64()
		}
		d, err := spline.Collapse(x, y, nil)
		if err != nil {
			panic(err)
		}
		e, err := choose.Lambda(&ws, d, choose.Rule{Name: rule})
		if err != nil {
			panic(err)
		}
		f := ws.Fit(d, e.Chosen.Lambda)
		lo, hi := x[0], x[n-1]
		for k := range grid {
			grid[k] = lo + (hi-lo)*float64(k)/100
		}
		for _, p := range reading.Tabulate(f, reading.Band{Level: 0.95}, grid, nil) {
			tally(&out.point, p.Lower <= tr.f(p.X) && tr.f(p.X) <= p.Upper)
		}
		all := true
		for _, p := range reading.Tabulate(f, reading.Band{Level: 0.95, Simultaneous: true}, grid, nil) {
			all = all && p.Lower <= tr.f(p.X) && tr.f(p.X) <= p.Upper
		}
		tally(&out.all, all)
		// a crossing of the truth within the data is held by some reported one
		for _, c := range crossings {
			if c < lo || c > hi {
				continue
			}
			held := false
			for _, r := range reading.Take(f, 0.95, reading.Ask{Kind: reading.Crossing, At: tr.level, All: true}) {
				held = held || r.Lower <= c && c <= r.Upper
			}
			tally(&out.cross, held)
		}
		if tr.peak {
			m := reading.Take(f, 0.95, reading.Ask{Kind: reading.Maximum})
			tally(&out.place, m[1].Lower <= peak && peak <= m[1].Upper)
			tally(&out.height, m[0].Lower <= tr.f(peak) && tr.f(peak) <= m[0].Upper)
		}
	}
	return out
}

// TestCoverage measures how often intervals of 95% hold the truth: 10 truths,
// 3 noise levels, n = 30, 100, 300. In full, with its table, where
// BATTEN_COVERAGE is set (about two minutes); else a small part of it is held
// to what the table says.
func TestCoverage(t *testing.T) {
	if os.Getenv("BATTEN_COVERAGE") == "" {
		var sum counts
		for k, tr := range truths[:5] {
			sum.add(cell(tr, 0.2, 100, 30, choose.REML, uint64(k)))
		}
		share := func(c [2]int) float64 { return float64(c[0]) / float64(c[1]) }
		if s := share(sum.point); s < 0.92 || s > 0.985 {
			t.Errorf("pointwise coverage %.3f", s)
		}
		if s := share(sum.all); s < 0.85 {
			t.Errorf("simultaneous coverage %.3f", s)
		}
		if s := share(sum.cross); s < 0.88 {
			t.Errorf("coverage of crossings %.3f", s)
		}
		return
	}
	noises, ns := []float64{0.05, 0.2, 0.5}, []int{30, 100, 300}
	for _, rule := range []string{choose.GCV, choose.REML} {
		res := map[string]*counts{}
		var mu sync.Mutex
		var wg sync.WaitGroup
		slots := make(chan struct{}, 2)
		for k, tr := range truths {
			for j, noise := range noises {
				for _, n := range ns {
					wg.Add(1)
					slots <- struct{}{}
					go func() {
						defer wg.Done()
						c := cell(tr, noise, n, 400, rule, uint64(10*k+j))
						mu.Lock()
						defer mu.Unlock()
						for _, key := range []string{"all", fmt.Sprintf("n=%d, noise %g", n, noise), tr.name} {
							if res[key] == nil {
								res[key] = &counts{}
							}
							res[key].add(c)
						}
						<-slots
					}()
				}
			}
		}
		wg.Wait()
		var keys []string
		for _, n := range ns {
			for _, noise := range noises {
				keys = append(keys, fmt.Sprintf("n=%d, noise %g", n, noise))
			}
		}
		for _, tr := range truths {
			keys = append(keys, tr.name)
		}
		var b strings.Builder
		fmt.Fprintf(&b, "\n| %s | pointwise | simultaneous | crossing | peak, place | peak, height |\n|---|---|---|---|---|---|\n", rule)
		for _, k := range append(keys, "all") {
			c := res[k]
			fmt.Fprintf(&b, "| %s | %s | %s | %s | %s | %s |\n", k, percent(c.point), percent(c.all), percent(c.cross), percent(c.place), percent(c.height))
		}
		t.Log(b.String())
	}
}
