package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// access reads and writes registers of a row, whole or under a mask.
type access struct {
	at   reg.GPVirtual // byte offset into every row
	mask reg.VecVirtual
	tail bool
}

func (a access) load(m Mem, v reg.VecVirtual) {
	if a.tail {
		VMASKMOVPS(m, a.mask, v)
	} else {
		VMOVUPS(m, v)
	}
}

func (a access) store(v reg.VecVirtual, m Mem) {
	if a.tail {
		VMASKMOVPS(v, a.mask, m)
	} else {
		VMOVUPS(v, m)
	}
}

// row is the register's worth of a row at the access's offset.
func (a access) row(base reg.Register) Mem { return Mem{Base: base, Index: a.at, Scale: 1} }

// read loads it.
func (a access) read(base reg.Register) reg.VecVirtual {
	v := YMM()
	a.load(a.row(base), v)
	return v
}

var masks Mem

// tailMask loads the mask of the first n < lanes elements.
func tailMask(n reg.GPVirtual) reg.VecVirtual {
	if masks.Symbol.Name == "" {
		masks = GLOBL("masks", RODATA|NOPTR)
		for i := range 2 * lanes {
			v := U32(0)
			if i < lanes {
				v = 0xffffffff
			}
			DATA(4*i, v)
		}
	}
	at, p, v := GP64(), GP64(), YMM()
	MOVQ(U32(lanes), at)
	SUBQ(n, at)
	LEAQ(masks, p)
	VMOVUPS(Mem{Base: p, Index: at, Scale: 4}, v)
	return v
}

// each does body for every register's worth of rows of n elements, n ≥ 0.
func each(n reg.GPVirtual, body func(access)) {
	at := GP64()
	XORQ(at, at)
	Label("whole")
	CMPQ(n, Imm(lanes))
	JL(LabelRef("tail"))
	body(access{at: at})
	ADDQ(Imm(4*lanes), at)
	SUBQ(Imm(lanes), n)
	JMP(LabelRef("whole"))
	Label("tail")
	TESTQ(n, n)
	JLE(LabelRef("done"))
	body(access{at: at, mask: tailMask(n), tail: true})
	Label("done")
	VZEROUPPER()
	RET()
}

func pointer(name string) reg.GPVirtual { return Load(Param(name), GP64()).(reg.GPVirtual) }

// every returns a register with the parameter in every lane.
func every(name string) reg.VecVirtual {
	m, err := Param(name).Resolve()
	if err != nil {
		panic(err)
	}
	v := YMM()
	VBROADCASTSS(m.Addr, v)
	return v
}

func zeros() reg.VecVirtual {
	v := YMM()
	VXORPS(v, v, v)
	return v
}

// magnitudes returns the mask of all bits but the sign.
func magnitudes() reg.VecVirtual {
	v := YMM()
	VPCMPEQD(v, v, v)
	VPSRLD(Imm(1), v, v)
	return v
}

// flush sets lanes under tiny in magnitude to 0, in place. NaN stays.
func flush(v, tiny, magnitude reg.VecVirtual) {
	keep := YMM()
	VANDPS(v, magnitude, keep)
	VCMPPS(notLess, tiny, keep, keep)
	VANDPS(v, keep, v)
}
