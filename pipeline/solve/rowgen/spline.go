package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
)

// up reads, per block of 8 samples, the four registers of coefficients from
// base, base+1, base+2 and base+3, and permutes each by the distance of every
// sample's first coefficient from base. Samples lie at most a knot apart, so
// that is under 8.
func up() {
	TEXT("upBlocks", NOSPLIT, "func(dst, src *float32, blocks int, place, pick *int32, w *float32)")
	Pragma("noescape")
	Doc("upBlocks does blocks of 8 samples: with d, b = place[0], place[1] of a block and o = b + pick[i],",
		"dst[d+i] = w[i]·src[o] + w[8+i]·src[o+1] + w[16+i]·src[o+2] + w[24+i]·src[o+3].")
	dst, src, n := pointer("dst"), pointer("src"), pointer("blocks")
	place, pick, w := pointer("place"), pointer("pick"), pointer("w")
	Label("block")
	TESTQ(n, n)
	JLE(LabelRef("done"))
	to, from, idx, sum := GP64(), GP64(), YMM(), YMM()
	MOVLQSX(Mem{Base: place}, to)
	MOVLQSX(Mem{Base: place, Disp: 4}, from)
	VMOVUPS(Mem{Base: pick}, idx)
	for a := range 4 {
		v := YMM()
		VPERMPS(Mem{Base: src, Index: from, Scale: 4, Disp: 4 * a}, idx, v)
		if a == 0 {
			VMULPS(Mem{Base: w}, v, sum)
			continue
		}
		VMULPS(Mem{Base: w, Disp: 4 * lanes * a}, v, v)
		VADDPS(v, sum, sum)
	}
	VMOVUPS(sum, Mem{Base: dst, Index: to, Scale: 4})
	ADDQ(Imm(8), place)
	ADDQ(Imm(4*lanes), pick)
	ADDQ(Imm(4*4*lanes), w)
	DECQ(n)
	JMP(LabelRef("block"))
	Label("done")
	VZEROUPPER()
	RET()
}

// down works on 8 rows at once, turned so that a register holds one column.
func down() {
	TEXT("down8", NOSPLIT, "func(dst, src *float32, m int, first, taps *int32, w *float32)")
	Pragma("noescape")
	Doc("down8 is, for j < m and lane l, dst[8j+l] = 0 + Σ_i w[i]·src[8(first[j]+i)+l] over i < taps[j];",
		"the weights of coefficient j+1 follow those of j.")
	dst, src, m := pointer("dst"), pointer("src"), pointer("m")
	first, taps, w := pointer("first"), pointer("taps"), pointer("w")
	Label("coefficient")
	TESTQ(m, m)
	JLE(LabelRef("done"))
	p, k, sum := GP64(), GP64(), YMM()
	MOVLQSX(Mem{Base: first}, p)
	SHLQ(Imm(5), p)
	ADDQ(src, p)
	MOVLQSX(Mem{Base: taps}, k)
	VXORPS(sum, sum, sum)
	tap := func(i int) {
		v := YMM()
		VBROADCASTSS(Mem{Base: w, Disp: 4 * i}, v)
		VMULPS(Mem{Base: p, Disp: 4 * lanes * i}, v, v)
		VADDPS(v, sum, sum)
	}
	for _, taps := range []int{4, 1} {
		here, next := fmt.Sprintf("taps%d", taps), fmt.Sprintf("past%d", taps)
		Label(here)
		CMPQ(k, Imm(uint64(taps)))
		JL(LabelRef(next))
		for i := range taps {
			tap(i)
		}
		ADDQ(Imm(uint64(4*taps)), w)
		ADDQ(U32(4*lanes*taps), p)
		SUBQ(Imm(uint64(taps)), k)
		JMP(LabelRef(here))
		Label(next)
	}
	VMOVUPS(sum, Mem{Base: dst})
	ADDQ(Imm(4*lanes), dst)
	ADDQ(Imm(4), first)
	ADDQ(Imm(4), taps)
	DECQ(m)
	JMP(LabelRef("coefficient"))
	Label("done")
	VZEROUPPER()
	RET()
}

// turn transposes tiles of 8×8: unpack pairs of rows, then pairs of pairs,
// then the halves of registers.
func turn() {
	TEXT("turnTiles", NOSPLIT, "func(dst *float32, dstRow, dstStep int, src *float32, srcRow, srcStep, tiles int)")
	Pragma("noescape")
	Doc("turnTiles transposes tiles of 8 rows and columns. Row is the distance of a tile's rows, step that of tiles, in bytes.")
	dst, dstRow, dstStep := pointer("dst"), pointer("dstRow"), pointer("dstStep")
	src, srcRow, srcStep := pointer("src"), pointer("srcRow"), pointer("srcStep")
	n := pointer("tiles")
	Label("tile")
	TESTQ(n, n)
	JLE(LabelRef("done"))
	p := GP64()
	MOVQ(src, p)
	a := ymms()
	for r := range a {
		VMOVUPS(Mem{Base: p}, a[r])
		if r+1 < lanes {
			ADDQ(srcRow, p)
		}
	}
	b := ymms()
	for r := 0; r < lanes; r += 2 {
		VUNPCKLPS(a[r+1], a[r], b[r])
		VUNPCKHPS(a[r+1], a[r], b[r+1])
	}
	c := ymms() // columns 0…3 of rows 0…3 and 4…7 and, in the upper halves, 4…7
	for h := 0; h < lanes; h += 4 {
		VSHUFPS(Imm(0x44), b[h+2], b[h], c[h])
		VSHUFPS(Imm(0xee), b[h+2], b[h], c[h+1])
		VSHUFPS(Imm(0x44), b[h+3], b[h+1], c[h+2])
		VSHUFPS(Imm(0xee), b[h+3], b[h+1], c[h+3])
	}
	MOVQ(dst, p)
	for r := range lanes {
		v, halves := YMM(), uint64(0x20)
		if r >= 4 {
			halves = 0x31
		}
		VPERM2F128(Imm(halves), c[r%4+4], c[r%4], v)
		VMOVUPS(v, Mem{Base: p})
		if r+1 < lanes {
			ADDQ(dstRow, p)
		}
	}
	ADDQ(srcStep, src)
	ADDQ(dstStep, dst)
	DECQ(n)
	JMP(LabelRef("tile"))
	Label("done")
	VZEROUPPER()
	RET()
}
