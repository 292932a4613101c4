package main

import (
	. "github.com/mmcloughlin/avo/build"
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

func dual() {
	TEXT("dualRow", NOSPLIT, "func(p, q, r, b, ahead, down, next *float32, n int, sigma, sigmaT, lambda, limit, rho, tiny float32)")
	Pragma("noescape")
	Doc("dualRow is Dual for n coefficients with right-hand neighbours ahead.")
	u0 := [3]reg.GPVirtual{pointer("p"), pointer("q"), pointer("r")}
	b := pointer("b")
	to := [3]reg.GPVirtual{pointer("ahead"), pointer("down"), pointer("next")}
	n := pointer("n")
	step := [3]reg.VecVirtual{every("sigma"), nil, every("sigmaT")}
	step[1] = step[0]
	lambda, limit := every("lambda"), every("limit")
	rho, tiny, magnitude := every("rho"), every("tiny"), magnitudes()
	each(n, func(a access) {
		var u [3]reg.VecVirtual
		at, norm := a.read(b), YMM()
		for c := range u {
			u[c] = a.read(to[c])
			VSUBPS(at, u[c], u[c])
			VMULPS(step[c], u[c], u[c])
			old := a.read(u0[c])
			VADDPS(u[c], old, u[c])
			if c == 0 {
				VMULPS(u[0], u[0], norm)
				continue
			}
			s := YMM()
			VMULPS(u[c], u[c], s)
			VADDPS(s, norm, norm)
		}
		outside, f := YMM(), YMM()
		VCMPPS(greater, limit, norm, outside)
		VSQRTPS(norm, f)
		VDIVPS(f, lambda, f)
		for c := range u {
			s := YMM()
			VMULPS(f, u[c], s)
			VBLENDVPS(outside, s, u[c], u[c])
			old := a.read(u0[c])
			VSUBPS(old, u[c], u[c])
			VMULPS(rho, u[c], u[c])
			VADDPS(u[c], old, old)
			flush(old, tiny, magnitude)
			a.store(old, a.row(u0[c]))
		}
	})
}
