package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

func ymms() (v [lanes]reg.VecVirtual) {
	for j := range v {
		v[j] = YMM()
	}
	return v
}

func project() {
	TEXT("projectRow", NOSPLIT, "func(z, bar, grad, tau *float32, n int, rho, tiny float32)")
	Pragma("noescape")
	Doc("projectRow is Project for n coefficients.")
	z, bar, g, tau := pointer("z"), pointer("bar"), pointer("grad"), pointer("tau")
	n := pointer("n")
	rho, tiny, magnitude := every("rho"), every("tiny"), magnitudes()
	each(n, func(a access) {
		old, v, t, keep := a.read(z), a.read(g), a.read(tau), YMM()
		VMULPS(v, t, t)
		VSUBPS(t, old, v)
		VCMPPS(greater, tiny, v, keep)
		VANDPS(keep, v, v)
		VSUBPS(old, v, t) // v − z
		VADDPS(t, v, v)
		a.store(v, a.row(bar))
		VMULPS(rho, t, t)
		VADDPS(t, old, old)
		flush(old, tiny, magnitude)
		a.store(old, a.row(z))
	})
}

func diverge() {
	TEXT("divergeRow", NOSPLIT, "func(grad, p, left, q, up, r, back *float32, n int, alpha float32)")
	Pragma("noescape")
	Doc("divergeRow is Diverge for n coefficients with left-hand neighbours left.")
	g, p, left, q := pointer("grad"), pointer("p"), pointer("left"), pointer("q")
	up, r, back := pointer("up"), pointer("r"), pointer("back")
	n := pointer("n")
	alpha := every("alpha")
	each(n, func(a access) {
		v := a.read(g)
		for _, pair := range [][2]reg.GPVirtual{{p, left}, {q, up}, {r, back}} {
			d, e := a.read(pair[0]), a.read(pair[1])
			VSUBPS(e, d, d)
			if pair[0] == r {
				VMULPS(alpha, d, d)
			}
			VSUBPS(d, v, v)
		}
		a.store(v, a.row(g))
	})
}

// dual reads the right-hand neighbours one element further on. The last
// register's worth, 1 to 8 elements, goes under a mask: one less is read, and
// the last element is its own neighbour.
func dual() {
	TEXT("dualRow", NOSPLIT, "func(p, q, r, b, down, next *float32, n int, sigma, sigmaT, lambda, limit, rho, tiny float32)")
	Pragma("noescape")
	Doc("dualRow is Dual for n coefficients, n > 0.")
	k := &dualLoop{old: [3]reg.GPVirtual{pointer("p"), pointer("q"), pointer("r")}, b: pointer("b")}
	k.to = [3]reg.GPVirtual{nil, pointer("down"), pointer("next")}
	n := pointer("n")
	k.step = [3]reg.VecVirtual{every("sigma"), nil, every("sigmaT")}
	k.step[1] = k.step[0]
	k.lambda, k.limit = every("lambda"), every("limit")
	k.rho, k.tiny, k.magnitude = every("rho"), every("tiny"), magnitudes()
	at := GP64()
	XORQ(at, at)
	Label("whole")
	CMPQ(n, Imm(lanes))
	JLE(LabelRef("rest"))
	ahead := YMM()
	VMOVUPS(Mem{Base: k.b, Index: at, Scale: 1, Disp: 4}, ahead)
	k.body(access{at: at}, ahead)
	ADDQ(Imm(4*lanes), at)
	SUBQ(Imm(lanes), n)
	JMP(LabelRef("whole"))
	Label("rest")
	mask, fewer := tailMask(n), YMM()
	DECQ(n)
	ahead = YMM()
	VMOVAPS(tailMask(n), fewer)
	a := access{at: at, mask: mask, tail: true}
	VMASKMOVPS(Mem{Base: k.b, Index: at, Scale: 1, Disp: 4}, fewer, ahead)
	VBLENDVPS(fewer, ahead, a.read(k.b), ahead)
	k.body(a, ahead)
	VZEROUPPER()
	RET()
}

type dualLoop struct {
	old, to                             [3]reg.GPVirtual
	b                                   reg.GPVirtual
	step                                [3]reg.VecVirtual
	lambda, limit, rho, tiny, magnitude reg.VecVirtual
}

func (k *dualLoop) body(a access, ahead reg.VecVirtual) {
	var u [3]reg.VecVirtual
	at, norm := a.read(k.b), YMM()
	for c := range u {
		u[c] = ahead
		if c > 0 {
			u[c] = a.read(k.to[c])
		}
		VSUBPS(at, u[c], u[c])
		VMULPS(k.step[c], u[c], u[c])
		old := a.read(k.old[c])
		VADDPS(u[c], old, u[c])
		if c == 0 {
			VMULPS(u[0], u[0], norm)
			continue
		}
		s := YMM()
		VMULPS(u[c], u[c], s)
		VADDPS(s, norm, norm)
	}
	outside, f, any, inside := YMM(), YMM(), GP32(), "inside"
	if a.tail {
		inside = "inside_rest"
	}
	VCMPPS(greater, k.limit, norm, outside)
	VMOVMSKPS(outside, any)
	TESTL(any, any)
	JZ(LabelRef(inside)) // the usual case; a root and a quotient take long
	VSQRTPS(norm, f)
	VDIVPS(f, k.lambda, f)
	for c := range u {
		s := YMM()
		VMULPS(f, u[c], s)
		VBLENDVPS(outside, s, u[c], u[c])
	}
	Label(inside)
	for c := range u {
		old := a.read(k.old[c])
		VSUBPS(old, u[c], u[c])
		VMULPS(k.rho, u[c], u[c])
		VADDPS(u[c], old, old)
		flush(old, k.tiny, k.magnitude)
		a.store(old, a.row(k.old[c]))
	}
}

func fit() {
	TEXT("fitRow", NOSPLIT, "func(dual, now, bar, data, vari, sigma, inv *float32, n int, scale, rho, tiny float32)")
	Pragma("noescape")
	Doc("fitRow is Fit for n pixels.")
	dual, now, bar, data := pointer("dual"), pointer("now"), pointer("bar"), pointer("data")
	vari, sigma, inv := pointer("vari"), pointer("sigma"), pointer("inv")
	n := pointer("n")
	scale, rho, tiny, magnitude := every("scale"), every("rho"), every("tiny"), magnitudes()
	half, none := YMM(), zeros()
	VPCMPEQD(half, half, half) // 0.5 is 0x3f000000
	VPSRLD(Imm(26), half, half)
	VPSLLD(Imm(24), half, half)
	each(n, func(a access) {
		b, old, at := a.read(bar), a.read(now), YMM()
		VMULPS(scale, b, b)
		VADDPS(old, b, at)
		VMULPS(half, at, at)
		VSUBPS(old, at, at)
		VMULPS(rho, at, at)
		VADDPS(at, old, at)
		a.store(at, a.row(now))
		u, d, s, used := a.read(data), a.read(dual), a.read(sigma), a.read(vari)
		VSUBPS(u, b, u)
		VMULPS(u, s, u)
		VADDPS(u, d, u)
		s = a.read(inv)
		VMULPS(s, u, u)
		VSUBPS(d, u, u)
		VMULPS(rho, u, u)
		VADDPS(u, d, u)
		flush(u, tiny, magnitude)
		VCMPPS(greater, none, used, used)
		VBLENDVPS(used, u, d, d)
		a.store(d, a.row(dual))
	})
}

func slope() {
	TEXT("slopeRow", NOSPLIT, "func(grad, curve, code, cast, back, col, own *float32, n int)")
	Pragma("noescape")
	Doc("slopeRow is Slope for n voxels.")
	grad, curve, code := pointer("grad"), pointer("curve"), pointer("code")
	cast, back, col, own := pointer("cast"), pointer("back"), pointer("col"), pointer("own")
	n := pointer("n")
	each(n, func(a access) {
		c := a.read(code)
		for _, t := range [][3]reg.GPVirtual{{grad, cast, back}, {curve, col, own}} {
			v, b := a.read(t[1]), a.read(t[2])
			VMULPS(c, v, v)
			VADDPS(b, v, v)
			a.store(v, a.row(t[0]))
		}
	})
}

func descend() {
	TEXT("descendRow", NOSPLIT, "func(x, bar, grad, curve, code, streak, sum *float32, n int, rho, tiny float32)")
	Pragma("noescape")
	Doc("descendRow is Descend for n voxels.")
	x, bar, grad, curve := pointer("x"), pointer("bar"), pointer("grad"), pointer("curve")
	code, streak, sum := pointer("code"), pointer("streak"), pointer("sum")
	n := pointer("n")
	rho, tiny, magnitude := every("rho"), every("tiny"), magnitudes()
	each(n, func(a access) {
		old, v, t, keep := a.read(x), a.read(grad), a.read(curve), YMM()
		VDIVPS(t, v, v)
		VSUBPS(v, old, v)
		VCMPPS(greater, tiny, v, keep)
		VANDPS(keep, v, v)
		VSUBPS(old, v, t) // v − x
		VADDPS(t, v, v)
		a.store(v, a.row(bar))
		VMULPS(rho, t, t)
		VADDPS(t, old, old)
		flush(old, tiny, magnitude)
		a.store(old, a.row(x))
		c, s := a.read(code), a.read(sum)
		VMULPS(v, c, c)
		VADDPS(v, s, s)
		a.store(s, a.row(sum))
		e := a.read(streak)
		VADDPS(c, e, e)
		a.store(e, a.row(streak))
	})
}
