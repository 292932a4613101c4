//go:build !amd64

package row

// The plain loops are all there is. The rest lets the callers compile; avx2
// being false it is never reached.

const unreached = "row: vector code on a processor without"

func avx2() bool { return false }

func firAdd(dst *float32, n int, a *float32, taps int, src *float32, stride int) { panic(unreached) }

func firSet(dst *float32, n int, a *float32, taps int, src *float32, stride int) { panic(unreached) }

func firMul(dst *float32, n int, a *float32, taps int, src *float32, stride int, by *float32) {
	panic(unreached)
}

func upBlocks(dst, src *float32, blocks int, place, pick *int32, w *float32) { panic(unreached) }

func down8(dst, src *float32, m int, first, taps *int32, w *float32) { panic(unreached) }

func turnTiles(dst *float32, dstRow, dstStep int, src *float32, srcRow, srcStep, tiles int) {
	panic(unreached)
}

func mulBlocks(dst *float32, blocks int, slot *int32, src *float32, base *int32, pick *uint8, w *float32) {
	panic(unreached)
}

func projectRow(z, bar, grad, tau *float32, n int, rho, tiny float32) { panic(unreached) }

func divergeRow(grad, p, left, q, up, r, back *float32, n int, alpha float32) { panic(unreached) }

func dualRow(p, q, r, b, down, next *float32, n int, sigma, sigmaT, lambda, limit, rho, tiny float32) {
	panic(unreached)
}

func fitRow(dual, now, bar, data, vari, sigma, inv *float32, n int, scale, rho, tiny float32) {
	panic(unreached)
}

func slopeRow(grad, curve, code, cast, back, col, own *float32, n int) { panic(unreached) }

func descendRow(x, bar, grad, curve, code, streak, sum *float32, n int, rho, tiny float32) {
	panic(unreached)
}
