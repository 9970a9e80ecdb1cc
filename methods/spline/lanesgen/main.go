// Command lanesgen writes lanes_amd64.s: the two filters and their combination
// at the knots for four lambdas at once, one YMM register holding the same
// quantity for each of them.
//
// Every lane does what Workspace.filter and Workspace.evaluate do, operation by
// operation in the same order, so that its bits are theirs. There is no fused
// multiply-add here for the same reason.
package main

import (
	"math"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	. "github.com/mmcloughlin/avo/reg"
)

func main() {
	constants()
	filter("filterLanes", false)
	filter("filterLanesDet", true)
	for _, tied := range []bool{false, true} {
		for _, reml := range []bool{false, true} {
			name := "combineLanes"
			if tied {
				name += "Tied"
			}
			if reml {
				name += "Rough"
			}
			combine(name, tied, reml)
		}
	}
	Generate()
}

// A state4 is lam, zeta, b, alpha, c, each for four lambdas.
const (
	lam   = 32 * iota
	zeta  //
	bee   //
	alpha //
	cee   //
	size4 // bytes of a state4
)

// An acc4 is edf, rest, rss, loo, rough, gamma and the x to the left.
const (
	accEDF = 32 * iota
	accRest
	accRSS
	accLOO
	accRough
	accGamma
	accX
)

var one, half, third, sixth, twelfth, big, sign Mem

func constants() {
	vector := func(name string, v float64) Mem {
		m := GLOBL("lanes"+name, 8|16) // RODATA|NOPTR
		for i := range 4 {
			DATA(8*i, U64(math.Float64bits(v)))
		}
		return m
	}
	one = vector("One", 1)
	half = vector("Half", 0.5)
	third = vector("Third", 1.0/3)
	sixth = vector("Sixth", 1.0/6)
	twelfth = vector("Twelfth", 1.0/12)
	big = vector("Big", 1e100)
	sign = vector("Sign", math.Copysign(0, -1))
}

func mul(a, b, c Op) { VMULPD(a, b, c) }

// step takes a filter from the state at s to the state at next, over the gap
// between x[at] and x[to]; reversed says that x[to] is the lower. lam, b and c
// come and go in registers, zeta and alpha through memory: the chain through
// the division, on which the speed hangs, is made of the first three.
func step(l, b, c VecVirtual, s, next Mem, xAt, xTo, wAt, yAt Mem, reversed bool, q Mem, useDen func(den VecVirtual)) {
	h, t := YMM(), YMM()
	VBROADCASTSD(xTo, h)
	VBROADCASTSD(xAt, t)
	if reversed {
		VSUBPD(h, t, h)
	} else {
		VSUBPD(t, h, h)
	}
	w := YMM()
	VBROADCASTSD(wAt, w)
	VADDPD(w, l, l) // l is D from here on
	z := YMM()
	VBROADCASTSD(yAt, z)
	mul(z, w, z)
	VADDPD(s.Offset(zeta), z, z)

	u, u1, qh, dh, r := YMM(), YMM(), YMM(), YMM(), YMM()
	mul(b, h, u)
	VADDPD(one, u, u1)
	mul(q, h, qh)
	mul(h, l, dh)
	mul(third, qh, r)
	VADDPD(r, c, r)
	t = YMM()
	mul(h, dh, t)
	mul(r, t, r)
	t = YMM()
	mul(u1, u1, t)
	VADDPD(r, t, r)
	if useDen != nil {
		useDen(r)
	}
	t = YMM()
	VMOVUPD(one, t)
	VDIVPD(r, t, r)

	qhh, qd := YMM(), YMM()
	mul(h, qh, qhh)
	mul(h, qhh, qd)
	mul(l, qd, qd)

	// lam
	mul(r, l, l)
	VMOVUPD(l, next.Offset(lam))

	// b
	t = YMM()
	mul(half, qh, t)
	VADDPD(t, c, t)
	mul(t, dh, t)
	mul(u1, b, b)
	VADDPD(t, b, b)
	mul(r, b, b)
	VMOVUPD(b, next.Offset(bee))

	// alpha
	t = YMM()
	mul(sixth, u, t)
	VADDPD(half, t, t)
	mul(t, qhh, t)
	mul(c, h, h)
	VADDPD(t, h, h)
	mul(z, h, h)
	t = YMM()
	mul(sixth, qd, t)
	VSUBPD(t, u1, t)
	mul(s.Offset(alpha), t, t)
	VSUBPD(h, t, t)
	mul(r, t, t)
	VMOVUPD(t, next.Offset(alpha))

	// zeta
	mul(u1, z, z)
	mul(s.Offset(alpha), dh, dh)
	VADDPD(dh, z, z)
	mul(r, z, z)
	VMOVUPD(z, next.Offset(zeta))

	// c
	mul(u, u, u)
	mul(third, u, u)
	VADDPD(u, u1, u)
	mul(u, qh, u)
	VADDPD(u, c, u)
	t = YMM()
	mul(third, c, t)
	mul(twelfth, qh, qh)
	VADDPD(qh, t, t)
	mul(t, qd, t)
	VADDPD(t, u, c)
	mul(r, c, c)
	VMOVUPD(c, next.Offset(cee))
}

// filter takes both filters from step i to step end. With det it multiplies
// the forward determinant's factors into p, and stops behind a step whose
// factor a lane must take in by itself: that one is left in den.
func filter(name string, det bool) {
	if det {
		TEXT(name, 4, "func(fw, bw, x, y, w, q *float64, m, i, end int, p, den *float64) (next int, stopped int)")
	} else {
		TEXT(name, 4, "func(fw, bw, x, y, w, q *float64, m, i, end int)")
	}
	load := func(n string) GPVirtual {
		r := GP64()
		Load(Param(n), r)
		return r
	}
	f, g := load("fw"), load("bw")
	x, y, w := load("x"), load("y"), load("w")
	q := Mem{Base: load("q")}
	k, i, end := load("m"), load("i"), load("end")
	var p, den Mem
	var stopped GPVirtual
	if det {
		p, den = Mem{Base: load("p")}, Mem{Base: load("den")}
		stopped = GP64()
		XORQ(stopped, stopped)
	}
	SUBQ(i, k)
	DECQ(k) // the knot at which the backward filter stands
	t := GP64()
	IMUL3Q(U32(size4), i, t)
	ADDQ(t, f)
	t = GP64()
	IMUL3Q(U32(size4), k, t)
	ADDQ(t, g)
	s, next := Mem{Base: f}, Mem{Base: f, Disp: size4}
	sb, nextb := Mem{Base: g}, Mem{Base: g, Disp: -size4}
	state := func(s Mem) (l, b, c VecVirtual) {
		l, b, c = YMM(), YMM(), YMM()
		VMOVUPD(s.Offset(lam), l)
		VMOVUPD(s.Offset(bee), b)
		VMOVUPD(s.Offset(cee), c)
		return l, b, c
	}
	fl, fb, fc := state(s)
	gl, gb, gc := state(sb)
	at := func(base, index Register, d int) Mem {
		return Mem{Base: base, Index: index, Scale: 8, Disp: 8 * d}
	}

	Label("knot")
	var forwardDen VecVirtual
	var useDen func(VecVirtual)
	if det {
		useDen = func(d VecVirtual) {
			prod, a, b, hit := YMM(), YMM(), YMM(), GP64()
			VMOVUPD(p, prod)
			mul(d, prod, prod)
			VCMPPD(U8(5), big, d, a)     // not less, or NaN
			VCMPPD(U8(14), big, prod, b) // greater
			VORPD(a, b, a)
			VMOVMSKPD(a, hit.As32())
			TESTL(hit.As32(), hit.As32())
			JNE(LabelRef("stop"))
			VMOVUPD(prod, p)
			Label("go")
			forwardDen = d
		}
	}
	step(fl, fb, fc, s, next, at(x, i, 0), at(x, i, 1), at(w, i, 0), at(y, i, 0), false, q, useDen)
	step(gl, gb, gc, sb, nextb, at(x, k, 0), at(x, k, -1), at(w, k, 0), at(y, k, 0), true, q, nil)
	ADDQ(U32(size4), f)
	SUBQ(U32(size4), g)
	INCQ(i)
	DECQ(k)
	CMPQ(i, end)
	JLT(LabelRef("knot"))
	VZEROUPPER()
	if det {
		Store(i, ReturnIndex(0))
		Store(stopped, ReturnIndex(1))
	}
	RET()
	if det {
		Label("stop")
		VMOVUPD(forwardDen, den)
		MOVQ(U32(1), stopped)
		LEAQ(i0(i, 1), end)
		JMP(LabelRef("go"))
	}
}

func i0(r Register, d int) Mem { return Mem{Base: r, Disp: d} }

// combine joins both filters at the knots lo to hi-1 and adds to acc. The c of
// the outermost states is +Inf, which makes kap 0 there.
func combine(name string, tied, reml bool) {
	sig := "func(fw, bw, x, y, w, q *float64, lo, hi int, acc *float64"
	if tied {
		sig += ", first *int32, rowY, rowW, mean *float64"
	}
	TEXT(name, 4, sig+")")
	load := func(n string) GPVirtual {
		r := GP64()
		Load(Param(n), r)
		return r
	}
	f, g := load("fw"), load("bw")
	y, w := load("y"), load("w")
	i, end := load("lo"), load("hi")
	acc := Mem{Base: load("acc")}
	var x, first, rowY, rowW, mean GPVirtual
	var q Mem
	if reml {
		x, q = load("x"), Mem{Base: load("q")}
	}
	if tied {
		first, rowY, rowW, mean = load("first"), load("rowY"), load("rowW"), load("mean")
	}
	t := GP64()
	IMUL3Q(U32(size4), i, t)
	ADDQ(t, f)
	ADDQ(t, g)
	s, b4 := Mem{Base: f}, Mem{Base: g}
	sum := func(at int) VecVirtual {
		r := YMM()
		VMOVUPD(acc.Offset(at), r)
		return r
	}
	edf, rest, rss, loo := sum(accEDF), sum(accRest), sum(accRSS), sum(accLOO)
	var rough, gammaLast VecVirtual
	if reml {
		rough, gammaLast = sum(accRough), sum(accGamma)
	}
	at := func(base Register) Mem { return Mem{Base: base, Index: i, Scale: 8} }

	Label("knot")
	b, a, kap, kb, j, n := YMM(), YMM(), YMM(), YMM(), YMM(), YMM()
	tmp := func() VecVirtual { return YMM() }
	join := func(at int, d VecVirtual) {
		VMOVUPD(s.Offset(at), d)
		VADDPD(b4.Offset(at), d, d)
	}
	join(bee, b)
	join(alpha, a)
	join(cee, kap)
	v := tmp()
	VMOVUPD(one, v)
	VDIVPD(kap, v, kap)
	mul(b, kap, kb)
	join(lam, j)
	v = tmp()
	mul(b, kb, v)
	VADDPD(v, j, j)
	join(zeta, n)
	mul(a, kb, kb)
	VSUBPD(kb, n, n)
	wi, yi := YMM(), YMM()
	VBROADCASTSD(at(w), wi)
	VBROADCASTSD(at(y), yi)
	tot, inv := YMM(), YMM()
	VADDPD(j, wi, tot)
	VMOVUPD(one, inv)
	VDIVPD(tot, inv, inv)
	VDIVPD(j, n, n)
	e := n
	VSUBPD(n, yi, e)
	v = tmp()
	mul(inv, wi, v)
	VADDPD(v, edf, edf)
	mul(inv, j, inv)
	VADDPD(inv, rest, rest)
	r := YMM()
	mul(e, inv, r)
	v = tmp()
	mul(r, wi, v)
	mul(r, v, v)
	VADDPD(v, rss, rss)
	if !tied {
		v = tmp()
		mul(e, wi, v)
		mul(e, v, v)
		VADDPD(v, loo, loo)
	}
	if reml {
		v = tmp()
		VSUBPD(r, yi, v)
		mul(b, v, v)
		VADDPD(v, a, a)
		mul(a, kap, kap)
		mul(q, kap, kap)
		gamma := kap
		VXORPD(sign, gamma, gamma)
		h, last := YMM(), YMM()
		VBROADCASTSD(acc.Offset(accX), last)
		VBROADCASTSD(at(x), h)
		VMOVSD(h.AsX(), acc.Offset(accX))
		VSUBPD(last, h, h)
		mul(third, h, h)
		v = tmp()
		mul(gamma, gamma, v)
		u := tmp()
		mul(gammaLast, gamma, u)
		VADDPD(u, v, v)
		mul(gammaLast, gammaLast, gammaLast)
		VADDPD(gammaLast, v, v)
		mul(v, h, h)
		VADDPD(h, rough, rough)
		VMOVUPD(gamma, gammaLast)
	}
	if tied {
		k, to := GP64(), GP64()
		MOVLQSX(Mem{Base: first, Index: i, Scale: 4}, k)
		MOVLQSX(Mem{Base: first, Index: i, Scale: 4, Disp: 4}, to)
		mi := YMM()
		VBROADCASTSD(at(mean), mi)
		Label("row")
		row := func(base Register) Mem { return Mem{Base: base, Index: k, Scale: 8} }
		wk, ek := YMM(), YMM()
		VBROADCASTSD(row(rowW), wk)
		VBROADCASTSD(row(rowY), ek)
		VSUBPD(mi, ek, ek)
		VADDPD(r, ek, ek)
		mul(tot, ek, ek)
		v := tmp()
		VSUBPD(wk, wi, v)
		VADDPD(j, v, v)
		VDIVPD(v, ek, ek)
		mul(ek, wk, wk)
		mul(ek, wk, wk)
		VADDPD(wk, loo, loo)
		INCQ(k)
		CMPQ(k, to)
		JLT(LabelRef("row"))
	}
	ADDQ(U32(size4), f)
	ADDQ(U32(size4), g)
	INCQ(i)
	CMPQ(i, end)
	JLT(LabelRef("knot"))
	VMOVUPD(edf, acc.Offset(accEDF))
	VMOVUPD(rest, acc.Offset(accRest))
	VMOVUPD(rss, acc.Offset(accRSS))
	VMOVUPD(loo, acc.Offset(accLOO))
	if reml {
		VMOVUPD(rough, acc.Offset(accRough))
		VMOVUPD(gammaLast, acc.Offset(accGamma))
	}
	VZEROUPPER()
	RET()
}
