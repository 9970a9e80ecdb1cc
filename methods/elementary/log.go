// Package elementary holds the elementary and distribution functions that
// fits depend on, written so that every processor gives the same bits.
//
// Steps: Go's own Log, Exp and kin are assembly on some processors and may be
// fused on others; the functions here round every product explicitly, so that
// no compiler fuses it into a sum. They take and return plain numbers and know
// nothing of fits.
package elementary

import "math"

const (
	ln2Hi = 6.93147180369123816490e-01 // 3fe62e42 fee00000
	ln2Lo = 1.90821492927058770002e-10 // 3dea39ef 35793c76
)

// Log returns the natural logarithm of x: NaN for x < 0, -Inf for 0.
//
// Method: x = 2^k (1+f), sqrt(1/2) < 1+f < sqrt(2); log(1+f) by a minimax
// polynomial in s = f/(2+f); error below 1 ulp.
// Source: FreeBSD msun e_log.c (Sun Microsystems 1993), as in Go's math.Log.
func Log(x float64) float64 {
	const (
		l1 = 6.666666666666735130e-01
		l2 = 3.999999999940941908e-01
		l3 = 2.857142874366239149e-01
		l4 = 2.222219843214978396e-01
		l5 = 1.818357216161805012e-01
		l6 = 1.531383769920937332e-01
		l7 = 1.479819860511658591e-01
	)
	switch {
	case math.IsNaN(x) || math.IsInf(x, 1):
		return x
	case x < 0:
		return math.NaN()
	case x == 0:
		return math.Inf(-1)
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

// Exp returns e to the x; 0 below -745.2, +Inf above 709.8.
//
// Method: x = k ln2 + r, |r| <= ln2/2; exp(r) by a rational minimax form;
// error below 1 ulp.
// Source: FreeBSD msun e_exp.c (Sun Microsystems 1993), as in Go's math.Exp.
func Exp(x float64) float64 {
	const (
		log2e     = 1.44269504088896338700e+00
		overflow  = 7.09782712893383973096e+02
		underflow = -7.45133219101941108420e+02
		p1        = 1.66666666666666657415e-01
		p2        = -2.77777777770155933842e-03
		p3        = 6.61375632143793436117e-05
		p4        = -1.65339022054652515390e-06
		p5        = 4.13813679705723846039e-08
	)
	switch {
	case math.IsNaN(x) || math.IsInf(x, 1):
		return x
	case x > overflow:
		return math.Inf(1)
	case x < underflow:
		return 0
	case -1.0/(1<<28) < x && x < 1.0/(1<<28):
		return 1 + x
	}
	var k int
	switch {
	case x < 0:
		k = int(float64(log2e*x) - 0.5)
	case x > 0:
		k = int(float64(log2e*x) + 0.5)
	}
	hi := x - float64(float64(k)*ln2Hi)
	lo := float64(float64(k) * ln2Lo)
	r := hi - lo
	t := float64(r * r)
	c := r - float64(t*(p1+float64(t*(p2+float64(t*(p3+float64(t*(p4+float64(t*p5)))))))))
	y := 1 - ((lo - float64(r*c)/(2-c)) - hi)
	return math.Ldexp(y, k)
}
