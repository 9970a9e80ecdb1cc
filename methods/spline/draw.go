package spline

import "math"

// Path draws curves from the posterior of a fit at given places: how value and
// slope deviate from their means, in units of sigma.
//
// Draws are made from left to right: the process is Markov, so each place
// depends on the one before it and, by the backward filter, on the readings at
// it or beyond. Source: Wahba (1978), JRSSB 40:364.
type Path struct {
	first first
	steps []step
	chain *chain  // orders 1 and 3
	keep  []int32 // of the places on the way: the index asked for, or -1
}

// first is the law at the leftmost place: the slope is beta times the value,
// and more.
type first struct{ sdValue, beta, sdSlope float64 }

// step leads over a gap h to the next place. From (g, s), with m = g + h s,
//
//	G = bm m + bs s + sdG z,   S = e G + fm m + fs s + sdS z'
type step struct{ h, bm, bs, sdG, e, fm, fs, sdS float64 }

// NewPath prepares draws at xs, which must be in increasing order.
func (f *Fit) NewPath(xs []float64) *Path {
	p := &Path{}
	d, m := f.Data, len(f.Knots)
	q := 1 / f.Lambda
	// the places in order: knots, and what is asked for
	var all []place
	i, k := 0, 0
	for i < m || k < len(xs) {
		switch {
		case k == len(xs) || i < m && f.Knots[i] < xs[k]:
			all = append(all, place{f.Knots[i], i, -1})
			i++
		case i == m || xs[k] < f.Knots[i]:
			all = append(all, place{xs[k], -1, int32(k)})
			k++
		default:
			all = append(all, place{xs[k], i, int32(k)})
			i++
			k++
		}
	}
	// readings left of the first and right of the last asked place count too,
	// but nothing is drawn there: the filters know them
	for len(all) > 0 && all[len(all)-1].keep < 0 {
		all = all[:len(all)-1]
	}
	lead := 0
	for lead < len(all) && all[lead].keep < 0 {
		lead++
	}
	all = all[lead:]
	if len(all) == 0 {
		return p
	}
	if f.Order == 1 || f.Order == 3 {
		for _, pl := range all {
			p.keep = append(p.keep, pl.keep)
		}
		p.chain = f.newChain(all)
		return p
	}
	m0 := f.Posterior(all[0].x)
	p.first = first{math.Sqrt(m0.VarValue), m0.Cov / m0.VarValue, math.Sqrt(m0.SlopeGiven)}
	p.keep = append(p.keep, all[0].keep)
	next := 0 // the first knot at or right of the place
	for j := 1; j < len(all); j++ {
		pl := all[j]
		for next < m && f.Knots[next] < pl.x {
			next++
		}
		// what the readings at the place or right of it say
		var back state
		w, known := 0.0, true
		switch {
		case pl.knot >= 0:
			w = d.W[pl.knot]
			if back = f.backward[pl.knot]; pl.knot == m-1 {
				known = false // of the slope
			}
		case next == m:
			known = false
		case next == m-1:
			back = start(f.Knots[next]-pl.x, d.W[next], d.yc[next], q)
		default:
			back, _ = f.backward[next].step(f.Knots[next]-pl.x, d.W[next], d.yc[next], q)
		}
		p.steps = append(p.steps, newStep(pl.x-all[j-1].x, q, back, w, known))
		p.keep = append(p.keep, pl.keep)
	}
	return p
}

// newStep settles a step of length h. The slope given G is s + k (G - m), k =
// 3/(2h), with variance q h/4, by the process alone, and -b G with variance c
// by the readings ahead.
func newStep(h, q float64, back state, w float64, known bool) step {
	if q == 0 {
		return step{h: h, bm: 1, fs: 1}
	}
	k := 1.5 / h
	v := float64(0.25 * float64(q*h))
	v00 := float64(float64(float64(q*h)*h)*h) * third
	prec := 1/v00 + back.lam + w
	onM, onS, share := 1/v00, 0.0, 0.0
	if known { // both accounts of the slope agree: s + k (G - m) = -b G, variance v + c
		t := 1 / (v + back.c)
		kb := float64((k + back.b) * t)
		prec += float64(kb * (k + back.b))
		onM += float64(kb * k)
		onS = -kb
		share = float64(v * t) // of the readings ahead in the slope
	}
	own := 1 - share
	return step{h: h, bm: onM / prec, bs: onS / prec, sdG: math.Sqrt(1 / prec),
		e: float64(own*k) - float64(share*back.b), fm: -float64(own * k), fs: own, sdS: math.Sqrt(float64(v * own))}
}

// Draw makes one curve at the places: deviations from the posterior means of
// value and slope, over sigma; of order 1, which has no slope, of the value
// alone. normal returns standard normal deviates.
func (p *Path) Draw(normal func() float64, value, slope []float64) {
	if len(p.keep) == 0 {
		return
	}
	if p.chain != nil {
		p.chain.draw(normal, func(j int, s [3]float64) {
			if k := p.keep[j]; k >= 0 {
				value[k], slope[k] = s[0], s[1]
			}
		})
		return
	}
	g := float64(p.first.sdValue * normal())
	s := float64(p.first.beta*g) + float64(p.first.sdSlope*normal())
	put := func(j int) {
		if k := p.keep[j]; k >= 0 {
			value[k], slope[k] = g, s
		}
	}
	put(0)
	for j := range p.steps {
		st := &p.steps[j]
		m := g + float64(st.h*s)
		g = float64(st.bm*m) + float64(st.bs*s) + float64(st.sdG*normal())
		s = float64(st.e*g) + float64(st.fm*m) + float64(st.fs*s) + float64(st.sdS*normal())
		put(j + 1)
	}
}

// Change returns g(b) - g(a) and its posterior variance over sigma^2.
func (f *Fit) Change(a, b float64) (value, variance float64) {
	if a == b {
		return 0, 0
	}
	if b < a {
		value, variance = f.Change(b, a)
		return -value, variance
	}
	if f.Order == 1 || f.Order == 3 {
		return f.along(a, b, false)
	}
	va, _, _ := f.At(a)
	vb, _, _ := f.At(b)
	p := f.NewPath([]float64{a, b})
	// the deviation at b is m1 g + m2 s of that at a, and noise with
	// covariance n
	m := [2][2]float64{{1, 0}, {0, 1}}
	var n [3]float64 // Var G, Cov, Var S
	for i := range p.steps {
		st := &p.steps[i]
		// (g, s) -> (G, S) without the noise
		gg, gs := st.bm, float64(st.bm*st.h)+st.bs
		sg, ss := float64(st.e*gg)+st.fm, float64(st.e*gs)+float64(st.fm*st.h)+st.fs
		for c := range 2 {
			m[0][c], m[1][c] = float64(gg*m[0][c])+float64(gs*m[1][c]), float64(sg*m[0][c])+float64(ss*m[1][c])
		}
		v := float64(st.sdG * st.sdG)
		n = [3]float64{
			float64(float64(gg*gg)*n[0]) + float64(2*float64(float64(gg*gs)*n[1])) + float64(float64(gs*gs)*n[2]) + v,
			float64(float64(gg*sg)*n[0]) + float64((float64(gg*ss)+float64(gs*sg))*n[1]) + float64(float64(gs*ss)*n[2]) + float64(st.e*v),
			float64(float64(sg*sg)*n[0]) + float64(2*float64(float64(sg*ss)*n[1])) + float64(float64(ss*ss)*n[2]) + float64(float64(st.e*st.e)*v) + float64(st.sdS*st.sdS),
		}
	}
	// G - g = u g + m12 s + noise, s = beta g + more
	u := (m[0][0] - 1) + float64(m[0][1]*p.first.beta)
	z := float64(u * p.first.sdValue)
	y := float64(m[0][1] * p.first.sdSlope)
	return vb - va, float64(z*z) + float64(y*y) + n[0]
}
