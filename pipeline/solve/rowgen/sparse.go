package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// fetch is how far the weights are fetched before they are needed, in bytes:
// a large view is read from memory, once per product.
const fetch = 2048

// sparse reads the 8 columns in a slot's reach at once and gives every row its
// own by a permutation. Two blocks go side by side as long as both have slots,
// since the sums of one wait for each other.
func sparse() {
	TEXT("mulBlocks", NOSPLIT, "func(dst *float32, blocks int, slot *int32, src *float32, base *int32, pick *uint8, w *float32)")
	Pragma("noescape")
	Doc("mulBlocks is dst[i] = 0 + Σ_s w[8s+i]·src[base[s] + pick[8s+i]] for blocks of 8 rows; a block has slot[1] − slot[0] slots s.")
	dst, n, slot := pointer("dst"), pointer("blocks"), pointer("slot")
	src := pointer("src")
	a := slots{base: pointer("base"), pick: pointer("pick"), w: pointer("w"), left: GP64(), sum: YMM()}
	b := slots{base: GP64(), pick: GP64(), w: GP64(), left: GP64(), sum: YMM()}
	Label("pair")
	CMPQ(n, Imm(2))
	JL(LabelRef("last"))
	a.count(slot, 0)
	b.count(slot, 4)
	LEAQ(Mem{Base: a.base, Index: a.left, Scale: 4}, b.base)
	LEAQ(Mem{Base: a.pick, Index: a.left, Scale: 8}, b.pick)
	MOVQ(a.left, b.w)
	SHLQ(Imm(5), b.w)
	ADDQ(a.w, b.w)
	Label("both")
	TESTQ(a.left, a.left)
	JLE(LabelRef("rest_b"))
	TESTQ(b.left, b.left)
	JLE(LabelRef("rest_a"))
	a.step(src)
	b.step(src)
	JMP(LabelRef("both"))
	a.rest("rest_a", src)
	b.rest("rest_b", src)
	VMOVUPS(a.sum, Mem{Base: dst})
	VMOVUPS(b.sum, Mem{Base: dst, Disp: 4 * lanes})
	MOVQ(b.base, a.base)
	MOVQ(b.pick, a.pick)
	MOVQ(b.w, a.w)
	ADDQ(Imm(2*4*lanes), dst)
	ADDQ(Imm(8), slot)
	SUBQ(Imm(2), n)
	JMP(LabelRef("pair"))
	Label("last")
	TESTQ(n, n)
	JLE(LabelRef("done"))
	a.count(slot, 0)
	a.rest("rest", src)
	VMOVUPS(a.sum, Mem{Base: dst})
	Label("done")
	VZEROUPPER()
	RET()
}

// slots is a block's run of slots.
type slots struct {
	base, pick, w, left reg.GPVirtual
	sum                 reg.VecVirtual
}

// count starts the block whose end is disp + 4 bytes into slot.
func (s slots) count(slot reg.Register, disp int) {
	from := GP64()
	MOVLQSX(Mem{Base: slot, Disp: disp}, from)
	MOVLQSX(Mem{Base: slot, Disp: disp + 4}, s.left)
	SUBQ(from, s.left)
	VXORPS(s.sum, s.sum, s.sum)
}

func (s slots) step(src reg.Register) {
	idx, v, from := YMM(), YMM(), GP64()
	MOVLQSX(Mem{Base: s.base}, from)
	PREFETCHT0(Mem{Base: s.w, Disp: fetch})
	VPMOVZXBD(Mem{Base: s.pick}, idx)
	VPERMPS(Mem{Base: src, Index: from, Scale: 4}, idx, v)
	VMULPS(Mem{Base: s.w}, v, v)
	VADDPS(v, s.sum, s.sum)
	ADDQ(Imm(4), s.base)
	ADDQ(Imm(lanes), s.pick)
	ADDQ(Imm(4*lanes), s.w)
	DECQ(s.left)
}

// rest does what is left.
func (s slots) rest(label string, src reg.Register) {
	Label(label)
	TESTQ(s.left, s.left)
	JLE(LabelRef(label + "_end"))
	s.step(src)
	JMP(LabelRef(label))
	Label(label + "_end")
}
