package main

import (
	"fmt"

	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

type ending int

const (
	adds ending = iota
	sets
	multiplies
)

// block is the number of registers of columns that keep their sums over all
// taps.
const block = 8

// fir keeps the sums of a block of columns in registers over all taps, so that
// dst is read and written once.
func fir(name, doc string, end ending) {
	params := "dst *float32, n int, a *float32, taps int, src *float32, stride int"
	if end == multiplies {
		params += ", by *float32"
	}
	TEXT(name, NOSPLIT, "func("+params+")")
	Pragma("noescape")
	Doc(name + " is " + doc)
	f := &firLoop{end: end, dst: pointer("dst"), a: pointer("a"), taps: pointer("taps"), src: pointer("src"), stride: pointer("stride")}
	n := pointer("n")
	if end == multiplies {
		f.by = pointer("by")
	}
	for _, width := range []int{block, 1} {
		here, next := fmt.Sprintf("wide%d", width), fmt.Sprintf("past%d", width)
		Label(here)
		CMPQ(n, U32(width*lanes))
		JL(LabelRef(next))
		f.columns(here, width, access{})
		ADDQ(U32(4*width*lanes), f.dst)
		ADDQ(U32(4*width*lanes), f.src)
		if end == multiplies {
			ADDQ(U32(4*width*lanes), f.by)
		}
		SUBQ(U32(width*lanes), n)
		JMP(LabelRef(here))
		Label(next)
	}
	TESTQ(n, n)
	JLE(LabelRef("done"))
	f.columns("rest", 1, access{mask: tailMask(n), tail: true})
	Label("done")
	VZEROUPPER()
	RET()
}

type firLoop struct {
	end                           ending
	dst, a, taps, src, stride, by reg.GPVirtual
}

// columns sums width registers of columns over the taps.
func (f *firLoop) columns(label string, width int, m access) {
	at := func(base reg.Register, c int) Mem { return Mem{Base: base, Disp: 4 * lanes * c} }
	sum := make([]reg.VecVirtual, width)
	for c := range sum {
		sum[c] = YMM()
		if f.end == adds {
			m.load(at(f.dst, c), sum[c])
		} else {
			VXORPS(sum[c], sum[c], sum[c])
		}
	}
	k, p := GP64(), GP64()
	MOVQ(f.src, p)
	XORQ(k, k)
	Label(label + "_taps")
	CMPQ(k, f.taps)
	JGE(LabelRef(label + "_sum"))
	weight := YMM()
	VBROADCASTSS(Mem{Base: f.a, Index: k, Scale: 4}, weight)
	for c := range sum {
		v := YMM()
		if m.tail {
			m.load(at(p, c), v)
			VMULPS(v, weight, v)
		} else {
			VMULPS(at(p, c), weight, v)
		}
		VADDPS(v, sum[c], sum[c])
	}
	ADDQ(f.stride, p)
	INCQ(k)
	JMP(LabelRef(label + "_taps"))
	Label(label + "_sum")
	for c := range sum {
		if f.end == multiplies {
			v := YMM()
			m.load(at(f.by, c), v)
			VMULPS(v, sum[c], sum[c])
		}
		m.store(sum[c], at(f.dst, c))
	}
}
