package spline

import (
	"math"

	"golang.org/x/sys/cpu"
)

//go:generate go -C lanesgen run . -out ../lanes_amd64.s

// state4 is a state for four lambdas.
type state4 struct{ lam, zeta, b, alpha, c [4]float64 }

// acc4 is what the combination at the knots carries along: the sums of one
// block, and the curvature and the place of the knot to the left.
type acc4 struct {
	edf, rest, rss, loo, rough, gamma [4]float64
	x                                 float64
}

// lanes is the memory of the vector kernel: 320 bytes a knot.
type lanes struct {
	forward, backward []state4
	q, p, den         [4]float64
	acc               acc4
}

// The kernels, written by lanesgen. They use AVX2 and hold no pointer longer
// than a call.

// filterLanes takes both filters through the steps i to end-1 of
// Workspace.filter's loop. fw and bw hold the states before step i.
//
//go:noescape
func filterLanes(fw, bw *state4, x, y, w *float64, q *[4]float64, m, i, end int)

// filterLanesDet also multiplies the factors of the forward determinant into
// p. It stops behind a step whose factor needs logProduct in some lane: that
// factor is left in den, p is as it was before it, and stopped is 1.
//
//go:noescape
func filterLanesDet(fw, bw *state4, x, y, w *float64, q *[4]float64, m, i, end int, p, den *[4]float64) (next int, stopped int)

// combineLanes adds the knots lo to hi-1 to acc, for rows without ties. The c
// of a state with no neighbour beyond is +Inf: kap is 0 there.
//
//go:noescape
func combineLanes(fw, bw *state4, x, y, w *float64, q *[4]float64, lo, hi int, acc *acc4)

// combineLanesRough is combineLanes with the roughness.
//
//go:noescape
func combineLanesRough(fw, bw *state4, x, y, w *float64, q *[4]float64, lo, hi int, acc *acc4)

// combineLanesTied is combineLanes with LOOCV from the rows of each knot.
//
//go:noescape
func combineLanesTied(fw, bw *state4, x, y, w *float64, q *[4]float64, lo, hi int, acc *acc4, first *int32, rowY, rowW, mean *float64)

// combineLanesTiedRough is combineLanesTied with the roughness.
//
//go:noescape
func combineLanesTiedRough(fw, bw *state4, x, y, w *float64, q *[4]float64, lo, hi int, acc *acc4, first *int32, rowY, rowW, mean *float64)

// stride bounds the steps of one call: the scheduler cannot interrupt a kernel.
const stride = 4096

// mostKnots bounds the kernel's memory. Beyond it the work is bound by memory
// anyway, and the gain is small.
const mostKnots = 1 << 17

// evaluateLanes is evaluate for four lambdas, or false where the processor
// lacks the vectors.
func (ws *Workspace) evaluateLanes(d *Data, lambda *[4]float64, out *[4]Criteria, reml bool) bool {
	m := len(d.X)
	if !cpu.X86.HasAVX2 || m > mostKnots {
		return false
	}
	if m < MinDistinct(2) {
		panic("spline: fewer than 3 distinct x")
	}
	s := &ws.lanes
	for k, l := range lambda {
		s.q[k] = 1 / l
	}
	det := s.filter(d, reml)
	sum := s.combine(d, reml)
	for k, l := range lambda {
		out[k] = Criteria{
			Lambda: l, N: d.N,
			EDF:       sum.edf[k],
			NEDF:      sum.rest[k] + float64(d.N-m),
			RSS:       sum.rss[k] + d.PureError,
			LOOCV:     sum.loo[k] / float64(d.N),
			Roughness: sum.rough[k],
		}
		if reml {
			ws.restricted(d, &out[k], &det[k])
		}
	}
	return true
}

// filter is Workspace.filter for four lambdas.
func (s *lanes) filter(d *Data, wantDet bool) (det [4]logProduct) {
	m := len(d.X)
	if cap(s.forward) < m {
		s.forward, s.backward = make([]state4, m+m/4), make([]state4, m+m/4)
	}
	fw, bw := s.forward[:m], s.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	fw[0], bw[m-1] = state4{}, state4{}
	fw[1].start(x[1]-x[0], w[0], y[0], &s.q)
	bw[m-2].start(x[m-1]-x[m-2], w[m-1], y[m-1], &s.q)
	s.p = [4]float64{1, 1, 1, 1}
	for i := 1; i < m-1; {
		end := min(i+stride, m-1)
		if !wantDet {
			filterLanes(&fw[0], &bw[0], &x[0], &y[0], &w[0], &s.q, m, i, end)
			i = end
			continue
		}
		next, stopped := filterLanesDet(&fw[0], &bw[0], &x[0], &y[0], &w[0], &s.q, m, i, end, &s.p, &s.den)
		i = next
		if stopped == 0 {
			continue
		}
		for k, den := range s.den {
			if den < 1e100 {
				if s.p[k] = float64(s.p[k] * den); s.p[k] > 1e100 {
					det[k].times(s.p[k])
					s.p[k] = 1
				}
			} else {
				det[k].times(den)
			}
		}
	}
	if wantDet {
		for k := range det {
			det[k].times(s.p[k])
			det[k].times(fw[m-1].lam[k] + w[m-1])
		}
	}
	return det
}

// start is the function of this name for four lambdas.
func (s *state4) start(h, w, y float64, q *[4]float64) {
	b, alpha, v := 1/h, -y/h, 1/float64(float64(w*h)*h)
	for k := range q {
		s.lam[k], s.zeta[k] = 0, 0
		s.b[k], s.alpha[k] = b, alpha
		s.c[k] = v + float64(float64(q[k]*h)*third)
	}
}

// combine joins the filters at every knot and returns the sums, in the blocks
// of evaluate.
func (s *lanes) combine(d *Data, reml bool) (sum acc4) {
	m := len(d.X)
	fw, bw := s.forward[:m], s.backward[:m]
	x, y, w := d.X[:m], d.yc[:m], d.W[:m]
	inf := math.Inf(1)
	for _, end := range []*state4{&fw[0], &bw[0], &fw[m-1], &bw[m-1]} {
		end.c = [4]float64{inf, inf, inf, inf}
	}
	var gamma [4]float64
	left := x[0]
	for lo := 0; lo < m; lo += block {
		hi := min(lo+block, m)
		s.acc = acc4{gamma: gamma, x: left}
		switch {
		case d.tied && reml:
			combineLanesTiedRough(&fw[0], &bw[0], &x[0], &y[0], &w[0], &s.q, lo, hi, &s.acc, &d.First[0], &d.RowY[0], &d.RowW[0], &d.Y[0])
		case d.tied:
			combineLanesTied(&fw[0], &bw[0], &x[0], &y[0], &w[0], &s.q, lo, hi, &s.acc, &d.First[0], &d.RowY[0], &d.RowW[0], &d.Y[0])
		case reml:
			combineLanesRough(&fw[0], &bw[0], &x[0], &y[0], &w[0], &s.q, lo, hi, &s.acc)
		default:
			combineLanes(&fw[0], &bw[0], &x[0], &y[0], &w[0], &s.q, lo, hi, &s.acc)
		}
		gamma, left = s.acc.gamma, s.acc.x
		for k := range 4 {
			sum.edf[k] += s.acc.edf[k]
			sum.rest[k] += s.acc.rest[k]
			sum.rss[k] += s.acc.rss[k]
			sum.loo[k] += s.acc.loo[k]
			sum.rough[k] += s.acc.rough[k]
		}
	}
	return sum
}
