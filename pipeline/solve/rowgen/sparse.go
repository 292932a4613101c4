package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
)

// sparse reads the 8 columns in a slot's reach at once and gives every row its
// own by a permutation.
func sparse() {
	TEXT("mulBlocks", NOSPLIT, "func(dst *float32, blocks int, slot *int32, src *float32, base *int32, pick *uint8, w *float32)")
	Pragma("noescape")
	Doc("mulBlocks is dst[i] = 0 + Σ_s w[8s+i]·src[base[s] + pick[8s+i]] for blocks of 8 rows; a block has slot[1] − slot[0] slots s.")
	dst, n, slot := pointer("dst"), pointer("blocks"), pointer("slot")
	src, base, pick, w := pointer("src"), pointer("base"), pointer("pick"), pointer("w")
	Label("block")
	TESTQ(n, n)
	JLE(LabelRef("done"))
	k, from, sum := GP32(), GP64(), YMM()
	MOVL(Mem{Base: slot, Disp: 4}, k)
	SUBL(Mem{Base: slot}, k)
	VXORPS(sum, sum, sum)
	Label("slots")
	TESTL(k, k)
	JLE(LabelRef("sum"))
	idx, v := YMM(), YMM()
	MOVLQSX(Mem{Base: base}, from)
	VPMOVZXBD(Mem{Base: pick}, idx)
	VPERMPS(Mem{Base: src, Index: from, Scale: 4}, idx, v)
	VMULPS(Mem{Base: w}, v, v)
	VADDPS(v, sum, sum)
	ADDQ(Imm(4), base)
	ADDQ(Imm(lanes), pick)
	ADDQ(Imm(4*lanes), w)
	DECL(k)
	JMP(LabelRef("slots"))
	Label("sum")
	VMOVUPS(sum, Mem{Base: dst})
	ADDQ(Imm(4*lanes), dst)
	ADDQ(Imm(4), slot)
	DECQ(n)
	JMP(LabelRef("block"))
	Label("done")
	VZEROUPPER()
	RET()
}
