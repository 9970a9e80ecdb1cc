package spline

// Area returns the integral of g over [a, b], which may reach beyond the data,
// and its posterior variance over sigma^2.
//
// The integral splits into what the knots' values determine, c'g, and what the
// process does between them, independent of the first:
//
//	variance = c'(W + lambda K)^-1 c + (||phi||^2 - beta' R^-1 beta) / lambda
//
// phi is the Peano kernel of the piecewise linear rule (phi” = 1 on [a, b],
// phi = 0 at the knots), beta its inner products with the hat functions of
// g”, R their Gram matrix, and c = t + Q R^-1 beta with t the linear rule's
// weights. (W + lambda K)^-1 c is one more smoothing, of c/W.
func (f *Fit) Area(a, b float64) (value, variance float64) {
	if b < a {
		value, variance = f.Area(b, a)
		return -value, variance
	}
	if a == b {
		return 0, 0
	}
	if f.Order == 1 || f.Order == 3 {
		return f.along(a, b, true)
	}
	x, m := f.Knots, len(f.Knots)
	k := kernel{x: x, t: make([]float64, m), beta: make([]float64, m)}
	k.before(a, min(b, x[0]))
	for i := 0; i+1 < m; i++ {
		if lo, hi := max(a, x[i]), min(b, x[i+1]); lo < hi {
			k.between(i, lo, hi)
		}
	}
	k.after(max(a, x[m-1]), b)
	k.norm()

	for i := range x {
		value += float64(k.t[i]*f.Value[i]) + float64(k.beta[i]*f.Curvature[i])
	}
	// rb = R^-1 beta, tridiagonal; the ends carry no curvature
	rb := make([]float64, m)
	diag := make([]float64, m)
	for i := 1; i < m-1; i++ {
		h0, h1 := x[i]-x[i-1], x[i+1]-x[i]
		diag[i] = (h0 + h1) / 3
		rb[i] = k.beta[i]
		if i > 1 {
			l := h0 / 6 / diag[i-1]
			diag[i] -= float64(l * (h0 / 6))
			rb[i] -= float64(l * rb[i-1])
		}
	}
	for i := m - 2; i >= 1; i-- {
		rb[i] = (rb[i] - float64((x[i+1]-x[i])/6*rb[i+1])) / diag[i]
	}
	c := make([]float64, m)
	within := k.square
	for i := range x {
		c[i] += k.t[i]
		if i > 0 && i < m-1 {
			h0, h1 := x[i]-x[i-1], x[i+1]-x[i]
			c[i-1] += rb[i] / h0
			c[i] -= rb[i]/h0 + rb[i]/h1
			c[i+1] += rb[i] / h1
			within -= float64(k.beta[i] * rb[i])
		}
	}
	d := Data{N: m, X: x, W: f.Data.W, Y: make([]float64, m), yc: make([]float64, m), RowX: x, RowW: f.Data.W}
	for i := range c {
		d.yc[i] = c[i] / f.Data.W[i]
	}
	var ws Workspace
	dual := ws.Fit(&d, f.Lambda)
	for i := range c {
		variance += float64(c[i] * dual.Value[i])
	}
	if within > 0 {
		variance += within / f.Lambda
	}
	return value, variance
}

// kernel collects the linear rule and phi. phi is kept as what each piece
// adds: on the piece left of a knot and right of it.
type kernel struct {
	x       []float64
	t, beta []float64
	pieces  []piece
	square  float64 // ||phi||^2
}

// piece is phi on one interval between knots: zero at the left knot (or left),
// right at the right knot, with phi” = 1 on [lo, hi].
type piece struct {
	i           int
	lo, hi      float64 // relative to the left knot
	left, right float64 // phi at the two knots
}

func (k *kernel) piece(i int) *piece {
	// pieces come from left to right, so it is the last or a new one
	if n := len(k.pieces); n > 0 && k.pieces[n-1].i == i {
		return &k.pieces[n-1]
	}
	k.pieces = append(k.pieces, piece{i: i})
	return &k.pieces[len(k.pieces)-1]
}

// before takes the stretch [a, b] left of the first knot.
func (k *kernel) before(a, b float64) {
	if !(a < b) {
		return
	}
	// phi” = 1 on [a, b], phi = phi' = 0 at a, straight from b to the knot.
	x0, h := k.x[0], k.x[1]-k.x[0]
	l, gap := b-a, x0-b
	first := float64(l * (float64(0.5*l) + gap)) // integral of x0 - t
	k.t[0] += l + first/h
	k.t[1] -= first / h
	k.piece(0).left = float64(0.5*float64(l*l)) + float64(l*gap)
	k.square += tail(l, gap)
}

// after takes the stretch [a, b] right of the last knot.
func (k *kernel) after(a, b float64) {
	if !(a < b) {
		return
	}
	m := len(k.x)
	xm, h := k.x[m-1], k.x[m-1]-k.x[m-2]
	l, gap := b-a, a-xm
	first := float64(l * (float64(0.5*l) + gap))
	k.t[m-1] += l + first/h
	k.t[m-2] -= first / h
	k.piece(m - 2).right = float64(0.5*float64(l*l)) + float64(l*gap)
	k.square += tail(l, gap)
}

// tail is the integral of phi^2 over a stretch beyond the ends: a parabola of
// length l, then a straight line of length gap to the knot.
func tail(l, gap float64) float64 {
	p := float64(0.5 * float64(l*l)) // phi where the parabola ends; its slope there is l
	s := float64(float64(p*p)*l) / 5
	e := p + float64(l*gap)
	return s + float64(gap/3*(float64(p*p)+float64(p*e)+float64(e*e)))
}

// between takes the stretch [lo, hi] between knots i and i+1.
func (k *kernel) between(i int, lo, hi float64) {
	x0, h := k.x[i], k.x[i+1]-k.x[i]
	u0, u1 := lo-x0, hi-x0
	right := float64((u1-u0)*(0.5*(u0+u1))) / h
	k.t[i] += (u1 - u0) - right
	k.t[i+1] += right
	p := k.piece(i)
	p.lo, p.hi = u0, u1
}

// norm adds up phi's square and its products with the hat functions, each
// piece by Gauss's rule with three points, exact to degree five.
func (k *kernel) norm() {
	const node = 0.774596669241483377035853079956 // sqrt(3/5)
	m := len(k.x)
	for _, p := range k.pieces {
		h := k.x[p.i+1] - k.x[p.i]
		l := p.hi - p.lo
		// phi = A + B u + (u-lo)^2/2 on [lo, hi], straight elsewhere: with no
		// load it is the chord from left to right, else less the load's part.
		load := float64(0.5*float64(l*l)) + float64(l*(h-p.hi)) // (u-lo)_+^2/2 - (u-hi)_+^2/2 at u = h
		slope := (p.right - p.left - load) / h
		at := func(u float64) float64 {
			v := p.left + float64(slope*u)
			if u > p.lo && l > 0 {
				e := min(u, p.hi) - p.lo
				v += float64(0.5 * float64(e*e))
				if u > p.hi {
					v += float64(l * (u - p.hi))
				}
			}
			return v
		}
		cuts := [4]float64{0, p.lo, p.hi, h}
		if l == 0 {
			cuts[1], cuts[2] = 0, h
		}
		for c := 0; c < 3; c++ {
			mid, half := float64(0.5*(cuts[c]+cuts[c+1])), float64(0.5*(cuts[c+1]-cuts[c]))
			if half <= 0 {
				continue
			}
			for _, g := range [3][2]float64{{-node, 5.0 / 9}, {0, 8.0 / 9}, {node, 5.0 / 9}} {
				u := mid + float64(half*g[0])
				wt := float64(half * g[1])
				v := at(u)
				k.square += float64(wt * float64(v*v))
				if p.i > 0 {
					k.beta[p.i] += float64(wt * float64(v*(1-u/h)))
				}
				if p.i+1 < m-1 {
					k.beta[p.i+1] += float64(wt * float64(v*(u/h)))
				}
			}
		}
	}
}
