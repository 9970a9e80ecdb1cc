package spline

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"

	"golang.org/x/sys/cpu"
)

// eachWay runs f with the vector kernel and without it.
func eachWay(t *testing.T, f func(t *testing.T)) {
	defer func(was bool) { useLanes = was }(useLanes)
	for _, on := range []bool{true, false} {
		useLanes = on
		t.Run(fmt.Sprintf("lanes=%t", on), f)
	}
}

// sameBits compares criteria bit for bit; any NaN equals any other.
func sameBits(a, b Criteria) bool {
	if a.N != b.N {
		return false
	}
	av := [...]float64{a.Lambda, a.EDF, a.NEDF, a.RSS, a.LOOCV, a.Roughness, a.REML, a.DREML}
	bv := [...]float64{b.Lambda, b.EDF, b.NEDF, b.RSS, b.LOOCV, b.Roughness, b.REML, b.DREML}
	for i := range av {
		if math.Float64bits(av[i]) != math.Float64bits(bv[i]) && !(math.IsNaN(av[i]) && math.IsNaN(bv[i])) {
			return false
		}
	}
	return true
}

// check4 compares both functions of four lambdas with four calls.
func check4(t *testing.T, one, four *Workspace, d *Data, lambda [4]float64) {
	t.Helper()
	var got [4]Criteria
	four.Scores4(d, lambda, &got)
	for k, l := range lambda {
		if want := one.Scores(d, l); !sameBits(got[k], want) {
			t.Fatalf("n=%d tied=%t lambdas %g, lane %d: Scores4 gives\n%+v, Scores\n%+v", d.N, d.tied, lambda, k, got[k], want)
		}
	}
	four.Criteria4(d, lambda, &got)
	for k, l := range lambda {
		if want := one.Criteria(d, l); !sameBits(got[k], want) {
			t.Fatalf("n=%d tied=%t lambdas %g, lane %d: Criteria4 gives\n%+v, Criteria\n%+v", d.N, d.tied, lambda, k, got[k], want)
		}
	}
}

// randomLambda lies between 1e-12 and 1e12, or is +Inf.
func randomLambda(rng *rand.Rand) float64 {
	if rng.IntN(12) == 0 {
		return math.Inf(1)
	}
	return math.Pow(10, 24*rng.Float64()-12)
}

// TestFourLambdas: each lane has the bits of a call at its lambda, over sizes,
// ties, uneven gaps, weights over eight powers of ten, and offsets.
func TestFourLambdas(t *testing.T) {
	eachWay(t, func(t *testing.T) {
		rng := rand.New(rand.NewPCG(21, 4))
		var one, four Workspace
		var d Data
		sets := 1500
		if testing.Short() {
			sets = 300
		}
		for set := range sets {
			n := 3 + set%10
			if set%2 == 1 {
				n = 3 + rng.IntN(398)
			}
			ties, spread, weigh := rng.IntN(2) == 0, 12*rng.Float64(), rng.IntN(3)
			offset := 1e6 * float64(rng.IntN(2))
			x, y, w := make([]float64, n), make([]float64, n), make([]float64, n)
			for i := range x {
				switch {
				case ties:
					x[i] = float64(rng.IntN(n)) / 7
				case set%5 == 0: // gaps over many powers of ten
					x[i] = math.Pow(10, spread*rng.Float64()-6)
				default:
					x[i] = 10 * rng.Float64()
				}
				y[i] = offset + rng.NormFloat64()
				w[i] = 1
				if weigh == 1 {
					w[i] = math.Pow(10, 8*rng.Float64()-4)
				} else if weigh == 2 {
					w[i] = float64(1 + rng.IntN(3))
				}
			}
			if err := d.Reset(x, y, w); err != nil {
				continue
			}
			var lambda [4]float64
			for k := range lambda {
				lambda[k] = randomLambda(rng)
				if k > 0 && rng.IntN(4) == 0 {
					lambda[k] = lambda[rng.IntN(k)]
				}
			}
			check4(t, &one, &four, &d, lambda)
		}
	})
}

// TestFourLambdasEnds: blocks that end at every place, few knots, steps of
// more than one kernel call, factors of the determinant beyond 1e100, and
// numbers that overflow.
func TestFourLambdasEnds(t *testing.T) {
	eachWay(t, func(t *testing.T) {
		var one, four Workspace
		inf := math.Inf(1)
		sizes := []int{3, 4, 5, 126, 127, 128, 129, 130, 131, 255, 256, 257, 258, 4096, 4097, 4098, 4099, 9000}
		for _, n := range sizes {
			for _, scale := range []float64{1, 1e40, 1e90, 1e-90} {
				for _, tied := range []bool{false, true} {
					rng := rand.New(rand.NewPCG(uint64(n), 8))
					var x, y, w []float64
					for i := range n {
						rows := 1
						if tied {
							rows += rng.IntN(3)
						}
						at := (float64(i) + 0.8*rng.Float64()) * scale
						for range rows {
							x = append(x, at)
							y = append(y, rng.NormFloat64())
							w = append(w, 0.5+rng.Float64())
						}
					}
					d, err := Collapse(x, y, w)
					if err != nil {
						t.Fatal(err)
					}
					check4(t, &one, &four, d, [4]float64{1, 1e-12, 1e12, inf})
					check4(t, &one, &four, d, [4]float64{inf, inf, inf, inf})
					check4(t, &one, &four, d, [4]float64{1e-300, 0.25, 1e300, 1e-12})
				}
			}
		}
	})
}

// TestFourLambdasAllocate nothing once the workspace has grown.
func TestFourLambdasAllocate(t *testing.T) {
	eachWay(t, func(t *testing.T) {
		x, y, w := sample(300, 9)
		d, err := Collapse(x, y, w)
		if err != nil {
			t.Fatal(err)
		}
		var ws Workspace
		var out [4]Criteria
		if n := testing.AllocsPerRun(10, func() {
			ws.Scores4(d, [4]float64{1, 2, 3, 4}, &out)
			ws.Criteria4(d, [4]float64{1, 2, 3, 4}, &out)
		}); n != 0 {
			t.Fatalf("%g allocations", n)
		}
	})
}

var laneSizes = []int{50, 200, 2000, 100_000}

// benchmark4 times four lambdas: one by one, and at once.
func benchmark4(b *testing.B, d func(b *testing.B, n int) *Data, one func(*Workspace, *Data, float64) Criteria, four func(*Workspace, *Data, [4]float64, *[4]Criteria)) {
	lambda := [4]float64{0.001, 0.01, 0.1, 1}
	var out [4]Criteria
	for _, n := range laneSizes {
		d := d(b, n)
		run := func(b *testing.B, f func(ws *Workspace)) {
			var ws Workspace
			f(&ws)
			b.ReportAllocs()
			for b.Loop() {
				f(&ws)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/float64(4*n), "ns/point/lambda")
		}
		b.Run(fmt.Sprintf("one/n=%d", n), func(b *testing.B) {
			run(b, func(ws *Workspace) {
				for k, l := range lambda {
					out[k] = one(ws, d, l)
				}
			})
		})
		b.Run(fmt.Sprintf("four/n=%d", n), func(b *testing.B) {
			if !cpu.X86.HasAVX2 {
				b.Skip("no vectors here")
			}
			run(b, func(ws *Workspace) { four(ws, d, lambda, &out) })
		})
	}
}

func BenchmarkScores4(b *testing.B) {
	benchmark4(b, benchData, (*Workspace).Scores, (*Workspace).Scores4)
}

func BenchmarkCriteria4(b *testing.B) {
	benchmark4(b, benchData, (*Workspace).Criteria, (*Workspace).Criteria4)
}

func BenchmarkScores4Tied(b *testing.B) {
	benchmark4(b, func(b *testing.B, n int) *Data {
		x, y, w := sample(n, 1)
		d, err := Collapse(x, y, w)
		if err != nil {
			b.Fatal(err)
		}
		return d
	}, (*Workspace).Scores, (*Workspace).Scores4)
}
