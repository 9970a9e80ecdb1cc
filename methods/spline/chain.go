package spline

import "math"

// chain is the posterior of orders 1 and 3 as a Markov chain from left to
// right: the state at a place is g and its derivatives below the order, and the
// next one is m times it, and noise with covariance l l'. Deviations from the
// means, over sigma.
type chain struct {
	dim   int
	q     float64
	first mat3 // l of the leftmost place
	links []link
}

type mat3 [3][3]float64

type link struct {
	h    float64
	m, l mat3
}

// place is one place of a chain: a knot, or one that was asked for.
type place struct {
	x    float64
	knot int // -1: none
	keep int32
}

// newChain joins the places, which start and end at some that were asked for.
func (f *Fit) newChain(all []place) *chain {
	d, m := f.Data, len(f.Knots)
	c := &chain{dim: 1, q: 1 / f.Lambda}
	mo := f.Posterior(all[0].x)
	if f.Order == 1 {
		c.first[0][0] = math.Sqrt(mo.VarValue)
	} else {
		c.dim = 3
		p := f.three.posterior(all[0].x)
		c.first = factor(mat3{{p.VarValue, p.Cov, p.CovValueSecond}, {p.Cov, p.VarSlope, p.CovSlopeSecond}, {p.CovValueSecond, p.CovSlopeSecond, p.VarSecond}})
	}
	next := 0 // the first knot at or right of the place
	for j := 1; j < len(all); j++ {
		pl := all[j]
		for next < m && f.Knots[next] < pl.x {
			next++
		}
		w := 0.0
		if pl.knot >= 0 {
			w = d.W[pl.knot]
		}
		h := pl.x - all[j-1].x
		if c.dim == 1 {
			var back state1
			switch {
			case pl.knot >= 0:
				back = f.one.backward[pl.knot]
			case next < m:
				back, _ = f.one.backward[next].step(f.Knots[next]-pl.x, d.W[next], d.yc[next], c.q)
			}
			v := float64(c.q * h)
			share := 1 / (1 + float64(v*(back.lam+w)))
			c.links = append(c.links, link{h: h, m: mat3{{share}}, l: mat3{{math.Sqrt(float64(v * share))}}})
			continue
		}
		var back state3
		ahead := nothing
		switch {
		case pl.knot >= 0:
			back, ahead = f.three.backward[pl.knot], known(m-1-pl.knot)
		case next < m:
			back = reach(f.three.backward, next, f.Knots[next]-pl.x, d.W[next], d.yc[next], c.q, known(m-1-next))
			ahead = known(m - next)
		}
		c.links = append(c.links, newLink(h, c.q, &back, w, ahead))
	}
	return c
}

// newLink settles a step of order 3 over a gap h, in units of h: the state is
// (g, h g', h^2 g”). The process alone has covariance q h^5 S with S known; the
// readings ahead add precision to it.
func newLink(h, q float64, back *state3, w float64, ahead knows) link {
	// S^-1 of the twice integrated Wiener process over a unit gap
	inv := mat3{{720, -360, 60}, {-360, 192, -36}, {60, -36, 9}}
	on := mat3{{1, 1, 0.5}, {0, 1, 1}, {0, 0, 1}}
	scale := [3]float64{1, h, float64(h * h)}
	out := link{h: h}
	if q == 0 {
		for i := range 3 {
			for k := range 3 {
				out.m[i][k] = on[i][k] * (scale[k] / scale[i])
			}
		}
		return out
	}
	v := float64(float64(float64(q*h)*float64(h*h)) * float64(h*h))
	p := inv
	add := func(row [3]float64, c float64) { // row row' / c
		t := v / c
		for i := range 3 {
			for k := range 3 {
				p[i][k] += float64(float64(row[i]*row[k]) * t)
			}
		}
	}
	switch ahead {
	case all:
		p[0][0] += float64(v * (back.lam + w))
		add([3]float64{back.b1, 1 / h}, back.c)
		add([3]float64{back.k, back.r / h, 1 / scale[2]}, back.e)
	case relation:
		p[0][0] += float64(v * w)
		add([3]float64{back.k, back.r / h, 1 / scale[2]}, back.e)
	case nothing:
		p[0][0] += float64(v * w)
	}
	// M = P^-1 S^-1 F, noise covariance q h^5 P^-1
	pi := inverse(p)
	for i := range 3 {
		for k := range 3 {
			sum := 0.0
			for a := range 3 {
				for b := range 3 {
					sum += float64(float64(pi[i][a]*inv[a][b]) * on[b][k])
				}
			}
			out.m[i][k] = sum * (scale[k] / scale[i])
		}
	}
	l := factor(pi)
	root := math.Sqrt(v)
	for i := range 3 {
		for k := range 3 {
			out.l[i][k] = l[i][k] * (root / scale[i])
		}
	}
	return out
}

// factor returns the lower triangle l with l l' = a.
func factor(a mat3) (l mat3) {
	for i := range 3 {
		for k := 0; k <= i; k++ {
			s := a[i][k]
			for j := range k {
				s -= float64(l[i][j] * l[k][j])
			}
			if i == k {
				l[i][i] = math.Sqrt(max(0, s))
			} else if l[k][k] > 0 {
				l[i][k] = s / l[k][k]
			}
		}
	}
	return l
}

// inverse of a positive definite matrix.
func inverse(a mat3) (out mat3) {
	l := factor(a)
	for c := range 3 {
		var y, x [3]float64
		y[c] = 1
		for i := range 3 {
			for j := range i {
				y[i] -= float64(l[i][j] * y[j])
			}
			y[i] /= l[i][i]
		}
		for i := 2; i >= 0; i-- {
			x[i] = y[i]
			for j := i + 1; j < 3; j++ {
				x[i] -= float64(l[j][i] * x[j])
			}
			x[i] /= l[i][i]
		}
		for i := range 3 {
			out[i][c] = x[i]
		}
	}
	return out
}

// draw makes one path and gives every state to put.
func (c *chain) draw(normal func() float64, put func(j int, s [3]float64)) {
	noise := func(l *mat3) (n [3]float64) {
		var z [3]float64
		for i := range c.dim {
			z[i] = normal()
			for k := 0; k <= i; k++ {
				n[i] += float64(l[i][k] * z[k])
			}
		}
		return n
	}
	s := noise(&c.first)
	put(0, s)
	for j := range c.links {
		n := noise(&c.links[j].l)
		for i := range c.dim {
			for k := range c.dim {
				n[i] += float64(c.links[j].m[i][k] * s[k])
			}
		}
		s = n
		put(j+1, s)
	}
}

// Of order 3 each link solves a 3 by 3 system: variances of areas and changes,
// and draws, are good to about 1e-8, which is enough for an interval.

// variance is that of a linear functional of the states, u[j]'s at place j.
func (c *chain) variance(u [][3]float64) float64 {
	total := 0.0
	add := func(u *[3]float64, l *mat3) { // |l'u|^2
		for k := range c.dim {
			p := 0.0
			for i := k; i < c.dim; i++ {
				p += float64(l[i][k] * u[i])
			}
			total += float64(p * p)
		}
	}
	at := u[len(u)-1]
	for j := len(c.links) - 1; j >= 0; j-- {
		add(&at, &c.links[j].l)
		before := u[j]
		for k := range c.dim {
			for i := range c.dim {
				before[k] += float64(c.links[j].m[i][k] * at[i])
			}
		}
		at = before
	}
	add(&at, &c.first)
	return total
}

// stretch lists the places of [a, b]: its ends and the knots between.
func (f *Fit) stretch(a, b float64) []place {
	var all []place
	add := func(x float64, knot int) { all = append(all, place{x, knot, int32(len(all))}) }
	at := func(x float64) int {
		if i := f.Interval(x); f.Knots[i] == x {
			return i
		} else if f.Knots[i+1] == x {
			return i + 1
		}
		return -1
	}
	add(a, at(a))
	for i, k := range f.Knots {
		if k > a && k < b {
			add(k, i)
		}
	}
	add(b, at(b))
	return all
}

// along returns the integral of g over [a, b] (area), or g(b) - g(a), and its
// variance over sigma^2, for orders 1 and 3. Between two places whose states
// are known the integral has Hermite's mean and, by the process pinned at both,
// the variance (m!)^2/((2m)! (2m+1)!) q h^(2m+1) with m the order.
func (f *Fit) along(a, b float64, area bool) (value, variance float64) {
	all := f.stretch(a, b)
	c := f.newChain(all)
	u := make([][3]float64, len(all))
	if !area {
		va, _, _ := f.At(a)
		vb, _, _ := f.At(b)
		u[0][0], u[len(u)-1][0] = -1, 1
		return vb - va, c.variance(u)
	}
	state := func(x float64) [3]float64 {
		v, s, k := f.At(x)
		if f.Order == 1 {
			return [3]float64{v}
		}
		return [3]float64{v, s, k}
	}
	from := state(a)
	for j := range c.links {
		h := c.links[j].h
		coef := [3]float64{0.5 * h}
		pinned := float64(float64(float64(h*h)*h)*c.q) / 12
		if c.dim == 3 {
			h2 := float64(h * h)
			coef[1], coef[2] = h2/10, float64(h2*h)/120
			pinned = float64(float64(float64(float64(h2*h2)*h2)*h)*c.q) / 100800
		}
		to := state(all[j+1].x)
		for i, k := range coef {
			sign := 1.0
			if i == 1 {
				sign = -1
			}
			u[j][i] += k
			u[j+1][i] += float64(sign * k)
			value += float64(k * (from[i] + float64(sign*to[i])))
		}
		variance += pinned
		from = to
	}
	return value, variance + c.variance(u)
}
