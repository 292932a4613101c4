// Command rowgen writes the AVX2 versions of package row's loops:
//
//	go run . -out ../row/row_amd64.s -stubs ../row/row_amd64.go -pkg row
//
// It is a module of its own so that the program does not depend on avo. The
// plain loops in package row say what each routine does; here only the rules
// that keep the bits the same:
//
//   - a product is rounded before it is added, so no FMA;
//   - an element is summed in the plain loop's order: lanes hold different
//     elements, never parts of one;
//   - the last elements of a row, fewer than a register, are read and written
//     under a mask, and go through the same instructions.
package main

import (
	. "github.com/mmcloughlin/avo/build"
	. "github.com/mmcloughlin/avo/operand"
	"github.com/mmcloughlin/avo/reg"
)

// lanes is the number of float32 in a register.
const lanes = 8

// Predicates of VCMPPS (Intel SDM volume 2, CMPPS, table 3-1).
const (
	notLess = U8(0x15) // NLT_UQ: true for NaN, quiet
	greater = U8(0x1e) // GT_OQ: false for NaN, quiet
)

func main() {
	ConstraintExpr("amd64")
	detect()
	fir("firAdd", "dst[i] += Σ_k a[k]·src[k·stride + i], from left to right, for i < n; stride in bytes.", adds)
	fir("firSet", "dst[i] = 0 + Σ_k a[k]·src[k·stride + i].", sets)
	fir("firMul", "dst[i] = (0 + Σ_k a[k]·src[k·stride + i])·by[i].", multiplies)
	up()
	down()
	turn()
	sparse()
	project()
	diverge()
	dual()
	fit()
	slope()
	descend()
	Generate()
}

// detect is CPUID leaf 1 for AVX and OSXSAVE, XGETBV for the registers the
// system saves, and CPUID leaf 7 for AVX2 (Intel SDM volume 1, 14.3 and 14.7).
func detect() {
	TEXT("avx2", NOSPLIT, "func() bool")
	Doc("avx2 reports whether processor and system have AVX2.")
	no, leaf := "no", GP32()
	XORL(reg.EAX, reg.EAX)
	XORL(reg.ECX, reg.ECX)
	CPUID()
	CMPL(reg.EAX, Imm(7))
	JB(LabelRef(no))
	MOVL(U32(1), reg.EAX)
	XORL(reg.ECX, reg.ECX)
	CPUID()
	MOVL(reg.ECX, leaf)
	ANDL(U32(1<<27|1<<28), leaf)
	CMPL(leaf, U32(1<<27|1<<28))
	JNE(LabelRef(no))
	XORL(reg.ECX, reg.ECX)
	XGETBV()
	ANDL(U32(6), reg.EAX)
	CMPL(reg.EAX, Imm(6))
	JNE(LabelRef(no))
	MOVL(U32(7), reg.EAX)
	XORL(reg.ECX, reg.ECX)
	CPUID()
	SHRL(Imm(5), reg.EBX)
	ANDL(U32(1), reg.EBX)
	Store(reg.BL, ReturnIndex(0))
	RET()
	Label(no)
	XORL(reg.EBX, reg.EBX)
	Store(reg.BL, ReturnIndex(0))
	RET()
}
