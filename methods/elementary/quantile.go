package elementary

import "math"

// Coefficients of NormalQuantile: numerators and denominators of the centre,
// the shoulders and the tails, lowest power first.
var (
	quantA = [8]float64{1.1975323115670912564578e0, 4.7072688112383978012285e1, 6.9706266534389598238465e2, 4.8548868893843886794648e3, 1.6235862515167575384252e4, 2.3782041382114385731252e4, 1.1819493347062294404278e4, 8.8709406962545514830200e2}
	quantB = [8]float64{1.0000000000000000000e0, 4.2313330701600911252e1, 6.8718700749205790830e2, 5.3941960214247511077e3, 2.1213794301586595867e4, 3.9307895800092710610e4, 2.8729085735721942674e4, 5.2264952788528545610e3}
	quantC = [8]float64{1.42343711074968357734e0, 4.63033784615654529590e0, 5.76949722146069140550e0, 3.64784832476320460504e0, 1.27045825245236838258e0, 2.41780725177450611770e-1, 2.27238449892691845833e-2, 7.74545014278341407640e-4}
	quantD = [8]float64{1.4142135623730950488016887e0, 2.9036514445419946173133295e0, 2.3707661626024532365971225e0, 9.7547832001787427186894837e-1, 2.0945065210512749128288442e-1, 2.1494160384252876777097297e-2, 7.7441459065157709165577218e-4, 1.4859850019840355905497876e-9}
	quantE = [8]float64{6.65790464350110377720e0, 5.46378491116411436990e0, 1.78482653991729133580e0, 2.96560571828504891230e-1, 2.65321895265761230930e-2, 1.24266094738807843860e-3, 2.71155556874348757815e-5, 2.01033439929228813265e-7}
	quantF = [8]float64{1.414213562373095048801689e0, 8.482908416595164588112026e-1, 1.936480946950659106176712e-1, 2.103693768272068968719679e-2, 1.112800997078859844711555e-3, 2.611088405080593625138020e-5, 2.010321207683943062279931e-7, 2.891024605872965461538222e-15}
)

func ratio(num, den *[8]float64, r float64) float64 {
	p, q := num[7], den[7]
	for i := 6; i >= 0; i-- {
		p = float64(p*r) + num[i]
		q = float64(q*r) + den[i]
	}
	return p / q
}

// NormalQuantile returns z with P(Z <= z) = p for a standard normal Z, to
// about 1e-16 relative; -Inf and +Inf at 0 and 1, NaN outside.
// Source: Wichura (1988), Applied Statistics 37:477, algorithm AS 241; the
// coefficients as in Go's math.Erfinv, which is scaled by sqrt(2).
func NormalQuantile(p float64) float64 {
	switch {
	case math.IsNaN(p) || p < 0 || p > 1:
		return math.NaN()
	case p == 0:
		return math.Inf(-1)
	case p == 1:
		return math.Inf(1)
	}
	x := 2*p - 1
	if math.Abs(x) <= 0.85 {
		r := 0.180625 - float64(0.25*float64(x*x))
		return float64(math.Sqrt2 * float64(x*ratio(&quantA, &quantB, r)))
	}
	tail := p
	if x > 0 {
		tail = 1 - p
	}
	r := math.Sqrt(-Log(tail))
	var z float64
	if r <= 5 {
		z = ratio(&quantC, &quantD, r-1.6)
	} else {
		z = ratio(&quantE, &quantF, r-5)
	}
	z = float64(math.Sqrt2 * z)
	if x < 0 {
		return -z
	}
	return z
}

// gammaRatio returns Gamma(a + 1/2) / Gamma(a) for a > 0: the asymptotic
// series at a + k >= 40, brought down by the recurrence.
// Source: the series is that of Tricomi and Erdelyi (1951), Pacific J. Math.
// 1:133, for the ratio with shift 1/2.
func gammaRatio(a float64) float64 {
	down := 1.0
	for a < 40 {
		down = float64(down * (a / (a + 0.5)))
		a++
	}
	t := 1 / a
	s := 1 + float64(t*(-1.0/8+float64(t*(1.0/128+float64(t*(5.0/1024+float64(t*(-21.0/32768+float64(t*(-399.0/262144+float64(t*(869.0/4194304))))))))))))
	return float64(float64(down*math.Sqrt(a)) * s)
}

// log1p is log(1+u) for u >= 0, accurate for small u too.
func log1p(u float64) float64 {
	w := 1 + u
	if w == 1 {
		return u
	}
	return float64(Log(w)*u) / (w - 1)
}

// studentTail returns P(T > t) for t >= 0 with df degrees of freedom, and the
// density at t.
//
//	P(T > t) = I_x(df/2, 1/2) / 2,  x = df/(df + t^2)
//
// by the continued fraction of the incomplete beta function (Lentz's form).
// Source: NIST Digital Library of Mathematical Functions, 8.17.22.
func studentTail(t, df float64) (tail, density float64) {
	t2 := float64(t * t)
	lx := -log1p(t2 / df) // log x
	c := gammaRatio(df/2) / math.Sqrt(math.Pi)
	density = float64(c / math.Sqrt(df) * Exp(float64(0.5*(df+1))*lx))
	x, a := df/(df+t2), float64(df/2)
	y := t2 / (df + t2)
	// x^a (1-x)^(1/2) / B(a, 1/2)
	front := float64(float64(c*Exp(float64(a*lx))) * math.Sqrt(y))
	if x < (a+1)/(a+2.5) {
		return 0.5 * (front / a * betaFraction(a, 0.5, x)), density
	}
	return 0.5 * (1 - float64(front/0.5*betaFraction(0.5, a, y))), density
}

func betaFraction(a, b, x float64) float64 {
	const tiny = 1e-300
	c, d := 1.0, 1-float64((a+b)*x)/(a+1)
	if math.Abs(d) < tiny {
		d = tiny
	}
	d = 1 / d
	h := d
	for m := 1.0; m < 1000; m++ {
		for k := range 2 {
			var num float64
			if k == 0 {
				num = float64(float64(m*(b-m))*x) / float64((a+2*m-1)*(a+2*m))
			} else {
				num = -float64(float64((a+m)*(a+b+m))*x) / float64((a+2*m)*(a+2*m+1))
			}
			if d = 1 + float64(num*d); math.Abs(d) < tiny {
				d = tiny
			}
			if c = 1 + num/c; math.Abs(c) < tiny {
				c = tiny
			}
			d = 1 / d
			h = float64(h * float64(d*c))
		}
		if math.Abs(float64(d*c)-1) < 1e-16 {
			break
		}
	}
	return h
}

// StudentQuantile returns t with P(T <= t) = p for Student's t with df > 0
// degrees of freedom, which need not be whole. Relative error below 1e-12 for
// p from 1e-6 to 1 - 1e-6 and df from 0.1; NaN where df is not above 0.
//
// Method: above 1000 degrees of freedom five terms of the expansion in 1/df
// about the normal quantile (Abramowitz and Stegun 26.7.5); below, Newton on
// the tail probability in log t.
func StudentQuantile(p, df float64) float64 {
	switch {
	case !(df > 0) || math.IsNaN(p) || p < 0 || p > 1:
		return math.NaN()
	case p == 0.5:
		return 0
	case p < 0.5:
		return -StudentQuantile(1-p, df)
	case p == 1:
		return math.Inf(1)
	}
	z := NormalQuantile(p)
	guess := expand(z, df)
	if df >= 1000 {
		return guess
	}
	tail := 1 - p
	if df < 3 {
		// heavy tails: start from P(T > t) ~ c df^(df/2-1) t^-df
		c := gammaRatio(df/2) / math.Sqrt(math.Pi)
		guess = Exp((Log(c/tail) + float64(float64(0.5*(df-2))*Log(df))) / df)
	}
	if !(guess > 0) || math.IsInf(guess, 0) {
		guess = 1
	}
	// Bracketed Newton in u = log t.
	lo, hi := -60.0, 700.0
	u := Log(guess)
	for range 100 {
		t := Exp(u)
		q, density := studentTail(t, df)
		if q > tail {
			lo = u
		} else {
			hi = u
		}
		var next float64
		if q > 0 && density > 0 {
			// d log q / du = -density t / q
			next = u + float64(Log(q/tail)*(q/float64(density*t)))
		} else {
			next = math.NaN()
		}
		if !(next >= lo && next <= hi) {
			if u = 0.5 * (lo + hi); hi-lo < 1e-15*max(1, math.Abs(u)) {
				break
			}
			continue
		}
		done := math.Abs(next-u) < 1e-9 // Newton squares the error: below rounding
		u = next
		if done {
			break
		}
	}
	return Exp(u)
}

// expand is the expansion of the t quantile in 1/df.
func expand(z, df float64) float64 {
	z2 := float64(z * z)
	poly := func(c ...float64) float64 {
		s := 0.0
		for i := len(c) - 1; i >= 0; i-- {
			s = float64(s*z2) + c[i]
		}
		return float64(s * z)
	}
	g1 := float64(poly(1, 1) / 4)
	g2 := poly(3, 16, 5) / 96
	g3 := poly(-15, 17, 19, 3) / 384
	g4 := poly(-945, -1920, 1482, 776, 79) / 92160
	g5 := poly(17955, -765, -1782, 930, 339, 27) / 368640
	v := 1 / df
	return z + float64(v*(g1+float64(v*(g2+float64(v*(g3+float64(v*(g4+float64(v*g5)))))))))
}

// StudentTail returns P(T > t) for t >= 0 and Student's t with df > 0 degrees
// of freedom.
func StudentTail(t, df float64) float64 {
	if !(t > 0) {
		return 0.5
	}
	if df > 1e5 { // the normal's tail at the same point of the expansion in 1/df
		df = 1e5
	}
	tail, _ := studentTail(t, df)
	return tail
}

// StudentToNormal returns the standard normal deviate with the tail probability
// of t >= 0 under Student's t with df degrees of freedom.
func StudentToNormal(t, df float64) float64 {
	p := StudentTail(t, df)
	if p <= 0 {
		return math.Inf(1)
	}
	return -NormalQuantile(p)
}
