package expr

import "math"

// The functions of expressions give the same bits on every processor: they
// round each product explicitly, so that none is fused into a sum, and do not
// call Go's Log and Exp, which are assembly on some. methods/elementary has a
// pair of its own: spec and methods do not import each other.

const (
	ln2Hi = 6.93147180369123816490e-01
	ln2Lo = 1.90821492927058770002e-10
)

// logE is the natural logarithm, below 1 ulp of error.
// Source: FreeBSD msun e_log.c (Sun Microsystems 1993), as in Go's math.Log.
func logE(x float64) float64 {
	const (
		l1 = 6.666666666666735130e-01
		l2 = 3.999999999940941908e-01
		l3 = 2.857142874366239149e-01
		l4 = 2.222219843214978396e-01
		l5 = 1.818357216161805012e-01
		l6 = 1.531383769920937332e-01
		l7 = 1.479819860511658591e-01
	)
	if !(x > 0) || math.IsInf(x, 1) {
		return math.NaN()
	}
	f1, ki := math.Frexp(x)
	if f1 < math.Sqrt2/2 {
		f1 *= 2
		ki--
	}
	f := f1 - 1
	k := float64(ki)
	s := f / (2 + f)
	s2 := float64(s * s)
	s4 := float64(s2 * s2)
	t1 := float64(s2 * (l1 + float64(s4*(l3+float64(s4*(l5+float64(s4*l7)))))))
	t2 := float64(s4 * (l2 + float64(s4*(l4+float64(s4*l6)))))
	r := t1 + t2
	hfsq := float64(0.5 * float64(f*f))
	return float64(k*ln2Hi) - ((hfsq - (float64(s*(hfsq+r)) + float64(k*ln2Lo))) - f)
}

// log10E is logE over ln 10, exact at whole powers of ten.
func log10E(x float64) float64 {
	v := float64(logE(x) / math.Ln10)
	if r := math.Round(v); math.Abs(v-r) < 1e-14*math.Max(1, math.Abs(v)) && r >= 0 && r <= 22 {
		p := 1.0
		for range int(r) {
			p = float64(p * 10)
		}
		if p == x {
			return r
		}
	}
	return v
}

// expE is e to the x, below 1 ulp of error.
// Source: FreeBSD msun e_exp.c (Sun Microsystems 1993), as in Go's math.Exp.
func expE(x float64) float64 {
	const (
		log2e = 1.44269504088896338700e+00
		p1    = 1.66666666666666657415e-01
		p2    = -2.77777777770155933842e-03
		p3    = 6.61375632143793436117e-05
		p4    = -1.65339022054652515390e-06
		p5    = 4.13813679705723846039e-08
	)
	switch {
	case math.IsNaN(x) || x > 709.782712893383973096:
		return math.NaN() // missing: it has no finite value
	case x < -745.133219101941108420:
		return 0
	case math.Abs(x) < 1.0/(1<<28):
		return 1 + x
	}
	half := math.Copysign(0.5, x)
	k := int(float64(log2e*x) + half)
	hi := x - float64(float64(k)*ln2Hi)
	lo := float64(float64(k) * ln2Lo)
	r := hi - lo
	t := float64(r * r)
	c := r - float64(t*(p1+float64(t*(p2+float64(t*(p3+float64(t*(p4+float64(t*p5)))))))))
	y := 1 - ((lo - float64(r*c)/(2-c)) - hi)
	return math.Ldexp(y, k)
}
